"""What the proven bounds cost: one example loop, each bound by itself, medians of processor time.

Usage: ``python tests/bench/bounds.py [LOOP] [ROUNDS]``

Rules of this file:

- Loading the loop, its gains and its words are not counted: a check has them anyway.
- What is judged is the focus stage: everything that is computed, not searched, within 150 ms.
- Exit status 0 when the target is met, 1 otherwise.
"""

from __future__ import annotations

import statistics
import sys
import time
from collections.abc import Callable
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent.parent
TARGET_S = 0.150

import numpy  # noqa: E402

start = time.process_time()
import flint  # noqa: E402

FLINT_S = time.process_time() - start

from plant2.attack import seen_deviation, seen_limit_cycle  # noqa: E402
from plant2.bounds import (  # noqa: E402
    controller_bounds,
    deviation,
    limit_cycles,
    loop_peaks,
    ranges,
)
from plant2.design import design, task_of  # noqa: E402
from plant2.loopfile import load_loop  # noqa: E402
from plant2.words import words_of  # noqa: E402


def seconds(work: Callable[[], object], rounds: int) -> float:
    """Median processor time of some work: other processes on the machine do not count. [s]"""
    spent = []
    for _ in range(rounds):
        begin = time.process_time()
        work()
        spent.append(time.process_time() - begin)
    return statistics.median(spent)


def main(name: str, rounds: int) -> int:
    """Measure, print the table, return the exit status."""
    loop = load_loop(ROOT / "examples" / name / "loop.toml")
    task = task_of(loop)
    found = design(loop, task, seek_nearest=False)
    assert found.gains is not None
    bits = 32 if loop.processor.word == "auto" else int(loop.processor.word)
    words = words_of(task, found.gains, bits)
    controller = words.controller
    gains = loop_peaks(task, controller)
    proven: dict[str, Callable[[], object]] = {
        "controller alone": lambda: controller_bounds(controller),
        "peak gains of the loop": lambda: loop_peaks(task, controller),
        "ranges": lambda: ranges(task, controller, gains=gains),
        "deviation": lambda: deviation(task, controller, gains=gains),
        "coefficient share": lambda: deviation(
            task, controller, designed=words.equations, gains=gains
        ),
        "limit cycles": lambda: limit_cycles(task, controller, gains=gains),
    }
    searched: dict[str, Callable[[], object]] = {
        "hostile deviation runs": lambda: seen_deviation(
            task, controller, reference=loop.step, samples=500
        ),
        "search at rest": lambda: seen_limit_cycle(
            task,
            controller,
            reference=loop.step,
            settle=gains.decay_samples // 2,
            samples=1000,
        ),
    }
    print(f"{name}, numpy {numpy.__version__}, flint {flint.__version__}")
    print(f"  {'loading flint, not counted':28s} {1e3 * FLINT_S:8.2f} ms")
    total = 0.0
    for label, work in proven.items():
        spent = seconds(work, rounds)
        total += spent
        print(f"  {label:28s} {1e3 * spent:8.2f} ms")
    met = total <= TARGET_S
    print(f"  {'all of these':28s} {1e3 * total:8.2f} ms, target {1e3 * TARGET_S:.0f} ms")
    for label, work in searched.items():
        print(f"  {label:28s} {1e3 * seconds(work, 1):8.0f} ms (searched)")
    return 0 if met or name != "focus_stage" else 1


if __name__ == "__main__":
    wanted = sys.argv[1] if len(sys.argv) > 1 else "focus_stage"
    sys.exit(main(wanted, int(sys.argv[2]) if len(sys.argv) > 2 else 9))
