"""The code generator: the words of a controller to C text.

Rules of this file:

- The words are read, never computed: every number in the emitted controller stands in the
  `WordController`. Python prepares a view of strings and integers, templates lay it out.
- All files are rendered before the first is written; same input, same bytes.
- Stored words for the self-check come from the integer simulation, whoever chose the inputs.
- This module does not know laws, plants or loop files; what people want to read beside the code
  comes as text in `EmitFacts`.
"""

from __future__ import annotations

import math
import os
import re
import textwrap
import unicodedata
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import jinja2
from jinja2 import nodes
from jinja2.ext import Extension
from jinja2.parser import Parser

from plant2.equations import (
    StateWord,
    WordController,
    WordEquation,
    WordTerm,
    partial_sum_range,
    signal_range,
    verify_ranges,
)
from plant2.errors import OutOfRangeError, Plant2Error
from plant2.simulate import IntegerController

LINE = 100
"""Longest line of an emitted file. [characters]"""


@dataclass(frozen=True, slots=True, kw_only=True)
class EmitFacts:
    """What people want to read beside the code; the code does not depend on it.

    Parameters
    ----------
    about : str
        What the loop moves.
    position_unit, code_unit : str
        Size of one step, such as "20 nm per count" and "0.73 mA per code".
    sample_rate, delay : str
        With their units.
    law : str
        The law, with the gains as designed.
    sha256 : str
        Of the loop file; empty when there is none.
    options : tuple of str
        What was asked for beside the loop file; no paths.
    marks : tuple of str
        One line for every requirement that is not met; they head every file.
    cautions : tuple of str
        Sentences for the header.

    Notes
    -----
    Free text; it is made fit for a C comment here.
    """

    about: str
    position_unit: str
    code_unit: str
    sample_rate: str
    delay: str
    law: str
    sha256: str
    options: tuple[str, ...] = ()
    marks: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordedStep:
    """A step of the closed loop, as it was simulated.

    Parameters
    ----------
    position, output : int
        What reset was called with. [count, code]
    references, positions : tuple of int
        What every update was called with. [count]
    codes : tuple of int
        What every update returned. [code]

    Notes
    -----
    All three of one length, one entry a sample.
    """

    position: int
    output: int
    references: tuple[int, ...]
    positions: tuple[int, ...]
    codes: tuple[int, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class SelfcheckRow:
    """One entry of the self-check.

    Parameters
    ----------
    ask : str
        "from_state": the state becomes stored state number `words[0]`; "same_state": it must be
        equal to it; "reset": called with position and output; "update", "update_added": called
        with reference, position, added; "resting_output": called with position.
    words : tuple of int
        Three words, unused ones 0.
    times : int
        How often it is called; what the last call gives is compared.
    expected : int
        The code that the call must return.
    limited : int
        What the question after the limit must return then.

    Notes
    -----
    Words come from the integer simulation.
    """

    ask: str
    words: tuple[int, int, int]
    times: int = 1
    expected: int = 0
    limited: int = 0


@dataclass(frozen=True, slots=True, kw_only=True)
class SelfcheckVectors:
    """Stored words that the emitted self-check replays.

    Parameters
    ----------
    sections : tuple of (str, tuple of SelfcheckRow)
        Title and entries.
    states : tuple of tuple of int
        Stored states, words in the order of the controller's state.
    unreached : tuple of str
        Roundings and limits that no entry exercises, each with the reason.

    Notes
    -----
    Entries are counted from 1 over all sections, as the self-check returns them.
    """

    sections: tuple[tuple[str, tuple[SelfcheckRow, ...]], ...]
    states: tuple[tuple[int, ...], ...]
    unreached: tuple[str, ...] = ()

    @property
    def rows(self) -> tuple[SelfcheckRow, ...]:
        """All entries in order.

        Notes
        -----
        Sections joined.
        """
        return tuple(row for _, rows in self.sections for row in rows)


# --- numbers and names in C ----------------------------------------------------------------------


def c_literal(value: int, *, bits: int) -> str:
    """The integer as a C constant expression of at most this many bits.

    Parameters
    ----------
    value : int
        The integer.
    bits : int
        Width of the signed type that it is used in: 16, 32 or 64.

    Returns
    -------
    str
        Decimal; the least value of the type, which has no literal of its own, as a difference.

    Raises
    ------
    OutOfRangeError
        If the value does not fit the type.

    Notes
    -----
    C99 6.4.4.1: a decimal constant without suffix takes the first of int, long, long long that
    holds it, so a magnitude below 2^(bits-1) needs no suffix whatever the width of int.
    """
    half = 1 << (bits - 1)
    if not -half <= value < half:
        raise OutOfRangeError(
            "constant",
            float(value),
            "",
            f"does not fit int{bits}_t",
            "this is a defect of the word equations",
        )
    return f"({value + 1} - 1)" if value == -half else str(value)


_C_WORDS = frozenset(
    """auto break case char const continue default do double else enum extern float for goto if
    inline int long register restrict return short signed sizeof static struct switch typedef union
    unsigned void volatile while _Bool _Complex _Imaginary alignas alignof and and_eq asm atomic
    bitand bitor bool catch class co_await co_return co_yield compl concept const_cast consteval
    constexpr constinit decltype delete dynamic_cast explicit export false friend mutable namespace
    new noexcept not not_eq nullptr operator or or_eq private protected public reinterpret_cast
    requires static_assert static_cast template this thread_local throw true try typeid typename
    using virtual wchar_t xor xor_eq""".split()
)
"""Keywords of C99 and of C++: the header is read by both."""


def _require(condition: bool, name: str, rule: str) -> None:
    if not condition:
        raise OutOfRangeError(name, None, "", rule, "this is a defect of the word equations")


def _identifier(name: str) -> str:
    fits = re.fullmatch(r"[a-z][a-z0-9_]*", name) and name not in _C_WORDS
    _require(bool(fits) and not name.endswith("_t"), name, "is no name for C")
    return name


def comment_text(text: str) -> str:
    """Free text made fit for a C comment.

    Parameters
    ----------
    text : str
        Any text.

    Returns
    -------
    str
        One line without control characters that neither ends nor opens a comment.

    Notes
    -----
    Own rule. Trigraphs are taken apart too; letters beyond ASCII stay, in UTF-8.
    """
    visible = "".join(" " if unicodedata.category(c)[0] in "CZ" else c for c in text)
    for mark, apart in (("*/", "* /"), ("/*", "/ *"), ("??", "? ?"), ("\\", "/")):
        while mark in visible:
            visible = visible.replace(mark, apart)
    return " ".join(visible.split())


def _wrapped(text: str, *, first: str, rest: str) -> str:
    lines = textwrap.wrap(
        comment_text(text),
        width=LINE,
        initial_indent=first,
        subsequent_indent=rest,
        break_long_words=False,
        break_on_hyphens=False,
    )
    return "\n".join(lines) if lines else first.rstrip()


# --- the view: what the templates lay out --------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class _Term:
    minus: bool
    factor: str
    operand: str
    cast: bool
    power: int | None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Constant:
    name: str
    word: int
    comment: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _Step:
    name: str
    comments: tuple[str, ...]
    wide: bool
    copy: bool
    terms: tuple[_Term, ...]
    constant: int
    shift: int
    rounding: int
    power: int
    rest: str
    low: int | None
    high: int | None
    reason: str
    unread: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class _Store:
    field: str
    value: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _Body:
    constants: tuple[_Constant, ...]
    steps: tuple[_Step, ...]
    unread: tuple[str, ...]
    stores: tuple[_Store, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Member:
    name: str
    wide: bool
    comment: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _StoredWord:
    name: str
    word: int
    frac_bits: int
    comment: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _Input:
    name: str
    low: int
    high: int
    unit: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _Row:
    ask: str
    times: int
    words: tuple[int, int, int]
    expected: int
    limited: int


@dataclass(frozen=True, slots=True, kw_only=True)
class _Section:
    title: str
    first: int
    rows: tuple[_Row, ...]


_INPUT_UNITS = {"reference": "count", "position": "count", "added": "code", "output": "code"}


def _power_text(frac_bits: int) -> str:
    return f"2^{-frac_bits}" if frac_bits else "1"


def _real(value: Fraction) -> str:
    whole = value.numerator // value.denominator
    return str(whole) if value == whole else repr(float(value))


class _Names:
    """Units, widths and fraction bits of everything a list can read; refuses double names."""

    def __init__(
        self, controller: WordController, equations: Sequence[WordEquation], inputs: Sequence[str]
    ) -> None:
        self.controller = controller
        self.unit = {name: _INPUT_UNITS[name] for name in inputs}
        self.frac_bits = dict.fromkeys(inputs, 0)
        self.wide = dict.fromkeys(inputs, False)
        for e in equations:
            _require(e.name not in self.unit, e.name, "is made twice")
            self.unit[e.name], self.frac_bits[e.name] = e.unit, e.frac_bits
            self.wide[e.name] = e.wide
        self.words: dict[str, tuple[int, int]] = {}
        taken = {"state", *inputs}
        for e in equations:
            local = {e.name, f"{e.name}_sum", f"{e.name}_wide"}
            local |= {e.rest} if e.rest is not None else set()
            for name in local:
                _require(name not in taken, _identifier(name), "is used for two things")
                taken.add(name)
            for t in e.terms:
                if t.word is None:
                    continue
                _require(t.name is not None, e.name, "has a coefficient without a name")
                known = self.words.setdefault(str(t.name), (t.word, t.word_frac_bits))
                _require(known == (t.word, t.word_frac_bits), str(t.name), "is two different words")
        for name in self.words:
            _require(name not in taken, _identifier(name), "is used for two things")

    def past(self, signal: str, lag: int) -> str:
        """The state word that holds the signal of this age when an update begins."""
        fields = {(s.signal, s.lag): s.name for s in self.controller.state}
        name = fields.get((signal, lag))
        if name is None and lag == 1:
            # A word kept for a question after the update holds the last sample's value, too.
            name = fields.get((signal, 0))
        _require(name is not None, f"{signal}[{lag}]", "is read but not kept in the state")
        return f"state->{name}"

    def coefficient_text(self, t: WordTerm, unit: str) -> str:
        """Scale and value of a coefficient, for people."""
        _require(t.word is not None, str(t.name), "is no coefficient")
        value = _real(Fraction(t.word or 0, 1 << t.word_frac_bits))
        over = self.unit[t.signal]
        per = "" if over == unit else f" {unit} per {over}"
        return f"{value}{per}, one step is {_power_text(t.word_frac_bits)}{per}"


def _equation_text(e: WordEquation, names: _Names) -> str:
    """The equation in real numbers, for people."""
    parts: list[str] = []

    def add(text: str, minus: bool) -> None:
        if parts:
            parts.append(f"{'-' if minus else '+'} {text}")
        else:
            parts.append(f"{'-' if minus else ''}{text}")

    if e.constant:
        add(_real(abs(Fraction(e.constant, 1 << e.sum_frac_bits))), e.constant < 0)
    for name in (e.held, e.rest):
        if name is not None:
            add(name, False)
    for t in e.terms:
        signal = t.signal + (f"[{t.lag}]" if t.lag else "")
        if t.word is not None:
            add(f"{t.name} {signal}", False)
            continue
        shift = t.lift + names.frac_bits[t.signal] - e.sum_frac_bits
        size = Fraction(1 << max(shift, 0), 1 << max(-shift, 0))
        add(signal if size == 1 else f"{size} {signal}", t.sign < 0)
    text = " ".join(parts) if parts else "0"
    if e.shift:
        text = f"rounded({text})"
    if e.limit is not None:
        text = f"limited({text})"
    return f"{e.name} = {text}"


def _sum_text(e: WordEquation, sum_bits: int) -> str:
    needed = max((-e.sum_low - 1).bit_length(), e.sum_high.bit_length(), 0)
    spare = sum_bits - 1 - needed
    return (
        f"every partial sum lies in {e.sum_low} .. {e.sum_high}, "
        f"{spare} of {sum_bits - 1} bits to spare"
    )


def _is_copy(e: WordEquation, names: _Names) -> bool:
    """A word-wide signal passed on as it is, limit aside."""
    if e.wide or e.shift or e.constant or e.held or e.rest or len(e.terms) != 1:
        return False
    t = e.terms[0]
    return t.factor == 1 and t.word is None and not names.wide[t.signal]


def _step(e: WordEquation, names: _Names, *, read: set[str]) -> _Step:
    controller = names.controller
    terms = []
    for name in (e.held, e.rest):
        if name is not None:
            terms.append(
                _Term(minus=False, factor="", operand=f"state->{name}", cast=False, power=None)
            )
    for t in e.terms:
        terms.append(
            _Term(
                minus=t.word is None and t.sign < 0,
                factor=str(t.name) if t.word is not None else "",
                operand=t.signal if t.lag == 0 else names.past(t.signal, t.lag),
                cast=not names.wide[t.signal],
                power=1 << t.lift if t.lift else None,
            )
        )
    copy = _is_copy(e, names)
    own_bits = controller.word_bits if copy else controller.sum_bits
    least, most = -(1 << (own_bits - 1)), (1 << (own_bits - 1)) - 1
    low, high = e.limit if e.limit is not None else (None, None)
    comments = [f"{e.name}: {e.meaning}, {e.low} .. {e.high}, one step is {_unit(e)}"]
    if not copy:
        comments += [_equation_text(e, names), _sum_text(e, controller.sum_bits)]
    return _Step(
        name=e.name,
        comments=tuple(comments),
        wide=e.wide,
        copy=copy,
        terms=tuple(terms),
        constant=e.constant,
        shift=e.shift,
        rounding=e.rounding,
        power=1 << e.shift,
        rest=e.rest or "",
        # A limit at the end of the type cannot act, and a compiler would say so.
        low=None if low is None or low <= least else low,
        high=None if high is None or high >= most else high,
        reason=("within its limit" if e.limit is not None else f"proven: {e.low} .. {e.high}"),
        unread=e.name not in read,
    )


def _unit(e: WordEquation) -> str:
    return f"{_power_text(e.frac_bits)} {e.unit}"


def _body(
    names: _Names,
    equations: tuple[WordEquation, ...],
    inputs: tuple[str, ...],
    stores: tuple[_Store, ...],
    returned: str | None,
) -> _Body:
    lagless = {t.signal for e in equations for t in e.terms if t.lag == 0}
    read = lagless | {s.value for s in stores} | ({returned} if returned else set())
    units = {
        t.name: (t, e.unit) for e in reversed(equations) for t in e.terms if t.word is not None
    }
    constants = tuple(
        _Constant(name=name, word=word, comment=f"{name}: {names.coefficient_text(*units[name])}")
        for name, (word, _) in names.words.items()
    )
    return _Body(
        constants=constants,
        steps=tuple(_step(e, names, read=read) for e in equations),
        unread=tuple(name for name in inputs if name not in read),
        stores=stores,
    )


def _update_stores(controller: WordController) -> tuple[_Store, ...]:
    """Assignments at the end of an update, the oldest of a signal first."""
    stores = []
    made = {e.name for e in controller.update} | set(controller.inputs)
    rests = [e.rest for e in controller.update if e.rest is not None]
    fields = {(s.signal, s.lag): s.name for s in controller.state if s.signal is not None}
    for s in sorted(controller.state, key=lambda s: -s.lag):
        if s.signal is None:
            if s.name in rests:
                stores.append(_Store(field=s.name, value=s.name))
            continue
        _require(s.signal in made, s.name, "keeps a signal that is not made")
        if s.lag <= 1:
            stores.append(_Store(field=s.name, value=s.signal))
            continue
        younger = fields.get((s.signal, s.lag - 1))
        _require(younger is not None, s.name, "has no younger word before it")
        stores.append(_Store(field=s.name, value=f"state->{younger}"))
    kept = {s.name for s in controller.state}
    for e in controller.update:
        for name in (e.rest, e.held):
            _require(name is None or name in kept, str(name), "is not kept in the state")
    return tuple(stores)


def _reset_stores(controller: WordController) -> tuple[_Store, ...]:
    made = {e.name for e in controller.reset}
    for s in controller.state:
        _require(s.after_reset is None or s.after_reset in made, s.name, "starts from nothing")
    return tuple(_Store(field=s.name, value=s.after_reset or "0") for s in controller.state)


def _member(s: StateWord, controller: WordController) -> _Member:
    scale = {e.name: _unit(e) for e in controller.update}
    for e in controller.update:
        for name in (e.held, e.rest):
            if name is not None:
                scale[name] = f"{_power_text(e.sum_frac_bits)} {e.unit}"
    scale.update({name: f"1 {_INPUT_UNITS[name]}" for name in controller.inputs})
    key = s.name if s.signal is None else s.signal
    _require(key in scale, s.name, "belongs to no equation")
    return _Member(
        name=_identifier(s.name),
        wide=s.wide,
        comment=f"{s.meaning}; {s.low} .. {s.high}, one step is {scale[key]}",
    )


def _kept_excess(controller: WordController) -> str:
    """The state word that holds the last update's excess."""
    fields = {(s.signal, s.lag): s.name for s in controller.state}
    name = fields.get((controller.excess, 0), fields.get((controller.excess, 1)))
    _require(name is not None, controller.excess, "is not kept in the state")
    return str(name)


def _inputs(controller: WordController) -> tuple[_Input, ...]:
    """How far each input acts, as the caller counts it; beyond that it acts as if clipped."""
    half = 1 << (controller.word_bits - 1)
    found = []
    for name in controller.inputs:
        low, high = -half, half - 1
        readers = [(e, t) for e in controller.update for t in e.terms if t.signal == name]
        if len(readers) == 1:
            e, t = readers[0]
            if len(e.terms) == 1 and abs(t.factor) == 1 and not e.shift and e.limit is not None:
                # signal = constant + input or constant - input
                ends = [t.factor * (end - e.constant) for end in e.limit]
                low, high = max(low, min(ends)), min(high, max(ends))
        found.append(_Input(name=name, low=low, high=high, unit=_INPUT_UNITS[name]))
    return tuple(found)


def _table(controller: WordController) -> tuple[str, ...]:
    """Name, scale and range of every signal of the update, in columns."""
    rows = [
        (e.name, _unit(e), f"{e.low} .. {e.high}", "sum" if e.wide else "word")
        for e in controller.update
    ]
    head = ("signal", "one step", "range", "width")
    widths = [max(len(row[i]) for row in [head, *rows]) for i in range(3)]
    return tuple(
        "  ".join([*(row[i].ljust(widths[i]) for i in range(3)), row[3]]) for row in [head, *rows]
    )


def _stored_words(controller: WordController) -> tuple[_StoredWord, ...]:
    lists = (
        (controller.update, controller.inputs),
        (controller.reset, ("position", "output")),
        (controller.resting, ("position",)),
    )
    found: dict[str, _StoredWord] = {}
    for equations, inputs in lists:
        names = _Names(controller, equations, inputs)
        for e in equations:
            for t in e.terms:
                if t.word is None:
                    continue
                lag = f"[{t.lag}]" if t.lag else ""
                text = f"{names.coefficient_text(t, e.unit)}; on {t.signal}{lag} in {e.name}"
                word = _StoredWord(
                    name=str(t.name), word=t.word, frac_bits=t.word_frac_bits, comment=text
                )
                known = found.setdefault(word.name, word)
                _require(
                    (known.word, known.frac_bits) == (word.word, word.frac_bits),
                    word.name,
                    "is two different words",
                )
    return tuple(found.values())


# --- templates -----------------------------------------------------------------------------------


class _RequireTag(Extension):
    """``{% require condition, "message" %}`` stops a rendering that would print wrong C."""

    tags = {"require"}

    def parse(self, parser: Parser) -> nodes.Node:
        line = next(parser.stream).lineno
        condition = parser.parse_expression()
        parser.stream.expect("comma")
        message = parser.parse_expression()
        return nodes.ExprStmt(self.call_method("_check", [condition, message])).set_lineno(line)

    def _check(self, condition: object, message: str) -> None:
        _require(bool(condition), "template", message)


def _template_folder() -> Path:
    """Inside the package when it is installed, beside it in a checkout."""
    package = Path(__file__).resolve().parent
    inside = package / "templates"
    return inside if inside.is_dir() else package.parent / "templates"


def _environment(controller: WordController) -> jinja2.Environment:
    def literal(bits: int) -> Callable[[int], str]:
        return lambda value: c_literal(value, bits=bits)

    def shift_literal(value: int) -> str:
        _require(1 <= value < controller.sum_bits, "shift", "drops no bit or all of them")
        return str(value)

    def lines(text: str, indent: int = 0) -> str:
        """A paragraph inside a block comment."""
        start = " " * indent + " * "
        return _wrapped(text, first=start, rest=start)

    def item(text: str, indent: int = 0) -> str:
        start = " " * indent + " * "
        return _wrapped(text, first=start + "  - ", rest=start + "    ")

    def remark(text: str, indent: int = 0) -> str:
        """A comment of its own, on as many lines as it needs."""
        start = " " * indent
        one = f"{start}/* {comment_text(text)} */"
        if len(one) <= LINE:
            return one
        body = _wrapped(text, first=f"{start} * ", rest=f"{start} * ")
        return f"{start}/*\n{body}\n{start} */"

    def remarks(texts: Sequence[str], indent: int = 0) -> str:
        """One comment of several paragraphs."""
        if len(texts) == 1:
            return remark(texts[0], indent)
        start = " " * indent
        body = "\n".join(lines(text, indent) for text in texts)
        return f"{start}/*\n{body}\n{start} */"

    def statement(lines: str, start: str) -> str:
        """``start = lines;``, short sums on one line, long ones a term on each."""
        pieces = lines.strip("\n").split("\n")
        one = f"    {start} = {' '.join(pieces)};"
        if len(pieces) <= 2 and len(one) <= LINE:
            return one
        head = f"    {start} = {pieces[0]}"
        if len(head) >= LINE:
            head = f"    {start} =\n        {pieces[0]}"
        return "\n        ".join([head, *pieces[1:]]) + ";"

    def beside(code: str, text: str) -> str:
        """A line of code with a remark behind it, or above it where the line grows too long."""
        one = f"{code} /* {comment_text(text)} */"
        indent = len(code) - len(code.lstrip())
        return one if len(one) <= LINE else f"{remark(text, indent)}\n{code}"

    def initialiser(words: Sequence[str], indent: int) -> str:
        """A braced list of literals on as many lines as it needs."""
        start = " " * indent
        body = "{" + ", ".join(words) + "},"
        return textwrap.fill(
            body,
            width=LINE,
            initial_indent=start,
            subsequent_indent=start + "    ",
            break_long_words=False,
            break_on_hyphens=False,
        )

    def tight(text: str) -> str:
        return text.rstrip("\n")

    def columns(text: str) -> str:
        """Text in columns: the spaces between them stay."""
        _require(comment_text(text) == " ".join(text.split()), "table", "is no plain text")
        return text

    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_template_folder()),
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        autoescape=False,
        extensions=[_RequireTag],
    )
    environment.filters.update(
        word_literal=literal(controller.word_bits),
        sum_literal=literal(controller.sum_bits),
        int_literal=literal(16),
        shift_literal=shift_literal,
        name=_identifier,
        lines=lines,
        item=item,
        remark=remark,
        remarks=remarks,
        beside=beside,
        statement=statement,
        initialiser=initialiser,
        tight=tight,
        columns=columns,
        text=comment_text,
    )
    return environment


def render(
    controller: WordController, facts: EmitFacts, vectors: SelfcheckVectors, check_json: str
) -> dict[str, str]:
    """All files of one controller as text, none written.

    Parameters
    ----------
    controller : WordController
        What is emitted.
    facts : EmitFacts
        What people read beside it.
    vectors : SelfcheckVectors
        What the self-check replays.
    check_json : str
        The evidence, passed through.

    Returns
    -------
    dict of str to str
        File name to text, in the order header, source, words, self-check, evidence.

    Raises
    ------
    OutOfRangeError
        If a number does not fit its C type, a name is none, the lists do not fit together, or a
        range does not hold.

    Notes
    -----
    C99 as described in DEVELOPERS.md; nothing here depends on the day or the machine.
    """
    _require(
        controller.inputs == ("reference", "position", "added"), "inputs", "are not the usual three"
    )
    _require(
        (controller.word_bits, controller.sum_bits) in {(16, 32), (32, 64)},
        "widths",
        "are neither 16 and 32 nor 32 and 64",
    )
    name = _identifier(controller.name)
    update = _Names(controller, controller.update, controller.inputs)
    reset = _Names(controller, controller.reset, ("position", "output"))
    resting = _Names(controller, controller.resting, ("position",))
    _require(not update.wide[controller.output], controller.output, "is not a word")
    _require(bool(controller.resting), "resting", "has no equation")
    held = controller.resting[-1]
    _require(not held.wide, held.name, "is not a word")
    _require(
        len({s.name for s in controller.state}) == len(controller.state),
        "state",
        "has a name twice",
    )
    by_lists = (controller.update, controller.reset, controller.resting)
    number = 1
    sections = []
    for title, rows in vectors.sections:
        shown = tuple(
            _Row(
                ask=row.ask,
                times=row.times,
                words=row.words,
                expected=row.expected,
                limited=row.limited,
            )
            for row in rows
        )
        sections.append(_Section(title=title, first=number, rows=shown))
        number += len(rows)
    view: dict[str, Any] = {
        "name": name,
        "guard": name.upper(),
        "facts": facts,
        "word_type": f"int{controller.word_bits}_t",
        "sum_type": f"int{controller.sum_bits}_t",
        "inputs": _inputs(controller),
        "members": tuple(_member(s, controller) for s in controller.state),
        "table": _table(controller),
        "shifts": any(e.shift for equations in by_lists for e in equations),
        "update": _body(
            update,
            controller.update,
            controller.inputs,
            _update_stores(controller),
            controller.output,
        ),
        "reset": _body(
            reset, controller.reset, ("position", "output"), _reset_stores(controller), None
        ),
        "resting": _body(resting, controller.resting, ("position",), (), held.name),
        "output": controller.output,
        "resting_code": held.name,
        "excess": _kept_excess(controller),
        "words": _stored_words(controller),
        "sections": tuple(sections),
        "states": vectors.states,
        "state_wide": tuple(s.wide for s in controller.state),
        "row_count": number - 1,
    }
    verify_ranges(controller)
    environment = _environment(controller)
    files = {
        f"{name}{ending}": environment.get_template(template).render(view)
        for ending, template in (
            (".h", "controller.h.j2"),
            (".c", "controller.c.j2"),
            ("_words.h", "words.h.j2"),
            ("_selfcheck.c", "selfcheck.c.j2"),
        )
    }
    files[f"{name}_check.json"] = check_json.rstrip("\n") + "\n"
    return files


# --- stored words for the self-check -------------------------------------------------------------


class _Noise:
    """Small integer generator, written out so that its numbers never change.

    Xorshift of 32 bits, shifts 13, 17, 5 (Marsaglia 2003, J. Stat. Software 8(14), from memory).
    """

    def __init__(self, seed: int) -> None:
        self.word = seed

    def bits(self) -> int:
        x = self.word
        x ^= (x << 13) & 0xFFFFFFFF
        x ^= x >> 17
        x ^= (x << 5) & 0xFFFFFFFF
        self.word = x
        return x

    def between(self, low: int, high: int) -> int:
        draw = (self.bits() << 32) | self.bits()
        return low + draw % (high - low + 1)

    def near_middle(self, low: int, high: int) -> int:
        """Between low and high, all magnitudes about 0 (or the nearest to it) equally at home."""
        middle = min(max(0, low), high)
        far = self.between(low, high) - middle
        shift = self.between(0, max(abs(low), abs(high), 1).bit_length())
        return middle + (far >> shift if far >= 0 else -(-far >> shift))


@dataclass(frozen=True, slots=True, kw_only=True)
class _Pass:
    """One pass through a list: the sums, the values before their limits, all that remains."""

    sums: Mapping[str, int]
    before: Mapping[str, int]
    after: Mapping[str, int]


class _Searcher:
    """Finds inputs and states in which one rounding ties or one limit acts.

    It walks through the equations by itself only to search; the words that are stored come from
    the integer simulation.
    """

    def __init__(
        self,
        controller: WordController,
        equations: tuple[WordEquation, ...],
        inputs: Mapping[str, tuple[int, int]],
        *,
        stored: bool,
        noise: _Noise,
    ) -> None:
        self.equations, self.inputs, self.noise = equations, inputs, noise
        self.state = controller.state if stored else ()
        self.word = {(s.signal, s.lag): s.name for s in self.state if s.signal is not None}
        self.ranges = dict(inputs) | {s.name: (s.low, s.high) for s in self.state}
        half = 1 << (controller.word_bits - 1)
        self.type_range = (-half, half - 1)

    def past(self, signal: str, lag: int) -> str:
        return self.word.get((signal, lag)) or self.word[signal, 0]

    def run(
        self,
        point: Mapping[str, int],
        *,
        rounding: Mapping[str, int] | None = None,
        limit: Mapping[str, tuple[int, int]] | None = None,
        instead: WordEquation | None = None,
    ) -> _Pass:
        """One pass; `rounding` and `limit` add to the constants of the equation they name."""
        rounding, limit = rounding or {}, limit or {}
        sums: dict[str, int] = {}
        before: dict[str, int] = {}
        value: dict[str, int] = {}
        after: dict[str, int] = {}
        for stated in self.equations:
            e = instead if instead is not None and instead.name == stated.name else stated
            total = e.constant
            for name in (e.held, e.rest):
                total += point[name] if name is not None else 0
            for t in e.terms:
                if t.lag:
                    total += t.factor * point[self.past(t.signal, t.lag)]
                else:
                    total += t.factor * (value[t.signal] if t.signal in value else point[t.signal])
            sums[e.name] = total
            v = (total + e.rounding + rounding.get(e.name, 0)) >> e.shift
            if e.rest is not None:
                after[e.rest] = total - (v << e.shift)
            before[e.name] = v
            if e.limit is not None:
                less, more = limit.get(e.name, (0, 0))
                v = min(max(v, e.limit[0] + less), e.limit[1] + more)
            value[e.name] = v
        if self.state:
            for s in self.state:
                if s.signal is not None and s.lag <= 1:
                    after[s.name] = value.get(s.signal, point.get(s.signal, 0))
        else:
            after.update(value)
        return _Pass(sums=sums, before=before, after=after | {"": value[self.equations[-1].name]})

    def draw(self) -> dict[str, int]:
        """A point of the box: every input and every stored word."""
        return {name: self.noise.near_middle(*pair) for name, pair in self.ranges.items()}

    def edge(self, e: WordEquation, below: bool) -> tuple[dict[str, int] | None, int]:
        """A point where the sum just reaches the next value after rounding, or just misses it.

        Returns it with the distance of the sum, rounding constant added, to that multiple of
        2^shift: 0 is an exact tie. Sums of an equation may all be multiples of a power of two, so
        that the nearest ones to a tie are further off than 1. A point is taken only where the
        value next to it can be told from outside, and rather where every coefficient of the
        equation that is one off would be seen. Where no point of the nearest kind is found, the
        nearest of all that were tried is.
        """
        modulus = 1 << e.shift
        grain = modulus
        for factor in [t.factor for t in e.terms] + [1 for n in (e.held, e.rest) if n is not None]:
            grain = math.gcd(grain, factor)
        offset = (e.constant + e.rounding) % grain - (grain if below else 0)
        sizes = {name: max(-low, high) for name, (low, high) in self.ranges.items()}
        sizes |= {x.name: max(-x.low, x.high) for x in self.equations}
        # No coefficient that is one off changes the sum by more.
        reach = min([modulus, *(sizes[t.signal] << t.lift for t in e.terms if t.word is not None)])
        best: tuple[bool, int, dict[str, int]] | None = None
        few = self.every()
        for number, point in enumerate(few or (self.draw() for _ in range(60))):
            candidates = [point]
            if not few:
                # Where every point is tried there is nothing to solve.
                moves = self.moves(e, point)
                candidates += self.solved_by_one(e, point, offset, moves)
                if number >= 4:
                    candidates += self.solved_by_two(e, point, offset, moves, below)
            for candidate in candidates:
                past = (self.run(candidate).sums[e.name] + e.rounding) % modulus
                distance = past - modulus if below else past
                if best is not None and not best[0] and abs(distance) >= best[1]:
                    continue
                weak = abs(distance) >= reach or abs(distance) >= self.least_effect(e, candidate)
                if best is not None and (weak, abs(distance)) >= best[:2]:
                    continue
                seen = self.shown(e, candidate, -distance if below else -distance - 1)
                if seen is None:
                    continue
                best = (weak, abs(distance), seen)
                if not weak and distance == offset:
                    return seen, distance
        return (None, 0) if best is None else (best[2], -best[1] if below else best[1])

    def shown(self, e: WordEquation, point: dict[str, int], nudge: int) -> dict[str, int] | None:
        """The point, or one with the same remainder, where the next value can be told from outside.

        What the value changes may be rounded away later in the list: then that later sum is moved
        to its own edge, in steps that keep the remainder of the first.
        """

        def visible(p: dict[str, int]) -> bool:
            return self.run(p, rounding={e.name: nudge}).after != self.run(p).after

        if visible(point):
            return point
        here, moved = self.run(point), self.run(point, rounding={e.name: nudge})
        for later in self.equations:
            effect = moved.sums[later.name] - here.sums[later.name]
            if later.name == e.name or not later.shift or not effect:
                continue
            modulus = 1 << later.shift
            past = (here.sums[later.name] + later.rounding) % modulus
            # Where the effect takes the sum over a multiple of the modulus.
            window = 0 if effect < 0 else modulus - effect
            for name, step, slope in self.moves(e, point):
                keep = step * ((1 << e.shift) // math.gcd(slope, 1 << e.shift))
                if not self.within(name, point[name] + keep):
                    continue
                turn = self.run({**point, name: point[name] + keep}).sums[later.name]
                turn -= here.sums[later.name]
                for goal in (window - past, window - past - modulus, window - past + modulus):
                    for count in {goal // turn, -(-goal // turn)} if turn else ():
                        other = {**point, name: point[name] + keep * count}
                        same = self.within(name, other[name]) and not (
                            (self.run(other).sums[e.name] - here.sums[e.name]) % (1 << e.shift)
                        )
                        if same and visible(other):
                            return other
        return None

    def within(self, name: str, value: int) -> bool:
        low, high = self.ranges[name]
        return low <= value <= high

    def moves(self, e: WordEquation, point: Mapping[str, int]) -> list[tuple[str, int, int]]:
        """Words that move the sum: name, step and what a step adds to the sum, near the point.

        Steps are 1 and 2^shift of the roundings, which pass through them without a remainder.
        """
        start = self.run(point).sums[e.name]
        found = []
        for step in sorted({1} | {1 << x.shift for x in self.equations}):
            for name in self.ranges:
                sign = 1 if self.within(name, point[name] + step) else -1
                if self.within(name, point[name] + sign * step):
                    other = {**point, name: point[name] + sign * step}
                    slope = sign * (self.run(other).sums[e.name] - start)
                    if slope:
                        found.append((name, step, slope))
        return found

    def solved(
        self, e: WordEquation, point: dict[str, int], move: tuple[str, int, int], wanted: int
    ) -> Iterator[dict[str, int]]:
        """Points that differ in one word; their sum should be larger by `wanted`, mod 2^shift."""
        name, step, slope = move
        modulus = 1 << e.shift
        common = math.gcd(slope, modulus)
        if wanted % common:
            return
        period = modulus // common
        count = wanted // common * pow(slope // common, -1, period) % period if period > 1 else 0
        for turns in (count, count - period):
            if self.within(name, point[name] + turns * step):
                yield {**point, name: point[name] + turns * step}

    def solved_by_one(
        self,
        e: WordEquation,
        point: dict[str, int],
        offset: int,
        moves: Sequence[tuple[str, int, int]],
    ) -> Iterator[dict[str, int]]:
        """Points that differ from the given one in one word and should meet the remainder."""
        wanted = (offset - e.rounding - self.run(point).sums[e.name]) % (1 << e.shift)
        for move in moves:
            yield from self.solved(e, point, move, wanted)

    def solved_by_two(
        self,
        e: WordEquation,
        point: dict[str, int],
        offset: int,
        moves: Sequence[tuple[str, int, int]],
        below: bool,
    ) -> Iterator[dict[str, int]]:
        """Points that differ in two words: an input comes nearest, another word does the rest."""
        modulus = 1 << e.shift
        wanted = (offset - e.rounding - self.run(point).sums[e.name]) % modulus
        followers = [
            move
            for move in moves
            if (self.ranges[move[0]][1] - self.ranges[move[0]][0]) // move[1]
            >= modulus // math.gcd(move[2], modulus)
        ]
        for follower in sorted(followers, key=lambda move: math.gcd(move[2], modulus))[:1]:
            common = math.gcd(follower[2], modulus)
            for name, step, slope in moves:
                if name == follower[0] or name not in self.inputs:
                    continue
                first = -((point[name] - self.ranges[name][0]) // step)
                last = (self.ranges[name][1] - point[name]) // step
                start = wanted - slope * first
                if below:
                    turn, _ = _nearest_remainder(slope, start, common, last - first)
                else:
                    turn, _ = _nearest_remainder(-slope, -start, common, last - first)
                moved = {**point, name: point[name] + (first + turn) * step}
                # Summed anew: the move may have passed through a rounding on its way.
                left = (offset - e.rounding - self.run(moved).sums[e.name]) % modulus
                left += -(left % common) if below else -left % common
                yield from self.solved(e, moved, follower, left)

    def least_effect(self, e: WordEquation, point: Mapping[str, int]) -> int:
        """What the sum changes at least when one of its coefficients, or a sign, is one off."""
        whole = self.run(point).sums[e.name]
        effects = [1 << e.shift]
        for t in e.terms:
            unit = replace(t, word=None if t.word is None else t.word + 1, sign=-t.sign)
            other = replace(e, terms=tuple(unit if x is t else x for x in e.terms))
            effects.append(abs(self.run(point, instead=other).sums[e.name] - whole))
        return min(effects)

    def every(self) -> list[dict[str, int]]:
        """All points, where there are few."""
        if len(self.ranges) != 1:
            return []
        ((name, (low, high)),) = self.ranges.items()
        return [{name: v} for v in range(low, high + 1)] if high - low < 1 << 14 else []

    def tells(self, e: WordEquation, upper: bool, off: int, point: Mapping[str, int]) -> bool:
        """Whether the limit acts here and one that is `off` by a count can be told from it."""
        assert e.limit is not None
        here = self.run(point)
        beyond = here.before[e.name] - e.limit[1] if upper else e.limit[0] - here.before[e.name]
        moved = self.run(point, limit={e.name: (0, off) if upper else (off, 0)})
        return beyond >= 1 and moved.after != here.after

    def active(self, e: WordEquation, upper: bool, off: int) -> dict[str, int] | None:
        """A point that tells the limit from one that is `off` by a count."""
        sign = 1 if upper else -1
        for _ in range(40):
            point = self.draw()
            if self.tells(e, upper, off, point):
                return point
            for name, pair in self.ranges.items():
                start = self.run(point).before[e.name]
                for end in self.type_range if name in self.inputs else pair:
                    moved = {**point, name: end}
                    if sign * (self.run(moved).before[e.name] - start) > 0:
                        if self.tells(e, upper, off, moved):
                            return moved
                        point = moved
                        break
        return None


def _first_hit(a: int, modulus: int, low: int, high: int) -> int | None:
    """Least x >= 0 with low <= a x mod modulus <= high; None where there is none.

    Own derivation, as Euclid's algorithm: no multiple of a between low and high leaves a smaller
    problem modulo a.
    """
    if low == 0:
        return 0
    a %= modulus
    if 2 * a > modulus:
        a, low, high = modulus - a, modulus - high, modulus - low
    if a == 0:
        return None
    x = -(-low // a)
    if a * x <= high:
        return x
    y = _first_hit(-modulus % a, a, low % a, high % a)
    return None if y is None else -(-(low + modulus * y) // a)


def _nearest_remainder(slope: int, start: int, modulus: int, last: int) -> tuple[int, int]:
    """x from 0 to last with the least (start - slope x) mod modulus, and that remainder."""
    low, high = -1, start % modulus
    best = (0, high)
    while high - low > 1:
        middle = (low + high) // 2
        # 0 <= start - slope x <= middle, as a window of slope x.
        window = (start - middle) % modulus, start % modulus
        if window[0] <= window[1]:
            x = _first_hit(slope, modulus, *window)
        else:
            x = 0
        if x is None or x > last:
            low = middle
        else:
            high = (start - slope * x) % modulus
            best = (x, high)
    return best


def _can_act(e: WordEquation, ranges: Mapping[str, tuple[int, int]], upper: bool) -> bool:
    assert e.limit is not None
    whole, _ = partial_sum_range(e, ranges)
    low, high = signal_range(replace(e, limit=None), whole)
    return high > e.limit[1] if upper else low < e.limit[0]


@dataclass(slots=True, frozen=True, kw_only=True)
class _Recorder:
    """Calls the integer simulation and notes what it answers."""

    controller: WordController
    machine: IntegerController
    sections: list[tuple[str, list[SelfcheckRow]]] = field(default_factory=list)
    states: list[tuple[int, ...]] = field(default_factory=list)

    def section(self, title: str) -> None:
        self.sections.append((title, []))

    def row(self, ask: str, words: tuple[int, int, int], **more: int) -> None:
        self.sections[-1][1].append(SelfcheckRow(ask=ask, words=words, **more))

    def reset(self, position: int, output: int) -> None:
        self.machine.reset(position, output)
        self.row("reset", (position, output, 0))

    def update(
        self, reference: int, position: int, added: int | None = None, *, times: int = 1
    ) -> int:
        code = 0
        for _ in range(times):
            code = self.machine.update(reference, position, 0 if added is None else added)
        ask = "update" if added is None else "update_added"
        words = (reference, position, 0 if added is None else added)
        self.row(ask, words, times=times, expected=code, limited=self.machine.limited())
        return code

    def resting_output(self, position: int) -> None:
        code = self.machine.resting_output(position)
        self.row("resting_output", (position, 0, 0), expected=code)

    def stored(self, words: tuple[int, ...]) -> int:
        if words not in self.states:
            self.states.append(words)
        return self.states.index(words)

    def from_state(self, words: Mapping[str, int]) -> None:
        self.machine.state.update({s.name: words[s.name] for s in self.controller.state})
        number = self.stored(tuple(words[s.name] for s in self.controller.state))
        self.row("from_state", (number, 0, 0))

    def same_state(self) -> None:
        words = self.machine.state
        number = self.stored(tuple(int(words[s.name]) for s in self.controller.state))
        self.row("same_state", (number, 0, 0))


def selfcheck_vectors(
    controller: WordController, *, closed_loop: RecordedStep | None = None
) -> SelfcheckVectors:
    """Directed stimulus for the emitted self-check, and the words it must give.

    Parameters
    ----------
    controller : WordController
        The controller.
    closed_loop : RecordedStep or None
        A step of the loop as simulated; its first 200 samples are replayed.

    Returns
    -------
    SelfcheckVectors
        Rest, extremes of the type, the output limit from both sides, small steps, exact ties of
        every rounding and the sums just below them, every limit from both sides, noise, held
        levels, the closed loop.

    Raises
    ------
    Plant2Error
        If the integer simulation does not return the codes of `closed_loop`.

    Notes
    -----
    Own derivation: at a sum that ties, anything that makes the sum smaller changes the rounded
    value; just below, anything that makes it larger does. Starting states lie in the box that the
    range proof holds for, whether a run from reset leads there or not.
    """
    half = 1 << (controller.word_bits - 1)
    least, most = -half, half - 1
    box = {i.name: (i.low, i.high) for i in _inputs(controller)}
    codes = (
        controller.equation(controller.output).low,
        controller.equation(controller.output).high,
    )
    counts, travel = box["position"], box["reference"]
    middle = (max(counts[0], travel[0]) + min(counts[1], travel[1])) // 2
    mid_code = (codes[0] + codes[1]) // 2
    reach = travel[1] - travel[0]
    noise = _Noise(2463534242)
    notes = _Recorder(controller=controller, machine=IntegerController(controller))
    unreached: list[str] = []

    notes.section("at rest: the code of reset comes back")
    for position in (middle, counts[0], counts[1], middle + reach // 7, least, most):
        for output in (mid_code, codes[0], codes[1], mid_code + (codes[1] - codes[0]) // 5):
            notes.reset(position, output)
            notes.update(position, position, times=3)
        notes.same_state()
    notes.reset(middle, least)
    notes.update(middle, middle)
    notes.reset(middle, most)
    notes.update(middle, middle)
    notes.same_state()

    for name in ("low", "high"):
        # A word that reset forgets keeps what stands here.
        notes.from_state({s.name: getattr(s, name) for s in controller.state})
        notes.reset(middle, mid_code)
        notes.same_state()

    notes.section("one code beyond the limit")
    for output, added in ((codes[0], -1), (codes[1], 1)):
        notes.reset(middle, output)
        notes.update(middle, middle, added)
        notes.update(middle, middle, -added)
    notes.same_state()

    notes.section("code that holds a position")
    for position in (least, counts[0] - 1, counts[0], middle - 1, middle, middle + 1, 1, counts[1]):
        notes.resting_output(max(position, least))
    notes.resting_output(most)
    notes.resting_output(middle - reach // 5)
    notes.resting_output(middle + reach // 3)

    notes.section("extremes of the type")
    notes.reset(middle, mid_code)
    for reference in (least, most):
        for position in (most, least):
            for added in (least, most, 0):
                notes.update(reference, position, added)
    notes.same_state()

    notes.section("the limit from both sides, and back")
    notes.reset(middle, mid_code)
    for reference in (travel[1], middle, travel[0], middle):
        notes.update(reference, middle)
        notes.update(reference, middle, times=20)
        notes.update(middle, reference, times=3)
        notes.update(middle, middle, times=8)
    notes.same_state()

    notes.section("small steps")
    notes.reset(middle, mid_code)
    for change in (1, -1, 2, -3, 0):
        notes.update(middle + change, middle)
        notes.update(middle + change, middle, times=4)
        notes.update(middle, middle + change)
        notes.update(middle, middle + change, times=4)
    notes.same_state()

    notes.section("codes added")
    notes.reset(middle, mid_code)
    for added in (1, -1, 0, 5, (codes[1] - codes[0]) // 4, (codes[0] - codes[1]) // 4):
        notes.update(middle, middle, added, times=2)
    notes.same_state()

    inputs = dict(box)
    _record_ties(notes, noise, inputs, unreached)
    _record_limits(notes, noise, inputs, unreached)

    notes.section("noise over the whole range")
    notes.reset(middle, mid_code)
    for number in range(32):
        reference, position = noise.between(*travel), noise.between(*counts)
        notes.update(reference, position, noise.between(*codes) if number % 4 == 3 else None)
    notes.same_state()

    notes.section("noise of a few counts")
    notes.reset(middle, mid_code)
    for _ in range(24):
        notes.update(middle + noise.between(-3, 3), middle + noise.between(-3, 3))
    notes.same_state()

    notes.section("held levels")
    for change in (reach // 50, -reach // 40, reach // 3, -reach // 3):
        notes.reset(middle, mid_code)
        for times in (5, 45, 250):
            notes.update(middle + change, middle, times=times)
        notes.update(middle, middle + 1, times=100)
        notes.same_state()

    if closed_loop is not None:
        notes.section("the checked step of the closed loop")
        notes.reset(closed_loop.position, closed_loop.output)
        for k, code in enumerate(closed_loop.codes[:200]):
            got = notes.update(closed_loop.references[k], closed_loop.positions[k])
            if got != code:
                raise Plant2Error(
                    f"code at sample {k}",
                    float(got),
                    "",
                    f"the recorded step has {code}",
                    "this is a defect of the simulation",
                )
        notes.same_state()

    return SelfcheckVectors(
        sections=tuple((title, tuple(rows)) for title, rows in notes.sections),
        states=tuple(notes.states),
        unreached=tuple(dict.fromkeys(unreached)),
    )


def _record_ties(
    notes: _Recorder,
    noise: _Noise,
    inputs: Mapping[str, tuple[int, int]],
    unreached: list[str],
) -> None:
    controller = notes.controller
    codes = controller.equation(controller.output)
    start = {"position": inputs["position"], "output": (codes.low, codes.high)}
    held = {"position": inputs["position"]}

    def edges(
        equations: tuple[WordEquation, ...],
        ranges: Mapping[str, tuple[int, int]],
        *,
        stored: bool = False,
    ) -> Iterator[dict[str, int]]:
        search = _Searcher(controller, equations, ranges, stored=stored, noise=noise)
        for e in equations:
            for below in (False, True) * (2 if stored else 1) if e.shift else ():
                point, distance = search.edge(e, below)
                if point is None:
                    unreached.append(f"{e.name}: nothing found that shows its rounding")
                    continue
                if not below and distance:
                    unreached.append(f"{e.name}: no tie found, the nearest sum is {distance} past")
                yield point

    notes.section("exact ties of every rounding, and just below")
    for point in edges(controller.update, inputs, stored=True):
        notes.from_state(point)
        notes.update(point["reference"], point["position"], point["added"])
        notes.same_state()
    for point in edges(controller.reset, start):
        notes.reset(point["position"], point["output"])
        notes.same_state()
    for point in edges(controller.resting, held):
        notes.resting_output(point["position"])


def _record_limits(
    notes: _Recorder,
    noise: _Noise,
    inputs: Mapping[str, tuple[int, int]],
    unreached: list[str],
) -> None:
    controller = notes.controller
    notes.section("every limit from both sides")
    half = 1 << (controller.word_bits - 1)
    ranges = dict.fromkeys(controller.inputs, (-half, half - 1))
    ranges |= {e.name: (e.low, e.high) for e in controller.update}
    search = _Searcher(controller, controller.update, inputs, stored=True, noise=noise)
    for e in controller.update:
        if e.limit is None:
            continue
        for upper in (False, True):
            side = "upper" if upper else "lower"
            if not _can_act(e, ranges, upper):
                unreached.append(f"{e.name}: the {side} limit can never act")
                continue
            point = None
            for off in (1, -1):
                if point is not None and search.tells(e, upper, off, point):
                    continue
                point = search.active(e, upper, off)
                if point is None:
                    unreached.append(f"{e.name}: nothing found that shows the {side} limit")
                    continue
                notes.from_state(point)
                notes.update(point["reference"], point["position"], point["added"])
                notes.same_state()


# --- files ---------------------------------------------------------------------------------------


def write_files(folder: Path, files: Mapping[str, str]) -> None:
    """Write all files, or leave everything as it was.

    Parameters
    ----------
    folder : Path
        Made when it is missing.
    files : mapping of str to str
        File name to text.

    Raises
    ------
    Plant2Error
        If the folder cannot be made or written, or a name in it is taken by a folder.

    Notes
    -----
    Each file is written under a temporary name in the same folder and then renamed, so that nobody
    ever reads half a file; UTF-8, line feeds only. When a later rename fails, the earlier ones are
    taken back.
    """
    made: list[Path] = []
    waiting: dict[Path, Path] = {}
    before: dict[Path, bytes | None] = {}
    try:
        missing = [p for p in (folder, *folder.parents) if not p.exists()]
        for parent in reversed(missing):
            parent.mkdir()
            made.append(parent)
        for name, text in files.items():
            target = folder / name
            if target.is_dir():
                raise IsADirectoryError(21, "Is a directory", str(target))
            temporary = folder / f".{name}.{os.getpid()}.part"
            with temporary.open("xb") as stream:
                waiting[target] = temporary
                stream.write(text.encode("utf-8"))
        for target, temporary in waiting.items():
            old = target.read_bytes() if target.exists() else None
            os.replace(temporary, target)
            before[target] = old
    except BaseException as error:
        _take_back(waiting, before, made)
        if isinstance(error, OSError):
            place = error.filename if isinstance(error, IsADirectoryError) else folder
            reason = (error.strerror or "cannot be written").lower()
            raise Plant2Error(str(place), None, "", reason, "choose another folder") from error
        raise


def _take_back(
    waiting: Mapping[Path, Path], before: Mapping[Path, bytes | None], made: Sequence[Path]
) -> None:
    for target, temporary in waiting.items():
        old = before.get(target)
        try:
            if target not in before:
                temporary.unlink(missing_ok=True)
            elif old is None:
                target.unlink(missing_ok=True)
            else:
                temporary.write_bytes(old)
                os.replace(temporary, target)
        except OSError:
            # The first error is the one to report.
            continue
    for folder in reversed(made):
        try:
            folder.rmdir()
        except OSError:
            continue
