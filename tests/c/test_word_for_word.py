"""The compiled functions against the integer simulation, a million samples a controller.

Rules of this file:

- Noise finds little by itself: held levels, extremes of the type, exact ties and states from all
  over the proven box run beside it, and what the stimulus reached is counted, not hoped for.
- Codes and answers about the limit are compared at every sample, the whole state often.
"""

from __future__ import annotations

import random
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from sample_words import FractionController, clip_of

from plant2.equations import WordController, WordEquation, partial_sum_range, signal_range
from plant2.simulate import IntegerController, LaneController

LANES, SAMPLES, BLOCK = 2000, 500, 10

Words = np.ndarray[Any, np.dtype[np.int64]]
State = Mapping[str, Words]


@dataclass(frozen=True, slots=True, kw_only=True)
class Stimulus:
    """Starting states, shape (lanes,) a word, and inputs, shape (samples, lanes)."""

    state: State
    inputs: Mapping[str, Words]


def type_range(controller: WordController) -> tuple[int, int]:
    """Least and most of the word type."""
    half = 1 << (controller.word_bits - 1)
    return -half, half - 1


def spread(rng: np.random.Generator, low: int, high: int, shape: tuple[int, ...]) -> Words:
    """All magnitudes about the middle equally at home, ends included."""
    middle = min(max(0, low), high)
    far = rng.integers(low, high, shape, dtype=np.int64, endpoint=True) - middle
    bits = rng.integers(0, max(high - middle, middle - low, 1).bit_length() + 1, shape)
    drawn = middle + np.sign(far) * (np.abs(far) >> bits)
    ends = rng.integers(0, 12, shape)
    return np.where(ends == 0, low, np.where(ends == 1, high, drawn))


def _align(e: WordEquation, point: dict[str, int], ranges: Mapping[str, tuple[int, int]]) -> None:
    """Choose the reference so that both products together leave no bits below the other terms."""
    factors = {t.signal: t.factor for t in e.terms if t.lag == 0}
    if not {"reference_count", "position_count"} <= set(factors):
        return
    others = [f for n, f in factors.items() if n not in ("reference_count", "position_count")]
    bits = min((f & -f).bit_length() - 1 for f in others)
    kr, kp = factors["reference_count"], factors["position_count"]
    shared = kr & -kr
    modulus = (1 << bits) // shared
    if modulus < 2 or kp % shared:
        return
    wanted = -kp // shared * point["position"] * pow(kr // shared, -1, modulus) % modulus
    for value in (wanted, wanted - modulus):
        if ranges["reference"][0] <= value <= ranges["reference"][1]:
            point["reference"] = value


def tie_points(controller: WordController, wanted: int, seed: int) -> list[dict[str, int]]:
    """Inputs and states that make one rounding tie exactly, `wanted` for each rounding.

    Sums are walked with fractions; one word of the sum is solved for, and the walk is repeated.
    """
    rng = random.Random(seed)
    walk = FractionController(controller)
    ranges = {name: clip_of(controller, name) for name in controller.inputs}
    ranges |= {s.name: (s.low, s.high) for s in controller.state}
    lagged = {(s.signal, max(s.lag, 1)): s.name for s in controller.state if s.signal}

    def remainder(e: WordEquation, point: Mapping[str, int]) -> int:
        walk.load(point)
        walk.update(*(point[name] for name in controller.inputs))
        total = walk.sums[e.name] * (1 << e.sum_frac_bits)
        return int(total + e.rounding) % (1 << e.shift)

    found = []
    for e in controller.update:
        if not e.shift:
            continue
        movable = [(name, 1) for name in (e.held, e.rest) if name is not None]
        movable += [(lagged[t.signal, t.lag], t.factor) for t in e.terms if t.lag]
        steps = dict.fromkeys(ranges, 1)
        # A signal of this update is moved through what makes it; where that is rounded, in whole
        # steps of the rounding.
        makers = {x.name: x for x in controller.update}
        for t in e.terms:
            maker = makers.get(t.signal)
            if t.lag or maker is None:
                continue
            for x in maker.terms:
                if x.lag and not maker.shift:
                    movable.append((lagged[x.signal, x.lag], x.factor * t.factor))
                elif not x.lag and maker.shift and x.factor == 1 and x.signal in makers:
                    for y in makers[x.signal].terms:
                        if y.lag and y.factor == 1 and not makers[x.signal].shift:
                            name = lagged[y.signal, y.lag]
                            movable.append((name, t.factor))
                            steps[name] = 1 << maker.shift
        got = 0
        for _ in range(4000):
            point = {}
            for name, (low, high) in ranges.items():
                middle = min(max(0, low), high)
                room = max(1, (high - low) >> rng.randrange(0, (high - low).bit_length() + 1))
                point[name] = min(max(middle + rng.randint(-room, room), low), high)
            _align(e, point, ranges)
            off = remainder(e, point)
            rng.shuffle(movable)
            for name, factor in movable if off else []:
                odd = factor & -factor
                period = (1 << e.shift) // odd if odd < 1 << e.shift else 0
                if not period or off % odd:
                    continue
                delta = (-off // odd) * pow(factor // odd, -1, period) % period
                for change in (delta * steps[name], (delta - period) * steps[name]):
                    low, high = ranges[name]
                    if low <= point[name] + change <= high:
                        moved = {**point, name: point[name] + change}
                        if remainder(e, moved) == 0:
                            point, off = moved, 0
                            break
                if not off:
                    break
            if not off:
                found.append(point)
                got += 1
                if got == wanted:
                    break
        assert got == wanted, f"{e.name}: {got} ties"
    return found


def stimulus(controller: WordController, seed: int) -> Stimulus:
    """Noise, held levels, extremes, small steps and ties, from reset and from all over the box."""
    rng = np.random.default_rng(seed)
    shape = (SAMPLES, LANES)
    kinds = np.arange(LANES) % 6
    inputs = {}
    for name in controller.inputs:
        low, high = clip_of(controller, name)
        middle = (low + high) // 2
        least, most = type_range(controller)
        wide = rng.integers(least, most, shape, dtype=np.int64, endpoint=True)
        inside = rng.integers(low, high, shape, dtype=np.int64, endpoint=True)
        small = middle + rng.integers(-3, 4, shape)
        ends = np.array([least, low - 1, low, low + 1, high - 1, high, high + 1, most])
        rails = np.clip(ends[rng.integers(0, len(ends), shape)], least, most)
        anything = spread(rng, low, high, shape)
        # Held levels: a new one at random instants only.
        held = np.where(rng.random(shape) < 0.02, anything, 0)
        held[0] = anything[0]
        fresh = np.maximum.accumulate(
            np.where(
                (held != 0) | (np.arange(SAMPLES) == 0)[:, None], np.arange(SAMPLES)[:, None], 0
            )
        )
        held = np.take_along_axis(held, fresh, axis=0)
        drawn = np.select([kinds == k for k in range(6)], [wide, inside, small, rails, held, small])
        if name == "added":
            drawn = np.where((np.arange(LANES) // 6) % 2 == 0, 0, drawn)
        inputs[name] = drawn.astype(np.int64)
    model = LaneController(controller, LANES)
    model.reset(inputs["position"][0], spread(rng, *clip_of_output(controller), (LANES,)))
    state = {}
    from_box = (np.arange(LANES) // 12) % 2 == 0
    for s in controller.state:
        state[s.name] = np.where(
            from_box, spread(rng, s.low, s.high, (LANES,)), model.state[s.name]
        )
    ties = tie_points(controller, 40, seed)
    for lane, point in enumerate(ties):
        # On lanes of small noise, so that a tie's effect is not drowned at once.
        at = lane * 6 + 2
        for name in controller.inputs:
            inputs[name][0, at] = point[name]
        for s in controller.state:
            state[s.name][at] = point[s.name]
    return Stimulus(state=state, inputs=inputs)


def clip_of_output(controller: WordController) -> tuple[int, int]:
    """Range of the returned code."""
    e = controller.equation(controller.output)
    return e.low, e.high


@dataclass(slots=True)
class Reached:
    """How often each rounding tied and each limit acted."""

    ties: dict[str, int]
    limits: dict[tuple[str, str], int]


def count(
    controller: WordController,
    before: State,
    signals: State,
    inputs: Mapping[str, Words],
    reached: Reached,
) -> None:
    """Add one sample of all lanes: sums again, from the signals that the lanes report."""
    lagged = {(s.signal, max(s.lag, 1)): s.name for s in controller.state if s.signal}
    for e in controller.update:
        total = np.full(LANES, e.constant, np.int64)
        for name in (e.held, e.rest):
            if name is not None:
                total += before[name]
        for t in e.terms:
            if t.lag:
                read = before[lagged[t.signal, t.lag]]
            else:
                read = signals[t.signal] if t.signal in signals else inputs[t.signal]
            total += t.factor * read
        total += e.rounding
        if e.shift:
            tied = np.count_nonzero(total & ((1 << e.shift) - 1) == 0)
            reached.ties[e.name] = reached.ties.get(e.name, 0) + int(tied)
        value = total >> e.shift
        if e.limit is not None:
            for side, acts in (("lower", value < e.limit[0]), ("upper", value > e.limit[1])):
                key = (e.name, side)
                reached.limits[key] = reached.limits.get(key, 0) + int(np.count_nonzero(acts))


def can_act(controller: WordController, e: WordEquation, side: str) -> bool:
    """Whether interval arithmetic lets the limit act at all."""
    ranges = dict.fromkeys(controller.inputs, type_range(controller))
    ranges |= {x.name: (x.low, x.high) for x in controller.update}
    whole, _ = partial_sum_range(e, ranges)
    low, high = (whole[0] + e.rounding) >> e.shift, (whole[1] + e.rounding) >> e.shift
    assert e.limit is not None
    assert signal_range(e, whole) == (max(low, e.limit[0]), min(high, e.limit[1]))
    return low < e.limit[0] if side == "lower" else high > e.limit[1]


def test_a_million_samples(controller: WordController, machine: Callable[..., Any]) -> None:
    compiled = machine(controller)
    given = stimulus(controller, 20)
    model = LaneController(controller, LANES)
    model.restore(given.state)
    states = np.zeros(LANES, compiled.state)
    for name, words in given.state.items():
        states[name] = words
    reached = Reached({}, {})
    rng = np.random.default_rng(21)
    rails = np.arange(LANES) % 6 == 3
    for first in range(0, SAMPLES, BLOCK):
        # Lanes between the rails go on from another corner of the box: no run leads to all of them.
        corner = model.state
        for s in controller.state:
            ends = spread(rng, s.low, s.high, (LANES,))
            ends = np.where(rng.random(LANES) < 0.7, np.where(ends < 0, s.low, s.high), ends)
            corner[s.name] = np.where(rails, ends, corner[s.name])
            states[s.name] = corner[s.name]
        model.restore(corner)
        block = {n: x[first : first + BLOCK] for n, x in given.inputs.items()}
        codes, limited = compiled.updates(states, *(block[n] for n in controller.inputs))
        for k in range(BLOCK):
            now = {n: x[k] for n, x in block.items()}
            before = model.state
            expected = model.update(now["reference"], now["position"], now["added"])
            assert np.array_equal(codes[k], expected)
            assert np.array_equal(limited[k], model.limited())
            count(controller, before, model.signals, now, reached)
        for name, words in model.state.items():
            assert np.array_equal(states[name], words), name
    assert SAMPLES * LANES >= 1_000_000
    for name, times in reached.ties.items():
        assert times >= 40, f"{name}: {times} ties"
    for (name, side), times in reached.limits.items():
        if can_act(controller, controller.equation(name), side):
            assert times >= 1000, f"{name}: the {side} limit acted {times} times"
        else:
            assert times == 0


def test_reset_holds_every_code_at_every_position(
    controller: WordController, machine: Callable[..., Any]
) -> None:
    """Every later update at the position of the reset returns its output, within the limit.

    At every position that the reference can have; beyond the travel it cannot follow.
    """
    compiled = machine(controller)
    rng = np.random.default_rng(3)
    least, most = type_range(controller)
    counts, codes = clip_of(controller, "position"), clip_of_output(controller)
    position = np.concatenate(
        [spread(rng, *counts, (9000,)), spread(rng, least, most, (900,)), [least, most] * 50]
    )
    output = np.concatenate(
        [spread(rng, *codes, (9000,)), spread(rng, least, most, (900,)), [least, most, 0, 7] * 25]
    )
    states = compiled.resets(position, output)
    model = LaneController(controller, len(position))
    model.reset(position, output)
    for name, words in model.state.items():
        assert np.array_equal(states[name], words), name
    held = np.tile(position, (20, 1))
    got, limited = compiled.updates(states, held, held, np.zeros_like(held))
    low, high = clip_of(controller, "reference")
    ends = np.clip(position, *counts)
    inside = (ends >= low) & (ends <= high)
    assert inside.sum() > 1000
    assert np.array_equal(got[:, inside], np.tile(np.clip(output[inside], *codes), (20, 1)))
    assert not limited[:, inside].any()


def test_resting_output_at_every_count(
    controller: WordController, machine: Callable[..., Any]
) -> None:
    compiled = machine(controller)
    low, high = clip_of(controller, "position")
    least, most = type_range(controller)
    inside = np.arange(max(low - 50, least), min(high + 50, most) + 1)
    position = np.concatenate([inside, [least, most, 0]])
    model = LaneController(controller, len(position))
    assert np.array_equal(compiled.resting_outputs(position), model.resting_output(position))


def test_fractions_lanes_and_reference_agree(controller: WordController) -> None:
    """The three Python paths on 100 lanes of the same stimulus: the million rests on this."""
    given = stimulus(controller, 20)
    model = LaneController(controller, LANES)
    model.restore(given.state)
    lanes = [*range(60), *range(2, 6 * 40, 6)]
    exact = [FractionController(controller) for _ in lanes]
    reference = [IntegerController(controller) for _ in lanes]
    for i, lane in enumerate(lanes):
        start = {name: int(words[lane]) for name, words in given.state.items()}
        exact[i].load(start)
        reference[i].state.update(start)
    for k in range(8):
        now = {n: x[k] for n, x in given.inputs.items()}
        codes = model.update(now["reference"], now["position"], now["added"])
        after = model.state
        for i, lane in enumerate(lanes):
            words = [int(now[n][lane]) for n in controller.inputs]
            assert exact[i].update(*words) == reference[i].update(*words) == codes[lane]
            state = {name: int(x[lane]) for name, x in after.items()}
            assert exact[i].state() == state
            assert reference[i].state == state
            assert exact[i].limited() == reference[i].limited()


def test_counting_sees_a_missing_limit(controller: WordController) -> None:
    """The counts above are not of something that is always there."""
    reached = Reached({}, {})
    zeros = {s.name: np.zeros(LANES, np.int64) for s in controller.state}
    middle = {n: np.full(LANES, sum(clip_of(controller, n)) // 2) for n in controller.inputs}
    model = LaneController(controller, LANES)
    model.restore(zeros)
    model.update(*(middle[n] for n in controller.inputs))
    count(controller, zeros, model.signals, middle, reached)
    assert reached.limits[controller.update[0].name, "lower"] == 0
    beyond = dict(middle, position=np.full(LANES, clip_of(controller, "position")[0] - 1))
    model.restore(zeros)
    model.update(*(beyond[n] for n in controller.inputs))
    count(controller, zeros, model.signals, beyond, reached)
    assert sum(reached.limits["position_count", side] for side in ("lower", "upper")) == LANES


@pytest.mark.parametrize("name", ["reference", "position", "added"])
def test_inputs_beyond_their_range_act_as_if_clipped(
    name: str, controller: WordController, machine: Callable[..., Any]
) -> None:
    compiled = machine(controller)
    rng = np.random.default_rng(8)
    least, most = type_range(controller)
    given = {n: spread(rng, *clip_of(controller, n), (4, 500)) for n in controller.inputs}
    given[name] = rng.integers(least, most, (4, 500), dtype=np.int64, endpoint=True)
    clipped = dict(given)
    clipped[name] = np.clip(given[name], *clip_of(controller, name))
    results = []
    for inputs in (given, clipped):
        states = compiled.resets(
            given["position"][0], np.full(500, sum(clip_of_output(controller)) // 2)
        )
        codes, limited = compiled.updates(states, *(inputs[n] for n in controller.inputs))
        results.append((codes, limited, states))
    for first, second in zip(*results, strict=True):
        assert np.array_equal(first, second)
