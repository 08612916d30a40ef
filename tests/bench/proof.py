"""What the proof of the emitted text costs: interleaved, medians, its parts apart.

Usage: ``python tests/bench/proof.py [ROUNDS]``

Rules of this file:

- Every round proves each controller once, so that a busy spell of the machine meets them all alike.
- The first proof of a process also loads the solver and the parser: it is measured in a process of
  its own, from before the imports to the record.
- What is judged is the ratio to importing a control library in the same run, never seconds.
- Exit status 0 when every target is met, 1 otherwise.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

TESTS = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(TESTS), str(TESTS.parent)]

import sample_words  # noqa: E402
from loops import PID, reference_loop  # noqa: E402

from plant2 import proof  # noqa: E402
from plant2.design import design, task_of  # noqa: E402
from plant2.emit import EmitFacts, SelfcheckVectors, render  # noqa: E402
from plant2.equations import WordController  # noqa: E402
from plant2.loopfile import Notch  # noqa: E402
from plant2.words import words_of  # noqa: E402

FACTS = EmitFacts(
    about="bench",
    position_unit="1 um per count",
    code_unit="1 mA per code",
    sample_rate="5 kHz",
    delay="270 us",
    law="for timing only",
    sha256="",
)
YARDSTICK = "import control"
TARGET = 0.5
"""Largest ratio of a first proof to the yardstick."""


def controllers() -> dict[str, WordController]:
    """The stored ones, and what a design gives for PD and for PID with a notch."""
    found = {c.name: c for c in sample_words.stored()}
    notch = Notch(frequency_rad_per_s=4400.0, width=0.6, depth_db=20.0)
    pid = reference_loop(*PID)
    loops = {
        "pd": reference_loop(),
        "pid_notch": replace(pid, aim=replace(pid.aim, notches=(notch,))),
    }
    for name, loop in loops.items():
        task = task_of(loop)
        gains = design(loop, task, seek_nearest=False).gains
        assert gains is not None
        for bits in (16, 32):
            found[f"{name}_{bits}"] = words_of(task, gains, bits).controller
    return found


def texts(controller: WordController) -> tuple[str, str]:
    """Source and header."""
    files = render(controller, FACTS, SelfcheckVectors(sections=(), states=()), "{}")
    return files[f"{controller.name}.c"], files[f"{controller.name}.h"]


def seconds(work: Callable[[], object]) -> float:
    """Wall time of one call. [s]"""
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def parts(source: str, header: str, controller: WordController) -> tuple[float, float, float]:
    """Reading; ranges for both widths of int; equality. [s]"""
    start = time.perf_counter()
    program = proof._Reader(controller).read(source, header)
    read = time.perf_counter()
    for bits in proof.INT_BITS:
        proof._defined(controller, program, bits)
    ranged = time.perf_counter()
    solver = proof._Solver()
    for task in proof._tasks(controller):
        proof._equal(controller, program, task, solver)
    return read - start, ranged - read, time.perf_counter() - ranged


def first(name: str) -> float:
    """The first proof in a process of its own, imports of solver and parser included. [s]"""
    done = subprocess.run(
        [sys.executable, __file__, "--first", name], capture_output=True, text=True, check=True
    )
    return float(done.stdout)


def main(rounds: int) -> int:
    """Measure, print the table, return the exit status."""
    cases = {name: (*texts(c), c) for name, c in controllers().items()}
    whole: dict[str, list[float]] = {name: [] for name in cases}
    inner: dict[str, list[tuple[float, float, float]]] = {name: [] for name in cases}
    fresh: dict[str, list[float]] = {name: [] for name in cases}
    yardstick = []
    for name, case in cases.items():
        assert proof.prove(*case).proven, name
    for _ in range(rounds):
        yardstick.append(
            seconds(lambda: subprocess.run([sys.executable, "-c", YARDSTICK], check=True))
        )
        for name, case in cases.items():
            whole[name].append(seconds(lambda case=case: proof.prove(*case)))
            inner[name].append(parts(*case))
            fresh[name].append(first(name))
    yard = statistics.median(yardstick)
    print(f"medians of {rounds} interleaved rounds; {YARDSTICK} takes {yard:.3f} s")
    print(
        f"{'controller':<14}{'equations':>10}{'proof':>9}{'read':>9}{'ranges':>9}{'equal':>9}"
        f"{'first':>9}{'ratio':>8}"
    )
    met = True
    for name, (_, _, controller) in cases.items():
        read, ranged, equal = (statistics.median(p[i] for p in inner[name]) for i in range(3))
        ratio = statistics.median(fresh[name]) / yard
        met = met and ratio <= TARGET
        print(
            f"{name:<14}{len(controller.update):>10}{statistics.median(whole[name]):>7.3f} s"
            f"{read:>7.3f} s{ranged:>7.3f} s{equal:>7.3f} s"
            f"{statistics.median(fresh[name]):>7.3f} s{ratio:>8.2f}"
        )
    print(f"target: first proof at most {TARGET:g} of the yardstick: {'met' if met else 'missed'}")
    return 0 if met else 1


if __name__ == "__main__":
    if sys.argv[1:2] == ["--first"]:
        chosen = controllers()[sys.argv[2]]
        given = texts(chosen)
        print(seconds(lambda: proof.prove(*given, chosen)))
        raise SystemExit(0)
    raise SystemExit(main(int(sys.argv[1]) if len(sys.argv) > 1 else 5))
