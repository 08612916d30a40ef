"""What an identification costs: reading a long log, and free and driven motions of many samples.

Usage: ``python tests/bench/identify.py [ROUNDS]``

Rules of this file:

- Logs are simulated here, in closed form, with a fixed seed; making them is not timed.
- Processor time is judged, the least of some rounds, so that other work on the machine does not
  count; the wall time stands beside it.
- Exit status 0 when every target is met, 1 otherwise.
"""

from __future__ import annotations

import math
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from plant2.identify import identify_log
from plant2.logs import log_of_samples, read_log

SAMPLES = 1_000_000
RATE_HZ = 10_000.0
TARGETS = {"ring-down, 1,000,000 samples": 1.0, "ring-down with friction, 1,000,000 samples": 1.0}
"""Largest time of an identification. [s]"""

READING_TARGET = 4.0
"""Largest ratio of reading a log to parsing its numbers alone with numpy."""


def decay(friction: float) -> np.ndarray:
    """A hundred seconds of a 10 Hz swing of 1 mm with 1 um of noise, viscous and Coulomb."""
    omega, alpha = 2.0 * math.pi * 10.0658, 0.02
    damped = math.sqrt(omega**2 - alpha**2)
    half, dead = math.pi / damped, friction / omega**2
    keep = math.exp(-alpha * half)
    turns = [1e-3]
    while turns[-1] > dead and len(turns) < 2100:
        turns.append(keep * (turns[-1] - dead) - dead)
    t = np.arange(SAMPLES) / RATE_HZ
    number = np.minimum((t / half).astype(int), len(turns) - 1)
    size = np.array(turns)[number]
    since = t - number * half
    shape = np.exp(-alpha * since) * (
        np.cos(damped * since) + alpha / damped * np.sin(damped * since)
    )
    side = np.where(number % 2 == 0, 1.0, -1.0)
    x = np.where(size <= dead, size, dead + (size - dead) * shape)
    return side * x + np.random.default_rng(1).normal(0.0, 1e-6, SAMPLES)


def least(call: Callable[[], object], rounds: int) -> tuple[float, float]:
    """Least processor time and least wall time of some calls. [s]"""
    spent, walls = [], []
    for _ in range(rounds):
        start, wall = time.process_time(), time.perf_counter()
        call()
        spent.append(time.process_time() - start)
        walls.append(time.perf_counter() - wall)
    return min(spent), min(walls)


def main(rounds: int) -> int:
    """Measure, print the table, return the exit status."""
    plain = log_of_samples(decay(0.0), rate_hz=RATE_HZ)
    rubbing = log_of_samples(decay(5e-4), rate_hz=RATE_HZ)
    short = log_of_samples(plain.position[:20_000:5], rate_hz=RATE_HZ / 5.0)
    force = 0.2 * np.repeat(np.sign(np.random.default_rng(2).normal(size=200)), 10)
    shaken = np.cumsum(np.cumsum(force)) * 2e-5
    shaken += np.random.default_rng(3).normal(0.0, 1e-6, force.size)
    driven = log_of_samples(shaken, rate_hz=1000.0, force=force)

    met = True
    print(f"least of {rounds} rounds")
    print(f"{'what':<46}{'processor':>11}{'wall':>10}{'target':>9}")
    for name, call in {
        "ring-down, 1,000,000 samples": lambda: identify_log(plain),
        "ring-down with friction, 1,000,000 samples": lambda: identify_log(rubbing),
        "ring-down, 20 cycles, 4,000 samples": lambda: identify_log(short),
        "free mass with its force, 2,000 samples": lambda: identify_log(driven),
    }.items():
        spent, wall = least(call, rounds)
        line = f"{name:<46}{spent:>9.3f} s{wall:>8.3f} s"
        if name in TARGETS:
            met = met and spent <= TARGETS[name]
            line += f"{TARGETS[name]:>7.1f} s  {'met' if spent <= TARGETS[name] else 'missed'}"
        print(line)

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "log.csv"
        counts = np.rint(plain.position * 1.6e7)
        rows = "\n".join(f"{k * 0.1:.1f},{c:.0f},0" for k, c in enumerate(counts))
        path.write_text("time [ms],position [count],output [code]\n" + rows + "\n")
        parsing, _ = least(lambda: np.loadtxt(path, delimiter=",", skiprows=1), rounds)
        reading, _ = least(lambda: read_log(path), rounds)
    ratio = reading / parsing
    met = met and ratio <= READING_TARGET
    print(f"{'numbers alone, 1,000,000 rows of three':<46}{parsing:>9.3f} s")
    print(
        f"{'log with all its checks, the same rows':<46}{reading:>9.3f} s   ratio {ratio:.2f}, "
        f"target {READING_TARGET:.1f}  {'met' if ratio <= READING_TARGET else 'missed'}"
    )
    return 0 if met else 1


if __name__ == "__main__":
    sys.exit(main(int(sys.argv[1]) if len(sys.argv) > 1 else 5))
