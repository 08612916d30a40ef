"""Published parameters that must come back out of logs and fits.

Rules of this file:

- Each case names its source, the printed digits, and a tolerance of half the last printed digit,
  or the reason for another one.
- Logs are evaluated from the closed form of the motion here, not by plant2.
- "From memory" stands where the source itself could not be opened.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from plant2.identify import identify_log
from plant2.logs import log_of_samples
from plant2.solve import least_squares

# --------------------------------------------------------------------------------------------------
# NIST Statistical Reference Datasets, nonlinear regression; data and certified values as NIST
# prints them (public domain), read in the copy that travels with lmfit 1.3.4.

ENSO_VALUES = """
12.9 11.3 10.6 11.2 10.9 7.5 7.7 11.7 12.9 14.3 10.9 13.7 17.1 14.0 15.3 8.5
5.7 5.5 7.6 8.6 7.3 7.6 12.7 11.0 12.7 12.9 13.0 10.9 10.4 10.2 8.0 10.9
13.6 10.5 9.2 12.4 12.7 13.3 10.1 7.8 4.8 3.0 2.5 6.3 9.7 11.6 8.6 12.4
10.5 13.3 10.4 8.1 3.7 10.7 5.1 10.4 10.9 11.7 11.4 13.7 14.1 14.0 12.5 6.3
9.6 11.7 5.0 10.8 12.7 10.8 11.8 12.6 15.7 12.6 14.8 7.8 7.1 11.2 8.1 6.4
5.2 12.0 10.2 12.7 10.2 14.7 12.2 7.1 5.7 6.7 3.9 8.5 8.3 10.8 16.7 12.6
12.5 12.5 9.8 7.2 4.1 10.6 10.1 10.1 11.9 13.6 16.3 17.6 15.5 16.0 15.2 11.2
14.3 14.5 8.5 12.0 12.7 11.3 14.5 15.1 10.4 11.5 13.4 7.5 0.6 0.3 5.5 5.0
4.6 8.2 9.9 9.2 12.5 10.9 9.9 8.9 7.6 9.5 8.4 10.7 13.6 13.7 13.7 16.5
16.8 17.1 15.4 9.5 6.1 10.1 9.3 5.3 11.2 16.6 15.6 12.0 11.5 8.6 13.8 8.7
8.6 8.6 8.7 12.8 13.2 14.0 13.4 14.8
"""

LANCZOS3_VALUES = """
2.5134 2.0443 1.6684 1.3664 1.1232 0.9269 0.7679 0.6389 0.5338 0.4479 0.3776 0.3197
0.272 0.2325 0.1997 0.1723 0.1493 0.1301 0.1138 0.1 0.0883 0.0783 0.0698 0.0624
"""

MGH17_VALUES = """
0.844 0.908 0.932 0.936 0.925 0.908 0.881 0.85 0.818 0.784 0.751 0.718
0.685 0.658 0.628 0.603 0.58 0.558 0.538 0.522 0.506 0.49 0.478 0.467
0.457 0.448 0.438 0.431 0.424 0.42 0.414 0.411 0.406
"""


def enso(b: np.ndarray, x: np.ndarray) -> np.ndarray:
    """A level and three sinusoids, two of unknown period."""
    turn = 2.0 * np.pi * x
    return (
        b[0]
        + b[1] * np.cos(turn / 12.0)
        + b[2] * np.sin(turn / 12.0)
        + b[4] * np.cos(turn / b[3])
        + b[5] * np.sin(turn / b[3])
        + b[7] * np.cos(turn / b[6])
        + b[8] * np.sin(turn / b[6])
    )


def lanczos(b: np.ndarray, x: np.ndarray) -> np.ndarray:
    """Three decaying exponentials."""
    return b[0] * np.exp(-b[1] * x) + b[2] * np.exp(-b[3] * x) + b[4] * np.exp(-b[5] * x)


def mgh17(b: np.ndarray, x: np.ndarray) -> np.ndarray:
    """A level and two decaying exponentials."""
    return b[0] + b[1] * np.exp(-x * b[3]) + b[2] * np.exp(-x * b[4])


Model = Callable[[np.ndarray, np.ndarray], np.ndarray]

ENSO: tuple[Model, np.ndarray, str, list[list[float]], list[float], list[float], float] = (
    enso,
    np.arange(1.0, 169.0),
    ENSO_VALUES,
    [
        [11.0, 3.0, 0.5, 40.0, -0.7, -1.3, 25.0, -0.3, 1.4],
        [10.0, 3.0, 0.5, 44.0, -1.5, 0.5, 26.0, -0.1, 1.5],
    ],
    [10.510749193, 3.0762128085, 0.53280138227, 44.311088700, -1.6231428586, 0.52554493756,
     26.887614440, 0.21232288488, 1.4966870418],
    [0.17488832467, 0.24310052139, 0.24354686618, 0.94408025976, 0.28078369611, 0.48073701119,
     0.41612939130, 0.51460022911, 0.25434468893],
    788.53978668,
)  # fmt: skip

LANCZOS3: tuple[Model, np.ndarray, str, list[list[float]], list[float], list[float], float] = (
    lanczos,
    0.05 * np.arange(24.0),
    LANCZOS3_VALUES,
    [[1.2, 0.3, 5.6, 5.5, 6.5, 7.6], [0.5, 0.7, 3.6, 4.2, 4.0, 6.3]],
    [0.086816414977, 0.95498101505, 0.84400777463, 2.9515951832, 1.5825685901, 4.9863565084],
    [0.017197908859, 0.097041624475, 0.041488663282, 0.10766312506, 0.058371576281,
     0.034436403035],
    1.6117193594e-8,
)  # fmt: skip

MGH17: tuple[Model, np.ndarray, str, list[list[float]], list[float], list[float], float] = (
    mgh17,
    10.0 * np.arange(33.0),
    MGH17_VALUES,
    [[0.5, 1.5, -1.0, 0.01, 0.02]],
    [0.37541005211, 1.9358469127, -1.4646871366, 0.012867534640, 0.022122699662],
    [0.0020723153551, 0.22031669222, 0.22175707739, 4.4861358114e-4, 8.9471996575e-4],
    5.4648946975e-5,
)


@pytest.mark.parametrize(
    ("case", "start"),
    [(ENSO, 0), (ENSO, 1), (LANCZOS3, 0), (LANCZOS3, 1), (MGH17, 0)],
    ids=["ENSO 1", "ENSO 2", "Lanczos3 1", "Lanczos3 2", "MGH17 2"],
)
def test_certified_values_of_nist(
    case: tuple[Model, np.ndarray, str, list[list[float]], list[float], list[float], float],
    start: int,
) -> None:
    """Certified to 11 digits.

    A sum of squares tells its minimum to the root of its rounding only, about 1e-8 of a standard
    deviation times the root of the number of points; 1e-6 of each value is asked for.
    """
    model, x, values, starts, certified, deviations, cost = case
    y = np.array(values.split(), dtype=np.float64)
    fit = least_squares(lambda b: model(b, x) - y, np.array(starts[start]), turns=500)
    assert fit.converged
    assert fit.values.tolist() == pytest.approx(certified, rel=1e-6)
    assert fit.cost == pytest.approx(cost, rel=1e-9)
    variance = fit.cost / (y.size - len(certified))
    inverse = np.linalg.inv(fit.jacobian.T @ fit.jacobian)
    assert np.sqrt(variance * np.diag(inverse)).tolist() == pytest.approx(deviations, rel=1e-6)


# --------------------------------------------------------------------------------------------------
# Vibration textbooks: the published parameters come back from a simulated free decay


def ringing(
    omega: float, ratio: float, *, rate_hz: float, seconds: float, noise: float
) -> np.ndarray:
    """Let go at 1: closed form of the linear motion, and noise."""
    t = np.arange(int(seconds * rate_hz)) / rate_hz
    damped = omega * math.sqrt(1.0 - ratio**2)
    x = np.exp(-ratio * omega * t) * (
        np.cos(damped * t) + ratio * omega / damped * np.sin(damped * t)
    )
    return x + np.random.default_rng(1).normal(0.0, noise, t.size)


def test_thomson_spring_and_damper() -> None:
    """W. T. Thomson, Theory of Vibration with Applications, ex. 2.7-1, p. 34; read.

    10 lb, 30 lb/in, 0.12 lb s/in, g = 386 in/s^2: 34.0 rad/s, ratio 0.0681.
    """
    mass = 10.0 / 386.0
    omega, ratio = math.sqrt(30.0 / mass), 0.12 / (2.0 * math.sqrt(30.0 * mass))
    x = ringing(omega, ratio, rate_hz=200.0, seconds=5.0, noise=1e-4)
    found = identify_log(log_of_samples(x, rate_hz=200.0))
    assert found.damping_kinds == ("viscous",)
    assert found.natural_frequency_hz is not None and found.damping_ratio is not None
    assert 2.0 * math.pi * found.natural_frequency_hz.value == pytest.approx(34.0, abs=0.05)
    assert found.damping_ratio.value == pytest.approx(0.0681, abs=5e-5)


def test_rao_motorcycle() -> None:
    """S. S. Rao, Mechanical Vibrations, ex. 2.11; read on a worked page.

    Damped period 2 s, amplitude to a quarter in half a cycle: ratio 0.4037, 3.4338 rad/s (exact
    3.43386; the book goes on from the rounded ratio, hence one last digit of tolerance).
    """
    decrement = 2.0 * math.log(4.0)
    ratio = decrement / math.hypot(2.0 * math.pi, decrement)
    omega = math.pi / math.sqrt(1.0 - ratio**2)
    x = ringing(omega, ratio, rate_hz=500.0, seconds=12.0, noise=1e-6)
    found = identify_log(log_of_samples(x, rate_hz=500.0))
    assert found.natural_frequency_hz is not None and found.damping_ratio is not None
    assert 2.0 * math.pi * found.natural_frequency_hz.value == pytest.approx(3.4338, abs=1e-4)
    assert found.damping_ratio.value == pytest.approx(0.4037, abs=5e-5)


def test_rao_block_on_a_rough_surface() -> None:
    """S. S. Rao, Mechanical Vibrations, ch. 2, Coulomb damping; from memory.

    From 10 cm to 1 cm in 5 cycles that take 2 s: coefficient of friction 0.1132 (g = 9.81 m/s^2).
    """
    omega = 5.0 * 2.0 * math.pi / 2.0
    dead = 0.09 / 20.0
    rate = 500.0
    t = np.arange(int(2.0 * rate)) / rate
    half = math.pi / omega
    number = np.floor(t / half)
    sizes = 0.1 - 2.0 * dead * number
    sides = np.where(number % 2.0 == 0.0, 1.0, -1.0)
    x = sides * (dead + (sizes - dead) * np.cos(omega * (t - number * half)))
    x += np.random.default_rng(2).normal(0.0, 2e-6, t.size)
    found = identify_log(log_of_samples(x, rate_hz=rate))
    assert found.damping_kinds == ("coulomb",)
    assert found.friction_acceleration is not None
    assert found.friction_acceleration.value / 9.81 == pytest.approx(0.1132, abs=5e-5)


def test_ogata_mass_spring_damper_from_a_step() -> None:
    """K. Ogata, Modern Control Engineering, 5th ed., A-5-5, p. 236; statement read, m and b from
    memory.

    2 lbf move it to 0.1 ft with 0.0095 ft of overshoot at 2 s: 20 lbf/ft, 5.2 slug, 12.2 lbf s/ft.
    Feet, pounds-force and slugs are as coherent as metres, newtons and kilograms.
    """
    depth = math.log(0.1 / 0.0095)
    ratio = depth / math.hypot(math.pi, depth)
    omega = math.pi / (2.0 * math.sqrt(1.0 - ratio**2))
    t = np.arange(1500) / 100.0 - 3.0
    damped = omega * math.sqrt(1.0 - ratio**2)
    after = np.maximum(t, 0.0)
    x = 0.1 - 0.1 * np.exp(-ratio * omega * after) * (
        np.cos(damped * after) + ratio * omega / damped * np.sin(damped * after)
    )
    x += np.random.default_rng(3).normal(0.0, 1e-6, t.size)
    force = np.where(t >= 0.0, 2.0, 0.0)
    found = identify_log(log_of_samples(x, rate_hz=100.0, force=force))
    assert found.mass is not None and found.damping is not None and found.stiffness is not None
    assert found.stiffness.value == pytest.approx(20.0, abs=0.05)
    assert found.mass.value == pytest.approx(5.2, abs=0.05)
    assert found.damping.value == pytest.approx(12.2, abs=0.05)
    assert found.damping_ratio is not None and found.natural_frequency_hz is not None
    assert found.damping_ratio.value == pytest.approx(0.6, abs=0.005)
    assert 2.0 * math.pi * found.natural_frequency_hz.value == pytest.approx(1.96, abs=0.005)
