"""What a start costs: whole processes, side by side, interleaved, medians.

Usage: ``python tests/bench/startup.py [ROUNDS]``

Rules of this file:

- Every round starts each command once, so that a busy spell of the machine meets them all alike.
- What is judged is the ratio to importing a control library in the same run, never seconds.
- Exit status 0 when every target is met, 1 otherwise.
"""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent.parent
LOOP = ROOT / "examples" / "focus_stage" / "loop.toml"

YARDSTICK = "import control"
TARGETS = {"plant2 check": 0.4, "plant2 --help": 0.15}
"""Largest ratio of a command's time to the yardstick's."""


def plant2_command() -> list[str]:
    """The installed command beside this interpreter, or the module where there is none."""
    script = Path(sys.executable).parent / "plant2"
    return [str(script)] if script.exists() else [sys.executable, "-m", "plant2"]


def seconds(command: list[str], environment: dict[str, str]) -> float:
    """Wall time of one whole process, which must end well. [s]"""
    start = time.perf_counter()
    done = subprocess.run(
        command,
        cwd=ROOT,
        env=environment,
        stdin=subprocess.DEVNULL,
        capture_output=True,
        check=False,
    )
    spent = time.perf_counter() - start
    if done.returncode != 0:
        sys.stderr.write(done.stderr.decode())
        raise SystemExit(f"{' '.join(command)}: exit status {done.returncode}")
    return spent


def main(rounds: int) -> int:
    """Measure, print the table, return the exit status."""
    commands = {
        YARDSTICK: [sys.executable, "-c", YARDSTICK],
        "plant2 check": [*plant2_command(), "check", str(LOOP)],
        "plant2 --help": [*plant2_command(), "--help"],
    }
    # Users keep compiled modules between runs; so do these, after one run that makes them.
    environment = {k: v for k, v in os.environ.items() if k != "PYTHONDONTWRITEBYTECODE"}
    spent: dict[str, list[float]] = {name: [] for name in commands}
    for command in commands.values():
        seconds(command, environment)
    for _ in range(rounds):
        for name, command in commands.items():
            spent[name].append(seconds(command, environment))

    medians = {name: statistics.median(values) for name, values in spent.items()}
    met = True
    print(f"whole processes, interleaved, {rounds} rounds")
    print(f"{'command':<16}{'median':>9}{'least':>9}{'ratio':>8}{'target':>10}")
    for name, median in medians.items():
        ratio = median / medians[YARDSTICK]
        line = f"{name:<16}{median:>7.3f} s{min(spent[name]):>7.3f} s{ratio:>8.3f}"
        if name in TARGETS:
            good = ratio <= TARGETS[name]
            met = met and good
            line += f"{'<= ' + format(TARGETS[name], 'g'):>10}  {'met' if good else 'missed'}"
        print(line)
    return 0 if met else 1


if __name__ == "__main__":
    sys.exit(main(int(sys.argv[1]) if len(sys.argv) > 1 else 7))
