"""Gains for the sampled loop, what it can reach, and the list of equations they make.

Rules of this file:

- Gains are placed in the loop that runs: hold, delay, derivative filter and notches inside.
- Gains are SI, in what the actuator takes: newton or newton metre with current drive, volt with
  voltage drive, per metre or radian of measured position.
- What cannot be had is told with the nearest target that can, found by computation.
- This module does not choose words; it hands out `Equations`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from plant2.closedloop import (
    ClosedLoop,
    Controller,
    bandwidth_rad_per_s,
    circle,
    gain_crossings,
    log_pole,
    poles_delta,
    step_shares,
)
from plant2.equations import Equation, Equations, Term
from plant2.errors import DesignError, OutOfRangeError
from plant2.loopfile import Loop, Notch
from plant2.plant import (
    Plant,
    holding_effort,
    plant_of,
    state_space,
    static_gain,
)
from plant2.sampled import SampledPlant, plant_response, sample
from plant2.solve import bisect, secant

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

TAU = 2.0 * math.pi


def no_design(rule: str, remedy: str = "") -> DesignError:
    """The error that says why there is no design.

    Parameters
    ----------
    rule : str
        What stands in the way.
    remedy : str
        What to do instead.

    Returns
    -------
    DesignError
        To be raised.

    Notes
    -----
    Wording only.
    """
    return DesignError("", None, "", rule, remedy)


@dataclass(frozen=True, slots=True, kw_only=True)
class Task:
    """Everything a design starts from: the loop file, its plant, and the plant as sampled.

    Parameters
    ----------
    loop : Loop
        The loop file.
    plant : Plant
        Its plant.
    sampled : SampledPlant
        Exact sampled plant with the delay.
    count_per_position : float
        Sensor scale with polarity. [count/m or count/rad]
    effort_per_code : float
        Actuator scale with polarity. [N, N m or V per code]

    Notes
    -----
    Facts only.
    """

    loop: Loop
    plant: Plant
    sampled: SampledPlant
    count_per_position: float
    effort_per_code: float

    @property
    def period_s(self) -> float:
        """Sample period. [s]

        Notes
        -----
        1/sample rate.
        """
        return self.sampled.period_s

    @property
    def code_per_count(self) -> float:
        """What one newton per metre (volt per metre) is in codes per count, polarity left out.

        Notes
        -----
        sensor step / |effort per code|.
        """
        return 1.0 / abs(self.count_per_position * self.effort_per_code)

    @property
    def effort_limit(self) -> float:
        """Largest output either side, in whole codes. [N, N m or V]

        Notes
        -----
        limit in codes x effort per code.
        """
        return self.loop.actuator.limit_code * abs(self.effort_per_code)

    @property
    def force_limit(self) -> float:
        """Force on the main mass at the output limit, at rest. [N or N m]

        Notes
        -----
        Voltage drive at rest: force = force constant x V/R.
        """
        if self.loop.actuator.drive == "voltage":
            resistance = self.loop.actuator.resistance_ohm or math.nan
            return self.effort_limit * self.loop.actuator.force_constant / resistance
        return self.effort_limit


def task_of(loop: Loop) -> Task:
    """Build the plant of a loop file and sample it.

    Parameters
    ----------
    loop : Loop
        The loop file.

    Returns
    -------
    Task
        What a design starts from.

    Notes
    -----
    Composition only.
    """
    plant = plant_of(loop)
    actuator, sensor = loop.actuator, loop.sensor
    force = actuator.force_constant if actuator.drive == "current" else 1.0
    return Task(
        loop=loop,
        plant=plant,
        sampled=sample(
            state_space(plant), 1.0 / loop.processor.sample_rate_hz, loop.processor.delay_s
        ),
        count_per_position=sensor.polarity / sensor.step,
        effort_per_code=actuator.polarity * force * actuator.full_scale / 2 ** (actuator.bits - 1),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Gains:
    """Gains of one law, SI.

    Parameters
    ----------
    law : str
        "pd", "lead" or "pid".
    kp : float
        Proportional gain. [N/m, N m/rad, V/m or V/rad]
    kd : float
        Derivative gain. [N s/m ...]
    ki : float
        Integral gain, 0 where the law has none. [N/(m s) ...]
    kff : float
        Reference feedforward, 0 for "pid". [as kp]
    beta : float
        Set-point weight of "pid", 1 otherwise. [-]
    derivative_corner_hz : float
        Corner of the derivative filter. [Hz]
    integral_corner_hz : float or None
        Where the third pole was placed. [Hz]

    Notes
    -----
    Laws in docs/definitions.md.
    """

    law: str
    kp: float
    kd: float
    ki: float
    kff: float
    beta: float
    derivative_corner_hz: float
    integral_corner_hz: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Nearest:
    """The nearest target that works.

    Parameters
    ----------
    damping_ratio : float or None
        Unchanged from the target; None for "lead". [-]
    natural_frequency_hz : float or None
        Largest (or, for a target that is too soft, smallest) one that works. [Hz]
    bandwidth_hz : float or None
        The bandwidth that comes with it. [Hz]
    crossover_hz : float or None
        For "lead". [Hz]
    reason : str
        What binds one step (0.1 %) beyond.
    fails_at_hz : float
        The frequency one step beyond, which was tried and fails. [Hz]

    Notes
    -----
    Found by bisection on the same test that the target failed.
    """

    damping_ratio: float | None
    natural_frequency_hz: float | None
    bandwidth_hz: float | None
    crossover_hz: float | None
    reason: str
    fails_at_hz: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """Outcome of a design.

    Parameters
    ----------
    gains : Gains or None
        None when no gains exist.
    closed : ClosedLoop or None
        The loop as designed: real gains, no words.
    poles : array of complex, shape (n,), or None
        Its poles as z - 1. [-]
    pair : tuple of complex or None
        The placed pair as z - 1. [-]
    integral_pole : float or None
        The placed third pole as z - 1. [-]
    faults : tuple of str
        What is wrong; empty when the design works.
    nearest : Nearest or None
        The nearest target that works, when the target does not.
    given : bool
        The gains came from the loop file.
    notes : tuple of str
        Lines worth printing, for example what a slip of a "fastest" design costs.

    Notes
    -----
    Definitions in docs/definitions.md.
    """

    gains: Gains | None
    closed: ClosedLoop | None
    poles: Complex | None
    pair: tuple[complex, complex] | None
    integral_pole: float | None
    faults: tuple[str, ...]
    nearest: Nearest | None
    given: bool
    notes: tuple[str, ...] = field(default=())


# --- pairs of poles as one number -----------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class PairNumber:
    """p + q e with e^2 = square: a complex pair, a double pole or two real poles in one form.

    Parameters
    ----------
    p, q : float
        Parts. [-]
    square : float
        e^2: negative for a complex pair, 0 for a double pole, positive for two real poles. [-]

    Notes
    -----
    A function that vanishes at both poles has both parts zero; at the double pole q is its
    derivative. Own derivation: functions of the companion matrix of the pair.
    """

    p: float
    q: float
    square: float

    def times(self, other: PairNumber) -> PairNumber:
        """Product of two numbers of one pair.

        Parameters
        ----------
        other : PairNumber
            Second factor.

        Returns
        -------
        PairNumber
            Product.

        Notes
        -----
        (p + q e)(r + s e) = p r + square q s + (p s + q r) e.
        """
        return PairNumber(
            p=self.p * other.p + self.square * self.q * other.q,
            q=self.p * other.q + self.q * other.p,
            square=self.square,
        )

    def inverse(self) -> PairNumber:
        """Reciprocal.

        Returns
        -------
        PairNumber
            1/self.

        Raises
        ------
        ZeroDivisionError
            If the number vanishes at one of the poles.

        Notes
        -----
        (p - q e)/(p^2 - square q^2).
        """
        norm = self.p * self.p - self.square * self.q * self.q
        return PairNumber(p=self.p / norm, q=-self.q / norm, square=self.square)

    def plus(self, value: float) -> PairNumber:
        """Sum with a real number.

        Parameters
        ----------
        value : float
            Added to p. [-]

        Returns
        -------
        PairNumber
            Sum.

        Notes
        -----
        Definition.
        """
        return replace(self, p=self.p + value)

    def scaled(self, value: float) -> PairNumber:
        """Product with a real number.

        Parameters
        ----------
        value : float
            Factor. [-]

        Returns
        -------
        PairNumber
            Product.

        Notes
        -----
        Definition.
        """
        return replace(self, p=self.p * value, q=self.q * value)


def _even_odd(square: float, n: float = 1.0) -> tuple[float, float, float]:
    """cosh(n e) - 1, cosh(n e) and sinh(n e)/e for e^2 = square, smooth through 0."""
    if square < 0.0:
        root = math.sqrt(-square)
        half = math.sin(0.5 * n * root)
        odd = math.sin(n * root) / root if root * n > 1e-9 else n
        return -2.0 * half * half, math.cos(n * root), odd
    root = math.sqrt(square)
    half = math.sinh(0.5 * n * root)
    odd = math.sinh(n * root) / root if root * n > 1e-9 else n
    return 2.0 * half * half, math.cosh(n * root), odd


def pair_delta(omega_rad_per_s: float, damping_ratio: float, period_s: float) -> PairNumber:
    """z - 1 of a pair of poles of given natural frequency and damping ratio.

    Parameters
    ----------
    omega_rad_per_s : float
        Natural frequency. [rad/s]
    damping_ratio : float
        Any value above 0, 1 included. [-]
    period_s : float
        Sample period. [s]

    Returns
    -------
    PairNumber
        exp(sT) - 1, s T = -zeta w T + e, e^2 = (w T)^2 (zeta^2 - 1).

    Notes
    -----
    exp(x) cosh - 1 = expm1(x) cosh + (cosh - 1): no cancellation for slow poles.
    """
    x = -damping_ratio * omega_rad_per_s * period_s
    square = (omega_rad_per_s * period_s) ** 2 * (damping_ratio - 1.0) * (damping_ratio + 1.0)
    less, even, odd = _even_odd(square)
    return PairNumber(p=math.expm1(x) * even + less, q=math.exp(x) * odd, square=square)


def roots_of(pair: PairNumber) -> tuple[complex, complex]:
    """The two values of a pair number.

    Parameters
    ----------
    pair : PairNumber
        For example z - 1 of a pair.

    Returns
    -------
    tuple of complex
        p +- q sqrt(square).

    Notes
    -----
    Definition of the pair number.
    """
    root = complex(pair.square) ** 0.5
    return pair.p + pair.q * root, pair.p - pair.q * root


def _plant_at_pair(sampled: SampledPlant, delta: PairNumber, s_real: float) -> PairNumber:
    """G at a pair of points; s_real is Re(s) T of the pair."""
    n = sampled.psi.shape[0]
    square = delta.square
    rhs_p, rhs_q = np.zeros(n), np.zeros(n)
    for column, lag in (
        (sampled.gamma0, sampled.whole_delay),
        (sampled.gamma1, sampled.whole_delay + 1),
    ):
        if not np.any(column):
            continue
        _, even, odd = _even_odd(square, float(lag))
        scale = math.exp(-s_real * lag)
        rhs_p += column * (scale * even)
        rhs_q -= column * (scale * odd)
    eye = np.eye(n)
    block = np.block(
        [
            [delta.p * eye - sampled.psi, square * delta.q * eye],
            [delta.q * eye, delta.p * eye - sampled.psi],
        ]
    )
    x = np.linalg.solve(block, np.concatenate([rhs_p, rhs_q]))
    return PairNumber(
        p=float(sampled.c_measured @ x[:n]), q=float(sampled.c_measured @ x[n:]), square=square
    )


# --- notches ------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """A second-order section of DC gain 1 in delta: b (d^2 + z1 d + z0)/(d^2 + p1 d + p0).

    Parameters
    ----------
    z1, z0, p1, p0 : float
        Coefficients. [-]

    Notes
    -----
    b = p0/z0 makes the gain at rest exactly 1.
    """

    z1: float
    z0: float
    p1: float
    p0: float

    @property
    def gain(self) -> float:
        """Leading coefficient p0/z0. [-]

        Notes
        -----
        DC gain 1.
        """
        return self.p0 / self.z0


def notch_section(notch: Notch, period_s: float) -> Section:
    """Sampled notch with zeros and poles mapped by exp(sT).

    Parameters
    ----------
    notch : Notch
        Frequency, width and depth.
    period_s : float
        Sample period. [s]

    Returns
    -------
    Section
        DC gain 1.

    Notes
    -----
    N(s) = (s^2 + 2 zz w s + w^2)/(s^2 + 2 zp w s + w^2), width = 2 zp, depth = 20 log10(zp/zz).
    Matched poles and zeros (Franklin, Powell, Workman, Digital Control of Dynamic Systems, ch. 6,
    from memory).
    """

    def sum_and_product(damping: float) -> tuple[float, float]:
        pair = pair_delta(notch.frequency_rad_per_s, damping, period_s)
        return -2.0 * pair.p, pair.p * pair.p - pair.square * pair.q * pair.q

    z1, z0 = sum_and_product(notch.zz)
    p1, p0 = sum_and_product(notch.zp)
    return Section(z1=z1, z0=z0, p1=p1, p0=p0)


def _sections(task: Task) -> tuple[Section, ...]:
    return tuple(notch_section(n, task.period_s) for n in task.loop.aim.notches)


# --- gains --------------------------------------------------------------------------------------


def _filter_step(corner_hz: float, period_s: float) -> float:
    """1 - a of the derivative filter, a = exp(-2 pi f T)."""
    return -math.expm1(-TAU * corner_hz * period_s)


def default_derivative_corner_hz(task: Task, natural_frequency_hz: float) -> float:
    """Corner of the derivative filter where the loop file gives none.

    Parameters
    ----------
    task : Task
        Sample rate.
    natural_frequency_hz : float
        Of the placed pair ("lead": half the crossover). [Hz]

    Returns
    -------
    float
        min(10 x natural frequency, sample rate/4). [Hz]

    Notes
    -----
    Ten times the loop's frequency costs little phase; above a quarter of the sample rate the
    filter does nothing but pass noise (common practice).
    """
    return min(10.0 * natural_frequency_hz, 0.25 * task.loop.processor.sample_rate_hz)


def feedforward(task: Task, kp: float) -> float:
    """Reference feedforward that makes the gain at rest from reference to position 1.

    Parameters
    ----------
    task : Task
        The plant.
    kp : float
        Proportional gain, not used for a free mass. [N/m ...]

    Returns
    -------
    float
        Stiffness of the plant in the drive's unit, 0 for a free mass. [N/m ...]

    Notes
    -----
    (kp + kff) G0/(1 + kp G0) = 1 gives kff = 1/G0, whatever kp.
    """
    gain = static_gain(task.plant)
    return 0.0 if gain is None else 1.0 / gain


def _set_point_weight(kp: float, ki: float, delta_r: float, period_s: float) -> float:
    """beta that puts a zero of the reference path on the pole 1 + delta_r."""
    return -ki * period_s * (1.0 + delta_r) / (kp * delta_r) if kp and delta_r else 1.0


def place_gains(task: Task, *, natural_frequency_rad_per_s: float, damping_ratio: float) -> Gains:
    """Gains of "pd" or "pid" that put a pair of closed-loop poles where they are wanted, exactly.

    Parameters
    ----------
    task : Task
        Plant, law, corners, notches.
    natural_frequency_rad_per_s : float
        Of the pair, as s = ln(z)/T. [rad/s]
    damping_ratio : float
        Of the pair, any value above 0, 1 included. [-]

    Returns
    -------
    Gains
        SI. Signs are not judged here.

    Raises
    ------
    DesignError
        If the equations have no solution (a pole of the plant or the third pole on the pair, or
        the pair above half the sample rate).

    Notes
    -----
    The controller is linear in its gains: Kp + Kd D(z) + Ki I(z) = -1/(G(z) N(z)) at each wanted
    pole (dominant pole placement, Astrom & Hagglund, Advanced PID Control, 2006, ch. 6, from
    memory); the pair enters as one number, so that a double pole needs no special case.
    """
    period = task.period_s
    omega, zeta = natural_frequency_rad_per_s, damping_ratio
    aim = task.loop.aim
    if zeta < 1.0 and omega * math.sqrt(1.0 - zeta * zeta) * period >= math.pi:
        raise no_design("the wanted pair lies above half the sample rate")
    corner = aim.derivative_corner_hz or default_derivative_corner_hz(task, omega / TAU)
    w = _filter_step(corner, period)
    sections = _sections(task)
    delta = pair_delta(omega, zeta, period)
    try:
        g = _plant_at_pair(task.sampled, delta, -zeta * omega * period)
        for section in sections:
            square = delta.times(delta)
            num = PairNumber(
                p=square.p + section.z1 * delta.p + section.z0,
                q=square.q + section.z1 * delta.q,
                square=delta.square,
            )
            den = PairNumber(
                p=square.p + section.p1 * delta.p + section.p0,
                q=square.q + section.p1 * delta.q,
                square=delta.square,
            )
            g = g.times(num.scaled(section.gain)).times(den.inverse())
        c = g.inverse().scaled(-1.0)
        derivative = delta.times(delta.plus(w).inverse()).scaled(w / period)
        integral_corner: float | None = None
        ki = 0.0
        if aim.law == "pid":
            integral_corner = aim.integral_corner_hz or 0.25 * omega / TAU
            delta_r = math.expm1(-TAU * integral_corner * period)
            integral = delta.inverse().scaled(period).plus(period)
            point = np.array([complex(delta_r)])
            g_r, _ = plant_response(task.sampled, point, task.sampled.c_measured)
            n_r = _notch_at(sections, point)
            matrix = np.array(
                [
                    [1.0, derivative.p, integral.p],
                    [0.0, derivative.q, integral.q],
                    [
                        1.0,
                        w / period * delta_r / (delta_r + w),
                        period * (1.0 + delta_r) / delta_r,
                    ],
                ]
            )
            wanted = np.array([c.p, c.q, float((-1.0 / (g_r * n_r)).real[0])])
            scale = np.abs(matrix).max(axis=0)
            kp, kd, ki = (float(v) for v in np.linalg.solve(matrix / scale, wanted) / scale)
        else:
            kd = c.q / derivative.q
            kp = c.p - kd * derivative.p
    except (np.linalg.LinAlgError, ZeroDivisionError, OutOfRangeError) as fault:
        raise no_design(
            "the equations for the gains have no solution at this target; "
            "move it, or the integral corner, by a percent"
        ) from fault
    if not all(math.isfinite(v) for v in (kp, kd, ki)):
        raise no_design("the equations for the gains have no finite solution at this target")
    beta = 1.0
    if aim.law == "pid":
        beta = aim.beta if aim.beta is not None else _set_point_weight(kp, ki, delta_r, period)
    return Gains(
        law=aim.law,
        kp=kp,
        kd=kd,
        ki=ki,
        kff=feedforward(task, kp) if aim.law == "pd" else 0.0,
        beta=beta,
        derivative_corner_hz=corner,
        integral_corner_hz=integral_corner,
    )


def lead_gains(task: Task, *, crossover_rad_per_s: float, phase_margin_rad: float) -> Gains:
    """Gains of "lead" for a gain crossover and a phase margin of the sampled loop.

    Parameters
    ----------
    task : Task
        Plant, derivative corner, notches.
    crossover_rad_per_s : float
        Wanted gain crossing. [rad/s]
    phase_margin_rad : float
        Wanted phase margin there. [rad]

    Returns
    -------
    Gains
        SI. Signs and stability are not judged here.

    Raises
    ------
    DesignError
        If the crossover is not below half the sample rate.

    Notes
    -----
    Kp + Kd D(z) = -exp(j PM)/(G(z) N(z)) on the unit circle.
    """
    period = task.period_s
    theta = crossover_rad_per_s * period
    if theta >= math.pi:
        raise no_design("the wanted crossover lies above half the sample rate")
    aim = task.loop.aim
    corner = aim.derivative_corner_hz or default_derivative_corner_hz(
        task, 0.5 * crossover_rad_per_s / TAU
    )
    w = _filter_step(corner, period)
    point = circle(np.array([theta]))
    g, _ = plant_response(task.sampled, point, task.sampled.c_measured)
    c = complex((-np.exp(1j * phase_margin_rad) / (g * _notch_at(_sections(task), point)))[0])
    derivative = complex((w / period * point / (point + w))[0])
    kd = c.imag / derivative.imag
    kp = c.real - kd * derivative.real
    return Gains(
        law="lead",
        kp=kp,
        kd=kd,
        ki=0.0,
        kff=feedforward(task, kp),
        beta=1.0,
        derivative_corner_hz=corner,
        integral_corner_hz=None,
    )


def _notch_at(sections: tuple[Section, ...], delta: Complex) -> Complex:
    value = np.ones_like(delta)
    for s in sections:
        value = value * (
            s.gain * (delta * delta + s.z1 * delta + s.z0) / (delta * delta + s.p1 * delta + s.p0)
        )
    return value


def controller_of(task: Task, gains: Gains) -> Controller:
    """Controller of given gains in delta, raw codes from raw counts.

    Parameters
    ----------
    task : Task
        Scales, notches.
    gains : Gains
        SI gains.

    Returns
    -------
    Controller
        Falling powers of delta. [code per count]

    Notes
    -----
    D(z) = (1-a)/T (z-1)/(z-a), I(z) = T z/(z-1). A second path to the same transfer functions as
    `plant2.equations.transfer` of `controller_equations`; a test compares them.
    """
    period = task.period_s
    w = _filter_step(gains.derivative_corner_hz, period)
    # over the common denominator (d + w) [x d]
    unit = np.array([1.0, w])
    action = np.array([gains.kd * w / period, 0.0])
    if gains.law == "pid":
        den = np.polymul(unit, [1.0, 0.0])
        integral = gains.ki * period * np.polymul(unit, [1.0, 1.0])
        whole = np.polymul(unit, [1.0, 0.0])
        position = np.polyadd(
            np.polyadd(gains.kp * whole, np.polymul(action, [1.0, 0.0])), integral
        )
        reference = np.polyadd(gains.kp * gains.beta * whole, integral)
    else:
        den = unit
        position = np.polyadd(gains.kp * unit, action)
        reference = (gains.kp + gains.kff) * unit
        if gains.law == "lead":
            reference = np.polyadd(reference, action)
    for s in _sections(task):
        den = np.polymul(den, [1.0, s.p1, s.p0])
        factor = s.gain * np.array([1.0, s.z1, s.z0])
        position, reference = np.polymul(position, factor), np.polymul(reference, factor)
    scale = 1.0 / (task.count_per_position * task.effort_per_code)

    def padded(p: NDArray[np.floating[Any]]) -> Real:
        return np.concatenate([np.zeros(len(den) - len(p)), np.asarray(p, dtype=float)])

    return Controller(
        reference=padded(reference) * scale, position=padded(position) * scale, denominator=den
    )


def closed_loop(task: Task, gains: Gains) -> ClosedLoop:
    """The sampled loop with given real gains.

    Parameters
    ----------
    task : Task
        Plant and scales.
    gains : Gains
        SI gains.

    Returns
    -------
    ClosedLoop
        The loop as designed.

    Notes
    -----
    Composition only.
    """
    return ClosedLoop(
        sampled=task.sampled,
        controller=controller_of(task, gains),
        count_per_position=task.count_per_position,
        effort_per_code=task.effort_per_code,
    )


# --- judging a design ---------------------------------------------------------------------------


def holding_faults(task: Task) -> tuple[str, ...]:
    """Why the output limit cannot hold the ends of the checked step, if it cannot.

    Parameters
    ----------
    task : Task
        Plant, limit, step.

    Returns
    -------
    tuple of str
        Empty when it can.

    Notes
    -----
    stiffness x |position - rest position| + |bias| + friction must stay below the force at the
    output limit, for start and both targets.
    """
    loop = task.loop
    mechanics = loop.mechanics
    unit = "N" if mechanics.motion == "linear" else "N m"
    worst = 0.0
    for position in (0.0, loop.step, -loop.step):
        effort = abs(holding_effort(task.plant, position))
        ratio = task.force_limit / task.effort_limit
        worst = max(worst, effort * ratio + mechanics.friction)
    if worst <= task.force_limit:
        return ()
    return (
        f"the output limit cannot hold the target: {worst:.4g} {unit} needed with stiffness, bias "
        f"and friction, {task.force_limit:.4g} {unit} available",
    )


def _pair_indices(poles: Complex, pair: tuple[complex, complex]) -> set[int]:
    chosen: set[int] = set()
    for value in pair:
        order = np.argsort(np.abs(poles - value), kind="stable")
        for i in order:
            if int(i) not in chosen:
                chosen.add(int(i))
                break
    return chosen


def dominance_faults(
    closed: ClosedLoop,
    poles: Complex,
    pair: tuple[complex, complex],
    integral_pole: float | None,
    band: float,
) -> tuple[str, ...]:
    """Poles beside the placed pair that matter in the step response.

    Parameters
    ----------
    closed : ClosedLoop
        A stable loop.
    poles : array of complex, shape (n,)
        Its poles as z - 1. [-]
    pair : tuple of complex
        The placed pair. [-]
    integral_pole : float or None
        The placed third pole, which is exempt. [-]
    band : float
        Largest harmless share. [-]

    Returns
    -------
    tuple of str
        One sentence a pole; empty when the pair is dominant.

    Notes
    -----
    Definition of dominance in docs/definitions.md.
    """
    skip = _pair_indices(poles, pair)
    if integral_pole is not None:
        left = [i for i in range(len(poles)) if i not in skip]
        skip.add(min(left, key=lambda i: abs(poles[i] - integral_pole)))
    threshold = max(abs(1.0 + p) for p in pair) ** 2
    slow = [i for i in range(len(poles)) if i not in skip and abs(1.0 + poles[i]) > threshold]
    if not slow:
        return ()
    shares = step_shares(closed, poles)
    period = closed.sampled.period_s
    out = []
    for i in slow:
        if shares[i] >= band and poles[i].imag >= 0.0:
            s = complex(log_pole(poles[i], period))
            out.append(
                f"the placed pair is not dominant: a pole at {abs(s) / TAU:.4g} Hz "
                f"(|z| = {abs(1.0 + poles[i]):.4f}) has {100.0 * shares[i]:.3g} % of the step"
            )
    return tuple(out)


def gain_faults(gains: Gains) -> tuple[str, ...]:
    """Gains of wrong sign.

    Parameters
    ----------
    gains : Gains
        SI gains.

    Returns
    -------
    tuple of str
        One sentence a gain; empty when none is negative.

    Notes
    -----
    A negative proportional or derivative gain means a target softer or less damped than the plant
    itself; on hardware it is also what a wrong sign looks like, so it is refused.
    """
    out = []
    for name, value in (("kp", gains.kp), ("kd", gains.kd), ("ki", gains.ki)):
        if value < 0.0:
            why = {
                "kp": "the target is softer than the plant, or too fast for the delay",
                "kd": "the target is less damped than the plant, or too fast for the delay",
                "ki": "no positive integral gain puts the poles there",
            }[name]
            out.append(f"{name} = {value:.4g} is negative: {why}")
    return tuple(out)


@dataclass(frozen=True, slots=True, kw_only=True)
class Trial:
    """One target tried.

    Parameters
    ----------
    gains : Gains or None
        None when no gains exist.
    closed : ClosedLoop or None
        Loop with these gains.
    poles : array of complex or None
        Its poles as z - 1. [-]
    pair : tuple of complex or None
        The placed pair. [-]
    integral_pole : float or None
        The placed third pole. [-]
    faults : tuple of str
        Empty when the target works.

    Notes
    -----
    Facts only.
    """

    gains: Gains | None
    closed: ClosedLoop | None
    poles: Complex | None
    pair: tuple[complex, complex] | None
    integral_pole: float | None
    faults: tuple[str, ...]


def settling_band(loop: Loop) -> float:
    """The band that dominance, "fastest" and the step figures use.

    Parameters
    ----------
    loop : Loop
        The loop file.

    Returns
    -------
    float
        limits.settling_band, or 0.01. [-]

    Notes
    -----
    1 % where the loop file gives none.
    """
    return loop.limits.settling_band if loop.limits.settling_band is not None else 0.01


def try_pair(task: Task, omega_rad_per_s: float, damping_ratio: float) -> Trial:
    """Place a pair and judge the loop.

    Parameters
    ----------
    task : Task
        Plant and law.
    omega_rad_per_s : float
        Natural frequency of the pair. [rad/s]
    damping_ratio : float
        Damping ratio of the pair. [-]

    Returns
    -------
    Trial
        With faults: gain signs, stability, dominance.

    Notes
    -----
    Order of the tests: existence, signs, stability, dominance; all that apply are told.
    """
    try:
        gains = place_gains(
            task, natural_frequency_rad_per_s=omega_rad_per_s, damping_ratio=damping_ratio
        )
    except DesignError as fault:
        return Trial(
            gains=None, closed=None, poles=None, pair=None, integral_pole=None, faults=(str(fault),)
        )
    closed = closed_loop(task, gains)
    poles = poles_delta(closed)
    pair = roots_of(pair_delta(omega_rad_per_s, damping_ratio, task.period_s))
    third = (
        None
        if gains.integral_corner_hz is None
        else math.expm1(-TAU * gains.integral_corner_hz * task.period_s)
    )
    faults = list(gain_faults(gains))
    if not _stable(poles):
        faults.append(_unstable_text(poles, task.period_s))
    else:
        faults += dominance_faults(closed, poles, pair, third, settling_band(task.loop))
    return Trial(
        gains=gains,
        closed=closed,
        poles=poles,
        pair=pair,
        integral_pole=third,
        faults=tuple(faults),
    )


def _stable(poles: Complex) -> bool:
    return bool(np.all(2.0 * poles.real + np.abs(poles) ** 2 < -1e-14))


def _unstable_text(poles: Complex, period_s: float) -> str:
    worst = poles[int(np.argmax(np.abs(1.0 + poles)))]
    s = complex(log_pole(worst, period_s))
    return (
        f"the loop is unstable: a pole at {abs(s.imag) / TAU:.4g} Hz with "
        f"|z| = {abs(1.0 + worst):.6f}"
    )


def try_lead(task: Task, crossover_rad_per_s: float, phase_margin_rad: float) -> Trial:
    """Lead gains for a crossover and a phase margin, judged.

    Parameters
    ----------
    task : Task
        Plant.
    crossover_rad_per_s : float
        Wanted last gain crossing. [rad/s]
    phase_margin_rad : float
        Wanted phase margin. [rad]

    Returns
    -------
    Trial
        With faults: gain signs, stability, a later crossing.

    Notes
    -----
    The crossover must be the last gain crossing and the loop stable, else there is no design.
    """
    try:
        gains = lead_gains(
            task, crossover_rad_per_s=crossover_rad_per_s, phase_margin_rad=phase_margin_rad
        )
    except DesignError as fault:
        return Trial(
            gains=None, closed=None, poles=None, pair=None, integral_pole=None, faults=(str(fault),)
        )
    closed = closed_loop(task, gains)
    poles = poles_delta(closed)
    faults = list(gain_faults(gains))
    if not _stable(poles):
        faults.append(_unstable_text(poles, task.period_s))
    else:
        crossings = gain_crossings(closed, poles)
        last = crossings[-1].omega_rad_per_s if crossings else 0.0
        if last > crossover_rad_per_s * (1.0 + 1e-6):
            faults.append(
                f"the loop gain crosses 1 again at {last / TAU:.4g} Hz, above the wanted crossover"
            )
    return Trial(
        gains=gains,
        closed=closed,
        poles=poles,
        pair=None,
        integral_pole=None,
        faults=tuple(faults),
    )


# --- nearest target that works --------------------------------------------------------------------

_STEP = 1.001  # one step of the nearest target: 0.1 %


def _nearest(
    attempt: Callable[[float], Trial], start: float, highest: float
) -> tuple[float, Trial, str, float] | None:
    """Largest working frequency at or below start, else the smallest above it."""

    def works(x: float) -> bool:
        return not attempt(x).faults

    for factor in (1.0 / 1.03, 1.03):
        bad, x = start, start
        for _ in range(320):
            x = x * factor
            if x > highest:
                break
            if works(x):
                good = x
                while max(good / bad, bad / good) > 1.0 + 0.25 * (_STEP - 1.0):
                    middle = math.sqrt(good * bad)
                    if works(middle):
                        good = middle
                    else:
                        bad = middle
                beyond = good * _STEP if bad > good else good / _STEP
                trial = attempt(beyond)
                while not trial.faults:
                    # a sliver of infeasible targets between: go on to its far side
                    good = beyond
                    beyond = good * _STEP if bad > good else good / _STEP
                    trial = attempt(beyond)
                return good, attempt(good), trial.faults[0], beyond
            bad = x
    return None


def _nearest_pair(task: Task, omega: float, zeta: float) -> Nearest | None:
    highest = math.pi / task.period_s
    found = _nearest(lambda w: try_pair(task, w, zeta), min(omega, highest), highest)
    if found is None:
        return None
    good, trial, reason, beyond = found
    if trial.closed is None:
        return None
    width = bandwidth_rad_per_s(trial.closed, trial.poles)
    return Nearest(
        damping_ratio=zeta,
        natural_frequency_hz=good / TAU,
        bandwidth_hz=None if width is None else width / TAU,
        crossover_hz=None,
        reason=reason,
        fails_at_hz=beyond / TAU,
    )


def _nearest_lead(task: Task, omega: float, margin: float) -> Nearest | None:
    highest = math.pi / task.period_s
    found = _nearest(lambda w: try_lead(task, w, margin), min(omega, highest), highest)
    if found is None:
        return None
    good, trial, reason, beyond = found
    if trial.closed is None:
        return None
    width = bandwidth_rad_per_s(trial.closed, trial.poles)
    return Nearest(
        damping_ratio=None,
        natural_frequency_hz=None,
        bandwidth_hz=None if width is None else width / TAU,
        crossover_hz=good / TAU,
        reason=reason,
        fails_at_hz=beyond / TAU,
    )


# --- targets ------------------------------------------------------------------------------------


def solve_bandwidth(task: Task, bandwidth_hz: float, damping_ratio: float) -> float:
    """Natural frequency of the placed pair at which the sampled loop has the wanted bandwidth.

    Parameters
    ----------
    task : Task
        Plant and law.
    bandwidth_hz : float
        Wanted -3 dB bandwidth from reference to position. [Hz]
    damping_ratio : float
        Of the placed pair. [-]

    Returns
    -------
    float
        Natural frequency. [rad/s]

    Raises
    ------
    DesignError
        If no stable loop with this damping ratio has that bandwidth.

    Notes
    -----
    Secant steps in ln(frequency) from the textbook ratio of bandwidth to natural frequency; when
    they leave the region of stable loops, a scan brackets the root.
    """
    wanted = TAU * bandwidth_hz

    def excess(log_omega: float) -> float | None:
        omega = math.exp(log_omega)
        try:
            gains = place_gains(
                task, natural_frequency_rad_per_s=omega, damping_ratio=damping_ratio
            )
        except DesignError:
            return None
        closed = closed_loop(task, gains)
        poles = poles_delta(closed, polish=False)
        if not _stable(poles):
            return None
        width = bandwidth_rad_per_s(closed, poles)
        return None if width is None else math.log(width / wanted)

    z2 = damping_ratio * damping_ratio
    ratio = math.sqrt(max(1.0 - 2.0 * z2 + math.sqrt((1.0 - 2.0 * z2) ** 2 + 1.0), 1e-6))
    start = math.log(wanted / ratio)
    root = secant(excess, start, tolerance=1e-13)
    if root is not None:
        return math.exp(root)
    # scan upward through stable loops for a change of sign
    previous: tuple[float, float] | None = None
    for x in np.arange(start - 3.0, min(start + 2.0, math.log(math.pi / task.period_s)), 0.02):
        value = excess(float(x))
        if value is None:
            previous = None
            continue
        if previous is not None and previous[1] < 0.0 <= value and value - previous[1] < 0.3:
            root = bisect(lambda t: _must(excess(t)), previous[0], float(x), tolerance=1e-13)
            return math.exp(root)
        previous = (float(x), value)
    raise no_design(
        f"no stable loop with damping ratio {damping_ratio:g} has a bandwidth of "
        f"{bandwidth_hz:.6g} Hz at this sample rate and delay"
    )


def _must(value: float | None) -> float:
    return math.nan if value is None else value


def design(loop: Loop, task: Task | None = None, *, seek_nearest: bool = True) -> Design:
    """Choose gains for the loop file's targets, or take its given gains, and judge them.

    Parameters
    ----------
    loop : Loop
        The loop file, with a damping ratio ("fastest" is resolved by `fastest_damping`).
    task : Task or None
        Its task, if already built.
    seek_nearest : bool
        Whether to look for the nearest target that works.

    Returns
    -------
    Design
        With faults and the nearest target that works when the target does not.

    Raises
    ------
    OutOfRangeError
        If the damping ratio is still "fastest".

    Notes
    -----
    Definitions in docs/definitions.md.
    """
    task = task or task_of(loop)
    aim = loop.aim
    hold = holding_faults(task)
    if aim.kp is not None:
        return _given(task, hold)
    if aim.law == "lead":
        omega = TAU * (aim.crossover_hz or math.nan)
        margin = math.radians(aim.phase_margin_deg or math.nan)
        trial = try_lead(task, omega, margin)
        pair = None
        if trial.closed is not None and trial.poles is not None and _stable(trial.poles):
            pair = leading_pair(trial.closed, trial.poles)
        return Design(
            gains=trial.gains,
            closed=trial.closed,
            poles=trial.poles,
            pair=pair,
            integral_pole=None,
            faults=trial.faults + hold,
            nearest=_nearest_lead(task, omega, margin) if trial.faults and seek_nearest else None,
            given=False,
        )
    if aim.damping_ratio is None:
        raise OutOfRangeError(
            "damping_ratio", math.nan, "", "must be a number here", "resolve fastest first"
        )
    zeta = aim.damping_ratio
    if aim.natural_frequency_hz is not None:
        omega = TAU * aim.natural_frequency_hz
    else:
        try:
            omega = solve_bandwidth(task, aim.bandwidth_hz or math.nan, zeta)
        except DesignError as fault:
            return Design(
                gains=None,
                closed=None,
                poles=None,
                pair=None,
                integral_pole=None,
                faults=(str(fault), *hold),
                nearest=_nearest_pair(task, TAU * (aim.bandwidth_hz or math.nan), zeta)
                if seek_nearest
                else None,
                given=False,
            )
    trial = try_pair(task, omega, zeta)
    return Design(
        gains=trial.gains,
        closed=trial.closed,
        poles=trial.poles,
        pair=trial.pair,
        integral_pole=trial.integral_pole,
        faults=trial.faults + hold,
        nearest=_nearest_pair(task, omega, zeta) if trial.faults and seek_nearest else None,
        given=False,
    )


def _given(task: Task, hold: tuple[str, ...]) -> Design:
    """Judge gains that came with the loop file."""
    aim = task.loop.aim
    kp, kd, ki = aim.kp or 0.0, aim.kd or 0.0, aim.ki or 0.0
    corner = aim.derivative_corner_hz
    if corner is None:
        # the natural frequency that kp gives the bare mass stands in for the unknown target
        per_effort = (
            task.plant.force_constant / (task.plant.resistance_ohm or math.nan)
            if task.plant.drive == "voltage"
            else 1.0
        )
        stiffness = max(task.plant.stiffness + kp * per_effort, 0.0)
        corner = default_derivative_corner_hz(
            task, max(math.sqrt(stiffness / task.plant.mass) / TAU, 1e-3)
        )
    gains = Gains(
        law=aim.law,
        kp=kp,
        kd=kd,
        ki=ki,
        kff=0.0 if aim.law == "pid" else feedforward(task, kp),
        beta=1.0 if aim.beta is None else aim.beta,
        derivative_corner_hz=corner,
        integral_corner_hz=None,
    )
    closed = closed_loop(task, gains)
    poles = poles_delta(closed)
    faults = list(gain_faults(gains))
    pair = None
    third = None
    if not _stable(poles):
        faults.append(_unstable_text(poles, task.period_s))
    else:
        if aim.law == "pid" and ki > 0.0:
            real = [p.real for p in poles if p.imag == 0.0 and p.real > -1.0]
            third = max(real) if real else None
            if aim.beta is None and third is not None:
                weight = _set_point_weight(kp, ki, third, task.period_s)
                # a pole that is not the integral's own would ask for a weight of no use
                if 0.0 <= weight <= 1.0:
                    gains = replace(gains, beta=weight)
                    closed = closed_loop(task, gains)
                else:
                    third = None
        pair = leading_pair(closed, poles, third)
    return Design(
        gains=gains,
        closed=closed,
        poles=poles,
        pair=pair,
        integral_pole=third,
        faults=tuple(faults) + hold,
        nearest=None,
        given=True,
    )


def leading_pair(
    closed: ClosedLoop, poles: Complex, integral_pole: float | None = None
) -> tuple[complex, complex] | None:
    """The pair that stands for the placed one where nothing was placed (given gains, "lead").

    Parameters
    ----------
    closed : ClosedLoop
        A stable loop.
    poles : array of complex, shape (n,)
        Its poles as z - 1. [-]
    integral_pole : float or None
        Left out of the choice. [-]

    Returns
    -------
    tuple of complex or None
        The conjugate pair, or the two real poles, with the largest share of the step response.

    Notes
    -----
    Shares as in `step_shares`.
    """
    shares = step_shares(closed, poles)
    order = [
        int(i)
        for i in np.argsort(-shares, kind="stable")
        if integral_pole is None or abs(poles[i] - integral_pole) > 1e-9 * abs(integral_pole)
    ]
    if not order:
        return None
    first = complex(poles[order[0]])
    if first.imag != 0.0:
        return first, first.conjugate()
    for i in order[1:]:
        if poles[i].imag == 0.0:
            return first, complex(poles[i])
    return None


@dataclass(frozen=True, slots=True, kw_only=True)
class Settled:
    """What "fastest" needs of a trial.

    Parameters
    ----------
    settling_time_s : float
        As built; nan when it does not settle. [s]
    overshoot : float
        As built, fraction of the step. [-]

    Notes
    -----
    Linear response of the loop as built, exact between samples.
    """

    settling_time_s: float
    overshoot: float


def fastest_damping(
    loop: Loop,
    task: Task,
    evaluate: Callable[[Loop], Settled | None],
    *,
    overshoot_allowed: float,
) -> tuple[float, str]:
    """The damping ratio of least settling time with the overshoot inside the band.

    Parameters
    ----------
    loop : Loop
        The loop file; its damping ratio is replaced in every trial.
    task : Task
        Its task.
    evaluate : callable
        Settling time and overshoot of a loop with a damping ratio; None when it has no design.
    overshoot_allowed : float
        Fraction of the step. [-]

    Returns
    -------
    float
        Damping ratio. [-]
    str
        What a slip costs: settling time one percent below.

    Raises
    ------
    DesignError
        If no damping ratio between 0.3 and 1.3 has a working design.

    Notes
    -----
    The settling time jumps where the overshoot leaves the band (the textbook optimum stands on
    that cliff), so the search is a scan and a bisection on the edge, not a descent.
    """

    def trial(zeta: float) -> Settled | None:
        return evaluate(replace(loop, aim=replace(loop.aim, damping_ratio=zeta, fastest=False)))

    def admitted(settled: Settled | None) -> bool:
        return (
            settled is not None
            and settled.overshoot <= overshoot_allowed
            and math.isfinite(settled.settling_time_s)
        )

    best: tuple[float, float] | None = None
    grid = np.linspace(0.3, 1.3, 26)
    seen = [(float(z), trial(float(z))) for z in grid]
    for z, settled in seen:
        if settled is not None and admitted(settled):
            if best is None or settled.settling_time_s < best[1]:
                best = (z, settled.settling_time_s)
    if best is None:
        raise no_design(
            "no damping ratio between 0.3 and 1.3 gives a working design with the overshoot "
            "inside the settling band"
        )
    # refine: the admitted edge below the best point, and the neighbourhood above it
    step = float(grid[1] - grid[0])
    low, high = best[0] - step, best[0]
    for _ in range(14):
        middle = 0.5 * (low + high)
        settled = trial(middle)
        if settled is not None and admitted(settled):
            high = middle
            if settled.settling_time_s < best[1]:
                best = (middle, settled.settling_time_s)
        else:
            low = middle
    for z in np.linspace(best[0] - 0.5 * step, best[0] + 0.5 * step, 17):
        settled = trial(float(z))
        if settled is not None and admitted(settled) and settled.settling_time_s < best[1]:
            best = (float(z), settled.settling_time_s)
    slip = trial(0.99 * best[0])
    cost = (
        "does not settle"
        if slip is None or not math.isfinite(slip.settling_time_s)
        else f"settles in {1e3 * slip.settling_time_s:.4g} ms"
    )
    return best[0], (
        f"fastest: damping ratio {best[0]:.4f} settles in {1e3 * best[1]:.4g} ms (linear loop); "
        f"one percent less damping {cost}"
    )


# --- the list of equations ------------------------------------------------------------------------


def credible_speed(task: Task) -> float:
    """Largest speed that the main mass can reach within its travel. [m/s or rad/s]

    Parameters
    ----------
    task : Task
        Plant and limits.

    Returns
    -------
    float
        Speed. [m/s or rad/s]

    Notes
    -----
    Energy: all force at the limit, bias and spring over the whole travel, nothing lost;
    m v^2/2 = F s. A bound for a plant as described, used to choose ranges, not a proof.
    """
    m = task.loop.mechanics
    span = 2.0 * m.travel
    spring = m.stiffness * (m.travel + abs(m.rest_position))
    force = task.force_limit + abs(m.bias_force) + spring
    return math.sqrt(2.0 * force * span / m.mass)


def controller_equations(task: Task, gains: Gains, word_bits: int) -> Equations:
    """The ordered list of difference equations of a law, in counts and codes.

    Parameters
    ----------
    task : Task
        Scales, ranges, notches.
    gains : Gains
        SI gains.
    word_bits : int
        16 or 32; decides which differences need a limit.

    Returns
    -------
    Equations
        Real coefficients.

    Notes
    -----
    Laws and structure in docs/definitions.md. A notch runs on differences, n = n[1]
    + a2 (n[1] - n[2]) + sigma (s[1] - n[1]) + b0 (s - s[1]) - b2 (s[1] - s[2]), whose gain at
    rest is 1 for any words; sigma has a format of its own, so that slow poles keep their frequency
    in few bits (own derivation, in the spirit of delta forms: Middleton & Goodwin, IEEE TAC 31,
    1986, from memory).
    """
    loop = task.loop
    sensor, actuator = loop.sensor, loop.actuator
    period = task.period_s
    unit = task.code_per_count
    w = _filter_step(gains.derivative_corner_hz, period)
    limit = float(actuator.limit_code)
    sensor_low = sensor.low_count - sensor.zero_count
    sensor_high = sensor.high_count - sensor.zero_count
    if sensor.polarity < 0:
        sensor_low, sensor_high = -sensor_high, -sensor_low
    # the one count whose negative does not fit a word acts as its neighbour
    top = 2 ** (word_bits - 1) - 1
    sensor_low, sensor_high = max(sensor_low, -top - 1), min(sensor_high, top)
    reach = math.floor(loop.mechanics.travel / sensor.step * (1.0 + 1e-12))
    # reference: the code range, and the travel
    low = max(sensor_low, -reach)
    high = min(sensor_high, reach)
    position_span = float(max(-sensor_low, sensor_high))
    reference_span = float(max(-low, high))

    def count_input(name: str, source: str, lo: int, hi: int, what: str, settles: str) -> Equation:
        sign = float(sensor.polarity)
        return Equation(
            name=name,
            meaning=what,
            unit="count",
            terms=(Term(signal=source, coefficient=sign),),
            constant=-sign * sensor.zero_count,
            limit=(float(lo), float(hi)),
            span=float(max(-lo, hi)),
            frac_bits=0,
            settles=settles,
        )

    added_limit = 2.0**actuator.bits
    if added_limit > 2 ** (word_bits - 1) - 1:
        added_limit = float(2 ** (word_bits - 1) - 1)
    rows = [
        count_input(
            "reference_count",
            "reference",
            low,
            high,
            "reference, from sensor zero, within code range and travel",
            "position",
        ),
        count_input(
            "position_count",
            "position",
            sensor_low,
            sensor_high,
            "position, from sensor zero, within the code range",
            "position",
        ),
        Equation(
            name="added_code",
            meaning="added output, limited",
            unit="code",
            terms=(Term(signal="added", coefficient=float(actuator.polarity)),),
            limit=(-added_limit, added_limit),
            span=added_limit,
            frac_bits=0,
        ),
    ]
    measured = "position_count"
    sense = -1.0
    error_span = position_span + reference_span
    if gains.law in ("lead", "pid"):
        rows.append(
            Equation(
                name="error_count",
                meaning="reference minus position",
                unit="count",
                terms=(
                    Term(signal="reference_count"),
                    Term(signal="position_count", coefficient=-1.0),
                ),
                span=min(error_span, float(2 ** (word_bits - 1) - 1)),
                reach=error_span,
                frac_bits=0,
            )
        )
    if gains.law == "lead":
        measured, sense = "error_count", 1.0
    demand: list[Term] = []
    derivative = gains.kd * w / period * unit
    if gains.law == "lead":
        demand.append(Term(signal="error_count", coefficient=gains.kp * unit, word="kp"))
        if gains.kff:
            demand.append(Term(signal="reference_count", coefficient=gains.kff * unit, word="kff"))
    else:
        ahead = gains.kp + gains.kff if gains.law == "pd" else gains.kp * gains.beta
        demand += [
            Term(signal="reference_count", coefficient=ahead * unit, word="kr", group="kp"),
            Term(signal="position_count", coefficient=-gains.kp * unit, word="kp", group="kp"),
        ]
    if derivative:
        input_span = position_span if gains.law != "lead" else error_span
        natural = 2.0 * derivative * input_span
        # speed in counts per sample, times the filter's gain at rest, with room for a step of
        # the reference where the law differentiates the error
        fast = credible_speed(task) / sensor.step * period * derivative / w
        if gains.law == "lead":
            fast += derivative * abs(loop.step) / sensor.step
        rows += [
            Equation(
                name="change_count",
                meaning=("error" if gains.law == "lead" else "position")
                + " minus its previous value",
                unit="count",
                terms=(
                    Term(signal=measured),
                    Term(signal=measured, lag=1, coefficient=-1.0),
                ),
                span=1.0,
                reach=2.0 * input_span,
                cut=("damping_code", 2.0 / derivative),
                frac_bits=0,
            ),
            Equation(
                name="damping_code",
                meaning="derivative action, low-passed",
                unit="code",
                terms=(
                    (
                        Term(signal="damping_code", lag=1),
                        Term(signal="damping_code", lag=1, coefficient=-w, word="kf"),
                        Term(signal="change_count", coefficient=derivative, word="kd"),
                    )
                    if w < 0.25
                    else (
                        Term(signal="damping_code", lag=1, coefficient=1.0 - w, word="kf"),
                        Term(signal="change_count", coefficient=derivative, word="kd"),
                    )
                ),
                carry=True,
                span=min(natural, max(fast, 2.0 * limit)),
                reach=natural + 1.0,
            ),
        ]
        demand.append(Term(signal="damping_code", coefficient=sense))
    if gains.law == "pid":
        integral_limit = limit + abs(1.0 - gains.beta) * gains.kp * unit * max(
            position_span, reference_span
        )
        turns = _windup_shift(gains, period)
        rows += [
            Equation(
                name="integral",
                meaning="integral action",
                unit="code",
                terms=(
                    Term(signal="integral", lag=1),
                    Term(signal="error_count", coefficient=gains.ki * period * unit, word="ki"),
                    Term(
                        signal="excess",
                        lag=1,
                        coefficient=-float(actuator.polarity) * 2.0**-turns,
                    ),
                ),
                wide=True,
                limit=(-integral_limit, integral_limit),
                span=integral_limit,
                settles="rest",
            ),
            Equation(
                name="integral_code",
                meaning="integral action, rounded to a word",
                unit="code",
                terms=(Term(signal="integral"),),
                span=integral_limit,
                reach=integral_limit + 1.0,
            ),
        ]
        demand.append(Term(signal="integral_code"))
    sections = _sections(task)
    held = None if gains.law == "pid" else "standing_output"
    if not sections:
        rows.append(
            Equation(
                name="unlimited_code",
                meaning="output before its limit",
                unit="code",
                terms=(*demand, Term(signal="added_code")),
                held=held,
                wide=True,
                frac_bits=0,
                settles="output",
            )
        )
    else:
        total = (
            sum(
                abs(t.coefficient)
                * {
                    "reference_count": reference_span,
                    "position_count": position_span,
                    "error_count": error_span,
                }.get(t.signal, 0.0)
                for t in demand
            )
            + 8.0 * limit
        )
        rows.append(
            Equation(
                name="demand_code",
                meaning="output before notches and limit",
                unit="code",
                terms=tuple(demand),
                held=held,
                span=4.0 * limit,
                reach=total,
                spare_bits=1,
                settles="output",
            )
        )
        before = "demand_code"
        for i, s in enumerate(sections, 1):
            rows += _notch_rows(i, s, before, limit, total, word_bits)
            before = f"notch{i}_code"
        rows.append(
            Equation(
                name="unlimited_code",
                meaning="output before its limit",
                unit="code",
                terms=(Term(signal=before), Term(signal="added_code")),
                wide=True,
                frac_bits=0,
                settles="output",
            )
        )
    plain = actuator.polarity == 1 and actuator.zero_code == 0
    limited = "output_code" if plain else "limited_code"
    rows.append(
        Equation(
            name=limited,
            meaning="output within its limit" + ("" if plain else ", from the zero code"),
            unit="code",
            terms=(Term(signal="unlimited_code"),),
            limit=(-limit, limit),
            span=limit,
            frac_bits=0,
            settles="output",
        )
    )
    if not plain:
        rows.append(
            Equation(
                name="output_code",
                meaning="output as the actuator counts it",
                unit="code",
                terms=(Term(signal=limited, coefficient=float(actuator.polarity)),),
                constant=float(actuator.zero_code),
                span=limit + abs(actuator.zero_code),
                frac_bits=0,
                settles="output",
            )
        )
    sign = float(actuator.polarity)
    rows.append(
        Equation(
            name="excess",
            meaning="what the limit took away",
            unit="code",
            terms=(
                Term(signal="unlimited_code", coefficient=sign),
                Term(signal=limited, coefficient=-sign),
            ),
            span=limit,
            reach=1e18,
            frac_bits=0,
        )
    )
    return Equations(
        inputs=("reference", "position", "added"), update=tuple(rows), output="output_code"
    )


def _windup_shift(gains: Gains, period_s: float) -> int:
    """Power of two of the back-calculation's time constant in samples, near sqrt(Ti Td)."""
    if gains.ki <= 0.0:
        return 4
    tracking_s = math.sqrt(max(gains.kd, 0.0) / gains.ki)
    return max(1, min(16, round(math.log2(max(tracking_s / period_s, 2.0)))))


def _notch_rows(
    number: int, s: Section, before: str, limit: float, reach: float, word_bits: int
) -> list[Equation]:
    """Equations of one notch on differences; a slow one pulls its output in steps below its own."""
    name = f"notch{number}"
    # In z: denominator z^2 + a1 z + a2, numerator b0 z^2 + b1 z + b2, equal sums sigma.
    a2 = 1.0 - s.p1 + s.p0
    b0 = s.gain
    b2 = s.gain * (1.0 - s.z1 + s.z0)
    sigma = s.p0
    out = f"{name}_code"
    pull = Term(signal=f"{name}_gap", coefficient=sigma, word=f"{name}_s")
    extra: list[Equation] = []
    if sigma < 2.0**-6:
        # sigma is a few steps of the sum it would share with words near 1: a sum of its own, its
        # rounding carried, keeps the frequency of the notch
        extra = [
            Equation(
                name=f"{name}_pull",
                meaning=f"what draws the output of notch {number} to its input",
                unit="code",
                terms=(pull,),
                carry=True,
                wide=True,
                finer=(out, word_bits - 3),
            )
        ]
        pull = Term(signal=f"{name}_pull")
    return [
        Equation(
            name=f"{name}_rise",
            meaning=f"change of the input of notch {number}",
            unit="code",
            terms=(Term(signal=before), Term(signal=before, lag=1, coefficient=-1.0)),
            span=1.0,
        ),
        Equation(
            name=f"{name}_gap",
            meaning=f"input minus output of notch {number}, one sample ago",
            unit="code",
            terms=(
                Term(signal=before, lag=1),
                Term(signal=out, lag=1, coefficient=-1.0),
            ),
            span=1.0,
        ),
        *extra,
        Equation(
            name=out,
            meaning=f"output of notch {number}",
            unit="code",
            terms=(
                Term(signal=out, lag=1),
                Term(signal=f"{name}_move", lag=1, coefficient=a2, word=f"{name}_a2"),
                pull,
                Term(signal=f"{name}_rise", coefficient=b0, word=f"{name}_b0"),
                Term(signal=f"{name}_rise", lag=1, coefficient=-b2, word=f"{name}_b2"),
            ),
            carry=True,
            span=4.0 * limit,
            reach=reach,
            spare_bits=1,
            settles="output",
        ),
        Equation(
            name=f"{name}_move",
            meaning=f"change of the output of notch {number}",
            unit="code",
            terms=(Term(signal=out), Term(signal=out, lag=1, coefficient=-1.0)),
            span=1.0,
        ),
    ]


def resting_coefficients(task: Task) -> tuple[float, float]:
    """Output that holds the plant still, as slope and constant from sensor zero.

    Parameters
    ----------
    task : Task
        Plant and scales.

    Returns
    -------
    tuple of float
        Slope [code per count] and value at zero [code], polarity left out.

    Notes
    -----
    Spring, rest position and bias; friction adds nothing to what is needed.
    """
    ka = abs(task.effort_per_code)
    step = task.loop.sensor.step
    zero = holding_effort(task.plant, 0.0)
    slope = (holding_effort(task.plant, step) - zero) / ka if task.plant.stiffness else 0.0
    return slope, zero / ka
