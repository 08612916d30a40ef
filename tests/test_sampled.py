"""The sampled plant against 50-digit arithmetic, closed forms, scipy and python-control."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from plant2.errors import OutOfRangeError
from plant2.plant import Plant, StateSpace, frequency_response, state_space
from plant2.sampled import (
    delta_of,
    hold_phase_lag_rad,
    in_stability_triangle,
    matched_section,
    plant_response,
    propagate,
    pulse_transfer,
    sample,
    split_delay,
    tustin_section,
)

P0 = Plant(mass=0.05, damping=0.4, stiffness=200.0)
COIL = replace(P0, drive="voltage", force_constant=10.0, resistance_ohm=5.0)
PERIOD_S = 2e-4


@dataclass(frozen=True, slots=True, kw_only=True)
class StandInMode:
    """The four facts of a mode, for tests that need no loop file."""

    frequency_rad_per_s: float
    damping_ratio: float
    mass: float
    sign: int


def a_mode(frequency_rad_per_s: float, damping_ratio: float, mass: float, sign: int) -> Any:
    return StandInMode(
        frequency_rad_per_s=frequency_rad_per_s, damping_ratio=damping_ratio, mass=mass, sign=sign
    )


MODES = (
    a_mode(2600.0, 0.01, 0.1, -1),
    a_mode(8800.0, 0.01, 0.9, 1),
    a_mode(31000.0, 0.0, 0.2, 1),
)

PLANTS = {
    "P0": P0,
    "free mass": Plant(mass=0.05),
    "free mass with damping": Plant(mass=0.05, damping=3.0),
    "critical": Plant(mass=0.25, damping=1.0, stiffness=1.0),
    "nearly critical": Plant(mass=0.25, damping=1.0 + 1e-9, stiffness=1.0),
    "overdamped": Plant(mass=0.01, damping=40.0, stiffness=20.0),
    "coil": COIL,
    "coil with inductance": replace(COIL, inductance_h=1e-3),
    "stiff coil": replace(COIL, inductance_h=1e-7),
    "lags": replace(P0, current_bandwidth_rad_per_s=5e4, sensor_corner_rad_per_s=1.2e5),
    "modes and lags": replace(
        P0, modes=MODES, current_bandwidth_rad_per_s=5e4, sensor_corner_rad_per_s=1.2e5
    ),
    "modes on a coil": replace(
        COIL, modes=MODES[:2], stiffness=0.0, inductance_h=1e-3, sensor_corner_rad_per_s=1e3
    ),
    "tiny": Plant(mass=1e-9, damping=1e-9, stiffness=1e-3),
    "huge": Plant(mass=1e6, damping=1.0, stiffness=1e-3),
}


def exact(space: StateSpace, dt_s: float) -> list[Any]:
    """Transition minus identity and the two input vectors to 60 digits, as object arrays."""
    n = len(space.names)
    with mp.workdps(60):
        big = mp.matrix(n + 2, n + 2)
        for i in range(n):
            for j in range(n):
                big[i, j] = mp.mpf(float(space.a[i, j])) * mp.mpf(dt_s)
            big[i, n] = mp.mpf(float(space.b[i])) * mp.mpf(dt_s)
            big[i, n + 1] = mp.mpf(float(space.b_force[i])) * mp.mpf(dt_s)
        full = mp.expm(big, method="taylor") - mp.eye(n + 2)
        table = np.array([[full[i, j] for j in range(n + 2)] for i in range(n)], dtype=object)
    return [table[:, :n], table[:, n], table[:, n + 1]]


def size(space: StateSpace, dt_s: float) -> float:
    """A matrix norm of A dt that scaling of the states cannot fool: its largest eigenvalue."""
    return float(np.abs(np.linalg.eigvals(space.a)).max()) * dt_s


# -------------------------------------------------------------------------------- transition


@pytest.mark.parametrize("dt_s", [1e-6, 1e-5, 2e-4, 1e-2, 1.0])
@pytest.mark.parametrize("name", PLANTS)
def test_transition_to_twelve_digits(name: str, dt_s: float) -> None:
    space = state_space(PLANTS[name])
    if size(space, dt_s) > 100.0:
        # Still stable plants, but the phase of modes turned over many times costs digits.
        dt_s = dt_s * 100.0 / size(space, dt_s)
    for got, expected in zip(propagate(space, dt_s), exact(space, dt_s), strict=True):
        error = np.abs((got.astype(object) - expected).astype(np.float64))
        largest = float(np.abs(expected.astype(np.float64)).max())
        assert error.max() <= 1e-13 * largest
        assert np.isfinite(got).all()


@pytest.mark.parametrize("dt_s", [2e-4, 1e-2])
@pytest.mark.parametrize("name", ["stiff coil", "overdamped", "lags"])
def test_stiff_plant_over_long_times(name: str, dt_s: float) -> None:
    """Time constants down to 20 ns beside a period of 10 ms: half a million time constants."""
    space = state_space(PLANTS[name])
    for got, expected in zip(propagate(space, dt_s), exact(space, dt_s), strict=True):
        error = np.abs((got.astype(object) - expected).astype(np.float64))
        assert error.max() <= 1e-14 * float(np.abs(expected.astype(np.float64)).max())


@pytest.mark.parametrize("name", PLANTS)
def test_transition_entry_by_entry_over_short_times(name: str) -> None:
    """Positions and velocities differ by many orders in SI; each entry is right by itself."""
    space = state_space(PLANTS[name])
    dt_s = min(1e-5, 1.0 / max(size(space, 1.0), 1e-9))
    for got, expected in zip(propagate(space, dt_s), exact(space, dt_s), strict=True):
        error = np.abs((got.astype(object) - expected).astype(np.float64))
        assert (error <= 1e-14 * np.abs(expected.astype(np.float64))).all()


def test_many_times_at_once_are_the_times_one_by_one() -> None:
    space = state_space(PLANTS["modes and lags"])
    times = np.array([0.0, 1e-7, 3e-5, 2e-4])
    together = propagate(space, times)
    for at, dt_s in enumerate(times):
        for many, one in zip(together, propagate(space, float(dt_s)), strict=True):
            np.testing.assert_allclose(many[at], one, rtol=1e-13, atol=1e-13 * np.abs(one).max())
    assert not together[0][0].any()
    assert not together[1][0].any()


@given(
    first=st.floats(1e-6, 1e-2), second=st.floats(1e-6, 1e-2), name=st.sampled_from(sorted(PLANTS))
)
def test_two_steps_are_one(first: float, second: float, name: str) -> None:
    space = state_space(PLANTS[name])
    (psi1, psi2, psi), (u1, u2, u), _ = propagate(space, np.array([first, second, first + second]))
    both = psi1 + psi2 + psi2 @ psi1
    np.testing.assert_allclose(both, psi, rtol=1e-9, atol=1e-10 * np.abs(psi).max())
    later = u2 + u1 + psi2 @ u1
    np.testing.assert_allclose(later, u, rtol=1e-9, atol=1e-10 * np.abs(u).max())


def test_transition_agrees_with_scipy() -> None:
    from scipy.signal import cont2discrete

    for plant in PLANTS.values():
        space = state_space(plant)
        n = len(space.names)
        phi, gamma, *_ = cont2discrete(
            (space.a, space.b[:, np.newaxis], np.eye(n), np.zeros((n, 1))), PERIOD_S
        )
        psi, got, _ = propagate(space, PERIOD_S)
        np.testing.assert_allclose(psi + np.eye(n), phi, rtol=1e-7, atol=1e-9 * np.abs(phi).max())
        np.testing.assert_allclose(got, gamma[:, 0], rtol=1e-7, atol=1e-9 * np.abs(got).max())


@pytest.mark.parametrize("dt_s", [-1e-9, math.nan, math.inf])
def test_impossible_time_is_named(dt_s: float) -> None:
    with pytest.raises(OutOfRangeError) as caught:
        propagate(state_space(P0), np.array([1.0, dt_s]))
    assert caught.value.name == "dt_s"


# -------------------------------------------------------------------------------- delay


@pytest.mark.parametrize(
    ("delay", "expected"),
    [
        (0.0, (0, 0.0)),
        (0.35, (0, 0.35)),
        (1.0, (1, 0.0)),
        (1.35, (1, 0.35)),
        (1.0 + 0.9e-9, (1, 0.0)),
        (1.0 - 0.9e-9, (1, 0.0)),
        (3.0 + 1.1e-9, (3, 1.1e-9)),
        (7.5, (7, 0.5)),
    ],
)
def test_delay_is_split(delay: float, expected: tuple[int, float]) -> None:
    whole, fraction = split_delay(delay * PERIOD_S, PERIOD_S)
    assert whole == expected[0]
    assert fraction == pytest.approx(expected[1], rel=1e-6, abs=0.0)


@given(period=st.floats(1e-6, 1.0), delay=st.floats(0.0, 50.0))
def test_split_delay_adds_up(period: float, delay: float) -> None:
    whole, fraction = split_delay(delay * period, period)
    assert 0.0 <= fraction < 1.0
    assert whole + fraction == pytest.approx(delay, abs=1.1e-9)


def test_impossible_delay_or_period_is_named() -> None:
    for delay_s, period_s, name in ((-1e-6, 1e-3, "delay_s"), (0.0, 0.0, "period_s")):
        with pytest.raises(OutOfRangeError) as caught:
            sample(state_space(P0), period_s, delay_s)
        assert caught.value.name == name


# -------------------------------------------------------------------------------- recursion


def test_sampled_reference_plant() -> None:
    """m .05, b .4, k 200, T .2 ms, delay 1.35 T: closed form to 40 digits."""
    sampled = sample(state_space(P0), PERIOD_S, 1.35 * PERIOD_S)
    numerator, denominator = pulse_transfer(sampled)
    np.testing.assert_allclose(
        denominator[:3], [1.0, -1.99824140938098306, 0.998401279317606313], rtol=1e-14
    )
    assert denominator[3:].tolist() == [0.0, 0.0]
    np.testing.assert_allclose(
        numerator,
        [1.6894047692745272e-7, 5.8147849010314428e-7, 4.8930716085662041e-8],
        rtol=1e-12,
    )
    value, _ = plant_response(sampled, delta_of(0.3 / PERIOD_S, PERIOD_S), sampled.c_position)
    assert complex(value) == pytest.approx(
        -7.5639504274415959e-6 + 4.6355512564828311e-6j, rel=1e-13
    )


def test_double_integrator_with_a_fraction() -> None:
    """T^2/2m [(1-f)^2, 1 + 2f - 2f^2, f^2]; swapped vectors would reverse it."""
    sampled = sample(state_space(Plant(mass=1.0)), 1.0, 1.35)
    numerator, denominator = pulse_transfer(sampled)
    np.testing.assert_allclose(2.0 * numerator, [0.4225, 1.455, 0.1225], rtol=1e-13)
    assert denominator.tolist() == [1.0, -2.0, 1.0, 0.0, 0.0]


@pytest.mark.parametrize(
    ("fraction", "zeros"),
    [(0.0, [-1.0]), (0.35, [-3.35742899, -0.08635799]), (0.5, [-5.828427, -0.171573])],
)
def test_sampling_zeros_of_the_double_integrator(fraction: float, zeros: list[float]) -> None:
    numerator, _ = pulse_transfer(sample(state_space(Plant(mass=1.0)), 1.0, fraction))
    assert np.sort(np.roots(numerator).real) == pytest.approx(sorted(zeros), abs=6e-7)


def closed_form_numerator(plant: Plant, period_s: float, fraction: float) -> list[float]:
    """b0, b1, b2 from the continuous step response, with the fourth sum as self-test."""
    with mp.workdps(60):
        m, b, k, t, f = (
            mp.mpf(v) for v in (plant.mass, plant.damping, plant.stiffness, period_s, fraction)
        )
        rate = b / (2 * m)
        wd = mp.sqrt(k / m - rate**2)

        def step(x: Any) -> Any:
            return (1 - mp.exp(-rate * x) * (mp.cos(wd * x) + rate / wd * mp.sin(wd * x))) / k

        s = [mp.mpf(0)] + [step((j - f) * t) for j in range(1, 5)]
        h = [mp.mpf(0)] + [s[j] - s[j - 1] for j in range(1, 5)]
        a1, a2 = -2 * mp.exp(-rate * t) * mp.cos(wd * t), mp.exp(-2 * rate * t)
        assert abs(h[4] + a1 * h[3] + a2 * h[2]) < mp.mpf(10) ** -50
        return [float(mp.re(v)) for v in (h[1], h[2] + a1 * h[1], h[3] + a1 * h[2] + a2 * h[1])]


@pytest.mark.parametrize("fraction", [0.01, 0.35, 0.5, 0.99])
@pytest.mark.parametrize("damping", [0.0, 0.4, 3.0, 30.0])
def test_numerator_agrees_with_the_step_response(damping: float, fraction: float) -> None:
    """The delay as one double for both: its fraction is what the division leaves."""
    plant = replace(P0, damping=damping)
    period_s = 5e-3
    delay_s = (2.0 + fraction) * period_s
    sampled = sample(state_space(plant), period_s, delay_s)
    numerator, denominator = pulse_transfer(sampled)
    expected = closed_form_numerator(plant, period_s, sampled.fraction)
    # A numerator that is small beside the others is a difference of theirs.
    np.testing.assert_allclose(numerator, expected, rtol=1e-12, atol=1e-14 * max(expected))
    assert denominator.size == 3 + 3


def test_no_fraction_leaves_no_older_output() -> None:
    for delay in (0.0, 1.0, 4.0):
        sampled = sample(state_space(PLANTS["modes and lags"]), PERIOD_S, delay * PERIOD_S)
        assert not sampled.gamma1.any()
        assert sampled.whole_delay == delay


@pytest.mark.parametrize("name", PLANTS)
def test_recursion_follows_the_continuous_plant(name: str) -> None:
    """Random held outputs: the recursion against piece after piece of the continuous plant."""
    space = state_space(PLANTS[name])
    period_s, fraction, whole = 1e-4, 0.3, 2
    sampled = sample(space, period_s, (whole + fraction) * period_s)
    rng = np.random.default_rng(3)
    u, force = rng.normal(size=40), rng.normal(size=40)
    by_samples = np.zeros(len(space.names))
    by_pieces = by_samples.copy()
    pieces = [propagate(space, fraction * period_s), propagate(space, (1 - fraction) * period_s)]
    for k in range(40):
        new = u[k - whole] if k >= whole else 0.0
        old = u[k - whole - 1] if k > whole else 0.0
        by_samples = (
            by_samples
            + sampled.psi @ by_samples
            + sampled.gamma0 * new
            + sampled.gamma1 * old
            + sampled.gamma_force * force[k]
        )
        for (psi, push, shove), held in zip(pieces, (old, new), strict=True):
            by_pieces = by_pieces + psi @ by_pieces + push * held + shove * force[k]
    np.testing.assert_allclose(by_samples, by_pieces, rtol=1e-10, atol=1e-12 * abs(by_pieces).max())


def test_rows_are_those_of_the_continuous_plant() -> None:
    space = state_space(PLANTS["modes and lags"])
    sampled = sample(space, PERIOD_S, 0.0)
    for name in ("c_position", "c_measured", "c_main_position", "c_main_velocity", "c_current"):
        assert getattr(sampled, name) is getattr(space, name)
    assert sampled.d_current == space.d_current
    with pytest.raises(ValueError, match="read-only"):
        sampled.psi[0, 0] = 1.0


# -------------------------------------------------------------------------------- response


def exact_response(space: StateSpace, period_s: float, delay_s: float, row: Any) -> Any:
    """Response and slope (a central difference) as a function of z - 1, to 30 digits."""
    n = len(space.names)
    with mp.workdps(60):
        t, delay = mp.mpf(period_s), mp.mpf(delay_s)
        d = int(delay / t)
        fraction = delay / t - d
        a, b = mp.matrix(space.a.tolist()), mp.matrix(space.b.tolist())

        def parts(time_s: Any) -> Any:
            big = mp.zeros(n + 1)
            big[:n, :n], big[:n, n] = a * time_s, b * time_s
            full = mp.expm(big, method="taylor")
            return full[:n, :n], full[:n, n]

        phi, _ = parts(t)
        rest, gamma0 = parts((1 - fraction) * t)
        gamma1 = rest * parts(fraction * t)[1]

    def value(z: Any) -> Any:
        states = mp.lu_solve(z * mp.eye(n) - phi, gamma0 * z**-d + gamma1 * z ** (-d - 1))
        return sum(mp.mpf(float(row[i])) * states[i] for i in range(n))

    def value_and_slope(delta: complex) -> tuple[complex, complex]:
        with mp.workdps(60):
            z = 1 + mp.mpc(delta)
            h = mp.mpf(10) ** -20
            low, high = value(z - h), value(z + h)
            return complex(value(z)), complex((high - low) / (2 * h))

    return value_and_slope


@pytest.mark.parametrize("delay", [0.0, 0.6, 2.35])
@pytest.mark.parametrize("name", PLANTS)
def test_response_and_slope_to_eleven_digits(name: str, delay: float) -> None:
    space = state_space(PLANTS[name])
    on_circle = delta_of(np.array([1e-6, 1e-3, 0.3, 3.1]), 1.0)
    deltas = np.concatenate([on_circle, [-3.7, -0.6 + 0.2j]])
    for period_s in (1e-5, PERIOD_S, 1e-2):
        sampled = sample(space, period_s, delay * period_s)
        row = sampled.c_measured
        exactly = exact_response(space, period_s, delay * period_s, row)
        value, slope = plant_response(sampled, deltas, row)
        for at, delta in enumerate(deltas):
            g, dg = exactly(complex(delta))
            assert abs(value[at] - g) <= 1e-11 * abs(g), (period_s, delta)
            assert abs(slope[at] - dg) <= 1e-11 * abs(dg), (period_s, delta)


def test_response_keeps_the_shape_of_its_points() -> None:
    sampled = sample(state_space(P0), PERIOD_S, 0.0)
    value, slope = plant_response(sampled, np.full((2, 3), 0.1 + 0.1j), sampled.c_position)
    assert value.shape == slope.shape == (2, 3)
    single, _ = plant_response(sampled, 0.1 + 0.1j, sampled.c_position)
    assert single.shape == ()
    assert complex(single) == complex(value[1, 2])


def test_response_at_a_pole_is_refused() -> None:
    sampled = sample(state_space(Plant(mass=1.0)), 1.0, 0.0)
    with pytest.raises(OutOfRangeError, match="pole"):
        plant_response(sampled, np.array([0.5, 0.0]), sampled.c_position)


def test_response_is_the_sum_of_aliases() -> None:
    """G(e^jwT) = (1/T) sum over n of hold x delay x P at w + 2 pi n/T: no matrix in it."""
    sampled = sample(state_space(P0), PERIOD_S, 1.35 * PERIOD_S)
    omega = 0.3 / PERIOD_S
    n = np.arange(-200000, 200001)
    w = omega + 2.0 * math.pi * n / PERIOD_S
    hold = (1.0 - np.exp(-1j * w * PERIOD_S)) / (1j * w)
    p = 1.0 / (P0.stiffness - P0.mass * w**2 + 1j * P0.damping * w)
    total = np.sum(hold * np.exp(-1j * w * 1.35 * PERIOD_S) * p) / PERIOD_S
    value, _ = plant_response(sampled, delta_of(omega, PERIOD_S), sampled.c_position)
    assert complex(value) == pytest.approx(complex(total), rel=1e-9)


def test_slow_sine_sees_the_continuous_plant() -> None:
    """Far below the sample rate: continuous plant x hold x delay."""
    for name in ("P0", "coil with inductance", "modes and lags"):
        plant = PLANTS[name]
        sampled = sample(state_space(plant), 1e-5, 1.4e-5)
        omega = np.geomspace(1.0, 100.0, 9)
        lag = np.exp(-1j * omega * 1.4e-5) * (-np.expm1(-1j * omega * 1e-5)) / (1j * omega * 1e-5)
        value, _ = plant_response(sampled, delta_of(omega, 1e-5), sampled.c_measured)
        expected = frequency_response(plant, omega, measured=True) * lag
        np.testing.assert_allclose(value, expected, rtol=1e-7)


def test_response_agrees_with_python_control() -> None:
    import control

    plant = PLANTS["coil with inductance"]
    space = state_space(plant)
    n = len(space.names)
    held = control.StateSpace(
        space.a, space.b[:, np.newaxis], space.c_position[np.newaxis, :], np.zeros((1, 1))
    ).sample(PERIOD_S, method="zoh")
    sampled = sample(space, PERIOD_S, 2.0 * PERIOD_S)
    omega = np.geomspace(1.0, 3.0, 7) * 1e3
    z = np.exp(1j * omega * PERIOD_S)
    value, _ = plant_response(sampled, delta_of(omega, PERIOD_S), sampled.c_position)
    np.testing.assert_allclose(value, held(z) / z**2, rtol=1e-9)
    assert n == 3


def test_points_of_the_circle_keep_their_small_real_part() -> None:
    omega = np.array([1e-9, 1e-3, 0.5, 3.0])
    for x, got in zip(omega, delta_of(omega, 1.0), strict=True):
        with mp.workdps(40):
            expected = complex(mp.expj(mp.mpf(float(x))) - 1)
        assert got.real == pytest.approx(expected.real, rel=1e-15)
        assert got.imag == pytest.approx(expected.imag, rel=1e-15)


# -------------------------------------------------------------------------------- small facts


def test_stability_triangle_agrees_with_the_roots() -> None:
    rng = np.random.default_rng(11)
    pairs = rng.uniform([-2.5, -1.5], [2.5, 1.5], size=(2000, 2))
    for a1, a2 in pairs:
        roots = np.abs(np.roots([1.0, a1, a2]))
        if abs(roots.max() - 1.0) > 1e-9:
            assert in_stability_triangle(float(a1), float(a2)) == bool(roots.max() < 1.0)


@given(st.floats(0.01, 3.1), st.floats(0.1, 10.0), st.floats(0.1, 10.0))
def test_matched_frequency_is_exact(angle: float, zero: float, pole: float) -> None:
    b0, b1, a1 = tustin_section((1.0, zero), (2.0, pole), period_s=0.5, match_rad_per_s=2.0 * angle)
    z, s = np.exp(1j * angle), 2j * angle
    assert (b0 * z + b1) / (z + a1) == pytest.approx((s + zero) / (2.0 * s + pole), rel=1e-9)


def test_sections_refuse_what_they_cannot_do() -> None:
    with pytest.raises(OutOfRangeError, match="half the sample rate"):
        tustin_section((1.0, 1.0), (1.0, 2.0), period_s=1.0, match_rad_per_s=3.2)
    with pytest.raises(OutOfRangeError, match="no coefficient of 0"):
        matched_section((1.0, 0.0), (1.0, 2.0), period_s=1.0)
    with pytest.raises(OutOfRangeError, match="period_s"):
        hold_phase_lag_rad(1.0, 0.0)


@given(st.floats(0.1, 5.0), st.floats(0.1, 5.0))
def test_matched_section_keeps_pole_zero_and_gain_at_rest(zero: float, pole: float) -> None:
    b0, b1, a1 = matched_section((2.0, 2.0 * zero), (1.0, pole), period_s=0.3)
    assert -b1 / b0 == pytest.approx(math.exp(-0.3 * zero), rel=1e-13)
    assert -a1 == pytest.approx(math.exp(-0.3 * pole), rel=1e-13)
    assert (b0 + b1) / (1.0 + a1) == pytest.approx(2.0 * zero / pole, rel=1e-12)
