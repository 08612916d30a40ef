"""From a loop file to evidence: design, words, the loop as built, the checked step. No verdicts.

Rules of this file:

- Each stage runs once, in the order of the house; nothing is judged here.
- What cannot be computed (no gains, an unstable loop) is None, not an invented number.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from plant2.bounds import Deviation, LimitCycles, deviation, limit_cycles, loop_peaks
from plant2.closedloop import (
    ClosedLoop,
    LoopFigures,
    LoopMatrices,
    follow_pair,
    linear_step,
    log_pole,
    loop_figures,
    loop_matrices,
    poles_delta,
    rms_gain,
    step_shares,
    stiffness_at_rest,
)
from plant2.design import (
    Design,
    Gains,
    Settled,
    Task,
    design,
    fastest_damping,
    leading_pair,
    settling_band,
    task_of,
)
from plant2.equations import WordController, transfer
from plant2.errors import DesignError, OutOfRangeError
from plant2.loopfile import Loop
from plant2.plant import holding_effort
from plant2.response import StepFigures, Trajectory, step_figures, trajectory_of_samples
from plant2.simulate import CheckedStep, checked_step
from plant2.words import Words, words_of

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Progress = Callable[[float], None]

LONGEST_STEP = 1_000_000
"""Samples that a checked step may take: about a minute and a half on a small machine."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Linear:
    """What the linear part of the loop as built says without a simulation of integers.

    Parameters
    ----------
    position_noise : float or None
        Rms position from the sensor's noise; None without a noise figure. [m or rad]
    rms_current_a : float
        sqrt(hold^2 + noise^2), an estimate. [A]
    hold_current_a : float
        Largest current that holds start or target. [A]
    stiffness_at_dc : float
        Against a disturbance force; infinite with integral action. [N/m or N m/rad]
    linear_step : float
        Largest step that stays within the output limit, at most the travel. [m or rad]

    Notes
    -----
    H2 norms and the linear step response of the loop as built.
    """

    position_noise: float | None
    rms_current_a: float
    hold_current_a: float
    stiffness_at_dc: float
    linear_step: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """Everything that a check, an emission or a report draws on.

    Parameters
    ----------
    loop : Loop
        The loop file, "fastest" and "auto" resolved.
    task : Task
        Plant and scales.
    design : Design
        Gains and their faults.
    words : Words or None
        None when there are no usable gains or words.
    controller : WordController or None
        The words that were checked.
    designed, built : LoopFigures or None
        Sampled loop with real gains, and with the words.
    built_loop : ClosedLoop or None
        The loop as built.
    linear : Linear or None
        None when unstable.
    step : CheckedStep or None
        The integers around the continuous plant.
    notes : tuple of str
        Lines worth printing.
    word_faults : tuple of str
        Why there are no words, if there are none.
    deviation : Deviation or None
        Proven distance from the ideal loop; None where it was not asked for or has no proof.
    limit_cycles : LimitCycles or None
        Proven unrest at rest; None likewise.
    bound_fault : str
        Why there is no bound although it was asked for.

    Notes
    -----
    Facts only.
    """

    loop: Loop
    task: Task
    design: Design
    words: Words | None
    controller: WordController | None
    designed: LoopFigures | None
    built: LoopFigures | None
    built_loop: ClosedLoop | None
    linear: Linear | None
    step: CheckedStep | None
    notes: tuple[str, ...]
    word_faults: tuple[str, ...]
    deviation: Deviation | None = None
    limit_cycles: LimitCycles | None = None
    bound_fault: str = "it was not asked for"


def built_closed_loop(task: Task, controller: WordController) -> ClosedLoop:
    """The sampled loop with the transfer functions of the words.

    Parameters
    ----------
    task : Task
        Plant and scales.
    controller : WordController
        The words.

    Returns
    -------
    ClosedLoop
        The loop as built.

    Notes
    -----
    The controller's polynomials are exact rationals, shifted to delta = z - 1 and rounded once.
    """
    return ClosedLoop(
        sampled=task.sampled,
        controller=transfer(controller).in_delta(),
        count_per_position=task.count_per_position,
        effort_per_code=task.effort_per_code,
    )


def _slowest_samples(closed: ClosedLoop, poles: Complex) -> float:
    """Samples of the slowest time constant whose share of the step is above 0.1 %."""
    shares = step_shares(closed, poles)
    s = log_pole(poles, 1.0)
    slow = [1.0 / -v.real for v, share in zip(s, shares, strict=True) if share > 1e-3]
    return max(slow, default=1.0)


def horizon_samples(loop: Loop, closed: ClosedLoop, poles: Complex) -> int:
    """Length of the checked step.

    Parameters
    ----------
    loop : Loop
        Settling time limit and sample rate.
    closed : ClosedLoop
        The stable loop as built.
    poles : array of complex
        Its poles as z - 1. [-]

    Returns
    -------
    int
        Samples.

    Raises
    ------
    OutOfRangeError
        If the step would take more than a million samples.

    Notes
    -----
    10 x the slowest time constant of share above 0.1 %, at least 3 x the settling time limit, and
    never less than 50 samples and the delay.
    """
    samples = 10.0 * _slowest_samples(closed, poles)
    if loop.limits.settling_time_s is not None:
        samples = max(samples, 3.0 * loop.limits.settling_time_s * loop.processor.sample_rate_hz)
    if samples > LONGEST_STEP:
        slow = (
            "the slowest pole of the loop"
            if loop.limits.settling_time_s is None
            else ("limits.settling_time or the slowest pole of the loop")
        )
        raise OutOfRangeError(
            "the checked step",
            samples,
            "samples",
            f"must be at most {LONGEST_STEP}: {slow} asks for more",
            "shorten the limit, speed up the integral, or lower the sample rate",
        )
    return max(50 + 2 * closed.sampled.whole_delay, math.ceil(samples * (1.0 - 1e-12)))


def linear_response(task: Task, closed: ClosedLoop, samples: int) -> tuple[Trajectory, Real]:
    """Step response of a linear loop to one count, exact between samples.

    Parameters
    ----------
    task : Task
        Plant and scales.
    closed : ClosedLoop
        A stable loop.
    samples : int
        Horizon.

    Returns
    -------
    Trajectory
        One lane, nodes at sampling instants and at actuator updates.
    array of float, shape (samples,)
        The controller's output at each sample. [N, N m or V]

    Notes
    -----
    The recursion gives the state at each sampling instant, the stored output fills the delay.
    """
    states, effort = linear_step(closed, samples)
    sampled = closed.sampled
    # at rest before: the outputs that came earlier than the first sample are 0
    earlier = np.zeros(sampled.whole_delay + 1)
    inputs = np.concatenate([earlier, effort])[: samples + sampled.whole_delay]
    trajectory = trajectory_of_samples(
        sampled, states=states[:, None, :], inputs=inputs[:, None], forces=np.zeros(1)
    )
    return trajectory, effort


def linear_figures(task: Task, closed: ClosedLoop, poles: Complex) -> tuple[StepFigures, Real]:
    """Step figures of a linear loop.

    Parameters
    ----------
    task : Task
        Plant, band.
    closed : ClosedLoop
        A stable loop.
    poles : array of complex
        Its poles as z - 1. [-]

    Returns
    -------
    StepFigures
        One lane.
    array of float, shape (samples,)
        The controller's output per count of step. [N, N m or V]

    Notes
    -----
    Horizon of the checked step.
    """
    samples = horizon_samples(task.loop, closed, poles)
    trajectory, effort = linear_response(task, closed, samples)
    size = 1.0 / closed.count_per_position
    return (
        step_figures(trajectory, reference=size, step=size, band=settling_band(task.loop)),
        effort,
    )


def hold_current_a(task: Task) -> float:
    """Largest current that holds the start or a target of the checked step.

    Parameters
    ----------
    task : Task
        Plant, step.

    Returns
    -------
    float
        Current. [A]

    Notes
    -----
    Current drive: force/force constant; voltage drive at rest: V/R.
    """
    actuator = task.loop.actuator
    effort = max(abs(holding_effort(task.plant, p)) for p in (0.0, task.loop.step, -task.loop.step))
    if actuator.drive == "voltage":
        return effort / (actuator.resistance_ohm or math.nan)
    return effort / actuator.force_constant


def _linear(task: Task, closed: ClosedLoop, poles: Complex) -> Linear:
    matrices = loop_matrices(closed)
    sensor, _actuator = task.loop.sensor, task.loop.actuator
    hold = hold_current_a(task)
    noise_position = None
    noise_current = 0.0
    if sensor.noise is not None:
        counts = sensor.noise / sensor.step
        noise_position = counts * rms_gain(matrices, matrices.c_position, 0.0)
        noise_current = counts * _current_noise(task, matrices)
    samples = horizon_samples(task.loop, closed, poles)
    _, effort = linear_step(closed, samples)
    room = task.effort_limit
    start = holding_effort(task.plant, 0.0)
    steps = []
    for direction in (1.0, -1.0):
        up, down = float((direction * effort).max()), float((direction * effort).min())
        reach = math.inf
        if up > 0.0:
            reach = min(reach, max(room - start, 0.0) / up)
        if down < 0.0:
            reach = min(reach, max(room + start, 0.0) / -down)
        steps.append(reach)
    return Linear(
        position_noise=noise_position,
        rms_current_a=math.hypot(hold, noise_current),
        hold_current_a=hold,
        stiffness_at_dc=stiffness_at_rest(closed),
        linear_step=min(min(steps) * sensor.step, task.loop.mechanics.travel),
    )


def _current_noise(task: Task, matrices: LoopMatrices) -> float:
    """Rms current per count of white sensor noise."""
    space = task.sampled.space
    n = space.a.shape[0]
    row = matrices.c_effort * space.d_current
    row[:n] += space.c_current
    return rms_gain(matrices, row, matrices.d_effort_noise * space.d_current)


def _usable(result: Design) -> bool:
    """Whether the loop with these gains can be built at all: gains of right sign, stable."""
    if result.gains is None or result.poles is None:
        return False
    gains = result.gains
    if min(gains.kp, gains.kd, gains.ki) < 0.0:
        return False
    return bool(np.all(np.abs(1.0 + result.poles) < 1.0))


def built_pair(
    result: Design, closed: ClosedLoop, poles: Complex
) -> tuple[complex, complex] | None:
    """The placed pair of the loop as built.

    Parameters
    ----------
    result : Design
        The design with its pair.
    closed : ClosedLoop
        The loop as built.
    poles : array of complex
        Its poles as z - 1. [-]

    Returns
    -------
    tuple of complex or None
        The pair as z - 1.

    Notes
    -----
    Followed from the designed pair while the words' errors go from 0 to 1.
    """
    if result.pair is None or result.closed is None:
        return None
    if len(result.closed.controller.denominator) != len(closed.controller.denominator):
        return leading_pair(closed, poles)
    return follow_pair(result.closed, closed, result.pair)


def _choose_words(task: Task, gains: Gains, result: Design) -> tuple[Words, tuple[str, ...]]:
    """Words of the asked length; "auto": the shorter one whose damping ratio stays within 1 %."""
    asked = task.loop.processor.word
    if asked != "auto":
        return words_of(task, gains, int(asked)), ()
    top = max(task.loop.sensor.bits, task.loop.actuator.bits)
    codings = (task.loop.sensor.high_count, task.loop.actuator.high_code)
    if top <= 16 and max(codings) <= 32767:
        try:
            short = words_of(task, gains, 16)
        except DesignError as fault:
            return words_of(task, gains, 32), (f'word = "auto": 32, because {fault}',)
        closed = built_closed_loop(task, short.controller)
        poles = poles_delta(closed)
        pair = built_pair(result, closed, poles)
        if pair is not None and result.pair is not None:
            from plant2.closedloop import pair_figures

            built, _ = pair_figures(pair, task.period_s)
            wanted, _ = pair_figures(result.pair, task.period_s)
            if abs(built / wanted - 1.0) <= 0.01:
                return short, ('word = "auto": 16, its damping ratio is within 1 % of the design',)
        return words_of(task, gains, 32), (
            'word = "auto": 32, because 16-bit words move the damping ratio by more than 1 %',
        )
    return words_of(task, gains, 32), ('word = "auto": 32, the converters need it',)


def resolve_fastest(loop: Loop, task: Task) -> tuple[Loop, tuple[str, ...]]:
    """Replace damping_ratio = "fastest" by the number that settles soonest as built.

    Parameters
    ----------
    loop : Loop
        The loop file.
    task : Task
        Its task.

    Returns
    -------
    Loop
        With a number.
    tuple of str
        What the choice rests on and what a slip costs.

    Raises
    ------
    DesignError
        If no damping ratio works.

    Notes
    -----
    Settling time of the linear loop as built, overshoot at most the band less one count of the
    checked step.
    """
    if not loop.aim.fastest:
        return loop, ()
    band = settling_band(loop)
    counts = max(abs(loop.step) / loop.sensor.step, 1.0)
    allowed = max(band - 1.0 / counts, 0.0)

    def evaluate(candidate: Loop) -> Settled | None:
        trial_task = replace(task, loop=candidate)
        result = design(candidate, trial_task, seek_nearest=False)
        if result.gains is None or result.faults:
            return None
        try:
            words, _ = _choose_words(trial_task, result.gains, result)
        except DesignError:
            return None
        closed = built_closed_loop(trial_task, words.controller)
        poles = poles_delta(closed, polish=False)
        if not bool(np.all(np.abs(1.0 + poles) < 1.0)):
            return None
        figures, _ = linear_figures(trial_task, closed, poles)
        return Settled(
            settling_time_s=float(figures.settling_time_s[0]),
            overshoot=float(figures.overshoot_percent[0]) / 100.0,
        )

    zeta, note = fastest_damping(loop, task, evaluate, overshoot_allowed=allowed)
    return replace(loop, aim=replace(loop.aim, damping_ratio=zeta, fastest=False)), (note,)


def run_chain(
    loop: Loop,
    *,
    words_from: WordController | None = None,
    step: bool = True,
    bounds: bool = False,
    progress: Progress | None = None,
) -> Evidence:
    """Run the whole chain for the nominal unit.

    Parameters
    ----------
    loop : Loop
        The loop file.
    words_from : WordController or None
        Check these words instead of newly chosen ones.
    step : bool
        Whether to run the checked step.
    bounds : bool
        Whether to prove deviation and unrest at rest; done anyway where the loop file limits them.
    progress : callable or None
        Told the finished fraction of a long simulation.

    Returns
    -------
    Evidence
        Facts, with None where there are none.

    Notes
    -----
    The order of the house: plant, sampled plant, gains, equations, words, loop as built, step.
    """
    task = task_of(loop)
    notes: tuple[str, ...] = ()
    try:
        resolved, notes = resolve_fastest(loop, task)
    except DesignError as fault:
        empty = Design(
            gains=None,
            closed=None,
            poles=None,
            pair=None,
            integral_pole=None,
            faults=(str(fault),),
            nearest=None,
            given=False,
        )
        return _without_words(loop, task, empty, (), ())
    task = replace(task, loop=resolved)
    result = design(resolved, task)
    if not _usable(result) and words_from is None:
        return _without_words(resolved, task, result, notes, ())
    words: Words | None = None
    if words_from is None:
        assert result.gains is not None
        try:
            words, more = _choose_words(task, result.gains, result)
        except DesignError as fault:
            return _without_words(resolved, task, result, notes, (str(fault),))
        notes += more
        controller = words.controller
    else:
        controller = words_from
    designed = None
    if result.closed is not None and _usable(result):
        designed = loop_figures(result.closed, result.pair, result.poles)
    closed = built_closed_loop(task, controller)
    poles = poles_delta(closed)
    stable = bool(np.all(np.abs(1.0 + poles) < 1.0))
    pair = None
    if stable:
        pair = built_pair(result, closed, poles) if _usable(result) else leading_pair(closed, poles)
    built = loop_figures(closed, pair, poles)
    linear = None
    checked = None
    away: Deviation | None = None
    unrest: LimitCycles | None = None
    bound_fault = "it was not asked for" if stable else "the loop is unstable"
    limits = resolved.limits
    asked = limits.deviation_count is not None or limits.limit_cycle_count is not None
    if stable and step and (bounds or asked):
        try:
            peaks = loop_peaks(task, controller)
            listed = None if words is None else words.equations
            away = deviation(task, controller, designed=listed, gains=peaks)
            unrest = limit_cycles(task, controller, gains=peaks)
            bound_fault = ""
        except OutOfRangeError as fault:
            bound_fault = str(fault)
    if stable:
        linear = _linear(task, closed, poles)
        if step:
            checked = checked_step(
                resolved,
                task.plant,
                controller,
                samples=horizon_samples(resolved, closed, poles),
                progress=progress,
            )
    return Evidence(
        loop=resolved,
        task=task,
        design=result,
        words=words,
        controller=controller,
        designed=designed,
        built=built,
        built_loop=closed,
        linear=linear,
        step=checked,
        notes=notes,
        word_faults=(),
        deviation=away,
        limit_cycles=unrest,
        bound_fault=bound_fault,
    )


def _without_words(
    loop: Loop,
    task: Task,
    result: Design,
    notes: tuple[str, ...],
    word_faults: tuple[str, ...],
) -> Evidence:
    return Evidence(
        loop=loop,
        task=task,
        design=result,
        words=None,
        controller=None,
        designed=None,
        built=None,
        built_loop=None,
        linear=None,
        step=None,
        notes=notes,
        word_faults=word_faults,
    )
