"""Hostile inputs against the proven bounds, on the integers that run.

Rules of this file:

- Nothing may ever exceed a bound; a bound that hostile inputs come within a few percent of cannot
  be a few percent too small, so the ratios are part of the tests.
- Extremes are replayed on `IntegerController`, the reference on Python ints.
- Loops run by `simulate`, which shares nothing with the bounds.
"""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from sample_words import all_samples
from test_bounds import TAU, VARIANTS, _free_response, built, gains_of, textbook_pid

from plant2.attack import (
    SeenRange,
    _Pair,
    seen_deviation,
    seen_limit_cycle,
    seen_ranges,
)
from plant2.bounds import (
    ControllerBounds,
    controller_bounds,
    deviation,
    limit_cycles,
    loop_peaks,
    loop_responses,
    ranges,
)
from plant2.design import Gains, Task, place_gains, task_of
from plant2.equations import WordController
from plant2.errors import DesignError, OutOfRangeError
from plant2.plant import constant_force
from plant2.simulate import IntegerController, LaneController, simulate
from plant2.words import words_of
from tests.loops import PID, reference_loop

ALONE: dict[str, WordController] = {f"stored {c.name}": c for c in all_samples()}


@cache
def alone(name: str) -> tuple[WordController, ControllerBounds, tuple[SeenRange, ...]]:
    if name in ALONE:
        controller = ALONE[name]
    else:
        loop, bits = name.split()
        controller = built(loop, int(bits))[1]
    bounds = controller_bounds(controller)
    return controller, bounds, seen_ranges(controller, bounds=bounds, warm_up=300, last=40)


CASES = (
    *ALONE,
    "pd 32",
    "pid 16",
    "pid 32",
    "lead 32",
    "reversed 16",
    "offset 32",
    "focus_stage 32",
    "lens_carrier 16",
    "scan_mirror 32",
    "valve_spool 32",
    "pid_notch 32",
)

LEFT = {
    # a limit of a signal that feeds back stands between it and its bound
    "notch1_gap",
}
"""Signals that hostile inputs do not bring near their bounds; every one leans on an inner limit."""


# ------------------------------------------------------------------------------ controllers alone


@pytest.mark.parametrize("name", CASES)
def test_every_signal_comes_near_its_bound_and_never_beyond(name: str) -> None:
    controller, bounds, seen = alone(name)
    for s, b in zip(seen, bounds.signals, strict=True):
        assert s.name == b.name
        assert b.low <= s.low <= s.high <= b.high, s.name
        reached = max(-s.low, s.high) / max(b.bound, 1)
        if b.bound > 4 and not b.at_limit and not b.leans_on:
            assert reached >= 0.9, (s.name, reached)
        elif s.name not in LEFT and b.bound > 4:
            assert reached >= 0.9, (s.name, reached)
    # both ends are real: the reference arithmetic makes the same words
    machine = IntegerController(controller)
    for s in seen:
        for recipe, value in ((s.low_recipe, s.low), (s.high_recipe, s.high)):
            machine.reset(recipe.position, recipe.output)
            for reference, position, added in recipe.inputs:
                machine.update(int(reference), int(position), int(added))
            assert machine.signals[s.name] == value


@pytest.mark.parametrize("name", ["pd 32", "pid 32", "lead 32", "scan_mirror 32"])
def test_linear_bounds_are_attained_to_the_last_steps(name: str) -> None:
    """Where no inner limit is in the way, the worst inputs reach all but the rounding."""
    _, bounds, seen = alone(name)
    checked = 0
    for s, b in zip(seen, bounds.signals, strict=True):
        if b.linear and not b.leans_on:
            assert b.high - s.high <= 2 and s.low - b.low <= 2
            checked += 1
    assert checked


@pytest.mark.parametrize("name", CASES)
def test_random_jumps_stay_within(name: str) -> None:
    controller, bounds, _ = alone(name)
    rng = np.random.default_rng(7)
    lanes, samples = 128, 300
    top = (1 << (controller.word_bits - 1)) - 1
    machine = LaneController(controller, lanes)
    machine.reset(rng.integers(-top, top, lanes), rng.integers(-top, top, lanes))
    size = 10.0 ** rng.uniform(0.0, math.log10(top), (3, lanes))
    low = {b.name: b.low for b in bounds.signals}
    high = {b.name: b.high for b in bounds.signals}
    inputs = np.zeros((3, lanes), dtype=np.int64)
    for _ in range(samples):
        jump = rng.random((3, lanes)) < 0.2
        inputs = np.where(jump, np.rint(rng.uniform(-1, 1, (3, lanes)) * size), inputs)
        inputs = np.clip(inputs.astype(np.int64), -top, top)
        machine.update(*inputs)
        for signal, words in machine.signals.items():
            assert low[signal] <= words.min() and words.max() <= high[signal], signal


@pytest.mark.parametrize("name", CASES)
def test_reset_leaves_what_constant_inputs_would(name: str) -> None:
    """The proofs take a reset for the end of an endless rest: no state word may move after it."""
    controller, _, _ = alone(name)
    machine = IntegerController(controller)
    rng = np.random.default_rng(3)
    clips = {
        e.terms[0].signal: e
        for e in controller.update
        if e.limit is not None and e.terms[0].signal in ("reference", "position")
    }
    low, high = -(1 << (controller.word_bits - 1)), (1 << (controller.word_bits - 1)) - 1
    spans = [
        sorted(e.terms[0].factor * (edge - e.constant) for edge in e.limit or ())
        for e in clips.values()
    ]
    inside = max(s[0] for s in spans), min(s[1] for s in spans)
    tried = [*inside, 0, *(int(v) for v in rng.integers(*inside, 40))]
    for position in tried:
        output = machine.resting_output(position)
        for code in (output, low, high):
            machine.reset(position, code)
            before = dict(machine.state)
            first = machine.update(position, position)
            assert machine.update(position, position) == first
            moved = {k for k, v in machine.state.items() if v != before[k]}
            assert moved <= {"excess"}, (position, code, moved)


@settings(max_examples=20)
@given(
    law=st.sampled_from(["pd", "pid"]),
    bits=st.sampled_from([16, 32]),
    kp=st.floats(200.0, 60000.0),
    kd=st.floats(1.0, 80.0),
    ki=st.floats(1e3, 5e6),
    corner=st.floats(30.0, 2400.0),
    beta=st.floats(0.01, 1.2),
    seed=st.integers(0, 1000),
)
def test_any_gains(
    law: str, bits: int, kp: float, kd: float, ki: float, corner: float, beta: float, seed: int
) -> None:
    """Gains of any sense: bounds hold against jumps between the ends of all inputs."""
    task = task_of(reference_loop(*(PID if law == "pid" else ())))
    gains = Gains(
        law=law,
        kp=kp,
        kd=kd,
        ki=ki if law == "pid" else 0.0,
        kff=200.0 if law == "pd" else 0.0,
        beta=beta if law == "pid" else 1.0,
        derivative_corner_hz=corner,
        integral_corner_hz=None,
    )
    try:
        controller = words_of(task, gains, bits).controller
    except DesignError:
        assume(False)
        raise
    bounds = controller_bounds(controller)
    machine = LaneController(controller, 64)
    rng = np.random.default_rng(seed)
    machine.reset(rng.integers(-30000, 30000, 64), rng.integers(-2000, 2000, 64))
    rate = 10.0 ** rng.uniform(-1.5, 0.0, 64)
    side = rng.integers(0, 2, (3, 64))
    ends = np.array([[-32768, 32767], [-32768, 32767], [-4096, 4096]])
    ends = np.clip(ends, -(1 << (bits - 1)), (1 << (bits - 1)) - 1)
    largest = {b.name: 0 for b in bounds.signals}
    for _ in range(150):
        side = np.where(rng.random((3, 64)) < rate, 1 - side, side)
        inputs = np.take_along_axis(ends, side, axis=1)
        machine.update(*inputs)
        for signal, words in machine.signals.items():
            largest[signal] = max(largest[signal], int(np.abs(words).max()))
            b = bounds.signal(signal)
            assert b.low <= words.min() and words.max() <= b.high, signal
    assert largest["unlimited_code"] >= 0.5 * bounds.signal("unlimited_code").bound


# ------------------------------------------------------------------------------ ranges of the loop


def worst_reference(
    task: Task, controller: WordController, signal: str, reach: int, samples: int
) -> np.ndarray:
    """References at +-reach, on the side of the impulse response read backwards."""
    _, names, responses = loop_responses(task, controller, samples)
    response = responses[::-1, names.index(signal), 0]
    return task.loop.sensor.zero_count + np.where(response >= 0.0, reach, -reach)


@pytest.mark.parametrize(
    ("name", "bits"),
    [
        ("pd", 32),
        ("pid", 16),
        ("reversed", 32),
        ("focus_stage", 32),
        ("scan_mirror", 32),
        ("valve_spool", 32),
        ("lead", 32),
        ("filtered", 32),
    ],
)
def test_largest_reference_stays_linear_and_little_more_does_not(name: str, bits: int) -> None:
    task, controller, _ = built(name, bits)
    gains = gains_of(name, bits)
    found = ranges(task, controller, noise=0.0, gains=gains)
    assert found.largest_reference is not None
    scale = abs(task.count_per_position)
    reach = round(found.largest_reference * scale)
    samples = gains.decay_samples // 2
    zero = task.loop.sensor.zero_count
    worst = worst_reference(task, controller, "unlimited_code", reach, samples)
    lanes = np.stack([worst, 2 * zero - worst], axis=1)
    starts = (lanes[0] - zero) / task.count_per_position
    record = simulate(
        task.loop, task.plant, controller, samples=samples, reference=lanes, start=starts
    )
    assert not record.saturated.any() and not record.touched_stop.any()
    # the peak output is what the bound says, to a few percent
    edge = ranges(task, controller, reference=found.largest_reference, noise=0.0, gains=gains)
    s = edge.signal("unlimited_code")
    assert record.peak_code.max() <= max(-s.low, s.high)
    assert record.peak_code.max() >= 0.95 * max(-s.low, s.high) - 2
    more = math.ceil(1.06 * reach) + 3
    if more > task.plant.travel * scale:
        return
    # what the proof names is what a little more makes act
    beyond = ranges(task, controller, reference=more / scale, noise=0.0, gains=gains)
    limits = [text.removeprefix("limit of ") for text in beyond.reached if "limit of" in text]
    assert limits
    for signal in limits:
        worst = worst_reference(task, controller, signal, more, samples)
        low, high = run_words(task, controller, worst[:, np.newaxis], np.zeros((samples, 1)))
        e = controller.equation(signal)
        assert e.limit is not None
        assert low[signal][0] == e.limit[0] or high[signal][0] == e.limit[1]


@pytest.mark.parametrize("name", ["pd", "pid", "offset", "rest_and_bias", "focus_stage"])
def test_every_signal_in_linear_operation(name: str) -> None:
    """Worst references with noise for every signal of the list, in one run of many lanes."""
    task, controller, _ = built(name)
    gains = gains_of(name)
    free = ranges(task, controller, noise=0.0, gains=gains)
    assert free.largest_reference is not None
    scale = abs(task.count_per_position)
    reach = round(0.8 * free.largest_reference * scale)
    noise = 2.0
    found = ranges(task, controller, reference=reach / scale, noise=noise / scale, gains=gains)
    assert found.linear
    samples = gains.decay_samples // 2
    _, names, responses = loop_responses(task, controller, samples)
    count = len(gains.signals)
    assert names[:count] == gains.signals
    sign = np.where(responses[::-1, :count, 0] >= 0.0, 1, -1)
    push = np.where(responses[::-1, :count, 1] >= 0.0, 1.0, -1.0)
    zero = task.loop.sensor.zero_count
    low, high = run_words(
        task,
        controller,
        zero + reach * np.concatenate([sign, -sign], axis=1),
        noise * np.concatenate([push, -push], axis=1),
    )
    for row, signal in enumerate(gains.signals):
        s = found.signal(signal)
        unit = 2.0 ** -controller.equation(signal).frac_bits
        # no lane leaves the range, and the lanes that were made for this signal fill it
        assert s.low <= low[signal].min() * unit and high[signal].max() * unit <= s.high
        size, mine = max(-s.low, s.high), [row, row + count]
        if size > 4 * unit and signal not in ("added_code", "excess"):
            seen = max(-low[signal][mine].min(), high[signal][mine].max()) * unit
            assert seen >= 0.9 * size - 4 * unit


def run_words(
    task: Task,
    controller: WordController,
    references: np.ndarray,
    noise: np.ndarray,
    *,
    offset: float = 0.0,
) -> tuple[dict[str, np.ndarray], dict[str, np.ndarray]]:
    """Least and largest word of every signal in every lane, from rest at the first reference."""
    lanes = references.shape[1]
    pair = _Pair(task, controller, references[0].copy(), np.full(lanes, offset), 2)
    low = {e.name: np.full(lanes, 1 << 62) for e in controller.update}
    high = {e.name: np.full(lanes, -(1 << 62)) for e in controller.update}
    for reference, shift in zip(references, noise, strict=True):
        counts, _, real = pair.counts(shift)
        pair.step(reference, counts, real)
        for name, words in pair.words.signals.items():
            low[name] = np.minimum(low[name], words)
            high[name] = np.maximum(high[name], words)
    return low, high


@pytest.mark.parametrize(
    "name", ["pd", "pid", "free_mass", "focus_stage", "scan_mirror", "valve_spool", "lens_carrier"]
)
def test_largest_step_stays_linear_and_little_more_does_not(name: str) -> None:
    bits = 16 if name == "lens_carrier" else 32
    task, controller, _ = built(name, bits)
    gains = gains_of(name, bits)
    found = ranges(task, controller, noise=0.0, gains=gains)
    assert found.largest_step is not None
    scale = abs(task.count_per_position)
    offsets = np.arange(16) / 16 - 0.5
    zero = task.loop.sensor.zero_count
    samples = min(gains.decay_samples // 4, 600)

    def run(count: int) -> tuple[bool, bool]:
        saturated = touched = False
        for way in (1, -1):
            record = simulate(
                task.loop,
                task.plant,
                controller,
                samples=samples,
                reference=zero + way * count,
                start=offsets / scale * 0.999,
            )
            saturated |= bool(record.saturated.any())
            touched |= bool(record.touched_stop.any())
        return saturated, touched

    step = round(found.largest_step * scale)
    assert run(step) == (False, False)
    if found.largest_step < 0.9 * task.plant.travel:
        assert any(run(math.ceil(1.06 * step) + 8))


@pytest.mark.parametrize(
    "name",
    ["pd", "pid", "free_mass", "offset", "rest_and_bias", "filtered", "valve_spool", "scan_mirror"],
)
def test_every_start_at_rest_is_inside(name: str) -> None:
    """Any place within the references and within its count, code as it rests there: held where it
    stands until the first update, then kept or led away by jumps."""
    task, controller, _ = built(name)
    reach = 60
    scale = abs(task.count_per_position)
    found = ranges(task, controller, reference=reach / scale, noise=0.0, gains=gains_of(name))
    rng = np.random.default_rng(9)
    lanes, samples = 120, 160
    zero = task.loop.sensor.zero_count
    start = zero + rng.integers(-reach, reach + 1, lanes)
    jumps = zero + rng.integers(-reach, reach + 1, (samples // 20, lanes))
    references = np.repeat(jumps, 20, axis=0)
    references[:, : lanes // 2] = start[: lanes // 2]
    references[0] = start
    for offset in (-0.5, -0.2, 0.0, 0.3, 0.4999):
        low, high = run_words(
            task, controller, references, np.zeros((samples, lanes)), offset=offset
        )
        for signal in low:
            s, unit = found.signal(signal), 2.0 ** -controller.equation(signal).frac_bits
            assert s.low <= low[signal].min() * unit, signal
            assert high[signal].max() * unit <= s.high, signal


@pytest.mark.parametrize("name", ["pd", "pid", "filtered"])
def test_any_force_stays_within(name: str) -> None:
    """Disturbance forces in lanes: worst signs per sample for the position, and random jumps."""
    task, controller, _ = built(name)
    gains = gains_of(name, 32, True)
    force = 0.3
    found = ranges(task, controller, reference=0.0, force=force, noise=0.0, gains=gains)
    assert found.linear
    samples = gains.decay_samples // 2
    sampled = task.sampled
    n = len(sampled.space.a)
    # response to a force held over one sample, backwards
    _, position = _free_response(task, controller, sampled.gamma_force, samples)
    worst = np.where(position[::-1] >= 0.0, force, -force)
    rng = np.random.default_rng(2)
    jumps = np.where(rng.random((samples, 30)) < 0.1, -1, 1).cumprod(axis=0) * force
    lanes = np.concatenate([worst[:, np.newaxis], -worst[:, np.newaxis], jumps], axis=1)
    start = np.zeros(lanes.shape[1], dtype=np.int64)
    pair = _Pair(task, controller, start, np.zeros(lanes.shape[1]), 2)
    assert n == len(pair.built)
    highest = 0.0
    for k in range(samples):
        pair.force = lanes[k] + constant_force(task.plant)
        counts, _, real = pair.counts(np.zeros(lanes.shape[1]))
        pair.step(np.zeros(lanes.shape[1], dtype=np.int64), counts, real)
        highest = max(highest, float(np.abs(sampled.c_position @ pair.built).max()))
    assert not pair.limited.any()
    assert highest <= found.position[1]
    assert highest >= 0.9 * found.position[1]


# ------------------------------------------------------------------------------ deviation


@pytest.mark.parametrize(
    ("name", "bits", "ratio"),
    [
        ("pd", 32, 0.97),
        ("pd", 16, 0.95),
        ("pid", 32, 0.97),
        ("pid", 16, 0.9),
        ("lead", 32, 0.97),
        ("reversed", 32, 0.97),
        ("offset", 32, 0.97),
        ("no_delay", 32, 0.97),
        ("whole_delay", 32, 0.97),
        ("filtered", 32, 0.97),
        ("notch", 32, 0.95),
        ("focus_stage", 32, 0.97),
        ("lens_carrier", 16, 0.93),
        ("scan_mirror", 32, 0.97),
        ("valve_spool", 32, 0.95),
    ],
)
def test_deviation_is_nearly_reached_and_never_exceeded(name: str, bits: int, ratio: float) -> None:
    """Rounding errors steered by noise and references: a bound a few percent too small would be
    found here."""
    task, controller, _ = built(name, bits)
    gains = gains_of(name, bits)
    bound = deviation(task, controller, gains=gains)
    reference = ranges(task, controller, gains=gains).largest_reference
    seen = seen_deviation(
        task,
        controller,
        reference=0.5 * (reference or 0.0),
        samples=min(gains.decay_samples * 2 // 3, 1200),
        lanes=24,
    )
    assert seen.limited_lanes == 0
    assert seen.at_samples <= bound.at_samples
    assert seen.count <= bound.count
    assert seen.steered >= ratio * bound.count
    assert seen.random >= 0.1 * bound.count
    assert bound.at_samples <= bound.count <= 1.02 * bound.at_samples
    assert bound.seen_by >= 0.999 * bound.count


def test_the_harness_runs_the_loop_that_simulate_runs() -> None:
    """Built positions of the deviation runs against the continuous simulation."""
    task, controller, _ = built("pid")
    rng = np.random.default_rng(4)
    samples = 300
    references = np.repeat(rng.integers(-300, 300, 30), 10)
    noise = rng.uniform(-1.5, 1.5, samples)
    start = np.array([references[0]])
    pair = _Pair(task, controller, start, np.array([0.3]), 2)
    place = float(task.sampled.c_position @ pair.built[:, 0])
    positions = []
    for reference, shift in zip(references, noise, strict=True):
        positions.append(float(task.sampled.c_position @ pair.built[:, 0]))
        counts, _, real = pair.counts(np.array([shift]))
        pair.step(np.array([reference]), counts, real)
    record = simulate(
        task.loop,
        task.plant,
        controller,
        samples=samples,
        reference=references[:, np.newaxis],
        start=np.array([place]),
        noise=noise[:, np.newaxis] / task.count_per_position,
    )
    times, motion = record.motion(0)
    at = np.searchsorted(times, np.arange(samples) * task.period_s - 1e-12)
    assert np.abs(motion[at] - positions).max() <= 1e-9 / abs(task.count_per_position)


def test_ideal_loop_of_the_harness_is_linear() -> None:
    """Twice the references, twice the way: nothing is rounded or limited in the ideal loop."""
    task, controller, _ = built("pid")
    rng = np.random.default_rng(4)
    references = np.repeat(rng.integers(-300, 300, 20), 10)
    ways = []
    for factor in (1, 2):
        pair = _Pair(task, controller, np.array([0]), np.zeros(1), 2)
        way = []
        for reference in references:
            counts, _, real = pair.counts(np.zeros(1))
            pair.step(np.array([factor * reference]), counts, real)
            way.append(float(task.sampled.c_position @ pair.real[:, 0]))
        ways.append(np.array(way))
    assert np.abs(ways[1] - 2.0 * ways[0]).max() <= 1e-12 * np.abs(ways[0]).max()


def test_deviation_of_the_textbook_pid_is_reached() -> None:
    task, controller = textbook_pid()
    with pytest.raises(OutOfRangeError, match="samples"):
        seen_deviation(task, controller, reference=1e-4, samples=1)
    # no reset in that list: the harness starts at position 0 with every state 0
    bound = deviation(task, controller)
    seen = seen_deviation(task, controller, reference=0.0, samples=1000, lanes=4)
    assert 0.97 * bound.count <= seen.steered <= bound.count


# ------------------------------------------------------------------------------ rest


@pytest.mark.parametrize(
    ("name", "bits"),
    [
        ("pd", 32),
        ("pid", 32),
        ("lead", 16),
        ("notch", 16),
        ("focus_stage", 32),
        ("lens_carrier", 16),
        ("scan_mirror", 32),
        ("valve_spool", 32),
    ],
)
def test_motion_at_rest_stays_within(name: str, bits: int) -> None:
    task, controller, _ = built(name, bits)
    gains = gains_of(name, bits)
    bound = limit_cycles(task, controller, gains=gains)
    assert bound.largest_reference is not None
    seen = seen_limit_cycle(
        task,
        controller,
        reference=0.9 * bound.largest_reference,
        settle=gains.decay_samples // 2,
        samples=600,
    )
    assert seen.lanes == 256 and seen.limited_lanes == 0
    assert 0.0 <= seen.median <= seen.count <= bound.count
    assert bound.count <= deviation(task, controller, gains=gains).count * (1 + 1e-12)
    if bound.must_hunt:
        assert seen.moving > 0.5 and seen.count > 0.2


def test_a_fine_output_hunts_less() -> None:
    """The reference PID with 2^12, 2^16 and 2^20 codes either side: bound and motion both fall."""
    seen, bounds = [], []
    for bits in (13, 17, 21):
        task = task_of(reference_loop(*PID, f"actuator.bits={bits}"))
        placed = place_gains(task, natural_frequency_rad_per_s=TAU * 60, damping_ratio=0.8)
        controller = words_of(task, placed, 32).controller
        peaks = loop_peaks(task, controller)
        bound = limit_cycles(task, controller, gains=peaks)
        motion = seen_limit_cycle(
            task,
            controller,
            reference=1e-4,
            settle=peaks.decay_samples // 2,
            samples=800,
            lanes=64,
        )
        assert motion.count <= bound.count
        seen.append(motion.count)
        bounds.append(bound.count)
    assert seen[0] > 3 * seen[1] and bounds[0] > 5 * bounds[1] > 5 * bounds[2]
    # what is left is the sensor's own step
    assert bounds[2] == pytest.approx(0.92, abs=0.03)


def test_searches_refuse_nothing_to_do() -> None:
    task, controller, _ = built("pd")
    for samples, lanes, settle in ((1, 4, 4), (4, 0, 4), (4, 4, 0)):
        with pytest.raises(OutOfRangeError, match="samples"):
            seen_limit_cycle(
                task, controller, reference=1e-5, settle=settle, samples=samples, lanes=lanes
            )
    with pytest.raises(OutOfRangeError, match="last"):
        seen_ranges(controller, last=0)


def test_variants_are_what_they_say() -> None:
    """Loops of these tests differ where their names say so."""
    assert VARIANTS["reversed"].sensor.polarity == -1
    assert VARIANTS["offset"].sensor.zero_count == 16000
    assert replace(VARIANTS["pd"], name="x").aim == VARIANTS["pd"].aim
