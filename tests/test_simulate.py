"""The integer paths against each other and against exact rationals; the loop against its own parts.

Rules of this file:

- Exact rationals are the second arithmetic: they know neither lifts nor shifts, only values.
- Stimulus is noise, held levels, extremes of the type, saturation both ways and exact ties.
"""

from __future__ import annotations

import random
from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction
from math import floor

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sample_words import all_samples, focus_stage, tilt_mirror, valve_spool

from plant2.equations import (
    StateWord,
    WordController,
    WordEquation,
    WordTerm,
    partial_sum_range,
    signal_range,
    verify_ranges,
)
from plant2.errors import OutOfRangeError
from plant2.simulate import IntegerController, LaneController

SAMPLES = {c.name: c for c in all_samples()}
Stimulus = list[tuple[int, int, int]]


# ------------------------------------------------------------------------ a second arithmetic


class RationalController:
    """The list in exact rationals: values, not integers; no lift, no shift, no bit is known."""

    def __init__(self, controller: WordController) -> None:
        self.controller = controller
        self.bits = {e.name: e.frac_bits for e in controller.update}
        self.sum_bits = {e.held: e.sum_frac_bits for e in controller.update if e.held}
        self.past: dict[str, list[Fraction]] = {}
        self.kept: dict[str, Fraction] = {}

    def reset(self, position: int, output: int) -> None:
        now = {"position": Fraction(position), "output": Fraction(output)}
        for e in self.controller.reset:
            now[e.name] = self.value(e, now)
        self.past = {}
        self.kept = {e.rest: Fraction(0) for e in self.controller.update if e.rest}
        for word in sorted(self.controller.state, key=lambda w: w.lag):
            start = now[word.after_reset] if word.after_reset else Fraction(0)
            if word.signal is None:
                self.kept[word.name] = start
            elif word.lag >= 1:
                self.past.setdefault(word.signal, []).append(start)

    def update(self, reference: int, position: int, added: int) -> dict[str, Fraction]:
        now = {
            "reference": Fraction(reference),
            "position": Fraction(position),
            "added": Fraction(added),
        }
        for e in self.controller.update:
            now[e.name] = self.value(e, now)
        for name in self.bits:
            self.past.setdefault(name, []).insert(0, now[name])
        return now

    def value(self, e: WordEquation, now: dict[str, Fraction]) -> Fraction:
        total = Fraction(e.constant, 2**e.sum_frac_bits)
        if e.held is not None:
            total += self.kept[e.held]
        if e.rest is not None:
            total += self.kept[e.rest]
        for t in e.terms:
            read = now[t.signal] if t.lag == 0 else self.past[t.signal][t.lag - 1]
            word = t.sign if t.word is None else t.word
            total += read * Fraction(word, 2**t.word_frac_bits)
        # One step of a stored signal is 2^-frac_bits; nearest, ties up.
        step = Fraction(1, 2**e.frac_bits)
        value = floor(total / step + Fraction(1, 2)) * step if e.shift else total
        if e.rest is not None:
            self.kept[e.rest] = total - value
        if e.limit is not None:
            value = min(max(value, e.limit[0] * step), e.limit[1] * step)
        return value


# ------------------------------------------------------------------------------------- stimulus


def stimulus(controller: WordController, seed: int, length: int) -> Stimulus:
    """Noise of three sizes, held levels, single extremes, all in one stream."""
    rng = random.Random(seed)
    top = (1 << (controller.word_bits - 1)) - 1
    clip = controller.equation("position_count").limit
    assert clip is not None
    low, high = clip
    middle = (low + high) // 2

    def level(kind: str) -> int:
        if kind == "wild":
            return rng.choice((-top - 1, top, low, high, low - 1, high + 1, 0, -1, 1))
        if kind == "wide":
            return rng.randint(low, high)
        return middle + rng.randint(-6, 6)

    stream: Stimulus = []
    while len(stream) < length:
        kind = rng.choice(("wild", "wide", "close"))
        if rng.random() < 0.4:
            held = (level(kind), level(kind), 0)
            stream += [held] * rng.choice((1, 3, 40, 200))
        else:
            for _ in range(rng.choice((1, 10, 60))):
                added = rng.choice((0, 0, level(kind)))
                stream.append((level(kind), level(kind), added))
    return stream[:length]


@pytest.mark.parametrize("controller", SAMPLES.values(), ids=SAMPLES)
def test_integers_equal_exact_rationals(controller: WordController) -> None:
    bits = {e.name: e.frac_bits for e in controller.update}
    limited_at = dict.fromkeys((e.name for e in controller.update if e.limit), (0, 0))
    for seed in range(3):
        integers, rationals = IntegerController(controller), RationalController(controller)
        start = random.Random(seed).randint(-3000, 3000)
        integers.reset(start, 7 * seed)
        rationals.reset(start, 7 * seed)
        for reference, position, added in stimulus(controller, seed, 1500):
            output = integers.update(reference, position, added)
            exact = rationals.update(reference, position, added)
            words = {name: exact[name] * 2**b for name, b in bits.items()}
            assert integers.signals == words
            assert output == words[controller.output]
            for e in controller.update:
                if e.limit:
                    below, above = limited_at[e.name]
                    now = integers.signals[e.name]
                    limited_at[e.name] = (below + (now == e.limit[0]), above + (now == e.limit[1]))
    # The stimulus reaches the limits of the output and of what is read, both ways.
    for name in ("position_count", "reference_count", "output_code"):
        assert min(limited_at[name]) > 100, name


@pytest.mark.parametrize("controller", SAMPLES.values(), ids=SAMPLES)
def test_lanes_equal_integers(controller: WordController) -> None:
    lanes, length = 5, 1200
    streams = [stimulus(controller, 100 + lane, length) for lane in range(lanes)]
    many = LaneController(controller, lanes)
    starts = np.array([0, -50, 50, 300, 2000])
    outputs = np.array([0, 5, -5, 30000, -30000])
    many.reset(starts, outputs)
    singles = [IntegerController(controller) for _ in range(lanes)]
    for lane, single in enumerate(singles):
        single.reset(int(starts[lane]), int(outputs[lane]))
    for moment in zip(*streams, strict=True):
        reference, position, added = (np.array(column) for column in zip(*moment, strict=True))
        codes = many.update(reference, position, added)
        signals, state, limited = many.signals, many.state, many.limited()
        for lane, single in enumerate(singles):
            assert codes[lane] == single.update(*moment[lane])
            assert limited[lane] == single.limited()
            assert {name: int(v[lane]) for name, v in signals.items()} == single.signals
            assert {name: int(v[lane]) for name, v in state.items()} == single.state


@pytest.mark.parametrize("controller", SAMPLES.values(), ids=SAMPLES)
def test_resting_output_is_the_same_on_both_paths(controller: WordController) -> None:
    positions = np.array([-32768, -2049, -1, 0, 1, 77, 2040, 4096, 32767])
    single = IntegerController(controller)
    codes = LaneController(controller, positions.size).resting_output(positions)
    assert codes.tolist() == [single.resting_output(int(p)) for p in positions]
    assert len(set(codes.tolist())) > 3


@pytest.mark.parametrize("controller", SAMPLES.values(), ids=SAMPLES)
def test_rests_after_reset(controller: WordController) -> None:
    single = IntegerController(controller)
    low, high = controller.equation("output_code").limit or (0, 0)
    for position in (300, 1000, 1700):
        for output in (low - 5, low, 600, high):
            single.reset(position, output)
            for _ in range(50):
                assert single.update(position, position) == min(max(output, low), high)


def test_reset_forgets_everything() -> None:
    single, fresh = IntegerController(tilt_mirror()), IntegerController(tilt_mirror())
    for reference, position, added in stimulus(tilt_mirror(), 5, 300):
        single.update(reference, position, added)
    single.reset(100, 40)
    fresh.reset(100, 40)
    assert single.state == fresh.state
    assert single.signals == {}


def test_lanes_restore_a_state() -> None:
    controller = tilt_mirror()
    stream = stimulus(controller, 9, 400)
    lanes = LaneController(controller, 1)
    for moment in stream[:200]:
        lanes.update(*moment)
    kept = lanes.state
    first = [int(lanes.update(*moment)[0]) for moment in stream[200:]]
    lanes.restore(kept)
    again = [int(lanes.update(*moment)[0]) for moment in stream[200:]]
    assert first == again and len(set(first)) > 20


def test_limited_tells_the_side() -> None:
    single = IntegerController(focus_stage())
    assert single.update(5000, -5000) == 1638
    assert single.limited() == 1
    single.reset(0, 0)
    assert single.limited() == 0
    assert single.update(-5000, 5000) == -1638
    assert single.limited() == -1
    single.reset(0, 0)
    assert single.update(10, 0) == 13  # 1.3466 x 10 = 13.466
    assert single.limited() == 0


# ------------------------------------------------------------------------- ties, residue, ranges


def _with_ranges(equations: tuple[WordEquation, ...], inputs: tuple[str, ...]) -> Iterator:
    ranges = dict.fromkeys(inputs, (-32768, 32767))
    ranges |= {e.name: e.limit for e in equations if e.limit}
    for e in equations:
        whole, partial = partial_sum_range(e, ranges)
        low, high = signal_range(e, whole)
        ranges[e.name] = (low, high)
        yield replace(e, low=low, high=high, sum_low=partial[0], sum_high=partial[1])


def small(word: int, shift: int, *, carry: bool = False, held: bool = False) -> WordController:
    """output = round(word x error / 2^shift), the least list that has every part."""
    plain = WordTerm(signal="reference"), WordTerm(signal="position", sign=-1)
    update = (
        WordEquation(name="error", meaning="error", unit="count", terms=plain, limit=(-999, 999)),
        WordEquation(
            name="unlimited",
            meaning="output before its limit",
            unit="code",
            terms=(WordTerm(signal="error", word=word, name="k", word_frac_bits=shift),),
            rest="unlimited_rest" if carry else None,
            held="standing" if held else None,
            held_range=(-(1 << 20), 1 << 20) if held else (0, 0),
            shift=shift,
            wide=True,
        ),
        WordEquation(
            name="code",
            meaning="returned code",
            unit="code",
            terms=(WordTerm(signal="unlimited"),),
            limit=(-500, 500),
        ),
        WordEquation(
            name="excess",
            meaning="what the limit took away",
            unit="code",
            terms=(WordTerm(signal="unlimited"), WordTerm(signal="code", sign=-1)),
            wide=True,
        ),
    )
    update = tuple(_with_ranges(update, ("reference", "position", "added")))
    clip = WordEquation(
        name="start",
        meaning="start",
        unit="code",
        terms=(WordTerm(signal="output", lift=shift),),
        frac_bits=shift,
        wide=True,
        limit=(-(1 << 20), 1 << 20),
    )
    rest = WordEquation(
        name="rest", meaning="rest", unit="code", terms=(WordTerm(signal="position"),)
    )
    half = 1 << (shift - 1)
    states = [
        StateWord(
            name="excess_kept",
            wide=True,
            low=update[3].low,
            high=update[3].high,
            signal="excess",
            lag=0,
            after_reset=None,
            meaning="excess",
        )
    ]
    if carry:
        states.append(
            StateWord(
                name="unlimited_rest",
                wide=True,
                low=-half,
                high=half - 1,
                signal=None,
                lag=0,
                after_reset=None,
                meaning="rest",
            )
        )
    if held:
        states.append(
            StateWord(
                name="standing",
                wide=True,
                low=-(1 << 20),
                high=1 << 20,
                signal=None,
                lag=0,
                after_reset="start",
                meaning="held",
            )
        )
    controller = WordController(
        name="small",
        word_bits=16,
        sum_bits=32,
        inputs=("reference", "position", "added"),
        update=update,
        output="code",
        excess="excess",
        reset=tuple(_with_ranges((clip,), ("position", "output"))),
        resting=tuple(_with_ranges((rest,), ("position",))),
        state=tuple(states),
    )
    verify_ranges(controller)
    return controller


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (-6, -4),
        (-5, -4),
        (-3, -2),
        (-2, -1),
        (-1, -1),
        (0, 0),
        (1, 1),
        (2, 2),
        (3, 2),
        (5, 4),
        (6, 5),
    ],
)
def test_ties_go_up(error: int, code: int) -> None:
    """0.75 x 2 = 1.5 becomes 2 and 0.75 x (-2) = -1.5 becomes -1."""
    controller = small(3, 2)
    assert IntegerController(controller).update(error, 0) == code
    assert LaneController(controller, 1).update(error, 0).tolist() == [code]


def test_every_tie_of_a_small_list() -> None:
    controller = small(5, 3)
    single, lanes = IntegerController(controller), LaneController(controller, 1999)
    errors = np.arange(-999, 1000)
    codes = lanes.update(errors, np.zeros_like(errors))
    expected = [
        max(-500, min(500, floor(Fraction(5 * int(e), 8) + Fraction(1, 2)))) for e in errors
    ]
    assert codes.tolist() == expected
    assert [single.update(int(e), 0) for e in errors] == expected
    assert sum(5 * int(e) % 8 == 4 for e in errors) > 200  # so many of them were ties


def test_residue_is_carried() -> None:
    """0.75 a sample: after 4 samples exactly 3 codes, whatever the roundings were."""
    single = IntegerController(small(3, 2, carry=True))
    lanes = LaneController(small(3, 2, carry=True), 2)
    codes = [single.update(1, 0) for _ in range(8)]
    assert codes == [1, 1, 0, 1, 1, 1, 0, 1]
    assert [lanes.update(1, 0).tolist() for _ in range(8)] == [[c, c] for c in codes]
    assert single.state["unlimited_rest"] == 0


@given(errors=st.lists(st.integers(-600, 600), min_size=1, max_size=60))
def test_residue_loses_nothing(errors: list[int]) -> None:
    single = IntegerController(small(3, 2, carry=True))
    total = 0
    for error in errors:
        single.update(error, 0)
        total += single.signals["unlimited"]
    assert total + Fraction(single.state["unlimited_rest"], 4) == Fraction(3 * sum(errors), 4)


def test_held_word_stands() -> None:
    single = IntegerController(small(3, 2, held=True))
    single.reset(0, 17)
    assert [single.update(0, 0) for _ in range(3)] == [17, 17, 17]
    assert single.update(4, 0) == 20
    assert single.state["standing"] == 68


@pytest.mark.parametrize(
    ("name", "change"),
    [
        ("unlimited: sum", {"sum_high": 2000}),
        ("unlimited: sum", {"sum_low": -2000}),
        ("unlimited", {"high": 700}),
        ("unlimited", {"low": -700}),
    ],
)
def test_a_value_outside_its_stated_range_is_refused(name: str, change: dict[str, int]) -> None:
    controller = small(3, 2)
    wrong = replace(controller.update[1], **change)
    broken = replace(controller, update=(controller.update[0], wrong, *controller.update[2:]))
    single = IntegerController(broken)
    assert single.update(100, 0) == 75  # within the range as it is stated
    with pytest.raises(OutOfRangeError) as caught:
        for error in (999, -999):
            single.update(error, 0)
    assert caught.value.name == name
    with pytest.raises(OutOfRangeError):  # and numpy does not even start
        LaneController(broken, 1)


def test_a_stored_word_outside_its_range_is_refused() -> None:
    controller = small(3, 2)
    broken = replace(controller, state=(replace(controller.state[0], high=10),))
    with pytest.raises(OutOfRangeError, match="excess_kept"):
        IntegerController(broken).update(999, 0)


def test_a_lag_without_a_word_is_refused() -> None:
    controller = focus_stage()
    broken = replace(controller, state=tuple(w for w in controller.state if w.lag == 0))
    with pytest.raises(OutOfRangeError, match="has no word in the state"):
        IntegerController(broken)


def test_arguments_must_fit_the_type() -> None:
    single, lanes = IntegerController(tilt_mirror()), LaneController(tilt_mirror(), 2)
    assert single.update(32767, -32768) == 1800
    for call in (
        lambda: single.update(32768, 0),
        lambda: single.update(0, -32769),
        lambda: single.update(0, 0, 32768),
        lambda: single.reset(40000, 0),
        lambda: single.resting_output(-32769),
        lambda: lanes.update([0, 32768], [0, 0]),
        lambda: lanes.update([0, 0], [-32769, 0]),
        lambda: lanes.reset([0, 1 << 40], 0),
        lambda: lanes.update([0.5, 0.0], [0, 0]),
    ):
        with pytest.raises(OutOfRangeError):
            call()
    with pytest.raises(OutOfRangeError, match="lanes"):
        LaneController(tilt_mirror(), 0)


def test_offset_codes_and_counts() -> None:
    """Counts around 2040, codes around 512, both reversed."""
    single = IntegerController(valve_spool())
    assert single.resting_output(2040) == 512
    single.reset(2040, 512)
    assert single.update(2040, 2040) == 512
