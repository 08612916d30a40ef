"""The plant in continuous time against 50-digit arithmetic, python-control and hand calculation."""

from __future__ import annotations

import math
import pickle
from dataclasses import dataclass, replace
from typing import Any

import mpmath as mp
import numpy as np
import pytest

from plant2 import plant as pl
from plant2.errors import OutOfRangeError
from plant2.loopfile import loop_from_text
from plant2.plant import Plant

P0 = Plant(mass=0.05, damping=0.4, stiffness=200.0)
COIL = replace(P0, drive="voltage", force_constant=10.0, resistance_ohm=5.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class StandInMode:
    """The four facts of a mode, for tests that need no loop file."""

    frequency_rad_per_s: float
    damping_ratio: float
    mass: float
    sign: int


def a_mode(frequency_hz: float, damping_ratio: float, mass: float, sign: int) -> Any:
    return StandInMode(
        frequency_rad_per_s=2.0 * math.pi * frequency_hz,
        damping_ratio=damping_ratio,
        mass=mass,
        sign=sign,
    )


MODES = (a_mode(1400.0, 0.01, 0.9, -1), a_mode(2600.0, 0.02, 0.3, 1))

VARIANTS = {
    "P0": P0,
    "free mass": Plant(mass=0.05),
    "free mass with damping": Plant(mass=0.05, damping=0.4),
    "modes": replace(P0, modes=MODES),
    "current loop": replace(P0, current_bandwidth_rad_per_s=5e4),
    "sensor filter": replace(P0, sensor_corner_rad_per_s=1.2e5),
    "all lags": replace(
        P0, modes=MODES, current_bandwidth_rad_per_s=5e4, sensor_corner_rad_per_s=1.2e5
    ),
    "coil": COIL,
    "coil with inductance": replace(COIL, inductance_h=1e-3),
    "coil, all": replace(
        COIL, inductance_h=1e-3, back_emf=9.0, modes=MODES, sensor_corner_rad_per_s=1.2e5
    ),
    "coil, modes": replace(COIL, back_emf=9.0, modes=MODES),
    "coil on a free mass": replace(COIL, stiffness=0.0, damping=0.0),
}


# -------------------------------------------------------------------------------- fields


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("mass", 0.0),
        ("mass", -1.0),
        ("mass", math.nan),
        ("mass", math.inf),
        ("damping", -1e-9),
        ("damping", math.inf),
        ("stiffness", -1.0),
        ("rest_position", math.nan),
        ("bias_force", math.inf),
        ("friction", -1.0),
        ("travel", 0.0),
        ("travel", math.nan),
        ("force_constant", 0.0),
        ("force_constant", -10.0),
        ("resistance_ohm", 0.0),
        ("inductance_h", -1e-3),
        ("back_emf", -1.0),
        ("current_bandwidth_rad_per_s", 0.0),
        ("sensor_corner_rad_per_s", -1.0),
        ("motion", "sideways"),
        ("drive", "steam"),
    ],
)
def test_field_out_of_range_is_named(name: str, value: Any) -> None:
    with pytest.raises(OutOfRangeError) as caught:
        replace(P0, **{name: value})
    assert caught.value.name == name
    assert str(caught.value).startswith(name)
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


@pytest.mark.parametrize(
    ("name", "value"),
    [("frequency_rad_per_s", 0.0), ("damping_ratio", -0.1), ("mass", 0.0), ("sign", 2)],
)
def test_field_of_a_mode_is_named(name: str, value: float) -> None:
    bad = replace(MODES[1], **{name: value})
    with pytest.raises(OutOfRangeError) as caught:
        replace(P0, modes=(MODES[0], bad))
    assert caught.value.name == f"modes[1].{name}"


def test_voltage_drive_needs_a_resistance_and_has_no_current_loop() -> None:
    with pytest.raises(OutOfRangeError, match="resistance_ohm: must be given"):
        replace(P0, drive="voltage")
    with pytest.raises(OutOfRangeError, match="current_bandwidth_rad_per_s = 50000 rad/s"):
        replace(COIL, current_bandwidth_rad_per_s=5e4)


def test_rotary_units_stand_in_the_messages() -> None:
    with pytest.raises(OutOfRangeError, match="N m/rad"):
        Plant(motion="rotary", mass=1e-6, stiffness=-1.0)


# -------------------------------------------------------------------------------- state space


@pytest.mark.parametrize("plant", VARIANTS.values(), ids=VARIANTS.keys())
def test_state_space_agrees_with_the_modal_fractions(plant: Plant) -> None:
    """Two ways that share no code: the matrices, and the sum of fractions with the coil around."""
    space = pl.state_space(plant)
    n = len(space.names)
    assert space.a.shape == (n, n)
    # Higher up, a solution in unscaled states loses digits by itself.
    omega = np.geomspace(1.0, 1e5, 60)
    states = np.linalg.solve(
        1j * omega[:, np.newaxis, np.newaxis] * np.eye(n) - space.a,
        np.broadcast_to(space.b[:, np.newaxis].astype(complex), (omega.size, n, 1)),
    )[:, :, 0]
    for row, measured in ((space.c_position, False), (space.c_measured, True)):
        expected = pl.frequency_response(plant, omega, measured=measured)
        np.testing.assert_allclose(states @ row, expected, rtol=1e-8)


@pytest.mark.parametrize("plant", VARIANTS.values(), ids=VARIANTS.keys())
def test_python_control_objects_agree(plant: Plant) -> None:
    omega = np.geomspace(1.0, 1e4, 23)
    expected = pl.frequency_response(plant, omega)
    np.testing.assert_allclose(pl.transfer_function(plant)(1j * omega), expected, rtol=1e-8)
    np.testing.assert_allclose(pl.control_state_space(plant)(1j * omega), expected, rtol=1e-8)


@pytest.mark.parametrize("plant", VARIANTS.values(), ids=VARIANTS.keys())
def test_force_is_mass_times_acceleration_and_current_makes_it(plant: Plant) -> None:
    """Row by row: the main mass's equation with the force taken from the current row."""
    space = pl.state_space(plant)
    rng = np.random.default_rng(5)
    x, u, disturbance = rng.normal(size=len(space.names)), 0.7, 0.3
    velocity = float(space.c_main_velocity @ x)
    position = float(space.c_main_position @ x)
    current = float(space.c_current @ x) + space.d_current * u
    slope = space.a @ x + space.b * u + space.b_force * disturbance
    force = plant.force_constant * current
    assert plant.mass * float(space.c_main_velocity @ slope) == pytest.approx(
        force + disturbance - plant.damping * velocity - plant.stiffness * position, rel=1e-12
    )
    for number, mode in enumerate(plant.modes):
        at = 2 + 2 * number
        w = mode.frequency_rad_per_s
        assert mode.mass * slope[at + 1] == pytest.approx(
            force - mode.mass * (2 * mode.damping_ratio * w * x[at + 1] + w * w * x[at]), rel=1e-9
        )


def test_position_is_the_signed_sum() -> None:
    space = pl.state_space(VARIANTS["modes"])
    assert space.c_position.tolist() == [1.0, 0.0, -1.0, 0.0, 1.0, 0.0]
    assert space.names[2:4] == ("mode 1 position", "mode 1 velocity")


def test_arrays_of_the_state_space_are_read_only() -> None:
    space = pl.state_space(P0)
    for array in (space.a, space.b, space.b_force, space.c_position, space.c_current):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1.0


def test_coil_without_inductance_adds_damping_exactly() -> None:
    """Kf Ke/R beside the damper: 0.4 + 10 x 10/5 = 20.4 N s/m."""
    space = pl.state_space(COIL)
    assert pl.back_emf_damping(COIL) == 20.0
    assert pl.back_emf_damping(P0) == 0.0
    assert space.a[1, 1] == pytest.approx(-20.4 / 0.05, rel=1e-15)
    assert space.d_current == 0.2
    assert space.c_current.tolist() == [0.0, -2.0]


def test_poles_of_the_coil_with_inductance() -> None:
    """P0 with Kf = 10, R = 5, L = 1 mH: roots of the cubic found to 40 digits, and our matrix."""
    plant = replace(COIL, inductance_h=1e-3)
    poles = np.sort(np.linalg.eigvals(pl.state_space(plant).a).real)
    with mp.workdps(40):
        m, b, coil = mp.mpf("0.05"), mp.mpf("0.4"), mp.mpf("0.001")

        def cubic(s: Any) -> Any:
            return (coil * s + 5) * (m * s * s + b * s + 200) + 100 * s

        roots = [float(mp.findroot(cubic, near)) for near in (-4600, -400, -10)]
    np.testing.assert_allclose(poles, roots, rtol=1e-12)
    np.testing.assert_allclose(
        poles, [-4560.7939132135, -437.17532526185, -10.030761524638], rtol=1e-13
    )
    reduced = np.sort(np.linalg.eigvals(pl.state_space(COIL).a).real)
    assert reduced[0] == pytest.approx(-397.948, abs=5e-4)
    assert reduced[1] == pytest.approx(-10.0516, abs=5e-5)


def test_modes_take_no_power_that_the_coil_does_not_give() -> None:
    """A shorted coil only damps, whatever the signs of the modes at the sensor."""
    for signs in ((1, 1), (-1, 1), (-1, -1)):
        modes = tuple(replace(m, sign=s) for m, s in zip(MODES, signs, strict=True))
        free = replace(COIL, modes=tuple(replace(m, damping_ratio=0.0) for m in modes))
        assert np.linalg.eigvals(pl.state_space(free).a).real.max() < 0.0


def test_two_masses_in_modal_form() -> None:
    """Two free masses .035 and .015 kg, 400 Hz between them, in modes: frequency and zero.

    Force and sensor on the first mass; rigid 1/(m1 + m2), mode m2/(m1 (m1 + m2)).
    """
    m1, m2 = 0.035, 0.015
    mode = a_mode(400.0, 0.0, m1 * (m1 + m2) / m2, 1)
    plant = Plant(mass=m1 + m2, modes=(mode,))
    kc = (2.0 * math.pi * 400.0) ** 2 * m1 * m2 / (m1 + m2)
    omega = np.geomspace(10.0, 1e4, 25)
    s2 = -(omega**2)
    by_hand = (m2 * s2 + kc) / (s2 * (m1 * m2 * s2 + kc * (m1 + m2)))
    np.testing.assert_allclose(pl.frequency_response(plant, omega), by_hand, rtol=1e-10)
    zeros = pl.transfer_function(plant).zeros()
    assert float(np.abs(zeros).max()) / (2 * math.pi) == pytest.approx(
        math.sqrt(kc / m2) / (2 * math.pi), rel=1e-12
    )
    assert math.sqrt(kc / m2) / (2 * math.pi) == pytest.approx(334.664011, abs=5e-7)


@pytest.mark.parametrize(
    ("plant", "omega", "rule"),
    [
        (P0, -1.0, "at least 0"),
        (P0, math.nan, "at least 0"),
        (Plant(mass=1.0), 0.0, "no finite answer"),
        (Plant(mass=2.0, stiffness=50.0), 5.0, "no finite answer"),
    ],
)
def test_frequency_without_an_answer_is_named(plant: Plant, omega: float, rule: str) -> None:
    with pytest.raises(OutOfRangeError, match=rule) as caught:
        pl.frequency_response(plant, np.array([1.0, omega]))
    assert caught.value.name == "omega_rad_per_s"


def test_free_mass_on_a_coil_still_has_an_answer_where_it_drifts() -> None:
    plant = VARIANTS["coil on a free mass"]
    value = pl.frequency_response(plant, np.array([1e-6]))[0]
    # At low frequency the speed is u/Ke.
    assert value == pytest.approx(1.0 / (10.0 * 1e-6j), rel=1e-6)


# -------------------------------------------------------------------------------- at rest


@pytest.mark.parametrize("plant", VARIANTS.values(), ids=VARIANTS.keys())
def test_static_gain_is_the_response_at_rest(plant: Plant) -> None:
    gain = pl.static_gain(plant)
    if plant.stiffness == 0.0:
        assert gain is None
        return
    assert gain == pytest.approx(pl.frequency_response(plant, np.zeros(1))[0].real, rel=1e-14)
    space = pl.state_space(plant)
    assert gain == pytest.approx(-space.c_position @ np.linalg.solve(space.a, space.b), rel=1e-9)


@pytest.mark.parametrize("plant", VARIANTS.values(), ids=VARIANTS.keys())
def test_holding_effort_holds(plant: Plant) -> None:
    """With the effort and the constant force, the state that the equations leave at rest."""
    plant = replace(plant, rest_position=2e-4, bias_force=-0.3)
    target = -7e-4
    effort = pl.holding_effort(plant, target)
    space = pl.state_space(plant)
    pushed = space.b * effort + space.b_force * pl.constant_force(plant)
    if plant.stiffness == 0.0:
        # Nothing accelerates at any place, so any place is held.
        still = np.linalg.lstsq(space.a, -pushed, rcond=None)[0]
        np.testing.assert_allclose(space.a @ still + pushed, 0.0, atol=1e-9)
        assert abs(space.c_main_velocity @ still) < 1e-12
    else:
        still = np.linalg.solve(space.a, -pushed)
        assert float(space.c_position @ still) == pytest.approx(target, rel=1e-9)


def test_holding_effort_says_when_nothing_moves() -> None:
    mode = StandInMode(frequency_rad_per_s=10.0, damping_ratio=0.0, mass=2.0, sign=-1)
    with pytest.raises(OutOfRangeError, match="cancels"):
        pl.holding_effort(replace(P0, modes=(mode,)), 0.0)
    with pytest.raises(OutOfRangeError, match="position = inf m"):
        pl.holding_effort(P0, math.inf)


# -------------------------------------------------------------------------------- free motion


def exact_free_motion(plant: Plant, x0: float, v0: float, t: float) -> list[float]:
    """Position, velocity and the scale of each, to 50 digits.

    A scale is the sum of the magnitudes of the terms between which a true zero crossing arises.
    """
    # Digits for the cancellation near critical damping, and for that of a fast root long gone.
    lost = 2.0 * (0.5 * plant.damping / plant.mass) * t / math.log(10.0)
    with mp.workdps(90 + int(min(lost, 600.0))):
        m, b, k, time = (mp.mpf(v) for v in (plant.mass, plant.damping, plant.stiffness, t))
        rate, disc = b / (2 * m), b * b - 4 * m * k
        root = mp.sqrt(disc) / (2 * m)
        if disc == 0:
            c, s = mp.exp(-rate * time), time * mp.exp(-rate * time)
        else:
            up, down = mp.exp((root - rate) * time), mp.exp((-root - rate) * time)
            c, s = mp.re((up + down) / 2), mp.re((up - down) / (2 * root))
        x = x0 * (c + rate * s) + v0 * s
        v = v0 * (c - rate * s) - x0 * k / m * s
        if disc < 0:
            still = moving = abs(c) + abs(rate * s)
        else:
            slow = k / m / (rate + root) if k else mp.mpf(0)
            still = c + rate * s
            moving = mp.exp((-root - rate) * time) + slow * s
        x_scale = abs(x0) * still + abs(v0 * s)
        v_scale = abs(v0) * moving + abs(x0 * k / m * s)
        return [float(x), float(v), float(x_scale), float(v_scale)]


NEAR_CRITICAL = [1.0 + sign * 10.0**-n for n in range(3, 16, 2) for sign in (-1, 1)]
RATIOS = [0.0, 1e-6, 0.02, 0.3, 0.9, 1.0, *NEAR_CRITICAL, 1.5, 30.0, 1e4]


@pytest.mark.parametrize("ratio", RATIOS)
def test_free_motion_to_twelve_digits(ratio: float) -> None:
    plant = Plant(mass=0.05, damping=2.0 * ratio * math.sqrt(0.05 * 200.0), stiffness=200.0)
    check_free_motion(plant, pl.natural_frequency_rad_per_s(plant))


@pytest.mark.parametrize("damping", [0.0, 1e-9, 0.4, 300.0])
def test_free_motion_of_a_free_mass(damping: float) -> None:
    check_free_motion(Plant(mass=0.05, damping=damping), 60.0)


def check_free_motion(plant: Plant, frequency: float) -> None:
    times = np.array([0.0, 1e-6, 1e-3, 0.3, 1.0, math.pi, 4.7, 33.0, 600.0, 2e4]) / frequency
    for x0, v0 in ((1e-3, 0.0), (0.0, 0.2), (1e-3, 0.2), (1e-3, -0.2), (-2e-3, 0.05)):
        position, velocity = pl.free_motion(plant, x0, v0, times)
        for at, t in enumerate(times):
            x, v, x_scale, v_scale = exact_free_motion(plant, x0, v0, float(t))
            tiny = 1e-300  # below this doubles lose digits by themselves
            assert abs(position[at] - x) <= 1e-13 * x_scale + tiny, (x0, v0, t)
            assert abs(velocity[at] - v) <= 1e-13 * v_scale + tiny, (x0, v0, t)


def test_exactly_critical_motion() -> None:
    plant = Plant(mass=1.0, damping=2.0, stiffness=1.0)
    position, velocity = pl.free_motion(plant, 1.0, 0.0, np.array([0.0, 2.0]))
    np.testing.assert_allclose(position, [1.0, 3.0 * math.exp(-2.0)], rtol=1e-15)
    np.testing.assert_allclose(velocity, [0.0, -2.0 * math.exp(-2.0)], rtol=1e-15)


def test_free_motion_keeps_the_shape_of_its_times() -> None:
    position, velocity = pl.free_motion(P0, 1.0, 0.0, np.zeros((2, 3)))
    assert position.shape == velocity.shape == (2, 3)
    with pytest.raises(OutOfRangeError, match="time_s = -1 s"):
        pl.free_motion(P0, 1.0, 0.0, np.array([0.0, -1.0]))
    with pytest.raises(OutOfRangeError, match="velocity0"):
        pl.free_motion(P0, 1.0, math.nan, 0.0)


def test_amplitude_and_phase_rebuild_the_motion() -> None:
    amplitude, phase = pl.free_amplitude_and_phase(P0, 1e-3, -0.02)
    t = np.linspace(0.0, 0.5, 50)
    rebuilt = (
        amplitude
        * np.exp(-0.5 * 0.4 / 0.05 * t)
        * np.sin(pl.damped_frequency_rad_per_s(P0) * t + phase)
    )
    np.testing.assert_allclose(rebuilt, pl.free_motion(P0, 1e-3, -0.02, t)[0], atol=1e-16)


def test_peak_of_a_kick_is_the_largest_position() -> None:
    for ratio in (0.0, 0.4, 1.0, 3.0):
        plant = Plant(mass=1.0, damping=2.0 * ratio, stiffness=1.0)
        position, _ = pl.free_motion(plant, 0.0, 2.0, np.linspace(0.0, 4.0, 400001))
        assert position.max() == pytest.approx(pl.peak_of_kick(plant, 2.0), rel=1e-9)


def test_friction_takes_four_levels_over_the_spring_per_cycle() -> None:
    """Half swings about shifted centres, one after the other."""
    plant = Plant(mass=0.05, stiffness=200.0, friction=0.03)
    shift = plant.friction / plant.stiffness
    amplitude = 1e-3
    for _ in range(2):
        amplitude = (amplitude - shift) - shift
    assert 1e-3 - amplitude == pytest.approx(pl.amplitude_loss_per_cycle(plant), rel=1e-12)
    assert pl.friction_of_amplitude_loss(plant, 1e-3 - amplitude) == pytest.approx(0.03, rel=1e-12)


# -------------------------------------------------------------------------------- figures


@pytest.mark.parametrize(
    ("damping", "stiffness", "expected"),
    [
        (0.0, 0.0, "free mass"),
        (1.0, 0.0, "free mass with damping"),
        (0.0, 1.0, "undamped"),
        (1.0, 1.0, "underdamped"),
        (2.0, 1.0, "critically damped"),
        (3.0, 1.0, "overdamped"),
        (2.0 - 1e-12, 1.0, "underdamped"),
        (2.0 + 1e-12, 1.0, "overdamped"),
    ],
)
def test_regime(damping: float, stiffness: float, expected: str) -> None:
    assert pl.regime(Plant(mass=1.0, damping=damping, stiffness=stiffness)) == expected


def test_decimal_critical_damping_counts_as_critical() -> None:
    for mass, stiffness in ((0.1, 3.7), (0.048, 2400.0), (1.1e-6, 7e-3)):
        plant = Plant(mass=mass, stiffness=stiffness)
        assert pl.regime(replace(plant, damping=pl.critical_damping(plant))) == "critically damped"


def test_ringing_and_poles_lead_back_to_the_plant() -> None:
    ringing = pl.plant_of_ringing(
        mass=P0.mass,
        damped_period_s=2.0 * math.pi / pl.damped_frequency_rad_per_s(P0),
        decrement=pl.log_decrement(P0),
    )
    poles = np.linalg.eigvals(pl.state_space(P0).a)
    by_poles = pl.plant_of_poles(mass=P0.mass, pole1=complex(poles[0]), pole2=complex(poles[1]))
    for plant in (ringing, by_poles):
        assert plant.damping == pytest.approx(P0.damping, rel=1e-12)
        assert plant.stiffness == pytest.approx(P0.stiffness, rel=1e-12)
    assert pl.damping_ratio_of_log_decrement(pl.log_decrement(P0)) == pytest.approx(
        pl.damping_ratio(P0), rel=1e-14
    )


def test_impossible_poles_are_refused() -> None:
    with pytest.raises(OutOfRangeError, match="mirror"):
        pl.plant_of_poles(mass=1.0, pole1=-1 + 1j, pole2=-1 + 2j)
    with pytest.raises(OutOfRangeError, match="mirror"):
        pl.plant_of_poles(mass=1.0, pole1=-1 + 1j, pole2=-2 - 1j)
    with pytest.raises(OutOfRangeError, match=r"pole1\.real"):
        pl.plant_of_poles(mass=1.0, pole1=1 + 1j, pole2=1 - 1j)


def test_decay_time_of_an_overdamped_plant_is_the_slow_one() -> None:
    plant = pl.plant_of_poles(mass=0.05, pole1=-3.0 + 0j, pole2=-4000.0 + 0j)
    assert pl.decay_time_s(plant) == pytest.approx(1.0 / 3.0, rel=1e-14)
    assert pl.decay_time_s(P0) == 0.25
    assert pl.decay_time_s(replace(P0, damping=0.0)) == math.inf
    assert pl.damped_frequency_rad_per_s(plant) == 0.0


@pytest.mark.parametrize(
    "figure",
    [
        pl.damping_ratio,
        pl.decay_time_s,
        pl.quality_factor,
        pl.amplitude_loss_per_cycle,
        pl.half_power_frequencies_rad_per_s,
        pl.ramp_lag_s,
        lambda plant: pl.peak_of_kick(plant, 1.0),
        lambda plant: pl.friction_of_amplitude_loss(plant, 1.0),
    ],
)
def test_free_mass_has_no_such_figure(figure: Any) -> None:
    with pytest.raises(OutOfRangeError, match="free mass") as caught:
        figure(Plant(mass=1.0, damping=1.0))
    assert caught.value.name == "stiffness"


@pytest.mark.parametrize(
    "figure", [pl.log_decrement, lambda plant: pl.free_amplitude_and_phase(plant, 1.0, 0.0)]
)
def test_figure_of_ringing_needs_a_swing(figure: Any) -> None:
    with pytest.raises(OutOfRangeError, match="does not swing"):
        figure(Plant(mass=1.0, damping=2.0, stiffness=1.0))


def test_resonance_and_half_power_lie_on_the_response() -> None:
    plant = Plant(mass=0.05, damping=1.0, stiffness=200.0)
    peak = pl.resonance_peak(plant)
    assert peak is not None
    at_peak = abs(pl.frequency_response(plant, np.array([peak.frequency_rad_per_s]))[0])
    around = np.abs(
        pl.frequency_response(plant, peak.frequency_rad_per_s * np.linspace(0.99, 1.01, 2001))
    )
    assert at_peak * plant.stiffness == pytest.approx(peak.magnification, rel=1e-12)
    assert around.max() <= at_peak * (1.0 + 1e-15)
    half = np.abs(
        pl.frequency_response(plant, np.array(pl.half_power_frequencies_rad_per_s(plant)))
    )
    np.testing.assert_allclose(half, at_peak / math.sqrt(2.0), rtol=1e-12)
    assert pl.resonance_peak(Plant(mass=1.0, damping=2.0, stiffness=1.0)) is None
    assert pl.resonance_peak(Plant(mass=1.0)) is None
    undamped = pl.resonance_peak(Plant(mass=1.0, stiffness=4.0))
    assert undamped == pl.ResonancePeak(frequency_rad_per_s=2.0, magnification=math.inf)


def test_half_power_needs_a_resonance() -> None:
    for damping in (0.0, 2.0 * math.sin(math.pi / 8.0)):
        with pytest.raises(OutOfRangeError, match=r"below 0\.3827"):
            pl.half_power_frequencies_rad_per_s(Plant(mass=1.0, damping=damping, stiffness=1.0))


def test_forced_motion_agrees_with_the_response() -> None:
    for omega in (0.0, 10.0, 63.0, 500.0):
        response = pl.frequency_response(P0, np.array([omega]))[0]
        assert pl.forced_amplitude(P0, force=3.0, omega_rad_per_s=omega) == pytest.approx(
            3.0 * abs(response), rel=1e-13
        )
        assert pl.forced_phase_rad(P0, omega_rad_per_s=omega) == pytest.approx(
            -np.angle(response), rel=1e-13
        )
    with pytest.raises(OutOfRangeError, match="infinite"):
        pl.forced_amplitude(Plant(mass=1.0, stiffness=4.0), force=1.0, omega_rad_per_s=2.0)
    with pytest.raises(OutOfRangeError, match="undamped"):
        pl.damping_ratio_of_magnification(frequency_ratio=0.5, magnification=2.0)


# -------------------------------------------------------------------------------- standard step


def step_at(ratio: float, time: float) -> Any:
    """Standard unit step to 40 digits."""
    z, t = mp.mpf(ratio), mp.mpf(time)
    root = mp.sqrt(z * z - 1)
    if root == 0:
        return 1 - mp.exp(-t) * (1 + t)
    s1, s2 = -z + root, -z - root
    return mp.re(1 - (s1 * mp.exp(s2 * t) - s2 * mp.exp(s1 * t)) / (s1 - s2))


@pytest.mark.parametrize("ratio", [0.05, 0.3, 0.5, 0.8, 0.999999, 1.0, 1.2, 40.0])
def test_step_figures_to_ten_digits(ratio: float) -> None:
    with mp.workdps(40):
        guess = pl.rise_time_ratio(ratio)
        t10 = mp.findroot(lambda t: step_at(ratio, t) - mp.mpf("0.1"), 0.5 + 0.05 * ratio)
        t90 = mp.findroot(lambda t: step_at(ratio, t) - mp.mpf("0.9"), float(t10) + guess)
        assert guess == pytest.approx(float(t90 - t10), rel=1e-10)
        for band in (0.05, 0.01):
            settled = pl.settling_ratio(ratio, band)
            edge = abs(step_at(ratio, settled) - 1)
            assert float(edge) == pytest.approx(band, rel=1e-10)
            later = [abs(step_at(ratio, settled * (1 + 0.003 * n)) - 1) for n in range(1, 2000)]
            assert max(later) < band
        if ratio < 1.0:
            peak = step_at(ratio, math.pi / math.sqrt(1.0 - ratio**2)) - 1
            assert pl.overshoot(ratio) == pytest.approx(float(peak), rel=1e-9)
        else:
            assert pl.overshoot(ratio) == 0.0
        slope = mp.findroot(
            lambda t: mp.diff(lambda x: step_at(ratio, x), t, 2),
            math.log(2 * ratio) / ratio if ratio > 5.0 else 1.0,
        )
        steepest = mp.diff(lambda x: step_at(ratio, x), slope)
        assert pl.steepest_rise_ratio(ratio) == pytest.approx(float(1 / steepest), rel=1e-9)


def test_step_of_half_damping() -> None:
    """Numbers computed to 16 digits for w0 = 1, z = 1/2."""
    assert pl.overshoot(0.5) == pytest.approx(0.1630335348215805, rel=1e-14)
    assert pl.settling_ratio(0.5, 0.02) == pytest.approx(8.076348973927997, rel=1e-13)
    assert pl.rise_time_ratio(0.5) == pytest.approx(1.637572947328348, rel=1e-13)


@pytest.mark.parametrize(
    ("band", "ratio", "settled"),
    [
        (0.05, 0.69010673056, 2.85907061329),
        (0.02, 0.779703267412, 3.60248457484),
        (0.01, 0.826085054614, 4.19161150402),
        (0.005, 0.860159851441, None),
        (0.001, 0.91028187401, None),
    ],
)
def test_fastest_damping_stands_on_a_cliff(
    band: float, ratio: float, settled: float | None
) -> None:
    fastest = pl.fastest_damping_ratio(band)
    assert fastest == pytest.approx(ratio, rel=1e-11)
    here = pl.settling_ratio(fastest, band)
    if settled is not None:
        assert here == pytest.approx(settled, rel=1e-11)
    for other in np.linspace(0.5, 1.2, 29):
        assert pl.settling_ratio(float(other), band) >= here
    below = pl.settling_ratio(fastest - 1e-9, band)
    exit_at = math.pi / math.sqrt(1.0 - fastest**2)
    assert exit_at < below < exit_at * (1.0 + 1e-3)


def test_bandwidth_and_phase_margin_are_on_the_response() -> None:
    for ratio in (0.0, 0.1, 0.7, 1.0, 5.0, 1e5):
        w = pl.bandwidth_ratio(ratio)
        with mp.workdps(40):
            size = abs(1 / (1 - mp.mpf(w) ** 2 + 2j * mp.mpf(ratio) * mp.mpf(w)))
            assert float(size) == pytest.approx(math.sqrt(0.5), rel=1e-14)
            wc = mp.sqrt(mp.sqrt(1 + 4 * mp.mpf(ratio) ** 4) - 2 * mp.mpf(ratio) ** 2)
            margin = mp.atan2(2 * mp.mpf(ratio), wc)
            assert pl.phase_margin_rad(ratio) == pytest.approx(float(margin), rel=1e-14)


@pytest.mark.parametrize(
    ("call", "name"),
    [
        (lambda: pl.overshoot(-0.1), "damping_ratio"),
        (lambda: pl.rise_time_ratio(-0.1), "damping_ratio"),
        (lambda: pl.settling_ratio(0.0, 0.02), "damping_ratio"),
        (lambda: pl.settling_ratio(0.5, 1.0), "band"),
        (lambda: pl.fastest_damping_ratio(0.0), "band"),
        (lambda: pl.damping_ratio_of_overshoot(0.0), "fraction"),
        (lambda: pl.bandwidth_ratio(math.nan), "damping_ratio"),
        (lambda: pl.phase_margin_rad(-1.0), "damping_ratio"),
        (lambda: pl.steepest_rise_ratio(-1.0), "damping_ratio"),
        (lambda: pl.log_decrement_of_amplitudes(first=0.0, last=1.0, cycles=1.0), "first"),
        (lambda: pl.damping_ratio_of_log_decrement(-1.0), "decrement"),
        (lambda: pl.coil_force_constant(flux_density_t=0.0, length_m=1.0), "flux_density_t"),
        (lambda: pl.conductor_length_m(turns=1.0, mean_diameter_m=0.0), "mean_diameter_m"),
    ],
)
def test_argument_out_of_range_is_named(call: Any, name: str) -> None:
    with pytest.raises(OutOfRangeError) as caught:
        call()
    assert caught.value.name == name


# -------------------------------------------------------------------------------- loop file, units

LINEAR = """
[loop]
name = "stage"
about = "a stage"
[plant]
motion = "linear"
mass = "50 g"
damping = "0.4 N*s/m"
stiffness = "200 N/m"
travel = "1.5 mm"
rest_position = "0.1 mm"
bias_force = "0.2 N"
friction = "3 mN"
[[plant.mode]]
frequency = "1.4 kHz"
damping_ratio = 0.01
mass = "0.9 kg"
sign = -1
[actuator]
drive = "current"
force_constant = "10 N/A"
full_scale = "4 A"
bits = 12
limit = "3 A"
bandwidth = "8 kHz"
[sensor]
full_scale = "2 mm"
bits = 14
filter_corner = "20 kHz"
[processor]
core = "host"
sample_rate = "5 kHz"
delay = "270 us"
word = 32
[aim]
law = "pd"
damping_ratio = 0.8
bandwidth = "60 Hz"
[check]
step = "0.1 mm"
"""

ROTARY_VOLTAGE = """
[loop]
name = "mirror"
about = "a mirror"
[plant]
motion = "rotary"
inertia = "0.9 g*cm**2"
damping = "1.6 uN*m*s/rad"
stiffness = "18 mN*m/rad"
[actuator]
drive = "voltage"
torque_constant = "5.5 mN*m/A"
resistance = "4 ohm"
inductance = "50 uH"
full_scale = "10 V"
bits = 14
coding = "unsigned"
zero_code = 8190
polarity = -1
limit = "9 V"
[sensor]
full_scale = "14 deg"
bits = 16
coding = "unsigned"
zero_count = 32770
polarity = -1
[processor]
core = "host"
sample_rate = "50 kHz"
delay = "9 us"
word = 32
[aim]
law = "pd"
damping_ratio = 0.8
bandwidth = "300 Hz"
[check]
step = "0.5 deg"
"""


def test_plant_of_a_loop_file() -> None:
    plant = pl.plant_of(loop_from_text(LINEAR))
    assert plant == Plant(
        mass=0.05,
        damping=0.4,
        stiffness=200.0,
        modes=plant.modes,
        rest_position=1e-4,
        bias_force=0.2,
        friction=0.003,
        travel=1.5e-3,
        force_constant=10.0,
        back_emf=10.0,
        current_bandwidth_rad_per_s=2.0 * math.pi * 8e3,
        sensor_corner_rad_per_s=2.0 * math.pi * 20e3,
    )
    assert plant.modes[0].sign == -1
    assert plant.modes[0].frequency_rad_per_s == pytest.approx(2.0 * math.pi * 1400.0, rel=1e-15)
    assert len(pl.state_space(plant).names) == 6


def test_plant_of_a_rotary_loop_file_with_voltage_drive() -> None:
    plant = pl.plant_of(loop_from_text(ROTARY_VOLTAGE))
    assert (plant.motion, plant.drive) == ("rotary", "voltage")
    assert plant.mass == pytest.approx(9e-8, rel=1e-14)
    assert plant.resistance_ohm == 4.0
    assert plant.inductance_h == pytest.approx(5e-5, rel=1e-15)
    assert plant.back_emf == pytest.approx(5.5e-3, rel=1e-15)
    assert plant.current_bandwidth_rad_per_s is None
    assert plant.travel == pytest.approx(math.radians(14.0), rel=1e-3)


def test_chain_of_units_by_hand() -> None:
    links = pl.unit_chain(loop_from_text(LINEAR))
    assert [(link.from_unit, link.to_unit) for link in links] == [
        ("m", "count"),
        ("count", "code"),
        ("code", "A"),
        ("A", "N"),
    ]
    per_m, per_count, per_code, per_a = (link.factor for link in links)
    assert per_m == pytest.approx(8192.0 / 2e-3, rel=1e-15)
    assert per_code == pytest.approx(4.0 / 2048.0, rel=1e-15)
    assert per_a == 10.0
    # A gain of 1 N/m: counts to metres to newtons to codes.
    assert per_count == pytest.approx((2e-3 / 8192.0) / (10.0 * 4.0 / 2048.0), rel=1e-14)
    assert links[0].text == "count = 4.096e+06 x position [m]"
    assert links[3].text == "force [N] = 10 x current [A]"


def test_chain_of_units_with_offsets_and_reversed_converters() -> None:
    links = pl.unit_chain(loop_from_text(ROTARY_VOLTAGE))
    assert links[0].factor == pytest.approx(-32768.0 / math.radians(14.0), rel=1e-14)
    assert links[1].factor > 0.0  # reversed twice
    assert links[2].factor == pytest.approx(-10.0 / 8192.0, rel=1e-15)
    assert links[3].factor == pytest.approx(5.5e-3 / 4.0, rel=1e-15)
    assert links[0].text.startswith("count = 32770 - 134105 x angle [rad]")
    assert links[2].text.endswith("x (code - 8190)")
    assert links[3].text == "torque [N m] = 0.001375 x voltage [V], at standstill"


@pytest.mark.parametrize("text", [LINEAR, ROTARY_VOLTAGE], ids=["linear", "rotary voltage"])
def test_round_trip_closes_and_finds_every_wrong_link(
    text: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    loop = loop_from_text(text)
    assert pl.round_trip(loop) < 1e-15
    links = pl.unit_chain(loop)
    for at, link in enumerate(links):
        for wrong in (-1.0, 1000.0, 1.0 + 1e-9):
            bad = replace(link, factor=wrong * link.factor)
            chain = links[:at] + (bad,) + links[at + 1 :]
            monkeypatch.setattr(pl, "unit_chain", lambda _, chain=chain: chain)
            assert pl.round_trip(loop) > 0.9e-9
