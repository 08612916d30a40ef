"""Margins, peak sensitivity and delay: published tables, bounds and rules.

Rules of this file:

- Each case names its source, the printed digits, and a tolerance of half the last printed digit,
  or the reason for another one. "From memory" stands where the source could not be opened.
- An integrator with a delay is a light mass on a strong damper, sampled 100 times a delay; half a
  period of the hold and the lag of the mass are taken out of the delay, so that the phase is right
  and the gain off by some 1e-5.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from loops import PID, lead_loop, reference_loop
from scipy.optimize import brentq

from plant2.closedloop import (
    ClosedLoop,
    Controller,
    delay_margin_s,
    gain_crossings,
    gain_edges,
    log_pole,
    loop_figures,
    peak_sensitivity,
    poles_delta,
    reference_response,
)
from plant2.design import closed_loop, design, place_gains, task_of
from plant2.loopfile import Loop
from plant2.plant import Plant, state_space
from plant2.sampled import sample

TAU = 2.0 * math.pi


def flat(gain: float) -> Controller:
    """A proportional controller."""
    return Controller(
        reference=np.array([gain]), position=np.array([gain]), denominator=np.array([1.0])
    )


def delayed_integrator(gain: float, *, delay_s: float = 1.0, per_delay: int = 100) -> ClosedLoop:
    """gain exp(-delay s)/s in unity feedback."""
    period_s = delay_s / per_delay
    lag_s = period_s / 12.0
    space = state_space(Plant(mass=lag_s, damping=1.0))
    return ClosedLoop(
        sampled=sample(space, period_s, delay_s - 0.5 * period_s - lag_s),
        controller=flat(gain),
        count_per_position=1.0,
        effort_per_code=1.0,
    )


# ------------------------------------------------------------------------- integrator with delay


@pytest.mark.parametrize("delay_s", [1.0, 0.02])
def test_simc_robustness(delay_s: float) -> None:
    """S. Skogestad, J. Process Control 13 (2003) 291-309, robustness table; from memory.

    L = 0.5 exp(-theta s)/(theta s): GM 3.14, PM 61.4 deg, Ms 1.59, Mt 1.00, allowed delay error
    2.14 theta, wc theta 0.50, w180 theta 1.57.
    """
    loop = delayed_integrator(0.5 / delay_s, delay_s=delay_s)
    figures = loop_figures(loop, None)
    assert figures.gain_margin_db is not None and figures.phase_margin_deg is not None
    assert figures.delay_margin_s is not None and figures.crossover_hz is not None
    assert 10.0 ** (figures.gain_margin_db / 20.0) == pytest.approx(3.14, abs=5e-3)
    assert figures.phase_margin_deg == pytest.approx(61.4, abs=0.05)
    assert figures.peak_sensitivity == pytest.approx(1.59, abs=5e-3)
    assert figures.delay_margin_s / delay_s == pytest.approx(2.14, abs=5e-3)
    assert TAU * figures.crossover_hz * delay_s == pytest.approx(0.50, abs=5e-3)
    period_s = loop.sampled.period_s
    theta = np.linspace(1e-4, 3.0, 3001) / delay_s * period_s
    assert abs(reference_response(loop, theta)).max() == pytest.approx(1.00, abs=5e-3)
    (edge,) = gain_edges(loop)
    swing = log_pole(poles_delta(loop, gain=edge), period_s)[0]
    assert abs(swing.imag) * delay_s == pytest.approx(1.57, abs=5e-3)
    # exact: pi, 90 deg - 0.5 rad, pi - 1, pi/2
    assert edge == pytest.approx(math.pi, rel=1e-4)
    assert figures.phase_margin_deg == pytest.approx(90.0 - math.degrees(0.5), abs=2e-3)
    assert figures.delay_margin_s / delay_s == pytest.approx(math.pi - 1.0, rel=1e-4)


def test_crossover_that_a_delay_allows() -> None:
    """K. J. Astrom, "Limitations on control system performance", Eur. J. Control 2000; from memory.

    For 45 deg and a slope of -1 the crossover times the delay is at most 0.785.
    """
    at_most, more = delayed_integrator(0.785), delayed_integrator(0.80)
    (crossing,) = gain_crossings(at_most)
    assert crossing.omega_rad_per_s == pytest.approx(0.785, abs=5e-4)
    assert math.degrees(crossing.margin_rad) == pytest.approx(45.0, abs=0.05)
    assert math.degrees(gain_crossings(more)[0].margin_rad) < 44.5
    equal = brentq(
        lambda gain: gain_crossings(delayed_integrator(gain))[0].margin_rad - 0.25 * math.pi,
        0.5,
        1.2,
        xtol=1e-6,
    )
    assert equal == pytest.approx(0.785, abs=5e-4)


@pytest.mark.parametrize(
    ("peak", "gain_margin", "digit", "phase_margin_deg", "degree"),
    [
        (1.2, 6.0, 0.5, 49.2, 0.05),
        (1.4, 3.5, 0.05, 41.8, 0.05),
        (1.6, 2.67, 5e-3, 36.4, 0.05),
        (2.0, 2.0, 0.5, 29.0, 0.5),
    ],
)
def test_margins_that_a_peak_guarantees(
    peak: float, gain_margin: float, digit: float, phase_margin_deg: float, degree: float
) -> None:
    """K. J. Astrom, T. Hagglund, Advanced PID Control, and Skogestad and Postlethwaite, sec. 2.4.3.

    From memory: GM >= Ms/(Ms - 1) = 6, 3.5, 2.67, 2 and PM >= 2 asin(1/(2 Ms)) = 49.2, 41.8, 36.4,
    29 deg for Ms 1.2, 1.4, 1.6, 2.0; asin gives 41.85, cut off. Two loops are turned up until they
    have the listed peak.
    """
    assert peak / (peak - 1.0) == pytest.approx(gain_margin, abs=digit)
    bound_deg = 2.0 * math.degrees(math.asin(0.5 / peak))
    assert phase_margin_deg - 0.05 <= bound_deg <= phase_margin_deg + degree + 5e-3
    loops = [(delayed_integrator(0.5, per_delay=40), 0.2, 2.4)]
    if peak > 1.3:  # turned down, the stage's spring alone has more than 1.24
        task = task_of(reference_loop())
        gains = place_gains(task, natural_frequency_rad_per_s=TAU * 60.0, damping_ratio=0.8)
        loops.append((closed_loop(task, gains), 1.0, 4.0))
    for loop, least, most in loops:

        def louder(gain: float, loop: ClosedLoop = loop) -> ClosedLoop:
            return replace(loop, effort_per_code=loop.effort_per_code * gain)

        gain = brentq(lambda g, f=louder: peak_sensitivity(f(g)) - peak, least, most)
        figures = loop_figures(louder(gain), None)
        assert figures.peak_sensitivity == pytest.approx(peak, abs=1e-6)
        assert figures.gain_margin_db is not None and figures.phase_margin_deg is not None
        assert 10.0 ** (figures.gain_margin_db / 20.0) >= gain_margin - digit
        assert figures.phase_margin_deg >= phase_margin_deg


# ------------------------------------------------------------------------- our own loops


LAWS: dict[str, Loop] = {
    "pd": reference_loop(),
    "pid": reference_loop(*PID),
    "lead": lead_loop(),
    "free_mass": reference_loop('plant.stiffness="0 N/m"'),
    "voltage": reference_loop(
        'actuator.drive="voltage"',
        'actuator.resistance="10 ohm"',
        'actuator.inductance="1 mH"',
        'actuator.full_scale="40 V"',
        'actuator.limit="35 V"',
    ),
}


@pytest.mark.parametrize("law", LAWS)
def test_no_stable_loop_breaks_the_bounds(law: str) -> None:
    """The same two bounds, an identity: over delays, and gains from a third to three times."""
    checked, peaks = 0, []
    for delay in ("0 us", "270 us", "500 us"):
        base = LAWS[law]
        base = replace(base, processor=replace(base.processor, delay_s=float(delay[:-3]) * 1e-6))
        task = task_of(base)
        found = design(base, task, seek_nearest=False)
        assert found.gains is not None
        loop = closed_loop(task, found.gains)
        for gain in np.geomspace(1.0 / 3.0, 3.0, 9):
            turned = replace(loop, effort_per_code=loop.effort_per_code * float(gain))
            figures = loop_figures(turned, None)
            if not figures.stable:
                continue
            peak = figures.peak_sensitivity
            assert peak is not None and peak > 1.0
            if figures.gain_margin_db is not None:
                factor = 10.0 ** (figures.gain_margin_db / 20.0)
                assert factor >= peak / (peak - 1.0) * (1.0 - 1e-9)
            if figures.gain_reduction_db is not None:
                factor = 10.0 ** (-figures.gain_reduction_db / 20.0)
                assert factor <= peak / (peak + 1.0) * (1.0 + 1e-9)
            assert figures.phase_margin_deg is not None
            least_deg = 2.0 * math.degrees(math.asin(0.5 / peak))
            assert figures.phase_margin_deg >= least_deg - 1e-9
            checked += 1
            peaks.append(peak)
    assert checked > 15
    assert max(peaks) > 1.5


def test_delay_margin_is_the_phase_margin_over_the_crossover() -> None:
    """Any textbook, for a loop with one gain crossing; the longer delay's poles confirm it."""
    for loop in (delayed_integrator(0.3), delayed_integrator(0.9)):
        (crossing,) = gain_crossings(loop)
        expected = crossing.margin_rad / crossing.omega_rad_per_s
        assert delay_margin_s(loop) == pytest.approx(expected, rel=1e-9)


# ------------------------------------------------------------------------- largest gain


def test_largest_gain_of_a_sampled_motor() -> None:
    """NPTEL, Digital Control, module 3, part 1, p. 6; page read: 0 < K < 2.39 for 1/(s(s+1)), 1 s.

    K. Ogata, Discrete-Time Control Systems, prints 2.3925 from coefficients of four digits; exact
    is (1 - 1/e)/(1 - 2/e) = 2.392211, and there the loop swings at 1.3244 rad/s.
    """
    loop = ClosedLoop(
        sampled=sample(state_space(Plant(mass=1.0, damping=1.0)), 1.0, 0.0),
        controller=flat(1.0),
        count_per_position=1.0,
        effort_per_code=1.0,
    )
    (largest,) = gain_edges(loop)
    assert largest == pytest.approx(2.39, abs=5e-3)
    exact = (1.0 - math.exp(-1.0)) / (1.0 - 2.0 * math.exp(-1.0))
    assert largest == pytest.approx(exact, rel=1e-12)
    assert largest < 2.3925 - 2e-4
    swing = log_pole(poles_delta(loop, gain=largest), 1.0)[0]
    assert abs(swing.imag) == pytest.approx(1.32439, abs=5e-6)
    assert abs(swing.real) < 1e-12
