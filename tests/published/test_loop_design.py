"""Loops that textbooks design, reached by the design functions and judged by the margins.

Rules of this file:

- Each case names its source, the printed digits, and a tolerance of half the last printed digit,
  or the reason for another one. "From memory" stands where the source could not be opened.
- The books work in continuous time. Here the loop is sampled so fast that what the hold takes away,
  half a period, is far below the printed digits: the period stands in every case.
- Gains of the printed compensators are arithmetic on what `place_gains` or `lead_gains` return:
  kp + kd s p/(s + p) = (kp + kd p) (s + kp p/(kp + kd p))/(s + p).
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest
from loops import reference_loop

from plant2 import plant as pl
from plant2.closedloop import (
    ClosedLoop,
    Controller,
    Crossing,
    delay_margin_s,
    gain_crossings,
    gain_edges,
    is_stable,
    log_pole,
    loop_gain,
    pair_figures,
    peak_sensitivity,
    poles_delta,
    reference_response,
)
from plant2.design import Task, closed_loop, lead_gains, place_gains
from plant2.plant import Plant, state_space
from plant2.sampled import plant_response, sample

TAU = 2.0 * math.pi
FAST = 1e-6
"""Sample period of a loop that stands for a continuous one. [s]"""


def task_for(plant: Plant, *, law: str, corner_rad_per_s: float, period_s: float = FAST) -> Task:
    """A design in plain units around any plant: one count a metre, one newton a code."""
    loop = reference_loop()
    aim = replace(loop.aim, law=law, derivative_corner_hz=corner_rad_per_s / TAU)
    return Task(
        loop=replace(loop, aim=aim),
        plant=plant,
        sampled=sample(state_space(plant), period_s, 0.0),
        count_per_position=1.0,
        effort_per_code=1.0,
    )


def compensator(
    gain: float, *, zeros: Sequence[float] = (), poles: Sequence[float] = (), period_s: float
) -> Controller:
    """gain x prod(s + zero)/prod(s + pole) by the trapezoidal rule, in delta.

    s = (2/T) delta/(2 + delta); zeros without a pole get one far above everything.
    """
    far = 0.5 / period_s
    missing = len(zeros) - len(poles)
    top, bottom = np.array([gain * far**missing]), np.array([1.0])
    for zero in zeros:
        top = np.polymul(top, [2.0 / period_s + zero, 2.0 * zero])
    for pole in [*poles, *[far] * missing]:
        bottom = np.polymul(bottom, [2.0 / period_s + pole, 2.0 * pole])
    return Controller(
        reference=top / bottom[0], position=top / bottom[0], denominator=bottom / bottom[0]
    )


def looped(
    plant: Plant, controller: Controller, *, period_s: float, delay_s: float = 0.0
) -> ClosedLoop:
    """Unity feedback around a plant, in plain units."""
    return ClosedLoop(
        sampled=sample(state_space(plant), period_s, delay_s),
        controller=controller,
        count_per_position=1.0,
        effort_per_code=1.0,
    )


def poles_s(loop: ClosedLoop, *, gain: float = 1.0) -> list[complex]:
    """Closed-loop poles as the s that the sampled ones stand for, slowest first. [1/s]"""
    return [complex(s) for s in log_pole(poles_delta(loop, gain=gain), loop.sampled.period_s)]


def only_crossing(loop: ClosedLoop) -> Crossing:
    """The gain crossing of a stable loop that has one."""
    assert is_stable(loop)
    (crossing,) = gain_crossings(loop)
    return crossing


def complex_pair(poles: Sequence[complex]) -> complex:
    """The slowest pole above the real axis."""
    return next(p for p in poles if p.imag > 0.0)


# ------------------------------------------------------------------------------ PD by placing poles


def test_servo_with_velocity_feedback_is_designed() -> None:
    """K. Ogata, Modern Control Engineering, 5th ed., ex. 5-2, p. 177; page read.

    J = 1, B = 1, overshoot 0.2 after 1 s: z 0.456, wn 3.53, K 12.5 N m, Kh 0.178 s; settling
    2.48 s = 4/1.61, cut off, and 1.86 s = 3/1.61. The error of the period is 1e-5.
    """
    half_turn = pl.log_decrement_of_amplitudes(first=1.0, last=0.2, cycles=0.5)
    wanted = pl.plant_of_ringing(mass=1.0, damped_period_s=2.0, decrement=half_turn)
    ratio, frequency = pl.damping_ratio(wanted), pl.natural_frequency_rad_per_s(wanted)
    assert ratio == pytest.approx(0.456, abs=5e-4)
    assert frequency == pytest.approx(3.53, abs=5e-3)
    assert math.floor(400.0 * pl.decay_time_s(wanted)) == 248
    assert 3.0 * pl.decay_time_s(wanted) == pytest.approx(1.86, abs=5e-3)
    task = task_for(Plant(motion="rotary", mass=1.0, damping=1.0), law="pd", corner_rad_per_s=6e5)
    gains = place_gains(task, natural_frequency_rad_per_s=frequency, damping_ratio=ratio)
    assert gains.kp == pytest.approx(12.5, abs=0.05)
    assert gains.kd / gains.kp == pytest.approx(0.178, abs=5e-4)


def test_pure_inertia_with_rate_feedback() -> None:
    """Ogata, 5th ed., problem A-5-4, pp. 235-236; page read.

    K/(J s^2) with 1 + k s fed back, J = 1, overshoot 25 % after 2 s: z 0.404, wd 1.57, wn 1.72,
    K 2.95 N m, k 0.471 s; the book chains rounded values, exact is 0.4703: tolerance one digit.
    """
    half_turn = pl.log_decrement_of_amplitudes(first=1.0, last=0.25, cycles=0.5)
    wanted = pl.plant_of_ringing(mass=1.0, damped_period_s=4.0, decrement=half_turn)
    ratio, frequency = pl.damping_ratio(wanted), pl.natural_frequency_rad_per_s(wanted)
    assert ratio == pytest.approx(0.404, abs=5e-4)
    assert pl.damped_frequency_rad_per_s(wanted) == pytest.approx(1.57, abs=5e-3)
    assert frequency == pytest.approx(1.72, abs=5e-3)
    task = task_for(Plant(motion="rotary", mass=1.0), law="pd", corner_rad_per_s=6e5)
    gains = place_gains(task, natural_frequency_rad_per_s=frequency, damping_ratio=ratio)
    assert gains.kp == pytest.approx(2.95, abs=5e-3)
    assert gains.kd / gains.kp == pytest.approx(0.4703, abs=5e-5)
    assert gains.kd / gains.kp == pytest.approx(0.471, abs=1e-3)


def test_spring_mass_damper_is_identified() -> None:
    """Ogata, 5th ed., problem A-5-5, p. 236; statement read, m and b from memory.

    2 lbf move the mass by 0.1 ft, overshoot 0.0095 ft after 2 s: k 20 lbf/ft, z 0.6, wn 1.96,
    m 5.2 slug, b 12.2 lbf s/ft.
    """
    half_turn = pl.log_decrement_of_amplitudes(first=0.1, last=0.0095, cycles=0.5)
    found = pl.plant_of_ringing(mass=1.0, damped_period_s=4.0, decrement=half_turn)
    assert pl.damping_ratio(found) == pytest.approx(0.6, abs=5e-4)
    assert pl.natural_frequency_rad_per_s(found) == pytest.approx(1.96, abs=5e-3)
    mass = (2.0 / 0.1) / found.stiffness
    assert mass == pytest.approx(5.2, abs=0.05)
    assert mass * found.damping == pytest.approx(12.2, abs=0.05)


# ---------------------------------------------------------------------------- lead by placing poles

LEAD_PLANT = Plant(mass=0.1, damping=0.1)
"""10/(s (s + 1))."""


def lead_of_ogata(pole: float) -> tuple[float, float, list[complex]]:
    """Gain, zero and loop poles of a lead with a given pole that puts two at -1.5 +- j 2.598."""
    task = task_for(LEAD_PLANT, law="pd", corner_rad_per_s=pole)
    gains = place_gains(task, natural_frequency_rad_per_s=3.0, damping_ratio=0.5)
    gain = gains.kp + gains.kd * pole
    return gain, gains.kp * pole / gain, poles_s(closed_loop(task, gains))


def test_angle_that_the_lead_must_add() -> None:
    """Ogata, ex. 6-6, as course notes quote it: 40.894 deg at -1.5 + j 2.5981; exact is 40.8934."""
    s = complex(-1.5, 3.0 * math.sqrt(0.75))
    sampled = sample(state_space(LEAD_PLANT), FAST, 0.0)
    value, _ = plant_response(sampled, np.expm1(np.array([s * FAST])), sampled.c_position)
    missing = 180.0 - abs(math.degrees(cmath.phase(complex(value[0]))))
    assert missing == pytest.approx(40.8934, abs=2e-4)
    assert missing == pytest.approx(40.894, abs=1e-3)


def test_lead_by_bisector() -> None:
    """Ogata, ex. 6-6, as course notes quote it: 10/(s (s + 1)), pole -4.6458, zero -1.9432.

    The printed zero is wrong: zero x pole must be wn^2 = 9, which gives 1.93725, and its gain is
    1.22915; the printed 1.2287 belongs to the misprinted zero. Third pole -2.65.
    """
    gain, zero, poles = lead_of_ogata(4.6458)
    assert zero == pytest.approx(9.0 / 4.6458, abs=5e-5)
    assert gain == pytest.approx(1.22915, abs=1e-5)
    assert zero == pytest.approx(1.9432, abs=0.006)
    assert gain == pytest.approx(1.2287, abs=5e-4)
    assert complex_pair(poles) == pytest.approx(-1.5 + 2.5981j, abs=5e-5)
    assert poles[-1].real == pytest.approx(-2.65, abs=5e-3)


def test_printed_lead_misses_its_target() -> None:
    """The same pair as printed puts the poles at -1.4953 +- j 2.5993, 0.3 % off: an erratum."""
    printed = compensator(1.2287, zeros=[1.9432], poles=[4.6458], period_s=FAST)
    poles = poles_s(looped(LEAD_PLANT, printed, period_s=FAST))
    assert complex_pair(poles) == pytest.approx(-1.4953 + 2.5993j, abs=5e-5)


def test_lead_that_cancels_a_pole() -> None:
    """Ogata, ex. 6-6, second method: 0.9 (s + 1)/(s + 3), exact; the period changes it by 4e-6."""
    gain, zero, poles = lead_of_ogata(3.0)
    assert gain == pytest.approx(0.9, abs=1e-5)
    assert zero == pytest.approx(1.0, abs=1e-5)
    assert complex_pair(poles) == pytest.approx(-1.5 + 2.5981j, abs=5e-5)


# ----------------------------------------------------------------------- PD and PID on a root locus

NISE_PERIOD_S = 1e-6
NISE_PLANT = Plant(mass=1.0, damping=9.0, stiffness=18.0, current_bandwidth_rad_per_s=10.0)
"""10/((s + 3) (s + 6) (s + 10))."""


@pytest.mark.parametrize(
    ("gain", "zeros", "poles", "printed", "digit"),
    [
        (121.5, [8.0], [], -5.415 + 10.57j, 5e-3),
        (5.34, [8.0, 55.92], [], -8.13 + 15.87j, 5e-3),
        (4.6, [8.0, 55.92, 0.5], [0.0], -7.516 + 14.67j, 5e-3),
    ],
    ids=["proportional", "PD", "PID"],
)
def test_pid_by_root_locus(
    gain: float, zeros: list[float], poles: list[float], printed: complex, digit: float
) -> None:
    """N. Nise, Control Systems Engineering, ex. 9.5; digits read in course notes.

    K (s + 8)/((s + 3) (s + 6) (s + 10)) for 20 % overshoot: gains 121.5, 5.34 and 4.6, poles as
    listed, those of the PID from memory; peak time 0.297 s, then two thirds of it. Gains of two to
    four digits move the poles by a few units of the third decimal.
    """
    controller = compensator(0.1 * gain, zeros=zeros, poles=poles, period_s=NISE_PERIOD_S)
    loop = looped(NISE_PLANT, controller, period_s=NISE_PERIOD_S)
    pole = complex_pair(poles_s(loop))
    assert pole == pytest.approx(printed, abs=digit)
    delta = complex_pair([complex(p) for p in poles_delta(loop)])
    ratio, _ = pair_figures((delta, delta.conjugate()), NISE_PERIOD_S)
    assert ratio == pytest.approx(pl.damping_ratio_of_overshoot(0.2), abs=5e-4)
    peak = {121.5: 0.297, 5.34: 0.198}.get(gain)
    if peak is not None:
        assert math.pi / pole.imag == pytest.approx(peak, abs=5e-4)


# ----------------------------------------------------------------------- lead by frequency response


def test_uncompensated_bode_example_of_ogata() -> None:
    """Ogata, ex. 7-26; statement read, digits from memory: 40/(s (s + 2)) has 17 deg.

    The book reads a plot; exact is 17.96 deg.
    """
    flat = compensator(10.0, period_s=1e-5)
    crossing = only_crossing(looped(Plant(mass=0.25, damping=0.5), flat, period_s=1e-5))
    assert math.degrees(crossing.margin_rad) == pytest.approx(17.96, abs=5e-3)
    assert math.degrees(crossing.margin_rad) == pytest.approx(17.0, abs=1.0)


def test_lead_by_bode_of_ogata() -> None:
    """Ogata, ex. 7-26; statement read, digits from memory.

    4/(s (s + 2)) with 41.7 (s + 4.41)/(s + 18.4): asked for Kv 20, 50 deg and 10 dB, crossover
    9 rad/s. Exact are 50.5 deg at 8.89 rad/s; asked for these with that pole, `lead_gains` returns
    the printed gain and zero.
    """
    plant = Plant(mass=0.25, damping=0.5)
    printed = compensator(41.7, zeros=[4.41], poles=[18.4], period_s=1e-5)
    loop = looped(plant, printed, period_s=1e-5)
    crossing = only_crossing(loop)
    assert crossing.omega_rad_per_s == pytest.approx(9.0, abs=0.5)
    assert math.degrees(crossing.margin_rad) == pytest.approx(50.5, abs=0.05)
    assert gain_edges(loop)[-1] > 10.0 ** (10.0 / 20.0)
    low = 1e-3
    velocity = abs(loop_gain(loop, np.array([low * 1e-5]))[0]) * low
    assert velocity == pytest.approx(20.0, abs=0.05)
    task = task_for(plant, law="lead", corner_rad_per_s=18.4)
    gains = lead_gains(task, crossover_rad_per_s=8.89, phase_margin_rad=math.radians(50.5))
    gain = gains.kp + gains.kd * 18.4
    assert gain == pytest.approx(41.7, abs=0.05)
    assert gains.kp * 18.4 / gain == pytest.approx(4.41, abs=5e-3)


LEAD_OF_NISE = Plant(mass=1.0, damping=36.0, current_bandwidth_rad_per_s=100.0)
"""100/(s (s + 36) (s + 100))."""


def test_phase_margin_that_nise_aims_at() -> None:
    """N. Nise, ex. 11.3; from memory: 20 % overshoot asks for 48.1 deg."""
    ratio = pl.damping_ratio_of_overshoot(0.2)
    assert math.degrees(pl.phase_margin_rad(ratio)) == pytest.approx(48.1, abs=0.05)


@pytest.mark.parametrize(
    ("gain", "zeros", "poles", "margin_deg", "margin_digit", "crossover", "crossover_digit"),
    [
        (1440.0, [], [], 34.0, 0.5, 29.6, 0.05),
        (1440.0 / 0.42, [25.3], [60.2], 45.5, 0.05, 39.0, 0.5),
    ],
    ids=["gain", "lead"],
)
def test_lead_of_nise(
    gain: float,
    zeros: list[float],
    poles: list[float],
    margin_deg: float,
    margin_digit: float,
    crossover: float,
    crossover_digit: float,
) -> None:
    """N. Nise, ex. 11.3 and its table of results; from memory.

    100 K/(s (s + 36) (s + 100)), Kv 40: K 1440 alone 34 deg at 29.6 rad/s; with the lead
    (s + 25.3)/(s + 60.2)/0.42 45.5 deg at 39 rad/s.
    """
    controller = compensator(gain, zeros=zeros, poles=poles, period_s=1e-6)
    loop = looped(LEAD_OF_NISE, controller, period_s=1e-6)
    crossing = only_crossing(loop)
    assert math.degrees(crossing.margin_rad) == pytest.approx(margin_deg, abs=margin_digit)
    assert crossing.omega_rad_per_s == pytest.approx(crossover, abs=crossover_digit)
    low = 1e-2
    velocity = abs(loop_gain(loop, np.array([low * 1e-6]))[0]) * low
    assert velocity == pytest.approx(40.0, abs=0.1)  # 0.42 has two digits


def test_lead_lag_of_dorf_and_bishop() -> None:
    """R. Dorf, R. Bishop, Modern Control Systems, exercise E10.4; page read.

    100/(s (s + 5) (s + 10)) with (s + 0.15) (s + 0.7)/((s + 0.015) (s + 7)): 28.6 dB, 75.4 deg.
    """
    plant = Plant(mass=0.1, damping=0.5, current_bandwidth_rad_per_s=10.0)
    controller = compensator(1.0, zeros=[0.15, 0.7], poles=[0.015, 7.0], period_s=1e-5)
    loop = looped(plant, controller, period_s=1e-5)
    assert math.degrees(only_crossing(loop).margin_rad) == pytest.approx(75.4, abs=0.05)
    assert 20.0 * math.log10(gain_edges(loop)[-1]) == pytest.approx(28.6, abs=0.05)


def test_margins_of_a_triple_pole() -> None:
    """Franklin, Powell, Emami-Naeini, Feedback Control of Dynamic Systems, ch. 6; from memory.

    1/(s (s + 1)^2): gain margin 2, phase margin 22 deg, a plot reading; exact is 21.386 deg.
    """
    plant = Plant(mass=1.0, damping=1.0, current_bandwidth_rad_per_s=1.0)
    loop = looped(plant, compensator(1.0, period_s=1e-5), period_s=1e-5)
    assert gain_edges(loop)[-1] == pytest.approx(2.0, abs=5e-5)
    margin_deg = math.degrees(only_crossing(loop).margin_rad)
    assert margin_deg == pytest.approx(21.386, abs=5e-4)
    assert margin_deg == pytest.approx(22.0, abs=1.0)


def test_margins_of_dorf_and_bishop() -> None:
    """R. Dorf, R. Bishop, Modern Control Systems, ch. 9; from memory.

    1/(s (s + 1) (0.2 s + 1)): 15.6 dB, 43 deg.
    """
    plant = Plant(mass=1.0, damping=1.0, current_bandwidth_rad_per_s=5.0)
    loop = looped(plant, compensator(1.0, period_s=1e-5), period_s=1e-5)
    assert 20.0 * math.log10(gain_edges(loop)[-1]) == pytest.approx(15.6, abs=0.05)
    assert math.degrees(only_crossing(loop).margin_rad) == pytest.approx(43.0, abs=0.5)


def test_lead_for_a_motor() -> None:
    """Franklin, Powell, Emami-Naeini, ch. 6, lead for a DC motor; from memory.

    10 (s/2 + 1)/(s/10 + 1) on 1/(s (s + 1)), aimed at 5 rad/s: 53 deg, a plot reading; exact is
    53.55 deg at 4.785 rad/s.
    """
    controller = compensator(50.0, zeros=[2.0], poles=[10.0], period_s=1e-5)
    crossing = only_crossing(looped(Plant(mass=1.0, damping=1.0), controller, period_s=1e-5))
    margin_deg = math.degrees(crossing.margin_rad)
    assert margin_deg == pytest.approx(53.55, abs=5e-3)
    assert margin_deg == pytest.approx(53.0, abs=1.0)
    assert crossing.omega_rad_per_s == pytest.approx(5.0, abs=0.5)


# ------------------------------------------------------------------------------------ rule of thumb

MASS, CROSSOVER = 0.37, 200.0 * math.pi


def test_rule_of_thumb_for_a_mass() -> None:
    """Munnig Schmidt, Schitter, Rankers, van Eijk, The Design of High Performance Mechatronics.

    From memory: kp = m wc^2/3, lead from wc/3 to 3 wc, crossing at wc with about 53 deg (exact
    asin 0.8). Asked for that crossing and margin, `lead_gains` returns the rule's gains; the
    period takes 1e-4 of them.
    """
    task = task_for(Plant(mass=MASS), law="lead", corner_rad_per_s=3.0 * CROSSOVER, period_s=1e-7)
    gains = lead_gains(task, crossover_rad_per_s=CROSSOVER, phase_margin_rad=math.asin(0.8))
    assert gains.kp == pytest.approx(MASS * CROSSOVER**2 / 3.0, rel=2e-4)
    assert gains.kd == pytest.approx(gains.kp * (3.0 - 1.0 / 3.0) / CROSSOVER, rel=3e-4)


@pytest.mark.parametrize(
    ("integral", "printed_deg"), [(False, 53.0), (True, 47.0)], ids=["lead", "with_integral"]
)
def test_phase_of_the_rule_of_thumb(integral: bool, printed_deg: float) -> None:
    """The same book, from memory: 53 deg at wc, 47 deg with an integral from wc/10 on.

    With the integral the loop gain at wc is 0.5 % above 1.
    """
    corner = 3.0 * CROSSOVER
    zeros = [CROSSOVER / 3.0, CROSSOVER / 10.0] if integral else [CROSSOVER / 3.0]
    poles = [corner, 0.0] if integral else [corner]
    # kp (1 + s/wd)/(1 + s/wt) = kp (wt/wd) (s + wd)/(s + wt)
    gain = MASS * CROSSOVER**2 / 3.0 * 9.0
    controller = compensator(gain, zeros=zeros, poles=poles, period_s=1e-7)
    loop = looped(Plant(mass=MASS), controller, period_s=1e-7)
    crossing = only_crossing(loop)
    assert math.degrees(crossing.margin_rad) == pytest.approx(printed_deg, abs=0.5)
    assert crossing.omega_rad_per_s == pytest.approx(CROSSOVER, rel=5e-3)
    at_aim = loop_gain(loop, np.array([CROSSOVER * 1e-7]))[0]
    assert abs(at_aim) == pytest.approx(math.hypot(1.0, 0.1) if integral else 1.0, abs=1e-5)


# -------------------------------------------------------------------------------- a running example

SP_PLANT = Plant(mass=50.0 / 3.0, damping=5.0, stiffness=1.0 / 3.0)
"""3/((10 s + 1) (5 s + 1)); the zero at +1/2 is in the controller."""


def running_example(
    gain: float, reset_time_s: float | None, *, period_s: float, delay_s: float = 0.0
) -> ClosedLoop:
    """3 (1 - 2 s)/((10 s + 1) (5 s + 1)) with a proportional or PI controller."""
    zeros, poles = ([-0.5], []) if reset_time_s is None else ([-0.5, 1.0 / reset_time_s], [0.0])
    controller = compensator(-2.0 * gain, zeros=zeros, poles=poles, period_s=period_s)
    return looped(SP_PLANT, controller, period_s=period_s, delay_s=delay_s)


def test_ultimate_gain_of_the_running_example() -> None:
    """S. Skogestad, I. Postlethwaite, Multivariable Feedback Control, ch. 2; from memory.

    3 (1 - 2 s)/((10 s + 1) (5 s + 1)): ultimate gain 2.5, period 15.2 s (0.412 rad/s).
    """
    loop = running_example(1.0, None, period_s=1e-5)
    (ultimate,) = gain_edges(loop)
    assert ultimate == pytest.approx(2.5, abs=5e-4)
    swing = complex_pair(poles_s(loop, gain=ultimate))
    assert swing.imag == pytest.approx(0.412, abs=5e-4)
    assert TAU / swing.imag == pytest.approx(15.2, abs=0.05)
    assert abs(swing.real) < 1e-8


def test_pi_control_of_the_running_example() -> None:
    """Same book, ch. 2; from memory: K 1.136, 12.7 s: GM 1.63, PM 19.4 deg at 0.236 rad/s.

    Peaks 3.92 of the sensitivity and 3.35 of the complementary one; the printed controller has
    3.912 and 3.342, 0.2 % less, and so the printed peaks are held to one unit of their last digit.
    """
    loop = running_example(1.136, 12.7, period_s=1e-5)
    crossing = only_crossing(loop)
    assert math.degrees(crossing.margin_rad) == pytest.approx(19.4, abs=0.05)
    assert crossing.omega_rad_per_s == pytest.approx(0.236, abs=5e-4)
    assert gain_edges(loop)[-1] == pytest.approx(1.63, abs=0.0055)
    peak = peak_sensitivity(loop)
    assert peak == pytest.approx(3.912, abs=5e-4)
    assert peak == pytest.approx(3.92, abs=0.01)
    closed = abs(reference_response(loop, np.linspace(0.2, 0.3, 20001) * 1e-5)).max()
    assert closed == pytest.approx(3.342, abs=5e-4)
    assert closed == pytest.approx(3.35, abs=0.01)


def test_delay_that_the_running_example_stands() -> None:
    """Same book, ch. 2; from memory: 1.44 s more delay. Poles confirm it, sampled at 50 Hz.

    The hold takes 10 ms of it, the far pole of the controller 40 ms.
    """
    period_s = 0.02
    margin = delay_margin_s(running_example(1.136, 12.7, period_s=period_s))
    assert margin is not None
    taken = 0.5 * period_s + 2.0 * period_s
    assert margin + taken == pytest.approx(1.44, abs=5e-3)
