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
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from plant2.errors import OutOfRangeError

if TYPE_CHECKING:
    import control

    from plant2.loopfile import Loop, Mode

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

MOTIONS = ("linear", "rotary")
DRIVES = ("current", "voltage")


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
                math.nan,
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
        Effect of the controller output.
    b_force : array of float, shape (n,)
        Effect of a disturbance force on the main mass.
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
