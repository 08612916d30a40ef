"""Step figures of second-order systems as textbooks print them.

Rules of this file:

- The system is simulated as a motion and `step_figures` reads it; no formula for the figure is
  evaluated. Tolerance: half of the last printed digit, unless the line says what the book rounded.
- The source stands beside each case, with "from memory" where the book was not at hand.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from plant2.plant import Plant, state_space
from plant2.response import StepFigures, Trajectory, step_figures
from plant2.sampled import propagate


def motion(
    plant: Plant, effort: float, horizon_s: float, start: tuple[float, float] = (0.0, 0.0)
) -> Trajectory:
    """Motion of a plant under a constant effort, one lane."""
    space = state_space(plant)
    psi, gain, _ = propagate(space, horizon_s)
    begin = np.array(start)
    end = begin + psi @ begin + gain * effort
    return Trajectory(
        space=space,
        times_s=np.array([0.0, horizon_s]),
        states=np.array([[begin], [end]]),
        inputs=np.array([[effort]]),
        forces=np.zeros((1, 1)),
    )


def unit_step(zeta: float, omega_rad_per_s: float = 1.0, band: float = 0.02) -> StepFigures:
    """Step response of w^2/(s^2 + 2 zeta w s + w^2)."""
    plant = Plant(mass=1.0, damping=2.0 * zeta * omega_rad_per_s, stiffness=omega_rad_per_s**2)
    # Long enough that nothing is left of the transient in the last fifth.
    horizon_s = 60.0 / (min(zeta, 1.0) * omega_rad_per_s)
    moved = motion(plant, omega_rad_per_s**2, horizon_s)
    return step_figures(moved, reference=1.0, step=1.0, band=band)


@pytest.mark.parametrize(
    ("zeta", "printed"),
    list(
        zip(
            [0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9],
            [1.104, 1.203, 1.321, 1.463, 1.638, 1.854, 2.126, 2.467, 2.883],
            strict=True,
        )
    ),
)
def test_normalised_rise_time(zeta: float, printed: float) -> None:
    """N. Nise, Control Systems Engineering, sec. 4.6, fig. 4.16, as a course note reprints it."""
    assert unit_step(zeta).rise_time_s[0] == pytest.approx(printed, abs=0.0005)


@pytest.mark.parametrize(
    ("zeta", "printed"),
    list(
        zip(
            [0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9], [37.2, 25.4, 16.3, 9.5, 4.6, 1.5, 0.2], strict=True
        )
    ),
)
def test_percent_overshoot(zeta: float, printed: float) -> None:
    """Dorf and Bishop, Modern Control Systems, ch. 5, and Ogata and Nise alike (from memory)."""
    figures = unit_step(zeta)
    assert figures.overshoot_percent[0] == pytest.approx(printed, abs=0.05)
    assert figures.peak_time_s[0] == pytest.approx(math.pi / math.sqrt(1.0 - zeta**2), rel=1e-9)


@pytest.mark.parametrize(
    ("zeta", "overshoot", "settling"),
    [(0.5, 16.0, 8.0), (1.0 / math.sqrt(2.0), 4.0, 5.9), (1.0, 0.0, 5.8)],
)
def test_properties_of_second_order_systems(zeta: float, overshoot: float, settling: float) -> None:
    """Astrom and Murray, Feedback Systems, table 6.1 in the 1st edition (from memory).

    The printed 8.0 is the rule 4/(zeta w) and 5.9 is cut off; 8.076 and 5.963 are exact.
    """
    figures = unit_step(zeta)
    assert figures.overshoot_percent[0] == pytest.approx(overshoot, abs=0.5)
    exact = {8.0: 8.076, 5.9: 5.963, 5.8: 5.834}[settling]
    assert figures.settling_time_s[0] == pytest.approx(exact, abs=0.0005)
    assert figures.settling_time_s[0] == pytest.approx(settling, abs=0.1)


@pytest.mark.parametrize(
    ("band", "printed"), [(0.05, 0.690), (0.02, 0.780), (0.01, 0.826)], ids=["5%", "2%", "1%"]
)
def test_fastest_settling_damping(band: float, printed: float) -> None:
    """The damping ratio that settles fastest; the curve with its jump is Ogata's fig. 5-11.

    Known result (from memory). Searched here in three passes, the last in steps of 0.0001.
    """

    def search(grid: np.ndarray) -> tuple[int, list[float]]:
        times = [float(unit_step(float(z), band=band).settling_time_s[0]) for z in grid]
        return int(np.argmin(times)), times

    coarse = np.arange(0.5, 1.0, 0.02)
    near = coarse[search(coarse)[0]]
    coarse = near + np.arange(-0.02, 0.02, 0.001)
    near = coarse[search(coarse)[0]]
    grid = near + np.arange(-0.0015, 0.0015, 0.0001)
    best, times = search(grid)
    assert grid[best] == pytest.approx(printed, abs=0.0005)
    # There the overshoot is the band, and just below the time jumps.
    assert unit_step(float(grid[best]), band=band).overshoot_percent[0] == pytest.approx(
        100.0 * band, rel=0.01
    )
    assert times[best - 2] > 1.2 * times[best]


@pytest.mark.parametrize(
    ("zeta", "band", "exact"),
    [(0.68, 0.05, 4.725), (0.6902, 0.05, 2.859), (0.76, 0.02, 5.636), (0.7798, 0.02, 3.602)],
)
def test_the_cliff_of_the_settling_time(zeta: float, band: float, exact: float) -> None:
    """Ogata's text names 0.68 and 0.76 (from memory); they lie before the jump. Exact values."""
    tolerance = 0.0015 if zeta == 0.7798 else 0.0005
    assert unit_step(zeta, band=band).settling_time_s[0] == pytest.approx(exact, abs=tolerance)


def test_servo_with_velocity_feedback() -> None:
    """Ogata, Modern Control Engineering, 5th ed., example 5-2, p. 177.

    J = 1, B = 1, K = 12.5 N m, Kh = 0.178 s: overshoot 0.2, peak time 1 s, rise time 0.65 s from
    0 to 100 %. The book designs with exact formulas and prints rounded gains.
    """
    gain, rate_gain = 12.5, 0.178
    plant = Plant(mass=1.0, damping=1.0 + gain * rate_gain, stiffness=gain)
    figures = step_figures(motion(plant, gain, 60.0), reference=1.0, step=1.0, band=0.02)
    assert figures.overshoot_percent[0] == pytest.approx(20.0, abs=0.5)
    assert figures.peak_time_s[0] == pytest.approx(1.0, abs=0.005)


def test_spring_mass_damper_from_its_step() -> None:
    """Ogata, 5th ed., problem A-5-5, p. 236: 2 lbf move a mass by 0.1 ft (m, b from memory).

    k = 20 lbf/ft, m = 5.2 slug, b = 12.2 lbf s/ft: overshoot 0.0095 ft after 2 s. The printed
    overshoot lies between those of the least and the most damped system that print as these.
    """
    plant = Plant(mass=5.2, damping=12.2, stiffness=20.0)
    figures = step_figures(motion(plant, 2.0, 120.0), reference=0.1, step=0.1, band=0.02)
    assert figures.final_value[0] == pytest.approx(0.1, abs=0.0005)
    assert figures.peak_time_s[0] == pytest.approx(2.0, abs=0.005)
    beyond = []
    for mass, damping in ((5.15, 12.25), (5.25, 12.15)):
        moved = motion(Plant(mass=mass, damping=damping, stiffness=20.0), 2.0, 120.0)
        extreme = step_figures(moved, reference=0.1, step=0.1, band=0.02)
        beyond.append(float(extreme.peak_value[0]) - 0.1)
    assert beyond[0] < 0.0095 < beyond[1]
    assert beyond[1] - beyond[0] < 0.001


def test_characteristics_of_a_given_system() -> None:
    """Nise, example 4.5 (from memory): 100/(s^2 + 15 s + 100).

    Peak time 0.475 s, overshoot 2.838 %, rise time 0.23 s; the printed settling time 0.533 s is
    the rule 4/(zeta w), the exact one is shorter here.
    """
    figures = unit_step(0.75, 10.0)
    assert figures.peak_time_s[0] == pytest.approx(0.475, abs=0.0005)
    assert figures.overshoot_percent[0] == pytest.approx(2.838, abs=0.0005)
    assert figures.rise_time_s[0] == pytest.approx(0.23, abs=0.005)
    assert figures.settling_time_s[0] < 4.0 / 7.5 + 0.05


def test_poles_and_their_figures() -> None:
    """Nise, example 4.6 (from memory): poles -3 +- j7: peak time 0.449 s, overshoot 26 %."""
    figures = unit_step(3.0 / math.sqrt(58.0), math.sqrt(58.0))
    assert figures.peak_time_s[0] == pytest.approx(0.449, abs=0.0005)
    assert figures.overshoot_percent[0] == pytest.approx(26.0, abs=0.5)


def test_rotating_load() -> None:
    """Nise, example 4.7 (from memory): K = 5, J = 0.26, D = 1.04 give 20 % and 2 s.

    2 s is the rule 4/(zeta w); the motion enters the band for good a little later or earlier.
    """
    plant = Plant(motion="rotary", mass=0.26, damping=1.04, stiffness=5.0)
    figures = step_figures(motion(plant, 5.0, 60.0), reference=1.0, step=1.0, band=0.02)
    assert figures.overshoot_percent[0] == pytest.approx(20.0, abs=0.5)
    assert figures.settling_time_s[0] == pytest.approx(2.0, rel=0.06)


def test_released_block() -> None:
    """Meriam and Kraige, Dynamics, sample problem 8/2: x(2 s) = -0.0162 m."""
    plant = Plant(mass=8.0, damping=20.0, stiffness=32.0)
    moved = motion(plant, 0.0, 2.0, start=(0.2, 0.0))
    assert moved.positions()[1, 0] == pytest.approx(-0.0162, abs=0.00005)


def test_motorcycle_thrown_up() -> None:
    """S. S. Rao, Mechanical Vibrations, example 2.11: 1.4294 m/s give 250 mm (from memory).

    The book chains rounded values, k = 2358.2652 N/m and c = 554.4981 N s/m.
    """
    plant = Plant(mass=200.0, damping=554.4981, stiffness=2358.2652)
    moved = motion(plant, 0.0, 12.0, start=(0.0, 1.4294))
    figures = step_figures(moved, reference=0.0, step=0.25, band=0.01)
    assert figures.peak_value[0] == pytest.approx(0.250, abs=0.0005)
