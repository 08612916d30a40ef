"""Step figures between the samples: one definition for simulations and for logs.

Rules of this file:

- Between two nodes of a `Trajectory` the inputs are held, so the motion is known exactly; extremes
  and crossings are found inside the pieces, never read off a grid.
- The position is the true one, in front of the sensor and its filter.
- Final value: the exact time mean of the position over the last fifth of the horizon.
- Overshoot is counted from the final value, in percent of the step. Settling is the last entry
  into the band about the final value. Rise is from 10 % to 90 % of the way from start to final
  value, first crossings.
- numpy only; this module knows no controller.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from plant2.errors import OutOfRangeError
from plant2.plant import StateSpace
from plant2.sampled import SampledPlant, propagate

Real = NDArray[np.float64]
Flags = NDArray[np.bool_]
Whole = NDArray[np.int64]

LAST_PART = 0.2
"""Share of the horizon, at its end, over which the final value is the mean."""

_LEVELS = 50
_EPS = float(np.finfo(np.float64).eps)
_MOST_GROUPS = 64


# --------------------------------------------------------------------------------------------------
# Motion


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Trajectory:
    """Motion of a plant whose inputs are held between nodes, in several lanes at once.

    Parameters
    ----------
    space : StateSpace
        The plant.
    times_s : array of float, shape (m,)
        Times of the nodes, not falling, at least two. Between two nodes of the same time a state
        may jump, as at an impact. [s]
    states : array of float, shape (m, lanes, n)
        States at the nodes. [SI by the states]
    inputs : array of float, shape (m - 1, lanes)
        What the actuator holds from each node to the next. [N, N m or V]
    forces : array of float, shape (m - 1, lanes)
        Force on the main mass beside the actuator's, held likewise. [N or N m]
    held : array of bool, shape (m - 1, lanes), or None
        Where the main mass stands still, held by friction or a stop; None for nowhere.

    Raises
    ------
    OutOfRangeError
        If there are fewer than two nodes, if the times fall, or if the shapes do not match.

    Notes
    -----
    ``x' = a x + b u + b_force F`` from node to node; `held_space` where it is held.
    """

    space: StateSpace
    times_s: Real
    states: Real
    inputs: Real
    forces: Real
    held: Flags | None = None

    def __post_init__(self) -> None:
        m = self.times_s.shape[0]
        pieces = (m - 1, self.states.shape[1])
        if m < 2:
            raise OutOfRangeError("nodes", m, "", "must be at least 2", "give a longer motion")
        if np.any(np.diff(self.times_s) < 0.0):
            fall = int(np.argmax(np.diff(self.times_s) < 0.0)) + 1
            raise OutOfRangeError(
                "times_s", float(self.times_s[fall]), "s", "falls", "sort the nodes by time"
            )
        shapes = [self.inputs.shape, self.forces.shape]
        if self.held is not None:
            shapes.append(self.held.shape)
        if self.states.shape != (*((m, pieces[1])), self.space.a.shape[0]) or any(
            shape != pieces for shape in shapes
        ):
            raise OutOfRangeError(
                "nodes", m, "", "arrays do not match them", "see the shapes in the description"
            )

    @property
    def lanes(self) -> int:
        """Number of lanes. [-]

        Notes
        -----
        Look-up only.
        """
        return int(self.states.shape[1])

    def positions(self) -> Real:
        """True positions at the nodes, shape (m, lanes).

        Returns
        -------
        array of float, shape (m, lanes)
            The positions. [m or rad]

        Notes
        -----
        Row ``c_position`` of the space.
        """
        return _combined(self.states, self.space.c_position)

    def lane(self, number: int) -> Trajectory:
        """The same motion with one lane only.

        Parameters
        ----------
        number : int
            Which lane, from 0.

        Returns
        -------
        Trajectory
            That lane.

        Notes
        -----
        Views, no copies.
        """
        return self.select(np.array([number]))

    def select(self, lanes: Whole) -> Trajectory:
        """The same motion with some of the lanes.

        Parameters
        ----------
        lanes : array of int, shape (k,)
            Which lanes, from 0.

        Returns
        -------
        Trajectory
            Those lanes, in that order.

        Notes
        -----
        Look-up only.
        """
        return replace(
            self,
            states=self.states[:, lanes],
            inputs=self.inputs[:, lanes],
            forces=self.forces[:, lanes],
            held=None if self.held is None else self.held[:, lanes],
        )


@lru_cache(maxsize=64)
def held_space(space: StateSpace) -> StateSpace:
    """The same plant with its main mass held still, by whatever force that takes.

    Parameters
    ----------
    space : StateSpace
        The plant; its main mass can be accelerated by a force.

    Returns
    -------
    StateSpace
        The plant with a main mass that keeps its velocity, which is 0 while it is held.

    Notes
    -----
    The holding force R makes ``v' = c_v (a x + b u + b_force (F + R)) = 0``; it is put in. Own
    derivation.
    """
    row = space.c_main_velocity
    share = np.outer(space.b_force, row) / float(row @ space.b_force)
    return replace(
        space,
        a=space.a - share @ space.a,
        b=space.b - share @ space.b,
        b_force=np.zeros_like(space.b_force),
    )


def trajectory_of_samples(
    sampled: SampledPlant,
    *,
    states: Real,
    inputs: Real,
    forces: ArrayLike = 0.0,
    first: int = 0,
) -> Trajectory:
    """Motion of a sampled plant from its states at the sampling instants.

    Parameters
    ----------
    sampled : SampledPlant
        Plant, period and delay.
    states : array of float, shape (k + 1, lanes, n)
        States at k + 1 successive sampling instants. [SI by the states]
    inputs : array of float, shape (k + d + 1, lanes)
        Outputs of the samples from d + 1 before the first to d + 1 before the last instant, where
        d is the whole delay in periods; with them the plant got from state to state. [N, N m or V]
    forces : array of float, shape (lanes,)
        Constant force on the main mass. [N or N m]
    first : int
        Number of the first sampling instant; it lies at ``first`` periods. [-]

    Returns
    -------
    Trajectory
        Nodes at the sampling instants and, where the delay has a fraction, at the updates between.

    Raises
    ------
    OutOfRangeError
        If the number of outputs does not fit that of the states.

    Notes
    -----
    From kT to kT + fT the older output acts, then the next one, see `SampledPlant`.
    """
    space, period_s, fraction = sampled.space, sampled.period_s, sampled.fraction
    k, lanes = states.shape[0] - 1, states.shape[1]
    d = sampled.whole_delay
    force = np.broadcast_to(np.asarray(forces, dtype=np.float64), (k, lanes))
    instants = (first + np.arange(k + 1)) * period_s
    older, newer = inputs[:k], inputs[1 : k + 1]
    if inputs.shape != (k + d + 1, lanes):
        raise OutOfRangeError(
            "inputs",
            float(inputs.shape[0]),
            "samples",
            f"must be {k + d + 1} for {k} periods and a whole delay of {d}",
            "begin d + 1 samples before the first instant",
        )
    if fraction == 0.0:
        return Trajectory(space=space, times_s=instants, states=states, inputs=newer, forces=force)
    psi, gain, gain_force = propagate(space, fraction * period_s)
    n = states.shape[2]
    nodes = np.empty((2 * k + 1, n, lanes))
    nodes[0::2] = np.moveaxis(states, 2, 1)
    begin = nodes[0:-1:2]
    nodes[1::2] = begin + (
        np.matmul(psi, begin)
        + gain[:, np.newaxis] * older[:, np.newaxis, :]
        + gain_force[:, np.newaxis] * force[:, np.newaxis, :]
    )
    times = np.empty(2 * k + 1)
    times[0::2] = instants
    times[1::2] = instants[:-1] + fraction * period_s
    held_inputs = np.empty((2 * k, lanes))
    held_inputs[0::2], held_inputs[1::2] = older, newer
    return Trajectory(
        space=space,
        times_s=times,
        states=np.moveaxis(nodes, 1, 2),
        inputs=held_inputs,
        forces=np.repeat(force, 2, axis=0),
    )


# --------------------------------------------------------------------------------------------------
# Step figures


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepFigures:
    """Figures of a step response, one value per lane; times count from the first node.

    Parameters
    ----------
    start_value : array of float, shape (lanes,)
        Position at the first node. [m or rad]
    final_value : array of float, shape (lanes,)
        Time mean of the position over the last fifth. [m or rad]
    final_error : array of float, shape (lanes,)
        Magnitude of final value minus reference. [m or rad]
    final_low, final_high : array of float, shape (lanes,)
        Extremes of the position in the last fifth. [m or rad]
    overshoot_percent : array of float, shape (lanes,)
        Peak beyond the final value, in the step's direction, over the step. [%]
    peak_value, peak_time_s : array of float, shape (lanes,)
        The peak and when it is reached first. [m or rad, s]
    settling_time_s : array of float, shape (lanes,)
        Last entry into the band about the final value; nan where the motion still leaves the band
        in the last fifth. [s]
    rise_from_s, rise_to_s : array of float, shape (lanes,)
        First crossings of 10 % and 90 % of the way from start to final value; nan where there is
        no way. [s]
    rise_time_s : array of float, shape (lanes,)
        Their difference. [s]

    Notes
    -----
    Definitions at the head of this file.
    """

    start_value: Real
    final_value: Real
    final_error: Real
    final_low: Real
    final_high: Real
    overshoot_percent: Real
    peak_value: Real
    peak_time_s: Real
    settling_time_s: Real
    rise_from_s: Real
    rise_to_s: Real
    rise_time_s: Real


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Part:
    """What a stretch of a long motion leaves behind, so that the whole need not stay in memory.

    Parameters
    ----------
    start_s, end_s : float
        First and last node. [s]
    low, high : array of float, shape (lanes,)
        Exact extremes of the position. [m or rad]
    low_s, high_s : array of float, shape (lanes,)
        When they are reached first. [s]
    integral : array of float, shape (lanes,)
        Integral of the position over the stretch. [m s or rad s]
    load : callable
        Returns the motion again.

    Notes
    -----
    Successive parts share a node.
    """

    start_s: float
    end_s: float
    low: Real
    high: Real
    low_s: Real
    high_s: Real
    integral: Real
    load: Callable[[], Trajectory]


def part_of(trajectory: Trajectory, load: Callable[[], Trajectory] | None = None) -> Part:
    """Extremes and integral of a motion.

    Parameters
    ----------
    trajectory : Trajectory
        The motion.
    load : callable or None
        How to get the motion again; None keeps it.

    Returns
    -------
    Part
        Exact facts of the stretch.

    Notes
    -----
    Pieces that may hold an extreme are found by bounds, and only those are looked into.
    """
    fine = finely_divided(trajectory)
    return _part(trajectory, fine, _scan(fine), load)


def _part(
    trajectory: Trajectory,
    fine: Trajectory,
    scan: _Scan,
    load: Callable[[], Trajectory] | None = None,
) -> Part:
    high, high_s = _highest(fine, scan, 1.0)
    low, low_s = _highest(fine, scan, -1.0)
    return Part(
        start_s=float(trajectory.times_s[0]),
        end_s=float(trajectory.times_s[-1]),
        low=-low,
        high=high,
        low_s=low_s,
        high_s=high_s,
        integral=_integrals(trajectory).sum(axis=0),
        load=load if load is not None else lambda: trajectory,
    )


def step_figures(
    motion: Trajectory | Sequence[Part], *, reference: ArrayLike, step: ArrayLike, band: float
) -> StepFigures:
    """Figures of a step response, exact between the nodes.

    Parameters
    ----------
    motion : Trajectory or sequence of Part
        The motion; the step is given at its first node.
    reference : array of float, shape (lanes,)
        Where the position should end. [m or rad]
    step : array of float, shape (lanes,)
        The step with its sign, not 0. [m or rad]
    band : float
        Half-width of the settling band over the step, above 0. [-]

    Returns
    -------
    StepFigures
        One value per lane.

    Raises
    ------
    OutOfRangeError
        If a step is 0 or not finite, if the band is not above 0, or if the motion takes no time.

    Notes
    -----
    A piece between two nodes has a closed form; the velocity's sign at its ends, and inside where
    the acceleration changes sign, tells whether an extreme lies in it. Crossings are halved down to
    2^-50 of a piece by transition matrices for halves of the piece, so nothing is interpolated.
    """
    if isinstance(motion, Trajectory):
        look = _Look(motion)
        parts = [_part(motion, look.fine, look.scan)]
    else:
        parts = list(motion)
    if not parts or not parts[-1].end_s > parts[0].start_s:
        raise OutOfRangeError(
            "horizon", 0.0, "s", "must be above 0", "give a motion of two nodes or more"
        )
    lanes = parts[0].low.shape[0]
    steps = np.broadcast_to(np.asarray(step, dtype=np.float64), (lanes,))
    references = np.broadcast_to(np.asarray(reference, dtype=np.float64), (lanes,))
    if not np.all(np.isfinite(steps) & (steps != 0.0)):
        bad = steps[~(np.isfinite(steps) & (steps != 0.0))]
        raise OutOfRangeError(
            "step", float(bad[0]), "m", "must be finite and not 0", "give the size of the step"
        )
    if not (math.isfinite(band) and band > 0.0):
        raise OutOfRangeError(
            "band", band, "", "must be finite and above 0", "give a share of the step"
        )

    start_s, end_s = parts[0].start_s, parts[-1].end_s
    tail_s = end_s - LAST_PART * (end_s - start_s)
    tail = [part for part in parts if part.start_s >= tail_s]
    if len(tail) < len(parts):
        cut = parts[len(parts) - len(tail) - 1]
        if cut.end_s > tail_s:
            tail.insert(0, part_of(_from_time(cut.load(), tail_s)))
    final = np.sum([part.integral for part in tail], axis=0) / (end_s - tail_s)
    final_low = np.min([part.low for part in tail], axis=0)
    final_high = np.max([part.high for part in tail], axis=0)

    looks = _Looks(parts[0], look if isinstance(motion, Trajectory) else _Look(parts[0].load()))
    start = looks.at(parts[0]).scan.positions[0]
    up = steps > 0.0
    peaks = np.array([np.where(up, part.high, -part.low) for part in parts])
    which = np.argmax(peaks, axis=0)
    peak = np.take_along_axis(peaks, which[np.newaxis], axis=0)[0]
    peak_times = np.array([np.where(up, part.high_s, part.low_s) for part in parts])
    peak_time = np.take_along_axis(peak_times, which[np.newaxis], axis=0)[0]
    peak_value = np.where(up, peak, -peak)
    beyond = np.maximum(np.where(up, peak_value - final, final - peak_value), 0.0)

    # The first part is open already: rise before settling, which begins at the other end.
    way = final - start
    rise_from = _first_reached(parts, looks, start + 0.1 * way, np.sign(way)) - start_s
    rise_to = _first_reached(parts, looks, start + 0.9 * way, np.sign(way)) - start_s
    settled = _last_outside(parts, looks, final, band * np.abs(steps))
    settling = np.where(settled > tail_s, np.nan, settled - start_s)
    return StepFigures(
        start_value=start,
        final_value=final,
        final_error=np.abs(final - references),
        final_low=final_low,
        final_high=final_high,
        overshoot_percent=100.0 * beyond / np.abs(steps),
        peak_value=peak_value,
        peak_time_s=peak_time - start_s,
        settling_time_s=settling,
        rise_from_s=rise_from,
        rise_to_s=rise_to,
        rise_time_s=rise_to - rise_from,
    )


def step_figures_of_samples(
    times_s: Real, positions: Real, *, reference: ArrayLike, step: ArrayLike, band: float
) -> StepFigures:
    """The same figures for a recorded motion, joined by straight lines.

    Parameters
    ----------
    times_s : array of float, shape (m,)
        Rising times; the step is given at the first. [s]
    positions : array of float, shape (m,) or (m, lanes)
        Recorded positions. [m or rad]
    reference, step : array of float, shape (lanes,)
        As in `step_figures`. [m or rad]
    band : float
        Half-width of the settling band over the step, above 0. [-]

    Returns
    -------
    StepFigures
        One value per lane.

    Raises
    ------
    OutOfRangeError
        If times do not rise or a position is not finite, and as in `step_figures`.

    Notes
    -----
    A plant whose velocity is its input moves along straight lines: one definition serves both.
    """
    y = np.asarray(positions, dtype=np.float64)
    y = y[:, np.newaxis] if y.ndim == 1 else y
    spans = np.diff(times_s)
    if np.any(spans <= 0.0):
        late = int(np.argmax(spans <= 0.0)) + 1
        raise OutOfRangeError(
            "times_s", float(times_s[late]), "s", "does not rise", "leave the sample out"
        )
    if not np.all(np.isfinite(y)):
        raise OutOfRangeError("positions", math.nan, "m", "must be finite", "leave the sample out")
    one, zero = np.ones(1), np.zeros(1)
    line = StateSpace(
        a=np.zeros((1, 1)),
        b=one,
        b_force=zero,
        c_position=one,
        c_measured=one,
        c_main_position=one,
        c_main_velocity=zero,
        c_current=zero,
        d_current=0.0,
        names=("position",),
    )
    motion = Trajectory(
        space=line,
        times_s=np.asarray(times_s, dtype=np.float64),
        states=y[:, :, np.newaxis],
        inputs=np.diff(y, axis=0) / spans[:, np.newaxis],
        forces=np.zeros((spans.size, y.shape[1])),
    )
    return step_figures(motion, reference=reference, step=step, band=band)


# --------------------------------------------------------------------------------------------------
# Inside: pieces


def _combined(states: Real, row: Real) -> Real:
    """Row times states over the last axis; few entries, and the axis is often not contiguous."""
    used = np.nonzero(row)[0]
    if used.size == 0:
        return np.zeros(states.shape[:-1])
    total: Real = states[..., used[0]] * row[used[0]]
    for i in used[1:]:
        total += states[..., i] * row[i]
    return total


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Quantity:
    """Something that is linear in state, input and force: row x + gain u + gain_force F.

    Parameters
    ----------
    row : array of float, shape (n,)
        Weight of the states. [by the states]
    gain : float
        Weight of the input. [by the input]
    gain_force : float
        Weight of the force on the main mass. [by the force]

    Notes
    -----
    Positions, velocities, accelerations and forces between bodies are of this kind.
    """

    row: Real
    gain: float
    gain_force: float

    def at(self, states: Real, inputs: Real, forces: Real) -> Real:
        """Its values.

        Parameters
        ----------
        states : array of float, shape (..., n)
            States. [SI by the states]
        inputs, forces : array of float, shape (...)
            Input and force on the main mass. [N, N m or V]

        Returns
        -------
        array of float, shape (...)
            The quantity.
        """
        value = _combined(states, self.row)
        if self.gain != 0.0:
            value = value + self.gain * inputs
        if self.gain_force != 0.0:
            value = value + self.gain_force * forces
        return value

    def slope(self, space: StateSpace) -> Quantity:
        """Its derivative while the inputs are held.

        Parameters
        ----------
        space : StateSpace
            How the state moves.

        Returns
        -------
        Quantity
            row a x + row b u + row b_force F.
        """
        return Quantity(
            row=self.row @ space.a,
            gain=float(self.row @ space.b),
            gain_force=float(self.row @ space.b_force),
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Kind:
    """A plant, free or held, with what a search inside a piece needs."""

    space: StateSpace
    position: Quantity
    velocity: Quantity
    acceleration: Quantity


def _kind(space: StateSpace, row: Real) -> _Kind:
    position = Quantity(row=row, gain=0.0, gain_force=0.0)
    velocity = position.slope(space)
    return _Kind(
        space=space, position=position, velocity=velocity, acceleration=velocity.slope(space)
    )


class Halves:
    """Transitions over span/2, span/4, ...: any time of a piece by steps forward only.

    Parameters
    ----------
    space : StateSpace
        The plant.
    span_s : float
        Longer than any piece. [s]

    Notes
    -----
    50 levels: a time is met to 2^-50 of the span, whatever the time constants of the plant.
    """

    def __init__(self, space: StateSpace, span_s: float) -> None:
        self.span_s = span_s
        self.steps_s: Real = np.ldexp(span_s, -np.arange(1, _LEVELS + 1))
        psi, gain, gain_force = propagate(space, self.steps_s)
        n = psi.shape[1]
        # One matrix a level, for rows of (state, input, force).
        self.matrices = np.empty((_LEVELS, n + 2, n))
        self.matrices[:, :n] = np.swapaxes(psi, 1, 2)
        self.matrices[:, n], self.matrices[:, n + 1] = gain, gain_force

    def until(
        self,
        states: Real,
        inputs: Real,
        forces: Real,
        spans_s: Real,
        quantity: Quantity,
        offset: Real,
        sign: Real,
    ) -> tuple[Real, Real]:
        """Last time up to which ``sign (quantity + offset) > 0``, and the state there.

        Parameters
        ----------
        states : array of float, shape (j, n)
            Where to begin. [SI by the states]
        inputs, forces, spans_s : array of float, shape (j,)
            What is held, and for how long at most. [N, N m or V; N or N m; s]
        quantity : Quantity
            What is watched.
        offset, sign : array of float, shape (j,)
            The expression may change its sign once in its span. [by the quantity; -]

        Returns
        -------
        tuple of two arrays of float, shapes (j,) and (j, n)
            Times from the beginning and states. [s; SI by the states]
        """
        n = states.shape[1]
        full = np.concatenate([states, inputs[:, np.newaxis], forces[:, np.newaxis]], axis=1)
        # quantity + offset as one product; the offset includes what the inputs add.
        row = quantity.row
        constant = offset + quantity.gain * inputs + quantity.gain_force * forces
        theta = np.zeros(states.shape[0])
        for step_s, matrix in zip(self.steps_s, self.matrices, strict=True):
            ahead = full[:, :n] + full @ matrix
            take = (sign * (ahead @ row + constant) > 0.0) & (theta + step_s <= spans_s)
            full[:, :n] = np.where(take[:, np.newaxis], ahead, full[:, :n])
            theta += np.where(take, step_s, 0.0)
        return theta, full[:, :n].copy()

    def advance(self, states: Real, inputs: Real, forces: Real, spans_s: Real) -> Real:
        """States after some spans.

        Parameters
        ----------
        states : array of float, shape (j, n)
            Where to begin. [SI by the states]
        inputs, forces, spans_s : array of float, shape (j,)
            What is held, and for how long. [N, N m or V; N or N m; s]

        Returns
        -------
        array of float, shape (j, n)
            The states then. [SI by the states]
        """
        n = states.shape[1]
        full = np.concatenate([states, inputs[:, np.newaxis], forces[:, np.newaxis]], axis=1)
        left = spans_s.copy()
        for step_s, matrix in zip(self.steps_s, self.matrices, strict=True):
            take = left >= step_s
            full[:, :n] += np.where(take[:, np.newaxis], full @ matrix, 0.0)
            left -= np.where(take, step_s, 0.0)
        return full[:, :n].copy()


@lru_cache(maxsize=64)
def _halves(space: StateSpace, exponent: int) -> Halves:
    return Halves(space, math.ldexp(1.0, exponent))


def halves_for(space: StateSpace, longest_s: float) -> Halves:
    """Halves of a power of two above the longest span, so that few tables serve all.

    Parameters
    ----------
    space : StateSpace
        The plant.
    longest_s : float
        Longest piece, above 0. [s]

    Returns
    -------
    Halves
        Kept for the next caller.

    Notes
    -----
    The next power of two; times of its halves are exact in binary.
    """
    return _halves(space, math.frexp(longest_s)[1])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Scan:
    """Bounds of the position in every piece, and how to look into one; shapes (m - 1, lanes)."""

    lower: Real
    upper: Real
    positions: Real
    kinds: tuple[_Kind, ...]
    halves: tuple[Halves, ...]


def _hull(
    spans_s: Real, x: tuple[Real, Real], v: tuple[Real, Real], a: tuple[Real, Real]
) -> tuple[Real, Real]:
    """Bounds of a smooth x over a piece from x, x', x'' at its ends, all of one shape.

    Where x'' keeps its sign the tangents at both ends bound x; where it changes sign once and x'
    may have changed sign twice, a crude bound by the largest slope does.
    """
    lower, upper = np.minimum(x[0], x[1]), np.maximum(x[0], x[1])
    turns = a[0] * a[1] < 0.0
    crosses = v[0] * v[1] < 0.0
    plain = crosses & ~turns
    if plain.any():
        h = np.broadcast_to(spans_s, plain.shape)[plain]
        x0, x1, v0, v1 = (each[plain] for each in (*x, *v))
        meet = np.clip((x1 - x0 - v1 * h) / (v0 - v1), 0.0, h)
        tip = x0 + v0 * meet
        lower[plain] = np.minimum(lower[plain], tip)
        upper[plain] = np.maximum(upper[plain], tip)
    crude = turns & (crosses | (v[0] * a[0] <= 0.0))
    if crude.any():
        h = np.broadcast_to(spans_s, crude.shape)[crude]
        v0, v1, a0, a1 = (np.abs(each[crude]) for each in (*v, *a))
        slack = h * (np.maximum(v0, v1) + h * np.maximum(a0, a1))
        lower[crude] -= slack
        upper[crude] += slack
    return lower, upper


def _scan(trajectory: Trajectory, row: Real | None = None) -> _Scan:
    space = trajectory.space
    row = space.c_position if row is None else row
    kinds = [_kind(space, row)]
    if trajectory.held is not None:
        kinds.append(_kind(held_space(space), row))
    spans = np.diff(trajectory.times_s)[:, np.newaxis]
    states, inputs, forces = trajectory.states, trajectory.inputs, trajectory.forces
    positions = _combined(states, row)

    def ends(quantity: Quantity) -> tuple[Real, Real]:
        whole = _combined(states, quantity.row)
        added = quantity.gain * inputs + quantity.gain_force * forces
        return whole[:-1] + added, whole[1:] + added

    v, a = ends(kinds[0].velocity), ends(kinds[0].acceleration)
    if trajectory.held is not None:
        still = ends(kinds[1].acceleration)
        a = (
            np.where(trajectory.held, still[0], a[0]),
            np.where(trajectory.held, still[1], a[1]),
        )
    lower, upper = _hull(spans, (positions[:-1], positions[1:]), v, a)
    longest_s = float(spans.max())
    return _Scan(
        lower=lower,
        upper=upper,
        positions=positions,
        kinds=tuple(kinds),
        halves=tuple(halves_for(kind.space, longest_s) for kind in kinds),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Opened:
    """Some pieces, cut where the velocity changes its sign: four points, three monotone legs."""

    times_s: Real  # (j, 4), from the piece's first node
    positions: Real  # (j, 4)
    states: Real  # (j, 4, n)
    inputs: Real
    forces: Real
    held: Flags


def _open(trajectory: Trajectory, scan: _Scan, pieces: Whole, lanes: Whole) -> _Opened:
    """Look into pieces: the extremes between their nodes."""
    inputs, forces = trajectory.inputs[pieces, lanes], trajectory.forces[pieces, lanes]
    begin, end = trajectory.states[pieces, lanes], trajectory.states[pieces + 1, lanes]
    spans = trajectory.times_s[pieces + 1] - trajectory.times_s[pieces]
    held = (
        np.zeros(pieces.size, dtype=bool)
        if trajectory.held is None
        else trajectory.held[pieces, lanes]
    )
    times = np.stack([np.zeros_like(spans), np.zeros_like(spans), spans, spans], axis=1)
    states = np.stack([begin, begin, end, end], axis=1)
    for number, kind in enumerate(scan.kinds):
        of_kind = np.nonzero(held == bool(number))[0]
        if of_kind.size:
            _cut(kind, scan.halves[number], of_kind, inputs, forces, spans, times, states)
    return _Opened(
        times_s=times,
        positions=_combined(states, scan.kinds[0].position.row),
        states=states,
        inputs=inputs,
        forces=forces,
        held=held,
    )


def _cut(
    kind: _Kind,
    halves: Halves,
    chosen: Whole,
    inputs: Real,
    forces: Real,
    spans: Real,
    times: Real,
    states: Real,
) -> None:
    """Fill in the two inner points of the chosen pieces."""
    u, force, h = inputs[chosen], forces[chosen], spans[chosen]
    begin, end = states[chosen, 0], states[chosen, 3]
    a0 = kind.acceleration.at(begin, u, force)
    a1 = kind.acceleration.at(end, u, force)
    zero = np.zeros_like(u)
    # The velocity's own extreme, where it has one; else the end stands for it.
    turn_s, turn = h.copy(), end.copy()
    turning = np.nonzero(a0 * a1 < 0.0)[0]
    if turning.size:
        turn_s[turning], turn[turning] = halves.until(
            begin[turning],
            u[turning],
            force[turning],
            h[turning],
            kind.acceleration,
            zero[turning],
            np.sign(a0[turning]),
        )
    v0 = kind.velocity.at(begin, u, force)
    vt = kind.velocity.at(turn, u, force)
    v1 = kind.velocity.at(end, u, force)
    first = np.nonzero(v0 * vt < 0.0)[0]
    if first.size:
        found = halves.until(
            begin[first],
            u[first],
            force[first],
            turn_s[first],
            kind.velocity,
            zero[first],
            np.sign(v0[first]),
        )
        times[chosen[first], 1], states[chosen[first], 1] = found
    second = np.nonzero((vt * v1 < 0.0) & (turn_s < h))[0]
    if second.size:
        theta, state = halves.until(
            turn[second],
            u[second],
            force[second],
            h[second] - turn_s[second],
            kind.velocity,
            zero[second],
            np.sign(vt[second]),
        )
        times[chosen[second], 2] = turn_s[second] + theta
        states[chosen[second], 2] = state


def _cross(opened: _Opened, scan: _Scan, which: Whole, leg: Whole, level: Real, sign: Real) -> Real:
    """Time in a piece at which ``sign (position - level)`` stops being positive on a leg."""
    times = np.empty(which.size)
    for number, kind in enumerate(scan.kinds):
        chosen = np.nonzero(opened.held[which] == bool(number))[0]
        if chosen.size:
            piece, start = which[chosen], leg[chosen]
            begin_s = opened.times_s[piece, start]
            theta, _ = scan.halves[number].until(
                opened.states[piece, start],
                opened.inputs[piece],
                opened.forces[piece],
                opened.times_s[piece, start + 1] - begin_s,
                kind.position,
                -level[chosen],
                sign[chosen],
            )
            times[chosen] = begin_s + theta
    return times


@lru_cache(maxsize=64)
def longest_piece_s(space: StateSpace, held: bool = False) -> float:
    """Length of a piece in which a motion can be searched for extremes.

    Parameters
    ----------
    space : StateSpace
        The plant.
    held : bool
        Whether the main mass may also be held. [-]

    Returns
    -------
    float
        1/8 period of the fastest oscillation; infinite without one. [s]

    Notes
    -----
    From the imaginary parts of the eigenvalues; own rule.
    """
    fastest = float(np.abs(np.linalg.eigvals(space.a).imag).max())
    if held:
        still = np.linalg.eigvals(held_space(space).a)
        fastest = max(fastest, float(np.abs(still.imag).max()))
    return math.inf if fastest == 0.0 else 2.0 * math.pi / fastest / 8.0


def reach(trajectory: Trajectory, row: Real) -> tuple[Real, Real]:
    """Bounds of a position over a whole motion, between the nodes too.

    Parameters
    ----------
    trajectory : Trajectory
        The motion.
    row : array of float, shape (n,)
        Which position, such as ``space.c_main_position``.

    Returns
    -------
    tuple of two arrays of float, shape (lanes,)
        No less than this, no more than that; close, not exact. [m or rad]

    Notes
    -----
    Tangents at the ends of each piece, see `step_figures` for the exact extremes.
    """
    scan = _scan(finely_divided(trajectory), row)
    return scan.lower.min(axis=0), scan.upper.max(axis=0)


def finely_divided(trajectory: Trajectory) -> Trajectory:
    """The same motion with more nodes, so that each piece turns a few times at most.

    Parameters
    ----------
    trajectory : Trajectory
        The motion.

    Returns
    -------
    Trajectory
        Nodes no further apart than `longest_piece_s`.

    Notes
    -----
    States between the nodes come from transition matrices, nothing is interpolated.
    """
    longest_s = longest_piece_s(trajectory.space, held=trajectory.held is not None)
    spans = np.diff(trajectory.times_s)
    counts = np.maximum(np.ceil(spans / longest_s * (1.0 - 1e-9)).astype(np.int64), 1)
    if counts.max() == 1:
        return trajectory

    piece = np.repeat(np.arange(spans.size), counts)
    number = np.arange(piece.size) - np.repeat(np.cumsum(counts) - counts, counts)
    steps = spans / counts
    lanes, n = trajectory.lanes, trajectory.states.shape[2]
    states = np.empty((piece.size + 1, lanes, n))
    first = np.nonzero(number == 0)[0]
    states[first] = trajectory.states[:-1]
    states[-1] = trajectory.states[-1]
    inner = np.nonzero(number)[0]
    chosen = piece[inner]
    states[inner] = _after(
        trajectory, chosen, trajectory.states[chosen], number[inner] * steps[chosen]
    )
    return replace(
        trajectory,
        times_s=np.append(
            trajectory.times_s[:-1][piece] + number * steps[piece], trajectory.times_s[-1]
        ),
        states=states,
        inputs=trajectory.inputs[piece],
        forces=trajectory.forces[piece],
        held=None if trajectory.held is None else trajectory.held[piece],
    )


def _after(trajectory: Trajectory, pieces: Whole, states: Real, spans: Real) -> Real:
    """States (k, lanes, n) of some pieces, a span (k,) later, under the inputs of those pieces."""
    k, lanes, n = states.shape
    flat = states.reshape(k * lanes, n)
    inputs = trajectory.inputs[pieces].reshape(-1)
    forces = trajectory.forces[pieces].reshape(-1)
    times = np.repeat(spans, lanes)
    longest_s = float(spans.max())
    result = halves_for(trajectory.space, longest_s).advance(flat, inputs, forces, times)
    if trajectory.held is not None:
        held = trajectory.held[pieces].reshape(-1)
        if held.any():
            still = halves_for(held_space(trajectory.space), longest_s)
            result[held] = still.advance(flat[held], inputs[held], forces[held], times[held])
    return result.reshape(k, lanes, n)


def _highest(trajectory: Trajectory, scan: _Scan, sign: float) -> tuple[Real, Real]:
    """Largest ``sign x position`` of each lane, and when it is reached first."""
    positions = sign * scan.positions
    at = np.argmax(positions, axis=0)
    lanes = np.arange(trajectory.lanes)
    best, best_s = positions[at, lanes], trajectory.times_s[at]
    bound = scan.upper if sign > 0.0 else -scan.lower
    # Sign changes of a velocity that is nothing but rounding cannot lift a peak.
    margin = 8.0 * _EPS * np.abs(scan.positions).max(axis=0)
    pieces, lane = np.nonzero(bound > best + margin)
    if pieces.size:
        opened = _open(trajectory, scan, pieces, lane)
        for inner in (1, 2):
            value = sign * opened.positions[:, inner]
            time_s = trajectory.times_s[pieces] + opened.times_s[:, inner]
            order = np.lexsort((time_s, -value))
            for i in order:
                if value[i] <= best[lane].min():
                    break
                if value[i] > best[lane[i]]:
                    best[lane[i]], best_s[lane[i]] = value[i], time_s[i]
    return best, best_s


class _Look:
    """A motion, finely divided, with its bounds."""

    def __init__(self, trajectory: Trajectory) -> None:
        self.fine = finely_divided(trajectory)
        self.scan = _scan(self.fine)


class _Looks:
    """The part that was looked at last stays open: loading one may mean simulating it again."""

    def __init__(self, part: Part, look: _Look) -> None:
        self._part, self._look = part, look

    def at(self, part: Part) -> _Look:
        if part is not self._part:
            self._part, self._look = part, _Look(part.load())
        return self._look


def _last_outside(parts: Sequence[Part], looks: _Looks, middle: Real, width: Real) -> Real:
    """Last time at which each lane is further than width from middle; the start if never."""
    result = np.full(middle.shape, parts[0].start_s)
    todo = np.arange(middle.size)
    for part in reversed(parts):
        leaves = (part.high > middle + width) | (part.low < middle - width)
        waiting = todo[leaves[todo]]
        if waiting.size == 0:
            continue
        trajectory, scan = looks.at(part).fine, looks.at(part).scan
        flagged = (scan.upper > middle + width) | (scan.lower < middle - width)
        while True:
            waiting = waiting[flagged[:, waiting].any(axis=0)]
            if waiting.size == 0:
                break
            pieces = flagged.shape[0] - 1 - np.argmax(flagged[::-1, waiting], axis=0)
            opened = _open(trajectory, scan, pieces, waiting)
            off = opened.positions - middle[waiting, np.newaxis]
            outside = np.abs(off) > width[waiting, np.newaxis]
            found = np.nonzero(outside.any(axis=1))[0]
            point = 3 - np.argmax(outside[found, ::-1], axis=1)
            times = opened.times_s[found, point]
            inner = np.nonzero(point < 3)[0]
            if inner.size:
                which, leg = found[inner], point[inner]
                side = np.sign(off[which, leg])
                level = middle[waiting[which]] + side * width[waiting[which]]
                times[inner] = _cross(opened, scan, which, leg, level, side)
            result[waiting[found]] = trajectory.times_s[pieces[found]] + times
            todo = np.setdiff1d(todo, waiting[found])
            # What was flagged by its bound only is not asked again.
            flagged[pieces, waiting] = False
            waiting = np.delete(waiting, found)
        if todo.size == 0:
            break
    return result


def _first_reached(parts: Sequence[Part], looks: _Looks, level: Real, sign: Real) -> Real:
    """First time at which ``sign (position - level) >= 0`` in each lane; nan if never."""
    result = np.full(level.shape, np.nan)
    todo = np.nonzero(sign)[0]
    for part in parts:
        reaches = np.where(sign > 0.0, part.high >= level, part.low <= level)
        waiting = todo[reaches[todo]]
        if waiting.size == 0:
            continue
        trajectory, scan = looks.at(part).fine, looks.at(part).scan
        flagged = np.where(sign > 0.0, scan.upper >= level, scan.lower <= level)
        while True:
            waiting = waiting[flagged[:, waiting].any(axis=0)]
            if waiting.size == 0:
                break
            pieces = np.argmax(flagged[:, waiting], axis=0)
            opened = _open(trajectory, scan, pieces, waiting)
            off = opened.positions - level[waiting, np.newaxis]
            there = sign[waiting, np.newaxis] * off >= 0.0
            found = np.nonzero(there.any(axis=1))[0]
            point = np.argmax(there[found], axis=1)
            times = np.zeros(found.size)
            inner = np.nonzero(point > 0)[0]
            if inner.size:
                which = found[inner]
                lane = waiting[which]
                times[inner] = _cross(
                    opened, scan, which, point[inner] - 1, level[lane], -sign[lane]
                )
            result[waiting[found]] = trajectory.times_s[pieces[found]] + times
            todo = np.setdiff1d(todo, waiting[found])
            flagged[pieces, waiting] = False
            waiting = np.delete(waiting, found)
        if todo.size == 0:
            break
    return result


# --------------------------------------------------------------------------------------------------
# Inside: the mean


@lru_cache(maxsize=64)
def _with_integral(space: StateSpace) -> StateSpace:
    """The plant with one more state: the integral of its position."""
    n = space.a.shape[0]
    a = np.zeros((n + 1, n + 1))
    a[:n, :n], a[n, :n] = space.a, space.c_position
    return StateSpace(
        a=a,
        b=np.append(space.b, 0.0),
        b_force=np.append(space.b_force, 0.0),
        c_position=np.append(space.c_position, 0.0),
        c_measured=np.append(space.c_measured, 0.0),
        c_main_position=np.append(space.c_main_position, 0.0),
        c_main_velocity=np.append(space.c_main_velocity, 0.0),
        c_current=np.append(space.c_current, 0.0),
        d_current=space.d_current,
        names=(*space.names, "integral of position"),
    )


def _integrals(trajectory: Trajectory) -> Real:
    """Exact integral of the position over each piece, shape (m - 1, lanes)."""
    spans = np.diff(trajectory.times_s)
    free = _integrals_of_kind(trajectory, trajectory.space, spans)
    if trajectory.held is None or not trajectory.held.any():
        return free
    still = _integrals_of_kind(trajectory, held_space(trajectory.space), spans)
    return np.where(trajectory.held, still, free)


def _integrals_of_kind(trajectory: Trajectory, space: StateSpace, spans: Real) -> Real:
    states, inputs, forces = trajectory.states, trajectory.inputs, trajectory.forces
    wide = _with_integral(space)
    n = space.a.shape[0]
    # Differences of large times carry rounding: spans that agree to 1e-7 of the longest are one
    # span, and what they differ by counts with the position at their end.
    keys = np.rint(spans / spans.max() * 1e7)
    values, group, sizes = np.unique(keys, return_inverse=True, return_counts=True)
    if values.size > _MOST_GROUPS:
        k, lanes = spans.size, trajectory.lanes
        start = np.zeros((k * lanes, n + 1))
        start[:, :n] = states[:-1].reshape(k * lanes, n)
        end = halves_for(wide, float(spans.max())).advance(
            start, inputs.reshape(-1), forces.reshape(-1), np.repeat(spans, lanes)
        )
        return end[:, n].reshape(k, lanes)
    typical = np.bincount(group, weights=spans) / sizes
    psi, gain, gain_force = propagate(wide, typical)
    result = np.empty(inputs.shape)
    for number in range(values.size):
        chosen = slice(None) if values.size == 1 else np.nonzero(group == number)[0]
        part = _combined(states[:-1][chosen], psi[number, n, :n])
        part += gain[number, n] * inputs[chosen] + gain_force[number, n] * forces[chosen]
        result[chosen] = part
    end_positions = _combined(states[1:], trajectory.space.c_position)
    return result + end_positions * (spans - typical[group])[:, np.newaxis]


def _from_time(trajectory: Trajectory, time_s: float) -> Trajectory:
    """The rest of a motion from a time on that lies within it."""
    times = trajectory.times_s
    piece = min(int(np.searchsorted(times, time_s, side="right")) - 1, times.size - 2)
    ahead_s = max(time_s - float(times[piece]), 0.0)
    begin = _after(
        trajectory,
        np.array([piece]),
        np.ascontiguousarray(trajectory.states[piece : piece + 1]),
        np.array([ahead_s]),
    )
    return replace(
        trajectory,
        times_s=np.concatenate([[time_s], times[piece + 1 :]]),
        states=np.concatenate([begin, trajectory.states[piece + 1 :]]),
        inputs=trajectory.inputs[piece:],
        forces=trajectory.forces[piece:],
        held=None if trajectory.held is None else trajectory.held[piece:],
    )
