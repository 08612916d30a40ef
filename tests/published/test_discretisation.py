"""Published results on sampling.

Rules of this file:

- Each case names its source, the printed digits, and a tolerance of half the last printed digit,
  or the reason for another one.
- "From memory" stands where the source itself could not be opened.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from plant2.plant import Plant, state_space
from plant2.sampled import (
    hold_phase_lag_rad,
    in_stability_triangle,
    matched_section,
    pulse_transfer,
    sample,
    tustin_section,
)


@pytest.mark.parametrize(
    ("ratio", "frequency", "period"), [(0.5, 1.0, 0.5), (0.1, 10.0, 0.02), (0.7, 628.3, 1e-4)]
)
def test_astrom_and_wittenmark_zero_order_hold(
    ratio: float, frequency: float, period: float
) -> None:
    """K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, ch. 2, hold table; from memory.

    w0^2/(s^2 + 2 z w0 s + w0^2) against the four printed formulas, evaluated here in doubles: they
    lose digits of b1 and b2 as (w0 h)^2, which bounds the tolerance.
    """
    wd = frequency * math.sqrt(1.0 - ratio**2)
    a = math.exp(-ratio * frequency * period)
    b, g = math.cos(wd * period), math.sin(wd * period)
    printed_numerator = [
        1.0 - a * (b + ratio * frequency / wd * g),
        a * a + a * (ratio * frequency / wd * g - b),
    ]
    printed_denominator = [1.0, -2.0 * a * b, a * a]
    plant = Plant(
        mass=1.0 / frequency**2, damping=2.0 * ratio / frequency, stiffness=1.0
    )  # scaled so that the gain at rest is 1
    numerator, denominator = pulse_transfer(sample(state_space(plant), period, 0.0))
    lost = 2e-15 / (frequency * period) ** 2
    np.testing.assert_allclose(numerator, printed_numerator, rtol=lost)
    np.testing.assert_allclose(denominator, printed_denominator, rtol=1e-13)


def test_nptel_motor_with_hold() -> None:
    """NPTEL, Digital Control, module 3, part 1, p. 6; page read: 1/(s(s+1)), T = 1 s."""
    numerator, denominator = pulse_transfer(
        sample(state_space(Plant(mass=1.0, damping=1.0)), 1.0, 0.0)
    )
    assert numerator[0] == pytest.approx(0.3679, abs=5e-5)
    assert numerator[1] == pytest.approx(0.2642, abs=5e-5)
    assert -numerator[1] / numerator[0] == pytest.approx(-0.7183, abs=5e-5)
    assert np.sort(np.roots(denominator)) == pytest.approx([0.3679, 1.0], abs=5e-5)


def is_stable_with(gain: float) -> bool:
    """Unity feedback around 1/(s(s+1)) sampled at 1 s."""
    (b1, b2), (_, a1, a2) = pulse_transfer(
        sample(state_space(Plant(mass=1.0, damping=1.0)), 1.0, 0.0)
    )
    return in_stability_triangle(a1 + gain * b1, a2 + gain * b2)


def test_largest_gain_by_jurys_test() -> None:
    """Same page: stable for 0 < K < 2.39; and the exact bound (1 - 1/e)/(1 - 2/e).

    K. Ogata, Discrete-Time Control Systems, prints 2.3925, which comes from coefficients of four
    digits: an erratum, 1.2e-4 high.
    """
    assert is_stable_with(2.39 - 0.005)
    assert not is_stable_with(2.39 + 0.005)
    exact = (1.0 - math.exp(-1.0)) / (1.0 - 2.0 * math.exp(-1.0))
    assert is_stable_with(exact * (1.0 - 1e-12))
    assert not is_stable_with(exact * (1.0 + 1e-12))
    assert not is_stable_with(2.3925)
    assert not is_stable_with(0.0)


@pytest.mark.parametrize("period", [1.0, 0.3, 1e-4])
def test_double_integrator_with_hold(period: float) -> None:
    """Franklin, Powell, Workman, Digital Control of Dynamic Systems; from memory.

    (h^2/2)(z + 1)/(z - 1)^2, exact.
    """
    numerator, denominator = pulse_transfer(sample(state_space(Plant(mass=1.0)), period, 0.0))
    np.testing.assert_allclose(numerator, [0.5 * period**2, 0.5 * period**2], rtol=1e-14)
    assert denominator.tolist() == [1.0, -2.0, 1.0]


def test_matched_lead_of_franklin() -> None:
    """Franklin, Powell, Emami-Naeini, Feedback Control of Dynamic Systems, ch. 8; from memory.

    0.81(s + 0.2)/(s + 2) at 1 s, printed 0.389(z - 0.82)/(z - 0.135). The printed gain follows from
    the rounded zero and pole, 0.81 x (0.2/2) x (1 - 0.135)/(1 - 0.82) = 0.389; exact is 0.38637.
    """
    b0, b1, a1 = matched_section((0.81, 0.81 * 0.2), (1.0, 2.0), period_s=1.0)
    assert -b1 / b0 == pytest.approx(0.82, abs=0.005)
    assert -a1 == pytest.approx(0.135, abs=5e-4)
    assert b0 == pytest.approx(0.38637, abs=5e-6)
    zero, pole = -math.log(0.82), -math.log(0.135)
    gain = 0.81 * (0.2 / 2.0) * pole / zero
    rounded = matched_section((gain, gain * zero), (1.0, pole), period_s=1.0)
    assert rounded[0] == pytest.approx(0.389, abs=5e-4)


def test_tustin_lead_of_franklin() -> None:
    """Same book, ch. 8; from memory: 10(s/2 + 1)/(s/10 + 1) at 0.025 s.

    Printed (45.56 - 43.33/z)/(1 - 0.7778/z).
    """
    b0, b1, a1 = tustin_section((5.0, 10.0), (0.1, 1.0), period_s=0.025)
    assert b0 == pytest.approx(45.56, abs=0.005)
    assert b1 == pytest.approx(-43.33, abs=0.005)
    assert a1 == pytest.approx(-0.7778, abs=5e-5)


@pytest.mark.parametrize("match", [1.0, 20.0, 100.0])
def test_prewarped_tustin_is_exact_at_its_frequency(match: float) -> None:
    """c = w1/tan(w1 T/2), any textbook; an identity, so the tolerance is rounding."""
    b0, b1, a1 = tustin_section((5.0, 10.0), (0.1, 1.0), period_s=0.025, match_rad_per_s=match)
    z, s = np.exp(0.025j * match), 1j * match
    residual = (b0 * z + b1) / (z + a1) - (5.0 * s + 10.0) / (0.1 * s + 1.0)
    assert abs(residual) < 1e-12


@pytest.mark.parametrize(
    ("samples_per_turn", "delay_samples", "printed_deg"), [(20, 0, 9), (30, 0, 6), (20, 1, 27)]
)
def test_phase_lost_to_the_hold(
    samples_per_turn: int, delay_samples: int, printed_deg: int
) -> None:
    """Franklin, Powell, Workman, Digital Control of Dynamic Systems; from memory."""
    period = 2.0 * math.pi / samples_per_turn
    lag = hold_phase_lag_rad(1.0, period, delay_samples * period)
    assert math.degrees(lag) == pytest.approx(printed_deg, abs=1e-12)


@pytest.mark.parametrize(("angle", "printed_deg"), [(0.15, 4.3), (0.5, 14.3)])
def test_sample_rate_rule_of_astrom_and_wittenmark(angle: float, printed_deg: float) -> None:
    """Astrom and Wittenmark, Computer-Controlled Systems: h wc from 0.15 to 0.5; from memory."""
    assert math.degrees(hold_phase_lag_rad(angle, 1.0)) == pytest.approx(printed_deg, abs=0.05)


def test_jurys_triangle_has_no_exception() -> None:
    """|a2| < 1, |a1| < 1 + a2, any textbook: 20 000 random polynomials and their roots."""
    rng = np.random.default_rng(2)
    a1, a2 = rng.uniform(-2.5, 2.5, 20000), rng.uniform(-1.5, 1.5, 20000)
    root = np.sqrt((a1**2 - 4.0 * a2).astype(complex))
    largest = np.maximum(abs(-a1 + root), abs(-a1 - root)) / 2.0
    told = np.array([in_stability_triangle(x, y) for x, y in zip(a1, a2, strict=True)])
    assert abs(largest - 1.0).min() > 1e-9
    assert (told == (largest < 1.0)).all()
