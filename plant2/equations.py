"""The one description of a controller: a short ordered list of difference equations.

Rules of this file:

- A controller is nothing but such a list. Each equation makes one signal,
  ``limit(round(sum of terms))``; there are no conditions.
- `Equation` holds real coefficients and units, `WordEquation` holds integers: every word, lift,
  shift, limit and proven range. Simulation, bounds, proofs and templates read them and compute no
  word of their own.
- This module does not know laws, plants or files.

Arithmetic of a word equation, all in the sum's width::

    sum    = constant + held + rest[1] + terms in order
    value  = floor((sum + 2^(shift-1)) / 2^shift)        (shift 0: value = sum)
    rest   = sum - 2^shift value                          (where the equation carries its residue)
    signal = value limited to [low, high]                 (where it has a limit)
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np
from numpy.typing import NDArray

from plant2.errors import OutOfRangeError

Polynomial = tuple[Fraction, ...]
"""Coefficients of 1, q, q^2, ... with q = 1/z."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Term:
    """One term with a real coefficient: coefficient x signal[lag].

    Parameters
    ----------
    signal : str
        Name of an input or of a signal of the list.
    lag : int
        Age in samples, at least 0; a signal of this or a later equation needs at least 1.
    coefficient : float
        In units of the equation's signal per unit of the read signal; exactly +1 or -1 when the
        term has no word, or a power of two when `word` is None. [unit per unit]
    word : str or None
        Name of the coefficient; None for a term that costs no multiplication.
    group : str or None
        Terms of one group are stored with the same number of fraction bits.

    Notes
    -----
    The house's one description of a controller (DEVELOPERS.md).
    """

    signal: str
    lag: int = 0
    coefficient: float = 1.0
    word: str | None = None
    group: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Equation:
    """One difference equation with real coefficients.

    Parameters
    ----------
    name : str
        The signal it makes, a C identifier.
    meaning : str
        What the signal is, for people; goes into the emitted table.
    unit : str
        "count" or "code". [-]
    terms : tuple of Term
        Summed in this order.
    constant : float
        A constant term. [unit of the signal]
    held : str or None
        Name of a constant term that only reset writes.
    carry : bool
        The rounding residue is carried to the next sample.
    wide : bool
        The signal is as wide as a sum, not as a word.
    limit : tuple of float or None
        (low, high) where the equation has a limit of its own. [unit of the signal]
    span : float
        Magnitude the signal must be able to take without being cut. [unit of the signal]
    reach : float
        Magnitude it cannot exceed while the inputs stay in range; a word-wide signal that feeds
        itself is limited there, or at the range of its word. 0 where no limit is wanted.
        [unit of the signal]
    cut : tuple of (str, float) or None
        The signal may be limited at this factor times the named signal's limit without any
        effect on that signal. [unit per unit]
    finer : tuple of (str, int) or None
        A sum-wide signal has the fraction bits of the named signal and these more.
    spare_bits : int
        Bits of the word that the signal must leave free, for differences of it.
    settles : str
        What the signal is after a reset: "zero", "position", "output" or "rest" (the value at
        which the list returns the output that was asked for).
    frac_bits : int or None
        Fraction bits where the design fixes them; None leaves the choice to `words`.

    Notes
    -----
    The house's one description of a controller (DEVELOPERS.md).
    """

    name: str
    meaning: str
    unit: str
    terms: tuple[Term, ...]
    constant: float = 0.0
    held: str | None = None
    carry: bool = False
    wide: bool = False
    limit: tuple[float, float] | None = None
    span: float = 0.0
    reach: float = 0.0
    cut: tuple[str, float] | None = None
    finer: tuple[str, int] | None = None
    spare_bits: int = 0
    settles: str = "zero"
    frac_bits: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Equations:
    """A whole controller with real coefficients.

    Parameters
    ----------
    inputs : tuple of str
        Names of what the caller passes in, raw, in C argument order.
    update : tuple of Equation
        Evaluated in this order once a sample.
    output : str
        The signal that is returned.

    Notes
    -----
    The house's one description of a controller (DEVELOPERS.md).
    """

    inputs: tuple[str, ...]
    update: tuple[Equation, ...]
    output: str


@dataclass(frozen=True, slots=True, kw_only=True)
class WordTerm:
    """One term of a word equation: (word or sign) x signal[lag] x 2^lift.

    Parameters
    ----------
    signal : str
        Name of an input or of a signal.
    lag : int
        Age in samples, at least 0.
    word : int or None
        The stored integer; None for a term without a multiplication.
    sign : int
        +1, or -1 for a term without a word that is subtracted; +1 when there is a word.
    lift : int
        Exact left shift in sum width, at least 0.
    name : str or None
        Name of the word.
    word_frac_bits : int
        Fraction bits of the word; without one the power of two that the term is divided by, 0 for
        a plain signal.

    Notes
    -----
    word_frac_bits + fraction bits of the signal + lift = fraction bits of the sum.
    """

    signal: str
    lag: int = 0
    word: int | None = None
    sign: int = 1
    lift: int = 0
    name: str | None = None
    word_frac_bits: int = 0

    @property
    def factor(self) -> int:
        """What the signal's integer is multiplied by in the sum, lift included.

        Notes
        -----
        Definition of the term.
        """
        return (self.sign if self.word is None else self.word) << self.lift


@dataclass(frozen=True, slots=True, kw_only=True)
class WordEquation:
    """One difference equation on integers; see the head of this file for its arithmetic.

    Parameters
    ----------
    name, meaning, unit : str
        As in `Equation`.
    terms : tuple of WordTerm
        Summed in this order after constant, held and rest.
    constant : int
        Constant term in sum units; the rounding constant is not in it.
    held : str or None
        State word of sum width that only reset writes, added without lift.
    held_range : tuple of int
        (low, high) of the held word; (0, 0) without one.
    rest : str or None
        State word of sum width that keeps the residue.
    shift : int
        Bits dropped by the rounding, at least 0.
    frac_bits : int
        Fraction bits of the signal.
    wide : bool
        Sum-wide signal; else word-wide.
    limit : tuple of int or None
        (low, high).
    low, high : int
        Range of the signal for every input and every state in the ranges of the stored words.
    sum_low, sum_high : int
        Range of every partial sum in the order of the list, rounding constant included.

    Notes
    -----
    Ranges are interval bounds, exact integers (own derivation: sums of extreme products).
    """

    name: str
    meaning: str
    unit: str
    terms: tuple[WordTerm, ...]
    constant: int = 0
    held: str | None = None
    held_range: tuple[int, int] = (0, 0)
    rest: str | None = None
    shift: int = 0
    frac_bits: int = 0
    wide: bool = False
    limit: tuple[int, int] | None = None
    low: int = 0
    high: int = 0
    sum_low: int = 0
    sum_high: int = 0

    @property
    def sum_frac_bits(self) -> int:
        """Fraction bits of the sum.

        Notes
        -----
        shift = fraction bits of the sum - fraction bits of the signal.
        """
        return self.frac_bits + self.shift

    @property
    def rounding(self) -> int:
        """The rounding constant: half a step, 0 where nothing is dropped.

        Notes
        -----
        To nearest, ties toward plus infinity.
        """
        return 1 << (self.shift - 1) if self.shift else 0

    @property
    def rest_range(self) -> tuple[int, int]:
        """Range of the residue; (0, 0) where none is carried.

        Notes
        -----
        rest = sum - 2^shift floor(sum/2^shift + 1/2), always within half a step.
        """
        if self.rest is None or self.shift == 0:
            return (0, 0)
        return (-self.rounding, self.rounding - 1)


@dataclass(frozen=True, slots=True, kw_only=True)
class StateWord:
    """One word of the caller's state.

    Parameters
    ----------
    name : str
        Field name in C.
    wide : bool
        Sum-wide; else word-wide.
    low, high : int
        Range it can take.
    signal : str or None
        The signal whose earlier value it is; None for a held word or a residue.
    lag : int
        Its age; 0 for a held word, a residue, or a signal kept for a question after the update.
    after_reset : str or None
        Name of the reset signal that initialises it; None for zero.
    meaning : str
        What it is, for people.

    Notes
    -----
    The house's one description of a controller (DEVELOPERS.md).
    """

    name: str
    wide: bool
    low: int
    high: int
    signal: str | None
    lag: int
    after_reset: str | None
    meaning: str


@dataclass(frozen=True, slots=True, kw_only=True)
class WordController:
    """A whole controller on integers: what is checked, proven, emitted and flashed.

    Parameters
    ----------
    name : str
        Name of the loop, a C identifier.
    word_bits, sum_bits : int
        16 and 32, or 32 and 64.
    inputs : tuple of str
        Arguments of the update in C order: "reference", "position", "added".
    update : tuple of WordEquation
        Evaluated in this order once a sample.
    output : str
        Signal returned by the update.
    excess : str
        Signal that is positive when the returned code was cut down, negative when it was cut up,
        0 when it was not limited; kept in the state.
    reset : tuple of WordEquation
        On the inputs "position" and "output"; give the state after a reset.
    resting : tuple of WordEquation
        On the input "position"; its last signal is the code that holds the plant there.
    state : tuple of StateWord
        In the order of the emitted struct.

    Notes
    -----
    The house's one description of a controller (DEVELOPERS.md).
    """

    name: str
    word_bits: int
    sum_bits: int
    inputs: tuple[str, ...]
    update: tuple[WordEquation, ...]
    output: str
    excess: str
    reset: tuple[WordEquation, ...]
    resting: tuple[WordEquation, ...]
    state: tuple[StateWord, ...] = field(default=())

    def equation(self, name: str) -> WordEquation:
        """The update equation that makes the signal of this name.

        Parameters
        ----------
        name : str
            Name of a signal of the update list.

        Returns
        -------
        WordEquation
            Its equation.

        Raises
        ------
        KeyError
            If no equation makes it.

        Notes
        -----
        Look-up only.
        """
        for equation in self.update:
            if equation.name == name:
                return equation
        raise KeyError(name)


@dataclass(frozen=True, slots=True, kw_only=True)
class ControllerTransfer:
    """Transfer functions of a controller: output = reference(z) r - position(z) y, one denominator.

    Parameters
    ----------
    reference, position, denominator : tuple of Fraction
        Exact coefficients of z^n ... z^0, all of length n + 1, denominator monic. Nothing is
        cancelled between them. [code per count]

    Notes
    -----
    The linear part of the list, limits and roundings left out.
    """

    reference: Polynomial
    position: Polynomial
    denominator: Polynomial

    def in_delta(self) -> DeltaTransfer:
        """The same in falling powers of delta = z - 1, rounded once to doubles.

        Returns
        -------
        DeltaTransfer
            Coefficients in delta.

        Notes
        -----
        The shift z = 1 + delta is exact in rationals (Horner); only its result is rounded, so that
        poles near z = 1 lose nothing at high sample rates.
        """
        return DeltaTransfer(
            reference=_shifted(self.reference),
            position=_shifted(self.position),
            denominator=_shifted(self.denominator),
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class DeltaTransfer:
    """Controller in delta = z - 1, falling powers, doubles correctly rounded.

    Parameters
    ----------
    reference, position, denominator : array of float, shape (n + 1,)
        Coefficients of delta^n ... delta^0; denominator monic. [code per count]

    Notes
    -----
    See `ControllerTransfer.in_delta`.
    """

    reference: NDArray[np.float64]
    position: NDArray[np.float64]
    denominator: NDArray[np.float64]


def _shifted(coefficients: Polynomial) -> NDArray[np.float64]:
    row = list(coefficients)
    n = len(row)
    for i in range(n - 1):
        for j in range(1, n - i):
            row[j] += row[j - 1]
    return np.array([float(c) for c in row])


# --- polynomials in q = 1/z, exact --------------------------------------------------------------

_ZERO: Polynomial = ()
_ONE: Polynomial = (Fraction(1),)


def _trim(p: list[Fraction]) -> Polynomial:
    while p and p[-1] == 0:
        p.pop()
    return tuple(p)


def _add(a: Polynomial, b: Polynomial) -> Polynomial:
    if len(a) < len(b):
        a, b = b, a
    out = list(a)
    for i, c in enumerate(b):
        out[i] += c
    return _trim(out)


def _mul(a: Polynomial, b: Polynomial) -> Polynomial:
    if not a or not b:
        return _ZERO
    out = [Fraction(0)] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        if x:
            for j, y in enumerate(b):
                out[i + j] += x * y
    return _trim(out)


def _neg(a: Polynomial) -> Polynomial:
    return tuple(-c for c in a)


def _exact_quotient(a: Polynomial, b: Polynomial) -> Polynomial:
    """a / b in powers of q; b(0) is not 0 and the division is known to leave nothing."""
    if not a:
        return _ZERO
    rest = list(a)
    out = []
    for i in range(len(a) - len(b) + 1):
        c = rest[i] / b[0]
        out.append(c)
        if c:
            for j, y in enumerate(b):
                rest[i + j] -= c * y
    if any(rest[len(out) :]) or any(rest[: len(out)]):
        raise ArithmeticError("the quotient leaves a remainder")
    return _trim(out)


_Form = dict[str, Polynomial]


def _accumulate(target: _Form, key: str, p: Polynomial) -> None:
    total = _add(target.get(key, _ZERO), p)
    if total:
        target[key] = total
    else:
        target.pop(key, None)


def _linear_part(
    equations: Iterable[tuple[str, Iterable[tuple[str, int, Fraction]]]], inputs: tuple[str, ...]
) -> tuple[dict[str, _Form], dict[str, _Form]]:
    """Each signal as a combination of inputs and of signals read before they are made."""
    forms: dict[str, _Form] = {}
    known: dict[str, _Form] = {name: {name: _ONE} for name in inputs}
    names = []
    for name, terms in equations:
        names.append(name)
        form: _Form = {}
        for signal, lag, coefficient in terms:
            q = tuple([Fraction(0)] * lag + [coefficient])
            for key, p in known.get(signal, {signal: _ONE}).items():
                _accumulate(form, key, _mul(q, p))
        forms[name] = form
        known[name] = form
    loose = {key for form in forms.values() for key in form if key not in inputs}
    return forms, {name: forms[name] for name in names if name in loose}


def _substitute(form: _Form, key: str, value: _Form) -> _Form:
    p = form.get(key)
    if p is None:
        return form
    out = {k: v for k, v in form.items() if k != key}
    for k, v in value.items():
        _accumulate(out, k, _mul(p, v))
    return out


def _solve(
    equations: list[tuple[str, list[tuple[str, int, Fraction]]]],
    inputs: tuple[str, ...],
    output: str,
) -> tuple[dict[str, Polynomial], Polynomial]:
    """Numerators per input and the denominator, as polynomials in q, of one signal."""
    forms, loose = _linear_part(equations, inputs)
    result = forms[output]
    # Signals that are read before they are made and do not feed themselves: substitution is exact.
    changed = True
    while changed:
        changed = False
        for key, form in list(loose.items()):
            if key not in form:
                del loose[key]
                loose = {k: _substitute(f, key, form) for k, f in loose.items()}
                result = _substitute(result, key, form)
                changed = True
                break
    # What is left feeds itself: (I - P) s = B x, by elimination without fractions (Bareiss), so
    # that the denominator is the determinant itself and nothing is cancelled.
    keys = [k for k in loose if _reaches(result, loose, k)]
    n = len(keys)
    matrix: list[list[Polynomial]] = [
        [
            _add(_ONE if i == j else _ZERO, _neg(loose[keys[i]].get(keys[j], _ZERO)))
            for j in range(n)
        ]
        + [loose[keys[i]].get(x, _ZERO) for x in inputs]
        for i in range(n)
    ]
    previous = _ONE
    for k in range(n):
        for i in range(n):
            if i == k:
                continue
            for j in range(n + len(inputs)):
                if j == k:
                    continue
                value = _add(
                    _mul(matrix[k][k], matrix[i][j]), _neg(_mul(matrix[i][k], matrix[k][j]))
                )
                matrix[i][j] = _exact_quotient(value, previous)
            matrix[i][k] = _ZERO
        previous = matrix[k][k]
    denominator = previous
    numerators: dict[str, Polynomial] = {}
    for column, x in enumerate(inputs):
        total = _mul(result.get(x, _ZERO), denominator)
        for i, key in enumerate(keys):
            total = _add(total, _mul(result.get(key, _ZERO), matrix[i][n + column]))
        numerators[x] = total
    return numerators, denominator


def _reaches(result: _Form, loose: Mapping[str, _Form], key: str) -> bool:
    seen: set[str] = set()
    front = [k for k in result if k in loose]
    while front:
        k = front.pop()
        if k == key:
            return True
        if k not in seen:
            seen.add(k)
            front.extend(j for j in loose[k] if j in loose)
    return False


def _as_transfer(numerators: dict[str, Polynomial], denominator: Polynomial) -> ControllerTransfer:
    reference = numerators.get("reference", _ZERO)
    position = _neg(numerators.get("position", _ZERO))
    lead = denominator[0]
    n = max(len(reference), len(position), len(denominator))

    def padded(p: Polynomial) -> Polynomial:
        return tuple((p[i] / lead if i < len(p) else Fraction(0)) for i in range(n))

    return ControllerTransfer(
        reference=padded(reference), position=padded(position), denominator=padded(denominator)
    )


def transfer(controller: Equations | WordController) -> ControllerTransfer:
    """Exact transfer functions of the list's linear part, from raw counts to raw codes.

    Parameters
    ----------
    controller : Equations or WordController
        Real coefficients are taken as the exact binary fractions that the doubles are.

    Returns
    -------
    ControllerTransfer
        Falling powers of z. [code per count]

    Notes
    -----
    Limits, roundings, constants and residues are left out; the term that back-calculates the
    integral vanishes by itself. Rational elimination without fractions (Bareiss 1968, Math. Comp.
    22, from memory).
    """
    if isinstance(controller, Equations):
        rows = [
            (e.name, [(t.signal, t.lag, Fraction(t.coefficient)) for t in e.terms])
            for e in controller.update
        ]
    else:
        bits = dict.fromkeys(controller.inputs, 0)
        bits.update({e.name: e.frac_bits for e in controller.update})
        rows = [
            (
                e.name,
                [
                    (t.signal, t.lag, _scaled(t.factor, bits[t.signal] - e.sum_frac_bits))
                    for t in e.terms
                ],
            )
            for e in controller.update
        ]
    numerators, denominator = _solve(rows, controller.inputs, controller.output)
    return _as_transfer(numerators, denominator)


def _scaled(value: int, exponent: int) -> Fraction:
    return Fraction(value << exponent) if exponent >= 0 else Fraction(value, 1 << -exponent)


# --- ranges ------------------------------------------------------------------------------------


def partial_sum_range(
    equation: WordEquation, ranges: Mapping[str, tuple[int, int]]
) -> tuple[tuple[int, int], tuple[int, int]]:
    """Interval of the whole sum and of all its partial sums, for every input and stored state.

    Parameters
    ----------
    equation : WordEquation
        The equation; its own ``low``, ``high``, ``sum_low`` and ``sum_high`` are not read.
    ranges : mapping of str to (int, int)
        Range of every signal it reads, whatever the lag.

    Returns
    -------
    tuple of (int, int)
        Range of the sum without the rounding constant.
    tuple of (int, int)
        Smallest and largest partial sum in the order of the list, once starting from 0 and once
        from the rounding constant, each product and each lifted value by itself included.

    Notes
    -----
    Exact integers. Own derivation: the extreme of a sum of independent terms is the sum of the
    extremes. The rounding constant may be added first or last: both orders are covered.
    """
    low = high = equation.constant
    least, most = min(0, low), max(0, high)
    parts: list[tuple[int, int]] = [equation.held_range, equation.rest_range]
    for term in equation.terms:
        a, b = ranges[term.signal]
        x, y = a * term.factor, b * term.factor
        parts.append((min(x, y), max(x, y)))
    for a, b in parts:
        low, high = low + a, high + b
        least, most = min(least, low, a), max(most, high, b)
    return (low, high), (least, most + equation.rounding)


def signal_range(equation: WordEquation, sum_range: tuple[int, int]) -> tuple[int, int]:
    """Range of the signal from the range of its sum.

    Parameters
    ----------
    equation : WordEquation
        Gives shift and limit.
    sum_range : tuple of int
        (low, high) of the sum without the rounding constant.

    Returns
    -------
    tuple of int
        (low, high) of the signal.

    Notes
    -----
    Rounding and limiting are monotonic.
    """
    low = (sum_range[0] + equation.rounding) >> equation.shift
    high = (sum_range[1] + equation.rounding) >> equation.shift
    if equation.limit is not None:
        low = min(max(low, equation.limit[0]), equation.limit[1])
        high = min(max(high, equation.limit[0]), equation.limit[1])
    return low, high


def verify_ranges(controller: WordController) -> None:
    """Recompute every range of the controller from nothing but its words, and compare.

    Parameters
    ----------
    controller : WordController
        The controller.

    Raises
    ------
    OutOfRangeError
        If a sum, a signal, a word or a state word does not fit its type, if the formats of a term
        do not add up, or if a stored range is narrower than the recomputed one.

    Notes
    -----
    The box of stored words is inductive: every state in it and every input lead back into it.
    """
    word_range = type_range(controller.word_bits)
    states = {s.name: s for s in controller.state}

    def run(
        equations: tuple[WordEquation, ...], inputs: tuple[str, ...]
    ) -> dict[str, tuple[int, int]]:
        ranges = dict.fromkeys(inputs, word_range)
        bits = dict.fromkeys(inputs, 0)
        # lagged reads see any value in the stored range
        for e in equations:
            ranges[e.name] = (e.low, e.high)
            bits[e.name] = e.frac_bits
        for e in equations:
            for t in e.terms:
                if t.word_frac_bits + bits[t.signal] + t.lift != e.sum_frac_bits:
                    _refuse(f"{e.name}: term {t.name or t.signal}", 0, "formats do not add up")
                if t.word is not None:
                    if not word_range[0] <= t.word <= word_range[1]:
                        _refuse(f"{e.name}: word {t.name}", t.word, "does not fit a word")
                    read = next((x for x in equations if x.name == t.signal), None)
                    if read is not None and read.wide:
                        _refuse(f"{e.name}: {t.signal}", 0, "a product reads a sum-wide signal")
            whole, partial = partial_sum_range(e, ranges)
            limit = type_range(controller.sum_bits)
            if partial[0] < limit[0] or partial[1] > limit[1]:
                _refuse(f"{e.name}: sum", max(-partial[0], partial[1]), "a partial sum overflows")
            if partial[0] < e.sum_low or partial[1] > e.sum_high:
                _refuse(f"{e.name}: sum", max(-partial[0], partial[1]), "exceeds its stated range")
            low, high = signal_range(e, whole)
            if low < e.low or high > e.high:
                _refuse(e.name, max(-low, high), "leaves its stated range")
            width = type_range(controller.sum_bits if e.wide else controller.word_bits)
            if e.low < width[0] or e.high > width[1]:
                _refuse(e.name, max(-e.low, e.high), "does not fit its type")
        return ranges

    ranges = run(controller.update, controller.inputs)
    after_reset = run(controller.reset, ("position", "output"))
    run(controller.resting, ("position",))
    for state in states.values():
        if state.signal is not None:
            low, high = ranges[state.signal]
            if low < state.low or high > state.high:
                _refuse(state.name, max(-low, high), "leaves its stored range")
        if state.after_reset is not None:
            low, high = after_reset[state.after_reset]
            if low < state.low or high > state.high:
                _refuse(state.name, max(-low, high), "reset leaves its stored range")
    for e in controller.update:
        if e.held is not None:
            held = states[e.held]
            if (held.low, held.high) != e.held_range:
                _refuse(e.held, held.high, "stored range differs from the range in its equation")


def _refuse(name: str, value: int, rule: str) -> None:
    raise OutOfRangeError(name, float(value), "", rule, "this is a defect of the word equations")


def type_range(bits: int) -> tuple[int, int]:
    """Least and most of a signed type.

    Parameters
    ----------
    bits : int
        Width of the type. [bit]

    Returns
    -------
    tuple of int
        (-2^(bits-1), 2^(bits-1) - 1).

    Notes
    -----
    Two's complement, as the exact-width types of C99 7.18.1.1 are.
    """
    return -(1 << (bits - 1)), (1 << (bits - 1)) - 1


# --- storing -----------------------------------------------------------------------------------


def to_plain(controller: WordController) -> dict[str, Any]:
    """The controller as plain lists, strings and integers, for JSON.

    Parameters
    ----------
    controller : WordController
        The controller.

    Returns
    -------
    dict
        What `from_plain` reads back.

    Notes
    -----
    Integers beyond 2^53 are written as decimal strings, so that any JSON reader keeps them whole.
    """

    def whole(value: int) -> int | str:
        return value if abs(value) < 1 << 53 else str(value)

    def pair(value: tuple[int, int] | None) -> list[int | str] | None:
        return None if value is None else [whole(value[0]), whole(value[1])]

    def term(t: WordTerm) -> dict[str, Any]:
        return {
            "signal": t.signal,
            "lag": t.lag,
            "word": t.word,
            "sign": t.sign,
            "lift": t.lift,
            "name": t.name,
            "word_frac_bits": t.word_frac_bits,
        }

    def equation(e: WordEquation) -> dict[str, Any]:
        return {
            "name": e.name,
            "meaning": e.meaning,
            "unit": e.unit,
            "terms": [term(t) for t in e.terms],
            "constant": whole(e.constant),
            "held": e.held,
            "held_range": pair(e.held_range),
            "rest": e.rest,
            "shift": e.shift,
            "frac_bits": e.frac_bits,
            "wide": e.wide,
            "limit": pair(e.limit),
            "range": pair((e.low, e.high)),
            "sum_range": pair((e.sum_low, e.sum_high)),
        }

    return {
        "name": controller.name,
        "word_bits": controller.word_bits,
        "sum_bits": controller.sum_bits,
        "inputs": list(controller.inputs),
        "update": [equation(e) for e in controller.update],
        "output": controller.output,
        "excess": controller.excess,
        "reset": [equation(e) for e in controller.reset],
        "resting": [equation(e) for e in controller.resting],
        "state": [
            {
                "name": s.name,
                "wide": s.wide,
                "range": pair((s.low, s.high)),
                "signal": s.signal,
                "lag": s.lag,
                "after_reset": s.after_reset,
                "meaning": s.meaning,
            }
            for s in controller.state
        ],
    }


def from_plain(data: Mapping[str, Any]) -> WordController:
    """Read back what `to_plain` wrote, and verify every range again.

    Parameters
    ----------
    data : mapping
        Plain data.

    Returns
    -------
    WordController
        The controller.

    Raises
    ------
    OutOfRangeError
        If a range does not hold.
    KeyError, TypeError, ValueError
        If the data does not have the shape that `to_plain` writes.

    Notes
    -----
    Ranges are not believed: see `verify_ranges`.
    """

    def pair(value: Any) -> tuple[int, int]:
        return int(value[0]), int(value[1])

    def term(d: Mapping[str, Any]) -> WordTerm:
        return WordTerm(
            signal=str(d["signal"]),
            lag=int(d["lag"]),
            word=None if d["word"] is None else int(d["word"]),
            sign=int(d["sign"]),
            lift=int(d["lift"]),
            name=d["name"],
            word_frac_bits=int(d["word_frac_bits"]),
        )

    def equation(d: Mapping[str, Any]) -> WordEquation:
        low, high = pair(d["range"])
        sum_low, sum_high = pair(d["sum_range"])
        return WordEquation(
            name=str(d["name"]),
            meaning=str(d["meaning"]),
            unit=str(d["unit"]),
            terms=tuple(term(t) for t in d["terms"]),
            constant=int(d["constant"]),
            held=d["held"],
            held_range=pair(d["held_range"]),
            rest=d["rest"],
            shift=int(d["shift"]),
            frac_bits=int(d["frac_bits"]),
            wide=bool(d["wide"]),
            limit=None if d["limit"] is None else pair(d["limit"]),
            low=low,
            high=high,
            sum_low=sum_low,
            sum_high=sum_high,
        )

    controller = WordController(
        name=str(data["name"]),
        word_bits=int(data["word_bits"]),
        sum_bits=int(data["sum_bits"]),
        inputs=tuple(str(x) for x in data["inputs"]),
        update=tuple(equation(e) for e in data["update"]),
        output=str(data["output"]),
        excess=str(data["excess"]),
        reset=tuple(equation(e) for e in data["reset"]),
        resting=tuple(equation(e) for e in data["resting"]),
        state=tuple(
            StateWord(
                name=str(s["name"]),
                wide=bool(s["wide"]),
                low=pair(s["range"])[0],
                high=pair(s["range"])[1],
                signal=s["signal"],
                lag=int(s["lag"]),
                after_reset=s["after_reset"],
                meaning=str(s["meaning"]),
            )
            for s in data["state"]
        ),
    )
    verify_ranges(controller)
    return controller
