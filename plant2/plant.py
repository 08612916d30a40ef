"""Mass, spring, damper, flexure modes and drive: what moves, in continuous time.

Rules of this file:

- Everything is SI; "force" and "position" stand for newton and metre with linear motion, for
  newton metre and radian with rotary motion. The docstrings give both units.
- The controller output is what the actuator takes: force [N or N m] with current drive, volts
  with voltage drive.
- Positions are absolute, from sensor zero. The spring's rest position and the bias force enter as
  one constant force on the main mass.
- Coulomb friction and end stops are facts of the plant that linear models leave out.
- No sampling here, and no files.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from plant2.errors import OutOfRangeError
from plant2.solve import bisect

if TYPE_CHECKING:
    import control

    from plant2.loopfile import Loop, Mode

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Pair = tuple[float, float]

MOTIONS = ("linear", "rotary")
DRIVES = ("current", "voltage")
_EPS = float(np.finfo(np.float64).eps)


# --------------------------------------------------------------------------------------------------
# The plant


@dataclass(frozen=True, slots=True, kw_only=True)
class Plant:
    """One moving mass on a spring and a damper, with its drive, flexure modes and sensor filter.

    Parameters
    ----------
    motion : str
        "linear" or "rotary". [-]
    mass : float
        Main mass or inertia, above 0. [kg or kg m^2]
    damping : float
        Viscous damping to ground, at least 0. [N s/m or N m s/rad]
    stiffness : float
        Spring to ground, at least 0; 0 is a free mass. [N/m or N m/rad]
    modes : tuple of Mode
        Parasitic modes; each adds sign/(mass (s^2 + 2 z w s + w^2)) x force to the position.
    rest_position : float
        Where the spring is relaxed, from sensor zero. [m or rad]
    bias_force : float
        Constant force on the main mass. [N or N m]
    friction : float
        Coulomb level on the main mass, at least 0. [N or N m]
    travel : float
        End stop either side of sensor zero, above 0; infinite where there is none. [m or rad]
    drive : str
        "current" or "voltage". [-]
    force_constant : float
        Force per current, above 0. [N/A or N m/A]
    resistance_ohm : float or None
        Coil resistance, needed with voltage drive. [ohm]
    inductance_h : float
        Coil inductance, at least 0; 0 makes the current follow at once. [H]
    back_emf : float or None
        Voltage per velocity, at least 0; None stands for `force_constant`. [V s/m or V s/rad]
    current_bandwidth_rad_per_s : float or None
        Corner of the current loop, current drive only; None for an ideal one. [rad/s]
    sensor_corner_rad_per_s : float or None
        Corner of the sensor's low-pass; None where there is none. [rad/s]

    Raises
    ------
    OutOfRangeError
        If a field is not finite (travel aside) or outside the range given above, with the field's
        own name.

    Notes
    -----
    ``m x'' + b x' + k (x - rest) = F + bias`` for the main mass; Newton's law, own notation.

    Examples
    --------
    >>> Plant(mass=0.05, damping=0.4, stiffness=200.0).drive
    'current'
    """

    motion: str = "linear"
    mass: float
    damping: float = 0.0
    stiffness: float = 0.0
    modes: tuple[Mode, ...] = ()
    rest_position: float = 0.0
    bias_force: float = 0.0
    friction: float = 0.0
    travel: float = math.inf
    drive: str = "current"
    force_constant: float = 1.0
    resistance_ohm: float | None = None
    inductance_h: float = 0.0
    back_emf: float | None = None
    current_bandwidth_rad_per_s: float | None = None
    sensor_corner_rad_per_s: float | None = None

    def __post_init__(self) -> None:
        rotary = self.motion == "rotary"
        force, length, mass = ("N m", "rad", "kg m^2") if rotary else ("N", "m", "kg")
        _check_choice("motion", self.motion, MOTIONS)
        _check_choice("drive", self.drive, DRIVES)
        _check_above_zero("mass", self.mass, mass)
        _check_not_negative("damping", self.damping, f"{force} s/{length}")
        _check_not_negative("stiffness", self.stiffness, f"{force}/{length}")
        _check_finite("rest_position", self.rest_position, length)
        _check_finite("bias_force", self.bias_force, force)
        _check_not_negative("friction", self.friction, force)
        if self.travel != math.inf:
            _check_above_zero("travel", self.travel, length)
        _check_above_zero("force_constant", self.force_constant, f"{force}/A")
        _check_not_negative("inductance_h", self.inductance_h, "H")
        if self.back_emf is not None:
            _check_not_negative("back_emf", self.back_emf, f"V s/{length}")
        if self.resistance_ohm is not None:
            _check_above_zero("resistance_ohm", self.resistance_ohm, "ohm")
        elif self.drive == "voltage":
            raise OutOfRangeError(
                "resistance_ohm",
                None,
                "ohm",
                "must be given with voltage drive",
                "measure the coil, or choose current drive",
            )
        if self.sensor_corner_rad_per_s is not None:
            _check_above_zero("sensor_corner_rad_per_s", self.sensor_corner_rad_per_s, "rad/s")
        if self.current_bandwidth_rad_per_s is not None:
            corner = self.current_bandwidth_rad_per_s
            _check_above_zero("current_bandwidth_rad_per_s", corner, "rad/s")
            if self.drive == "voltage":
                raise OutOfRangeError(
                    "current_bandwidth_rad_per_s",
                    corner,
                    "rad/s",
                    "has no meaning with voltage drive",
                    "leave it out, or choose current drive",
                )
        for index, mode in enumerate(self.modes):
            name = f"modes[{index}]"
            _check_above_zero(f"{name}.frequency_rad_per_s", mode.frequency_rad_per_s, "rad/s")
            _check_not_negative(f"{name}.damping_ratio", mode.damping_ratio, "")
            _check_above_zero(f"{name}.mass", mode.mass, mass)
            if mode.sign not in (-1, 1):
                raise OutOfRangeError(
                    f"{name}.sign", mode.sign, "", "must be 1 or -1", "choose one of the two"
                )


def plant_of(loop: Loop) -> Plant:
    """Gather the moving and electrical facts of a loop file.

    Parameters
    ----------
    loop : Loop
        A loop as read from its file.

    Returns
    -------
    Plant
        The nominal plant.

    Raises
    ------
    OutOfRangeError
        If a quantity lies outside the range that `Plant` allows.

    Notes
    -----
    A plain copy of fields; the choice of them is this project's own.
    """
    mechanics, actuator = loop.mechanics, loop.actuator
    voltage = actuator.drive == "voltage"
    return Plant(
        motion=mechanics.motion,
        mass=mechanics.mass,
        damping=mechanics.damping,
        stiffness=mechanics.stiffness,
        modes=tuple(mechanics.modes),
        rest_position=mechanics.rest_position,
        bias_force=mechanics.bias_force,
        friction=mechanics.friction,
        travel=mechanics.travel,
        drive=actuator.drive,
        force_constant=actuator.force_constant,
        resistance_ohm=actuator.resistance_ohm if voltage else None,
        inductance_h=actuator.inductance_h if voltage else 0.0,
        back_emf=actuator.back_emf,
        current_bandwidth_rad_per_s=None if voltage else actuator.bandwidth_rad_per_s,
        sensor_corner_rad_per_s=loop.sensor.filter_corner_rad_per_s,
    )


def constant_force(plant: Plant) -> float:
    """Constant force on the main mass that stands for bias and spring rest position.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    float
        Bias plus the force of the spring at sensor zero. [N or N m]

    Notes
    -----
    ``bias + k rest``, from ``m x'' + b x' + k x = F + bias + k rest``; own derivation.

    Examples
    --------
    >>> constant_force(Plant(mass=1.0, stiffness=200.0, rest_position=0.25, bias_force=-10.0))
    40.0
    """
    return plant.bias_force + plant.stiffness * plant.rest_position


def static_gain(plant: Plant) -> float | None:
    """Position per controller output at rest.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    float or None
        Position change per output; None for a free mass, which has no position of rest.
        [m/N, rad/(N m), m/V or rad/V]

    Notes
    -----
    ``1/k + sum(sign/(M w^2))``, times ``Kf/R`` with voltage drive; own derivation.

    Examples
    --------
    >>> static_gain(Plant(mass=0.05, damping=0.4, stiffness=200.0))
    0.005
    """
    if plant.stiffness == 0.0:
        return None
    return (1.0 / plant.stiffness + _mode_compliance(plant)) * _force_per_output(plant)


def holding_effort(plant: Plant, position: float) -> float:
    """Controller output that holds the plant still.

    Parameters
    ----------
    plant : Plant
        The plant.
    position : float
        Where to hold it, from sensor zero; without effect on a free mass. [m or rad]

    Returns
    -------
    float
        The output. [N, N m or V]

    Raises
    ------
    OutOfRangeError
        If the position is not finite, or if the modes' compliance cancels the spring's, so that
        no output moves the position.

    Notes
    -----
    ``rest + (F + bias)/k + F sum(sign/(M w^2)) = position``, solved for ``F``; times ``R/Kf`` with
    voltage drive; own derivation.

    Examples
    --------
    >>> holding_effort(Plant(mass=0.05, damping=0.4, stiffness=200.0, bias_force=1.0), 0.02)
    3.0
    """
    _check_finite("position", position, _length_unit(plant))
    share = 1.0 + plant.stiffness * _mode_compliance(plant)
    if share == 0.0:
        raise OutOfRangeError(
            "stiffness",
            plant.stiffness,
            f"{_force_unit(plant)}/{_length_unit(plant)}",
            "the modes' static compliance cancels the spring's",
            "check sign and mass of the modes",
        )
    force = (plant.stiffness * (position - plant.rest_position) - plant.bias_force) / share
    return force / _force_per_output(plant)


def back_emf_damping(plant: Plant) -> float:
    """Viscous damping that a coil without inductance adds by its back-EMF.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    float
        Added damping; 0 with current drive. [N s/m or N m s/rad]

    Notes
    -----
    ``Kf Ke / R``; own derivation from ``V = R i + Ke v`` and ``F = Kf i``.

    Examples
    --------
    >>> coil = Plant(mass=0.05, drive="voltage", force_constant=10.0, resistance_ohm=5.0)
    >>> back_emf_damping(coil)
    20.0
    """
    if plant.drive == "current" or plant.resistance_ohm is None:
        return 0.0
    return plant.force_constant * _back_emf(plant) / plant.resistance_ohm


# --------------------------------------------------------------------------------------------------
# State space and transfer function


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StateSpace:
    """The plant as first-order equations, x' = a x + b u + b_force F.

    Parameters
    ----------
    a : array of float, shape (n, n)
        State matrix, units by the states. [1/s]
    b : array of float, shape (n,)
        Effect of the controller output. [states/s per output]
    b_force : array of float, shape (n,)
        Effect of a disturbance force on the main mass. [states/s per N or N m]
    c_position : array of float, shape (n,)
        True position: main mass plus signed modes. [m or rad]
    c_measured : array of float, shape (n,)
        What the converter sees: after the sensor filter, else the position. [m or rad]
    c_main_position, c_main_velocity : array of float, shape (n,)
        Motion of the main mass. [m, m/s or rad, rad/s]
    c_current : array of float, shape (n,)
        Coil current per state. [A]
    d_current : float
        Coil current per controller output, beside that of the states. [A per output]
    names : tuple of str
        The states, in order.

    Notes
    -----
    The arrays are read-only. Units of the states are SI: m, m/s, A, and N for the force that a
    current loop lets through (rotary alike).
    """

    a: Real
    b: Real
    b_force: Real
    c_position: Real
    c_measured: Real
    c_main_position: Real
    c_main_velocity: Real
    c_current: Real
    d_current: float
    names: tuple[str, ...]


def state_space(plant: Plant) -> StateSpace:
    """Write the plant as first-order equations.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    StateSpace
        States: position and velocity of the main mass, the same of each mode, then current or
        force where the drive has a lag, then the sensor filter.

    Notes
    -----
    Modes lie in parallel: each is driven by the actuator's force and adds its signed motion to the
    position. Back-EMF is what the coil's own velocity makes, and where the coil sits every mode
    moves with the force, so every mode's velocity counts positive there, whatever its sign at the
    sensor; otherwise a mode could take power from the coil that the supply does not give. Textbook
    modal form (Preumont, *Vibration Control of Active Structures*, from memory).

    Examples
    --------
    >>> state_space(Plant(mass=0.05, damping=0.4, stiffness=200.0)).a.tolist()
    [[0.0, 1.0], [-4000.0, -8.0]]
    """
    names = ["position", "velocity"]
    for number in range(1, len(plant.modes) + 1):
        names += [f"mode {number} position", f"mode {number} velocity"]
    has_force_state = plant.current_bandwidth_rad_per_s is not None
    has_current_state = plant.drive == "voltage" and plant.inductance_h > 0.0
    drive_at = len(names)
    if has_force_state:
        names.append("force")
    elif has_current_state:
        names.append("current")
    sensor_at = len(names)
    if plant.sensor_corner_rad_per_s is not None:
        names.append("filtered position")
    n = len(names)

    a = np.zeros((n, n))
    b, b_force, c_position, c_main_position, c_main_velocity, c_current, coil_velocity = (
        np.zeros(n) for _ in range(7)
    )
    a[0, 1] = 1.0
    a[1, :2] = -plant.stiffness / plant.mass, -plant.damping / plant.mass
    b_force[1] = 1.0 / plant.mass
    c_position[0] = c_main_position[0] = 1.0
    c_main_velocity[1] = coil_velocity[1] = 1.0
    driven = [(1, plant.mass)]
    for number, mode in enumerate(plant.modes):
        at = 2 + 2 * number
        w = mode.frequency_rad_per_s
        a[at, at + 1] = 1.0
        a[at + 1, at : at + 2] = -w * w, -2.0 * mode.damping_ratio * w
        c_position[at] = mode.sign
        coil_velocity[at + 1] = 1.0
        driven.append((at + 1, mode.mass))

    # force = force_row x + force_gain u
    force_row, force_gain, d_current = np.zeros(n), 0.0, 0.0
    if plant.drive == "voltage":
        resistance = _resistance_ohm(plant)
        if has_current_state:
            force_row[drive_at] = plant.force_constant
            c_current[drive_at] = 1.0
            a[drive_at] = -(_back_emf(plant) / plant.inductance_h) * coil_velocity
            a[drive_at, drive_at] = -resistance / plant.inductance_h
            b[drive_at] = 1.0 / plant.inductance_h
        else:
            c_current[:] = -(_back_emf(plant) / resistance) * coil_velocity
            d_current = 1.0 / resistance
            force_row[:] = plant.force_constant * c_current
            force_gain = plant.force_constant * d_current
    elif plant.current_bandwidth_rad_per_s is not None:
        corner = plant.current_bandwidth_rad_per_s
        force_row[drive_at] = 1.0
        c_current[drive_at] = 1.0 / plant.force_constant
        a[drive_at, drive_at] = -corner
        b[drive_at] = corner
    else:
        force_gain = 1.0
        d_current = 1.0 / plant.force_constant
    for at, mass in driven:
        a[at] += force_row / mass
        b[at] = force_gain / mass

    c_measured = c_position
    if plant.sensor_corner_rad_per_s is not None:
        corner = plant.sensor_corner_rad_per_s
        a[sensor_at] = corner * c_position
        a[sensor_at, sensor_at] = -corner
        c_measured = np.zeros(n)
        c_measured[sensor_at] = 1.0

    for array in (a, b, b_force, c_position, c_measured, c_main_position, c_main_velocity):
        array.setflags(write=False)
    c_current.setflags(write=False)
    return StateSpace(
        a=a,
        b=b,
        b_force=b_force,
        c_position=c_position,
        c_measured=c_measured,
        c_main_position=c_main_position,
        c_main_velocity=c_main_velocity,
        c_current=c_current,
        d_current=d_current,
        names=tuple(names),
    )


def frequency_response(plant: Plant, omega_rad_per_s: Real, *, measured: bool = False) -> Complex:
    """Position per controller output for a steady sine, in continuous time.

    Parameters
    ----------
    plant : Plant
        The plant.
    omega_rad_per_s : array of float, shape (n,)
        Angular frequencies, finite, at least 0. [rad/s]
    measured : bool
        Include the sensor filter. [-]

    Returns
    -------
    array of complex, shape (n,)
        Position over output; the angle is the lead of position on output.
        [m/N, rad/(N m), m/V or rad/V]

    Raises
    ------
    OutOfRangeError
        If a frequency is negative or not finite, or the plant has no finite answer there (no spring
        at rest, no damper at resonance). The error carries the first such frequency.

    Notes
    -----
    The sum of the modal fractions, with the coil's equation closed around it; own derivation. It
    does not read `state_space`, so each can check the other.

    Examples
    --------
    >>> stage = Plant(mass=1.0, damping=2.0, stiffness=50.0)
    >>> float(abs(frequency_response(stage, np.array([0.0]))[0]))
    0.02
    """
    omega = np.asarray(omega_rad_per_s, dtype=np.float64)
    _check_frequencies(omega, np.isfinite(omega) & (omega >= 0.0), "must be finite and at least 0")
    s = 1j * omega
    main = plant.mass * s * s + plant.damping * s + plant.stiffness
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        seen = np.zeros_like(s)
        at_coil = np.zeros_like(s)
        for mode in plant.modes:
            w = mode.frequency_rad_per_s
            motion = 1.0 / (mode.mass * (s * s + 2.0 * mode.damping_ratio * w * s + w * w))
            seen += mode.sign * motion
            at_coil += motion
        # Everything times the main mass's polynomial: finite for a free mass at rest under volts.
        top = 1.0 + main * seen
        bottom = main
        if plant.drive == "voltage":
            kf = plant.force_constant
            emf = kf * _back_emf(plant) * s * (1.0 + main * at_coil)
            bottom = (_resistance_ohm(plant) + plant.inductance_h * s) * main + emf
            top = kf * top
        elif plant.current_bandwidth_rad_per_s is not None:
            top = top / (1.0 + s / plant.current_bandwidth_rad_per_s)
        response = top / bottom
        if measured and plant.sensor_corner_rad_per_s is not None:
            response = response / (1.0 + s / plant.sensor_corner_rad_per_s)
    _check_frequencies(omega, np.isfinite(response), "the plant has no finite answer there")
    return np.asarray(response, dtype=np.complex128)


def transfer_function(plant: Plant) -> control.TransferFunction:
    """Position over controller output as a python-control object.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    control.TransferFunction
        Continuous, without the sensor filter. [m/N, rad/(N m), m/V or rad/V]

    Notes
    -----
    The same fractions as `frequency_response`, multiplied out; own derivation.
    """
    import control

    main = np.array([plant.mass, plant.damping, plant.stiffness])
    product = np.array([1.0])
    fractions: list[Real] = []
    for mode in plant.modes:
        w = mode.frequency_rad_per_s
        fractions.append(mode.mass * np.array([1.0, 2.0 * mode.damping_ratio * w, w * w]))
        product = np.polymul(product, fractions[-1])
    seen = at_coil = np.zeros(1)
    for number, mode in enumerate(plant.modes):
        others = np.array([1.0])
        for other, fraction in enumerate(fractions):
            if other != number:
                others = np.polymul(others, fraction)
        seen = np.polyadd(seen, mode.sign * others)
        at_coil = np.polyadd(at_coil, others)
    top = np.polyadd(product, np.polymul(main, seen))
    bottom = np.polymul(main, product)
    if plant.drive == "voltage":
        kf = plant.force_constant
        coil = np.array([plant.inductance_h, _resistance_ohm(plant)])
        emf = kf * _back_emf(plant) * np.polyadd(product, np.polymul(main, at_coil))
        bottom = np.polyadd(np.polymul(coil, bottom), np.polymul(emf, np.array([1.0, 0.0])))
        top = kf * top
    elif plant.current_bandwidth_rad_per_s is not None:
        bottom = np.polymul(bottom, np.array([1.0 / plant.current_bandwidth_rad_per_s, 1.0]))
    return control.TransferFunction(np.trim_zeros(top, "f"), np.trim_zeros(bottom, "f"))


def control_state_space(plant: Plant) -> control.StateSpace:
    """Position over controller output as a python-control state space.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    control.StateSpace
        Continuous, one input, one output; the states carry the names of `state_space`.

    Notes
    -----
    A plain copy of the matrices of `state_space`.
    """
    import control

    space = state_space(plant)
    return control.StateSpace(
        space.a,
        space.b[:, np.newaxis],
        space.c_position[np.newaxis, :],
        np.zeros((1, 1)),
        states=[name.replace(" ", "_") for name in space.names],
        inputs=["output"],
        outputs=["position"],
    )


# --------------------------------------------------------------------------------------------------
# Figures of mass, damping and stiffness alone


def natural_frequency_rad_per_s(plant: Plant) -> float:
    """Natural frequency of mass and spring; 0 for a free mass.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    float
        ``sqrt(k/m)``. [rad/s]

    Notes
    -----
    Textbook definition (Thomson, *Theory of Vibration with Applications*, ch. 2).

    Examples
    --------
    >>> natural_frequency_rad_per_s(Plant(mass=2.0, stiffness=50.0))
    5.0
    """
    return math.sqrt(plant.stiffness / plant.mass)


def critical_damping(plant: Plant) -> float:
    """Damping at which mass and spring just stop swinging; 0 for a free mass.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    float
        ``2 sqrt(m k)``. [N s/m or N m s/rad]

    Notes
    -----
    Textbook definition (Thomson, *Theory of Vibration with Applications*, ch. 2).

    Examples
    --------
    >>> critical_damping(Plant(mass=2.0, stiffness=50.0))
    20.0
    """
    return 2.0 * math.sqrt(plant.mass * plant.stiffness)


def damping_ratio(plant: Plant) -> float:
    """Damping over critical damping.

    Parameters
    ----------
    plant : Plant
        The plant, with a spring.

    Returns
    -------
    float
        ``b/(2 sqrt(m k))``. [-]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass.

    Notes
    -----
    Textbook definition (Thomson, *Theory of Vibration with Applications*, ch. 2).

    Examples
    --------
    >>> damping_ratio(Plant(mass=2.0, damping=5.0, stiffness=50.0))
    0.25
    """
    _need_spring(plant, "a damping ratio")
    return plant.damping / critical_damping(plant)


def regime(plant: Plant) -> str:
    """Kind of free motion, in words.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    str
        "undamped", "underdamped", "critically damped", "overdamped", "free mass" or
        "free mass with damping". [-]

    Notes
    -----
    From the sign of ``b^2 - 4 m k``, taken exactly; a plant nearer to critical than decimal numbers
    can be written in doubles counts as critical. Own derivation.

    Examples
    --------
    >>> regime(Plant(mass=1.0, damping=2.0, stiffness=1.0))
    'critically damped'
    """
    if plant.stiffness == 0.0:
        return "free mass with damping" if plant.damping > 0.0 else "free mass"
    if plant.damping == 0.0:
        return "undamped"
    discriminant = _discriminant(plant)
    if abs(discriminant) <= 4 * _EPS * Fraction(plant.damping) ** 2:
        return "critically damped"
    return "underdamped" if discriminant < 0 else "overdamped"


def damped_frequency_rad_per_s(plant: Plant) -> float:
    """Frequency at which the damped plant swings; 0 when it does not swing.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    float
        ``sqrt(k/m - (b/2m)^2)`` or 0. [rad/s]

    Notes
    -----
    ``sqrt(4 m k - b^2)/(2 m)``, the difference taken exactly; own derivation.

    Examples
    --------
    >>> damped_frequency_rad_per_s(Plant(mass=1.0, damping=6.0, stiffness=25.0))
    4.0
    """
    discriminant = _discriminant(plant)
    return float(_root(-discriminant) / (2 * Fraction(plant.mass))) if discriminant < 0 else 0.0


def decay_time_s(plant: Plant) -> float:
    """Time in which the slowest part of free motion falls to 1/e; infinite without damping.

    Parameters
    ----------
    plant : Plant
        The plant, with a spring.

    Returns
    -------
    float
        ``2 m/b`` where it swings, else the longer of the two time constants. [s]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass.

    Notes
    -----
    ``(b + sqrt(b^2 - 4 m k))/(2 k)`` for the overdamped plant; own derivation.

    Examples
    --------
    >>> decay_time_s(Plant(mass=1.0, damping=6.0, stiffness=25.0)) * 3.0
    1.0
    """
    _need_spring(plant, "a decay time")
    if plant.damping == 0.0:
        return math.inf
    discriminant = _discriminant(plant)
    if discriminant < 0:
        return 2.0 * plant.mass / plant.damping
    return float((Fraction(plant.damping) + _root(discriminant)) / (2 * Fraction(plant.stiffness)))


def quality_factor(plant: Plant) -> float:
    """Quality factor of the resonance; infinite without damping.

    Parameters
    ----------
    plant : Plant
        The plant, with a spring.

    Returns
    -------
    float
        ``1/(2 damping ratio)``. [-]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass.

    Notes
    -----
    Textbook definition (Thomson, *Theory of Vibration with Applications*, ch. 3).

    Examples
    --------
    >>> quality_factor(Plant(mass=2.0, damping=5.0, stiffness=50.0))
    2.0
    """
    ratio = damping_ratio(plant)
    return 0.5 / ratio if ratio > 0.0 else math.inf


def log_decrement(plant: Plant) -> float:
    """Natural logarithm of the ratio of successive amplitudes of the ringing plant.

    Parameters
    ----------
    plant : Plant
        The plant, underdamped.

    Returns
    -------
    float
        ``2 pi z/sqrt(1 - z^2)``. [-]

    Raises
    ------
    OutOfRangeError
        If the plant does not swing.

    Notes
    -----
    ``2 pi b/sqrt(4 m k - b^2)`` (Thomson, *Theory of Vibration with Applications*, sec. 2.7).

    Examples
    --------
    >>> log_decrement(Plant(mass=1.0, damping=6.0, stiffness=25.0)) / math.pi
    1.5
    """
    _need_swing(plant)
    return 2.0 * math.pi * float(Fraction(plant.damping) / _root(-_discriminant(plant)))


def log_decrement_of_amplitudes(*, first: float, last: float, cycles: float) -> float:
    """Log decrement from two amplitudes some cycles apart.

    Parameters
    ----------
    first, last : float
        Amplitudes, above 0. [m or rad]
    cycles : float
        Cycles between them, above 0; halves are allowed. [-]

    Returns
    -------
    float
        ``ln(first/last)/cycles``. [-]

    Raises
    ------
    OutOfRangeError
        If an argument is not finite and above 0.

    Notes
    -----
    Only for viscous damping: under friction the result changes from cycle to cycle. Textbook
    definition (Thomson, *Theory of Vibration with Applications*, sec. 2.7).

    Examples
    --------
    >>> log_decrement_of_amplitudes(first=math.e, last=1.0, cycles=0.5)
    2.0
    """
    _check_above_zero("first", first, "")
    _check_above_zero("last", last, "")
    _check_above_zero("cycles", cycles, "")
    return math.log(first / last) / cycles


def damping_ratio_of_log_decrement(decrement: float) -> float:
    """Damping ratio from the log decrement.

    Parameters
    ----------
    decrement : float
        Log decrement, at least 0. [-]

    Returns
    -------
    float
        ``d/sqrt(4 pi^2 + d^2)``. [-]

    Raises
    ------
    OutOfRangeError
        If the decrement is negative or not finite.

    Notes
    -----
    The inverse of `log_decrement` (Rao, *Mechanical Vibrations*, ch. 2, from memory).

    Examples
    --------
    >>> round(damping_ratio_of_log_decrement(2.0 * math.pi) ** 2, 15)
    0.5
    """
    _check_not_negative("decrement", decrement, "")
    return decrement / math.hypot(2.0 * math.pi, decrement)


def plant_of_ringing(*, mass: float, damped_period_s: float, decrement: float) -> Plant:
    """Plant of known mass from how it rings.

    Parameters
    ----------
    mass : float
        Mass or inertia, above 0. [kg or kg m^2]
    damped_period_s : float
        Time from one maximum to the next, above 0. [s]
    decrement : float
        Log decrement, at least 0. [-]

    Returns
    -------
    Plant
        With damping and stiffness that ring this way.

    Raises
    ------
    OutOfRangeError
        If an argument lies outside the range given above.

    Notes
    -----
    ``b = 2 m a``, ``k = m (wd^2 + a^2)`` with ``a = decrement/period``; own derivation.

    Examples
    --------
    >>> stage = plant_of_ringing(mass=2.0, damped_period_s=0.5, decrement=1.0)
    >>> stage.damping
    8.0
    """
    _check_above_zero("damped_period_s", damped_period_s, "s")
    _check_not_negative("decrement", decrement, "")
    rate = decrement / damped_period_s
    frequency = 2.0 * math.pi / damped_period_s
    return Plant(mass=mass, damping=2.0 * mass * rate, stiffness=mass * (frequency**2 + rate**2))


def plant_of_poles(*, mass: float, pole1: complex, pole2: complex) -> Plant:
    """Plant of known mass from its two poles.

    Parameters
    ----------
    mass : float
        Mass or inertia, above 0. [kg or kg m^2]
    pole1, pole2 : complex
        Two real poles or a conjugate pair, none in the right half plane. [rad/s]

    Returns
    -------
    Plant
        With damping and stiffness that have these poles.

    Raises
    ------
    OutOfRangeError
        If the poles are no pair of a real plant, or one lies in the right half plane.

    Notes
    -----
    ``b = -m (s1 + s2)``, ``k = m s1 s2``; Vieta's rule.

    Examples
    --------
    >>> stage = plant_of_poles(mass=1.0, pole1=-3.0 + 4.0j, pole2=-3.0 - 4.0j)
    >>> stage.damping, stage.stiffness
    (6.0, 25.0)
    """
    total, product = pole1 + pole2, pole1 * pole2
    if total.imag != 0.0 or abs(product.imag) > 8.0 * _EPS * abs(product):
        raise OutOfRangeError(
            "pole2.imag", pole2.imag, "rad/s", "must mirror pole1", "give a conjugate pair"
        )
    for name, pole in (("pole1.real", pole1), ("pole2.real", pole2)):
        if not pole.real <= 0.0:
            raise OutOfRangeError(
                name, pole.real, "rad/s", "must be at most 0", "give poles of a passive plant"
            )
    return Plant(mass=mass, damping=-mass * total.real, stiffness=mass * product.real)


# --------------------------------------------------------------------------------------------------
# Free motion


def free_motion(
    plant: Plant, position0: float, velocity0: float, time_s: float | Real
) -> tuple[Real, Real]:
    """Free motion of mass, damper and spring about their position of rest.

    Parameters
    ----------
    plant : Plant
        The plant; drive, modes, friction, stops and constant force are left out.
    position0 : float
        Position at time 0, from the position of rest. [m or rad]
    velocity0 : float
        Velocity at time 0. [m/s or rad/s]
    time_s : float or array of float, any shape
        Times, finite, at least 0. [s]

    Returns
    -------
    tuple of two arrays of float, the shape of time_s
        Position and velocity. [m, m/s or rad, rad/s]

    Raises
    ------
    OutOfRangeError
        If a time is negative or not finite, or a start value is not finite.

    Notes
    -----
    One pair of forms on either side of ``b^2 = 4 m k``, smooth across it and without cancellation.
    With ``a = b/2m`` and S the response to a unit velocity: swinging, ``S = exp(-a t)
    sin(wd t)/wd``; else, with the slow root ``-s`` and the distance ``g`` of the roots,
    ``S = exp(-s t) (1 - exp(-g t))/g``. The roots come from ``b^2 - 4 m k`` in exact fractions, and
    ``rate x time`` is carried to twice the digits, so that long times stay exact. Own derivation.

    Examples
    --------
    >>> position, velocity = free_motion(Plant(mass=1.0), 1.0, 2.0, 3.0)
    >>> float(position), float(velocity)
    (7.0, 2.0)
    """
    _check_finite("position0", position0, _length_unit(plant))
    _check_finite("velocity0", velocity0, f"{_length_unit(plant)}/s")
    t = np.asarray(time_s, dtype=np.float64)
    bad = ~(np.isfinite(t) & (t >= 0.0))
    if bad.any():
        raise OutOfRangeError(
            "time_s", float(t[bad][0]), "s", "must be finite and at least 0", "leave it out"
        )
    m, b, k = Fraction(plant.mass), Fraction(plant.damping), Fraction(plant.stiffness)
    discriminant = _discriminant(plant)
    acceleration = float(k / m)
    if discriminant < 0:
        decay = _exponential(b / (2 * m), t)
        frequency = _root(-discriminant) / (2 * m)
        phase, rest = _product(frequency, t)
        sine, cosine = np.sin(phase), np.cos(phase)
        sine, cosine = sine + rest * cosine, cosine - rest * sine
        kick = decay * (sine / float(frequency))
        cosine = decay * cosine
        drift = float(b / (2 * m)) * kick
        return (
            np.asarray(position0 * (cosine + drift) + velocity0 * kick),
            np.asarray(velocity0 * (cosine - drift) - position0 * acceleration * kick),
        )
    root = _root(discriminant)
    slow = 2 * k / (b + root) if k > 0 else Fraction(0)
    decay = _exponential(slow, t)
    gap = float(root / m) * t
    # (1 - exp(-g t))/(g t), which is 1 where the roots meet.
    mean = np.divide(-np.expm1(-gap), gap, out=np.ones_like(gap), where=gap > 0.0)
    kick = decay * t * mean
    fast = decay * _exponential(root / m, t)
    drift = float(slow) * kick
    return (
        np.asarray(position0 * (decay + drift) + velocity0 * kick),
        np.asarray(velocity0 * (fast - drift) - position0 * acceleration * kick),
    )


def free_amplitude_and_phase(
    plant: Plant, position0: float, velocity0: float
) -> tuple[float, float]:
    """Amplitude and phase of the ringing plant.

    Parameters
    ----------
    plant : Plant
        The plant, underdamped.
    position0 : float
        Position at time 0, from the position of rest. [m or rad]
    velocity0 : float
        Velocity at time 0. [m/s or rad/s]

    Returns
    -------
    tuple of two floats
        C and psi of ``x = C exp(-a t) sin(wd t + psi)``. [m or rad, rad]

    Raises
    ------
    OutOfRangeError
        If the plant does not swing.

    Notes
    -----
    ``C sin psi = x0``, ``C cos psi = (v0 + a x0)/wd`` (Meriam and Kraige, *Dynamics*, ch. 8).

    Examples
    --------
    >>> free_amplitude_and_phase(Plant(mass=1.0, damping=6.0, stiffness=25.0), 0.0, 8.0)
    (2.0, 0.0)
    """
    _need_swing(plant)
    rate = 0.5 * plant.damping / plant.mass
    across = (velocity0 + rate * position0) / damped_frequency_rad_per_s(plant)
    return math.hypot(position0, across), math.atan2(position0, across)


def peak_of_kick(plant: Plant, velocity0: float) -> float:
    """Farthest position of a plant that starts from rest position with a velocity.

    Parameters
    ----------
    plant : Plant
        The plant, with a spring.
    velocity0 : float
        Velocity at time 0. [m/s or rad/s]

    Returns
    -------
    float
        Position of the first and largest peak. [m or rad]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass.

    Notes
    -----
    ``v0/(w0 exp(phi/tan phi))`` with ``cos phi`` the damping ratio; own derivation.

    Examples
    --------
    >>> peak_of_kick(Plant(mass=2.0, stiffness=50.0), 10.0)
    2.0
    """
    _need_spring(plant, "a farthest position")
    frequency = natural_frequency_rad_per_s(plant)
    return velocity0 / (frequency * steepest_rise_ratio(damping_ratio(plant)))


def amplitude_loss_per_cycle(plant: Plant) -> float:
    """How much the amplitude of free motion falls per cycle by Coulomb friction alone.

    Parameters
    ----------
    plant : Plant
        The plant, with a spring.

    Returns
    -------
    float
        ``4 friction/k``. [m or rad]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass.

    Notes
    -----
    Without viscous damping (Rao, *Mechanical Vibrations*, ch. 2, from memory).

    Examples
    --------
    >>> amplitude_loss_per_cycle(Plant(mass=1.0, stiffness=8.0, friction=0.5))
    0.25
    """
    _need_spring(plant, "cycles")
    return 4.0 * plant.friction / plant.stiffness


def friction_of_amplitude_loss(plant: Plant, loss_per_cycle: float) -> float:
    """Coulomb friction from how much the amplitude falls per cycle.

    Parameters
    ----------
    plant : Plant
        The plant, with a spring.
    loss_per_cycle : float
        Fall of the amplitude per cycle, at least 0. [m or rad]

    Returns
    -------
    float
        Friction level. [N or N m]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass, or the loss is negative or not finite.

    Notes
    -----
    The inverse of `amplitude_loss_per_cycle`.

    Examples
    --------
    >>> friction_of_amplitude_loss(Plant(mass=1.0, stiffness=8.0), 0.25)
    0.5
    """
    _need_spring(plant, "cycles")
    _check_not_negative("loss_per_cycle", loss_per_cycle, _length_unit(plant))
    return 0.25 * plant.stiffness * loss_per_cycle


# --------------------------------------------------------------------------------------------------
# Forced motion


@dataclass(frozen=True, slots=True, kw_only=True)
class ResonancePeak:
    """Where a driven plant moves most.

    Parameters
    ----------
    frequency_rad_per_s : float
        Frequency of the largest amplitude. [rad/s]
    magnification : float
        That amplitude over the one at rest; infinite without damping. [-]

    Notes
    -----
    Textbook definition.
    """

    frequency_rad_per_s: float
    magnification: float


def forced_amplitude(plant: Plant, *, force: float, omega_rad_per_s: float) -> float:
    """Amplitude of mass, damper and spring under a steady sinusoidal force.

    Parameters
    ----------
    plant : Plant
        The plant; drive and modes are left out.
    force : float
        Amplitude of the force. [N or N m]
    omega_rad_per_s : float
        Angular frequency, finite, at least 0. [rad/s]

    Returns
    -------
    float
        Amplitude of the position. [m or rad]

    Raises
    ------
    OutOfRangeError
        If the frequency is negative or not finite, or the amplitude is infinite there.

    Notes
    -----
    ``F/hypot(k - m w^2, b w)`` (Thomson, *Theory of Vibration with Applications*, ch. 3).

    Examples
    --------
    >>> stage = Plant(mass=1.0, damping=2.0, stiffness=4.0)
    >>> forced_amplitude(stage, force=8.0, omega_rad_per_s=2.0)
    2.0
    """
    _check_not_negative("omega_rad_per_s", omega_rad_per_s, "rad/s")
    real, imaginary = _dynamic_stiffness(plant, omega_rad_per_s)
    return abs(force) / math.hypot(real, imaginary)


def forced_phase_rad(plant: Plant, *, omega_rad_per_s: float) -> float:
    """Angle by which position lags a steady sinusoidal force.

    Parameters
    ----------
    plant : Plant
        The plant; drive and modes are left out.
    omega_rad_per_s : float
        Angular frequency, finite, at least 0. [rad/s]

    Returns
    -------
    float
        The lag, from 0 to pi. [rad]

    Raises
    ------
    OutOfRangeError
        If the frequency is negative or not finite, or the amplitude is infinite there.

    Notes
    -----
    ``atan2(b w, k - m w^2)`` (Thomson, *Theory of Vibration with Applications*, ch. 3).

    Examples
    --------
    >>> stage = Plant(mass=1.0, damping=2.0, stiffness=4.0)
    >>> forced_phase_rad(stage, omega_rad_per_s=2.0) / math.pi
    0.5
    """
    _check_not_negative("omega_rad_per_s", omega_rad_per_s, "rad/s")
    real, imaginary = _dynamic_stiffness(plant, omega_rad_per_s)
    return math.atan2(imaginary, real)


def resonance_peak(plant: Plant) -> ResonancePeak | None:
    """Where the driven plant moves most, if that is not at rest.

    Parameters
    ----------
    plant : Plant
        The plant.

    Returns
    -------
    ResonancePeak or None
        None where the amplitude only falls with frequency: damping ratio of 1/sqrt 2 or more, or no
        spring.

    Notes
    -----
    ``w0 sqrt(1 - 2 z^2)`` and ``1/(2 z sqrt(1 - z^2))`` (Thomson, *Theory of Vibration with
    Applications*, ch. 3).

    Examples
    --------
    >>> resonance_peak(Plant(mass=1.0, damping=2.0, stiffness=1.0)) is None
    True
    """
    squares = 2 * Fraction(plant.mass) * Fraction(plant.stiffness) - Fraction(plant.damping) ** 2
    if squares <= 0:
        return None
    frequency = math.sqrt(float(squares / (2 * Fraction(plant.mass) ** 2)))
    if plant.damping == 0.0:
        return ResonancePeak(frequency_rad_per_s=frequency, magnification=math.inf)
    swing = float(Fraction(plant.damping) * _root(-_discriminant(plant)))
    return ResonancePeak(
        frequency_rad_per_s=frequency, magnification=2.0 * plant.mass * plant.stiffness / swing
    )


def half_power_frequencies_rad_per_s(plant: Plant) -> tuple[float, float]:
    """Frequencies either side of the resonance where its amplitude has fallen to 1/sqrt 2.

    Parameters
    ----------
    plant : Plant
        The plant, with a damping ratio above 0 and below sin(pi/8) = 0.3827.

    Returns
    -------
    tuple of two floats
        The lower and the upper one. [rad/s]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass, undamped, or damped so much that the lower one does not exist.

    Notes
    -----
    ``(w/w0)^2 = 1 - 2 z^2 -+ 2 z sqrt(1 - z^2)``, so that their distance is near ``2 z w0`` for
    small z; own derivation.

    Examples
    --------
    >>> low, high = half_power_frequencies_rad_per_s(Plant(mass=1.0, damping=0.01, stiffness=1.0))
    >>> round(high - low, 6)
    0.01
    """
    _need_spring(plant, "a resonance")
    z = damping_ratio(plant)
    limit = math.sin(math.pi / 8.0)
    if not 0.0 < z < limit:
        raise OutOfRangeError(
            "damping_ratio",
            z,
            "",
            "must be above 0 and below 0.3827",
            "fit the whole response instead",
        )
    middle, aside = 1.0 - 2.0 * z * z, 2.0 * z * math.sqrt((1.0 - z) * (1.0 + z))
    frequency = natural_frequency_rad_per_s(plant)
    return frequency * math.sqrt(middle - aside), frequency * math.sqrt(middle + aside)


def damping_ratio_of_magnification(*, frequency_ratio: float, magnification: float) -> float:
    """Damping ratio from the amplitude at one frequency.

    Parameters
    ----------
    frequency_ratio : float
        Frequency over natural frequency, above 0. [-]
    magnification : float
        Amplitude there over the one at rest, above 0. [-]

    Returns
    -------
    float
        The damping ratio. [-]

    Raises
    ------
    OutOfRangeError
        If an argument is not above 0, or no damping gives this amplitude.

    Notes
    -----
    ``sqrt(1/M^2 - (1 - r^2)^2)/(2 r)``, the textbook magnification solved for z.

    Examples
    --------
    >>> damping_ratio_of_magnification(frequency_ratio=1.0, magnification=5.0)
    0.1
    """
    _check_above_zero("frequency_ratio", frequency_ratio, "")
    _check_above_zero("magnification", magnification, "")
    rest = (1.0 / magnification) ** 2 - (1.0 - frequency_ratio**2) ** 2
    if rest < 0.0:
        raise OutOfRangeError(
            "magnification",
            magnification,
            "",
            "is more than the undamped plant shows at this frequency",
            "check the natural frequency",
        )
    return math.sqrt(rest) / (2.0 * frequency_ratio)


def ramp_lag_s(plant: Plant) -> float:
    """Time by which position trails a force that grows steadily.

    Parameters
    ----------
    plant : Plant
        The plant, with a spring.

    Returns
    -------
    float
        ``b/k``, which is ``2 z/w0``. [s]

    Raises
    ------
    OutOfRangeError
        If the plant is a free mass.

    Notes
    -----
    The particular solution of a ramp is the same ramp, later by b/k; own derivation.

    Examples
    --------
    >>> ramp_lag_s(Plant(mass=1.0, damping=2.0, stiffness=4.0))
    0.5
    """
    _need_spring(plant, "a lag")
    return plant.damping / plant.stiffness


# --------------------------------------------------------------------------------------------------
# The standard second-order step: w0^2/(s^2 + 2 z w0 s + w0^2)


def overshoot(damping_ratio: float) -> float:
    """Overshoot of the standard step over its final value.

    Parameters
    ----------
    damping_ratio : float
        Damping ratio, at least 0. [-]

    Returns
    -------
    float
        A fraction; 0 from a damping ratio of 1 on. [-]

    Raises
    ------
    OutOfRangeError
        If the damping ratio is negative or not finite.

    Notes
    -----
    ``exp(-pi z/sqrt(1 - z^2))`` (Ogata, *Modern Control Engineering*, ch. 5, from memory).

    Examples
    --------
    >>> round(overshoot(0.5), 6)
    0.163034
    """
    _check_not_negative("damping_ratio", damping_ratio, "")
    if damping_ratio >= 1.0:
        return 0.0
    return math.exp(-math.pi * damping_ratio / _swing(damping_ratio))


def damping_ratio_of_overshoot(fraction: float) -> float:
    """Damping ratio whose standard step overshoots this much.

    Parameters
    ----------
    fraction : float
        Overshoot over the final value, above 0, at most 1. [-]

    Returns
    -------
    float
        The damping ratio. [-]

    Raises
    ------
    OutOfRangeError
        If the overshoot lies outside the range given above.

    Notes
    -----
    ``-ln p/sqrt(pi^2 + ln^2 p)``, the inverse of `overshoot`.

    Examples
    --------
    >>> round(damping_ratio_of_overshoot(overshoot(0.3)), 12)
    0.3
    """
    if not 0.0 < fraction <= 1.0:
        raise OutOfRangeError(
            "fraction", fraction, "", "must be above 0 and at most 1", "give the overshoot / 1"
        )
    log = -math.log(fraction)
    return log / math.hypot(math.pi, log)


def fastest_damping_ratio(band: float) -> float:
    """Damping ratio whose standard step settles soonest into a band.

    Parameters
    ----------
    band : float
        Half-width over the final value, above 0, below 1. [-]

    Returns
    -------
    float
        The damping ratio. [-]

    Raises
    ------
    OutOfRangeError
        If the band lies outside the range given above.

    Notes
    -----
    The overshoot then just fills the band. It is a cliff: with a little less damping the step
    leaves the band again at its first peak. Textbook result (the curve with the jump is in Ogata,
    *Modern Control Engineering*, ch. 5, from memory).

    Examples
    --------
    >>> round(fastest_damping_ratio(0.02), 6)
    0.779703
    """
    _check_band(band)
    return damping_ratio_of_overshoot(band)


def rise_time_ratio(damping_ratio: float) -> float:
    """10 % to 90 % rise time of the standard step times the natural frequency.

    Parameters
    ----------
    damping_ratio : float
        Damping ratio, at least 0. [-]

    Returns
    -------
    float
        Rise time x natural frequency. [-]

    Raises
    ------
    OutOfRangeError
        If the damping ratio is negative or not finite.

    Notes
    -----
    First crossings, solved on the exact step; own derivation.

    Examples
    --------
    >>> round(rise_time_ratio(0.5), 9)
    1.637572947
    """
    error = _step_error(damping_ratio)
    high = math.pi / _swing(damping_ratio) if damping_ratio < 1.0 else 1.0
    while error(high) > 0.1:
        high *= 2.0
    return _falling_to(error, 0.1, 0.0, high) - _falling_to(error, 0.9, 0.0, high)


def steepest_rise_ratio(damping_ratio: float) -> float:
    """Rise time by the steepest slope of the standard step, times the natural frequency.

    Parameters
    ----------
    damping_ratio : float
        Damping ratio, at least 0. [-]

    Returns
    -------
    float
        Natural frequency over the largest slope of the unit step. [-]

    Raises
    ------
    OutOfRangeError
        If the damping ratio is negative or not finite.

    Notes
    -----
    ``exp(phi/tan phi)``, ``cos phi = z``; with cosh and tanh above 1 (Astrom and Murray, *Feedback
    Systems*, ch. 6, from memory; above 1 own derivation).

    Examples
    --------
    >>> steepest_rise_ratio(1.0) == math.e
    True
    """
    _check_not_negative("damping_ratio", damping_ratio, "")
    if damping_ratio == 1.0:
        return math.e
    side = _swing(damping_ratio)
    if damping_ratio < 1.0:
        return math.exp(math.atan2(side, damping_ratio) * damping_ratio / side)
    return math.exp(math.asinh(side) * damping_ratio / side)


def settling_ratio(damping_ratio: float, band: float) -> float:
    """Exact settling time of the standard step times the natural frequency.

    Parameters
    ----------
    damping_ratio : float
        Damping ratio, above 0. [-]
    band : float
        Half-width over the final value, above 0, below 1. [-]

    Returns
    -------
    float
        Time of the last entry into the band x natural frequency. [-]

    Raises
    ------
    OutOfRangeError
        If an argument lies outside the range given above.

    Notes
    -----
    The last peak outside the band is known in closed form, the entry after it is solved for; a peak
    within 1e-12 of the band counts as inside it. Own derivation.

    Examples
    --------
    >>> round(settling_ratio(0.5, 0.02), 9)
    8.076348974
    """
    _check_above_zero("damping_ratio", damping_ratio, "")
    _check_band(band)
    error = _step_error(damping_ratio)
    if damping_ratio >= 1.0:
        high = 1.0
        while error(high) > band:
            high *= 2.0
        return _falling_to(error, band, 0.0, high)
    swing = _swing(damping_ratio)
    per_peak = math.pi * damping_ratio / swing
    peak = max(0, math.ceil((-math.log(band) - 1e-12) / per_peak) - 1)
    start, sign = peak * math.pi / swing, -1.0 if peak % 2 else 1.0
    return _falling_to(lambda x: sign * error(x), band, start, start + math.pi / swing)


def bandwidth_ratio(damping_ratio: float) -> float:
    """-3 dB bandwidth of the standard second-order response over the natural frequency.

    Parameters
    ----------
    damping_ratio : float
        Damping ratio, at least 0. [-]

    Returns
    -------
    float
        Frequency at which the response has fallen to 1/sqrt 2, over the natural frequency. [-]

    Raises
    ------
    OutOfRangeError
        If the damping ratio is negative or not finite.

    Notes
    -----
    ``sqrt(q + sqrt(q^2 + 1))``, ``q = 1 - 2 z^2`` (Dorf and Bishop, *Modern Control Systems*,
    ch. 8, from memory).

    Examples
    --------
    >>> round(bandwidth_ratio(0.5), 4)
    1.272
    """
    _check_not_negative("damping_ratio", damping_ratio, "")
    q = 1.0 - 2.0 * damping_ratio * damping_ratio
    root = math.hypot(q, 1.0)
    return math.sqrt(q + root) if q >= 0.0 else 1.0 / math.sqrt(root - q)


def phase_margin_rad(damping_ratio: float) -> float:
    """Phase margin of w0^2/(s (s + 2 z w0)), the loop whose closed form is the standard one.

    Parameters
    ----------
    damping_ratio : float
        Damping ratio, at least 0. [-]

    Returns
    -------
    float
        The phase margin. [rad]

    Raises
    ------
    OutOfRangeError
        If the damping ratio is negative or not finite.

    Notes
    -----
    ``atan(2 z/sqrt(sqrt(1 + 4 z^4) - 2 z^2))`` (Nise, *Control Systems Engineering*, eq. 10.73,
    from memory), with the difference turned into a sum.

    Examples
    --------
    >>> round(math.degrees(phase_margin_rad(0.5)), 3)
    51.827
    """
    _check_not_negative("damping_ratio", damping_ratio, "")
    square = 2.0 * damping_ratio * damping_ratio
    return math.atan(2.0 * damping_ratio * math.sqrt(math.hypot(1.0, square) + square))


# --------------------------------------------------------------------------------------------------
# Coils


def conductor_length_m(*, turns: float, mean_diameter_m: float) -> float:
    """Length of wire in a round coil.

    Parameters
    ----------
    turns : float
        Number of turns, above 0. [-]
    mean_diameter_m : float
        Mean diameter, above 0. [m]

    Returns
    -------
    float
        ``pi x diameter x turns``. [m]

    Raises
    ------
    OutOfRangeError
        If an argument is not finite and above 0.

    Notes
    -----
    Geometry.

    Examples
    --------
    >>> round(conductor_length_m(turns=100.0, mean_diameter_m=0.01), 6)
    3.141593
    """
    _check_above_zero("turns", turns, "")
    _check_above_zero("mean_diameter_m", mean_diameter_m, "m")
    return math.pi * mean_diameter_m * turns


def coil_force_constant(*, flux_density_t: float, length_m: float) -> float:
    """Force per current of a coil whose wire lies across a magnetic field.

    Parameters
    ----------
    flux_density_t : float
        Flux density, above 0. [T]
    length_m : float
        Length of wire in the field, above 0. [m]

    Returns
    -------
    float
        ``B l``; the back-EMF constant has the same number. [N/A]

    Raises
    ------
    OutOfRangeError
        If an argument is not finite and above 0.

    Notes
    -----
    Force on a straight conductor; textbook physics.

    Examples
    --------
    >>> coil_force_constant(flux_density_t=0.5, length_m=20.0)
    10.0
    """
    _check_above_zero("flux_density_t", flux_density_t, "T")
    _check_above_zero("length_m", length_m, "m")
    return flux_density_t * length_m


# --------------------------------------------------------------------------------------------------
# The chain of units


@dataclass(frozen=True, slots=True, kw_only=True)
class Link:
    """One conversion between two quantities of the loop.

    Parameters
    ----------
    from_unit, to_unit : str
        Names of the two units. [-]
    factor : float
        Change of the second quantity per change of the first, with its sign. [to per from]
    text : str
        The whole conversion in words, offset included. [-]

    Notes
    -----
    Own definition.
    """

    from_unit: str
    to_unit: str
    factor: float
    text: str


def unit_chain(loop: Loop) -> tuple[Link, ...]:
    """Follow the units once around: position, count, code, current or voltage, force.

    Parameters
    ----------
    loop : Loop
        A loop as read from its file.

    Returns
    -------
    tuple of Link
        In loop order. The link from count to code is that of a gain of 1 N/m (N m/rad, V/m or
        V/rad), so the product of all factors is that gain in newton per metre at standstill.

    Raises
    ------
    OutOfRangeError
        If voltage drive lacks a resistance.

    Notes
    -----
    ``count = zero + polarity x position/step`` and ``value = polarity x (code - zero) x step``; own
    definitions.
    """
    sensor, actuator = loop.sensor, loop.actuator
    plant = plant_of(loop)
    length, force = _length_unit(plant), _force_unit(plant)
    volts = actuator.drive == "voltage"
    value, drive, gain_unit = ("A", "current [A]", f"{force}/{length}")
    if volts:
        value, drive, gain_unit = ("V", "voltage [V]", f"V/{length}")
    angle, push = ("angle", "torque") if plant.motion == "rotary" else ("position", "force")
    per_count = sensor.polarity * sensor.step
    per_code = actuator.polarity * actuator.step
    effort_per_code = per_code if volts else per_code * actuator.force_constant
    code_per_count = per_count / effort_per_code
    force_per_value = actuator.force_constant
    if volts:
        force_per_value = actuator.force_constant / _resistance_ohm(plant)
    force_text = f"{push} [{force}] = {force_per_value:.6g} x {drive}"
    return (
        Link(
            from_unit=length,
            to_unit="count",
            factor=1.0 / per_count,
            text=f"count = {_line(sensor.zero_count, 1.0 / per_count)} x {angle} [{length}]",
        ),
        Link(
            from_unit="count",
            to_unit="code",
            factor=code_per_count,
            text=f"a gain of 1 {gain_unit} is {code_per_count:.6g} code per count",
        ),
        Link(
            from_unit="code",
            to_unit=value,
            factor=per_code,
            text=f"{drive} = {per_code:.6g} x {_shifted('code', actuator.zero_code)}",
        ),
        Link(
            from_unit=value,
            to_unit=force,
            factor=force_per_value,
            text=f"{force_text}, at standstill" if volts else force_text,
        ),
    )


def round_trip(loop: Loop) -> float:
    """Follow the units along two paths and tell how far they disagree.

    Parameters
    ----------
    loop : Loop
        A loop as read from its file.

    Returns
    -------
    float
        Largest relative disagreement of a link or of the whole chain; rounding only, below 1e-12,
        when everything is in order. [-]

    Raises
    ------
    OutOfRangeError
        If voltage drive lacks a resistance.

    Notes
    -----
    One path multiplies the factors of `unit_chain`. The other moves an actual position and an
    actual effort through the loop file's own numbers (full scale, bits, zero, polarity) in exact
    fractions, with offsets, and takes differences. Own definition.
    """
    sensor, actuator = loop.sensor, loop.actuator
    plant = plant_of(loop)
    chain = unit_chain(loop)
    volts = actuator.drive == "voltage"
    kf = Fraction(actuator.force_constant)
    code_step = Fraction(actuator.full_scale) / (1 << (actuator.bits - 1))

    def count_at(position: Fraction) -> Fraction:
        return sensor.zero_count + sensor.polarity * position / Fraction(sensor.step)

    def code_for(effort: Fraction) -> Fraction:
        value = effort if volts else effort / kf
        return actuator.zero_code + actuator.polarity * value / code_step

    def value_at(code: Fraction) -> Fraction:
        return actuator.polarity * (code - actuator.zero_code) * code_step

    def force_at(value: Fraction) -> Fraction:
        return kf * value / Fraction(_resistance_ohm(plant)) if volts else kf * value

    start, end = Fraction(0), Fraction(loop.mechanics.travel) / 3
    # A gain of 1: the effort has the number of the position.
    stages = [
        (start, end),
        (count_at(start), count_at(end)),
        (code_for(start), code_for(end)),
        (value_at(code_for(start)), value_at(code_for(end))),
        (force_at(value_at(code_for(start))), force_at(value_at(code_for(end)))),
    ]
    moves = [last - first for first, last in stages]
    worst = Fraction(0)
    product = Fraction(1)
    for link, before, after in zip(chain, moves[:-1], moves[1:], strict=True):
        product *= Fraction(link.factor)
        worst = max(worst, abs(Fraction(link.factor) * before / after - 1))
    return float(max(worst, abs(product * moves[0] / moves[-1] - 1)))


# --------------------------------------------------------------------------------------------------
# Inside


def _back_emf(plant: Plant) -> float:
    return plant.force_constant if plant.back_emf is None else plant.back_emf


def _resistance_ohm(plant: Plant) -> float:
    assert plant.resistance_ohm is not None  # __post_init__ demands it with voltage drive
    return plant.resistance_ohm


def _force_per_output(plant: Plant) -> float:
    if plant.drive == "voltage":
        return plant.force_constant / _resistance_ohm(plant)
    return 1.0


def _mode_compliance(plant: Plant) -> float:
    return math.fsum(mode.sign / (mode.mass * mode.frequency_rad_per_s**2) for mode in plant.modes)


def _force_unit(plant: Plant) -> str:
    return "N m" if plant.motion == "rotary" else "N"


def _length_unit(plant: Plant) -> str:
    return "rad" if plant.motion == "rotary" else "m"


def _check_choice(name: str, value: str, allowed: tuple[str, ...]) -> None:
    if value not in allowed:
        raise OutOfRangeError(
            name, value, "", f"must be one of {', '.join(allowed)}", "choose one of them"
        )


def _check_finite(name: str, value: float, unit: str) -> None:
    if not math.isfinite(value):
        raise OutOfRangeError(name, value, unit, "must be finite", "give a number")


def _check_above_zero(name: str, value: float, unit: str) -> None:
    if not (math.isfinite(value) and value > 0.0):
        raise OutOfRangeError(
            name, value, unit, "must be finite and above 0", "give a positive number"
        )


def _check_not_negative(name: str, value: float, unit: str) -> None:
    if not (math.isfinite(value) and value >= 0.0):
        raise OutOfRangeError(
            name, value, unit, "must be finite and at least 0", "give 0 or a positive number"
        )


def _check_frequencies(omega: Real, good: NDArray[np.bool_], rule: str) -> None:
    if not good.all():
        first = float(np.ravel(omega)[~np.ravel(good)][0])
        raise OutOfRangeError(
            "omega_rad_per_s",
            first,
            "rad/s",
            rule,
            "leave the point out, or give the plant a damper or a spring",
        )


def _discriminant(plant: Plant) -> Fraction:
    """``b^2 - 4 m k``, exactly."""
    damping = Fraction(plant.damping)
    return damping * damping - 4 * Fraction(plant.mass) * Fraction(plant.stiffness)


def _root(square: Fraction) -> Fraction:
    """Square root of a fraction to about 32 digits: a double and one step of Newton's."""
    guess = Fraction(math.sqrt(square))
    return guess + (square - guess * guess) / (2 * guess) if guess > 0 else guess


def _product(rate: Fraction, t: Real) -> tuple[Real, Real]:
    """Rate x time as a double and the rest that it leaves."""
    high = float(rate)
    low = float(rate - Fraction(high))
    product = high * t
    # Dekker's exact product: both factors cut into halves whose products have no rounding.
    high1, low1 = _halves(np.asarray(high))
    high2, low2 = _halves(t)
    rest = ((high1 * high2 - product) + high1 * low2 + low1 * high2) + low1 * low2
    return product, rest + low * t


def _halves(x: Real) -> tuple[Real, Real]:
    big = 134217729.0 * x
    high = big - (big - x)
    return high, x - high


def _exponential(rate: Fraction, t: Real) -> Real:
    """``exp(-rate t)``, right to the last digits however long the time."""
    product, rest = _product(rate, t)
    return np.asarray(np.exp(-product) * (1.0 - rest))


def _dynamic_stiffness(plant: Plant, omega_rad_per_s: float) -> Pair:
    real = plant.stiffness - plant.mass * omega_rad_per_s**2
    imaginary = plant.damping * omega_rad_per_s
    if real == 0.0 and imaginary == 0.0:
        raise OutOfRangeError(
            "omega_rad_per_s",
            omega_rad_per_s,
            "rad/s",
            "the amplitude is infinite there",
            "leave the point out, or give the plant a damper or a spring",
        )
    return real, imaginary


def _swing(damping_ratio: float) -> float:
    """``sqrt|1 - z^2|`` without cancellation near 1."""
    return math.sqrt(abs((1.0 - damping_ratio) * (1.0 + damping_ratio)))


def _step_error(damping_ratio: float) -> Callable[[float], float]:
    """One minus the standard unit step, of time x natural frequency."""
    _check_not_negative("damping_ratio", damping_ratio, "")
    standard = Plant(mass=1.0, damping=2.0 * damping_ratio, stiffness=1.0)
    return lambda time: float(free_motion(standard, 1.0, 0.0, time)[0])


def _falling_to(function: Callable[[float], float], level: float, low: float, high: float) -> float:
    """Where a falling function meets a level, to the last digit."""
    return bisect(lambda x: function(x) - level, low, high, tolerance=0.0)


def _line(zero: int, slope: float) -> str:
    if zero == 0:
        return f"{slope:.6g}"
    return f"{zero} {'-' if slope < 0.0 else '+'} {abs(slope):.6g}"


def _shifted(name: str, zero: int) -> str:
    if zero == 0:
        return name
    return f"({name} {'-' if zero > 0 else '+'} {abs(zero)})"


def _need_spring(plant: Plant, what: str) -> None:
    if plant.stiffness == 0.0:
        raise OutOfRangeError(
            "stiffness",
            0.0,
            f"{_force_unit(plant)}/{_length_unit(plant)}",
            f"a free mass has not {what}",
            "give the plant a spring",
        )


def _need_swing(plant: Plant) -> None:
    if _discriminant(plant) >= 0:
        raise OutOfRangeError(
            "damping",
            plant.damping,
            f"{_force_unit(plant)} s/{_length_unit(plant)}",
            "must be below critical damping: the plant does not swing",
            "give it less damping or a stiffer spring",
        )


def _check_band(band: float) -> None:
    if not 0.0 < band < 1.0:
        raise OutOfRangeError(
            "band", band, "", "must be above 0 and below 1", "give a fraction, 0.02 for 2 %"
        )
