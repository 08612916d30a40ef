"""A controller's integers, alone and around the continuous plant, word for word.

Rules of this file:

- `IntegerController` is the reference: Python ints, every partial sum and every stored word is
  compared with its stated range.
- `LaneController` makes the same words for many loops at once. numpy integers wrap silently, so
  it verifies the ranges of the controller before it computes anything.
- Both read the same `WordController` and compute no word of their own.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from plant2.equations import WordController, WordEquation, verify_ranges
from plant2.errors import OutOfRangeError

Words = NDArray[np.int64]
Real = NDArray[np.float64]

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


def _type_range(bits: int) -> tuple[int, int]:
    return -(1 << (bits - 1)), (1 << (bits - 1)) - 1


def _check_argument(name: str, value: int, bits: int) -> None:
    low, high = _type_range(bits)
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
        self._low, self._high = _type_range(controller.word_bits)

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
