"""Proven bounds: ranges of the integers, deviation from the ideal loop, limit cycles at rest.

Rules of this file:

- A bound is a proof, or it is not called a bound. Everything is rounded outward; a double that
  stands for a real number comes with the radius of its error.
- Errors of rounding are bounded inputs and nothing else is assumed about them.
- The loop file's numbers, as the doubles in `Task`, are exact; the plant is linear. What voids a
  bound (friction, stops, a reached limit) is said beside it.
- Bounds come from sums of absolute impulse responses. No simulation enters them.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from plant2.closedloop import ClosedLoop, poles_delta
from plant2.design import Task
from plant2.equations import (
    Equations,
    WordController,
    WordEquation,
    partial_sum_range,
    signal_range,
    type_range,
    verify_ranges,
)
from plant2.errors import OutOfRangeError
from plant2.plant import constant_force, holding_effort, static_gain

Real = NDArray[np.float64]
Flags = NDArray[np.bool_]
Range = tuple[int, int]

UNIT = 2.0**-53
"""Largest relative error of one rounding to a double."""

BITS = 256
"""Precision of the balls that enclose the matrices."""

_BLOCK = 8
"""Impulse responses are computed in blocks of 2^8 samples."""

_LONGEST = 1 << 18
"""Samples after which a loop counts as too slow to be bounded."""

_ENOUGH = 34.0
"""Time constants of the slowest pole until what remains is left to the bound of the tail."""

PHASES = 16
"""Instants per sample period at which the position is bounded; the rest is interpolated."""


# --------------------------------------------------------------------------------------------------
# Sums of absolute impulse responses, with proof


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Peaks:
    """Sums over the impulse responses of a sampled linear system.

    Parameters
    ----------
    most, least : array of float, shape (p, m)
        Proven upper and lower bound of the sum of absolute values, output p from input m; an
        input that enters through 1 - 1/z is meant with that factor. [output per input]
    total, slack : array of float, shape (p, m)
        Sum of the impulse response and the largest error of it. [output per input]
    rise : array of float, shape (p, 2)
        Proven bounds of the response to a unit step of the first input, at any time, 0 before it
        included: lowest, highest. [output per input]
    start : array of float, shape (p,)
        Proven bound of what a unit of the start error leaves, from the first sample on.
        [output per input]
    weight : array of float, shape (p, n)
        Proven upper bound of the sum of absolute responses to a start in each state.
        [output per state]
    samples : int
        Length of the impulse responses that were summed; the rest is in the bounds.

    Notes
    -----
    See `_peaks`.
    """

    most: Real
    least: Real
    total: Real
    slack: Real
    rise: Real
    start: Real
    weight: Real
    samples: int


def _gamma(n: int) -> float:
    """Largest relative error of a dot product of n terms, whatever its order (Higham)."""
    return (n + 2) * UNIT / (1.0 - (n + 2) * UNIT)


def _doubles(matrix: Any) -> tuple[Real, Real]:
    """Nearest doubles of a matrix of balls, and the radius about them that holds the balls."""
    middle, radius = np.zeros((matrix.nrows(), matrix.ncols())), None
    radius = np.zeros_like(middle)
    flat, rad = middle.reshape(-1), radius.reshape(-1)
    for i, ball in enumerate(matrix.entries()):
        if ball.is_zero():
            continue
        value = float(ball.mid())
        flat[i] = value
        rad[i] = float((ball - value).abs_upper()) * (1.0 + 2.0**-50)
    if not (np.all(np.isfinite(middle)) and np.all(np.isfinite(radius))):
        raise OutOfRangeError(
            "matrix", math.nan, "", "is not finite", "bring the loop's numbers into a sane range"
        )
    return middle, radius


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _System:
    """x+ = a x + b w, y = c x + d w, entries as doubles with radii; a by its powers."""

    powers: tuple[tuple[Real, Real], ...]  # a^(2^j): double, and error of a product with it
    b: tuple[Real, Real]
    c: tuple[Real, Real]
    d: tuple[Real, Real]
    start: Real | None = None  # start state per unit of the start error
    start_input: int = -1  # input whose absence belongs to the start error
    carried: Flags | None = None  # inputs that enter through 1 - 1/z


def _powers(a: Any, slowest: float) -> tuple[tuple[Real, Real], ...]:
    """a^(2^j) as doubles, until a block holds the whole impulse response or is full."""
    n = int(a.nrows())
    out = []
    power = a
    for j in range(_BLOCK + 1):
        middle, radius = _doubles(power)
        out.append((middle, _gamma(n) * np.abs(middle) + radius))
        if (1 << j) >= slowest:
            break
        power = power * power
    return tuple(out)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Pace:
    """How long impulse responses are, and slow real poles whose end is summed in closed form."""

    samples: float  # of what is summed as it comes; infinite where something does not decay
    whole: float  # of everything
    rates: Real  # none, one or two slow poles
    right: Real  # their directions, one a column
    left: Real  # their shares of a state, one a row; left . right = 1


def _pace(a: Real) -> _Pace:
    """Samples in which all poles, or all but one slow real one, decay to nothing.

    Estimates only: what they are wrong by is bounded where they are used.
    """
    n = len(a)

    def plain(samples: float) -> _Pace:
        return _Pace(
            samples=samples,
            whole=samples,
            rates=np.zeros(0),
            right=np.zeros((n, 0)),
            left=np.zeros((0, n)),
        )

    def samples(size: float) -> float:
        if size >= 1.0 - 1e-12:
            return math.inf
        return 8.0 * n if size < 1e-3 else _ENOUGH / -math.log(size) + 4.0 * n

    if not n:
        return plain(1.0)
    scale = _even_scale(a)
    even = a * (scale / scale[:, np.newaxis])
    values, vectors = np.linalg.eig(even)
    order = np.argsort(-np.abs(values))
    first = values[order[0]]
    whole = samples(float(abs(first)))
    rest = samples(float(abs(values[order[1]]))) if n > 1 else 4.0
    if math.isinf(whole) or first.imag != 0.0 or first.real < 0.9 or rest > 0.6 * whole:
        return plain(whole)
    right = np.real(vectors[:, order[0]])
    others, rows = np.linalg.eig(even.T)
    left = np.real(rows[:, int(np.argmin(np.abs(others - first)))])
    share = float(left @ right)
    if abs(share) < 1e-9:
        return plain(whole)
    return _Pace(
        samples=rest,
        whole=whole,
        rates=np.array([float(first.real)]),
        right=(right * scale)[:, np.newaxis],
        left=(left / share / scale)[np.newaxis],
    )


def _side_by_side(one: _Pace, two: _Pace) -> _Pace:
    """Pace of two systems that do not touch each other."""
    n, m = one.right.shape[0], two.right.shape[0]
    both = len(one.rates) == len(two.rates) == 1
    if not both:
        longer = max(one.whole, two.whole)
        return _Pace(
            samples=longer,
            whole=longer,
            rates=np.zeros(0),
            right=np.zeros((n + m, 0)),
            left=np.zeros((0, n + m)),
        )
    return _Pace(
        samples=max(one.samples, two.samples),
        whole=max(one.whole, two.whole),
        rates=np.concatenate([one.rates, two.rates]),
        right=_apart(one.right, two.right),
        left=_apart(one.left, two.left),
    )


def _apart(a: Real, b: Real) -> Real:
    """Two matrices as blocks of one."""
    out = np.zeros((a.shape[0] + b.shape[0], a.shape[1] + b.shape[1]))
    out[: a.shape[0], : a.shape[1]] = a
    out[a.shape[0] :, a.shape[1] :] = b
    return out


def _even_scale(a: Real) -> Real:
    """Powers of two that even out rows and columns (Osborne 1960, from memory)."""
    work = np.abs(a) * (1.0 - np.eye(len(a)))
    scale = np.ones(len(a))
    for _ in range(16):
        done = True
        for i in range(len(a)):
            row, column = float(work[i].sum()), float(work[:, i].sum())
            if row == 0.0 or column == 0.0:
                continue
            factor = 2.0 ** round(0.5 * math.log2(row / column))
            if factor != 1.0:
                work[:, i] *= factor
                work[i] /= factor
                scale[i] *= factor
                done = False
        if done:
            break
    return scale


def _too_slow(what: str) -> OutOfRangeError:
    return OutOfRangeError(
        what,
        None,
        "",
        "is unstable, or too slow for its impulse response to be summed",
        "bound a stable loop whose slowest pole decays within some thousand samples",
    )


def _peaks(system: _System, pace: _Pace) -> Peaks:
    """Sum the absolute impulse responses of a system, with everything that was left out.

    With A the true matrix, X[k] the computed states of a start x and a defect what a doubling or
    a step got wrong: every defect goes on as A^r defect, each r once, so that over all times

        sum |A^r| <= sum_computed |X| + sum |A^r| M,   M = |X[K]| + 2 sum (error of a^(2^j)) |X|

    for the starts x = unit vectors. With a weighted norm of M below 1 that bounds sum |A^r| =: W
    (and proves stability: every partial sum obeys it); then any output c from any input b has

        sum |c A^r b| <= sum |c X| + (|c| W) (|X[K]| + 2 sum (error of a^(2^j)) |X|) + roundings.

    Where one real pole is much slower than the rest, X[K] = v u + remainder with v close to its
    direction, and what v leaves is summed as it is: sum |c A^r v| = |c v|/(1 - rate) but for
    (|c| W) |A v - rate v|/(1 - rate). Of two such poles p and q that all but cancel,
    sum |p rate^k + q other^k| <= |p + q|/(1 - rate) + |q| |1/(1 - rate) - 1/(1 - other)|.

    Own derivation; no eigenvectors, so that defective matrices need no case of their own.
    Underflow is left out: it is below 1e-300.
    """
    a = system.powers[0][0]
    n = len(a)
    b, b_radius = system.b
    c, c_radius = system.c
    d, d_radius = system.d
    p, m = d.shape
    extra = 0 if system.start is None else 1
    samples = pace.samples
    if samples > _LONGEST:
        raise _too_slow("loop")
    columns = [np.eye(n), b]
    if system.start is not None:
        columns.append(system.start[:, np.newaxis])
    first = np.concatenate(columns, axis=1)
    width = first.shape[1]

    levels = len(system.powers) - 1
    block = 1 << levels
    blocks = max(1, math.ceil(samples / block))
    # covers the roundings of sums of that many numbers of one sign, with room for what follows
    out = 1.0 + (block * blocks + 1024) * 2.0**-52
    # one block, by doubling
    states = np.empty((n, block, width))
    states[:, 0] = first
    wrong = np.zeros((n, width))
    for j in range(levels):
        size = 1 << j
        middle, error = system.powers[j]
        states[:, size : 2 * size] = (middle @ states[:, :size].reshape(n, -1)).reshape(
            n, size, width
        )
        wrong += error @ np.abs(states[:, :size]).sum(axis=1)
    leap, leap_error = system.powers[levels]

    carried = system.carried if system.carried is not None else np.zeros(m, dtype=bool)
    sizes = np.zeros((n, width))
    most, total = np.abs(d), d.copy()
    steps, last = np.abs(d[:, carried]), d[:, carried]
    climbed = d[:, 0].copy()
    rise = np.stack([np.minimum(0.0, climbed), np.maximum(0.0, climbed)], axis=1)
    gone = np.zeros(p) if system.start_input < 0 else d[:, system.start_input].copy()
    left_low, left_high = gone.copy(), gone.copy()
    for number in range(blocks):
        if number:
            states = (leap @ states.reshape(n, -1)).reshape(n, block, width)
        part = np.abs(states).sum(axis=1)
        sizes += part
        wrong += leap_error @ part
        seen = (c @ states[:, :, n:].reshape(n, -1)).reshape(p, block, m + extra)
        most += np.abs(seen[:, :, :m]).sum(axis=1)
        total += seen[:, :, :m].sum(axis=1)
        if np.any(carried):
            steps += np.abs(seen[:, 0, :m][:, carried] - last)
            steps += np.abs(np.diff(seen[:, :, :m][:, :, carried], axis=1)).sum(axis=1)
            last = seen[:, -1, :m][:, carried]
        way = climbed[:, np.newaxis] + np.cumsum(seen[:, :, 0], axis=1)
        rise[:, 0] = np.minimum(rise[:, 0], way.min(axis=1))
        rise[:, 1] = np.maximum(rise[:, 1], way.max(axis=1))
        climbed = way[:, -1]
        if system.start_input >= 0:
            way = gone[:, np.newaxis] + np.cumsum(seen[:, :, system.start_input], axis=1)
            before = np.concatenate([gone[:, np.newaxis], way[:, :-1]], axis=1)
            for missing in (before, before + seen[:, :, m]) if extra else (before,):
                left_low = np.minimum(left_low, missing.min(axis=1))
                left_high = np.maximum(left_high, missing.max(axis=1))
            gone = way[:, -1]
    final = leap @ states[:, 0]

    # what slow poles leave
    far = 1.0 / (1.0 - pace.rates)
    slow = pace.left @ final
    end = np.abs(final - pace.right @ slow)
    end += 8.0 * UNIT * (np.abs(final) + np.abs(pace.right) @ np.abs(slow))
    step, step_error = system.powers[0]
    off = np.abs(step @ pace.right - pace.rates * pace.right)
    off += step_error @ np.abs(pace.right) + 4.0 * UNIT * np.abs(pace.right)
    end += off @ (np.abs(slow) * far[:, np.newaxis])
    sizes += np.abs(pace.right) @ (np.abs(slow) * far[:, np.newaxis])
    # by pole: value at the next sample, and all that is to come
    shown = [np.outer(c @ pace.right[:, i], slow[i, n:]) for i in range(len(far))]
    nothing = np.zeros((p, m + extra))
    onward = sum((v * f for v, f in zip(shown, far, strict=True)), nothing)
    afterwards = np.abs(onward)
    if len(far) == 2:
        afterwards = np.abs(shown[0] + shown[1]) * far[0] + np.abs(shown[1]) * abs(far[0] - far[1])
    # a single pole goes one way
    swing = afterwards if len(far) == 2 else nothing
    tail = sum(shown, nothing)
    most, surely = most + afterwards[:, :m], most + np.abs(onward[:, :m])
    total += onward[:, :m]
    rise[:, 0] = np.minimum(rise[:, 0], climbed + onward[:, 0] - swing[:, 0])
    rise[:, 1] = np.maximum(rise[:, 1], climbed + onward[:, 0] + swing[:, 0])
    if system.start_input >= 0:
        way = gone + onward[:, system.start_input]
        wide = swing[:, system.start_input] + (afterwards[:, m] if extra else 0.0)
        left_low = np.minimum(left_low, np.minimum(gone, way) - wide)
        left_high = np.maximum(left_high, np.maximum(gone, way) + wide)

    # sums of nonnegative numbers from here on: their roundings are covered by `out`
    left = (end + 2.0 * wrong) * out
    sizes = sizes * out
    scale = 1.0 / _even_scale(a)
    loss = scale @ left[:, :n]
    q = float((loss / scale).max(initial=0.0)) * out
    if not q < 0.5:
        raise _too_slow("loop")
    row = (sizes[:, :n] / scale).max(axis=1, initial=0.0) / (1.0 - q)
    reach = (sizes[:, :n] + np.outer(row, loss)) * out
    weight = (np.abs(c) + c_radius) @ reach * out
    own = _gamma(n) * np.abs(c) + c_radius
    inputs = slice(n, n + m)
    error = (own @ sizes[:, inputs] + weight @ (left[:, inputs] + b_radius) + d_radius) * out
    slack = error + most * (out - 1.0)
    upper = (most + error) * out
    lower = np.maximum(surely / out - error, 0.0)
    start = np.zeros(p)
    if system.start_input >= 0:
        at = system.start_input
        start = np.maximum(total[:, at] - left_low, left_high - total[:, at]) + 2.0 * slack[:, at]
        if extra:
            start = start + own @ sizes[:, n + m] + weight @ left[:, n + m]
        start = start * out
    rise[:, 0] -= slack[:, 0]
    rise[:, 1] += slack[:, 0]
    if np.any(carried):
        after = tail[:, :m][:, carried]
        steps = steps + np.abs(after - last) + np.abs(after)
        part = 2.0 * error[:, carried] + 2.0 * swing[:, :m][:, carried]
        upper[:, carried] = (steps + part) * out
        lower[:, carried] = np.maximum(steps / out - part, 0.0)
        total[:, carried] = 0.0
        slack[:, carried] = 0.0
    return Peaks(
        most=upper,
        least=lower,
        total=total,
        slack=slack * out,
        rise=rise,
        start=start,
        weight=weight,
        samples=block * blocks,
    )


# --------------------------------------------------------------------------------------------------
# The linear part of a list, exact

_Key = tuple[str, str, int]
"""Kind, name, lag of what a row reads."""

_Row = dict[_Key, Fraction]


@dataclass(frozen=True, slots=True, kw_only=True)
class Rounding:
    """What the rounding of one equation adds to its signal.

    Parameters
    ----------
    name : str
        The signal.
    low, high : float
        Signal less what it would be without rounding. [unit of the signal]
    carried : bool
        The residue is carried: the error enters through 1 - 1/z.

    Notes
    -----
    floor(t + 1/2) - t with t a multiple of g/2^shift lies within -(1/2 - g/2^shift) .. 1/2.
    """

    name: str
    low: float
    high: float
    carried: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class _List:
    """A list as rows over states (signals of the past), inputs, errors and constants."""

    signals: tuple[str, ...]
    units: tuple[str, ...]
    rows: Mapping[str, _Row]
    states: tuple[tuple[str, int], ...]
    roundings: tuple[Rounding, ...]
    held: tuple[str, ...]
    output: str


def _scaled(value: int, exponent: int) -> Fraction:
    return Fraction(value << exponent) if exponent >= 0 else Fraction(value, 1 << -exponent)


def _grain(equation: WordEquation) -> int:
    """What every sum of the equation is a multiple of."""
    if equation.held is not None:
        return 1
    return math.gcd(equation.constant, *(t.factor for t in equation.terms))


def _rounding_of(equation: WordEquation) -> Rounding | None:
    """The rounding of a word equation; None where nothing is lost."""
    grain = _grain(equation)
    if equation.shift == 0 or grain % (1 << equation.shift) == 0:
        return None
    fine = grain & -grain  # only its power of two counts
    unit = 2.0**-equation.frac_bits
    return Rounding(
        name=equation.name,
        low=-unit * (0.5 - float(Fraction(fine, 1 << equation.shift))),
        high=0.5 * unit,
        carried=equation.rest is not None,
    )


def _list_of(controller: WordController | Equations, cut: Iterable[str] = ()) -> _List:
    """Linear part of a list; signals in `cut` count as inputs of their own where they are read."""
    cut = frozenset(cut)
    real = isinstance(controller, Equations)
    bits = dict.fromkeys(controller.inputs, 0)
    equations: list[tuple[str, list[tuple[str, int, Fraction]], Fraction, str | None]] = []
    roundings: list[Rounding] = []
    if isinstance(controller, Equations):
        for e in controller.update:
            terms = [(t.signal, t.lag, Fraction(t.coefficient)) for t in e.terms]
            equations.append((e.name, terms, Fraction(e.constant), e.held))
    else:
        bits.update({e.name: e.frac_bits for e in controller.update})
        for w in controller.update:
            terms = [
                (t.signal, t.lag, _scaled(t.factor, bits[t.signal] - w.sum_frac_bits))
                for t in w.terms
            ]
            equations.append((w.name, terms, _scaled(w.constant, -w.sum_frac_bits), w.held))
            rounding = _rounding_of(w)
            if rounding is not None:
                roundings.append(rounding)
    rounded = {r.name for r in roundings}

    depth: dict[str, int] = {}
    for _, terms, _, _ in equations:
        for signal, lag, _ in terms:
            depth[signal] = max(depth.get(signal, 0), lag)
    known: dict[str, _Row] = {}
    held_names = []
    for name, terms, constant, held in equations:
        row: _Row = {}

        def add(key: _Key, value: Fraction, row: _Row = row) -> None:
            total = row.get(key, Fraction(0)) + value
            if total:
                row[key] = total
            else:
                row.pop(key, None)

        for signal, lag, coefficient in terms:
            if lag:
                add(("state", signal, lag), coefficient)
            elif signal in controller.inputs:
                add(("input", signal, 0), coefficient)
            elif signal in cut:
                add(("cut", signal, 0), coefficient)
            else:
                for key, value in known[signal].items():
                    add(key, coefficient * value)
        if constant:
            add(("one", "", 0), constant)
        if held is not None:
            held_names.append(held)
            add(("held", held, 0), Fraction(1))
        if not real and name in rounded:
            add(("rounding", name, 0), Fraction(1))
        known[name] = row
    states = tuple((s, k) for s, n in depth.items() for k in range(1, n + 1))
    return _List(
        signals=tuple(e[0] for e in equations),
        units=tuple(e.unit for e in controller.update),
        rows=known,
        states=states,
        roundings=tuple(roundings),
        held=tuple(held_names),
        output=controller.output,
    )


# --------------------------------------------------------------------------------------------------
# The closed loop in balls


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One bounded input of the linear loop.

    Parameters
    ----------
    kind : str
        "reference", "sensor" (error and noise), "added", "output" (what acts less what was
        asked), "rounding", "held", "one" (everything constant) or "force".
    name : str
        Signal, held word, or instant of a force; else empty.
    low, high : float
        Range of a rounding or of the sensor's own step; 0 for what the caller decides.
        [count, code or N]

    Notes
    -----
    Every column is an independent input: nothing is assumed about how errors hang together.
    """

    kind: str
    name: str = ""
    low: float = 0.0
    high: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Motion:
    """A position between the samples: rows at instants, and what interpolation may miss.

    Parameters
    ----------
    pieces : tuple of tuple of int
        Rows of the peaks at the instants of each piece of constant output, ends included; the end
        of the sample is the first row again.
    missed : array of float, shape (pieces, m + 1)
        Largest distance from the straight line between neighbouring rows, per unit of each
        column, and per unit of the start error. [m or rad per unit]

    Notes
    -----
    |y - chord| <= h^2/8 max |y''|.
    """

    pieces: tuple[tuple[int, ...], ...]
    missed: Real


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LoopPeaks:
    """Peak gains of the linear closed loop, with everything that later bounds are made of.

    Parameters
    ----------
    columns : tuple of Column
        The inputs.
    signals : tuple of str
        Rows 0 .. of the peaks: the list's signals, in their units; the next row is the raw count
        before the converter clips it.
    peaks : Peaks
        Sums of absolute impulse responses. [row unit per column unit]
    position, main : Motion
        True position, and that of the main mass. [m or rad]
    count_per_position : float
        Sensor scale without polarity. [count/m or count/rad]
    rounded_output : str or None
        Signal whose rounding makes whole codes; None for real coefficients.
    decay_samples : int
        Samples after which the slowest pole has decayed to rounding; an estimate.

    Notes
    -----
    See `loop_peaks`.
    """

    columns: tuple[Column, ...]
    signals: tuple[str, ...]
    peaks: Peaks
    position: Motion
    main: Motion
    count_per_position: float
    rounded_output: str | None
    decay_samples: int

    def column(self, kind: str, name: str = "") -> int:
        """Index of a column.

        Parameters
        ----------
        kind, name : str
            As in `Column`; an empty name takes the first of its kind.

        Returns
        -------
        int
            Its index.

        Raises
        ------
        KeyError
            If there is none.

        Notes
        -----
        Look-up only.
        """
        for i, c in enumerate(self.columns):
            if c.kind == kind and name in ("", c.name):
                return i
        raise KeyError(kind, name)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Loop:
    """A closed loop before its impulse responses are summed."""

    step: Any  # one sample, as a matrix of balls
    b: tuple[Real, Real]
    c: tuple[Real, Real]
    d: tuple[Real, Real]
    start: Real
    carried: Flags
    pace: _Pace
    columns: tuple[Column, ...]
    list: _List
    position_rows: tuple[tuple[int, ...], ...]
    main_rows: tuple[tuple[int, ...], ...]
    ends: tuple[tuple[int, ...], ...]  # rows of plant states and acting code where pieces begin
    spans_s: tuple[float, ...]  # of the pieces' parts


def _zeros(flint: Any, rows: int, columns: int) -> list[list[Any]]:
    zero = flint.arb(0)
    return [[zero] * columns for _ in range(rows)]


def _assemble(
    task: Task,
    controller: WordController | Equations,
    *,
    phases: int = PHASES,
    force_instants: int = 0,
    positions_only: bool = False,
) -> _Loop:
    """The closed loop in states: plant, stored outputs, signals of the past.

    x(t) between two samples is a row over the state at the sample, the two outputs that act in
    turn, and the constant force; each of these is a row over states and inputs of the loop.
    """
    import flint

    arb, fmpq = flint.arb, flint.fmpq
    sampled, space = task.sampled, task.sampled.space
    part = _list_of(controller)
    actuator, sensor = task.loop.actuator, task.loop.sensor
    nx, whole = len(space.a), sampled.whole_delay
    stored = whole + (1 if sampled.fraction > 0.0 else 0)
    place = {key: nx + stored + i for i, key in enumerate(part.states)}
    size = nx + stored + len(part.states)

    columns = [
        Column(kind="reference"),
        Column(kind="sensor", low=-0.5, high=0.5),
        Column(kind="added"),
        Column(kind="output"),
        *(Column(kind="rounding", name=r.name, low=r.low, high=r.high) for r in part.roundings),
        *(Column(kind="held", name=name) for name in part.held),
        Column(kind="one"),
    ]
    carried = [c.kind == "rounding" for c in columns]
    for i, c in enumerate(columns):
        if carried[i]:
            carried[i] = next(r.carried for r in part.roundings if r.name == c.name)
    at = {(c.kind, c.name): size + i for i, c in enumerate(columns)}
    total = size + len(columns)
    ks, ka = arb(task.count_per_position), arb(task.effort_per_code)
    zero_count, zero_code = arb(sensor.zero_count), arb(actuator.zero_code)

    def exact(value: Fraction) -> Any:
        return arb(fmpq(value.numerator, value.denominator))

    measured = [arb(float(v)) for v in space.c_measured]
    wide: dict[str, list[Any]] = {}
    for name, row in part.rows.items():
        out = [arb(0)] * total
        for (kind, source, lag), value in row.items():
            factor = exact(value)
            if kind == "state":
                out[place[source, lag]] += factor
            elif kind == "input" and source == "position":
                for i in range(nx):
                    out[i] += factor * ks * measured[i]
                out[at["sensor", ""]] += factor
                out[at["one", ""]] += factor * zero_count
            elif kind == "input":
                out[at[source, ""]] += factor
            else:
                out[at[kind, source]] += factor
        wide[name] = out
    acting = list(wide[part.output])
    acting[at["one", ""]] -= zero_code
    acting[at["output", ""]] += 1

    def unit(index: int) -> list[Any]:
        row = [arb(0)] * total
        row[index] = arb(1)
        return row

    # plant states at the sample, output of the first piece, of the second, constant force
    old = unit(nx + whole) if sampled.fraction > 0.0 else [arb(0)] * total
    new = acting if whole == 0 else unit(nx + whole - 1)
    constant = [arb(0)] * total
    constant[at["one", ""]] = arb(constant_force(task.plant))
    ground = flint.arb_mat([*(unit(i) for i in range(nx)), old, new, constant])

    generator = _zeros(flint, nx + 2, nx + 2)
    for i in range(nx):
        for j in range(nx):
            generator[i][j] = arb(float(space.a[i, j]))
        generator[i][nx] = arb(float(space.b[i])) * ka
        generator[i][nx + 1] = arb(float(space.b_force[i]))
    period = arb(sampled.period_s)
    early = period * arb(sampled.fraction)
    pieces: list[tuple[Any, int, int]] = []
    if sampled.fraction > 0.0:
        count = min(max(1, round(phases * sampled.fraction)), max(1, phases - 1))
        pieces.append((early, count, 0))
        pieces.append((period - early, max(1, phases - count), 1))
    else:
        pieces.append((period, phases, 1))

    raw = [arb(0)] * total
    for i in range(nx):
        raw[i] = ks * measured[i]
    raw[at["sensor", ""]], raw[at["one", ""]] = arb(1), zero_count
    rows: list[Any] = [] if positions_only else [*(wide[name] for name in part.signals), raw]
    flow = flint.arb_mat([[arb(1 if i == j else 0) for j in range(nx + 3)] for i in range(nx)])
    marks: list[tuple[int, int]] = []
    ends_at: list[tuple[int, int]] = []
    flows: list[Any] = []
    spans: list[float] = []
    for length, count, which in pieces:
        part_s = length / count
        spans.append(float(part_s.abs_upper()) * (1.0 + 2.0**-50))
        leap = (flint.arb_mat(generator) * part_s).exp()
        inner = flint.arb_mat([[leap[i, j] for j in range(nx)] for i in range(nx)])
        marks.append((len(flows), len(flows) + count))
        ends_at.append((len(flows), which))
        for _ in range(count):
            flows.append(flow)
            table = (inner * flow).tolist()
            for i in range(nx):
                table[i][nx + which] += leap[i, nx]
                table[i][nx + 2] += leap[i, nx + 1]
            flow = flint.arb_mat(table)

    # the last instant of the last piece is the next sample: it is bounded as such
    def shown(row: Real, flow: Any) -> list[Any]:
        line = flint.arb_mat([[arb(float(v)) for v in row]])
        return list((line * flow * ground).entries())

    def laid_out(row: Real) -> tuple[tuple[int, ...], ...]:
        first = len(rows)
        rows.extend(shown(row, f) for f in flows)
        return tuple((*range(first + a, first + b), first + b % len(flows)) for a, b in marks)

    position_rows = laid_out(space.c_position)
    same = np.array_equal(space.c_position, space.c_main_position)
    main_rows = position_rows if same or positions_only else laid_out(space.c_main_position)
    ends = []
    for f, which in ends_at:
        first = len(rows)
        rows.extend(shown(line, flows[f]) for line in np.eye(nx))
        rows.append(new if which else old)
        ends.append(tuple(range(first, len(rows))))

    # one step
    following = (flow * ground).tolist()
    if stored:
        following.append(acting)
        following.extend(unit(nx + j) for j in range(stored - 1))
    for name, lag in part.states:
        if lag > 1:
            following.append(unit(place[name, lag - 1]))
        elif name in part.rows:
            following.append(wide[name])
        else:
            raise KeyError(name)
    if not size:
        raise KeyError("states")
    a = flint.arb_mat([row[:size] for row in following])
    b_rows = [row[size:] for row in following]
    d_rows = [row[size:] for row in rows]
    if force_instants:
        step = flint.arb_mat(generator) * (period / force_instants)
        leap = step.exp()
        kick = flint.arb_mat([[generator[i][nx + 1]] for i in range(nx)])
        inner = flint.arb_mat([[leap[i, j] for j in range(nx)] for i in range(nx)])
        for m in range(force_instants + 1):
            columns.append(Column(kind="force", name=f"{m}"))
            carried.append(False)
            values = kick.entries()
            for i in range(size):
                b_rows[i] = [*b_rows[i], values[i] if i < nx else arb(0)]
            d_rows = [[*row, arb(0)] for row in d_rows]
            kick = inner * kick
    pace = _pace(_doubles(a)[0])
    start = np.zeros(size)
    start[:nx] = _hand_held(task)
    start[nx : nx + stored] = 1.0
    return _Loop(
        step=a,
        b=_doubles(flint.arb_mat(b_rows)),
        c=_doubles(flint.arb_mat([row[:size] for row in rows])),
        d=_doubles(flint.arb_mat(d_rows)),
        start=start,
        carried=np.array(carried),
        pace=pace,
        columns=tuple(columns),
        list=part,
        position_rows=position_rows,
        main_rows=main_rows,
        ends=tuple(ends),
        spans_s=tuple(spans),
    )


def _hand_held(task: Task) -> Real:
    """Plant states at rest at position 0 when a code of effort is held and the mass is not free."""
    space = task.sampled.space
    own = int(np.argmax(np.abs(space.c_main_velocity)))
    matrix = space.a.copy()
    matrix[own] = space.c_position
    right = -space.b * task.effort_per_code
    right[own] = 0.0
    size = np.abs(matrix).max(axis=1)
    states: Real = np.linalg.solve(matrix / size[:, np.newaxis], right / size)
    states[own] = 0.0
    return states


def _swelling(matrix: Real, size: Real, span_s: float, period_s: float) -> Real:
    """Bound of the states' sizes over a span, from their sizes at its beginning.

    |x_i|' <= a_ii |x_i| + sum |a_ij| |x_j|; any w >= size with (that matrix) w <= mu w bounds the
    sizes by exp(mu t) w (own derivation: comparison with a linear system of nonnegative gains).
    Fast states are given the size to which they settle, so that mu stays near 1/period.
    """
    diagonal = np.diag(matrix)
    off = np.abs(matrix) - np.diag(np.abs(diagonal))
    w = size.copy()
    for _ in range(len(matrix) + 1):
        w = np.maximum(w, (off @ w) / (1.0 / period_s + np.maximum(0.0, -diagonal)))
    alive = w > 0.0
    rates = diagonal[alive] + (off @ w)[alive] / w[alive]
    mu = max(0.0, float(rates.max(initial=0.0))) * (1.0 + 1e-12)
    return w * (math.exp(mu * span_s) * (1.0 + 1e-12))


def _motion(
    task: Task, loop: _Loop, peaks: Peaks, rows: tuple[tuple[int, ...], ...], row: Real
) -> Motion:
    """A position between samples: its rows, and h^2/8 times the largest second derivative."""
    space = task.sampled.space
    nx, m = len(space.a), peaks.most.shape[1]
    wide = np.zeros((nx + 2, nx + 2))
    wide[:nx, :nx] = space.a
    wide[:nx, nx] = space.b * task.effort_per_code
    wide[:nx, nx + 1] = space.b_force
    line = np.concatenate([row, [0.0, 0.0]])
    bend = np.abs(line @ wide @ wide) + _gamma(3 * (nx + 2)) * (
        np.abs(line) @ np.abs(wide) @ np.abs(wide)
    )
    missed = np.zeros((len(rows), m + 1))
    for k, (ends, span) in enumerate(zip(loop.ends, loop.spans_s, strict=True)):
        for j in range(m + 1):
            size = np.zeros(nx + 2)
            size[: nx + 1] = peaks.start[list(ends)] if j == m else peaks.most[list(ends), j]
            if j < m and loop.columns[j].kind == "force":
                size[nx + 1] = 1.0
            grown = _swelling(wide, size, span * (len(rows[k]) - 1), task.period_s)
            missed[k, j] = span * span / 8.0 * float(bend @ grown) * (1.0 + 1e-12)
    return Motion(pieces=rows, missed=missed)


def _with_force(
    task: Task, loop: _Loop, peaks: Peaks, count: int
) -> tuple[tuple[Column, ...], Peaks]:
    """Gather the instants of a force to one column: any force within +-1 at all times.

    integral |f| <= sum over parts of h (|f left| + |f right|)/2 + h^3/8 max |f''|; within the
    sample of the answer itself, the plant's own response is added in full.
    """
    space, period = task.sampled.space, task.period_s
    nx = len(space.a)
    plain = len(loop.columns) - count - 1
    part = period / count
    ends = peaks.most[:, plain:]
    inner = part * (ends.sum(axis=1) - 0.5 * (ends[:, 0] + ends[:, -1]))
    bend = np.abs(space.a @ (space.a @ space.b_force)) + _gamma(3 * nx) * (
        np.abs(space.a) @ (np.abs(space.a) @ np.abs(space.b_force))
    )
    bend = _swelling(space.a, bend, period, period)
    most = inner + period * part * part / 8.0 * (peaks.weight[:, :nx] @ bend)
    # the force of the running sample: |row exp(A s) b| by the same rule, for plant rows only
    grown = _swelling(space.a, np.abs(space.b_force), period, period)
    for rows, row in _plant_rows(task, loop):
        most[list(rows)] += period * float(np.abs(row) @ grown)
    most *= 1.0 + 1e-12
    extend = [
        np.concatenate([old[:, :plain], new[:, np.newaxis]], axis=1)
        for old, new in (
            (peaks.most, most),
            (peaks.least, np.zeros_like(most)),
            (peaks.total, np.zeros_like(most)),
            (peaks.slack, most),
        )
    ]
    return (
        (*loop.columns[:plain], Column(kind="force")),
        replace(peaks, most=extend[0], least=extend[1], total=extend[2], slack=extend[3]),
    )


def _plant_rows(task: Task, loop: _Loop) -> list[tuple[set[int], Real]]:
    """Rows that show the plant between samples, where a force of the same sample counts."""
    space = task.sampled.space
    first = loop.position_rows[0][0]
    out = [({r for piece in loop.position_rows for r in piece} - {first}, space.c_position)]
    if loop.main_rows is not loop.position_rows:
        first = loop.main_rows[0][0]
        out.append(
            ({r for piece in loop.main_rows for r in piece} - {first}, space.c_main_position)
        )
    for number, ends in enumerate(loop.ends):
        if number or task.sampled.fraction == 0.0:
            out.extend(({r}, line) for r, line in zip(ends[:-1], np.eye(len(space.a)), strict=True))
    return out


def loop_peaks(
    task: Task,
    controller: WordController | Equations,
    *,
    phases: int = PHASES,
    force: bool = False,
) -> LoopPeaks:
    """Peak gains of the linear closed loop: every signal, and the position at all times.

    Parameters
    ----------
    task : Task
        Plant and scales; their doubles are taken as exact.
    controller : WordController or Equations
        The words, whose roundings become inputs; or real coefficients, without roundings.
    phases : int
        Instants per sample period at which the position is bounded, at least 2.
    force : bool
        Whether to include a disturbance force on the main mass, any function of time.

    Returns
    -------
    LoopPeaks
        Sums of absolute impulse responses, proven.

    Raises
    ------
    OutOfRangeError
        If the loop is unstable or too slow, or if there are fewer than 2 phases.

    Notes
    -----
    Matrices by the exponential in ball arithmetic (Johansson, IEEE Trans. Computers 66, 2017, from
    memory); the worst-case peak gain is the sum of the absolute impulse response (Dahleh and
    Diaz-Bobillo, *Control of Uncertain Systems*, from memory).
    """
    import flint

    if phases < 2:
        raise OutOfRangeError("phases", phases, "", "must be at least 2", "ask for more")
    count = 8 if force else 0
    with flint.ctx.workprec(BITS):
        loop = _assemble(task, controller, phases=phases, force_instants=count)
        system = _System(
            powers=_powers(loop.step, loop.pace.samples),
            b=loop.b,
            c=loop.c,
            d=loop.d,
            start=loop.start,
            start_input=[c.kind for c in loop.columns].index("output"),
            carried=loop.carried,
        )
    peaks = _peaks(system, loop.pace)
    columns = loop.columns
    if force:
        columns, peaks = _with_force(task, loop, peaks, count)
        loop = replace(loop, columns=columns)
    space = task.sampled.space
    position = _motion(task, loop, peaks, loop.position_rows, space.c_position)
    main = position
    if loop.main_rows is not loop.position_rows:
        main = _motion(task, loop, peaks, loop.main_rows, space.c_main_position)
    return LoopPeaks(
        columns=columns,
        signals=loop.list.signals,
        peaks=peaks,
        position=position,
        main=main,
        count_per_position=abs(task.count_per_position),
        rounded_output=_rounded_output(controller),
        decay_samples=math.ceil(loop.pace.whole),
    )


def _rounded_output(controller: WordController | Equations) -> str | None:
    """The signal whose rounding makes whole codes: back along plain copies from the output."""
    if isinstance(controller, Equations):
        return None
    name = controller.output
    while True:
        equation = controller.equation(name)
        if _rounding_of(equation) is not None:
            return name
        if len(equation.terms) != 1 or equation.terms[0].signal in controller.inputs:
            return None
        name = equation.terms[0].signal


# --------------------------------------------------------------------------------------------------
# The controller by itself: every input, every start, all time


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalBound:
    """Proven range of one signal and of its sum, whatever the inputs do.

    Parameters
    ----------
    name, unit : str
        The signal; "count" or "code".
    frac_bits : int
        Fraction bits of the signal.
    low, high : int
        Range of its word.
    sum_low, sum_high : int
        Range of the sum before rounding and limit, rounding constant left out.
    capacity : int
        Largest word of its type.
    at_limit : bool
        The range ends at the signal's own limit.
    leans_on : tuple of str
        Limited signals inside the controller whose limits the range rests on: what they take away
        is not followed any further. Limits of inputs are not among them.
    linear : bool
        The range comes from a sum of absolute impulse responses; else from intervals.

    Notes
    -----
    See `controller_bounds`.
    """

    name: str
    unit: str
    frac_bits: int
    low: int
    high: int
    sum_low: int
    sum_high: int
    capacity: int
    at_limit: bool
    leans_on: tuple[str, ...]
    linear: bool

    @property
    def bound(self) -> int:
        """Largest magnitude of the word.

        Notes
        -----
        Definition.
        """
        return max(-self.low, self.high)


@dataclass(frozen=True, slots=True, kw_only=True)
class ControllerBounds:
    """Proven ranges of all signals of a controller.

    Parameters
    ----------
    signals : tuple of SignalBound
        In the order of the list.
    idle_limits : tuple of str
        Signals whose limit can never act.
    cuts : tuple of str
        Signals that were taken as inputs where they are read.

    Notes
    -----
    See `controller_bounds`.
    """

    signals: tuple[SignalBound, ...]
    idle_limits: tuple[str, ...]
    cuts: tuple[str, ...]

    def signal(self, name: str) -> SignalBound:
        """The bound of one signal.

        Parameters
        ----------
        name : str
            Its name.

        Returns
        -------
        SignalBound
            Its bound.

        Raises
        ------
        KeyError
            If there is none.

        Notes
        -----
        Look-up only.
        """
        for s in self.signals:
            if s.name == name:
                return s
        raise KeyError(name)


@dataclass(frozen=True, slots=True, kw_only=True)
class _OpenColumn:
    """One bounded input of a controller by itself: "input" (raw), "cut" (a limited signal taken as
    an input), "rounding", "held" or "one"; a constant one does not change in time."""

    kind: str
    name: str
    low: float
    high: float
    constant: bool


def _limited_copies(controller: WordController) -> dict[str, tuple[str, int, int]]:
    """Signals that are nothing but another one of the same sample, limited: sign and constant."""
    found = {}
    bits = {e.name: e.frac_bits for e in controller.update}
    for e in controller.update:
        if e.limit is None or e.shift or e.held or e.rest or len(e.terms) != 1:
            continue
        t = e.terms[0]
        if t.lag == 0 and abs(t.factor) == 1 and bits.get(t.signal) == e.frac_bits:
            found[e.name] = (t.signal, t.factor, e.constant)
    return found


def _remainders(controller: WordController) -> dict[str, tuple[str, str]]:
    """Signals that read only a signal and its limited copy, both of this sample."""
    copies = _limited_copies(controller)
    found = {}
    for e in controller.update:
        read = {t.signal for t in e.terms}
        if e.shift or e.held or e.rest or len(read) != 2 or any(t.lag for t in e.terms):
            continue
        for copy in read & set(copies):
            if read == {copy, copies[copy][0]}:
                found[e.name] = (copies[copy][0], copy)
    return found


def _remainder_range(
    controller: WordController, name: str, pair: tuple[str, str], whole: Range
) -> Range:
    """Range of a signal made of v and of limited v: piecewise straight, so ends and corners do."""
    equation, copy = controller.equation(name), controller.equation(pair[1])
    _, sign, constant = _limited_copies(controller)[pair[1]]
    assert copy.limit is not None
    corners = [sign * (edge - constant) for edge in copy.limit]
    points = {*whole, *(min(max(corner, whole[0]), whole[1]) for corner in corners)}

    def value(v: int) -> int:
        assert copy.limit is not None
        cut = min(max(sign * v + constant, copy.limit[0]), copy.limit[1])
        given = {pair[0]: v, pair[1]: cut}
        return equation.constant + sum(t.factor * given[t.signal] for t in equation.terms)

    values = [value(v) for v in points]
    return min(values), max(values)


def _open_system(
    controller: WordController, cut: Iterable[str], ranges: Mapping[str, Range]
) -> tuple[_System, tuple[_OpenColumn, ...], _List]:
    """The linear part of a controller by itself, with some signals taken as inputs."""
    import flint

    part = _list_of(controller, cut)
    low, high = type_range(controller.word_bits)
    columns = [
        _OpenColumn(kind="input", name=name, low=float(low), high=float(high), constant=False)
        for name in controller.inputs
    ]
    for name in sorted(set(cut)):
        unit = 2.0 ** -controller.equation(name).frac_bits
        a, b = ranges.get(name, (0, 0))
        started = [w.after_reset for w in controller.state if w.signal == name]
        for e in controller.reset:
            if e.name in started:
                a, b = min(a, e.low), max(b, e.high)
        a, b = (min(a, 0), max(b, 0)) if None in started else (a, b)
        columns.append(
            _OpenColumn(
                kind="cut",
                name=name,
                low=_down(Fraction(a) * Fraction(unit)),
                high=_up(Fraction(b) * Fraction(unit)),
                constant=False,
            )
        )
    carried = [False] * len(columns)
    for r in part.roundings:
        columns.append(
            _OpenColumn(kind="rounding", name=r.name, low=r.low, high=r.high, constant=False)
        )
        carried.append(r.carried)
    for e in controller.update:
        if e.held is not None:
            a, b = e.held_range
            unit_held = Fraction(1, 1 << e.sum_frac_bits)
            columns.append(
                _OpenColumn(
                    kind="held",
                    name=e.held,
                    low=_down(a * unit_held),
                    high=_up(b * unit_held),
                    constant=True,
                )
            )
            carried.append(False)
    columns.append(_OpenColumn(kind="one", name="", low=1.0, high=1.0, constant=True))
    carried.append(False)

    states = part.states or (("", 1),)
    place = {key: i for i, key in enumerate(states)}
    at = {(c.kind, c.name): i for i, c in enumerate(columns)}
    size, m = len(states), len(columns)

    def laid_out(row: _Row) -> list[Any]:
        out = [flint.arb(0)] * (size + m)
        for (kind, name, lag), value in row.items():
            factor = flint.arb(flint.fmpq(value.numerator, value.denominator))
            i = place[name, lag] if kind == "state" else size + at[kind, name]
            out[i] += factor
        return out

    with flint.ctx.workprec(BITS):
        rows = [laid_out(part.rows[name]) for name in part.signals]
        wide = dict(zip(part.signals, rows, strict=True))
        following = []
        for name, lag in states:
            if lag > 1:
                following.append(laid_out({("state", name, lag - 1): Fraction(1)}))
            elif ("cut", name) in at:
                following.append(laid_out({("cut", name, 0): Fraction(1)}))
            elif ("input", name) in at:
                following.append(laid_out({("input", name, 0): Fraction(1)}))
            else:
                following.append(wide.get(name, laid_out({})))
        a_ball = flint.arb_mat([row[:size] for row in following])
        system = _System(
            powers=_powers(a_ball, _pace(_doubles(a_ball)[0]).samples),
            b=_doubles(flint.arb_mat([row[size:] for row in following])),
            c=_doubles(flint.arb_mat([row[:size] for row in rows])),
            d=_doubles(flint.arb_mat([row[size:] for row in rows])),
            start_input=_reference_column(controller, columns),
            carried=np.array(carried),
        )
    return system, tuple(columns), part


def _sole_reader(controller: WordController, source: str) -> WordEquation | None:
    """The first equation that reads one raw input and nothing else, as it comes."""
    for e in controller.update:
        if len(e.terms) == 1 and e.terms[0].signal == source and abs(e.terms[0].factor) == 1:
            return e if not (e.shift or e.held or e.rest) else None
    return None


def _reference_column(controller: WordController, columns: Sequence[_OpenColumn]) -> int:
    reader = _sole_reader(controller, "reference")
    names = ("reference",) if reader is None else (reader.name, "reference")
    return next(i for i, c in enumerate(columns) if c.kind in ("cut", "input") and c.name in names)


def _beyond_reference(controller: WordController, ranges: Mapping[str, Range]) -> int | None:
    """How far beyond every reference a reset can put the position; None where nothing tells."""
    ends = [_sole_reader(controller, source) for source in ("reference", "position")]
    if ends[0] is None or ends[1] is None:
        return None
    (low, high), (least, most) = (ranges[e.name] for e in ends if e is not None)
    return max(0, most - high, low - least)


def _stays_at_rest(controller: WordController, cut: frozenset[str]) -> bool:
    """Whether a reset leaves what endless constant inputs would: no state word moves after it.

    Tried with positions and outputs over their whole ranges, with the reference not limited;
    signals that are taken as inputs may move.
    """
    place = {(w.signal, max(w.lag, 1)): w.name for w in controller.state if w.signal is not None}
    reader = _sole_reader(controller, "position")
    reference = _sole_reader(controller, "reference")
    if reader is None or reference is None:
        return False
    sign, low, high = reader.terms[0].factor, reader.low, reader.high
    top = type_range(controller.word_bits)[1]

    def run(
        equations: Sequence[WordEquation], known: dict[str, int], state: Mapping[str, int]
    ) -> dict[str, int]:
        for e in equations:
            total = e.constant + sum(state[n] for n in (e.held, e.rest) if n is not None)
            for t in e.terms:
                value = state[place[t.signal, t.lag]] if t.lag else known[t.signal]
                total += t.factor * value
            value = (total + e.rounding) >> e.shift
            if e.rest is not None:
                known[f"rest {e.rest}"] = total - (value << e.shift)
            if e.limit is not None and e is not reference:
                value = min(max(value, e.limit[0]), e.limit[1])
            known[e.name] = value
        return known

    for count in (low, high, 0, low // 3, high // 7):
        position = sign * (min(max(count, low), high) - reader.constant)
        for output in (-top, -7, 0, 12, top):
            begun = run(controller.reset, {"position": position, "output": output}, {})
            state = {
                w.name: 0 if w.after_reset is None else begun[w.after_reset]
                for w in controller.state
            }
            inputs = {"reference": position, "position": position, "added": 0}
            now = run(controller.update, inputs, state)
            for w in controller.state:
                if w.signal in cut:
                    continue
                if w.signal is None:
                    new = now.get(f"rest {w.name}", state[w.name])
                else:
                    new = now[w.signal] if w.lag <= 1 else state[place[w.signal, w.lag - 1]]
                if new != state[w.name]:
                    return False
    return True


def _down(value: Fraction) -> float:
    out = float(value)
    return out if Fraction(out) <= value else math.nextafter(out, -math.inf)


def _up(value: Fraction) -> float:
    out = float(value)
    return out if Fraction(out) >= value else math.nextafter(out, math.inf)


def _runaways(part: _List, a: Real) -> set[str]:
    """Signals that feed themselves without decaying, by strongly connected parts of the states."""
    n = len(part.states)
    if not n:
        return set()
    path = (np.abs(a) > 0.0) | np.eye(n, dtype=bool)
    for _ in range(n.bit_length()):
        path = (path.astype(np.intp) @ path.astype(np.intp)) > 0
    both = path & path.T
    found: set[str] = set()
    for i in range(n):
        group = np.flatnonzero(both[i])
        if group[0] != i:
            continue
        block = a[np.ix_(group, group)]
        if float(np.abs(np.linalg.eigvals(block)).max()) >= 1.0 - _ENOUGH / (0.5 * _LONGEST):
            found |= {part.states[g][0] for g in group}
    return found


def _extent(
    peaks: Peaks, low: Real, high: Real, constant: Flags, rows: slice | Sequence[int] = slice(None)
) -> tuple[Real, Real]:
    """Lowest and highest value of rows while each input stays in its range.

    A varying input in middle +- half adds middle x sum(h) +- half x sum|h|, a constant one its
    range times sum(h).
    """
    most, total, slack = peaks.most[rows], peaks.total[rows], peaks.slack[rows]
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    vary = ~constant
    centre = total @ np.where(vary, middle, 0.0)
    wide = most @ np.where(vary, half, 0.0) + slack @ np.where(vary, np.abs(middle), 0.0)
    ends = np.stack([total * low, total * high])
    blur = slack @ np.where(constant, np.maximum(np.abs(low), np.abs(high)), 0.0)
    lower = centre - wide - blur + np.where(constant, ends.min(axis=0), 0.0).sum(axis=1)
    upper = centre + wide + blur + np.where(constant, ends.max(axis=0), 0.0).sum(axis=1)
    size = np.abs(total) @ np.maximum(np.abs(low), np.abs(high)) + wide
    blur = size * (4 * (len(low) + 8) * UNIT)
    return lower - blur, upper + blur


def _linear_ranges(
    controller: WordController, cut: frozenset[str], ranges: Mapping[str, Range]
) -> tuple[dict[str, Range], dict[str, set[str]], set[str]]:
    """Ranges before the limit from one choice of cuts, the cuts that each rests on, and signals
    that feed themselves without decaying."""
    system, columns, part = _open_system(controller, cut, ranges)
    slow = _runaways(part, system.powers[0][0]) - cut
    if slow:
        return {}, {}, slow
    try:
        peaks = _peaks(system, _pace(system.powers[0][0]))
    except OutOfRangeError:
        # nothing decays soon enough: without memory, every signal of the past is an input
        slow = {name for name, _ in part.states if name not in controller.inputs} - cut
        if not slow:
            raise
        return {}, {}, slow
    low = np.array([c.low for c in columns])
    high = np.array([c.high for c in columns])
    constant = np.array([c.constant for c in columns])
    lower, upper = _extent(peaks, low, high, constant)
    beyond = _beyond_reference(controller, ranges) or 0
    lower, upper = lower - beyond * peaks.start, upper + beyond * peaks.start
    found, rests = {}, {}
    for i, (e, a, b) in enumerate(zip(controller.update, lower, upper, strict=True)):
        scale = 1 << e.frac_bits
        found[e.name] = (math.ceil(Fraction(a) * scale), math.floor(Fraction(b) * scale))
        rests[e.name] = {
            c.name for j, c in enumerate(columns) if c.kind == "cut" and peaks.most[i, j] > 0.0
        }
    return found, rests, set()


def controller_bounds(controller: WordController) -> ControllerBounds:
    """Proven range of every signal and sum, for all inputs of the type, all starts, all time.

    Parameters
    ----------
    controller : WordController
        The words.

    Returns
    -------
    ControllerBounds
        Ranges, the narrowest of what intervals and impulse responses prove.

    Raises
    ------
    OutOfRangeError
        If a stated range of the controller does not hold.

    Notes
    -----
    A limit that the linear bound does not reach never acts (induction over time). One that may act
    is cut: its signal becomes an input of its own within the limit, since a limited signal that
    feeds back need not stay within the linear bound. Signals that feed themselves without decaying
    are cut always. Any choice of cuts proves; the narrowest range of two choices counts. A reset
    leaves what endless constant inputs would have led to, which is tried; a position beyond the
    range of the references adds what such a reference would have left. Own derivation.
    """
    verify_ranges(controller)
    limits = {e.name: e.limit for e in controller.update if e.limit is not None}
    remainders = _remainders(controller)
    ranges: dict[str, Range] = {e.name: (e.low, e.high) for e in controller.update}
    narrow = dict(ranges)
    before: dict[str, Range] = {}
    decided: set[str] = set()
    idle: set[str] = set()

    def take(found: Mapping[str, Range]) -> None:
        for e in controller.update:
            if e.name not in found:
                continue
            a, b = found[e.name]
            last = before.get(e.name, (a, b))
            before[e.name] = max(a, last[0]), min(b, last[1])
            if e.limit is not None:
                a = min(max(a, e.limit[0]), e.limit[1])
                b = min(max(b, e.limit[0]), e.limit[1])
            old = narrow[e.name]
            new = max(a, old[0]), min(b, old[1])
            if new != old:
                decided.add(e.name)
            narrow[e.name] = new
        for name, pair in remainders.items():
            a, b = _remainder_range(controller, name, pair, narrow[pair[0]])
            old = narrow[name]
            narrow[name] = max(a, old[0]), min(b, old[1])

    clips = {
        e.name
        for e in controller.update
        if e.limit is not None and all(t.signal in controller.inputs for t in e.terms)
    }
    cut = frozenset({*remainders, *clips})
    while True:
        found, rests, runaways = _linear_ranges(controller, cut, narrow)
        if runaways:
            cut |= runaways
            continue
        # in the order of the list: what a limit holds back may keep a later one from acting
        acting = [
            name
            for name, (a, b) in limits.items()
            if name not in cut and (found[name][0] < a or found[name][1] > b)
        ]
        if not acting:
            idle = set(limits) - cut
            break
        cut |= {acting[0]}
    if not _stays_at_rest(controller, cut) or _beyond_reference(controller, narrow) is None:
        # the linear part says nothing about such starts: intervals hold for every state
        found, idle = {}, set()
    used = {name: narrow[name] for name in cut}
    take(found)
    # once more where the cuts are narrower now, and with every limit cut
    if found and any(narrow[name] != known for name, known in used.items()):
        take(_linear_ranges(controller, cut, narrow)[0])
    if idle:
        take(_linear_ranges(controller, frozenset({*cut, *limits}), narrow)[0])
    for name, pair in remainders.items():
        rests[name] = rests[pair[0]]

    out = []
    top = {False: type_range(controller.word_bits)[1], True: type_range(controller.sum_bits)[1]}
    known = dict.fromkeys(controller.inputs, type_range(controller.word_bits)) | narrow
    for e in controller.update:
        whole, _ = partial_sum_range(e, known)
        after = signal_range(e, whole)
        a, b = known[e.name]
        if after[0] > a or after[1] < b:
            a, b = max(a, after[0]), min(b, after[1])
            known[e.name] = (a, b)
            decided.discard(e.name)
        if e.name in before:
            # a value within its range before the limit means a sum within half a step of it
            inner = before[e.name]
            reach = (inner[0] << e.shift) - e.rounding, (inner[1] << e.shift) + e.rounding
            whole = max(whole[0], reach[0]), min(whole[1], reach[1])
        out.append(
            SignalBound(
                name=e.name,
                unit=e.unit,
                frac_bits=e.frac_bits,
                low=a,
                high=b,
                sum_low=whole[0],
                sum_high=whole[1],
                capacity=top[e.wide],
                at_limit=e.limit is not None and (a <= e.limit[0] or b >= e.limit[1]),
                leans_on=tuple(sorted(rests[e.name] - clips - set(remainders))),
                linear=e.name in decided,
            )
        )
    return ControllerBounds(
        signals=tuple(out), idle_limits=tuple(sorted(idle)), cuts=tuple(sorted(cut))
    )


# --------------------------------------------------------------------------------------------------
# The closed loop: ranges while nothing is limited


@dataclass(frozen=True, slots=True, kw_only=True)
class SignalRange:
    """What one signal can reach in linear operation, and its limit.

    Parameters
    ----------
    name, unit : str
        The signal; "count" or "code".
    low, high : float
        Proven range, from above and below rounded outward. [unit of the signal]
    limit : tuple of float or None
        Its limit. [unit of the signal]
    within : bool
        The limit is never reached.

    Notes
    -----
    Before its limit.
    """

    name: str
    unit: str
    low: float
    high: float
    limit: tuple[float, float] | None
    within: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Ranges:
    """Ranges of the closed loop in linear operation, and how far that operation reaches.

    Parameters
    ----------
    reference : float
        The references may do anything within this distance of sensor zero. [m or rad]
    force, noise : float
        Magnitudes of the disturbance force and the sensor's noise. [N or N m], [count]
    signals : tuple of SignalRange
        Every signal of the list.
    position : tuple of float
        True position, between the samples too. [m or rad]
    linear : bool
        Proven: no limit acts, the converter does not clip and no end stop is reached.
    reached : tuple of str
        What may be reached otherwise; empty when `linear`.
    largest_reference : float or None
        Largest distance from sensor zero within which references may do anything; None when not
        even a constant one is proven. [m or rad]
    largest_reference_at_rest : float or None
        The same for references that never change. [m or rad]
    largest_step : float or None
        Largest single step from rest at sensor zero, either way. [m or rad]
    voids : tuple of str
        What the linear plant leaves out and the loop file has: no bound holds then.

    Notes
    -----
    See `ranges`.
    """

    reference: float
    force: float
    noise: float
    signals: tuple[SignalRange, ...]
    position: tuple[float, float]
    linear: bool
    reached: tuple[str, ...]
    largest_reference: float | None
    largest_reference_at_rest: float | None
    largest_step: float | None
    voids: tuple[str, ...]

    def signal(self, name: str) -> SignalRange:
        """The range of one signal.

        Parameters
        ----------
        name : str
            Its name.

        Returns
        -------
        SignalRange
            Its range.

        Raises
        ------
        KeyError
            If there is none.

        Notes
        -----
        Look-up only.
        """
        for s in self.signals:
            if s.name == name:
                return s
        raise KeyError(name)


def _evaluate(
    equations: Iterable[WordEquation], given: Mapping[str, Fraction]
) -> dict[str, Fraction]:
    """A list without memory on real numbers: neither rounded nor limited. [unit of each signal]"""
    values = dict(given)
    bits = dict.fromkeys(given, 0)
    for e in equations:
        total = Fraction(e.constant)
        for t in e.terms:
            total += t.factor * values[t.signal] * (1 << bits[t.signal])
        bits[e.name] = e.frac_bits
        values[e.name] = total / (1 << e.sum_frac_bits)
    return values


@dataclass(frozen=True, slots=True, kw_only=True)
class _Starts:
    """Starts at rest, reset to the code that rests there, by their distance from sensor zero.

    Constant terms that reset writes lie within low - reach slope .. high + reach slope; the code
    that holds is wrong by at most error + reach slope.
    """

    held: Mapping[str, tuple[float, float, float]]
    error: tuple[float, float]


def _starts(task: Task, controller: WordController) -> _Starts:
    """The code, the constant term and the effort that holds are straight lines in the position;
    their roundings come on top."""
    sensor, actuator = task.loop.sensor, task.loop.actuator
    names = [e.held for e in controller.update if e.held is not None]
    reset = {e.name: e for e in controller.reset}
    source = {s.name: s.after_reset for s in controller.state}
    last = controller.resting[-1].name

    def at(offset: int, shift: Fraction) -> tuple[Fraction, dict[str, Fraction]]:
        count = Fraction(sensor.zero_count + offset)
        code = _evaluate(controller.resting, {"position": count})[last]
        return code, _evaluate(controller.reset, {"position": count, "output": code + shift})

    half = Fraction(1, 2)
    code0, low0 = at(0, -half)
    code1, low1 = at(1, -half)
    _, high0 = at(0, half)
    held = {}
    for name in names:
        row = source[name]
        if row is None:
            held[name] = (0.0, 0.0, 0.0)
            continue
        ends = sorted((low0[row], high0[row]))
        step = Fraction(1 if reset[row].shift else 0, 1 << reset[row].frac_bits)
        slope = abs(low1[row] - low0[row])
        held[name] = (_down(ends[0] - step), _up(ends[1] + step), _up(slope))
    size = 1.0 / task.count_per_position
    effort0 = holding_effort(task.plant, 0.0) / task.effort_per_code
    effort1 = holding_effort(task.plant, size) / task.effort_per_code
    # a code from its line, a count from its position; the last part stands for doubles
    error = abs(float(code0 - actuator.zero_code) - effort0) + 0.5 + 0.5 * abs(effort1 - effort0)
    drift = abs(float(code1 - code0) - (effort1 - effort0))
    blur = 1e-12 * (abs(effort0) + abs(effort1))
    return _Starts(held=held, error=(error + blur, drift + blur))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Case:
    """What the inputs of the closed loop may do."""

    low: Real
    high: Real
    constant: Flags
    start_error: float
    step: float  # magnitude of a single step of the reference, on top. [count]


def _case(
    task: Task,
    gains: LoopPeaks,
    starts: _Starts,
    *,
    reach: int,
    noise: float = 0.0,
    force: float = 0.0,
    added: float = 0.0,
    still: bool = False,
    step: float = 0.0,
) -> _Case:
    low = np.array([c.low for c in gains.columns])
    high = np.array([c.high for c in gains.columns])
    constant = np.zeros(len(low), dtype=bool)
    for i, c in enumerate(gains.columns):
        if c.kind == "reference":
            zero = task.loop.sensor.zero_count
            low[i], high[i], constant[i] = zero - reach, zero + reach, still
        elif c.kind == "sensor":
            low[i], high[i] = low[i] - noise, high[i] + noise
        elif c.kind == "added":
            low[i], high[i] = -added, added
        elif c.kind == "force":
            low[i], high[i] = -force, force
        elif c.kind == "held":
            a, b, slope = starts.held[c.name]
            wide = reach * slope * (1.0 + 1e-15)
            low[i], high[i], constant[i] = a - wide, b + wide, True
        elif c.kind == "one":
            low[i], high[i], constant[i] = 1.0, 1.0, True
    error = (starts.error[0] + reach * starts.error[1]) * (1.0 + 1e-12)
    return _Case(low=low, high=high, constant=constant, start_error=error, step=step)


def _rows_extent(gains: LoopPeaks, case: _Case) -> tuple[Real, Real]:
    """Range of every row in a case, start and step included."""
    low, high = _extent(gains.peaks, case.low, case.high, case.constant)
    extra = case.start_error * gains.peaks.start
    if case.step:
        extra = extra + case.step * np.abs(gains.peaks.rise).max(axis=1)
    extra = extra * (1.0 + 1e-12)
    return low - extra, high + extra


def _motion_extent(
    gains: LoopPeaks, motion: Motion, case: _Case, extent: tuple[Real, Real]
) -> tuple[float, float]:
    """Range of a position at all times in a case."""
    half = np.where(case.constant, 0.0, 0.5 * (case.high - case.low))
    half[gains.column("reference")] += case.step
    missed = (motion.missed @ np.append(half, case.start_error)) * (1.0 + 1e-12)
    low = min(
        float(extent[0][list(rows)].min() - extra)
        for rows, extra in zip(motion.pieces, missed, strict=True)
    )
    high = max(
        float(extent[1][list(rows)].max() + extra)
        for rows, extra in zip(motion.pieces, missed, strict=True)
    )
    return low, high


def _reached(
    task: Task, controller: WordController, gains: LoopPeaks, case: _Case
) -> tuple[str, ...]:
    """What acts, or is not proven not to act, in a case."""
    extent = _rows_extent(gains, case)
    found = []
    for e, a, b in zip(controller.update, *extent, strict=False):
        if e.limit is None:
            continue
        # a word is a whole number of steps: between the limit and the next step nothing lies
        scale = 2.0**e.frac_bits
        if math.ceil(a * scale) < e.limit[0] or math.floor(b * scale) > e.limit[1]:
            found.append(f"limit of {e.name}")
    sensor, raw = task.loop.sensor, len(gains.signals)
    low, high = math.ceil(extent[0][raw]), math.floor(extent[1][raw])
    if low < sensor.low_count or high > sensor.high_count:
        found.append("range of the sensor")
    a, b = _motion_extent(gains, gains.main, case, extent)
    if max(-a, b) > task.plant.travel:
        found.append("end stop")
    return tuple(found)


def _largest(top: int, holds: Callable[[int], bool]) -> int | None:
    """Largest whole number from 0 to top for which something holds that holds for all smaller."""
    if not holds(0):
        return None
    if holds(top):
        return top
    low, high = 0, top
    while high - low > 1:
        middle = (low + high) // 2
        if holds(middle):
            low = middle
        else:
            high = middle
    return low


def _gains_for(
    task: Task, controller: WordController, gains: LoopPeaks | None, force: float
) -> LoopPeaks:
    """Peak gains that are known, or new ones where a force asks for a column that is missing."""
    known = gains is not None and any(c.kind == "force" for c in gains.columns)
    if gains is None or (force > 0.0 and not known):
        return loop_peaks(task, controller, force=force > 0.0)
    return gains


def _voids(task: Task) -> tuple[str, ...]:
    """What the linear plant leaves out."""
    out = []
    if task.plant.friction > 0.0:
        out.append("friction: the bounds are of a plant without it")
    return tuple(out)


def ranges(
    task: Task,
    controller: WordController,
    *,
    reference: float | None = None,
    force: float = 0.0,
    noise: float | None = None,
    added: float = 0.0,
    gains: LoopPeaks | None = None,
) -> Ranges:
    """What the closed loop can reach in linear operation, and how far that is proven.

    Parameters
    ----------
    task : Task
        Plant, scales, ranges.
    controller : WordController
        The words.
    reference : float or None
        References may do anything within this distance of sensor zero; None is the step that is
        checked. [m or rad]
    force : float
        Largest disturbance force on the main mass, any function of time. [N or N m]
    noise : float or None
        Largest magnitude of the sensor's noise; None is `noise_peak` of the sensor, or 0.
        [m or rad]
    added : float
        Largest magnitude of added codes. [code]
    gains : LoopPeaks or None
        Peak gains if known.

    Returns
    -------
    Ranges
        Proven ranges; what they rest on is in the notes.

    Raises
    ------
    OutOfRangeError
        If the loop is unstable or too slow, or if a range is negative.

    Notes
    -----
    The loop was started at rest by a reset to the code that rests there, at any position within
    the references, or has run linearly for long. Then, by induction over time: while no limit has
    acted, every signal lies within middle +- sum|h| x half range over all inputs (references,
    sensor step and noise, every rounding, the code that was wrong at the start); where these stay
    within every limit, none ever acts. References change at sampling instants; rotary alike.
    """
    sensor, scale = task.loop.sensor, abs(task.count_per_position)
    for name, value, unit in (
        ("reference", reference, ""),
        ("force", force, ""),
        ("noise", noise, ""),
        ("added", added, "codes"),
    ):
        if value is not None and not 0.0 <= value < math.inf:
            raise OutOfRangeError(
                name, value, unit, "must be finite and at least 0", "give 0 or more"
            )
    level = (sensor.noise_peak or 0.0) if noise is None else noise
    counts = level * scale * (1.0 + 1e-15)
    every = _gains_for(task, controller, gains, force)
    starts = _starts(task, controller)

    def case(reach: int, *, still: bool = False, step: float = 0.0) -> _Case:
        return _case(
            task,
            every,
            starts,
            reach=reach,
            noise=counts,
            force=force,
            added=added,
            still=still,
            step=step,
        )

    def holds(found: _Case) -> bool:
        return not _reached(task, controller, every, found)

    if reference is None:
        reach = math.floor(abs(task.loop.step) * scale + 0.5)
    else:
        reach = math.floor(reference * scale * (1.0 + 1e-12))
    asked = case(reach)
    extent = _rows_extent(every, asked)
    reached = _reached(task, controller, every, asked)
    signals = []
    for e, a, b in zip(controller.update, *extent, strict=False):
        step_of_word = 2.0**-e.frac_bits
        signals.append(
            SignalRange(
                name=e.name,
                unit=e.unit,
                low=float(a),
                high=float(b),
                limit=None
                if e.limit is None
                else (e.limit[0] * step_of_word, e.limit[1] * step_of_word),
                within=f"limit of {e.name}" not in reached,
            )
        )
    voids = _voids(task)
    top = math.floor(task.plant.travel * scale * (1.0 + 1e-12))
    largest = _largest(top, lambda n: holds(case(n)))
    at_rest = _largest(top, lambda n: holds(case(n, still=True)))
    step = _largest(top, lambda n: holds(case(0, still=True, step=float(n))))
    return Ranges(
        reference=reach / scale,
        force=force,
        noise=counts,
        signals=tuple(signals),
        position=_motion_extent(every, every.position, asked, extent),
        linear=not reached and not voids,
        reached=reached,
        largest_reference=None if largest is None else largest / scale,
        largest_reference_at_rest=None if at_rest is None else at_rest / scale,
        largest_step=None if step is None else step / scale,
        voids=voids,
    )


# --------------------------------------------------------------------------------------------------
# Deviation from the ideal loop


@dataclass(frozen=True, slots=True, kw_only=True)
class Deviation:
    """Largest distance between the loop as built and the ideal loop, and where it comes from.

    Parameters
    ----------
    count : float
        Proven bound at and between samples. [count]
    position : float
        The same. [m or rad]
    at_samples : float
        Proven bound at the sampling instants. [count]
    sensor, output, inner : float
        Shares of the sensor's steps, of the output's rounding and of all other roundings, at the
        instant of the bound; they add up to it. [count]
    inner_shares : tuple of (str, float)
        The last one by signal. [count]
    seen_by : float
        What a bound of this kind can be at least: it is attained up to that. [count]
    coefficients : float or None
        Beside it, never added: largest distance between the ideal loops with gains as built and
        as designed, for references within `reference`; None without the design. [count]
    reference : float
        Distance from sensor zero for `coefficients`. [m or rad]
    voids : tuple of str
        What the linear plant leaves out and the loop file has.

    Notes
    -----
    See `deviation`.
    """

    count: float
    position: float
    at_samples: float
    sensor: float
    output: float
    inner: float
    inner_shares: tuple[tuple[str, float], ...]
    seen_by: float
    coefficients: float | None
    reference: float
    voids: tuple[str, ...]


def _error_columns(gains: LoopPeaks) -> tuple[list[int], Real, Real]:
    """Columns of the sensor's steps and of roundings, their middles and half ranges."""
    picked = [i for i, c in enumerate(gains.columns) if c.kind in ("sensor", "rounding")]
    low = np.array([gains.columns[i].low for i in picked])
    high = np.array([gains.columns[i].high for i in picked])
    return picked, 0.5 * (low + high), 0.5 * (high - low)


def deviation(
    task: Task,
    controller: WordController,
    *,
    designed: Equations | None = None,
    reference: float | None = None,
    gains: LoopPeaks | None = None,
) -> Deviation:
    """Bound of |position as built - position of the ideal loop|, at all times.

    Parameters
    ----------
    task : Task
        Plant and scales.
    controller : WordController
        The words.
    designed : Equations or None
        The list with real coefficients, for the share of coefficient rounding.
    reference : float or None
        Distance from sensor zero for that share; None is the travel. [m or rad]
    gains : LoopPeaks or None
        Peak gains if known.

    Returns
    -------
    Deviation
        The bound and its shares.

    Raises
    ------
    OutOfRangeError
        If a loop is unstable or too slow.

    Notes
    -----
    The ideal loop has the gains as built, real numbers, no sensor and no actuator steps; both
    start from the same state and see the same references, disturbances and noise, whatever these
    are, while no limit acts (see `ranges`). Their difference is what the errors of rounding alone
    make of the linear loop: an error within middle +- half adds |middle x sum(h)| + half x
    sum|h|; a carried residue enters through 1 - 1/z.
    """
    every = loop_peaks(task, controller) if gains is None else gains
    picked, middle, half = _error_columns(every)
    scale = every.count_per_position
    most = every.peaks.most[:, picked] * half
    least = every.peaks.least[:, picked] * half
    offset = every.peaks.total[:, picked] * middle
    blur = every.peaks.slack[:, picked] * np.abs(middle)
    whole = most.sum(axis=1) + np.abs(offset.sum(axis=1)) + blur.sum(axis=1)
    motion = every.position
    missed = motion.missed[:, picked] * half
    at, piece, worst = 0, 0, -1.0
    for k, rows in enumerate(motion.pieces):
        row = max(rows, key=lambda i: float(whole[i]))
        value = float(whole[row] + missed[k].sum())
        if value > worst:
            at, piece, worst = row, k, value
    # the shares: an offset counts with the sign that the sum of all has
    sign = 1.0 if float(offset[at].sum()) >= 0.0 else -1.0
    shares = (most[at] + sign * offset[at] + blur[at] + missed[piece]) * scale
    outward = 1.0 + 1e-12
    output = every.rounded_output
    by_name = {
        every.columns[i].name or "sensor": float(v) for i, v in zip(picked, shares, strict=True)
    }
    inner = tuple((n, v) for n, v in by_name.items() if n not in ("sensor", output))
    first = motion.pieces[0][0]
    distance = task.plant.travel if reference is None else reference
    return Deviation(
        count=worst * scale * outward,
        position=worst * outward,
        at_samples=float(whole[first]) * scale * outward,
        sensor=by_name["sensor"],
        output=by_name.get(output or "", 0.0),
        inner=sum(v for _, v in inner),
        inner_shares=inner,
        seen_by=float(
            max(
                least[row].sum() + abs(offset[row].sum()) - blur[row].sum()
                for rows in motion.pieces
                for row in rows
            )
        )
        * scale,
        coefficients=None
        if designed is None
        else _coefficient_share(task, controller, designed, distance),
        reference=distance,
        voids=_voids(task),
    )


def _coefficient_share(
    task: Task, controller: WordController, designed: Equations, distance: float
) -> float:
    """Peak gain from the reference to the difference of two ideal loops, side by side. [count]"""
    import flint

    with flint.ctx.workprec(BITS):
        one, two = (
            _assemble(task, c, phases=4, positions_only=True) for c in (controller, designed)
        )
        pace = _side_by_side(one.pace, two.pace)
        powers = zip(_powers(one.step, pace.samples), _powers(two.step, pace.samples), strict=True)
    first = slice(0, 1)  # the reference
    d = one.d[0][:, first] - two.d[0][:, first]
    system = _System(
        powers=tuple((_apart(p[0], q[0]), _apart(p[1], q[1])) for p, q in powers),
        b=(
            np.concatenate([one.b[0][:, first], two.b[0][:, first]]),
            np.concatenate([one.b[1][:, first], two.b[1][:, first]]),
        ),
        c=(
            np.concatenate([one.c[0], -two.c[0]], axis=1),
            np.concatenate([one.c[1], two.c[1]], axis=1),
        ),
        d=(d, one.d[1][:, first] + two.d[1][:, first] + 2.0 * UNIT * np.abs(d)),
    )
    peaks = _peaks(system, pace)
    loop = replace(one, columns=(Column(kind="reference"),))
    motion = _motion(task, loop, peaks, loop.position_rows, task.sampled.space.c_position)
    worst = max(
        float(peaks.most[list(rows), 0].max()) + float(extra)
        for rows, extra in zip(motion.pieces, motion.missed[:, 0], strict=True)
    )
    scale = abs(task.count_per_position)
    return worst * scale * (distance * scale) * (1.0 + 1e-12)


# --------------------------------------------------------------------------------------------------
# Limit cycles at rest


@dataclass(frozen=True, slots=True, kw_only=True)
class Hint:
    """A limit cycle that the describing function of one quantiser foretells; an estimate.

    Parameters
    ----------
    gain : float
        Factor on the loop gain at the edge of stability. [-]
    frequency_hz : float
        Frequency there. [Hz]
    amplitude : float
        Largest amplitude at the quantiser whose describing function has that gain. [steps]

    Notes
    -----
    See `hints`.
    """

    gain: float
    frequency_hz: float
    amplitude: float


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitCycles:
    """What rounding can keep moving while the inputs stand still.

    Parameters
    ----------
    count : float
        Proven bound of half the peak-to-peak position, between the samples too. [count]
    position : float
        The same. [m or rad]
    largest_reference : float or None
        The bound holds for references that stand still within this distance of sensor zero; None
        when no such range is proven to stay off the limits. [m or rad]
    count_per_code : float or None
        Counts that one code moves the plant at rest; None for a free mass. [count/code]
    dead_zones : tuple of (str, float)
        For each signal that adds up what it reads: the smallest input that its rounding swallows
        for ever; 0 where nothing is lost. [count]
    must_hunt : bool
        Something adds up the error, and one code moves the plant by more than one count (or the
        mass is free): there is no code at which the error can vanish and stay so.
    voids : tuple of str
        What the linear plant leaves out and the loop file has.

    Notes
    -----
    See `limit_cycles`.
    """

    count: float
    position: float
    largest_reference: float | None
    count_per_code: float | None
    dead_zones: tuple[tuple[str, float], ...]
    must_hunt: bool
    voids: tuple[str, ...]


def limit_cycles(
    task: Task,
    controller: WordController,
    *,
    force: float = 0.0,
    gains: LoopPeaks | None = None,
) -> LimitCycles:
    """Bound of what keeps moving at rest, and the rules of thumb that tell why.

    Parameters
    ----------
    task : Task
        Plant and scales.
    controller : WordController
        The words.
    force : float
        Magnitude of a constant force beside bias and spring, for the range of references.
        [N or N m]
    gains : LoopPeaks or None
        Peak gains if known.

    Returns
    -------
    LimitCycles
        The bound and the rules.

    Raises
    ------
    OutOfRangeError
        If the loop is unstable or too slow.

    Notes
    -----
    Reference, force and noise stand still, noise at 0. What moves then is what the errors of
    rounding make of the linear loop, each anywhere in its range: half the peak-to-peak value is at
    most half their range x sum|h|. One code should move the plant by less than one count
    (Peterchev and Sanders, IEEE Trans. Power Electronics 18, 2003, from memory).
    """
    every = _gains_for(task, controller, gains, force)
    picked, _, half = _error_columns(every)
    whole = every.peaks.most[:, picked] @ half
    missed = every.position.missed[:, picked] @ half
    worst = max(
        float(whole[list(rows)].max()) + float(extra)
        for rows, extra in zip(every.position.pieces, missed, strict=True)
    ) * (1.0 + 1e-12)
    scale = every.count_per_position
    starts = _starts(task, controller)
    top = math.floor(task.plant.travel * scale * (1.0 + 1e-12))
    largest = _largest(
        top,
        lambda n: (
            not _reached(
                task,
                controller,
                every,
                _case(task, every, starts, reach=n, force=force, still=True),
            )
        ),
    )
    per_output = static_gain(task.plant)
    per_code = None
    if per_output is not None:
        per_code = abs(per_output * task.effort_per_code * task.count_per_position)
    zones = dead_zones(controller)
    return LimitCycles(
        count=worst * scale,
        position=worst,
        largest_reference=None if largest is None else largest / scale,
        count_per_code=per_code,
        dead_zones=zones,
        must_hunt=bool(zones) and (per_code is None or per_code > 1.0),
        voids=_voids(task),
    )


def dead_zones(controller: WordController) -> tuple[tuple[str, float], ...]:
    """Smallest inputs that adding signals lose for ever.

    Parameters
    ----------
    controller : WordController
        The words.

    Returns
    -------
    tuple of (str, float)
        Signal and input, for each signal that is itself plus something else. [count]

    Notes
    -----
    An input x moves the signal only when gain x reaches half a step of it; without a rounding, or
    with its residue carried, nothing is lost.
    """
    bits = dict.fromkeys(controller.inputs, 0)
    bits.update({e.name: e.frac_bits for e in controller.update})
    units = {e.name: e.unit for e in controller.update}
    found = []
    for e in controller.update:
        own = [t for t in e.terms if t.signal == e.name]
        unity = 1 << e.shift
        if len(own) != 1 or own[0].lag != 1 or own[0].factor != unity:
            continue
        reads = [t for t in e.terms if t.signal != e.name and units.get(t.signal) == "count"]
        if not reads:
            continue
        lost = _rounding_of(e)
        zone = 0.0
        if lost is not None and not lost.carried:
            zone = max(
                2.0 ** (e.shift - 1) / (abs(t.factor) * 2.0 ** bits[t.signal]) for t in reads
            )
        found.append((e.name, zone))
    return tuple(found)


def quantiser_gain(amplitude: float) -> float:
    """Describing function of a quantiser that rounds to nearest.

    Parameters
    ----------
    amplitude : float
        Amplitude of a sine at its input, above 0. [steps]

    Returns
    -------
    float
        Gain for the sine, 0 up to half a step, at most 4/pi. [-]

    Raises
    ------
    OutOfRangeError
        If the amplitude is not above 0.

    Notes
    -----
    ``N = 4/(pi A) sum sqrt(1 - ((2i - 1)/(2A))^2)`` over the thresholds below A; Gelb and Vander
    Velde, *Multiple-Input Describing Functions*, 1968 (from memory).

    Examples
    --------
    >>> round(quantiser_gain(0.5**0.5), 8)
    1.27323954
    >>> quantiser_gain(0.4)
    0.0
    """
    if not amplitude > 0.0:
        raise OutOfRangeError("amplitude", amplitude, "steps", "must be above 0", "give a sine")
    edges = np.arange(0.5, amplitude, 1.0) / amplitude
    return float(4.0 / (math.pi * amplitude) * np.sqrt(1.0 - edges * edges).sum())


def hints(loop: ClosedLoop, edges: Sequence[float]) -> tuple[Hint, ...]:
    """Limit cycles that the describing function of a rounding foretells; estimates.

    Parameters
    ----------
    loop : ClosedLoop
        The loop as built.
    edges : sequence of float
        Factors on the loop gain at the edge of stability (`plant2.closedloop.gain_edges`). [-]

    Returns
    -------
    tuple of Hint
        One for each edge from 0 to 4/pi, the gains that a rounding to nearest can have.

    Notes
    -----
    The frequency is that of the pole on the unit circle. Neither proof nor disproof: a loop without
    a hint may keep moving, since the sensor's and the output's steps act together.
    """
    grid = np.concatenate([np.linspace(0.5, 3.0, 501)[1:], np.linspace(3.0, 40.0, 371)[1:]])
    gains = np.array([quantiser_gain(float(x)) for x in grid])
    out = []
    for edge in edges:
        if not 0.0 < edge <= 4.0 / math.pi:
            continue
        poles = poles_delta(loop, gain=edge, polish=False)
        angles = np.abs(np.angle(1.0 + poles))
        near = np.argmin(np.abs(np.abs(1.0 + poles) - 1.0))
        reaching = np.flatnonzero(gains >= edge)
        amplitude = float(grid[reaching[-1]]) if len(reaching) else float(grid[np.argmax(gains)])
        out.append(
            Hint(
                gain=edge,
                frequency_hz=float(angles[near]) / (2.0 * math.pi * loop.sampled.period_s),
                amplitude=amplitude,
            )
        )
    return tuple(out)


# --------------------------------------------------------------------------------------------------
# Impulse responses, for inputs that attain a bound


def controller_responses(
    controller: WordController, cut: Iterable[str], samples: int
) -> tuple[tuple[tuple[str, str], ...], Real]:
    """Impulse responses of every signal of a controller by itself, limits left out.

    Parameters
    ----------
    controller : WordController
        The words.
    cut : iterable of str
        Limited signals that count as inputs.
    samples : int
        Length, at least 1.

    Returns
    -------
    tuple of (str, str)
        Kind and name of every input: "input", "cut", "rounding", "held", "one".
    array of float, shape (samples, signals, inputs)
        Responses in units of the signals; not a proof. [unit per unit]

    Notes
    -----
    Plain recursion in doubles.
    """
    system, columns, _ = _open_system(controller, cut, {})
    names = tuple((c.kind, c.name) for c in columns)
    return names, _plain_responses(system, samples)


def loop_responses(
    task: Task, controller: WordController | Equations, samples: int, *, phases: int = PHASES
) -> tuple[tuple[Column, ...], tuple[str, ...], Real]:
    """Impulse responses of the closed loop, limits left out.

    Parameters
    ----------
    task : Task
        Plant and scales.
    controller : WordController or Equations
        The list.
    samples : int
        Length, at least 1.
    phases : int
        Instants per sample period at which the position is shown.

    Returns
    -------
    tuple of Column
        The inputs.
    tuple of str
        What the rows show: the signals, "raw position", then "position" at each instant.
    array of float, shape (samples, rows, inputs)
        Responses; not a proof. [unit per unit; m or rad]

    Notes
    -----
    Plain recursion in doubles.
    """
    import flint

    with flint.ctx.workprec(BITS):
        loop = _assemble(task, controller, phases=phases)
        a, _ = _doubles(loop.step)
    rows = sorted({r for piece in loop.position_rows for r in piece})
    count = len(loop.list.signals) + 1
    pick = [*range(count), *rows]
    system = _System(
        powers=((a, np.zeros_like(a)),),
        b=loop.b,
        c=(loop.c[0][pick], loop.c[1][pick]),
        d=(loop.d[0][pick], loop.d[1][pick]),
    )
    names = (*loop.list.signals, "raw position", *("position" for _ in rows))
    return loop.columns, names, _plain_responses(system, samples)


def _plain_responses(system: _System, samples: int) -> Real:
    a, b, c, d = system.powers[0][0], system.b[0], system.c[0], system.d[0]
    out = np.empty((samples, *d.shape))
    out[0] = d
    state = b
    for k in range(1, samples):
        out[k] = c @ state
        state = a @ state
    return out
