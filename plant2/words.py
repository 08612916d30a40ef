"""From real equations to words: fraction bits, words, lifts, shifts, limits and ranges.

Rules of this file:

- Every format is chosen so that no signal and no partial sum can overflow, for any input in the
  type and any state in the ranges of the stored words; `equations.verify_ranges` recomputes that.
- No gain rounds to zero silently.
- Integers only, once a coefficient has been rounded.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from plant2.design import Gains, Task, controller_equations, no_design, resting_coefficients
from plant2.equations import (
    Equation,
    Equations,
    StateWord,
    Term,
    WordController,
    WordEquation,
    WordTerm,
    partial_sum_range,
    signal_range,
    type_range,
    verify_ranges,
)

Range = tuple[int, int]


@dataclass(frozen=True, slots=True, kw_only=True)
class WordError:
    """How well one word stands for its coefficient.

    Parameters
    ----------
    equation, word : str
        Where it is used, and its name.
    wanted, stored : float
        The real coefficient and the value of the word. [unit per unit]
    step : float
        Value of one unit in the last place. [unit per unit]

    Notes
    -----
    Relative error = stored/wanted - 1.
    """

    equation: str
    word: str
    wanted: float
    stored: float
    step: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Words:
    """A controller in words, and how well the words stand for the coefficients.

    Parameters
    ----------
    controller : WordController
        What is checked, emitted and flashed.
    equations : Equations
        The real equations it was made from.
    errors : tuple of WordError
        One for each word.

    Notes
    -----
    Facts only.
    """

    controller: WordController
    equations: Equations
    errors: tuple[WordError, ...]


@dataclass(slots=True)
class _Format:
    """Format of one signal: fraction bits, and the limit or the range it is known to keep."""

    frac_bits: int
    limit: Range | None
    low: int = 0
    high: int = 0


def _word_formats(equations: Equations, word_bits: int) -> dict[str, _Format]:
    """Fraction bits and limits of every word-wide signal, from spans and reaches."""
    top = (1 << (word_bits - 1)) - 1
    most, wish = (12, 4) if word_bits == 16 else (16, 6)
    formats: dict[str, _Format] = {}
    for e in equations.update:
        if e.wide:
            continue
        room = top >> e.spare_bits
        if e.frac_bits is not None:
            frac = e.frac_bits
        elif e.reach <= 1.0 and e.span <= 1.0:
            continue  # a difference: it takes the format of what it reads
        else:

            def bits_for(size: float, room: int = room) -> int:
                return min(most, math.floor(math.log2(room / max(size, 1.0))))

            frac = bits_for(e.reach)
            if frac < wish:
                # the inputs could drive it further than any use of it: cut it there instead
                frac = max(0, min(wish, bits_for(e.span)))
        limit: Range | None = None
        if e.limit is not None:
            limit = (_ceil_bits(e.limit[0], frac), _floor_bits(e.limit[1], frac))
        elif e.reach > 0.0:
            reach = min(room, math.ceil(e.reach * 2.0**frac) if e.reach < 1e17 else room)
            limit = (-reach, reach)
        formats[e.name] = _Format(frac_bits=frac, limit=limit)
    for e in equations.update:
        if e.cut is None:
            continue
        mine = formats[e.name]
        other = formats[e.cut[0]]
        if mine.limit is not None and other.limit is not None:
            size = other.limit[1] / 2.0**other.frac_bits * e.cut[1] * 2.0**mine.frac_bits
            reach = min(mine.limit[1], math.ceil(size) + 1)
            mine.limit = (-reach, reach)
    for e in equations.update:
        if e.finer is not None:
            frac = formats[e.finer[0]].frac_bits + e.finer[1]
            formats[e.name] = _Format(frac_bits=frac, limit=None)
    return formats


def _floor_bits(value: float, frac: int) -> int:
    return math.floor(value * 2.0**frac)


def _ceil_bits(value: float, frac: int) -> int:
    return math.ceil(value * 2.0**frac)


def _words_of(
    e: Equation,
    sum_frac: int,
    formats: Mapping[str, _Format],
    word_bits: int,
) -> tuple[WordTerm, ...] | None:
    """Terms of an equation for a number of fraction bits of its sum; None where it is too small."""
    top = (1 << (word_bits - 1)) - 1
    bits: dict[str, int] = {}
    for i, t in enumerate(e.terms):
        if t.word is None:
            continue
        size = abs(t.coefficient)
        most = sum_frac - formats[t.signal].frac_bits
        fit = math.floor(math.log2(top + 0.49) - math.log2(size)) if size > 0.0 else most
        fit = min(fit, most)
        while size > 0.0 and abs(round(t.coefficient * 2.0**fit)) > top:
            fit -= 1
        n = min(most, fit)
        if n < 0 and most < 0:
            return None
        if n < 0:
            return None
        key = t.group or f"{i}"
        bits[key] = min(bits.get(key, n), n)
    out = []
    for i, t in enumerate(e.terms):
        own = formats[t.signal].frac_bits
        if t.word is None:
            shift = math.log2(abs(t.coefficient))
            lift = sum_frac - own + round(shift)
            if lift < 0 or shift != round(shift):
                return None
            # the power of two of the coefficient is part of the lift
            out.append(
                WordTerm(
                    signal=t.signal,
                    lag=t.lag,
                    sign=1 if t.coefficient > 0 else -1,
                    lift=lift,
                    word_frac_bits=sum_frac - own - lift,
                )
            )
            continue
        n = bits[t.group or f"{i}"]
        out.append(
            WordTerm(
                signal=t.signal,
                lag=t.lag,
                word=round(t.coefficient * 2.0**n),
                lift=sum_frac - own - n,
                name=t.word,
                word_frac_bits=n,
            )
        )
    return tuple(out)


class _Builder:
    """Turns a list into words, one equation after the other."""

    def __init__(self, equations: Equations, word_bits: int) -> None:
        self.equations = equations
        self.word_bits = word_bits
        self.sum_bits = 2 * word_bits
        self.formats = _word_formats(equations, word_bits)
        for name in equations.inputs:
            low, high = type_range(word_bits)
            self.formats[name] = _Format(frac_bits=0, limit=None, low=low, high=high)
        for f in self.formats.values():
            if f.limit is not None:
                f.low, f.high = f.limit

    def ranges(self, e: Equation) -> dict[str, Range]:
        return {
            t.signal: (self.formats[t.signal].low, self.formats[t.signal].high) for t in e.terms
        }

    def fits(self, equation: WordEquation, ranges: Mapping[str, Range]) -> bool:
        _, partial = partial_sum_range(equation, ranges)
        low, high = type_range(self.sum_bits)
        return partial[0] >= low and partial[1] <= high

    def difference_format(self, e: Equation) -> None:
        """A difference takes the format of what it reads; a signal that is made later is read
        in the format it will have."""
        frac = max(self.formats[t.signal].frac_bits for t in e.terms)
        self.formats[e.name] = _Format(frac_bits=frac, limit=None)

    def integral_format(self, e: Equation) -> None:
        """A sum-wide signal that feeds itself: half of the sum's range for its own limit."""
        if e.limit is None:
            return
        room = self.sum_bits - 2
        frac = room - math.ceil(math.log2(max(e.limit[1], 1.0)))
        self.formats[e.name] = _Format(
            frac_bits=frac,
            limit=(_ceil_bits(e.limit[0], frac), _floor_bits(e.limit[1], frac)),
        )

    def word_equation(
        self, e: Equation, terms: tuple[WordTerm, ...], sum_frac: int, f: _Format, held: Range
    ) -> WordEquation:
        return WordEquation(
            name=e.name,
            meaning=e.meaning,
            unit=e.unit,
            terms=terms,
            constant=round(e.constant * 2.0**sum_frac),
            held=e.held,
            held_range=held,
            rest=f"{e.name}_rest" if e.carry and sum_frac > f.frac_bits else None,
            shift=sum_frac - f.frac_bits,
            frac_bits=f.frac_bits,
            wide=e.wide,
            limit=f.limit,
        )

    def build(self, e: Equation) -> WordEquation:
        if e.name not in self.formats:
            if e.wide and e.limit is not None:
                self.integral_format(e)
            elif e.wide:
                self.formats[e.name] = _Format(frac_bits=e.frac_bits or 0, limit=None)
            else:
                self.difference_format(e)
        f = self.formats[e.name]
        if f.limit is not None:
            f.low, f.high = f.limit
        if e.wide and e.limit is not None:
            return self.integral(e, f)
        ranges = self.ranges(e)
        multiplied = any(t.word is not None for t in e.terms)
        floor = max([f.frac_bits] + [self.formats[t.signal].frac_bits for t in e.terms])
        highest = floor if not multiplied else max(floor, self.most_frac_bits(e))
        for sum_frac in range(highest, f.frac_bits - 1, -1):
            terms = _words_of(e, sum_frac, self.formats, self.word_bits)
            if terms is None:
                continue
            held = self.held_range(e, terms, sum_frac)
            equation = self.word_equation(e, terms, sum_frac, f, held)
            if self.fits(equation, ranges):
                return self.finished(equation, ranges, f)
        raise no_design(
            f"{e.name}: no {self.word_bits}-bit words hold these gains; use word = 32, a coarser "
            "sensor range or a slower target"
        )

    def most_frac_bits(self, e: Equation) -> int:
        """Fraction bits beyond which the sum overflows at once: where the search starts."""
        total = abs(e.constant)
        for t in e.terms:
            f = self.formats[t.signal]
            total += abs(t.coefficient) * max(-f.low, f.high) / 2.0**f.frac_bits
        return self.sum_bits - math.floor(math.log2(max(total, 2.0**-self.sum_bits)))

    def integral(self, e: Equation, f: _Format) -> WordEquation:
        """Sum-wide state: nothing is rounded, fraction bits fall until everything fits."""
        while True:
            terms = _words_of(e, f.frac_bits, self.formats, self.word_bits)
            if terms is not None:
                equation = self.word_equation(e, terms, f.frac_bits, f, (0, 0))
                ranges = self.ranges(e)
                if self.fits(equation, ranges):
                    return self.finished(equation, ranges, f)
            if f.frac_bits <= 0 or e.limit is None:
                raise no_design(
                    f"{e.name}: no {self.sum_bits}-bit sum holds this integral gain; use word = 32"
                )
            f.frac_bits -= 1
            f.limit = (
                _ceil_bits(e.limit[0], f.frac_bits),
                _floor_bits(e.limit[1], f.frac_bits),
            )
            f.low, f.high = f.limit

    def held_range(self, e: Equation, terms: Sequence[WordTerm], sum_frac: int) -> Range:
        """What reset may write into the held word: output limit less the law's own value."""
        if e.held is None:
            return (0, 0)
        limit = next(x for x in self.equations.update if x.name in ("limited_code", "output_code"))
        assert limit.limit is not None
        size = int(limit.limit[1]) << sum_frac
        slope = _at_rest(terms, self.equations)
        low, high = self.formats["position_count"].low, self.formats["position_count"].high
        values = (-slope * low, -slope * high)
        return -size + min(values), size + max(values)

    def finished(
        self, equation: WordEquation, ranges: Mapping[str, Range], f: _Format
    ) -> WordEquation:
        whole, partial = partial_sum_range(equation, ranges)
        low, high = signal_range(equation, whole)
        if equation.limit is not None and equation.name not in ("output_code", "limited_code"):
            # a limit that no input and no state can reach is not written
            free = signal_range(replace(equation, limit=None), whole)
            if free[0] >= equation.limit[0] and free[1] <= equation.limit[1]:
                equation = replace(equation, limit=None)
                low, high = free
        if f.limit is None or equation.limit is None:
            f.low, f.high = low, high
        else:
            # what was promised to earlier readers is the limit itself
            low, high = equation.limit
        width = type_range(self.sum_bits if equation.wide else self.word_bits)
        if low < width[0] or high > width[1]:
            raise no_design(
                f"{equation.name}: its range does not fit {self.word_bits}-bit words; use word = 32"
            )
        return replace(equation, low=low, high=high, sum_low=partial[0], sum_high=partial[1])


def _settles(equations: Equations, name: str) -> str:
    for e in equations.update:
        if e.name == name:
            return e.settles
    return "zero"


def _at_rest(terms: Sequence[WordTerm], equations: Equations) -> int:
    """Factor of the position in a sum when everything stands at one position."""
    return sum(t.factor for t in terms if _settles(equations, t.signal) == "position")


def words_of(task: Task, gains: Gains, word_bits: int) -> Words:
    """Choose formats and words for the gains of a law.

    Parameters
    ----------
    task : Task
        Loop file and plant.
    gains : Gains
        SI gains.
    word_bits : int
        16 (32-bit sums) or 32 (64-bit sums).

    Returns
    -------
    Words
        Controller in words, with its errors.

    Raises
    ------
    DesignError
        If no format holds the gains, or a gain would round to zero.

    Notes
    -----
    For each equation the most fraction bits in the sum for which every partial sum fits, then the
    most bits for each word (own derivation; the bound is the interval bound of
    `equations.partial_sum_range`).
    """
    if min(gains.kp, gains.kd, gains.ki) < 0.0:
        raise no_design("a negative gain is not turned into words")
    equations = controller_equations(task, gains, word_bits)
    builder = _Builder(equations, word_bits)
    for e in equations.update:
        f = builder.formats.get(e.name)
        if e.settles == "output" and e.spare_bits and f is not None and f.limit is not None:
            if task.loop.actuator.limit_code << f.frac_bits > f.limit[1]:
                raise no_design(
                    f"{e.name}: the output's range leaves no room for a notch in {word_bits}-bit "
                    "words; use word = 32, or an actuator of fewer bits"
                )
    # Differences that are read before they are made need their format first.
    for e in equations.update:
        if e.name not in builder.formats and not e.wide:
            known = [t for t in e.terms if t.signal in builder.formats]
            if known:
                frac = max(builder.formats[t.signal].frac_bits for t in known)
                f = _Format(frac_bits=frac, limit=None)
                top = (1 << (word_bits - 1)) - 1
                f.low, f.high = -top - 1, top
                builder.formats[e.name] = f
    update = tuple(builder.build(e) for e in equations.update)
    # Differences read before they were made were assumed to fill the word; now they are known.
    update = _with_known_ranges(update, builder)
    errors = _errors(equations, update)
    resting = _resting(task, builder)
    reset, after = _reset(task, equations, update, builder)
    state = _state(equations, update, after, reset)
    controller = WordController(
        name=task.loop.name,
        word_bits=word_bits,
        sum_bits=2 * word_bits,
        inputs=equations.inputs,
        update=update,
        output=equations.output,
        excess="excess",
        reset=reset,
        resting=resting,
        state=state,
    )
    verify_ranges(controller)
    return Words(controller=controller, equations=equations, errors=errors)


def _with_known_ranges(
    update: tuple[WordEquation, ...], builder: _Builder
) -> tuple[WordEquation, ...]:
    out = []
    for e in update:
        ranges = {
            t.signal: (builder.formats[t.signal].low, builder.formats[t.signal].high)
            for t in e.terms
        }
        _, partial = partial_sum_range(e, ranges)
        out.append(replace(e, sum_low=partial[0], sum_high=partial[1]))
    return tuple(out)


def _errors(equations: Equations, update: tuple[WordEquation, ...]) -> tuple[WordError, ...]:
    out = []
    for real, word in zip(equations.update, update, strict=True):
        for t, w in zip(real.terms, word.terms, strict=True):
            if w.word is None or w.name is None:
                continue
            step = 2.0**-w.word_frac_bits
            if w.word == 0 and t.coefficient != 0.0:
                raise no_design(
                    f"{real.name}: {w.name} = {t.coefficient:.4g} code per count rounds to zero in "
                    f"steps of {step:.4g}; use word = 32, or a sensor with larger counts"
                )
            out.append(
                WordError(
                    equation=real.name,
                    word=w.name,
                    wanted=t.coefficient,
                    stored=w.word * step,
                    step=step,
                )
            )
    return tuple(out)


def _closed_range(equation: WordEquation, ranges: Mapping[str, Range]) -> WordEquation:
    whole, partial = partial_sum_range(equation, ranges)
    low, high = signal_range(equation, whole)
    return replace(equation, low=low, high=high, sum_low=partial[0], sum_high=partial[1])


def _resting(task: Task, builder: _Builder) -> tuple[WordEquation, ...]:
    """Output that holds the plant at a position: one product, one constant, one limit."""
    actuator = task.loop.actuator
    source = next(e for e in builder.equations.update if e.name == "position_count")
    slope, at_zero = resting_coefficients(task)
    limit = float(actuator.limit_code)
    at_zero = min(max(at_zero, -4.0 * limit), 4.0 * limit)
    plain = actuator.polarity == 1 and actuator.zero_code == 0
    name = "resting_code" if plain else "limited_code"
    real = [source]
    terms = () if slope == 0.0 else (Term(signal="position_count", coefficient=slope, word="kh"),)
    real.append(
        Equation(
            name=name,
            meaning="output that holds the plant at rest there",
            unit="code",
            terms=terms,
            constant=at_zero,
            limit=(-limit, limit),
            span=limit,
            frac_bits=0,
        )
    )
    if not plain:
        real.append(
            Equation(
                name="resting_code",
                meaning="the same as the actuator counts it",
                unit="code",
                terms=(Term(signal=name, coefficient=float(actuator.polarity)),),
                constant=float(actuator.zero_code),
                span=limit + abs(actuator.zero_code),
                frac_bits=0,
            )
        )
    part = _Builder(
        Equations(inputs=("position",), update=tuple(real), output="resting_code"),
        builder.word_bits,
    )
    return tuple(part.build(e) for e in real)


def _reset(
    task: Task, equations: Equations, update: tuple[WordEquation, ...], builder: _Builder
) -> tuple[tuple[WordEquation, ...], dict[str, str]]:
    """Equations of a reset, and which of their signals starts which signal of the update."""
    actuator = task.loop.actuator
    words = {e.name: e for e in update}
    position = words["position_count"]
    limit = actuator.limit_code
    whole = type_range(builder.word_bits)
    ranges: dict[str, Range] = {"position": whole, "output": whole}
    rows = [position]
    ranges["position_count"] = (position.low, position.high)
    sign = actuator.polarity
    settled = _closed_range(
        WordEquation(
            name="settled_code",
            meaning="the wanted output from the zero code, within its limit",
            unit="code",
            terms=(WordTerm(signal="output", sign=sign),),
            constant=-sign * actuator.zero_code,
            limit=(-limit, limit),
        ),
        ranges,
    )
    rows.append(settled)
    ranges["settled_code"] = (settled.low, settled.high)
    after: dict[str, str] = {}
    for e in equations.update:
        if e.settles == "position":
            after[e.name] = "position_count"
        elif e.settles == "output":
            frac = words[e.name].frac_bits
            if frac == 0:
                after[e.name] = "settled_code"
                continue
            name = f"settled_in_{frac}_bits"
            if name not in ranges:
                row = _closed_range(
                    WordEquation(
                        name=name,
                        meaning=f"the same with {frac} fraction bits",
                        unit="code",
                        terms=(WordTerm(signal="settled_code", lift=frac),),
                        frac_bits=frac,
                    ),
                    ranges,
                )
                rows.append(row)
                ranges[name] = (row.low, row.high)
            after[e.name] = name
    # the sum that holds the difference between the wanted output and the law
    main = words["demand_code"] if "demand_code" in words else words["unlimited_code"]
    slope = _at_rest(main.terms, equations)
    reads = [t for t in main.terms if _settles(equations, t.signal) == "position"]
    lift = min((t.lift for t in reads), default=0)
    word = slope >> lift
    frac = main.sum_frac_bits - builder.formats["position_count"].frac_bits - lift
    # The two gains share one format, so their difference is a word of that format.
    if word << lift != slope:
        raise no_design("the gains on reference and position are not in one format")
    trailing = 0
    while word and word % 2 == 0 and frac > 0:
        word, frac, trailing = word // 2, frac - 1, trailing + 1
    if main.held is not None:
        terms = [WordTerm(signal="settled_code", lift=main.sum_frac_bits)]
        if word:
            terms.append(
                WordTerm(
                    signal="position_count",
                    word=-word,
                    lift=lift + trailing,
                    name="kp_less_kr",
                    word_frac_bits=frac,
                )
            )
        row = _closed_range(
            WordEquation(
                name=main.held,
                meaning="constant term that makes the law return the wanted output",
                unit="code",
                terms=tuple(terms),
                frac_bits=main.sum_frac_bits,
                wide=True,
            ),
            ranges,
        )
        if row.low < main.held_range[0] or row.high > main.held_range[1]:
            raise no_design(f"{main.held}: leaves the range its sum was sized for")
        rows.append(row)
        after[main.held] = main.held
    else:
        integral = words["integral"]
        sum_frac = max(integral.frac_bits, frac)
        terms = [WordTerm(signal="settled_code", lift=sum_frac)]
        if word:
            terms.append(
                WordTerm(
                    signal="position_count",
                    word=-word,
                    lift=sum_frac - frac,
                    name="kp_less_kr",
                    word_frac_bits=frac,
                )
            )
        row = _closed_range(
            WordEquation(
                name="settled_integral",
                meaning="integral that makes the law return the wanted output",
                unit="code",
                terms=tuple(terms),
                shift=sum_frac - integral.frac_bits,
                frac_bits=integral.frac_bits,
                wide=True,
                limit=integral.limit,
            ),
            ranges,
        )
        rows.append(row)
        after["integral"] = "settled_integral"
    return tuple(rows), after


def _state(
    equations: Equations,
    update: tuple[WordEquation, ...],
    after: Mapping[str, str],
    reset: tuple[WordEquation, ...],
) -> tuple[StateWord, ...]:
    words = {e.name: e for e in update}
    lags: dict[str, int] = {}
    for e in update:
        for t in e.terms:
            if t.lag:
                lags[t.signal] = max(lags.get(t.signal, 0), t.lag)
    out: list[StateWord] = []
    for e in update:
        for lag in range(1, lags.get(e.name, 0) + 1):
            if e.name == "excess":
                continue
            out.append(
                StateWord(
                    name=f"{e.name}_before" + ("" if lag == 1 else str(lag)),
                    wide=e.wide,
                    low=e.low,
                    high=e.high,
                    signal=e.name,
                    lag=lag,
                    after_reset=after.get(e.name),
                    meaning=f"{e.meaning}, {'one sample' if lag == 1 else f'{lag} samples'} ago",
                )
            )
    for e in update:
        if e.rest is not None:
            out.append(
                StateWord(
                    name=e.rest,
                    wide=True,
                    low=e.rest_range[0],
                    high=e.rest_range[1],
                    signal=None,
                    lag=0,
                    after_reset=None,
                    meaning=f"what rounding {e.name} left over",
                )
            )
    for e in update:
        if e.held is not None:
            out.append(
                StateWord(
                    name=e.held,
                    wide=True,
                    low=e.held_range[0],
                    high=e.held_range[1],
                    signal=None,
                    lag=0,
                    after_reset=after.get(e.held),
                    meaning="constant term that only reset writes",
                )
            )
    excess = words["excess"]
    out.append(
        StateWord(
            name="excess",
            wide=False,
            low=excess.low,
            high=excess.high,
            signal="excess",
            lag=1 if "excess" in lags else 0,
            after_reset=None,
            meaning="what the limit took away in the last update",
        )
    )
    return tuple(out)
