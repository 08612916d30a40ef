"""The proof: the emitted C text, read back, is equal to the words.

Rules of this file:

- What is proven is the text that is written to disk, parsed here. Nothing is shared with the code
  generator; `plant2.equations` is all that both know.
- First intervals over the parsed text: no operation overflows, loses bits or is undefined, for an
  ``int`` of 16 and of 32 bits (promotions of C99 6.3.1.1, conversions of 6.3.1.8), from every
  state in the ranges of the stored words and for every value of every input; and every such state
  leads back into these ranges. From then on the text means plain integers.
- Then z3 on these integers: returned code, answer and every state word equal the word equations,
  translated here from the head of `plant2.equations` word by word.
- A statement that is not decided is not proven, and what is not proven is not emitted.
- Whatever the accepted subset of C does not hold is refused, never guessed at.

The accepted subset (docs/proof.md tells it at length):

- Header: one guard, ``stdint.h``, the ``extern "C"`` bracket, ``typedef intN_t NAME_code``, one
  struct of ``intN_t`` members, prototypes. Source: ``#include "NAME.h"`` and functions. No other
  line for the preprocessor, no ``//``, no strings, no names that could be macros.
- Types int16_t, int32_t, int64_t; ``int`` as a result; ``unsigned`` as a parameter that only
  counts shifted places; one parameter ``NAME_state *state``.
- Statements: a local with its initialiser (``static const`` where that is a constant); a state
  word or a local assigned; ``if`` without ``else`` around assignments to locals or around one
  return; ``(void)name``; return.
- Expressions: decimal constants without suffix, names, ``state->member``, casts, unary - and ~,
  + and -, * with a constant on one side, >> of what cannot be negative by a constant, ?: and if
  with one comparison, calls of static functions of the same file defined before.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any

from plant2.equations import (
    StateWord,
    WordController,
    WordEquation,
    partial_sum_range,
    signal_range,
)
from plant2.errors import Plant2Error

INT_BITS = (16, 32)
"""Widths of ``int`` that the text is proven for. [bit]"""

STEPS = (("QF_LIA", 200_000), ("QF_BV", 4_000_000), ("QF_LIA", 3_000_000))
"""Ways to an answer, linear arithmetic and words of bits, and what each may spend, in the solver's
own count of steps, so that the answer does not depend on the machine. Text as it is emitted takes a
few thousand of the first."""

SECONDS_LIMIT = 20
"""A second fence, for steps that take uncommonly long. [s]"""


class ProofError(Plant2Error, ValueError):
    """The text leaves the subset of C that can be proven."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Obligation:
    """One statement that had to be proven.

    Parameters
    ----------
    name : str
        Function and, where there is one, signal or state word.
    what : str
        The statement; what stands against it where it is not proven.
    proven : bool or None
        True; False where a counterexample stands against it; None where it is undecided.

    Notes
    -----
    Own definition.
    """

    name: str
    what: str
    proven: bool | None


@dataclass(frozen=True, slots=True, kw_only=True)
class BoxWord:
    """The range that a state word never leaves, and why it does not.

    Parameters
    ----------
    name : str
        State word.
    low, high : int
        Range in which every call may find it and every call leaves it.
    kept_by : str
        "limit", "range of its sum", "residue", "reset only" or "type of the input".

    Notes
    -----
    Own definition; all of them together are the states that the proof speaks of.
    """

    name: str
    low: int
    high: int
    kept_by: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Counterexample:
    """A call for which text and words differ.

    Parameters
    ----------
    function : str
        "reset", "update_added", "update", "resting_output" or "limited".
    inputs, state : tuple of (str, int)
        Arguments, and state words before the call; no state for a reset or a resting output.
    what : str
        "returned" or the name of the state word that differs.
    words, text : int
        What the word equations give, and what the text gives.

    Notes
    -----
    The integer simulation gives `words`, the compiled text gives `text`.
    """

    function: str
    inputs: tuple[tuple[str, int], ...]
    state: tuple[tuple[str, int], ...]
    what: str
    words: int
    text: int

    def __str__(self) -> str:
        arguments = ", ".join(f"{name} = {value}" for name, value in self.inputs)
        state = ", ".join(f"{name} = {value}" for name, value in self.state)
        call = f"{self.function}({arguments})" + (f" from {state}" if state else "")
        return f"{call}: {self.what} is {self.text} in the text, {self.words} by the words"


@dataclass(frozen=True, slots=True, kw_only=True)
class ProofRecord:
    """What was proven of which texts, and with what.

    Parameters
    ----------
    name : str
        Name of the controller.
    source_sha256, header_sha256 : str
        Of the texts.
    obligations : tuple of Obligation
        In the order of proving; the proof ends at the first part that fails.
    box : tuple of BoxWord
        Ranges of the state words that the proof starts from and shows to be kept.
    int_bits : tuple of int
        Widths of ``int`` covered. [bit]
    solver, solver_version, parser, parser_version : str
        What the proof leans on.
    counterexample : Counterexample or None
        Where one was found.

    Notes
    -----
    Holds no times: the same texts give the same record.
    """

    name: str
    source_sha256: str
    header_sha256: str
    obligations: tuple[Obligation, ...]
    box: tuple[BoxWord, ...]
    int_bits: tuple[int, ...]
    solver: str
    solver_version: str
    parser: str
    parser_version: str
    counterexample: Counterexample | None = None

    @property
    def proven(self) -> bool:
        """Whether every statement is proven.

        Notes
        -----
        An undecided statement is not proven.
        """
        return all(o.proven for o in self.obligations)

    @property
    def first_failure(self) -> str:
        """The first statement that is not proven, for people; empty where all are.

        Notes
        -----
        The counterexample, where there is one, belongs to it.
        """
        for o in self.obligations:
            if not o.proven:
                told = "not proven" if o.proven is None else "false"
                text = f"{o.name}: {o.what}: {told}"
                return text if self.counterexample is None else f"{text}; {self.counterexample}"
        return ""


def as_plain(record: ProofRecord) -> dict[str, Any]:
    """The record as plain lists, strings and integers, for JSON.

    Parameters
    ----------
    record : ProofRecord
        The record.

    Returns
    -------
    dict
        Same record, same data; integers beyond 2^53 are decimal strings, as in the words.

    Notes
    -----
    Own format.
    """

    def whole(value: int) -> int | str:
        return value if abs(value) < 1 << 53 else str(value)

    found = record.counterexample
    return {
        "name": record.name,
        "proven": record.proven,
        "first_failure": record.first_failure,
        "source_sha256": record.source_sha256,
        "header_sha256": record.header_sha256,
        "solver": record.solver,
        "solver_version": record.solver_version,
        "parser": record.parser,
        "parser_version": record.parser_version,
        "int_bits": list(record.int_bits),
        "box": [
            {"name": w.name, "range": [whole(w.low), whole(w.high)], "kept_by": w.kept_by}
            for w in record.box
        ],
        "obligations": [
            {"name": o.name, "what": o.what, "proven": o.proven} for o in record.obligations
        ],
        "counterexample": None
        if found is None
        else {
            "function": found.function,
            "inputs": {name: whole(value) for name, value in found.inputs},
            "state": {name: whole(value) for name, value in found.state},
            "what": found.what,
            "words": whole(found.words),
            "text": whole(found.text),
        },
    }


# --- reading: from the two texts to functions ----------------------------------------------------

_REMEDY = "this is a defect of the code generator, or the text was changed by hand"

_PREDEFINED = frozenset({"linux", "unix", "i386", "sparc", "sun", "mips", "m68k", "vax", "hpux"})
"""Lower-case macros that compilers know in dialects other than C99 (gcc manual, from memory)."""


def _refuse(place: str, rule: str) -> ProofError:
    return ProofError(place, None, "", rule, _REMEDY)


def _without_comments(text: str, file: str) -> str:
    """The text with every comment as a blank, lines kept."""
    for mark, name in (("\\", "a backslash"), ("??", "a trigraph")):
        if mark in text:
            line = text[: text.index(mark)].count("\n") + 1
            raise _refuse(f"{file}:{line}", f"holds {name}")
    pieces = []
    rest = 0
    while (start := text.find("/*", rest)) >= 0:
        end = text.find("*/", start + 2)
        place = f"{file}:{text[:start].count(chr(10)) + 1}"
        if end < 0:
            raise _refuse(place, "a comment has no end")
        if text[text.rfind("\n", 0, start) + 1 : start].lstrip().startswith("#"):
            # It would draw the lines after it into the one of the preprocessor.
            raise _refuse(place, "a comment in a line for the preprocessor")
        pieces += [text[rest:start], " ", "\n" * text.count("\n", start, end)]
        rest = end + 2
    pieces.append(text[rest:])
    return "".join(pieces)


def _plain_code(text: str, file: str, frame: Sequence[str]) -> str:
    """The code between the lines of `frame`, which must stand there in order and nothing else.

    A line of the frame that begins with ``@`` stands for the code itself, wherever it may be.
    """
    lines = _without_comments(text, file).split("\n")
    waiting = list(frame)
    code = False
    for number, line in enumerate(lines):
        words = line.strip(" \t")
        place = f"{file}:{number + 1}"
        if waiting and words == waiting[0]:
            waiting.pop(0)
            code = False
            lines[number] = ""
        elif words.startswith("#"):
            raise _refuse(place, f"unexpected line for the preprocessor: {words}")
        elif words:
            if not code and not (waiting and waiting[0] == "@"):
                raise _refuse(place, "code where none is expected")
            if not code:
                waiting.pop(0)
            code = True
            odd = re.search(r"[^A-Za-z0-9_ \t(){};,*+\-<>=~?:!&|]", line)
            if odd is not None:
                raise _refuse(place, f"unexpected character {odd[0]!r}")
            for name in re.findall(r"[A-Za-z_]\w*", line):
                if not re.fullmatch(r"[a-z][a-z0-9_]*", name) or name in _PREDEFINED:
                    raise _refuse(place, f"{name} could be a macro")
    if waiting:
        raise _refuse(file, f"lacks the line {waiting[0]}" if waiting[0] != "@" else "lacks code")
    return "\n".join(lines)


@dataclass(slots=True)
class _Function:
    """A function; a parameter is (name, kind), kind a width, "count", "state" or "const state"."""

    name: str
    returns: str
    parameters: tuple[tuple[str, int | str], ...]
    shared: bool
    body: list[Any]
    place: str


@dataclass(slots=True)
class _Program:
    name: str
    members: dict[str, int]
    functions: dict[str, _Function]


_WIDTHS = {"int16_t": 16, "int32_t": 32, "int64_t": 64}


class _Reader:
    """Takes pycparser's tree apart; everything that is not expected is refused."""

    def __init__(self, controller: WordController) -> None:
        self.controller = controller
        self.name = controller.name
        self.code_bits = controller.word_bits
        self.members: dict[str, int] = {}
        self.functions: dict[str, _Function] = {}
        self.prototypes: dict[str, tuple[str, tuple[int | str, ...]]] = {}

    def read(self, source: str, header: str) -> _Program:
        from pycparser import c_parser

        guard = f"{self.name.upper()}_H"
        bracket = "#ifdef __cplusplus"
        head = _plain_code(
            header,
            f"{self.name}.h",
            (
                f"#ifndef {guard}",
                f"#define {guard}",
                "#include <stdint.h>",
                bracket,
                'extern "C" {',
                "#endif",
                "@",
                bracket,
                "}",
                "#endif",
                "#endif",
            ),
        )
        body = _plain_code(source, f"{self.name}.c", (f'#include "{self.name}.h"', "@"))
        # Names of types only: their widths are known here, not to the parser.
        own = " ".join(f"typedef int {name};" for name in _WIDTHS)
        text = f'{own}\n# 1 "{self.name}.h"\n{head}\n# 1 "{self.name}.c"\n{body}\n'
        try:
            tree = c_parser.CParser().parse(text, "types")
        except c_parser.ParseError as error:
            raise _refuse(f"{self.name}.c", f"does not parse: {error}") from None
        for node in tree.ext[len(_WIDTHS) :]:
            self.outermost(node)
        self.complete()
        return _Program(self.name, self.members, self.functions)

    def outermost(self, node: Any) -> None:
        kind = type(node).__name__
        if kind == "Typedef":
            self.typedef(node)
        elif kind == "Decl" and type(node.type).__name__ == "FuncDecl":
            if node.init is not None or node.storage or node.funcspec or node.quals:
                raise _refuse(_place(node), "unexpected kind of prototype")
            returns, parameters = self.signature(node.type)
            kinds = tuple(k for _, k in parameters)
            if node.name in self.prototypes or node.name in self.functions:
                raise _refuse(_place(node), f"{node.name} is declared twice")
            self.prototypes[node.name] = (returns, kinds)
        elif kind == "FuncDef":
            self.function(node)
        else:
            raise _refuse(_place(node), f"unexpected {kind} outside functions")

    def typedef(self, node: Any) -> None:
        inner = node.type
        if type(inner).__name__ != "TypeDecl" or node.quals != [] or inner.quals:
            raise _refuse(_place(node), "unexpected type definition")
        if node.name == f"{self.name}_code":
            if self.width(inner) != self.code_bits:
                raise _refuse(_place(node), f"{node.name} is not int{self.code_bits}_t")
            return
        record = inner.type
        if node.name != f"{self.name}_state" or type(record).__name__ != "Struct" or self.members:
            raise _refuse(_place(node), f"unexpected type {node.name}")
        for member in record.decls or ():
            if member.name is None or member.bitsize is not None or member.quals or member.align:
                raise _refuse(_place(member), "unexpected member")
            if member.name in self.members:
                raise _refuse(_place(member), f"{member.name} is declared twice")
            self.members[member.name] = self.width(member.type)

    def width(self, node: Any) -> int:
        """Width of a type that must be one of the exact-width integers. [bit]"""
        if type(node).__name__ == "TypeDecl" and type(node.type).__name__ == "IdentifierType":
            names = node.type.names
            if len(names) == 1 and names[0] in _WIDTHS:
                return _WIDTHS[names[0]]
            if names == [f"{self.name}_code"]:
                return self.code_bits
        raise _refuse(_place(node), "a type other than int16_t, int32_t, int64_t")

    def signature(self, node: Any) -> tuple[str, tuple[tuple[str, int | str], ...]]:
        result = node.type
        names = getattr(getattr(result, "type", None), "names", None)
        if (
            type(result).__name__ == "TypeDecl"
            and not result.quals
            and names in (["void"], ["int"])
        ):
            returns = str(names[0])
        else:
            returns = f"int{self.width(result)}_t"
        parameters: list[tuple[str, int | str]] = []
        for p in node.args.params if node.args is not None else ():
            if type(p).__name__ != "Decl" or p.storage or p.init is not None or p.align:
                raise _refuse(_place(node), "unexpected parameter")
            names = getattr(getattr(p.type, "type", None), "names", None)
            if type(p.type).__name__ == "PtrDecl":
                pointed = p.type.type
                if (
                    type(pointed).__name__ != "TypeDecl"
                    or getattr(pointed.type, "names", None) != [f"{self.name}_state"]
                    or p.type.quals
                    or p.name != "state"
                    or parameters
                ):
                    raise _refuse(_place(p), "a pointer other than the state")
                if pointed.quals not in ([], ["const"]):
                    raise _refuse(_place(p), "unexpected qualifier")
                parameters.append((p.name, "const state" if pointed.quals else "state"))
            elif p.quals:
                raise _refuse(_place(p), "unexpected qualifier")
            elif names == ["unsigned"] and type(p.type).__name__ == "TypeDecl":
                parameters.append((p.name, "count"))
            else:
                parameters.append((p.name, self.width(p.type)))
        if len({name for name, _ in parameters}) < len(parameters):
            raise _refuse(_place(node), "a parameter is named twice")
        return returns, tuple(parameters)

    def function(self, node: Any) -> None:
        head = node.decl
        shared = not head.storage
        if head.storage not in ([], ["static"]) or head.funcspec not in ([], ["inline"]):
            raise _refuse(_place(node), "unexpected kind of function")
        if (head.funcspec and shared) or node.param_decls or head.quals:
            raise _refuse(_place(node), "unexpected kind of function")
        returns, parameters = self.signature(head.type)
        kinds = tuple(k for _, k in parameters)
        if head.name in self.functions:
            raise _refuse(_place(node), f"{head.name} is defined twice")
        if shared and self.prototypes.get(head.name) != (returns, kinds):
            raise _refuse(_place(node), f"{head.name} differs from its prototype, or has none")
        if not shared and any(isinstance(k, str) and "state" in k for k in kinds):
            raise _refuse(_place(node), "an inner function is given the state")
        self.functions[head.name] = _Function(
            head.name, returns, parameters, shared, list(node.body.block_items or ()), _place(node)
        )

    def complete(self) -> None:
        """The five functions, each with the parameters that callers know, and no other."""
        code = f"int{self.code_bits}_t"
        wanted: dict[str, tuple[str, tuple[int | str, ...]]] = {
            "reset": ("void", ("state", self.code_bits, self.code_bits)),
            "update": (code, ("state", self.code_bits, self.code_bits)),
            "update_added": (code, ("state", self.code_bits, self.code_bits, self.code_bits)),
            "resting_output": (code, (self.code_bits,)),
            "limited": ("int", ("const state",)),
        }
        full = {f"{self.name}_{name}": kinds for name, kinds in wanted.items()}
        if self.prototypes != full:
            raise _refuse(
                f"{self.name}.h", "does not declare the five functions as they are called"
            )
        for name in full:
            if name not in self.functions:
                raise _refuse(f"{self.name}.c", f"{name} is not defined")
        words = [(s.name, s.wide) for s in self.controller.state]
        widths = {False: self.controller.word_bits, True: self.controller.sum_bits}
        if list(self.members.items()) != [(name, widths[wide]) for name, wide in words]:
            raise _refuse(f"{self.name}.h", "the state is not made of the state words in order")


def _place(node: Any) -> str:
    coord = node.coord
    return "text" if coord is None else f"{coord.file}:{coord.line}"


# --- intervals: what the text does with ranges ---------------------------------------------------

_Form = dict[int, int]
"""A value as a sum of coefficients times atoms; atom 0 is the number 1."""


@dataclass(slots=True)
class _Quotient:
    """scale * value = form - r, with r from low to high."""

    scale: int
    form: _Form
    low: int
    high: int


@dataclass(slots=True)
class _Value:
    """A value of a type of so many bits: its range, its form, and, for the solver, its term."""

    bits: int
    low: int
    high: int
    form: _Form
    quotient: _Quotient | None = None
    term: Any = None


@dataclass(slots=True)
class _Local:
    value: _Value
    bits: int
    constant: bool


@dataclass(slots=True)
class _Frame:
    """One call: its locals, the caller's state, and the returns that hang on a condition."""

    function: _Function
    locals: dict[str, _Local] = field(default_factory=dict)
    counts: dict[str, int] = field(default_factory=dict)
    state: dict[str, _Value] | None = None
    writable: bool = False
    returns: list[tuple[Any, _Value]] = field(default_factory=list)
    result: _Value | None = None
    done: bool = False


def _least(bits: int) -> int:
    return -(1 << (bits - 1))


def _most(bits: int) -> int:
    return (1 << (bits - 1)) - 1


def _scaled(form: _Form, factor: int) -> _Form:
    return {atom: factor * c for atom, c in form.items()} if factor else {}


def _added(a: _Form, b: _Form, factor: int = 1) -> _Form:
    total = dict(a)
    for atom, c in b.items():
        value = total.get(atom, 0) + factor * c
        if value:
            total[atom] = value
        else:
            total.pop(atom, None)
    return total


_Narrowed = tuple[int, int, int, int]
_OPPOSITE = {"<": ">=", ">=": "<", ">": "<=", "<=": ">", "==": "!=", "!=": "=="}


def _narrowed(op: str, a: _Value, b: _Value) -> _Narrowed | None:
    """Ranges of both sides where the comparison holds; None where it cannot."""
    al, ah, bl, bh = a.low, a.high, b.low, b.high
    if op in ("<", "<="):
        gap = 1 if op == "<" else 0
        ah, bl = min(ah, bh - gap), max(bl, al + gap)
    elif op in (">", ">="):
        gap = 1 if op == ">" else 0
        al, bh = max(al, bl + gap), min(bh, ah - gap)
    elif op == "==":
        al = bl = max(al, bl)
        ah = bh = min(ah, bh)
    elif al == ah == bl == bh:
        return None
    return (al, ah, bl, bh) if al <= ah and bl <= bh else None


class _Walker:
    """Walks through functions on ranges, as C99 defines every operation, for one width of int.

    With points for ranges it is an interpreter that notes everything undefined; with terms it
    hands every value to the solver as a formula. Forms find what ranges alone lose: a sum less
    the rounded part of the same sum is a small residue.
    """

    def __init__(self, program: _Program, int_bits: int, solver: Any = None) -> None:
        self.program = program
        self.int_bits = int_bits
        self.solver = solver
        self.atoms: list[tuple[int, int]] = [(1, 1)]
        self.alarms: list[str] = []
        self.operations = 0
        self.tightest = 0
        self.named: dict[str, _Value] = {}
        self.called: set[str] = set()
        self.is_floor: Callable[[_Function, int], bool] = lambda function, places: False

    # values

    def fresh(self, bits: int, low: int, high: int, term: Any = None) -> _Value:
        if low == high:
            return self.point(bits, low)
        self.atoms.append((low, high))
        return _Value(bits, low, high, {len(self.atoms) - 1: 1}, None, term)

    def point(self, bits: int, value: int) -> _Value:
        term = None if self.solver is None else self.solver.number(value)
        return _Value(bits, value, value, {0: value} if value else {}, None, term)

    def form_range(self, form: _Form) -> tuple[int, int]:
        low = high = 0
        for atom, c in form.items():
            a, b = self.atoms[atom]
            low, high = (low + c * a, high + c * b) if c > 0 else (low + c * b, high + c * a)
        return low, high

    def kept(
        self,
        node: Any,
        what: str,
        bits: int,
        span: tuple[int, int],
        form: _Form,
        quotient: _Quotient | None,
        term: Any,
    ) -> _Value:
        """A new value that must fit its type."""
        self.operations += 1
        low, high = self.form_range(form)
        low, high = max(low, span[0]), min(high, span[1])
        least, most = _least(bits), _most(bits)
        if type(node).__name__ == "BinaryOp":
            self.tightest = max(self.tightest, 100 * max(-low, high) // most)
        if low < least or high > most:
            self.alarms.append(f"{_place(node)}: {what} may be {low} .. {high}, beyond int{bits}_t")
            value = self.fresh(bits, min(max(low, least), most), max(min(high, most), least), term)
            return value
        if low == high:
            return self.point(bits, low)
        return _Value(bits, low, high, form, quotient, term)

    def promoted(self, value: _Value) -> int:
        return max(value.bits, self.int_bits)

    def converted(self, node: Any, value: _Value, bits: int) -> _Value:
        """Assignment, argument, return and cast: the number stays, or it is an alarm."""
        if bits >= value.bits:
            return replace(value, bits=bits)
        span = (value.low, value.high)
        what = "what is converted"
        return self.kept(node, what, bits, span, value.form, value.quotient, value.term)

    def joined(self, condition: Any, yes: _Value, no: _Value) -> _Value:
        """Either value, whichever the condition chooses."""
        bits = max(yes.bits, no.bits)
        term = None
        if self.solver is not None:
            term = self.solver.choice(condition, yes.term, no.term)
        low, high = min(yes.low, no.low), max(yes.high, no.high)
        if yes.form == no.form:
            quotient = yes.quotient if yes.quotient == no.quotient else None
            return _Value(bits, low, high, yes.form, quotient, term)
        value = self.fresh(bits, low, high, term)
        a, b = yes.quotient, no.quotient
        if a is not None and b is not None and (a.scale, a.form) == (b.scale, b.form):
            value.quotient = _Quotient(a.scale, a.form, min(a.low, b.low), max(a.high, b.high))
        return value

    # expressions

    def value(self, node: Any, frame: _Frame) -> _Value:
        kind = type(node).__name__
        reader: Callable[[Any, _Frame], _Value] | None = {
            "Constant": self.constant,
            "ID": self.name,
            "StructRef": self.member,
            "Cast": self.cast,
            "UnaryOp": self.unary,
            "BinaryOp": self.binary,
            "TernaryOp": self.choice,
            "FuncCall": self.inner_call,
        }.get(kind)
        if reader is None:
            raise _refuse(_place(node), f"unexpected {kind} in an expression")
        return reader(node, frame)

    def constant(self, node: Any, frame: _Frame) -> _Value:
        if node.type != "int" or not re.fullmatch(r"0|[1-9][0-9]*", node.value):
            raise _refuse(_place(node), f"unexpected constant {node.value}")
        value = int(node.value)
        for bits in sorted({self.int_bits, 32, 64}):
            if value <= _most(bits):
                return self.point(bits, value)
        raise _refuse(_place(node), f"{value} has no type")

    def name(self, node: Any, frame: _Frame) -> _Value:
        local = frame.locals.get(node.name)
        if local is None:
            raise _refuse(_place(node), f"{node.name} is not a local that was given a value")
        return local.value

    def member(self, node: Any, frame: _Frame) -> _Value:
        self.check_member(node, frame)
        assert frame.state is not None
        value = frame.state.get(node.field.name)
        if value is None:
            raise _refuse(_place(node), f"{node.field.name} is read before it is written")
        return value

    def check_member(self, node: Any, frame: _Frame) -> None:
        if frame.state is None or type(node.name).__name__ != "ID" or node.name.name != "state":
            raise _refuse(_place(node), "a member of something other than the state")
        if node.type != "->" or node.field.name not in self.program.members:
            raise _refuse(_place(node), "unexpected member")

    def type_of(self, node: Any) -> str:
        """Name of the type of a cast or declaration."""
        inner = node.type
        if type(node).__name__ == "Typename" and (node.quals or inner.quals):
            raise _refuse(_place(node), "unexpected qualifier")
        names = getattr(getattr(inner, "type", None), "names", None)
        if type(inner).__name__ != "TypeDecl" or names is None or len(names) != 1:
            raise _refuse(_place(node), "unexpected type")
        return str(names[0])

    def width_of(self, node: Any) -> int:
        name = self.type_of(node)
        if name not in _WIDTHS:
            raise _refuse(_place(node), f"unexpected type {name}")
        return _WIDTHS[name]

    def cast(self, node: Any, frame: _Frame) -> _Value:
        return self.converted(node, self.value(node.expr, frame), self.width_of(node.to_type))

    def unary(self, node: Any, frame: _Frame) -> _Value:
        if node.op not in ("-", "~"):
            raise _refuse(_place(node), f"unexpected operator {node.op}")
        a = self.value(node.expr, frame)
        # On two's complement, which intN_t are (C99 7.18.1.1), ~x is -x - 1.
        less = 1 if node.op == "~" else 0
        form = _added(_scaled(a.form, -1), {0: -less} if less else {})
        quotient = None
        if a.quotient is not None:
            # scale (-v - less) = -form + r - less scale, the number in the form moved into r.
            q = a.quotient
            flipped = _scaled(q.form, -1)
            lift = flipped.pop(0, 0)
            quotient = _Quotient(
                q.scale,
                flipped,
                less * q.scale - q.high - lift,
                less * q.scale - q.low - lift,
            )
        term = None
        if self.solver is not None:
            term = -a.term - less if less else -a.term
        span = (-a.high - less, -a.low - less)
        what = "a complement" if less else "a negated value"
        return self.kept(node, what, self.promoted(a), span, form, quotient, term)

    def binary(self, node: Any, frame: _Frame) -> _Value:
        if node.op == ">>":
            return self.shifted(node, frame)
        if node.op not in ("+", "-", "*"):
            raise _refuse(_place(node), f"unexpected operator {node.op}")
        a, b = self.value(node.left, frame), self.value(node.right, frame)
        bits = max(self.promoted(a), self.promoted(b))
        terms = self.solver is not None
        if node.op == "*":
            if a.low != a.high and b.low != b.high:
                raise _refuse(_place(node), "a product of two values that both vary")
            x, c = (b, a.low) if a.low == a.high else (a, b.low)
            span = (min(c * x.low, c * x.high), max(c * x.low, c * x.high))
            form = _scaled(x.form, c)
            q = x.quotient
            if q is not None and c and c % q.scale == 0:
                # c v = (c / scale) (form - r): the same number, told by the sum it came from.
                residue = self.fresh(64, q.low, q.high)
                form = _added(_scaled(q.form, c // q.scale), residue.form, -(c // q.scale))
            term = a.term * b.term if terms else None
            return self.kept(node, "a product", bits, span, form, None, term)
        if node.op == "+":
            span = (a.low + b.low, a.high + b.high)
            form = _added(a.form, b.form)
            term = a.term + b.term if terms else None
            return self.kept(node, "a sum", bits, span, form, None, term)
        span = (a.low - b.high, a.high - b.low)
        form = _added(a.form, b.form, -1)
        term = a.term - b.term if terms else None
        return self.kept(node, "a difference", bits, span, form, None, term)

    def shifted(self, node: Any, frame: _Frame) -> _Value:
        a = self.value(node.left, frame)
        count = node.right
        if type(count).__name__ == "ID" and count.name in frame.counts:
            places = frame.counts[count.name]
        else:
            b = self.value(count, frame)
            if b.low != b.high:
                raise _refuse(_place(node), "a shift by places that vary")
            places = b.low
        bits = self.promoted(a)
        self.operations += 1
        if not 0 <= places < bits:
            self.alarms.append(f"{_place(node)}: a shift by {places} places of int{bits}_t")
            return self.fresh(bits, _least(bits), _most(bits), a.term)
        if a.low < 0:
            self.alarms.append(f"{_place(node)}: a shift of what may be {a.low}")
            a = replace(a, low=0, high=max(a.high, 0))
        term = None if self.solver is None else self.solver.floor(a.term, places)
        value = self.fresh(bits, a.low >> places, a.high >> places, term)
        if value.low < value.high:
            form = dict(a.form)
            number = form.pop(0, 0)
            value.quotient = _Quotient(1 << places, form, -number, (1 << places) - 1 - number)
        return value

    def condition(self, node: Any, frame: _Frame) -> tuple[Any, _Frame | None, _Frame | None]:
        """The condition as a term, and the frames in which it does and does not hold."""
        if type(node).__name__ != "BinaryOp" or node.op not in _OPPOSITE:
            raise _refuse(_place(node), "a condition other than one comparison")
        a, b = self.value(node.left, frame), self.value(node.right, frame)
        term = None if self.solver is None else self.solver.compared(node.op, a.term, b.term)

        def where(op: str) -> _Frame | None:
            ranges = _narrowed(op, a, b)
            if ranges is None:
                return None
            inside = replace(
                frame,
                locals=dict(frame.locals),
                state=None if frame.state is None else dict(frame.state),
            )
            for side, value, low, high in (
                (node.left, a, ranges[0], ranges[1]),
                (node.right, b, ranges[2], ranges[3]),
            ):
                if type(side).__name__ == "ID":
                    known = inside.locals[side.name]
                    narrow = replace(value, low=low, high=high)
                    inside.locals[side.name] = replace(known, value=narrow)
                elif type(side).__name__ == "StructRef" and inside.state is not None:
                    inside.state[side.field.name] = replace(value, low=low, high=high)
            return inside

        return term, where(node.op), where(_OPPOSITE[node.op])

    def choice(self, node: Any, frame: _Frame) -> _Value:
        term, holds, fails = self.condition(node.cond, frame)
        yes = None if holds is None else self.value(node.iftrue, holds)
        no = None if fails is None else self.value(node.iffalse, fails)
        if yes is None or no is None:
            # What is never evaluated still has its say in the type (C99 6.5.15).
            only, other = (yes, node.iffalse) if no is None else (no, node.iftrue)
            assert only is not None
            bits = max(self.promoted(only), self.promoted(self.unevaluated(other, frame)))
            return replace(only, bits=bits)
        bits = max(self.promoted(yes), self.promoted(no))
        return replace(self.joined(term, yes, no), bits=bits)

    def unevaluated(self, node: Any, frame: _Frame) -> _Value:
        """A value of which only the type counts."""
        kept = list(self.alarms), self.operations, self.tightest
        value = self.value(node, frame)
        self.alarms, self.operations, self.tightest = kept
        return value

    # calls

    def inner_call(self, node: Any, frame: _Frame) -> _Value:
        """A call of a static function, which knows nothing but its arguments."""
        function = self.callee(node, frame)
        if function.shared or function.returns == "void":
            raise _refuse(_place(node), f"{function.name} is called inside an expression")
        arguments = list(node.args.exprs) if node.args is not None else []
        if len(arguments) != len(function.parameters):
            raise _refuse(_place(node), f"{function.name} is called with other arguments")
        inside = _Frame(function)
        given: list[_Value] = []
        for argument, (name, kind) in zip(arguments, function.parameters, strict=True):
            value = self.value(argument, frame)
            if kind == "count":
                # Fits an unsigned of 16 bits, too.
                if value.low != value.high or not 0 <= value.low <= 65535:
                    raise _refuse(_place(node), "places to shift that are no small constant")
                inside.counts[name] = value.low
            else:
                assert isinstance(kind, int)
                given.append(self.converted(argument, value, kind))
                inside.locals[name] = _Local(given[-1], kind, False)
        result = self.run(inside)
        assert result is not None
        if self.solver is not None and len(given) == 1 and len(inside.counts) == 1:
            places = next(iter(inside.counts.values()))
            if self.is_floor(function, places):
                result = replace(result, term=self.solver.floor(given[0].term, places))
        return result

    def callee(self, node: Any, frame: _Frame) -> _Function:
        name = node.name.name if type(node.name).__name__ == "ID" else ""
        order = list(self.program.functions)
        if name not in order or order.index(name) >= order.index(frame.function.name):
            raise _refuse(_place(node), f"calls {name or 'something'}, not defined before it")
        self.called.add(name)
        return self.program.functions[name]

    def outer_call(self, node: Any, frame: _Frame) -> _Value | None:
        """A call that passes the state on; it is the whole of a return."""
        function = self.callee(node, frame)
        arguments = list(node.args.exprs) if node.args is not None else []
        if len(arguments) != len(function.parameters):
            raise _refuse(_place(node), f"{function.name} is called with other arguments")
        if frame.returns or function.parameters[0][1] != "state" or not frame.writable:
            raise _refuse(_place(node), f"unexpected call of {function.name}")
        first = arguments.pop(0)
        if type(first).__name__ != "ID" or first.name != "state":
            raise _refuse(_place(node), f"{function.name} is not given the state")
        inside = _Frame(function, state=frame.state, writable=True)
        for argument, (name, kind) in zip(arguments, function.parameters[1:], strict=True):
            assert isinstance(kind, int)
            value = self.converted(argument, self.value(argument, frame), kind)
            inside.locals[name] = _Local(value, kind, False)
        return self.run(inside)

    # statements

    def run(self, frame: _Frame) -> _Value | None:
        """Walk through a function's body."""
        function = frame.function
        for before, statement in zip(function.body, function.body[1:], strict=False):
            if type(before).__name__ == "Return":
                raise _refuse(_place(statement), "a statement that is never reached")
        for statement in function.body:
            self.statement(statement, frame)
            if frame.done:
                break
        if frame.result is None and function.returns != "void":
            raise _refuse(function.place, f"{function.name} may end without a return")
        result = frame.result
        for term, value in reversed(frame.returns):
            assert result is not None
            result = self.joined(term, value, result)
        if function.shared:
            self.named.update({name: local.value for name, local in frame.locals.items()})
        return result

    def statement(self, node: Any, frame: _Frame) -> None:
        kind = type(node).__name__
        if kind == "Decl":
            self.declared(node, frame)
        elif kind == "Assignment":
            self.assigned(node, frame)
        elif kind == "If":
            self.conditional(node, frame)
        elif kind == "Return":
            frame.result = self.returned(node, frame)
            frame.done = True
        elif kind == "Cast" and self.type_of(node.to_type) == "void":
            if type(node.expr).__name__ != "ID" or (
                node.expr.name not in frame.locals and node.expr.name != "state"
            ):
                raise _refuse(_place(node), "unexpected cast to void")
        else:
            raise _refuse(_place(node), f"unexpected statement: {kind}")

    def declared(self, node: Any, frame: _Frame) -> None:
        fixed = node.storage == ["static"]
        if node.storage not in ([], ["static"]) or node.quals not in ([], ["const"]):
            raise _refuse(_place(node), f"unexpected kind of local: {node.name}")
        if fixed and not node.quals:
            raise _refuse(_place(node), f"{node.name} would outlive the call")
        if node.funcspec or node.bitsize is not None or node.align or node.init is None:
            raise _refuse(_place(node), f"unexpected kind of local: {node.name}")
        taken = {*frame.locals, *frame.counts, *self.program.functions, "state"}
        taken |= {f"{self.program.name}_state", f"{self.program.name}_code", *_WIDTHS}
        if node.name in taken:
            raise _refuse(_place(node), f"{node.name} is declared twice")
        bits = self.width_of(node)
        # A constant that lives on is made of constants only.
        scope = _Frame(frame.function) if fixed else frame
        value = self.converted(node, self.value(node.init, scope), bits)
        if fixed and value.low != value.high:
            raise _refuse(_place(node), f"{node.name} is no constant")
        frame.locals[node.name] = _Local(value, bits, bool(node.quals))

    def assigned(self, node: Any, frame: _Frame, *, locals_only: bool = False) -> None:
        if node.op != "=":
            raise _refuse(_place(node), f"unexpected operator {node.op}")
        value = self.value(node.rvalue, frame)
        target = node.lvalue
        if type(target).__name__ == "ID":
            local = frame.locals.get(target.name)
            if local is None or local.constant:
                raise _refuse(_place(node), f"{target.name} cannot be assigned to")
            value = self.converted(node, value, local.bits)
            frame.locals[target.name] = replace(local, value=value)
        elif type(target).__name__ == "StructRef":
            self.check_member(target, frame)
            if not frame.writable or locals_only or frame.returns:
                raise _refuse(_place(node), "a state word written under a condition, or const")
            assert frame.state is not None
            bits = self.program.members[target.field.name]
            frame.state[target.field.name] = self.converted(node, value, bits)
        else:
            raise _refuse(_place(node), "assigns to something else")

    def conditional(self, node: Any, frame: _Frame) -> None:
        if node.iffalse is not None or type(node.iftrue).__name__ != "Compound":
            raise _refuse(_place(node), "unexpected kind of if")
        inner = list(node.iftrue.block_items or ())
        kinds = {type(s).__name__ for s in inner}
        term, holds, fails = self.condition(node.cond, frame)
        if kinds == {"Return"} and len(inner) == 1:
            if frame.function.returns == "void":
                raise _refuse(_place(node), "unexpected return")
            if holds is not None:
                value = self.returned(inner[0], holds)
                assert value is not None
                if fails is None:
                    frame.result, frame.done = value, True
                else:
                    frame.returns.append((term, value))
            return
        if kinds != {"Assignment"}:
            raise _refuse(_place(node), "an if around something other than assignments to locals")
        if holds is not None:
            for statement in inner:
                self.assigned(statement, holds, locals_only=True)
        changed = {s.lvalue.name for s in inner if type(s.lvalue).__name__ == "ID"}
        for name in changed & set(frame.locals):
            yes = None if holds is None else holds.locals[name]
            no = None if fails is None else fails.locals[name]
            if yes is None or no is None:
                only = yes if no is None else no
                assert only is not None
                frame.locals[name] = only
            else:
                value = self.joined(term, yes.value, no.value)
                frame.locals[name] = replace(yes, value=value)

    def returned(self, node: Any, frame: _Frame) -> _Value | None:
        if (node.expr is None) != (frame.function.returns == "void"):
            raise _refuse(_place(node), "unexpected return")
        if node.expr is None:
            return None
        kind = frame.function.returns
        bits = self.int_bits if kind == "int" else _WIDTHS[kind]
        value: _Value | None
        if type(node.expr).__name__ == "FuncCall" and self.callee(node.expr, frame).shared:
            value = self.outer_call(node.expr, frame)
            if value is None:
                raise _refuse(_place(node), "unexpected return")
        else:
            value = self.value(node.expr, frame)
        return self.converted(node, value, bits)

    # the functions that callers know

    def call(
        self, name: str, arguments: Iterable[_Value], state: dict[str, _Value] | None
    ) -> tuple[_Value | None, dict[str, _Value]]:
        """Walk through one of the five functions; the state afterwards, and what is returned."""
        function = self.program.functions[f"{self.program.name}_{name}"]
        kinds = [k for _, k in function.parameters]
        pointed = bool(kinds) and isinstance(kinds[0], str)
        frame = _Frame(
            function,
            state=dict(state or {}) if pointed else None,
            writable=pointed and kinds[0] == "state",
        )
        rest = function.parameters[1:] if pointed else function.parameters
        for value, (parameter, kind) in zip(arguments, rest, strict=True):
            assert isinstance(kind, int)
            frame.locals[parameter] = _Local(value, kind, False)
        result = self.run(frame)
        return result, frame.state or {}


# --- the words: the arithmetic at the head of `plant2.equations`, on integers or on formulas ------


def _floored(x: Any, places: int, solver: Any) -> Any:
    """floor(x / 2^places)."""
    return x >> places if isinstance(x, int) else solver.floor(x, places)


def _limited(x: Any, limit: tuple[int, int], solver: Any) -> Any:
    low, high = limit
    if isinstance(x, int):
        return low if x < low else high if x > high else x
    above = solver.choice(solver.compared(">", x, high), solver.number(high), x)
    return solver.choice(solver.compared("<", x, low), solver.number(low), above)


def _equation_value(
    e: WordEquation,
    signals: Mapping[str, Any],
    past: Mapping[tuple[str, int], Any],
    kept: Mapping[str, Any],
    solver: Any,
) -> tuple[Any, Any]:
    """Signal and residue of one equation."""
    total: Any = e.constant
    if e.held is not None:
        total = total + kept[e.held]
    if e.rest is not None:
        total = total + kept[e.rest]
    for t in e.terms:
        x = signals[t.signal] if t.lag == 0 else past[t.signal, t.lag]
        total = total + (t.sign if t.word is None else t.word) * 2**t.lift * x
    half = 2 ** (e.shift - 1) if e.shift > 0 else 0
    value = _floored(total + half, e.shift, solver)
    rest = total - 2**e.shift * value
    return (value if e.limit is None else _limited(value, e.limit, solver)), rest


def _past_of(state: Sequence[StateWord], words: Mapping[str, Any]) -> dict[tuple[str, int], Any]:
    """Signals of earlier samples by name and age, as the state keeps them between updates."""
    past = {(s.signal, s.lag): words[s.name] for s in state if s.signal is not None}
    # A word that is kept for a question after the update is one sample old at the next.
    late = {(name, 1): value for (name, lag), value in past.items() if lag == 0}
    return {(str(name), lag): value for (name, lag), value in (late | past).items() if lag > 0}


def _after_update(
    controller: WordController,
    signals: Mapping[str, Any],
    past: Mapping[tuple[str, int], Any],
    kept: Mapping[str, Any],
    rests: Mapping[str, Any],
) -> dict[str, Any]:
    after = {}
    for s in controller.state:
        if s.signal is None:
            after[s.name] = rests.get(s.name, kept[s.name])
        elif s.lag <= 1:
            after[s.name] = signals[s.signal]
        else:
            after[s.name] = past[s.signal, s.lag - 1]
    return after


def _excess_of(controller: WordController) -> str:
    """The state word that tells whether the last code was limited."""
    found = {(s.signal, s.lag): s.name for s in controller.state}
    name = found.get((controller.excess, 0), found.get((controller.excess, 1)))
    if name is None:
        raise _refuse(controller.excess, "is not kept in the state")
    return name


def _sign(x: Any, solver: Any) -> Any:
    if isinstance(x, int):
        return (x > 0) - (x < 0)
    less = solver.choice(solver.compared("<", x, 0), solver.number(-1), solver.number(0))
    return solver.choice(solver.compared(">", x, 0), solver.number(1), less)


@dataclass(slots=True)
class _Task:
    """One of the five functions: its arguments, and the list that says what it must give."""

    function: str
    arguments: tuple[str, ...]
    fixed: dict[str, int]
    equations: tuple[WordEquation, ...]
    reads: bool
    writes: bool
    returns: str
    function_of_all: str = ""


def _tasks(controller: WordController) -> tuple[_Task, ...]:
    c = controller
    last = c.resting[-1].name if c.resting else ""
    two = tuple(name for name in c.inputs if name != "added")
    return (
        _Task("reset", ("position", "output"), {}, c.reset, False, True, ""),
        _Task("update_added", c.inputs, {}, c.update, True, True, c.output),
        _Task("update", two, {"added": 0}, c.update, True, True, c.output, "update_added"),
        _Task("resting_output", ("position",), {}, c.resting, False, False, last),
        _Task("limited", (), {}, (), True, False, ""),
    )


def _outcome(
    controller: WordController,
    task: _Task,
    given: Mapping[str, Any],
    state: Mapping[str, Any],
    solver: Any,
    seen: Callable[[WordEquation, Any], Any] = lambda e, signal: signal,
) -> dict[str, Any]:
    """What callers can see of a call, by the words: "returned" and every state word afterwards.

    `seen` is shown every signal and may hand back another name for the same value.
    """
    signals: dict[str, Any] = {**given, **task.fixed}
    past = _past_of(controller.state, state) if task.reads else {}
    rests: dict[str, Any] = {}
    for e in task.equations:
        signal, rest = _equation_value(e, signals, past, state, solver)
        signals[e.name] = seen(e, signal)
        if e.rest is not None:
            rests[e.rest] = rest
    found: dict[str, Any] = {}
    if task.function == "limited":
        found["returned"] = _sign(state[_excess_of(controller)], solver)
    elif task.returns:
        found["returned"] = signals[task.returns]
    if task.function == "reset":
        for s in controller.state:
            found[s.name] = 0 if s.after_reset is None else signals[s.after_reset]
    elif task.reads and task.writes:
        found.update(_after_update(controller, signals, past, state, rests))
    elif task.reads:
        found.update(state)
    return found


# --- equality: z3 on integers --------------------------------------------------------------------


class _Solver:
    """z3 with a context of its own, so that what was proven before changes no answer."""

    def __init__(self) -> None:
        import z3

        self.z3 = z3
        self.context = z3.Context()
        self.variables = 0
        self.floors: dict[tuple[str, int], bool] = {}
        self.begin()

    def begin(self) -> None:
        """Forget every unknown: what follows is another question."""
        self.bounds: list[Any] = []
        self.definitions: list[Any] = []
        self.spans: dict[str, int] = {}

    def number(self, value: int) -> Any:
        return self.z3.IntVal(value, self.context)

    def variable(self, name: str, low: int, high: int) -> Any:
        """A new unknown between low and high."""
        self.variables += 1
        x = self.z3.Int(f"{name}.{self.variables}", self.context)
        self.bounds += [x >= low, x <= high]
        self.spans[str(x)] = max(-low, high)
        return x

    def floor(self, x: Any, places: int) -> Any:
        # Division of the theory rounds down where the divisor is positive.
        return x if places == 0 else x / self.number(1 << places)

    def compared(self, op: str, a: Any, b: Any) -> Any:
        pairs: dict[str, Callable[[], Any]] = {
            "<": lambda: a < b,
            "<=": lambda: a <= b,
            ">": lambda: a > b,
            ">=": lambda: a >= b,
            "==": lambda: a == b,
            "!=": lambda: a != b,
        }
        return pairs[op]()

    def choice(self, condition: Any, yes: Any, no: Any) -> Any:
        return self.z3.If(condition, yes, no)

    def term(self, value: Any) -> Any:
        return self.number(value) if isinstance(value, int) else value

    def differ(
        self, a: Any, b: Any, *, exactly: bool = False, patiently: bool = False
    ) -> tuple[bool | None, Callable[[Any], int] | None]:
        """Whether two terms can differ, and the unknowns where they do; None when it stays open.

        Without `exactly`, signals that were given a name of their own are any values in their
        ranges: "cannot differ" is then sound, "can differ" is not.
        """
        z3 = self.z3
        question = self.term(a) != self.term(b)
        if z3.is_false(z3.simplify(question)):
            return False, None
        known = [*self.bounds, *(self.definitions if exactly else ())]
        bits = _Bits(z3, self.context, self.spans)
        for theory, steps in STEPS if patiently else STEPS[:-1]:
            solver = z3.SolverFor(theory, ctx=self.context)
            solver.set("rlimit", steps)
            solver.set("timeout", 1000 * SECONDS_LIMIT)
            formula = z3.And(*known, question)
            solver.add(formula if theory == "QF_LIA" else bits.formula(formula))
            answer = solver.check()
            if answer == z3.unsat:
                return False, None
            if answer == z3.sat:
                read = self.value if theory == "QF_LIA" else bits.value
                return True, partial(read, solver.model())
        return None, None

    def value(self, model: Any, x: Any) -> int:
        """An unknown in a model."""
        return int(model.eval(x, model_completion=True).as_long())

    def is_plain(self, term: Any) -> bool:
        """A number or an unknown, which gains nothing from another name."""
        return bool(self.z3.is_int_value(term) or self.z3.is_const(term))


class _Bits:
    """The same formula on words of bits that are wide enough for every value in it.

    Linear arithmetic searches long where a sum must hit a remainder; bits know remainders.
    """

    def __init__(self, z3: Any, context: Any, spans: Mapping[str, int]) -> None:
        self.z3, self.context, self.spans = z3, context, spans
        self.width = 0

    def formula(self, term: Any) -> Any:
        """The formula, on one width for all of it."""
        widest: dict[int, int] = {}
        self.magnitude(term, widest)
        self.width = max(widest.values()).bit_length() + 1
        return self.translated(term, {})

    def magnitude(self, term: Any, known: dict[int, int]) -> int:
        """No value of the term, nor of anything in it, is larger; 1 for true and false."""
        key = term.get_id()
        if key not in known:
            z3 = self.z3
            parts = [self.magnitude(t, known) for t in term.children()]
            kind = term.decl().kind()
            if z3.is_int_value(term):
                size = abs(term.as_long())
            elif z3.is_const(term):
                size = self.spans[str(term)]
            elif kind in (z3.Z3_OP_ADD, z3.Z3_OP_SUB):
                size = sum(parts)
            elif kind == z3.Z3_OP_MUL:
                size = 1
                for part in parts:
                    size *= part
            else:
                # Negation, floor division, a choice, or a comparison.
                size = max(1, *parts)
            known[key] = size
        return known[key]

    def translated(self, term: Any, known: dict[int, Any]) -> Any:
        key = term.get_id()
        if key not in known:
            known[key] = self.outermost(term, [self.translated(t, known) for t in term.children()])
        return known[key]

    def outermost(self, term: Any, parts: list[Any]) -> Any:
        z3 = self.z3
        if z3.is_int_value(term):
            return z3.BitVecVal(term.as_long(), self.width, self.context)
        if z3.is_const(term):
            return self.unknown(term)
        kind = term.decl().kind()
        if kind == z3.Z3_OP_IDIV:
            divisor = term.children()[1].as_long()
            if divisor < 1 or divisor & (divisor - 1):
                raise _refuse("proof", "divides by something other than a power of two")
            return parts[0] >> (divisor.bit_length() - 1)
        made: dict[int, Callable[[], Any]] = {
            z3.Z3_OP_ADD: lambda: sum(parts[1:], parts[0]),
            z3.Z3_OP_SUB: lambda: parts[0] - sum(parts[2:], parts[1]),
            z3.Z3_OP_MUL: lambda: self.product(parts),
            z3.Z3_OP_UMINUS: lambda: -parts[0],
            z3.Z3_OP_ITE: lambda: z3.If(*parts),
            z3.Z3_OP_LT: lambda: parts[0] < parts[1],
            z3.Z3_OP_LE: lambda: parts[0] <= parts[1],
            z3.Z3_OP_GT: lambda: parts[0] > parts[1],
            z3.Z3_OP_GE: lambda: parts[0] >= parts[1],
            z3.Z3_OP_EQ: lambda: parts[0] == parts[1],
            z3.Z3_OP_DISTINCT: lambda: parts[0] != parts[1],
            z3.Z3_OP_AND: lambda: z3.And(*parts),
        }
        return made[kind]()

    def product(self, parts: list[Any]) -> Any:
        total = parts[0]
        for part in parts[1:]:
            total = total * part
        return total

    def unknown(self, term: Any) -> Any:
        return self.z3.BitVec(str(term), self.width, self.context)

    def value(self, model: Any, x: Any) -> int:
        """An unknown of the first formula in the model of this one."""
        if self.z3.is_int_value(x):
            return int(x.as_long())
        return int(model.eval(self.unknown(x), model_completion=True).as_signed_long())


@dataclass(slots=True)
class _Verdict:
    """What came out for one function."""

    obligations: list[Obligation]
    counterexample: Counterexample | None = None


def _symbolic(program: _Program, solver: _Solver) -> _Walker:
    walker = _Walker(program, 32, solver)
    walker.is_floor = lambda function, places: _is_floor(program, solver, function, places)
    return walker


def _equal(controller: WordController, program: _Program, task: _Task, solver: _Solver) -> _Verdict:
    """One function against its words, signal by signal, then everything callers can see."""
    solver.begin()
    ranges = {s.name: (s.low, s.high) for s in controller.state}
    code = (_least(controller.word_bits), _most(controller.word_bits))
    given = {name: solver.variable(name, *code) for name in task.arguments}
    before = {
        s.name: solver.variable(s.name, s.low, s.high) for s in controller.state if task.reads
    }
    walker = _symbolic(program, solver)
    arguments = [walker.fresh(controller.word_bits, *code, x) for x in given.values()]
    state = {
        name: walker.fresh(program.members[name], *ranges[name], x) for name, x in before.items()
    }
    for name, value in state.items():
        # A word that can take only one value is that number for both sides.
        before[name] = value.term
    result, after = walker.call(task.function, arguments, state)
    locals_at_end = dict(walker.named)
    if task.fixed:
        # With the rest of the arguments fixed: the same terms as the function that takes them all.
        more = [walker.point(controller.word_bits, x) for x in task.fixed.values()]
        result_of_all, after_of_all = walker.call(task.function_of_all, [*arguments, *more], state)
        assert result is not None and result_of_all is not None
        pairs = [(result, result_of_all), *((after[n], after_of_all[n]) for n in after)]
        if all(a.term.eq(b.term) for a, b in pairs):
            fixed = ", ".join(f"{name} = {value}" for name, value in task.fixed.items())
            what = f"gives what {task.function_of_all} gives for {fixed}"
            return _Verdict([Obligation(name=task.function, what=what, proven=True)])
    # The text's values by what they are for callers, and by the local that bears a signal's name.
    text: dict[str, Any] = {} if result is None else {"returned": result.term}
    text |= {name: value.term for name, value in after.items()}
    local = {e.name: locals_at_end[e.name] for e in task.equations if e.name in locals_at_end}
    terms = {name: value.term for name, value in local.items()}
    found: list[Obligation] = []

    def seen(e: WordEquation, signal: Any) -> Any:
        """Both sides get one new name for a signal that is proven equal by itself."""
        if e.name not in terms:
            return signal
        mine = terms.pop(e.name)
        differs, _ = solver.differ(mine, signal)
        if differs is not False:
            # Whether that matters is seen in what callers can see.
            return signal
        what = f"{e.name} is what its equation gives"
        found.append(Obligation(name=task.function, what=what, proven=True))
        if solver.is_plain(mine):
            return signal
        value = local[e.name]
        new = solver.variable(e.name, value.low, value.high)
        solver.definitions.append(new == signal)
        for table in (terms, text):
            for name, term in table.items():
                table[name] = solver.z3.substitute(term, (mine, new))
        return new

    words = _outcome(controller, task, given, before, solver, seen)
    if set(words) != set(text):
        missing = ", ".join(sorted(set(words) ^ set(text)))
        raise _refuse(f"{program.name}.c", f"{task.function} does not give {missing}")
    for what in words:
        subject = "the returned value" if what == "returned" else f"state word {what}"
        statement = f"{subject} is what the words give"
        named = bool(solver.definitions)
        differs, values = solver.differ(text[what], words[what], patiently=not named)
        if differs is not False and named:
            differs, values = solver.differ(text[what], words[what], exactly=True, patiently=True)
        proven = None if differs is None else not differs
        found.append(Obligation(name=task.function, what=statement, proven=proven))
        if values is not None:
            inputs, start = (
                {name: values(x) for name, x in side.items()} for side in (given, before)
            )
            return _Verdict(found, _replayed(controller, program, task, inputs, start, what))
        if proven is None:
            break
    return _Verdict(found)


def _is_floor(program: _Program, solver: _Solver, function: _Function, places: int) -> bool:
    """Whether a static function of one sum and some places is floor(sum / 2^places)."""
    key = (function.name, places)
    if key not in solver.floors:
        (bits,) = (k for _, k in function.parameters if isinstance(k, int))
        span = (_least(bits), _most(bits))
        kept = solver.bounds, solver.definitions, solver.spans
        solver.begin()
        x = solver.variable("x", *span)
        walker = _Walker(program, 32, solver)
        frame = _Frame(function)
        for name, kind in function.parameters:
            if kind == "count":
                frame.counts[name] = places
            else:
                frame.locals[name] = _Local(walker.fresh(bits, *span, x), bits, False)
        result = walker.run(frame)
        solver.floors[key] = (
            result is not None
            and not walker.alarms
            and solver.differ(result.term, solver.floor(x, places))[0] is False
        )
        solver.bounds, solver.definitions, solver.spans = kept
    return solver.floors[key]


def _replayed(
    controller: WordController,
    program: _Program,
    task: _Task,
    inputs: Mapping[str, int],
    state: Mapping[str, int],
    what: str,
) -> Counterexample:
    """Both sides on plain integers, which must differ as the solver says."""
    words = _outcome(controller, task, inputs, state, None)
    text = _run(program, task.function, [inputs[name] for name in task.arguments], state, 32)
    if words[what] == text[what]:
        raise _refuse(what, "the solver's counterexample does not hold; a defect of the proof")
    return Counterexample(
        function=task.function,
        inputs=tuple((name, inputs[name]) for name in task.arguments),
        state=tuple((s.name, state[s.name]) for s in controller.state if task.reads),
        what=what,
        words=words[what],
        text=text[what],
    )


def _run(
    program: _Program,
    function: str,
    arguments: Sequence[int],
    state: Mapping[str, int],
    int_bits: int,
) -> dict[str, int]:
    """One call on plain integers; refuses what C leaves undefined or to the compiler."""
    walker = _Walker(program, int_bits)
    kinds = program.functions[f"{program.name}_{function}"].parameters
    widths = [k for _, k in kinds if isinstance(k, int)]
    given = [walker.point(bits, x) for bits, x in zip(widths, arguments, strict=True)]
    words = {
        name: walker.point(bits, state[name])
        for name, bits in program.members.items()
        if name in state
    }
    result, after = walker.call(function, given, words)
    if walker.alarms:
        raise _refuse(function, walker.alarms[0])
    found = {} if result is None else {"returned": result.low}
    return found | {name: value.low for name, value in after.items()}


def text_outcome(
    source: str,
    header: str,
    controller: WordController,
    function: str,
    inputs: Sequence[int],
    state: Mapping[str, int],
    *,
    int_bits: int = 32,
) -> dict[str, int]:
    """What the emitted text gives for one call, on plain integers.

    Parameters
    ----------
    source, header : str
        NAME.c and NAME.h.
    controller : WordController
        Tells names and widths.
    function : str
        "reset", "update_added", "update", "resting_output" or "limited".
    inputs : sequence of int
        Arguments in C order, without the state; each must fit the word type.
    state : mapping of str to int
        State words before the call; none for a reset or a resting output.
    int_bits : int
        Width of ``int``, 16 or 32. [bit]

    Returns
    -------
    dict of str to int
        "returned", where something is, and every state word after the call.

    Raises
    ------
    ProofError
        If the text leaves the accepted subset of C, or if the call meets something that C leaves
        undefined or to the compiler.

    Notes
    -----
    The walk that proves ranges, on ranges of one value.
    """
    program = _Reader(controller).read(source, header)
    return _run(program, function, inputs, state, int_bits)


# --- the proof -----------------------------------------------------------------------------------


def _defined(
    controller: WordController, program: _Program, int_bits: int
) -> tuple[list[Obligation], dict[str, list[tuple[str, int, int]]]]:
    """Nothing overflows or is undefined; and the ranges in which calls leave the state words."""
    found = []
    left: dict[str, list[tuple[str, int, int]]] = {s.name: [] for s in controller.state}
    code = (_least(controller.word_bits), _most(controller.word_bits))
    reached = set()
    for task in _tasks(controller):
        walker = _Walker(program, int_bits)
        state = {
            s.name: walker.fresh(program.members[s.name], s.low, s.high)
            for s in controller.state
            if task.reads
        }
        arguments = [walker.fresh(controller.word_bits, *code) for _ in task.arguments]
        _, after = walker.call(task.function, arguments, state)
        reached |= walker.called
        if walker.alarms:
            what = walker.alarms[0]
        else:
            what = (
                f"{walker.operations} operations stay in their types, the largest sum or product "
                f"takes {walker.tightest} % of its type"
            )
        name = f"{task.function}, int of {int_bits} bits"
        found.append(Obligation(name=name, what=what, proven=None if walker.alarms else True))
        if task.writes:
            if set(after) != set(left):
                missing = ", ".join(sorted(set(left) - set(after)))
                raise _refuse(f"{program.name}.c", f"{task.function} does not write {missing}")
            for name, value in after.items():
                left[name].append((task.function, value.low, value.high))
    for function in program.functions.values():
        if not function.shared and function.name not in reached:
            raise _refuse(function.place, f"{function.name} is never called")
    return found, left


def _kept_by(controller: WordController) -> dict[str, str]:
    """Why each state word cannot leave its range."""
    type_range = (_least(controller.word_bits), _most(controller.word_bits))
    ranges = dict.fromkeys(controller.inputs, type_range)
    ranges |= {e.name: (e.low, e.high) for e in controller.update}
    rests = {e.rest for e in controller.update}
    found = {}
    for s in controller.state:
        e = next((e for e in controller.update if e.name == s.signal), None)
        if s.signal is None:
            found[s.name] = "residue" if s.name in rests else "reset only"
        elif e is None:
            found[s.name] = "type of the input"
        else:
            whole, _ = partial_sum_range(e, ranges)
            low, high = signal_range(replace(e, limit=None), whole)
            within = s.low <= low and high <= s.high
            found[s.name] = "range of its sum" if within else "limit"
    return found


def prove(source: str, header: str, controller: WordController) -> ProofRecord:
    """Prove that the emitted text is equal to the words, for every state and every input.

    Parameters
    ----------
    source : str
        NAME.c as it is written to disk.
    header : str
        NAME.h as it is written to disk.
    controller : WordController
        The words.

    Returns
    -------
    ProofRecord
        Every statement with its outcome; `ProofRecord.proven` tells whether all hold.

    Raises
    ------
    ProofError
        If the text leaves the accepted subset of C, does not define what callers call, or keeps
        another state than the words do.

    Notes
    -----
    Own derivation: interval arithmetic over the parsed text shows that it computes on plain
    integers; on these, linear integer arithmetic with floor division is decided by z3, one
    equation at a time. Signals already proven equal enter the next equation as any value of their
    range.

    References
    ----------
    ISO/IEC 9899:1999, 6.3.1.1, 6.3.1.3, 6.3.1.8, 6.5, 6.5.7 (from memory); L. de Moura and
    N. Bjorner, "Z3: an efficient SMT solver", TACAS 2008 (from memory).
    """
    import pycparser

    program = _Reader(controller).read(source, header)
    obligations: list[Obligation] = []
    ranges: dict[str, list[tuple[str, int, int]]] = {s.name: [] for s in controller.state}
    for int_bits in INT_BITS:
        found, left = _defined(controller, program, int_bits)
        obligations += found
        for name, entries in left.items():
            ranges[name] += entries
    reasons = _kept_by(controller)
    box = tuple(
        BoxWord(name=s.name, low=s.low, high=s.high, kept_by=reasons[s.name])
        for s in controller.state
    )
    for word in box:
        beyond = [
            f"{function} may leave {low} .. {high}"
            for function, low, high in ranges[word.name]
            if low < word.low or high > word.high
        ]
        what = f"every call leaves it in {word.low} .. {word.high}"
        obligations.append(
            Obligation(
                name=f"state word {word.name}",
                what=f"{what}, but {beyond[0]}" if beyond else what,
                proven=None if beyond else True,
            )
        )
    counterexample = None
    if all(o.proven for o in obligations):
        solver = _Solver()
        for task in _tasks(controller):
            verdict = _equal(controller, program, task, solver)
            obligations += verdict.obligations
            counterexample = verdict.counterexample
            if not all(o.proven for o in verdict.obligations):
                break
    return ProofRecord(
        name=controller.name,
        source_sha256=hashlib.sha256(source.encode()).hexdigest(),
        header_sha256=hashlib.sha256(header.encode()).hexdigest(),
        obligations=tuple(obligations),
        box=box,
        int_bits=INT_BITS,
        solver="z3",
        solver_version=_solver_version(),
        parser="pycparser",
        parser_version=str(pycparser.__version__),
        counterexample=counterexample,
    )


def _solver_version() -> str:
    import z3

    return str(z3.get_version_string())
