"""The integer reference against two arithmetics that were not written here.

Rules of this file:

- apytypes is a general fixed-point library: it aligns binary points, rounds and wraps by itself.
  Its walk through a list reads words, signs and fraction bits, never a lift, a shift or a range.
- Every sum is kept in the sum's C type and every signal in its own, wrapping where it does not fit:
  a range that did not hold would show as another word.
- `fractions.Fraction` knows no width at all.
"""

from __future__ import annotations

import random
from collections.abc import Iterator, Mapping
from dataclasses import replace
from fractions import Fraction
from math import floor

import pytest
from apytypes import APyFixed, OverflowMode, QuantizationMode
from loops import PID, lead_loop, reference_loop
from sample_words import FractionController, focus_stage, tilt_mirror, valve_spool

from plant2.design import design, task_of
from plant2.equations import WordController, WordEquation, WordTerm
from plant2.loopfile import Loop, Notch
from plant2.simulate import IntegerController
from plant2.words import words_of

SAMPLES = {"pd": focus_stage(), "pid": tilt_mirror(), "lead": valve_spool()}
ROOMY = 200
"""Integer bits that hold any number of these lists; the library rounds, nothing overflows."""


def fixed(value: int, frac_bits: int, bits: int) -> APyFixed:
    """An integer of so many bits, with the binary point before its last `frac_bits`."""
    return APyFixed(value & ((1 << bits) - 1), bits=bits, frac_bits=frac_bits)


def integer(value: APyFixed) -> int:
    """The stored integer, sign included."""
    pattern: int = value.to_bits()
    return pattern - (1 << value.bits) if pattern >> (value.bits - 1) else pattern


class LibraryController:
    """A list of word equations walked with apytypes' numbers."""

    def __init__(self, controller: WordController) -> None:
        self.controller = controller
        self.factors: dict[int, APyFixed] = {}
        self.past: dict[tuple[str, int], APyFixed] = {}
        self.kept: dict[str, APyFixed] = {}
        self.deepest: dict[str, int] = {}
        for e in controller.update:
            for t in e.terms:
                self.deepest[t.signal] = max(self.deepest.get(t.signal, 0), t.lag)

    def update(self, reference: int, position: int, added: int) -> dict[str, int]:
        """One sample; every signal as its integer."""
        given = {"reference": reference, "position": position, "added": added}
        now = self._walk(self.controller.update, given)
        for name, depth in self.deepest.items():
            for lag in range(depth, 1, -1):
                self.past[name, lag] = self.past[name, lag - 1]
            if depth:
                self.past[name, 1] = now[name]
        return {e.name: integer(now[e.name]) for e in self.controller.update}

    def reset(self, position: int, output: int) -> None:
        """Put the list at rest."""
        now = self._walk(self.controller.reset, {"position": position, "output": output})
        signals = {e.name: e for e in self.controller.update}
        bits = {"word": self.controller.word_bits, "sum": self.controller.sum_bits}
        for state in self.controller.state:
            if state.after_reset is not None:
                start = now[state.after_reset]
            elif state.signal is not None:
                start = fixed(0, signals[state.signal].frac_bits, bits["word"])
            else:
                made = next(e for e in signals.values() if state.name in (e.held, e.rest))
                start = fixed(0, made.sum_frac_bits, bits["sum"])
            if state.signal is None:
                self.kept[state.name] = start
            else:
                self.past[state.signal, max(state.lag, 1)] = start

    def _walk(
        self, equations: tuple[WordEquation, ...], given: Mapping[str, int]
    ) -> dict[str, APyFixed]:
        now = {name: fixed(v, 0, self.controller.word_bits) for name, v in given.items()}
        rests: dict[str, APyFixed] = {}
        for e in equations:
            now[e.name] = self._signal(e, now, rests)
        self.kept.update(rests)
        return now

    def _signal(
        self, e: WordEquation, now: Mapping[str, APyFixed], rests: dict[str, APyFixed]
    ) -> APyFixed:
        total = fixed(e.constant, e.sum_frac_bits, self.controller.sum_bits)
        for name in (e.held, e.rest):
            if name is not None:
                total = total + self.kept[name]
        for t in e.terms:
            read = now[t.signal] if t.lag == 0 else self.past[t.signal, t.lag]
            total = total + self._factor(t) * read
        # The C type of a sum: what does not fit wraps, and half a step is added in that type.
        stored = total.cast(
            bits=self.controller.sum_bits,
            frac_bits=e.sum_frac_bits,
            quantization=QuantizationMode.TRN,
            overflow=OverflowMode.WRAP,
        )
        assert stored == total, e.name
        value = stored.cast(
            int_bits=ROOMY, frac_bits=e.frac_bits, quantization=QuantizationMode.TIES_POS
        )
        if e.rest is not None:
            rests[e.rest] = (stored - value).cast(
                bits=self.controller.sum_bits, frac_bits=e.sum_frac_bits
            )
        if e.limit is not None:
            low, high = (fixed(x, e.frac_bits, self.controller.sum_bits) for x in e.limit)
            value = low if value < low else high if value > high else value
        bits = self.controller.sum_bits if e.wide else self.controller.word_bits
        return value.cast(bits=bits, frac_bits=e.frac_bits, overflow=OverflowMode.WRAP)

    def _factor(self, t: WordTerm) -> APyFixed:
        known = self.factors.get(id(t))
        if known is None:
            word = t.sign if t.word is None else t.word
            # A term without a word may stand for a power of two below 1, too.
            known = fixed(word, t.word_frac_bits, self.controller.word_bits)
            self.factors[id(t)] = known
        return known


def stimulus(controller: WordController, seed: int, length: int) -> Iterator[tuple[int, int, int]]:
    """Steps, slow wandering with noise, held levels, and now and then any value of the type."""
    rng = random.Random(seed)
    top = (1 << (controller.word_bits - 1)) - 1
    low, high = controller.equation("position_count").limit or (-top - 1, top)
    span, middle = high - low, (low + high) // 2
    reference, position = middle, float(middle)
    for k in range(length):
        if k % 97 == 0:
            size = span // rng.choice((3, 30, 300))
            reference = middle + rng.randint(-size, size)
        if k % 700 < 500:
            position += 0.06 * (reference - position) + rng.gauss(0.0, 1.5)
        elif k % 700 == 500:
            position = float(rng.randint(low, high))
        measured = round(position)
        added = rng.randint(-40, 40) if k % 1000 > 800 else 0
        if rng.random() < 0.02:
            beyond = max(low - 1, -top - 1), min(high + 1, top)
            any_value = (-top - 1, top, *beyond, low, high, rng.randint(-top - 1, top))
            measured, added = rng.choice(any_value), rng.choice(any_value)
        yield reference, measured, added


@pytest.mark.slow
@pytest.mark.parametrize("law", SAMPLES)
def test_words_equal_those_of_a_fixed_point_library(law: str) -> None:
    """100 000 updates each of the stored PD and PID controllers, 30 000 of the lead."""
    controller = SAMPLES[law]
    ours, theirs = IntegerController(controller), LibraryController(controller)
    seen: dict[str, set[int]] = {"output_code": set(), "position_count": set()}
    for seed in range(3 if law == "lead" else 10):
        start = random.Random(seed)
        position, output = start.randint(-3000, 3000), start.randint(-900, 900)
        ours.reset(position, output)
        theirs.reset(position, output)
        for sample in stimulus(controller, seed, 10_000):
            code = ours.update(*sample)
            words = theirs.update(*sample)
            assert ours.signals == words
            assert code == words[controller.output]
            for name, values in seen.items():
                values.add(words[name])
    # The stream passed through most codes and reached the limits both ways.
    for name, values in seen.items():
        limit = controller.equation(name).limit
        assert limit is not None
        assert set(limit) <= values
    assert len(seen["output_code"]) > 400


@pytest.mark.slow
@pytest.mark.parametrize("law", SAMPLES)
def test_words_equal_exact_fractions(law: str) -> None:
    """The same stream in numbers that have no width; states too."""
    controller = SAMPLES[law]
    ours, exact = IntegerController(controller), FractionController(controller)
    bits = {e.name: e.frac_bits for e in controller.update}
    ours.reset(1234, -56)
    exact.reset(1234, -56)
    for sample in stimulus(controller, 77, 10_000):
        assert ours.update(*sample) == exact.update(*sample)
        for (name, lag), value in exact.past.items():
            if lag == 1:
                assert ours.signals[name] == value * (1 << bits[name])
    assert ours.state == exact.state()


NOTCH = Notch(frequency_rad_per_s=4400.0, width=0.6, depth_db=20.0)
DESIGNED: dict[str, Loop] = {
    "pd": reference_loop(),
    "pid": reference_loop(*PID),
    "lead": lead_loop(),
    "reversed": reference_loop(*PID, "actuator.polarity=-1"),
}
DESIGNED["notch"] = replace(DESIGNED["pid"], aim=replace(DESIGNED["pid"].aim, notches=(NOTCH,)))


@pytest.mark.parametrize("bits", [16, 32])
@pytest.mark.parametrize("name", DESIGNED)
def test_designed_words_equal_those_of_a_fixed_point_library(name: str, bits: int) -> None:
    task = task_of(DESIGNED[name])
    found = design(DESIGNED[name], task, seek_nearest=False)
    assert found.gains is not None
    controller = words_of(task, found.gains, bits).controller
    ours, theirs = IntegerController(controller), LibraryController(controller)
    ours.reset(300, -20)
    theirs.reset(300, -20)
    codes, limited = set(), set()
    for sample in stimulus(controller, bits, 3000):
        codes.add(ours.update(*sample))
        assert ours.signals == theirs.update(*sample)
        limited.add(ours.limited())
    assert limited == {-1, 0, 1}
    assert len(codes) > 200


def test_rounding_is_the_library_s_ties_upward() -> None:
    """Products of 16-bit words with counts, in quarters: 100 000 roundings, many of them ties."""
    ties = 0
    for word in (3, -5, 12345, -32768, 16384):
        for count in range(-10_000, 10_000):
            product = Fraction(word * count, 4)
            rounded = floor(product + Fraction(1, 2))
            number = fixed(word, 2, 16) * fixed(count, 0, 16)
            assert (
                integer(
                    number.cast(int_bits=40, frac_bits=0, quantization=QuantizationMode.TIES_POS)
                )
                == rounded
                == (word * count + 2) >> 2
            )
            ties += product.denominator == 2
    assert ties > 10_000
