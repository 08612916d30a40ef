"""A controller's integers, alone and around the continuous plant, word for word.

Rules of this file:

- `IntegerController` is the reference: Python ints, every partial sum and every stored word is
  compared with its stated range.
- `LaneController` makes the same words for many loops at once. numpy integers wrap silently, so
  it verifies the ranges of the controller before it computes anything.
- Both read the same `WordController` and compute no word of their own.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields, replace
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from plant2.design import settling_band
from plant2.equations import WordController, WordEquation, type_range, verify_ranges
from plant2.errors import OutOfRangeError
from plant2.plant import Plant, StateSpace, constant_force, state_space
from plant2.response import (
    Halves,
    Part,
    Quantity,
    StepFigures,
    Trajectory,
    halves_for,
    held_space,
    longest_piece_s,
    part_of,
    reach,
    step_figures,
    trajectory_of_samples,
)
from plant2.sampled import SampledPlant, propagate, sample

if TYPE_CHECKING:
    from plant2.loopfile import Loop

Words = NDArray[np.int64]
Real = NDArray[np.float64]
Flags = NDArray[np.bool_]

_OFFSETS = 16
_CHUNK = 2048
_MOST_EVENTS = 64
_MOST_NUMBERS = 1 << 23  # of a motion that is kept; longer ones simulate themselves again
_RECENT = 4  # stretches that were simulated again and may be asked for once more
_MOST_KEPT = 1 << 25  # words of a checked step

_Operation = tuple[Callable[..., Any], tuple[Any, ...]]


# --------------------------------------------------------------------------------------------------
# The reference: Python ints


def _refuse_word(name: str, value: int, low: int, high: int) -> None:
    raise OutOfRangeError(
        name,
        float(value),
        "",
        f"leaves its range {low} .. {high}",
        "this is a defect of the word equations",
    )


def _check_argument(name: str, value: int, bits: int) -> None:
    low, high = type_range(bits)
    if not low <= value <= high:
        raise OutOfRangeError(
            name,
            float(value),
            "",
            f"does not fit a word of {bits} bits",
            f"pass a value from {low} to {high}",
        )


def _places(controller: WordController) -> dict[tuple[str, int], str]:
    """Which state word holds which signal of which age when an update begins."""
    places: dict[tuple[str, int], str] = {}
    kept_for_later: dict[tuple[str, int], str] = {}
    for word in controller.state:
        if word.signal is None:
            continue
        if word.lag >= 1:
            places[word.signal, word.lag] = word.name
        else:
            # A signal kept for a question after the update is one sample old at the next.
            kept_for_later[word.signal, 1] = word.name
    for key, name in kept_for_later.items():
        places.setdefault(key, name)
    for equation in controller.update:
        for term in equation.terms:
            if term.lag >= 1 and (term.signal, term.lag) not in places:
                raise OutOfRangeError(
                    f"{equation.name}: lag of {term.signal}",
                    float(term.lag),
                    "samples",
                    "has no word in the state",
                    "this is a defect of the word equations",
                )
    for (signal, lag), name in places.items():
        if lag >= 2 and (signal, lag - 1) not in places:
            raise OutOfRangeError(
                name, float(lag), "samples", "has no younger word", "list every lag of a signal"
            )
    return places


def _excess_word(controller: WordController) -> str:
    """The state word that keeps the excess of the last update."""
    for word in controller.state:
        if word.signal == controller.excess and word.lag in (0, 1):
            return word.name
    raise KeyError(controller.excess)


class IntegerController:
    """One controller on Python ints; the reference that every other path is compared with.

    Parameters
    ----------
    controller : WordController
        What to run. It starts as after a reset at position 0 with output 0.

    Raises
    ------
    OutOfRangeError
        If the list reads a signal of an age that the state does not hold.

    Notes
    -----
    The arithmetic at the head of `plant2.equations`, term by term.
    """

    def __init__(self, controller: WordController) -> None:
        self.controller = controller
        self._places = _places(controller)
        self._state_words = {word.name: word for word in controller.state}
        self._excess = _excess_word(controller)
        self.state: dict[str, int] = {}
        self.signals: dict[str, int] = {}
        self.reset(0, 0)

    def reset(self, position: int, output: int) -> None:
        """Put the controller at rest.

        Parameters
        ----------
        position : int
            Any value of the word type. [count]
        output : int
            Any value of the word type. [code]

        Raises
        ------
        OutOfRangeError
            If an argument does not fit the word type, or if a sum or a word leaves its range.

        Notes
        -----
        Every later update with reference and position at `position` returns `output`, limited.
        """
        inputs = {"position": int(position), "output": int(output)}
        for name, value in inputs.items():
            _check_argument(name, value, self.controller.word_bits)
        signals = dict(inputs)
        for equation in self.controller.reset:
            signals[equation.name] = self._signal(equation, signals, {}, {})
        self.signals = {}
        self.state = {}
        for word in self.controller.state:
            value = 0 if word.after_reset is None else signals[word.after_reset]
            self._store(word.name, value)

    def update(self, reference: int, position: int, added: int = 0) -> int:
        """One sample.

        Parameters
        ----------
        reference, position : int
            Any values of the word type. [count]
        added : int
            Any value of the word type; added before the limit. [code]

        Returns
        -------
        int
            The output, already limited. [code]

        Raises
        ------
        OutOfRangeError
            If an argument does not fit the word type, or if a sum or a word leaves its range.

        Notes
        -----
        Equations in order; the state takes the new signals after the last one.
        """
        given = {"reference": int(reference), "position": int(position), "added": int(added)}
        signals = {name: given[name] for name in self.controller.inputs}
        for name, value in given.items():
            _check_argument(name, value, self.controller.word_bits)
        lagged = {key: self.state[name] for key, name in self._places.items()}
        rests: dict[str, int] = {}
        for equation in self.controller.update:
            signals[equation.name] = self._signal(equation, signals, lagged, rests)
        for word in self.controller.state:
            if word.signal is None:
                continue
            value = signals[word.signal] if word.lag <= 1 else lagged[word.signal, word.lag - 1]
            self._store(word.name, value)
        for name, value in rests.items():
            self._store(name, value)
        self.signals = {e.name: signals[e.name] for e in self.controller.update}
        return signals[self.controller.output]

    def resting_output(self, position: int) -> int:
        """The code that holds the plant at a position.

        Parameters
        ----------
        position : int
            Any value of the word type. [count]

        Returns
        -------
        int
            The output. [code]

        Raises
        ------
        OutOfRangeError
            If the argument does not fit the word type, or if a sum or a word leaves its range.

        Notes
        -----
        The controller's state takes no part.
        """
        _check_argument("position", int(position), self.controller.word_bits)
        signals = {"position": int(position)}
        for equation in self.controller.resting:
            signals[equation.name] = self._signal(equation, signals, {}, {})
        return signals[self.controller.resting[-1].name]

    def limited(self) -> int:
        """Whether the last update's output was limited.

        Returns
        -------
        int
            1 when it was cut down, -1 when it was cut up, 0 when it was not limited. [-]

        Notes
        -----
        Sign of the excess that the state keeps.
        """
        excess = self.state[self._excess]
        return (excess > 0) - (excess < 0)

    def _store(self, name: str, value: int) -> None:
        word = self._state_words[name]
        if not word.low <= value <= word.high:
            _refuse_word(name, value, word.low, word.high)
        self.state[name] = value

    def _signal(
        self,
        equation: WordEquation,
        signals: Mapping[str, int],
        lagged: Mapping[tuple[str, int], int],
        rests: dict[str, int],
    ) -> int:
        low, high, half = equation.sum_low, equation.sum_high, equation.rounding
        parts = [equation.constant]
        if equation.held is not None:
            parts.append(self.state[equation.held])
        if equation.rest is not None:
            parts.append(self.state[equation.rest])
        for term in equation.terms:
            value = signals[term.signal] if term.lag == 0 else lagged[term.signal, term.lag]
            parts.append(term.factor * value)
        total = 0
        for part in parts:
            total += part
            # The rounding constant may be added first or last: both sums must fit.
            for number in (part, total, total + half):
                if not low <= number <= high:
                    _refuse_word(f"{equation.name}: sum", number, low, high)
        result = (total + half) >> equation.shift
        if equation.rest is not None:
            rests[equation.rest] = total - (result << equation.shift)
        if equation.limit is not None:
            result = min(max(result, equation.limit[0]), equation.limit[1])
        if not equation.low <= result <= equation.high:
            _refuse_word(equation.name, result, equation.low, equation.high)
        return result


# --------------------------------------------------------------------------------------------------
# Many loops at once: numpy int64


class LaneController:
    """The same words as `IntegerController`, for many loops at once.

    Parameters
    ----------
    controller : WordController
        What to run in every lane; sums of at most 64 bits.
    lanes : int
        Number of loops, at least 1.

    Raises
    ------
    OutOfRangeError
        If a range of the controller does not hold (see `verify_ranges`), if its sums are wider
        than 64 bits, or if there is no lane.

    Notes
    -----
    The list becomes a flat sequence of array operations on int64. They cannot wrap: every partial
    sum, product and stored word has been verified to fit for every input and state.
    """

    def __init__(self, controller: WordController, lanes: int) -> None:
        if lanes < 1:
            raise OutOfRangeError("lanes", lanes, "", "must be at least 1", "ask for a lane")
        if controller.sum_bits > 64:
            raise OutOfRangeError(
                "sum_bits", controller.sum_bits, "", "must be at most 64", "use the reference path"
            )
        verify_ranges(controller)
        self.controller = controller
        self.lanes = lanes
        self._constants: dict[int, Words] = {}
        self._scratch = self._fresh()
        self._total = self._fresh()
        self._state = {word.name: self._fresh() for word in controller.state}
        self._inputs = {name: self._fresh() for name in ("reference", "position", "added")}
        self._signals = {e.name: self._fresh() for e in controller.update}
        self._added_is_zero = True
        self._excess = self._state[_excess_word(controller)]
        self._low, self._high = type_range(controller.word_bits)

        places = _places(controller)
        lagged = {key: self._state[name] for key, name in places.items()}
        current = {name: self._inputs[name] for name in controller.inputs} | self._signals
        self._update_list = [
            operation
            for equation in controller.update
            for operation in self._operations(equation, current, lagged)
        ]
        # Oldest words first, so that each takes its younger neighbour's value before it changes.
        for word in sorted(controller.state, key=lambda w: -w.lag):
            if word.signal is None:
                continue
            source = current[word.signal] if word.lag <= 1 else lagged[word.signal, word.lag - 1]
            self._update_list.append((np.positive, (source, self._state[word.name])))

        self._reset_inputs = {name: self._fresh() for name in ("position", "output")}
        self._reset_signals = self._reset_inputs | {e.name: self._fresh() for e in controller.reset}
        self._reset_list = [
            operation
            for equation in controller.reset
            for operation in self._operations(equation, self._reset_signals, {})
        ]
        self._resting_signals = {"position": self._fresh()}
        self._resting_signals |= {e.name: self._fresh() for e in controller.resting}
        self._resting_list = [
            operation
            for equation in controller.resting
            for operation in self._operations(equation, self._resting_signals, {})
        ]
        self._output = self._signals[controller.output]
        self.reset(0, 0)

    def reset(self, position: ArrayLike, output: ArrayLike) -> None:
        """Put every lane at rest.

        Parameters
        ----------
        position : array of int, shape (lanes,)
            Any values of the word type. [count]
        output : array of int, shape (lanes,)
            Any values of the word type. [code]

        Raises
        ------
        OutOfRangeError
            If a value does not fit the word type.

        Notes
        -----
        See `IntegerController.reset`.
        """
        self._fill("position", self._reset_inputs["position"], position)
        self._fill("output", self._reset_inputs["output"], output)
        for function, arguments in self._reset_list:
            function(*arguments)
        for word in self.controller.state:
            if word.after_reset is None:
                self._state[word.name][:] = 0
            else:
                self._state[word.name][:] = self._reset_signals[word.after_reset]
        for signal in self._signals.values():
            signal[:] = 0

    def update(
        self, reference: ArrayLike, position: ArrayLike, added: ArrayLike | None = None
    ) -> Words:
        """One sample in every lane.

        Parameters
        ----------
        reference, position : array of int, shape (lanes,)
            Any values of the word type. [count]
        added : array of int, shape (lanes,), or None
            Added before the limit; None adds nothing. [code]

        Returns
        -------
        array of int, shape (lanes,)
            The outputs, already limited. [code]

        Raises
        ------
        OutOfRangeError
            If a value does not fit the word type.

        Notes
        -----
        See `IntegerController.update`.
        """
        self._fill("reference", self._inputs["reference"], reference)
        self._fill("position", self._inputs["position"], position)
        if added is not None:
            self._fill("added", self._inputs["added"], added)
            self._added_is_zero = False
        elif not self._added_is_zero:
            self._inputs["added"][:] = 0
            self._added_is_zero = True
        for function, arguments in self._update_list:
            function(*arguments)
        return self._output.copy()

    def _advance(self, position: Words) -> Words:
        """An update with the other inputs as they were, arguments not checked again."""
        self._inputs["position"][:] = position
        for function, arguments in self._update_list:
            function(*arguments)
        return self._output

    def resting_output(self, position: ArrayLike) -> Words:
        """The codes that hold the plant at some positions.

        Parameters
        ----------
        position : array of int, shape (lanes,)
            Any values of the word type. [count]

        Returns
        -------
        array of int, shape (lanes,)
            The outputs. [code]

        Raises
        ------
        OutOfRangeError
            If a value does not fit the word type.

        Notes
        -----
        See `IntegerController.resting_output`.
        """
        self._fill("position", self._resting_signals["position"], position)
        for function, arguments in self._resting_list:
            function(*arguments)
        return self._resting_signals[self.controller.resting[-1].name].copy()

    def limited(self) -> Words:
        """Whether each lane's last output was limited.

        Returns
        -------
        array of int, shape (lanes,)
            1 when it was cut down, -1 when it was cut up, 0 when it was not limited. [-]

        Notes
        -----
        Sign of the excess that the state keeps.
        """
        return np.sign(self._excess)

    @property
    def state(self) -> dict[str, Words]:
        """Copies of the state words, by name, each of shape (lanes,).

        Notes
        -----
        A later update does not change what was returned.
        """
        return {name: word.copy() for name, word in self._state.items()}

    @property
    def signals(self) -> dict[str, Words]:
        """Copies of the last update's signals, by name, each of shape (lanes,).

        Notes
        -----
        A later update does not change what was returned.
        """
        return {name: signal.copy() for name, signal in self._signals.items()}

    def restore(self, state: Mapping[str, Words]) -> None:
        """Put back a state that `state` returned.

        Parameters
        ----------
        state : mapping of str to array of int, shape (lanes,)
            Every state word.

        Notes
        -----
        Nothing but these words decides what later updates return.
        """
        for name, word in self._state.items():
            word[:] = state[name]

    def _fresh(self) -> Words:
        return np.zeros(self.lanes, dtype=np.int64)

    def _constant(self, value: int) -> Words:
        # Whole arrays: numpy converts a Python int on every call, which costs more than the sum.
        if value not in self._constants:
            self._constants[value] = np.full(self.lanes, value, dtype=np.int64)
        return self._constants[value]

    def _fill(self, name: str, target: Words, values: ArrayLike) -> None:
        given = np.asarray(values)
        if given.dtype.kind not in "iu":
            raise OutOfRangeError(name, float("nan"), "", "must be integers", "pass an int array")
        least, most = int(given.min()), int(given.max())
        if least < self._low or most > self._high:
            wrong = least if least < self._low else most
            _check_argument(name, wrong, self.controller.word_bits)
        target[:] = given

    def _operations(
        self,
        equation: WordEquation,
        current: Mapping[str, Words],
        lagged: Mapping[tuple[str, int], Words],
    ) -> list[_Operation]:
        total, scratch, signal = self._total, self._scratch, current[equation.name]
        operations: list[_Operation] = []
        summands: list[Words] = []
        if equation.constant != 0:
            summands.append(self._constant(equation.constant))
        summands += [self._state[name] for name in (equation.held, equation.rest) if name]
        started = False
        for summand in summands:
            operations.append(
                (np.add, (total, summand, total)) if started else (np.positive, (summand, total))
            )
            started = True
        for term in equation.terms:
            read = current[term.signal] if term.lag == 0 else lagged[term.signal, term.lag]
            factor = term.factor
            if factor == 1 and started:
                operations.append((np.add, (total, read, total)))
            elif factor == -1 and started:
                operations.append((np.subtract, (total, read, total)))
            elif factor == 1:
                operations.append((np.positive, (read, total)))
            elif not started:
                operations.append((np.multiply, (read, self._constant(factor), total)))
            else:
                operations.append((np.multiply, (read, self._constant(factor), scratch)))
                operations.append((np.add, (total, scratch, total)))
            started = True
        if not started:
            operations.append((np.positive, (self._constant(0), total)))
        if equation.shift == 0:
            rounded = total
        else:
            shift = self._constant(equation.shift)
            operations.append((np.add, (total, self._constant(equation.rounding), signal)))
            operations.append((np.right_shift, (signal, shift, signal)))
            rounded = signal
        if equation.rest is not None:
            rest = self._state[equation.rest]
            shift = self._constant(equation.shift)
            operations.append((np.left_shift, (rounded, shift, scratch)))
            operations.append((np.subtract, (total, scratch, rest)))
        if equation.limit is not None:
            low, high = (self._constant(value) for value in equation.limit)
            # numpy takes no third plain argument here.
            operations.append((partial(np.maximum, out=signal), (rounded, low)))
            operations.append((partial(np.minimum, out=signal), (signal, high)))
        elif rounded is not signal:
            operations.append((np.positive, (rounded, signal)))
        return operations


# --------------------------------------------------------------------------------------------------
# The loop: integers around the continuous plant


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Track:
    """Motion of some lanes, in successive parts.

    Parameters
    ----------
    lanes : array of int, shape (k,)
        Which lanes of the record.
    parts : tuple of Part
        Their motion from t = 0 to the horizon.

    Notes
    -----
    Lanes whose events fall at times of their own have a track each.
    """

    lanes: Words
    parts: tuple[Part, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Record:
    """What a simulation leaves behind.

    Parameters
    ----------
    period_s, delay_s : float
        Sample period; sampling instant to actuator update. [s]
    lanes, samples : int
        How many loops, how many samples; sample k lies at k periods.
    start_count, start_output : array of int, shape (lanes,)
        What the controllers were reset with; the actuator holds the output until the first update
        acts. [count, code]
    first_kept : int
        Sample of the first row of the arrays below.
    counts, codes : array of int, shape (kept, lanes)
        What every update saw and returned. [count, code]
    limited : array of int, shape (kept, lanes)
        1 where the output was cut down, -1 where it was cut up, else 0. [-]
    peak_code : array of int, shape (lanes,)
        Largest magnitude of code minus zero code, over all samples. [code]
    saturated : array of bool, shape (lanes,)
        Whether an output was limited, over all samples. [-]
    touched_stop : array of bool, shape (lanes,)
        Whether the main mass reached an end stop. [-]
    tracks : tuple of Track
        The motion; every lane is in one track.

    Notes
    -----
    Long motions are not kept: their parts simulate themselves again when they are asked.
    """

    period_s: float
    delay_s: float
    lanes: int
    samples: int
    start_count: Words
    start_output: Words
    first_kept: int
    counts: NDArray[np.int32]
    codes: NDArray[np.int32]
    limited: NDArray[np.int8]
    peak_code: Words
    saturated: Flags
    touched_stop: Flags
    tracks: tuple[Track, ...]

    def motion(self, lane: int) -> tuple[Real, Real]:
        """True position of one lane at the nodes.

        Parameters
        ----------
        lane : int
            Which lane.

        Returns
        -------
        tuple of two arrays of float, shape (m,)
            Times and positions. [s; m or rad]

        Raises
        ------
        OutOfRangeError
            If there is no such lane.

        Notes
        -----
        Between the nodes the motion is smooth.
        """
        for track in self.tracks:
            at = np.nonzero(track.lanes == lane)[0]
            if at.size:
                loaded = [part.load().select(at) for part in track.parts]
                times = [each.times_s for each in loaded]
                positions = [each.positions()[:, 0] for each in loaded]
                cut = [slice(None)] + [slice(1, None)] * (len(loaded) - 1)
                return (
                    np.concatenate([t[c] for t, c in zip(times, cut, strict=True)]),
                    np.concatenate([y[c] for y, c in zip(positions, cut, strict=True)]),
                )
        raise OutOfRangeError(
            "lane", lane, "", f"must be from 0 to {self.lanes - 1}", "choose one of the lanes"
        )


def count_of(loop: Loop, position: ArrayLike) -> Words:
    """What the sensor's converter makes of a position.

    Parameters
    ----------
    loop : Loop
        Gives the sensor.
    position : array of float, any shape
        Positions from sensor zero. [m or rad]

    Returns
    -------
    array of int, the same shape
        Raw counts within the converter's range. [count]

    Notes
    -----
    floor(position x polarity / step + 1/2) + zero count, clipped: nearest, ties up.
    """
    sensor = loop.sensor
    scaled = np.asarray(position, dtype=np.float64) * sensor.polarity / sensor.step
    nearest = np.floor(scaled + 0.5) + sensor.zero_count
    return np.asarray(np.clip(nearest, sensor.low_count, sensor.high_count), dtype=np.int64)


def effort_per_code(loop: Loop, plant: Plant) -> float:
    """What one code more makes the actuator do.

    Parameters
    ----------
    loop : Loop
        Gives the actuator's step and polarity.
    plant : Plant
        Gives the drive and the force constant.

    Returns
    -------
    float
        Force with current drive, volts with voltage drive; negative for a reversed actuator.
        [N, N m or V per code]

    Notes
    -----
    polarity x step, times the force constant with current drive.
    """
    volts_or_amperes = loop.actuator.polarity * loop.actuator.step
    return volts_or_amperes * (plant.force_constant if plant.drive == "current" else 1.0)


def resting_state(
    space: StateSpace, *, position: ArrayLike, effort: ArrayLike, force: ArrayLike = 0.0
) -> Real:
    """States at rest at a position, whether or not the effort holds the main mass there.

    Parameters
    ----------
    space : StateSpace
        The plant.
    position : array of float, shape (lanes,)
        True position. [m or rad]
    effort : array of float, shape (lanes,)
        What the actuator has held for long. [N, N m or V]
    force : array of float, shape (lanes,)
        Constant force on the main mass. [N or N m]

    Returns
    -------
    array of float, shape (lanes, n)
        Main velocity 0; modes, current and sensor filter at their own rest. [SI by the states]

    Notes
    -----
    a x + b u + b_force F = 0 with the main mass's own equation replaced by the position.
    """
    positions, efforts, forces = np.broadcast_arrays(
        *(np.atleast_1d(np.asarray(v, dtype=np.float64)) for v in (position, effort, force))
    )
    own = int(np.argmax(np.abs(space.c_main_velocity)))
    matrix = space.a.copy()
    matrix[own] = space.c_position
    right = -(np.outer(space.b, efforts) + np.outer(space.b_force, forces))
    right[own] = positions
    size = np.abs(matrix).max(axis=1, keepdims=True)
    states = np.linalg.solve(matrix / size, right / size)
    states[own] = 0.0
    return np.ascontiguousarray(states.T)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _World:
    """Everything that does not change while a loop runs; arrays over its lanes."""

    loop: Loop
    sampled: SampledPlant
    force: Real
    effort_per_code: float
    friction: float
    travel: float
    reference: Words
    noise: Real | None
    added: Words | None

    def select(self, lanes: Words) -> _World:
        """The same world with some of the lanes."""
        return replace(
            self,
            force=self.force[lanes],
            reference=self.reference[:, lanes],
            noise=None if self.noise is None else self.noise[:, lanes],
            added=None if self.added is None else self.added[:, lanes],
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Moment:
    """All that the future depends on, at a sampling instant before its update."""

    number: int
    states: Real  # (n, lanes)
    waiting: Real  # (d + 1, lanes): outputs that still act or have yet to act, oldest first
    words: dict[str, Words]
    held: Flags
    direction: Real  # of the main mass where friction opposes it; 0 while held
    side: Real  # of the stop that the main mass rests at, else 0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Stretch:
    """Some samples of a loop."""

    trajectories: tuple[Trajectory, ...]  # one with all lanes, or one a lane
    counts: Words
    codes: Words
    excess: Words
    touched: Flags


class _Digital:
    """Converter, controller and actuator of all lanes: from a state to the next effort."""

    def __init__(self, world: _World, controller: WordController) -> None:
        self.lanes = world.force.size
        self.controller = LaneController(controller, self.lanes)
        self._world = world
        sensor = world.loop.sensor
        # Division by a signed step: the same quotient as with the sign on the position.
        self._step = np.full(self.lanes, sensor.polarity * sensor.step)
        self._half = np.full(self.lanes, 0.5)
        self._zero = float(sensor.zero_count)
        self._low = np.full(self.lanes, float(sensor.low_count))
        self._high = np.full(self.lanes, float(sensor.high_count))
        self._scaled = np.empty(self.lanes)
        self._cut_low = partial(np.maximum, out=self._scaled)
        self._cut_high = partial(np.minimum, out=self._scaled)
        self._row = world.sampled.c_measured
        self._unit = int(np.argmax(self._row)) if np.count_nonzero(self._row) == 1 else None
        if self._unit is not None and self._row[self._unit] != 1.0:
            self._unit = None
        self._zero_code = float(world.loop.actuator.zero_code)
        self._gain = np.full(self.lanes, world.effort_per_code)
        reference = world.reference
        steady = reference.shape[0] < 2 or reference.strides[0] == 0
        self._new_reference = np.ones(reference.shape[0], dtype=bool)
        if steady:
            self._new_reference[1:] = False
        else:
            self._new_reference[1:] = np.any(reference[1:] != reference[:-1], axis=1)

    def resume(self, moment: _Moment) -> None:
        """Continue from a moment; inputs that stay as they were are written once."""
        self.controller.restore(moment.words)
        self.controller._inputs["reference"][:] = self._world.reference[moment.number]

    def sample(self, number: int, states: Real, count: Words, code: Words, effort: Real) -> None:
        """One update: states (n, lanes) in; counts, codes and efforts (lanes,) out."""
        scaled, world = self._scaled, self._world
        if self._unit is None:
            np.dot(self._row, states, scaled)
        else:
            scaled[:] = states[self._unit]
        if world.noise is not None:
            np.add(scaled, world.noise[number], scaled)
        np.divide(scaled, self._step, scaled)
        np.add(scaled, self._half, scaled)
        np.floor(scaled, scaled)
        if self._zero != 0.0:
            np.add(scaled, self._zero, scaled)
        self._cut_low(scaled, self._low)
        self._cut_high(scaled, self._high)
        count[:] = scaled
        if self._new_reference[number]:
            self.controller._inputs["reference"][:] = world.reference[number]
        if world.added is not None:
            self.controller._inputs["added"][:] = world.added[number]
        code[:] = self.controller._advance(count)
        effort[:] = code
        if self._zero_code != 0.0:
            np.subtract(effort, self._zero_code, effort)
        np.multiply(effort, self._gain, effort)


def _run_free(
    world: _World, digital: _Digital, moment: _Moment, count: int
) -> tuple[_Stretch, _Moment]:
    """Samples of a linear plant: no friction, and nobody looks for stops."""
    sampled, lanes = world.sampled, digital.lanes
    n, d = sampled.psi.shape[0], sampled.whole_delay
    step = np.concatenate(
        [
            sampled.psi,
            sampled.gamma1[:, np.newaxis],
            sampled.gamma0[:, np.newaxis],
            sampled.gamma_force[:, np.newaxis],
        ],
        axis=1,
    )
    # State, the older output, the newer one, the force: one product a sample.
    full = np.empty((n + 3, lanes))
    full[:n], full[n + 2] = moment.states, world.force
    state, older, newer = full[:n], full[n], full[n + 1]
    change = np.empty((n, lanes))
    states = np.empty((count + 1, n, lanes))
    states[0] = state
    efforts = np.empty((count + d + 1, lanes))
    efforts[: d + 1] = moment.waiting
    counts, codes, excess = (np.empty((count, lanes), dtype=np.int64) for _ in range(3))
    digital.resume(moment)
    kept_excess = digital.controller._excess
    for i in range(count):
        digital.sample(moment.number + i, state, counts[i], codes[i], efforts[i + d + 1])
        excess[i] = kept_excess
        older[:] = efforts[i]
        newer[:] = efforts[i + 1]
        np.dot(step, full, change)
        np.add(state, change, state)
        states[i + 1] = state
    trajectory = trajectory_of_samples(
        sampled,
        states=np.moveaxis(states, 1, 2),
        inputs=efforts,
        forces=world.force,
        first=moment.number,
    )
    after = replace(
        moment,
        number=moment.number + count,
        states=state.copy(),
        waiting=efforts[count:].copy(),
        words=digital.controller.state,
    )
    stretch = _Stretch(
        trajectories=(trajectory,),
        counts=counts,
        codes=codes,
        excess=excess,
        touched=np.zeros(lanes, dtype=bool),
    )
    return stretch, after


# --------------------------------------------------------------------------------------------------
# Inside: friction and stops


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Mechanism:
    """The main mass among friction and stops, and how to find its events."""

    space: StateSpace
    still: StateSpace
    friction: float
    travel: float
    at_position: int
    at_velocity: int
    position: Quantity
    velocity: Quantity
    acceleration: Quantity
    push: Quantity  # all forces on the main mass at rest, friction and stop aside
    push_slope: Quantity  # while it is held
    longest_s: float

    def margin(self, states: Real, inputs: Real, forces: Real) -> Real:
        """What a push may be wrong by: rounding, far below anything physical."""
        row, gain = np.abs(self.push.row), abs(self.push.gain)
        size = np.abs(states) @ row + gain * np.abs(inputs) + np.abs(forces)
        return 1e-13 * (size + self.friction)


def _mechanism(world: _World) -> _Mechanism:
    space = world.sampled.space
    still = held_space(space)
    position = Quantity(row=space.c_main_position, gain=0.0, gain_force=0.0)
    velocity = Quantity(row=space.c_main_velocity, gain=0.0, gain_force=0.0)
    acceleration = velocity.slope(space)
    per_force = acceleration.gain_force
    push = Quantity(
        row=acceleration.row / per_force, gain=acceleration.gain / per_force, gain_force=1.0
    )
    return _Mechanism(
        space=space,
        still=still,
        friction=world.friction,
        travel=world.travel,
        at_position=int(np.argmax(np.abs(space.c_main_position))),
        at_velocity=int(np.argmax(np.abs(space.c_main_velocity))),
        position=position,
        velocity=velocity,
        acceleration=acceleration,
        push=push,
        push_slope=push.slope(still),
        longest_s=longest_piece_s(space, held=True),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Mass:
    """One lane's main mass on its way through a piece."""

    state: Real  # (1, n)
    held: bool
    direction: float
    side: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Event:
    """A change of the force on the main mass, or an impact, inside a piece."""

    piece: int
    after_s: float
    before: Real  # (n,)
    after: Real  # (n,)
    force: float
    held: bool
    impact: bool


def _allowed(mechanism: _Mechanism, side: float) -> tuple[float, float]:
    """Pushes at which a mass at rest stays: friction holds both ways, a stop all the way out."""
    low = -math.inf if side < 0.0 else -mechanism.friction
    high = math.inf if side > 0.0 else mechanism.friction
    return low, high


def _settle_down(mechanism: _Mechanism, mass: _Mass, u: Real, force: Real) -> _Mass:
    """A mass whose velocity has just become 0: held, or off to where it is pushed."""
    push = float(mechanism.push.at(mass.state, u, force)[0])
    margin = float(mechanism.margin(mass.state, u, force)[0])
    low, high = _allowed(mechanism, mass.side)
    if low - margin <= push <= high + margin and low < high:
        return replace(mass, held=True, direction=0.0)
    return _let_go(mechanism, mass, push)


def _let_go(mechanism: _Mechanism, mass: _Mass, push: float) -> _Mass:
    """A mass at rest that is pushed off; without friction its direction is nobody's business."""
    direction = math.copysign(1.0, push) if mechanism.friction > 0.0 else 0.0
    return replace(mass, held=False, direction=direction, side=0.0)


def _leaving(
    mechanism: _Mechanism, halves: Halves, mass: _Mass, u: Real, force: Real, left_s: float
) -> tuple[float, Real, float] | None:
    """When a held mass is pushed off: time, state, direction; None if it stays."""
    span = np.array([left_s])
    end = halves.advance(mass.state, u, force, span)
    legs = [(0.0, mass.state, left_s, end)]
    slopes = [float(mechanism.push_slope.at(x, u, force)[0]) for x in (mass.state, end)]
    if slopes[0] * slopes[1] < 0.0:
        turn_s, turn = halves.until(
            mass.state, u, force, span, mechanism.push_slope, np.zeros(1), np.sign(slopes[:1])
        )
        middle_s = float(turn_s[0])
        legs = [(0.0, mass.state, middle_s, turn), (middle_s, turn, left_s, end)]
    margin = mechanism.margin(mass.state, u, force)
    low, high = _allowed(mechanism, mass.side)
    for begin_s, begin, stop_s, stop in legs:
        push = float(mechanism.push.at(stop, u, force)[0])
        for sign, level in ((1.0, high), (-1.0, -low)):
            # Beyond the level by more than rounding: from there the mass is truly accelerated.
            beyond = sign * push - level - float(margin[0])
            if beyond > 0.0:
                theta, state = halves.until(
                    begin,
                    u,
                    force,
                    np.array([stop_s - begin_s]),
                    mechanism.push,
                    -sign * (level + margin),
                    np.array([-sign]),
                )
                # One step of the finest level more: now the push is beyond, and stays there.
                last = halves.steps_s[-1:]
                state = halves.advance(state, u, force, last)
                return begin_s + float(theta[0] + last[0]), state, sign
    return None


def _stopping(
    mechanism: _Mechanism, halves: Halves, mass: _Mass, u: Real, force: Real, left_s: float
) -> tuple[float, Real, float] | None:
    """First event of a moving mass: time, state, side of the stop or 0 for a standstill."""
    span, zero = np.array([left_s]), np.zeros(1)
    end = halves.advance(mass.state, u, force, span)

    def value(quantity: Quantity, state: Real) -> float:
        return float(quantity.at(state, u, force)[0])

    # Points between which the position is monotone.
    points = [(0.0, mass.state)]
    turns = [(left_s, end)]
    a0, a1 = value(mechanism.acceleration, mass.state), value(mechanism.acceleration, end)
    if a0 * a1 < 0.0:
        at_s, at_turn = halves.until(
            mass.state, u, force, span, mechanism.acceleration, zero, np.sign([a0])
        )
        turns.insert(0, (float(at_s[0]), at_turn))
    friction = mechanism.friction > 0.0
    standstill = None
    begin_s, begin = points[0]
    v = value(mechanism.velocity, begin)
    if friction and v == 0.0 and mass.direction * a0 <= 0.0:
        return 0.0, mass.state, 0.0
    for turn_s, turn in turns:
        to = value(mechanism.velocity, turn)
        sign = mass.direction if friction else math.copysign(1.0, v)
        if sign * to < 0.0 and (friction or v != 0.0):
            theta, state = halves.until(
                begin,
                u,
                force,
                np.array([turn_s - begin_s]),
                mechanism.velocity,
                zero,
                np.array([sign]),
            )
            points.append((begin_s + float(theta[0]), state))
            if friction:
                standstill = points[-1]
                break
        begin_s, begin, v = turn_s, turn, to
    if standstill is None:
        points.append((left_s, end))

    for (from_s, start), (to_s, stop) in zip(points, points[1:], strict=False):
        x = value(mechanism.position, stop)
        if abs(x) > mechanism.travel:
            side = math.copysign(1.0, x)
            theta, state = halves.until(
                start,
                u,
                force,
                np.array([to_s - from_s]),
                mechanism.position,
                np.array([-side * mechanism.travel]),
                np.array([-side]),
            )
            return from_s + float(theta[0]), state, side
    return None if standstill is None else (standstill[0], standstill[1], 0.0)


def _through_piece(
    mechanism: _Mechanism, mass: _Mass, effort: float, force: float, span_s: float, piece: int
) -> tuple[_Mass, list[_Event]]:
    """Carry one mass through a piece, event by event."""
    u, constant = np.array([effort]), np.array([force])
    events: list[_Event] = []
    moving, resting = halves_for(mechanism.space, span_s), halves_for(mechanism.still, span_s)
    now_s = 0.0
    for _ in range(_MOST_EVENTS):
        left_s = span_s - now_s
        if left_s <= 0.0:
            return mass, events
        acting = constant - mechanism.friction * mass.direction
        halves = resting if mass.held else moving
        if mass.held:
            found = _leaving(mechanism, halves, mass, u, constant, left_s)
        else:
            found = _stopping(mechanism, halves, mass, u, acting, left_s)
        if found is None:
            end = halves.advance(mass.state, u, acting, np.array([left_s]))
            return replace(mass, state=end), events
        theta, before, sign = found
        now_s += theta
        if mass.held:
            mass = _let_go(mechanism, replace(mass, state=before), sign)
        else:
            after = before.copy()
            after[0, mechanism.at_velocity] = 0.0
            if sign != 0.0:
                after[0, mechanism.at_position] = sign * mechanism.travel
            mass = _settle_down(mechanism, replace(mass, state=after, side=sign), u, constant)
        events.append(
            _Event(
                piece=piece,
                after_s=now_s,
                before=before[0],
                after=mass.state[0],
                force=force - mechanism.friction * mass.direction,
                held=mass.held,
                impact=sign != 0.0 and not np.array_equal(before, mass.state),
            )
        )
    raise OutOfRangeError(
        "events",
        _MOST_EVENTS,
        "",
        f"within {span_s:.3g} s of one piece: the motion chatters",
        "check friction and travel of the plant",
    )


def _release(
    mechanism: _Mechanism, states: Real, inputs: Real, force: Real, modes: tuple[Flags, Real, Real]
) -> None:
    """Let go of held masses that the present inputs push off; changes the modes in place."""
    held, direction, side = modes
    lanes = np.nonzero(held)[0]
    x, u, f = states[:, lanes].T, inputs[lanes], force[lanes]
    push, margin = mechanism.push.at(x, u, f), mechanism.margin(x, u, f)
    low = np.where(side[lanes] < 0.0, -np.inf, -mechanism.friction)
    high = np.where(side[lanes] > 0.0, np.inf, mechanism.friction)
    off = (push > high + margin) | (push < low - margin)
    gone = lanes[off]
    held[gone] = False
    side[gone] = 0.0
    if mechanism.friction > 0.0:
        direction[gone] = np.sign(push[off])


def _suspects(
    mechanism: _Mechanism,
    before: Real,
    after: Real,
    inputs: Real,
    forces: Real,
    span_s: float,
    modes: tuple[Flags, Real, Real],
) -> Words:
    """Lanes in which a piece may hold an event; states (n, lanes) as if it held none."""
    held, direction, side = modes
    x0, x1 = before[mechanism.at_position], after[mechanism.at_position]
    v0, v1 = before[mechanism.at_velocity], after[mechanism.at_velocity]
    a0 = mechanism.acceleration.at(before.T, inputs, forces)
    a1 = mechanism.acceleration.at(after.T, inputs, forces)
    # The mass cannot get further than this, whatever it does in between.
    fastest = np.maximum(np.abs(v0), np.abs(v1)) + span_s * np.maximum(np.abs(a0), np.abs(a1))
    suspect = np.maximum(np.abs(x0), np.abs(x1)) + span_s * fastest > mechanism.travel
    if mechanism.friction > 0.0:
        suspect |= direction * v1 <= 0.0
        suspect |= (a0 * a1 < 0.0) & (direction * a0 <= 0.0)
    suspect &= ~held
    lanes = np.nonzero(held)[0]
    if lanes.size:
        u, f = inputs[lanes], forces[lanes]
        ends = before[:, lanes].T, after[:, lanes].T
        push = [mechanism.push.at(x, u, f) for x in ends]
        slope = [mechanism.push_slope.at(x, u, f) for x in ends]
        low = np.where(side[lanes] < 0.0, -np.inf, -mechanism.friction)
        high = np.where(side[lanes] > 0.0, np.inf, mechanism.friction)
        reserve = span_s * np.maximum(np.abs(slope[0]), np.abs(slope[1]))
        reserve = np.where(slope[0] * slope[1] < 0.0, reserve, 0.0)
        suspect[lanes] = (np.maximum(push[0], push[1]) + reserve > high) | (
            np.minimum(push[0], push[1]) - reserve < low
        )
    return np.nonzero(suspect)[0]


def _run_with_events(
    world: _World, digital: _Digital, moment: _Moment, count: int
) -> tuple[_Stretch, _Moment]:
    """Samples of a plant with friction or stops: all lanes together, events lane by lane."""
    sampled, lanes = world.sampled, digital.lanes
    mechanism = _mechanism(world)
    n, d, period_s = sampled.psi.shape[0], sampled.whole_delay, sampled.period_s
    # Pieces of one sample: how long, and whether the newer output acts.
    early_s = sampled.fraction * period_s
    pieces: list[tuple[float, int]] = []
    for span_s, newer in ((early_s, 0), (period_s - early_s, 1)):
        if span_s > 0.0:
            cuts = max(1, math.ceil(span_s / mechanism.longest_s * (1.0 - 1e-9)))
            pieces += [(span_s / cuts, newer)] * cuts
    matrices = {
        span_s: tuple(
            np.concatenate([psi, gain[:, np.newaxis], gain_force[:, np.newaxis]], axis=1)
            for psi, gain, gain_force in (
                propagate(mechanism.space, span_s),
                propagate(mechanism.still, span_s),
            )
        )
        for span_s, _ in pieces
    }
    total = count * len(pieces)
    states = np.empty((total + 1, n, lanes))
    inputs, forces = np.empty((total, lanes)), np.empty((total, lanes))
    held_then = np.empty((total, lanes), dtype=bool)
    efforts = np.empty((count + d + 1, lanes))
    efforts[: d + 1] = moment.waiting
    counts, codes, excess = (np.empty((count, lanes), dtype=np.int64) for _ in range(3))
    touched = np.zeros(lanes, dtype=bool)
    held, direction, side = moment.held.copy(), moment.direction.copy(), moment.side.copy()
    modes = held, direction, side
    events: dict[int, list[_Event]] = {}
    digital.resume(moment)
    kept_excess = digital.controller._excess
    state = np.ascontiguousarray(moment.states)
    states[0] = state
    full = np.empty((n + 2, lanes))
    piece = 0
    for i in range(count):
        digital.sample(moment.number + i, state, counts[i], codes[i], efforts[i + d + 1])
        excess[i] = kept_excess
        for span_s, newer in pieces:
            effort = efforts[i + newer]
            if held.any():
                _release(mechanism, state, effort, world.force, modes)
            force = world.force - mechanism.friction * direction
            full[:n], full[n], full[n + 1] = state, effort, force
            free, still = matrices[span_s]
            after = state + free @ full
            if held.any():
                after = np.where(held, state + still @ full, after)
            inputs[piece], forces[piece], held_then[piece] = effort, force, held
            for lane in _suspects(mechanism, state, after, effort, force, span_s, modes):
                mass = _Mass(
                    state=state[:, lane][np.newaxis].copy(),
                    held=bool(held[lane]),
                    direction=float(direction[lane]),
                    side=float(side[lane]),
                )
                mass, found = _through_piece(
                    mechanism,
                    mass,
                    float(effort[lane]),
                    float(world.force[lane]),
                    span_s,
                    piece,
                )
                if found:
                    events.setdefault(int(lane), []).extend(found)
                    after[:, lane] = mass.state[0]
                    held[lane], direction[lane] = mass.held, mass.direction
                    side[lane] = mass.side
                    touched[lane] |= any(e.impact for e in found)
            state = after
            piece += 1
            states[piece] = state
    spans = np.array([span_s for span_s, _ in pieces])
    offsets = np.concatenate([[0.0], np.cumsum(spans)[:-1]])
    instants = (moment.number + np.arange(count)) * period_s
    times = np.append(
        (instants[:, np.newaxis] + offsets).reshape(-1), (moment.number + count) * period_s
    )
    base = Trajectory(
        space=mechanism.space,
        times_s=times,
        states=np.moveaxis(states, 1, 2),
        inputs=inputs,
        forces=forces,
        held=held_then,
    )
    after_all = _Moment(
        number=moment.number + count,
        states=state.copy(),
        waiting=efforts[count:].copy(),
        words=digital.controller.state,
        held=held,
        direction=direction,
        side=side,
    )
    stretch = _Stretch(
        trajectories=tuple(
            _with_events(base.lane(lane), events.get(lane, [])) for lane in range(lanes)
        ),
        counts=counts,
        codes=codes,
        excess=excess,
        touched=touched,
    )
    return stretch, after_all


def _with_events(base: Trajectory, events: list[_Event]) -> Trajectory:
    """One lane's motion with nodes where its events fall, two where the state jumps."""
    if not events or base.held is None:
        return base
    at: list[int] = []
    times: list[float] = []
    states: list[Real] = []
    forces: list[float] = []
    held: list[bool] = []
    acting: dict[int, tuple[float, bool]] = {}
    for event in events:
        time_s = float(base.times_s[event.piece]) + event.after_s
        # Rounding of the sum must not put the event behind the next node.
        time_s = min(time_s, float(base.times_s[event.piece + 1]))
        before = acting.get(
            event.piece,
            (float(base.forces[event.piece, 0]), bool(base.held[event.piece, 0])),
        )
        if not np.array_equal(event.before, event.after):
            at.append(event.piece + 1)
            times.append(time_s)
            states.append(event.before)
            forces.append(before[0])
            held.append(before[1])
        at.append(event.piece + 1)
        times.append(time_s)
        states.append(event.after)
        forces.append(event.force)
        held.append(event.held)
        acting[event.piece] = event.force, event.held
    inserted = np.array(at)
    lanes_axis = (slice(None), np.newaxis)
    return replace(
        base,
        times_s=np.insert(base.times_s, inserted, times),
        states=np.insert(base.states, inserted, np.array(states)[lanes_axis], axis=0),
        inputs=np.insert(base.inputs, inserted, base.inputs[inserted - 1], axis=0),
        forces=np.insert(base.forces, inserted, np.array(forces)[lanes_axis], axis=0),
        held=np.insert(base.held, inserted, np.array(held)[lanes_axis], axis=0),
    )


# --------------------------------------------------------------------------------------------------
# Inside: long runs


_Runner = Callable[[_World, _Digital, _Moment, int], tuple[_Stretch, _Moment]]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Outcome:
    """A whole run of some lanes."""

    parts: tuple[tuple[Part, ...], ...]  # a tuple for each trajectory of a stretch
    counts: NDArray[np.int32]
    codes: NDArray[np.int32]
    limited: NDArray[np.int8]
    peak_code: Words
    saturated: Flags
    touched: Flags
    beyond: Flags


def _run(
    world: _World,
    controller: WordController,
    start: _Moment,
    runner: _Runner,
    *,
    samples: int,
    keep: int,
    progress: Callable[[float], None] | None,
) -> _Outcome:
    digital = _Digital(world, controller)
    lanes = digital.lanes
    space = world.sampled.space
    zero_code = world.loop.actuator.zero_code
    in_memory = 2 * samples * lanes * (space.a.shape[0] + 2) <= _MOST_NUMBERS
    plain = np.array_equal(space.c_main_position, space.c_position)
    counts, codes = (np.empty((keep, lanes), dtype=np.int32) for _ in range(2))
    limited = np.empty((keep, lanes), dtype=np.int8)
    peak = np.zeros(lanes, dtype=np.int64)
    saturated, touched, beyond = (np.zeros(lanes, dtype=bool) for _ in range(3))
    parts: list[list[Part]] = []
    # Lanes of one run ask for the same stretches, one after the other.
    recent: dict[int, _Stretch] = {}

    def again(moment: _Moment, count: int) -> _Stretch:
        if moment.number not in recent:
            while len(recent) >= _RECENT:
                del recent[next(iter(recent))]
            recent[moment.number] = runner(world, digital, moment, count)[0]
        return recent[moment.number]

    moment = start
    while moment.number < samples:
        count = min(_CHUNK, samples - moment.number)
        stretch, after = runner(world, digital, moment, count)
        begin, first = moment.number, samples - keep
        if begin + count > first:
            cut = max(first - begin, 0)
            rows = slice(begin + cut - first, begin + count - first)
            counts[rows], codes[rows] = stretch.counts[cut:], stretch.codes[cut:]
            limited[rows] = np.sign(stretch.excess[cut:])
        peak = np.maximum(peak, np.abs(stretch.codes - zero_code).max(axis=0))
        saturated |= np.any(stretch.excess != 0, axis=0)
        touched |= stretch.touched
        for number, trajectory in enumerate(stretch.trajectories):
            if number == len(parts):
                parts.append([])

            def load(
                moment: _Moment = moment,
                count: int = count,
                number: int = number,
                trajectory: Trajectory | None = trajectory if in_memory else None,
            ) -> Trajectory:
                if trajectory is not None:
                    return trajectory
                return again(moment, count).trajectories[number]

            part = part_of(trajectory, load)
            parts[number].append(part)
            if runner is _run_free and world.travel < math.inf:
                if plain:
                    low, high = part.low, part.high
                else:
                    low, high = reach(trajectory, space.c_main_position)
                beyond |= (high >= world.travel) | (low <= -world.travel)
        moment = after
        if progress is not None:
            progress(moment.number / samples)
    return _Outcome(
        parts=tuple(tuple(each) for each in parts),
        counts=counts,
        codes=codes,
        limited=limited,
        peak_code=peak,
        saturated=saturated,
        touched=touched,
        beyond=beyond,
    )


def _selected(part: Part, lanes: Words) -> Part:
    return replace(
        part,
        low=part.low[lanes],
        high=part.high[lanes],
        low_s=part.low_s[lanes],
        high_s=part.high_s[lanes],
        integral=part.integral[lanes],
        load=lambda: part.load().select(lanes),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Starts:
    """What the controllers are reset with."""

    count: Words
    output: Words


def _first_moment(
    world: _World, controller: WordController, states: Real, efforts: Real, starts: _Starts
) -> _Moment:
    """The moment before the first update, with the main mass held where friction can hold it."""
    lanes = efforts.size
    digital = LaneController(controller, lanes)
    digital.reset(starts.count, starts.output)
    mechanism = _mechanism(world)
    held = np.zeros(lanes, dtype=bool)
    direction, side = np.zeros(lanes), np.zeros(lanes)
    for lane in range(lanes):
        mass = _Mass(state=states[lane][np.newaxis], held=False, direction=0.0, side=0.0)
        x = float(mechanism.position.at(mass.state, np.zeros(1), np.zeros(1))[0])
        v = float(mechanism.velocity.at(mass.state, np.zeros(1), np.zeros(1))[0])
        if abs(x) > world.travel:
            raise OutOfRangeError(
                "start", x, "m or rad", "lies beyond the end stop", "start within the travel"
            )
        if abs(x) == world.travel:
            mass = replace(mass, side=math.copysign(1.0, x))
        if v == 0.0:
            here = slice(lane, lane + 1)
            mass = _settle_down(mechanism, mass, efforts[here], world.force[here])
        else:
            mass = _let_go(mechanism, mass, v)
        held[lane], direction[lane], side[lane] = mass.held, mass.direction, mass.side
    return _Moment(
        number=0,
        states=np.ascontiguousarray(states.T),
        waiting=np.tile(efforts, (world.sampled.whole_delay + 1, 1)),
        words=digital.state,
        held=held,
        direction=direction,
        side=side,
    )


def simulate(
    loop: Loop,
    plant: Plant,
    controller: WordController,
    *,
    samples: int,
    reference: ArrayLike,
    start: ArrayLike,
    output: ArrayLike | None = None,
    states: Real | None = None,
    force: ArrayLike = 0.0,
    noise: Real | None = None,
    added: ArrayLike | None = None,
    keep: int | None = None,
    progress: Callable[[float], None] | None = None,
) -> Record:
    """The integers around the continuous plant, in many lanes at once.

    Parameters
    ----------
    loop : Loop
        Gives sensor, actuator, sample rate and delay.
    plant : Plant
        What moves; need not be the nominal one.
    controller : WordController
        The words that run.
    samples : int
        Horizon, at least 1.
    reference : array of int, broadcast to shape (samples, lanes)
        Raw counts; the update at t = 0 sees the first row. [count]
    start : array of float, shape (lanes,)
        True position before. [m or rad]
    output : array of int, shape (lanes,), or None
        Code that the actuator holds before, and that reset is called with; None asks the
        controller for what rests there. [code]
    states : array of float, shape (lanes, n), or None
        States of the plant at t = 0; None is rest at `start`. [SI by the states]
    force : array of float, shape (lanes,)
        Force on the main mass beside bias and spring. [N or N m]
    noise : array of float, shape (samples, lanes), or None
        Added to what the converter sees. [m or rad]
    added : array of int, broadcast to shape (samples, lanes), or None
        Codes added before the limit. [code]
    keep : int or None
        Number of last samples whose words are kept; None keeps all.
    progress : callable or None
        Called with the fraction that is done, from time to time; begins anew where lanes that
        touched a stop are run again. [-]

    Returns
    -------
    Record
        Words, extremes and motion.

    Raises
    ------
    OutOfRangeError
        If there is no sample, if a start lies beyond the travel, if a word does not fit its type,
        or if the motion is not finite.

    Notes
    -----
    Position is converted at t = kT; the output acts from kT + delay until the next one does.
    Between those instants the motion is exact. Coulomb friction acts on the main mass, which
    sticks while the other forces on it are within the friction at velocity 0; the stops are
    inelastic: the velocity becomes 0, and the mass stays until it is pulled away. Events are met
    to 2^-50 of a piece. Own derivation.
    """
    if samples < 1:
        raise OutOfRangeError("samples", samples, "", "must be at least 1", "ask for a sample")
    starts = np.atleast_1d(np.asarray(start, dtype=np.float64))
    lanes = starts.size
    sampled = sample(state_space(plant), loop.processor.period_s, loop.processor.delay_s)
    references = _whole_numbers("reference", reference, controller.word_bits)
    world = _World(
        loop=loop,
        sampled=sampled,
        force=constant_force(plant) + np.broadcast_to(np.asarray(force, np.float64), (lanes,)),
        effort_per_code=effort_per_code(loop, plant),
        friction=plant.friction,
        travel=plant.travel,
        reference=np.broadcast_to(references, (samples, lanes)),
        noise=None if noise is None else np.broadcast_to(noise, (samples, lanes)),
        added=(
            None
            if added is None
            else np.broadcast_to(
                _whole_numbers("added", added, controller.word_bits), (samples, lanes)
            )
        ),
    )
    count = count_of(loop, starts)
    codes = (
        LaneController(controller, lanes).resting_output(count)
        if output is None
        else np.broadcast_to(np.asarray(output, dtype=np.int64), (lanes,))
    )
    first = _Starts(count=count, output=codes)
    efforts = np.asarray((codes - loop.actuator.zero_code) * world.effort_per_code, np.float64)
    begin = (
        resting_state(sampled.space, position=starts, effort=efforts, force=world.force)
        if states is None
        else np.broadcast_to(np.asarray(states, np.float64), (lanes, sampled.psi.shape[0]))
    )
    moment = _first_moment(world, controller, begin, efforts, first)
    kept = samples if keep is None else min(max(keep, 0), samples)

    runner = _run_free if plant.friction == 0.0 and not moment.held.any() else _run_with_events
    outcome = _run(world, controller, moment, runner, samples=samples, keep=kept, progress=progress)
    counts, words, limited = outcome.counts, outcome.codes, outcome.limited
    peak, saturated, touched = outcome.peak_code, outcome.saturated, outcome.touched
    again = np.nonzero(outcome.beyond)[0]
    if again.size:
        repeated = _run(
            world.select(again),
            controller,
            _selected_moment(moment, again),
            _run_with_events,
            samples=samples,
            keep=kept,
            progress=progress,
        )
        counts[:, again], words[:, again] = repeated.counts, repeated.codes
        limited[:, again], peak[again] = repeated.limited, repeated.peak_code
        saturated[again], touched[again] = repeated.saturated, repeated.touched
        tracks = [
            Track(lanes=again[i : i + 1], parts=parts) for i, parts in enumerate(repeated.parts)
        ]
        rest = np.nonzero(~outcome.beyond)[0]
        if rest.size:
            parts = tuple(_selected(part, rest) for part in outcome.parts[0])
            tracks.append(Track(lanes=rest, parts=parts))
    elif len(outcome.parts) == 1:
        tracks = [Track(lanes=np.arange(lanes), parts=outcome.parts[0])]
    else:
        tracks = [Track(lanes=np.array([i]), parts=parts) for i, parts in enumerate(outcome.parts)]
    for track in tracks:
        for part in track.parts:
            if not np.all(np.isfinite(part.low) & np.isfinite(part.high)):
                raise OutOfRangeError(
                    "position",
                    math.inf,
                    "m",
                    "is not finite: the loop runs away",
                    "check that plant and loop are what they should be",
                )
    return Record(
        period_s=sampled.period_s,
        delay_s=sampled.delay_s,
        lanes=lanes,
        samples=samples,
        start_count=count,
        start_output=codes,
        first_kept=samples - kept,
        counts=counts,
        codes=words,
        limited=limited,
        peak_code=peak,
        saturated=saturated,
        touched_stop=touched,
        tracks=tuple(tracks),
    )


def _whole_numbers(name: str, values: ArrayLike, bits: int) -> Words:
    given = np.asarray(values)
    if given.dtype.kind not in "iu":
        raise OutOfRangeError(name, math.nan, "", "must be integers", "pass an int array")
    for extreme in (int(given.min()), int(given.max())):
        _check_argument(name, extreme, bits)
    return given.astype(np.int64)


def _selected_moment(moment: _Moment, lanes: Words) -> _Moment:
    return replace(
        moment,
        states=np.ascontiguousarray(moment.states[:, lanes]),
        waiting=moment.waiting[:, lanes].copy(),
        words={name: word[lanes] for name, word in moment.words.items()},
        held=moment.held[lanes],
        direction=moment.direction[lanes],
        side=moment.side[lanes],
    )


def figures_of(
    record: Record, *, reference: ArrayLike, step: ArrayLike, band: float
) -> StepFigures:
    """Step figures of every lane of a record.

    Parameters
    ----------
    record : Record
        The step is given at t = 0.
    reference, step : array of float, shape (lanes,)
        Where the position should end; the step with its sign. [m or rad]
    band : float
        Half-width of the settling band over the step. [-]

    Returns
    -------
    StepFigures
        One value per lane, in the order of the record.

    Notes
    -----
    See `plant2.response.step_figures`.
    """
    references = np.broadcast_to(np.asarray(reference, np.float64), (record.lanes,))
    steps = np.broadcast_to(np.asarray(step, np.float64), (record.lanes,))
    merged = {f.name: np.full(record.lanes, np.nan) for f in fields(StepFigures)}
    for track in record.tracks:
        part = step_figures(
            track.parts,
            reference=references[track.lanes],
            step=steps[track.lanes],
            band=band,
        )
        for name, values in merged.items():
            values[track.lanes] = getattr(part, name)
    return StepFigures(**merged)


# --------------------------------------------------------------------------------------------------
# The checked step


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CheckedStep:
    """The checked step of a loop: the worst of each figure over all lanes, and the lanes.

    Parameters
    ----------
    size : float
        The step: the whole counts nearest to what was asked for. [m or rad]
    band : float
        Half-width of the settling band over the step. [-]
    overshoot_percent : float
        Largest. [%]
    settling_time_s : float
        Largest; nan where a lane does not settle. [s]
    rise_time_s : float
        Largest; nan where a lane does not rise. [s]
    peak_code : int
        Largest magnitude of code minus zero code. [code]
    final_error : float
        Largest magnitude of final value minus reference. [m or rad]
    rest_peak_to_peak_count : float
        Largest peak-to-peak position within the last fifth. [count]
    saturated : bool
        Whether any output of any lane was limited. [-]
    touched_stop : bool
        Whether the main mass of any lane reached an end stop. [-]
    start, step : array of float, shape (lanes,)
        Start and step of each lane, the step with its sign. [m or rad]
    reference_count : array of int, shape (lanes,)
        Raw counts that the updates see. [count]
    figures : StepFigures
        Figures of each lane.
    record : Record
        Words and motion of each lane.

    Notes
    -----
    Half of `rest_peak_to_peak_count` is the limit cycle that was seen.
    """

    size: float
    band: float
    overshoot_percent: float
    settling_time_s: float
    rise_time_s: float
    peak_code: int
    final_error: float
    rest_peak_to_peak_count: float
    saturated: bool
    touched_stop: bool
    start: Real
    step: Real
    reference_count: Words
    figures: StepFigures
    record: Record


def _above_rounding(percent: float) -> float:
    return percent if percent > 1e-9 else 0.0


def checked_step(
    loop: Loop,
    plant: Plant,
    controller: WordController,
    *,
    samples: int,
    progress: Callable[[float], None] | None = None,
) -> CheckedStep:
    """Run the step that a loop file asks for, up and down, from 32 starts around zero.

    Parameters
    ----------
    loop : Loop
        Step, band, sensor, actuator, sample rate and delay.
    plant : Plant
        What moves; need not be the nominal one.
    controller : WordController
        The words that run.
    samples : int
        Horizon.
    progress : callable or None
        Called with the fraction that is done, from time to time. [-]

    Returns
    -------
    CheckedStep
        The worst of each figure, and all of them.

    Raises
    ------
    OutOfRangeError
        If the step is less than half a count, or as in `simulate`.

    Notes
    -----
    At rest before, noise off; t = 0 is the sampling instant whose update first sees the reference.
    From zero up and down, each from 16 starts spread evenly over the count around zero: a sensor
    cannot tell them apart, the motion can. Figures by the definitions of `plant2.response`.
    """
    sensor = loop.sensor
    whole = math.floor(loop.step / sensor.step + 0.5)
    if whole < 1:
        raise OutOfRangeError(
            "step",
            loop.step,
            "rad" if plant.motion == "rotary" else "m",
            f"is less than half a count of {sensor.step:.6g}",
            "ask for a larger step",
        )
    size = whole * sensor.step
    sign = np.repeat([1, -1], _OFFSETS)
    offset = (np.arange(_OFFSETS) + 0.5) / _OFFSETS - 0.5
    start = np.tile(offset, 2) * sensor.step
    reference_count = sensor.zero_count + sensor.polarity * sign * whole
    lanes = start.size
    record = simulate(
        loop,
        plant,
        controller,
        samples=samples,
        reference=reference_count,
        start=start,
        keep=max(1, min(samples, _MOST_KEPT // lanes)),
        progress=progress,
    )
    band = settling_band(loop)
    step = sign * size
    figures = figures_of(record, reference=step, step=step, band=band)
    rest = (figures.final_high - figures.final_low) / sensor.step
    return CheckedStep(
        size=size,
        band=band,
        # what rounding alone leaves of a motion that stops short is no overshoot
        overshoot_percent=_above_rounding(float(figures.overshoot_percent.max())),
        settling_time_s=float(figures.settling_time_s.max()),
        rise_time_s=float(figures.rise_time_s.max()),
        peak_code=int(record.peak_code.max()),
        final_error=float(figures.final_error.max()),
        rest_peak_to_peak_count=float(rest.max()),
        saturated=bool(record.saturated.any()),
        touched_stop=bool(record.touched_stop.any()),
        start=start,
        step=step,
        reference_count=reference_count,
        figures=figures,
        record=record,
    )
