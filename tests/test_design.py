"""Gains against numbers computed at 40 digits, and against the poles of the loop they make."""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from loops import PID, lead_loop, reference_loop

from plant2.closedloop import (
    bandwidth_rad_per_s,
    gain_crossings,
    pair_figures,
    poles_delta,
    step_shares,
)
from plant2.design import (
    TAU,
    Gains,
    PairNumber,
    closed_loop,
    controller_equations,
    controller_of,
    design,
    lead_gains,
    notch_section,
    pair_delta,
    place_gains,
    resting_coefficients,
    roots_of,
    solve_bandwidth,
    task_of,
    try_lead,
    try_pair,
)
from plant2.equations import transfer
from plant2.loopfile import Notch


def gains_of(*sets: str) -> Gains:
    found = design(reference_loop(*sets))
    assert found.gains is not None
    return found.gains


def test_pd_gains_of_the_reference_loop() -> None:
    gains = gains_of()
    assert gains.kp == pytest.approx(4951.84347488285, rel=1e-12)
    assert gains.kd == pytest.approx(23.804405318642, rel=1e-12)
    assert gains.kff == pytest.approx(200.0, rel=1e-12)


def test_pd_gains_at_critical_damping() -> None:
    """The double pole, against the equation and its derivative solved by mpmath at 50 digits."""
    gains = gains_of("aim.damping_ratio=1")
    assert gains.kp == pytest.approx(4563.78145950144683, rel=1e-12)
    assert gains.kd == pytest.approx(27.1596600663079893, rel=1e-12)


def test_pid_gains_of_the_reference_loop() -> None:
    gains = gains_of(*PID)
    assert gains.kp == pytest.approx(6791.10793993234, rel=1e-12)
    assert gains.kd == pytest.approx(26.7762696317929, rel=1e-12)
    assert gains.ki == pytest.approx(458630.656819448, rel=1e-12)
    assert gains.beta == pytest.approx(0.7098257699518, rel=1e-11)


def test_pid_default_corner_is_a_quarter() -> None:
    assert gains_of('aim.law="pid"').integral_corner_hz == pytest.approx(15.0, rel=1e-12)


@pytest.mark.parametrize(
    ("crossover", "margin", "kp", "kd"),
    [
        (80.0, 50.0, 5536.6861177613, 21.455928479976),
        (120.0, 45.0, 11447.398470545, 32.852881017422),
    ],
)
def test_lead_gains(crossover: float, margin: float, kp: float, kd: float) -> None:
    task = task_of(lead_loop())
    gains = lead_gains(
        task, crossover_rad_per_s=TAU * crossover, phase_margin_rad=math.radians(margin)
    )
    assert gains.kp == pytest.approx(kp, rel=1e-12)
    assert gains.kd == pytest.approx(kd, rel=1e-11)


def test_lead_has_the_crossover_and_margin_it_was_asked_for() -> None:
    loop = lead_loop()
    found = design(loop)
    assert found.closed is not None and not found.faults
    last = gain_crossings(found.closed)[-1]
    assert last.omega_rad_per_s == pytest.approx(TAU * 80, rel=1e-9)
    assert math.degrees(last.margin_rad) == pytest.approx(50.0, rel=1e-9)


@pytest.mark.parametrize("zeta", [0.05, 0.3, 0.8, 0.999999, 1.0, 1.000001, 1.3, 3.0])
@pytest.mark.parametrize("rate", ["5 kHz", "20 kHz", "100 kHz", "500 kHz"])
@pytest.mark.parametrize("law", ["pd", "pid"])
def test_placed_pair_is_where_it_was_asked(zeta: float, rate: str, law: str) -> None:
    """Effective damping ratio and natural frequency equal the target to 1e-9, from the poles."""
    loop = reference_loop(
        f"aim.damping_ratio={zeta}",
        f"processor.sample_rate={rate}",
        'processor.delay="140 us"',
        f'aim.law="{law}"',
    )
    task = task_of(loop)
    gains = place_gains(task, natural_frequency_rad_per_s=TAU * 60, damping_ratio=zeta)
    closed = closed_loop(task, gains)
    poles = poles_delta(closed)
    wanted = roots_of(pair_delta(TAU * 60, zeta, task.period_s))
    order = np.argsort(np.abs(poles - wanted[0]))
    first = complex(poles[order[0]])
    rest = np.delete(poles, order[0])
    second = complex(rest[np.argmin(np.abs(rest - wanted[1]))])
    found_zeta, found_omega = pair_figures((first, second), task.period_s)
    assert found_omega == pytest.approx(TAU * 60, rel=1e-9)
    assert found_zeta == pytest.approx(zeta, rel=1e-9)


@given(
    p=st.floats(-2, 2),
    q=st.floats(-2, 2),
    r=st.floats(-2, 2),
    s=st.floats(-2, 2),
    square=st.floats(-4, 4),
)
@settings(max_examples=200, derandomize=True, deadline=None)
def test_pair_numbers_act_on_both_poles(
    p: float, q: float, r: float, s: float, square: float
) -> None:
    a = PairNumber(p=p, q=q, square=square)
    b = PairNumber(p=r, q=s, square=square)
    left = roots_of(a.times(b))
    x, y = roots_of(a), roots_of(b)
    for i in range(2):
        assert left[i] == pytest.approx(x[i] * y[i], rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("zeta", [0.2, 1 - 1e-9, 1.0, 1 + 1e-9, 2.0])
@pytest.mark.parametrize("turn", [1e-6, 1e-3, 0.3])
def test_pair_delta_against_fifty_digits(zeta: float, turn: float) -> None:
    found = pair_delta(turn, zeta, 1.0)
    with mpmath.workdps(50):
        z = mpmath.mpf(zeta)
        e = mpmath.mpf(turn) * mpmath.sqrt(mpmath.mpc(z * z - 1))
        x = -z * mpmath.mpf(turn)
        p = mpmath.exp(x) * mpmath.cosh(e) - 1
        q = mpmath.exp(x) * (mpmath.sinh(e) / e if e != 0 else mpmath.mpf(1))
        assert abs(found.p - p.real) <= abs(p) * mpmath.mpf("1e-14")
        assert abs(found.q - q.real) <= abs(q) * mpmath.mpf("1e-14")


def test_notch_matches_its_published_mapping() -> None:
    """400 Hz at 5 kHz: coefficients computed apart for both damping ratios."""
    omega = TAU * 400
    depth = 20 * math.log10(0.5 / 0.02)
    s = notch_section(Notch(frequency_rad_per_s=omega, width=1.0, depth_db=depth), 2e-4)
    # z^2 + c1 z + c2 with c1 = d1 - 2, c2 = 1 - d1 + d0
    assert s.z1 - 2 == pytest.approx(-1.7351783308028, rel=1e-12)
    assert 1 - s.z1 + s.z0 == pytest.approx(0.98009458861236, rel=1e-12)
    assert s.p1 - 2 == pytest.approx(-1.4104639257918, rel=1e-12)
    assert 1 - s.p1 + s.p0 == pytest.approx(0.60492256276427, rel=1e-12)


@pytest.mark.parametrize("sets", [(), PID, ("actuator.polarity=-1",), ("sensor.polarity=-1",)])
@pytest.mark.parametrize("bits", [16, 32])
def test_equations_have_the_transfer_functions_of_the_gains(
    sets: tuple[str, ...], bits: int
) -> None:
    """Two paths to the controller: rational elimination of the list, polynomials of the law."""
    notch = Notch(frequency_rad_per_s=TAU * 400, width=1.0, depth_db=28.0)
    base = reference_loop(*sets)
    for notches in ((), (notch,), (notch, replace(notch, frequency_rad_per_s=TAU * 900))):
        task = task_of(replace(base, aim=replace(base.aim, notches=notches)))
        gains = place_gains(task, natural_frequency_rad_per_s=TAU * 60, damping_ratio=0.8)
        listed = transfer(controller_equations(task, gains, bits)).in_delta()
        direct = controller_of(task, gains)
        assert listed.denominator == pytest.approx(direct.denominator, rel=1e-9, abs=1e-13)
        # one is a doubled-up form of the other where a factor is common: compare values
        for point in (0.1 + 0.2j, -0.3 + 0.5j, 1e-3j):
            for name in ("reference", "position"):
                a = np.polyval(getattr(listed, name), point) / np.polyval(listed.denominator, point)
                b = np.polyval(getattr(direct, name), point) / np.polyval(direct.denominator, point)
                sign = task.count_per_position * task.effort_per_code
                assert a == pytest.approx(b, rel=1e-9), (name, sign)


def test_notch_gain_at_rest_is_exactly_one() -> None:
    notch = Notch(frequency_rad_per_s=TAU * 400, width=0.3, depth_db=20.0)
    base = reference_loop()
    task = task_of(replace(base, aim=replace(base.aim, notches=(notch,))))
    gains = place_gains(task, natural_frequency_rad_per_s=TAU * 60, damping_ratio=0.8)
    found = transfer(controller_equations(task, gains, 16))
    plain = task_of(base)
    without = transfer(controller_equations(plain, gains, 16))
    at_rest = sum(found.position) / sum(found.denominator)
    assert at_rest == sum(without.position) / sum(without.denominator)
    assert isinstance(at_rest, Fraction)


def test_bandwidth_target_is_met() -> None:
    loop = reference_loop()
    loop = replace(loop, aim=replace(loop.aim, natural_frequency_hz=None, bandwidth_hz=50.0))
    found = design(loop)
    assert found.closed is not None
    width = bandwidth_rad_per_s(found.closed)
    assert width == pytest.approx(TAU * 50, rel=1e-10)


def test_bandwidth_that_no_loop_has() -> None:
    loop = reference_loop()
    loop = replace(loop, aim=replace(loop.aim, natural_frequency_hz=None, bandwidth_hz=1500.0))
    found = design(loop)
    assert found.faults and found.nearest is not None
    assert found.nearest.bandwidth_hz is not None and found.nearest.bandwidth_hz < 1500


def works(loop_sets: tuple[str, ...], hz: float, zeta: float) -> bool:
    return not try_pair(task_of(reference_loop(*loop_sets)), TAU * hz, zeta).faults


@pytest.mark.parametrize("sets", [(), PID])
def test_nearest_target_works_and_one_step_beyond_fails(sets: tuple[str, ...]) -> None:
    found = design(reference_loop(*sets, 'aim.natural_frequency="1 kHz"'))
    assert found.faults
    near = found.nearest
    assert near is not None and near.natural_frequency_hz is not None
    assert near.natural_frequency_hz < 1000
    assert works(sets, near.natural_frequency_hz, 0.8)
    assert not works(sets, near.natural_frequency_hz * 1.001, 0.8)
    assert near.fails_at_hz == pytest.approx(near.natural_frequency_hz * 1.001, rel=1e-9)
    assert near.reason
    # nothing between it and the target works either
    for hz in np.geomspace(near.natural_frequency_hz * 1.001, 1000, 60):
        assert not works(sets, float(hz), 0.8)


def test_target_softer_than_the_plant() -> None:
    """The bare plant has 10.07 Hz: 5 Hz would need a negative kp."""
    found = design(reference_loop('aim.natural_frequency="5 Hz"'))
    assert any("kp" in fault and "softer" in fault for fault in found.faults)
    near = found.nearest
    assert near is not None and near.natural_frequency_hz is not None
    assert works((), near.natural_frequency_hz, 0.8)
    assert not works((), near.fails_at_hz, 0.8)


def test_limit_that_cannot_hold() -> None:
    found = design(reference_loop('check.step="1.5 mm"', 'actuator.limit="20 mA"'))
    assert any("cannot hold" in fault for fault in found.faults)
    found = design(reference_loop('plant.bias_force="36 N"'))
    assert any("cannot hold" in fault for fault in found.faults)


def test_dominance_follows_the_shares() -> None:
    """Raising the natural frequency, the pair loses dominance just where a share reaches 1 %."""
    task = task_of(reference_loop())
    found = design(reference_loop('aim.natural_frequency="1 kHz"'))
    assert found.nearest is not None and found.nearest.natural_frequency_hz is not None
    hz = found.nearest.natural_frequency_hz
    trial = try_pair(task, TAU * hz * 1.001, 0.8)
    if any("dominant" in fault for fault in trial.faults):
        assert trial.closed is not None and trial.poles is not None and trial.pair is not None
        shares = step_shares(trial.closed, trial.poles)
        threshold = abs(1 + trial.pair[0]) ** 2
        others = [
            share
            for pole, share in zip(trial.poles, shares, strict=True)
            if abs(1 + pole) > threshold and min(abs(pole - v) for v in trial.pair) > 1e-9
        ]
        assert max(others) >= 0.01


def test_given_gains_are_judged_not_changed() -> None:
    loop = reference_loop()
    loop = replace(
        loop,
        aim=replace(
            loop.aim,
            damping_ratio=None,
            natural_frequency_hz=None,
            kp=4951.84347488285,
            kd=23.804405318642,
        ),
    )
    found = design(loop)
    assert found.given and not found.faults
    assert found.gains is not None and found.gains.kp == 4951.84347488285
    assert found.pair is not None
    zeta, omega = pair_figures(found.pair, 2e-4)
    assert (zeta, omega) == pytest.approx((0.8, TAU * 60), rel=1e-9)
    negative = design(replace(loop, aim=replace(loop.aim, kd=-1.0)))
    assert any("negative" in fault for fault in negative.faults)


def test_resting_output_is_spring_and_bias() -> None:
    """By hand: (200 N/m x (x - 0.1 mm) - 0.5 N) / (10 N/A x 4 A/2048 codes)."""
    loop = reference_loop('plant.rest_position="0.1 mm"', 'plant.bias_force="0.5 N"')
    slope, at_zero = resting_coefficients(task_of(loop))
    per_code = 10 * 4 / 2048
    assert at_zero == pytest.approx((200 * -1e-4 - 0.5) / per_code, rel=1e-12)
    assert slope == pytest.approx(200 * 2e-3 / 32768 / per_code, rel=1e-9)


def test_lead_above_its_last_crossing_is_refused() -> None:
    task = task_of(lead_loop())
    trial = try_lead(task, TAU * 900, math.radians(50))
    assert trial.faults
    found = design(lead_loop('aim.crossover="900 Hz"'))
    assert found.nearest is not None and found.nearest.crossover_hz is not None
    assert not try_lead(task, TAU * found.nearest.crossover_hz, math.radians(50)).faults


def test_a_free_mass_needs_no_feedforward() -> None:
    found = design(reference_loop('plant.stiffness="0 N/m"'))
    assert found.gains is not None and found.gains.kff == 0.0 and not found.faults


@pytest.mark.parametrize("delay", ["0 s", "200 us", "540 us", "0.6 ms"])
def test_delays_of_any_length(delay: str) -> None:
    """Whole, fractional and 2.7 samples: the pair is placed all the same."""
    loop = reference_loop(f'processor.delay="{delay}"', 'aim.natural_frequency="40 Hz"')
    found = design(loop)
    assert found.pair is not None and found.closed is not None and not found.faults
    poles = poles_delta(found.closed)
    assert np.abs(poles - found.pair[0]).min() < 1e-11


def test_solve_bandwidth_agrees_with_a_search() -> None:
    task = task_of(reference_loop())
    omega = solve_bandwidth(task, 45.0, 0.7)
    trial = try_pair(task, omega, 0.7)
    assert trial.closed is not None
    width = bandwidth_rad_per_s(trial.closed)
    assert width is not None and width / TAU == pytest.approx(45.0, rel=1e-10)
