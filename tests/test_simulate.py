"""The integer paths against each other and against exact rationals; the loop against its own parts.

Rules of this file:

- Exact rationals are the second arithmetic: they know neither lifts nor shifts, only values.
- Stimulus is noise, held levels, extremes of the type, saturation both ways and exact ties.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Iterator
from dataclasses import replace
from fractions import Fraction
from math import floor

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sample_words import all_samples, focus_stage, tilt_mirror, valve_spool
from scipy.integrate import solve_ivp

import plant2.simulate as simulate_module
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
from plant2.loopfile import Loop, loop_from_text
from plant2.plant import Plant, constant_force, holding_effort, plant_of, state_space
from plant2.simulate import (
    IntegerController,
    LaneController,
    Record,
    checked_step,
    count_of,
    effort_per_code,
    resting_state,
    simulate,
)

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


# ------------------------------------------------------------------------------ around a plant


STAGE = """
[loop]
name = "stage"
[plant]
motion = "linear"
mass = "48 g"
damping = "0.9 N*s/m"
stiffness = "2.4 N/mm"
travel = "{travel}"
friction = "{friction}"
bias_force = "{bias}"
{modes}
[actuator]
{drive}
bits = 12
{coding}
[sensor]
full_scale = "1.25 mm"
bits = 14
{sensor}
[processor]
core = "cortex-m4"
clock = "64 MHz"
sample_rate = "20 kHz"
delay = "{delay}"
word = 32
[aim]
law = "pd"
damping_ratio = 0.8
bandwidth = "180 Hz"
[check]
step = "{step}"
"""
CURRENT = 'drive = "current"\nforce_constant = "9.5 N/A"\nfull_scale = "1.5 A"\nlimit = "1.2 A"'
VOLTS = (
    'drive = "voltage"\nforce_constant = "9.5 N/A"\nfull_scale = "12 V"\nlimit = "9.6 V"\n'
    'resistance = "8 ohm"\ninductance = "0.9 mH"'
)
MODE = '[[plant.mode]]\nfrequency = "{f}"\ndamping_ratio = 0.01\nmass = "0.9 kg"\nsign = -1'


def loop_of(
    *,
    travel: str = "1.2 mm",
    friction: str = "0 N",
    bias: str = "0 N",
    modes: str = "",
    drive: str = CURRENT,
    coding: str = "",
    sensor: str = "",
    delay: str = "18 us",
    step: str = "100 um",
) -> Loop:
    return loop_from_text(
        STAGE.format(
            travel=travel,
            friction=friction,
            bias=bias,
            modes=modes,
            drive=drive,
            coding=coding,
            sensor=sensor,
            delay=delay,
            step=step,
        )
    )


def derivative(loop: Loop, force: float) -> Callable[[np.ndarray, float, float], np.ndarray]:
    """x' of the plant, written down from the physics; states as (x, v, q, p, i, filtered)."""
    p = plant_of(loop)
    volts = p.drive == "voltage"
    mode = p.modes[0] if p.modes else None

    def slope(s: np.ndarray, u: float, friction: float) -> np.ndarray:
        x, v, q, w, i, y = s
        push = p.force_constant * i if volts else u
        inner = mode.frequency_rad_per_s if mode else 0.0
        zeta, mass = (mode.damping_ratio, mode.mass) if mode else (0.0, math.inf)
        back = p.force_constant * (v + w)
        return np.array(
            [
                v,
                (push - p.damping * v - p.stiffness * x + force + friction) / p.mass,
                w,
                push / mass - inner**2 * q - 2.0 * zeta * inner * w,
                (u - p.resistance_ohm * i - back) / p.inductance_h if volts else 0.0,
                p.sensor_corner_rad_per_s * (x + (mode.sign * q if mode else 0.0) - y)
                if p.sensor_corner_rad_per_s
                else 0.0,
            ]
        )

    return slope


SITUATIONS = {
    "plain": {},
    "no fraction": {"delay": "100 us"},
    "late by 2.7": {"delay": "135 us"},
    "volts, late, filtered": {
        "drive": VOLTS,
        "delay": "135 us",
        "sensor": 'filter_corner = "3 kHz"',
    },
    "mode, bias": {"modes": MODE.format(f="1.4 kHz"), "bias": "-1.3 N"},
    "fast mode, volts": {"modes": MODE.format(f="9 kHz"), "drive": VOLTS, "delay": "60 us"},
}


@pytest.mark.parametrize("situation", SITUATIONS.values(), ids=SITUATIONS)
def test_loop_against_an_independent_integration(situation: dict[str, str]) -> None:
    """One lane again: Python ints, exact counts, the physics by a Runge-Kutta of order 8."""
    loop, controller = loop_of(**situation), focus_stage()
    plant = plant_of(loop)
    samples, lanes = 90, 3
    start = np.array([0.0, 3.3e-7, -2.1e-5])
    reference = np.array([655, -655, 200])
    noise = np.random.default_rng(8).normal(size=(samples, lanes)) * 2e-7
    record = simulate(
        loop, plant, controller, samples=samples, reference=reference, start=start, noise=noise
    )
    lane = 1
    filtered = plant.sensor_corner_rad_per_s is not None
    step = 1.25e-3 / 8192
    single = IntegerController(controller)

    def count(position: float) -> int:
        return floor(Fraction(position) / Fraction(step) + Fraction(1, 2))

    first = count(start[lane])
    resting = single.resting_output(first)
    single.reset(first, resting)
    per_code = (12.0 if plant.drive == "voltage" else 1.5 * 9.5) / 2048
    u0 = resting * per_code
    slope = derivative(loop, constant_force(plant))
    # At rest: mode, current and filter as the held output leaves them.
    current = u0 / plant.resistance_ohm if plant.drive == "voltage" else 0.0
    push = plant.force_constant * current if plant.drive == "voltage" else u0
    q = push / (plant.modes[0].mass * plant.modes[0].frequency_rad_per_s ** 2) if plant.modes else 0
    shift = plant.modes[0].sign * q if plant.modes else 0.0
    state = np.array([start[lane] - shift, 0.0, q, 0.0, current, start[lane]])
    efforts = [u0] * 10
    times, positions = record.motion(lane)
    period, delay = 1.0 / 20e3, loop.processor.delay_s

    def position_of(s: np.ndarray) -> float:
        return float(s[0] + (plant.modes[0].sign * s[2] if plant.modes else 0.0))

    seen = {0: position_of(state)}
    for k in range(samples):
        measured = (state[5] if filtered else position_of(state)) + noise[k, lane]
        counted = count(float(measured))
        assert record.counts[k, lane] == counted, k
        code = single.update(int(reference[lane]), counted)
        assert record.codes[k, lane] == code, k
        assert record.limited[k, lane] == single.limited()
        efforts.append(code * per_code)
        # Which output acts when: sample j acts from j T + delay.
        whole = int(delay / period + 1e-9)
        early = delay - whole * period
        pieces = [(early, efforts[-2 - whole]), (period - early, efforts[-1 - whole])]
        for span, u in pieces:
            if span > 1e-12:
                solved = solve_ivp(
                    lambda t, s, u=u: slope(s, u, 0.0),
                    (0.0, span),
                    state,
                    method="DOP853",
                    rtol=1e-12,
                    atol=1e-20,
                )
                state = solved.y[:, -1]
        seen[k + 1] = position_of(state)
    size = max(abs(v) for v in seen.values())
    for k, value in seen.items():
        at = int(np.argmin(np.abs(times - k * period)))
        assert positions[at] == pytest.approx(value, abs=2e-10 * size)
    assert size > 5e-5  # the loop has moved


def test_an_output_late_by_many_samples() -> None:
    """Nothing moves before the delay is over, and then at once."""
    loop = loop_of(delay="512.5 us")  # 10.25 periods
    record = simulate(loop, plant_of(loop), focus_stage(), samples=14, reference=600, start=[0.0])
    assert record.codes[:10, 0].tolist() == [808] * 10
    times, positions = record.motion(0)
    still = times <= 512.5e-6 + 1e-12
    assert np.all(positions[still] == 0.0)
    assert np.all(positions[~still] > 0.0)


def test_reversed_and_offset_converters_give_the_same_motion() -> None:
    """Both polarities reversed, offset codes and counts: the words differ, the motion does not."""
    loop = loop_of()
    actuator = replace(loop.actuator, polarity=-1, zero_code=2048, low_code=0, high_code=4095)
    sensor = replace(loop.sensor, polarity=-1, zero_count=8000, low_count=0, high_count=16383)
    turned = replace(loop, actuator=actuator, sensor=sensor)
    plant = plant_of(loop)
    codes = np.random.default_rng(3).integers(-900, 900, size=(60, 1))
    plain, other = (
        simulate(
            each,
            plant,
            open_loop(),
            samples=60,
            reference=0,
            start=[1e-5],
            output=[zero],
            added=sent,
        )
        for each, sent, zero in ((loop, codes, 0), (turned, 2048 - codes, 2048))
    )
    assert np.array_equal(plain.motion(0)[1], other.motion(0)[1])
    assert np.array_equal(plain.codes, 2048 - other.codes)
    assert plain.peak_code.tolist() == other.peak_code.tolist() == [int(np.abs(codes).max())]
    # floor(-x + 1/2) and floor(x + 1/2) differ in sign but for ties, which do not occur here.
    assert np.array_equal(plain.counts, 8000 - other.counts)
    assert np.ptp(plain.counts) > 100


def test_counts_are_clipped_to_the_converter() -> None:
    loop = loop_of()
    positions = [-1.0, -1.25e-3, -7.6e-8, 7.6e-8, 1.5e-7, 1.2499e-3, 1.0]
    assert count_of(loop, positions).tolist() == [-8192, -8192, 0, 0, 1, 8191, 8191]
    step = loop.sensor.step
    assert count_of(loop, [0.5 * step, -0.5 * step, 1.5 * step]).tolist() == [1, 0, 2]


def test_counts_within_a_run_round_like_those_outside() -> None:
    """A plant that stays at 0, and noise that puts the sensor onto ties and beside them."""
    loop = loop_of()
    step = loop.sensor.step
    levels = np.array([0.5, 0.49995, 0.50005, -0.5, -0.49995, -0.50005, 1.5, 2.49999, -7.5, 9e4])
    record = simulate(
        loop,
        plant_of(loop),
        open_loop(),
        samples=levels.size,
        reference=0,
        start=[0.0],
        output=[0],
        added=0,
        noise=levels[:, np.newaxis] * step,
    )
    assert record.counts[:, 0].tolist() == [1, 0, 1, 0, 0, -1, 2, 2, -7, 8191]
    assert record.counts[:, 0].tolist() == count_of(loop, levels * step).tolist()


def open_loop() -> WordController:
    """A controller that passes on what is added: any sequence of codes, whatever it measures."""
    update = (
        WordEquation(
            name="code",
            meaning="returned code",
            unit="code",
            terms=(WordTerm(signal="added"),),
            limit=(-4095, 4095),
        ),
        WordEquation(
            name="excess",
            meaning="what the limit took away",
            unit="code",
            terms=(WordTerm(signal="added"), WordTerm(signal="code", sign=-1)),
            wide=True,
        ),
    )
    update = tuple(_with_ranges(update, ("reference", "position", "added")))
    rest = WordEquation(
        name="rest", meaning="rest", unit="code", terms=(WordTerm(signal="position"),), limit=(0, 0)
    )
    controller = WordController(
        name="open_loop",
        word_bits=16,
        sum_bits=32,
        inputs=("reference", "position", "added"),
        update=update,
        output="code",
        excess="excess",
        reset=(),
        resting=tuple(_with_ranges((rest,), ("position",))),
        state=(
            StateWord(
                name="excess_kept",
                wide=True,
                low=update[1].low,
                high=update[1].high,
                signal="excess",
                lag=0,
                after_reset=None,
                meaning="excess",
            ),
        ),
    )
    verify_ranges(controller)
    return controller


# ---------------------------------------------------------------------------- friction and stops


def slow(loop: Loop, rate_hz: float = 1000.0) -> Loop:
    """The same loop sampled slowly, its output acting at once."""
    return replace(loop, processor=replace(loop.processor, sample_rate_hz=rate_hz, delay_s=0.0))


def main_states(record: Record, lane: int) -> tuple[np.ndarray, np.ndarray]:
    """Times and states of one lane at all its nodes."""
    (track,) = (t for t in record.tracks if lane in t.lanes)
    at = np.nonzero(track.lanes == lane)[0]
    loaded = [part.load().select(at) for part in track.parts]
    return (
        np.concatenate([each.times_s for each in loaded]),
        np.concatenate([each.states[:, 0] for each in loaded]),
    )


def test_swings_with_friction_follow_the_closed_form() -> None:
    """|X[n+1]| = rho (|X[n]| - xc) - xc, each swing of pi/wd, until it sticks within xc.

    Feeny and Liang, J. Sound Vib. 195 (1996), from memory; numbers below with 12 digits by hand.
    """
    w0, alpha, friction = 2.0 * math.pi * 10.0658, 0.6, 0.06
    plant = Plant(mass=1.0, damping=2.0 * alpha, stiffness=w0**2, friction=friction, travel=1.0)
    loop = slow(loop_of())
    record = simulate(
        loop, plant, open_loop(), samples=1300, reference=0, start=[1e-3], output=[0], added=0
    )
    times, states = main_states(record, 0)
    turns = np.nonzero((states[:, 1] == 0.0) & (times > 0.0))[0]
    wd = math.sqrt(w0**2 - alpha**2)
    xc, rho = friction / w0**2, math.exp(-alpha * math.pi / wd)
    expected, n = 1e-3, 0
    while abs(expected) > xc:
        n += 1
        expected = rho * (abs(expected) - xc) - xc
        assert abs(states[turns[n - 1], 0]) == pytest.approx(abs(expected), rel=1e-11)
        assert states[turns[n - 1], 0] * (-1) ** n > 0.0
        assert times[turns[n - 1]] == pytest.approx(n * math.pi / wd, rel=1e-12)
        if n <= 2:
            digits = [9.41074796395e-4, 8.83879957085e-4][n - 1]
            assert expected == pytest.approx(digits, rel=5e-12)
    assert n == 23
    assert abs(expected) == pytest.approx(4.372493609e-6, rel=1e-9)
    # From then on it stands still.
    assert np.all(states[turns[n - 1] :, 0] == states[turns[n - 1], 0])
    assert np.all(states[turns[n - 1] :, 1] == 0.0)


def test_a_block_on_a_rough_surface() -> None:
    """S. S. Rao, Mechanical Vibrations, ch. 2 (from memory): 10 cm become 1 cm in 5 cycles of 2 s.

    The printed friction coefficient is 0.1132; it is put in, and the motion must be the problem's.
    """
    w0 = 5.0 * 2.0 * math.pi / 2.0
    plant = Plant(mass=1.0, stiffness=w0**2, friction=0.1132 * 9.81, travel=1.0)
    record = simulate(
        slow(loop_of(), 100.0),
        plant,
        open_loop(),
        samples=210,
        reference=0,
        start=[0.1],
        output=[0],
        added=0,
    )
    times, states = main_states(record, 0)
    turns = np.nonzero((states[:, 1] == 0.0) & (times > 0.0))[0]
    assert states[turns[9], 0] == pytest.approx(0.01, abs=5e-5)
    assert times[turns[9]] == pytest.approx(2.0, rel=1e-9)


def test_it_sticks_until_the_push_exceeds_the_friction() -> None:
    """Force behind a lag: f (1 - exp(-wc t)) reaches the friction at a time in closed form."""
    corner = 2.0 * math.pi * 300.0
    plant = Plant(
        mass=0.05, friction=1.0, travel=1.0, current_bandwidth_rad_per_s=corner, force_constant=9.5
    )
    loop = loop_of()
    per_code = effort_per_code(loop, plant)
    weak, strong = math.floor(1.0 / per_code), math.ceil(2.5 / per_code)
    codes = np.array([[weak, strong]] * 120)
    record = simulate(
        loop,
        plant,
        open_loop(),
        samples=120,
        reference=0,
        start=[0.0, 0.0],
        output=[0, 0],
        added=codes,
    )
    assert np.all(record.motion(0)[1] == 0.0)  # 0.998 N for ever: not by a hair
    times, states = main_states(record, 1)
    first = int(np.argmax(states[:, 1] > 0.0))
    released = times[first - 1]
    f = strong * per_code
    exact = loop.processor.delay_s - math.log1p(-1.0 / f) / corner
    assert released == pytest.approx(exact, rel=1e-11)
    # And then it moves as the rest of the force says: m v = integral of (f(t) - 1).
    t = times[-1] - loop.processor.delay_s
    t0 = exact - loop.processor.delay_s

    def impulse(t: float) -> float:
        return (f - 1.0) * t + f * math.exp(-corner * t) / corner

    assert states[-1, 1] == pytest.approx((impulse(t) - impulse(t0)) / 0.05, rel=1e-10)


FRICTION_SITUATIONS = {
    "spring": {"friction": "1.5 N"},
    "volts, mode": {
        "friction": "1.2 N",
        "drive": VOLTS,
        "modes": MODE.format(f="1.4 kHz"),
        "delay": "60 us",
    },
    "stop, bias": {"friction": "0.3 N", "travel": "30 um", "step": "20 um", "bias": "0.5 N"},
    "stop, no friction, mode": {
        "travel": "25 um",
        "step": "20 um",
        "modes": MODE.format(f="800 Hz"),
    },
}


@pytest.mark.parametrize("situation", FRICTION_SITUATIONS.values(), ids=FRICTION_SITUATIONS)
def test_stick_slip_and_stops_against_an_independent_integration(
    situation: dict[str, str],
) -> None:
    """The same events found by a Runge-Kutta with root finding on velocity, push and position."""
    loop, rate_hz = loop_of(**situation), 4000.0
    loop = replace(loop, processor=replace(loop.processor, sample_rate_hz=rate_hz))
    plant = plant_of(loop)
    rng = np.random.default_rng(12)
    samples = 240
    # Levels that are held for a while, some too weak to move it.
    levels = np.repeat(rng.integers(-1, 2, size=12) * rng.integers(20, 500, size=12), 20)
    record = simulate(
        loop,
        plant,
        open_loop(),
        samples=samples,
        reference=0,
        start=[0.0],
        output=[0],
        added=levels[:, np.newaxis],
    )
    per_code = (12.0 if plant.drive == "voltage" else 1.5 * 9.5) / 2048
    slope = derivative(loop, constant_force(plant))
    mode = plant.modes[0] if plant.modes else None

    def push(s: np.ndarray, u: float) -> float:
        """All but friction and stop on a main mass at rest."""
        at_rest = s.copy()
        at_rest[1] = 0.0
        return float(plant.mass * slope(at_rest, u, 0.0)[1])

    travel, level = plant.travel, plant.friction
    state = np.zeros(6)
    held, direction, side = False, 0.0, 0.0
    kinds = {"stuck": 0, "left": 0, "hit": 0, "turned": 0}

    def decide(s: np.ndarray, u: float) -> tuple[bool, float, float]:
        n = push(s, u)
        low = -math.inf if side < 0 else -level
        high = math.inf if side > 0 else level
        if low <= n <= high and (level > 0 or side):
            return True, 0.0, side
        return False, math.copysign(1.0, n), 0.0

    held, direction, side = decide(state, 0.0)
    period, delay = 1.0 / rate_hz, loop.processor.delay_s
    whole = int(delay / period + 1e-9)
    early = delay - whole * period
    efforts = np.concatenate([np.zeros(whole + 2), levels * per_code])
    times, positions = record.motion(0)
    worst, size = 0.0, 0.0
    for k in range(samples):
        older, newer = efforts[k + 1], efforts[k + 2]
        for span, u in ((early, older), (period - early, newer)):
            t = 0.0
            if held:
                held, direction, side = decide(state, u)
            while t < span - 1e-15:
                if held:

                    def rhs(t: float, s: np.ndarray, u: float = u) -> np.ndarray:
                        d = slope(s, u, 0.0)
                        d[1] = 0.0
                        return d

                    low = -math.inf if side < 0 else -level
                    high = math.inf if side > 0 else level

                    def leaves(
                        t: float, s: np.ndarray, u: float = u, low: float = low, high: float = high
                    ) -> float:
                        n = push(s, u)
                        return min(
                            high - n if high < math.inf else 1.0,
                            n - low if low > -math.inf else 1.0,
                        )

                    events = [leaves]
                    leaves.direction = -1
                else:

                    def rhs(
                        t: float, s: np.ndarray, u: float = u, f: float = -level * direction
                    ) -> np.ndarray:
                        return slope(s, u, f)

                    def stands(t: float, s: np.ndarray) -> float:
                        return float(s[1])

                    def hits(t: float, s: np.ndarray) -> float:
                        return travel - abs(float(s[0]))

                    stands.direction = -direction
                    hits.direction = -1
                    events = [hits] + ([stands] if level > 0 else [])
                for event in events:
                    event.terminal = True
                solved = solve_ivp(
                    rhs,
                    (t, span),
                    state,
                    method="DOP853",
                    rtol=1e-11,
                    atol=1e-18,
                    events=events,
                    max_step=span / 8,
                )
                state, t = solved.y[:, -1].copy(), float(solved.t[-1])
                if solved.status == 1:
                    if held:
                        held, side = False, 0.0
                        direction = math.copysign(1.0, push(state, u))
                        kinds["left"] += 1
                        continue
                    if solved.t_events[0].size:
                        side = math.copysign(1.0, float(state[0]))
                        state[0] = side * travel
                        kinds["hit"] += 1
                    state[1] = 0.0
                    was = direction
                    held, direction, side = decide(state, u)
                    kinds["stuck"] += held
                    kinds["turned"] += not held and direction != was
        true = float(state[0] + (mode.sign * state[2] if mode else 0.0))
        at = int(np.argmin(np.abs(times - (k + 1) * period)))
        worst = max(worst, abs(positions[at] - true))
        size = max(size, abs(true))
    assert worst <= 1e-11 * size, kinds
    assert size > 1e-5
    if plant.friction:
        assert kinds["stuck"] >= 2
    if math.isfinite(travel) and travel < 1e-4:
        assert kinds["hit"] >= 3
        assert record.touched_stop.tolist() == [True]
    else:
        assert record.touched_stop.tolist() == [False]


def test_an_inelastic_stop_takes_the_speed_and_gives_nothing_back() -> None:
    """A free mass under a constant force: when it arrives, how fast, and that it stays there."""
    plant = Plant(mass=0.05, travel=2e-4, force_constant=9.5)
    loop = loop_of()
    f = 100 * effort_per_code(loop, plant)
    codes = np.array([[100]] * 200 + [[0]] * 100 + [[-100]] * 300)
    record = simulate(
        loop, plant, open_loop(), samples=600, reference=0, start=[0.0], output=[0], added=codes
    )
    times, states = main_states(record, 0)
    arrival = loop.processor.delay_s + math.sqrt(2.0 * 0.05 * 2e-4 / f)
    hit = int(np.argmax(states[:, 0] >= 2e-4 * (1.0 - 1e-14)))
    assert times[hit] == times[hit + 1] == pytest.approx(arrival, rel=1e-12)
    # Kinetic energy on arrival is the work of the force; afterwards there is none.
    assert 0.5 * 0.05 * states[hit, 1] ** 2 == pytest.approx(f * 2e-4, rel=1e-12)
    assert states[hit + 1].tolist() == [2e-4, 0.0]
    leaves = 300 / 20e3 + loop.processor.delay_s
    stays = (times > arrival) & (times <= leaves)
    assert np.all(states[stays] == [2e-4, 0.0])
    other = leaves + math.sqrt(2.0 * 0.05 * 4e-4 / f)
    hit = int(np.argmax(states[:, 0] <= -2e-4 * (1.0 - 1e-14)))
    assert times[hit] == pytest.approx(other, rel=1e-12)
    assert states[-1].tolist() == [-2e-4, 0.0]
    assert record.touched_stop.tolist() == [True]


def test_only_lanes_that_touch_a_stop_are_run_again() -> None:
    loop = loop_of(travel="60 um", step="20 um")
    plant, controller = plant_of(loop), focus_stage()
    start = np.array([0.0, 1e-6, 0.0, -2e-6])
    # 250 counts are 38 um, 500 counts are beyond the stop.
    reference = np.array([250, 500, -250, -500])
    together = simulate(loop, plant, controller, samples=300, reference=reference, start=start)
    assert together.touched_stop.tolist() == [False, True, False, True]
    for lane in range(4):
        alone = simulate(
            loop,
            plant,
            controller,
            samples=300,
            reference=reference[lane],
            start=start[lane : lane + 1],
        )
        assert np.array_equal(alone.codes[:, 0], together.codes[:, lane])
        assert np.array_equal(alone.counts[:, 0], together.counts[:, lane])
        assert alone.motion(0)[1] == pytest.approx(together.motion(lane)[1], abs=1e-17)
        assert alone.peak_code[0] == together.peak_code[lane]
        assert alone.saturated[0] == together.saturated[lane]
    # A stop that is just not reached changes nothing.
    far = simulate(
        loop_of(travel="1 mm"),
        plant_of(loop_of(travel="1 mm")),
        controller,
        samples=300,
        reference=reference,
        start=start,
    )
    assert np.array_equal(far.codes[:, 0], together.codes[:, 0])
    assert not np.array_equal(far.codes[:, 1], together.codes[:, 1])


def test_next_to_no_friction_is_no_friction() -> None:
    """The two ways of running the plant agree where both apply."""
    loop = loop_of(modes=MODE.format(f="1.4 kHz"), delay="60 us")
    plant = plant_of(loop)
    arguments = {"samples": 120, "reference": np.array([300, -300]), "start": [1e-7, -2e-7]}
    free = simulate(loop, plant, focus_stage(), **arguments)
    rubbing = simulate(loop, replace(plant, friction=1e-13), focus_stage(), **arguments)
    assert np.array_equal(free.codes, rubbing.codes)
    for lane in range(2):
        times, positions = free.motion(lane)
        other_times, other = rubbing.motion(lane)
        at = [int(np.argmin(np.abs(other_times - t))) for t in times]
        assert other[at] == pytest.approx(positions, abs=1e-11 * np.abs(positions).max())


def test_a_start_beyond_the_stop_is_refused() -> None:
    loop = loop_of(travel="60 um", step="20 um")
    with pytest.raises(OutOfRangeError, match="beyond the end stop"):
        simulate(loop, plant_of(loop), focus_stage(), samples=5, reference=0, start=[70e-6])
    resting = simulate(
        loop,
        plant_of(loop),
        open_loop(),
        samples=20,
        reference=0,
        start=[60e-6],
        output=[50],
        added=50,
    )
    assert np.all(resting.motion(0)[1] == 60e-6)  # 0.35 N outward, and the spring pulls 0.14 N


# ------------------------------------------------------------------------------- the checked step


def test_checked_step_is_the_one_that_is_defined() -> None:
    loop = loop_of()
    controller = focus_stage()
    step = loop.sensor.step
    result = checked_step(loop, plant_of(loop), controller, samples=500)
    # 100 um are 655.36 counts.
    assert result.size == pytest.approx(655 * step, rel=1e-15)
    assert result.reference_count.tolist() == [655] * 16 + [-655] * 16
    assert result.start[:16] / step == pytest.approx((np.arange(16) + 0.5) / 16 - 0.5)
    assert result.start[16:].tolist() == result.start[:16].tolist()
    record = result.record
    assert record.lanes == 32 and record.samples == 500 and record.first_kept == 0
    assert record.start_count.tolist() == [0] * 32
    for lane in (0, 15, 16, 31):
        single = IntegerController(controller)
        single.reset(0, single.resting_output(0))
        codes = [
            single.update(int(result.reference_count[lane]), int(count))
            for count in record.counts[:, lane]
        ]
        assert codes == record.codes[:, lane].tolist()
        assert record.counts[0, lane] == 0  # t = 0 sees the start and the reference already
    figures = result.figures
    assert result.overshoot_percent == figures.overshoot_percent.max()
    assert result.settling_time_s == figures.settling_time_s.max()
    assert result.rise_time_s == figures.rise_time_s.max()
    assert result.final_error == figures.final_error.max()
    assert result.peak_code == np.abs(record.codes).max() == record.peak_code.max()
    assert not result.saturated and not result.touched_stop
    # Figures of one lane, read off a fine interpolation of its own motion.
    lane = 5
    times, positions = record.motion(lane)
    final = positions[times >= 0.8 * times[-1]].mean()
    assert figures.final_value[lane] == pytest.approx(final, abs=0.02 * step)
    outside = np.nonzero(np.abs(positions - final) > 0.01 * result.size)[0]
    assert figures.settling_time_s[lane] == pytest.approx(times[outside[-1]], abs=5e-5)
    assert result.band == 0.01


def test_checked_step_that_saturates_and_hits() -> None:
    loop = replace(loop_of(travel="1.2 mm"), step=1.19e-3)
    result = checked_step(loop, plant_of(loop), focus_stage(), samples=800)
    assert result.saturated
    assert result.peak_code == 1638
    limited = result.record.limited
    assert set(np.unique(limited[:, 0])) >= {0, 1}
    assert set(np.unique(limited[:, 31])) >= {0, -1}
    assert result.touched_stop == bool(result.figures.peak_value.max() >= 1.2e-3)


def test_a_band_below_the_ripple_never_settles() -> None:
    """One count of step and a sensor that resolves just that: the loop hunts within the band."""
    loop = replace(loop_of(), step=1.6e-7)
    limits = replace(loop.limits, settling_band=0.001)
    result = checked_step(replace(loop, limits=limits), plant_of(loop), focus_stage(), samples=600)
    assert math.isnan(result.settling_time_s)
    assert result.rest_peak_to_peak_count > 0.002
    with pytest.raises(OutOfRangeError, match="half a count"):
        checked_step(replace(loop, step=7e-8), plant_of(loop), focus_stage(), samples=10)


def test_long_runs_give_the_same_in_chunks(monkeypatch: pytest.MonkeyPatch) -> None:
    """Parts that simulate themselves again are the parts that were."""
    for friction in ("0 N", "0.05 N"):
        loop = loop_of(friction=friction)
        whole = checked_step(loop, plant_of(loop), focus_stage(), samples=240)
        with monkeypatch.context() as patch:
            patch.setattr(simulate_module, "_CHUNK", 37)
            patch.setattr(simulate_module, "_MOST_NUMBERS", 0)
            patch.setattr(simulate_module, "_MOST_KEPT", 32 * 50)
            done: list[float] = []
            pieced = checked_step(
                loop, plant_of(loop), focus_stage(), samples=240, progress=done.append
            )
            assert len(done) == 7 and done == sorted(done) and done[-1] == 1.0
            record = pieced.record
            assert record.first_kept == 190 and record.codes.shape == (50, 32)
            assert np.array_equal(record.codes, whole.record.codes[190:])
            assert np.array_equal(record.counts, whole.record.counts[190:])
            assert np.array_equal(record.limited, whole.record.limited[190:])
            assert np.array_equal(record.peak_code, whole.record.peak_code)
            for lane in (0, 31):
                for left, right in zip(record.motion(lane), whole.record.motion(lane), strict=True):
                    assert left == pytest.approx(right, rel=1e-12, abs=1e-19)
        for name in whole.figures.__slots__:
            assert getattr(pieced.figures, name) == pytest.approx(
                getattr(whole.figures, name),
                rel=1e-11,
                abs=1e-11 if name == "overshoot_percent" else 1e-17,
                nan_ok=True,
            ), name


def test_friction_leaves_the_error_that_the_gain_allows() -> None:
    """Stuck within friction / (k + kp), with a current loop whose lag lets it creep off late."""
    loop = loop_of(friction="0.05 N", drive=CURRENT + '\nbandwidth = "8 kHz"')
    result = checked_step(loop, plant_of(loop), focus_stage(), samples=300)
    step, code = loop.sensor.step, 1.5 * 9.5 / 2048
    stiff = 2400.0 + 1.294 * code / step
    # One count and one code are not resolved either.
    assert 0.5 * 0.05 / stiff < result.final_error < (0.05 + code) / stiff + step
    assert result.rest_peak_to_peak_count == 0.0


def test_bad_runs_are_refused() -> None:
    loop = loop_of()
    plant = plant_of(loop)
    with pytest.raises(OutOfRangeError, match="samples"):
        simulate(loop, plant, focus_stage(), samples=0, reference=0, start=[0.0])
    with pytest.raises(OutOfRangeError, match="integers"):
        simulate(loop, plant, focus_stage(), samples=5, reference=0.5, start=[0.0])
    with pytest.raises(OutOfRangeError, match="does not fit a word"):
        simulate(loop, plant, focus_stage(), samples=5, reference=1 << 31, start=[0.0])
    record = simulate(loop, plant, focus_stage(), samples=5, reference=0, start=[0.0])
    with pytest.raises(OutOfRangeError, match="lane"):
        record.motion(1)


def test_resting_states_are_at_rest() -> None:
    loop = loop_of(drive=VOLTS, modes=MODE.format(f="1.4 kHz"), sensor='filter_corner = "20 kHz"')
    plant = plant_of(loop)
    space = state_space(plant)
    effort = holding_effort(plant, 2e-4)
    states = resting_state(space, position=[2e-4], effort=[effort], force=[constant_force(plant)])
    slope = space.a @ states[0] + space.b * effort
    assert np.abs(slope).max() <= 1e-9 * np.abs(space.a).max() * 2e-4
    assert space.c_position @ states[0] == pytest.approx(2e-4, rel=1e-12)
    assert space.c_measured @ states[0] == pytest.approx(2e-4, rel=1e-12)
    assert float(space.c_current @ states[0]) == pytest.approx(effort / 8.0, rel=1e-12)
