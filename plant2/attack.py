"""Hostile inputs: sequences that try to reach the proven bounds, on the integers that run.

Rules of this file:

- What is found here is seen, not proven; it must lie within what `plant2.bounds` proves.
- The integers are those of `LaneController`; the ideal loop beside them is evaluated from the list
  of equations in doubles, without a matrix of the proofs.
- Same seed, same result.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from plant2.bounds import (
    ControllerBounds,
    controller_bounds,
    controller_responses,
    loop_responses,
)
from plant2.design import Task
from plant2.equations import WordController
from plant2.errors import OutOfRangeError
from plant2.plant import constant_force
from plant2.sampled import propagate
from plant2.simulate import LaneController, resting_state

Real = NDArray[np.float64]
Words = NDArray[np.int64]
Flags = NDArray[np.bool_]

_NAMES = ("reference", "position", "added")


# --------------------------------------------------------------------------------------------------
# The controller by itself


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Recipe:
    """What drives a controller to an extreme.

    Parameters
    ----------
    position, output : int
        Arguments of the reset before. [count, code]
    inputs : array of int, shape (samples, 3)
        Reference, position and added code of every update; the extreme is made by the last one.
        [count, count, code]

    Notes
    -----
    Raw values, as the caller of the C passes them.
    """

    position: int
    output: int
    inputs: Words


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenRange:
    """Extremes of one signal that were reached, with what reached them.

    Parameters
    ----------
    name : str
        The signal.
    low, high : int
        Smallest and largest word.
    low_recipe, high_recipe : Recipe
        How.

    Notes
    -----
    See `seen_ranges`.
    """

    name: str
    low: int
    high: int
    low_recipe: Recipe
    high_recipe: Recipe


def _input_ranges(controller: WordController) -> dict[str, tuple[int, int]]:
    """Raw values between which an input has an effect: where its own limit begins."""
    top = (1 << (controller.word_bits - 1)) - 1
    found = dict.fromkeys(("reference", "position", "added"), (-top - 1, top))
    for e in controller.update:
        if len(e.terms) == 1 and e.terms[0].signal in controller.inputs and e.limit is not None:
            t = e.terms[0]
            ends = sorted(t.factor * (edge - e.constant) for edge in e.limit)
            found[t.signal] = max(ends[0], -top - 1), min(ends[1], top)
    return found


class _Extremes:
    """Smallest and largest word of every signal so far, with the recipe of each."""

    def __init__(self, controller: WordController) -> None:
        self.names = [e.name for e in controller.update]
        self.found: dict[tuple[str, int], tuple[int, Recipe]] = {}

    def take(self, signals: Mapping[str, Words], recipe_of: Callable[[int], Recipe]) -> None:
        """Look at all lanes after an update."""
        for name in self.names:
            words = signals[name]
            for sign in (-1, 1):
                lane = int(np.argmax(words) if sign > 0 else np.argmin(words))
                value = int(words[lane])
                known = self.found.get((name, sign))
                if known is None or sign * value > sign * known[0]:
                    self.found[name, sign] = (value, recipe_of(lane))


def _raw_of(controller: WordController, kind: str, name: str) -> tuple[str, int] | None:
    """The raw input behind a column, and the sign with which it enters; None if it has none."""
    if kind == "input":
        return name, 1
    if kind != "cut":
        return None
    e = controller.equation(name)
    if len(e.terms) == 1 and e.terms[0].signal in controller.inputs:
        return e.terms[0].signal, 1 if e.terms[0].factor > 0 else -1
    return None


def seen_ranges(
    controller: WordController,
    *,
    bounds: ControllerBounds | None = None,
    warm_up: int = 1500,
    last: int = 64,
    seed: int = 1,
) -> tuple[SeenRange, ...]:
    """Drive every signal of a controller to its extremes.

    Parameters
    ----------
    controller : WordController
        The words.
    bounds : ControllerBounds or None
        Its proven bounds if known; only the choice of cuts is used.
    warm_up : int
        Samples of constant extreme inputs, which fill what adds up.
    last : int
        Samples of the sequence at the end, at least 1.
    seed : int
        Of the random sequences.

    Returns
    -------
    tuple of SeenRange
        In the order of the list.

    Raises
    ------
    OutOfRangeError
        If `last` is below 1 or `warm_up` below 0.

    Notes
    -----
    The largest value of a linear signal is made by inputs at the ends of their ranges, on the side
    that the impulse response, read backwards, has (from memory: Dahleh and Diaz-Bobillo). Every
    such sequence, whole and cut short, follows every constant choice of extremes; random ones are
    added.
    """
    if last < 1 or warm_up < 0:
        raise OutOfRangeError("last", last, "samples", "must be at least 1", "ask for a sample")
    known = controller_bounds(controller) if bounds is None else bounds
    ends = _input_ranges(controller)
    extremes = _Extremes(controller)

    # every constant choice of extremes after every extreme reset
    choices = np.array(np.meshgrid(*[[0, 1, 2]] * 3, indexing="ij")).reshape(3, -1)
    levels = np.array([[a, (a + b) // 2, b] for a, b in (ends[n] for n in _NAMES)])
    held = np.stack([levels[i][choices[i]] for i in range(3)])
    top = (1 << (controller.word_bits - 1)) - 1
    resets = [(p, u) for p in ends["position"] for u in (-top, top)]
    position = np.repeat([r[0] for r in resets], held.shape[1])
    output = np.repeat([r[1] for r in resets], held.shape[1])
    held = np.tile(held, len(resets))
    machine = LaneController(controller, held.shape[1])
    machine.reset(position, output)
    kept = []
    stops = sorted({0, 3, min(40, warm_up), warm_up})
    for k in range(warm_up + 1):
        if k in stops:
            kept.append(machine.state)
        if k < warm_up:
            machine.update(*held)

    # each of them continued by each sequence, whole and cut short
    lengths = sorted({n for n in (1, 2, 3, 5, 8, 16, 32, last) if n <= last})
    times = len(lengths)
    wide = LaneController(controller, held.shape[1] * len(kept) * times)
    state = {
        name: np.tile(np.concatenate([words[name] for words in kept]), times) for name in kept[0]
    }
    base = np.tile(held, len(kept) * times)
    length = np.repeat(lengths, held.shape[1] * len(kept))
    before = np.tile(np.repeat(stops, held.shape[1]), times)
    position, output = (np.tile(v, len(kept) * times) for v in (position, output))
    clips = tuple(
        e.name
        for e in controller.update
        if e.limit is not None and all(t.signal in controller.inputs for t in e.terms)
    )
    for cut in dict.fromkeys((known.cuts, clips)):
        columns, responses = controller_responses(controller, cut, last)
        for index in range(len(controller.update)):
            for sign in (-1, 1):
                final = np.repeat(base[np.newaxis], last, axis=0)
                for j, (kind, name) in enumerate(columns):
                    raw = _raw_of(controller, kind, name)
                    if raw is None:
                        continue
                    which = _NAMES.index(raw[0])
                    push = sign * raw[1] * np.sign(responses[::-1, index, j])
                    low, high = ends[raw[0]]
                    wanted = np.where(push > 0.0, high, low)[:, np.newaxis]
                    late = np.arange(last)[:, np.newaxis] >= last - length
                    final[:, which] = np.where(
                        late & (push[:, np.newaxis] != 0.0), wanted, final[:, which]
                    )
                wide.restore(state)
                for k in range(last):
                    wide.update(*final[k])

                    def recipe(lane: int, final: Words = final, k: int = k) -> Recipe:
                        start = np.repeat(base[np.newaxis, :, lane], before[lane], axis=0)
                        return Recipe(
                            position=int(position[lane]),
                            output=int(output[lane]),
                            inputs=np.concatenate([start, final[: k + 1, :, lane]]),
                        )

                    extremes.take(wide.signals, recipe)
    _random_lanes(controller, extremes, ends, seed)
    return tuple(
        SeenRange(
            name=name,
            low=extremes.found[name, -1][0],
            high=extremes.found[name, 1][0],
            low_recipe=extremes.found[name, -1][1],
            high_recipe=extremes.found[name, 1][1],
        )
        for name in extremes.names
    )


def _random_lanes(
    controller: WordController,
    extremes: _Extremes,
    ends: Mapping[str, tuple[int, int]],
    seed: int,
    *,
    lanes: int = 256,
    samples: int = 400,
) -> None:
    """Inputs that jump between their ends after random times, some often, some seldom."""
    rng = np.random.default_rng(seed)
    inputs = np.empty((samples, 3, lanes), dtype=np.int64)
    for i, name in enumerate(_NAMES):
        rate = 10.0 ** rng.uniform(-2.0, 0.0, lanes)
        jumps = rng.random((samples, lanes)) < rate
        up = (np.cumsum(jumps, axis=0) + rng.integers(0, 2, lanes)) % 2 == 1
        inputs[:, i] = np.where(up, ends[name][1], ends[name][0])
    top = (1 << (controller.word_bits - 1)) - 1
    position = rng.integers(ends["position"][0], ends["position"][1] + 1, lanes)
    output = rng.integers(-top, top + 1, lanes)
    machine = LaneController(controller, lanes)
    machine.reset(position, output)
    for k in range(samples):
        machine.update(*inputs[k])

        def recipe(lane: int, k: int = k) -> Recipe:
            return Recipe(
                position=int(position[lane]),
                output=int(output[lane]),
                inputs=inputs[: k + 1, :, lane].copy(),
            )

        extremes.take(machine.signals, recipe)


# --------------------------------------------------------------------------------------------------
# The loop as built beside the ideal loop


def _real(values: NDArray[Any]) -> Real:
    return np.asarray(values, dtype=np.float64)


def _at_limits(controller: WordController, signals: Mapping[str, Words], found: Flags) -> Flags:
    """Add the lanes in which a signal lies at its limit; limits of inputs do not count."""
    for e in controller.update:
        if e.limit is None or all(t.signal in controller.inputs for t in e.terms):
            continue
        found = found | (signals[e.name] <= e.limit[0]) | (signals[e.name] >= e.limit[1])
    return found


class _RealList:
    """The same list on real numbers in lanes: neither rounded nor limited."""

    def __init__(self, controller: WordController) -> None:
        self.controller = controller
        bits = dict.fromkeys(controller.inputs, 0)
        bits.update({e.name: e.frac_bits for e in controller.update})
        self.unit = {name: 2.0**-n for name, n in bits.items()}
        self.rows = [
            (
                e.name,
                [
                    (t.signal, t.lag, math.ldexp(t.factor, bits[t.signal] - e.sum_frac_bits))
                    for t in e.terms
                ],
                math.ldexp(e.constant, -e.sum_frac_bits),
                None if e.held is None else (e.held, 2.0**-e.sum_frac_bits),
            )
            for e in controller.update
        ]
        self.past: dict[tuple[str, int], Real] = {}
        self.held: dict[str, Real] = {}
        self.signals: dict[str, Real] = {}

    def start(self, state: Mapping[str, Words]) -> None:
        """Take over the state of the words."""
        self.held = {}
        self.past = {}
        for word in self.controller.state:
            values = state[word.name].astype(np.float64)
            if word.signal is not None:
                key = (word.signal, max(word.lag, 1))
                self.past.setdefault(key, values * self.unit[word.signal])
            else:
                self.held[word.name] = values

    def sums(self, signals: Mapping[str, Real], name: str) -> Real:
        """What one equation makes of given signals of this sample and of the past."""
        _, terms, constant, held = next(row for row in self.rows if row[0] == name)
        total: Real = np.full(next(iter(signals.values())).shape, constant)
        if held is not None:
            total = total + self.held[held[0]] * held[1]
        for signal, lag, factor in terms:
            total = total + factor * (self.past[signal, lag] if lag else signals[signal])
        return total

    def update(self, inputs: Mapping[str, Real]) -> Real:
        """One sample; returns the output. [code]"""
        signals = dict(inputs)
        for name, *_ in self.rows:
            signals[name] = self.sums(signals, name)
        self.advance(signals)
        return signals[self.controller.output]

    def advance(self, signals: Mapping[str, Real]) -> None:
        """Make this sample's signals those of the past."""
        for name, lag in sorted(self.past, key=lambda key: -key[1]):
            newer = signals[name] if lag == 1 else self.past[name, lag - 1]
            self.past[name, lag] = newer
        self.signals = dict(signals)


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenDeviation:
    """Largest distance of the loop as built from the ideal loop that was seen.

    Parameters
    ----------
    count : float
        At and between samples. [count]
    at_samples : float
        At the sampling instants. [count]
    steered, random : float
        Of the run whose rounding errors were steered, and of the random lanes. [count]
    limited_lanes : int
        Random lanes that were left out because something was limited.

    Notes
    -----
    See `seen_deviation`.
    """

    count: float
    at_samples: float
    steered: float
    random: float
    limited_lanes: int


class _Pair:
    """Both loops around two copies of the linear plant, from one start."""

    def __init__(
        self, task: Task, controller: WordController, start: Words, offset: Real, phases: int
    ) -> None:
        self.task, self.controller = task, controller
        sampled, space = task.sampled, task.sampled.space
        lanes = len(start)
        sensor, actuator = task.loop.sensor, task.loop.actuator
        self.words = LaneController(controller, lanes)
        code = self.words.resting_output(start)
        self.words.reset(start, code)
        self.ideal = _RealList(controller)
        self.ideal.start(self.words.state)
        position = (start - sensor.zero_count + offset) / task.count_per_position
        effort = (code - actuator.zero_code) * task.effort_per_code
        force = np.full(lanes, constant_force(task.plant))
        self.force = force
        self.built = resting_state(space, position=position, effort=effort, force=force).T.copy()
        self.real = self.built.copy()
        stored = sampled.whole_delay + 2
        self.built_effort = [effort.copy() for _ in range(stored)]
        self.real_effort = [effort.copy() for _ in range(stored)]
        self.limited: Flags = np.zeros(lanes, dtype=bool)
        self.largest, self.at_samples = np.zeros(lanes), np.zeros(lanes)
        # instants between the samples: transition from the sample or from the update
        early = sampled.fraction * sampled.period_s
        self.looks = []
        for i in range(1, phases):
            t = sampled.period_s * i / phases
            if t <= early:
                self.looks.append((0, *propagate(space, t)[:2]))
            else:
                self.looks.append((1, *propagate(space, t - early)[:2]))
        self.early = propagate(space, early)[:2] if early > 0.0 else None

    def counts(self, noise: Real) -> tuple[Words, Real, Real]:
        """What the converter makes, what it sees, and what the ideal sensor says."""
        task, sensor = self.task, self.task.loop.sensor
        row = task.sampled.c_measured * task.count_per_position
        seen = row @ self.built + sensor.zero_count + noise
        real = row @ self.real + sensor.zero_count + noise
        counts = np.floor(seen + 0.5).astype(np.int64)
        clipped = (counts < sensor.low_count) | (counts > sensor.high_count)
        self.limited |= clipped
        return np.clip(counts, sensor.low_count, sensor.high_count), seen, real

    def step(self, reference: Words, counts: Words, real_count: Real) -> None:
        """One update of both, and the way to the next sample."""
        code = self.words.update(reference, counts)
        self.limited = _at_limits(self.controller, self.words.signals, self.limited)
        inputs = {
            "reference": reference.astype(np.float64),
            "position": real_count,
            "added": np.zeros(len(code)),
        }
        output = self.ideal.update(inputs)
        zero, scale = self.task.loop.actuator.zero_code, self.task.effort_per_code
        self.move(_real((code - zero) * scale), (output - zero) * scale)

    def move(self, built_effort: Real, real_effort: Real) -> None:
        """The plants over one period."""
        sampled = self.task.sampled
        d = sampled.whole_delay
        self.built_effort = [built_effort, *self.built_effort[:-1]]
        self.real_effort = [real_effort, *self.real_effort[:-1]]
        row = sampled.c_position * self.task.count_per_position
        gap = self.built - self.real
        old = self.built_effort[d + 1] - self.real_effort[d + 1]
        new = self.built_effort[d] - self.real_effort[d]
        here = np.abs(row @ gap)
        self.at_samples = np.maximum(self.at_samples, here)
        self.largest = np.maximum(self.largest, here)
        at_update = gap
        if self.early is not None:
            psi, gain = self.early
            at_update = gap + psi @ gap + np.outer(gain, old)
        for which, psi, gain in self.looks:
            base, effort = (at_update, new) if which else (gap, old)
            self.largest = np.maximum(
                self.largest, np.abs(row @ (base + psi @ base + np.outer(gain, effort)))
            )
        for states, efforts in (
            (self.built, self.built_effort),
            (self.real, self.real_effort),
        ):
            states += (
                sampled.psi @ states
                + np.outer(sampled.gamma0, efforts[d])
                + np.outer(sampled.gamma1, efforts[d + 1])
                + np.outer(sampled.gamma_force, self.force)
            )


def seen_deviation(
    task: Task,
    controller: WordController,
    *,
    reference: float,
    samples: int = 1000,
    lanes: int = 64,
    phases: int = 8,
    seed: int = 1,
) -> SeenDeviation:
    """Run the loop as built beside the ideal loop, on hostile and random inputs.

    Parameters
    ----------
    task : Task
        Plant and scales.
    controller : WordController
        The words.
    reference : float
        References stay within this distance of sensor zero. [m or rad]
    samples : int
        Length of every run, at least 2.
    lanes : int
        Random runs, at least 1.
    phases : int
        Instants per period at which the position is looked at.
    seed : int
        Of the random runs.

    Returns
    -------
    SeenDeviation
        What was seen where nothing was limited.

    Raises
    ------
    OutOfRangeError
        If there are too few samples or lanes.

    Notes
    -----
    Both loops start from the same state and see the same references and the same noise, of up to
    two counts. In the steered run noise and reference of each sample are chosen among some dozens
    so that the rounding errors that follow push the position in the direction of its impulse
    response, read backwards from the last sample.
    """
    if samples < 2 or lanes < 1:
        raise OutOfRangeError("samples", samples, "", "must be at least 2", "ask for a longer run")
    steered, steered_at = _steered(task, controller, samples, phases)
    sensor, scale = task.loop.sensor, abs(task.count_per_position)
    reach = max(1, math.floor(reference * scale))
    rng = np.random.default_rng(seed)
    rate = 10.0 ** rng.uniform(-2.5, 0.0, lanes)
    jumps = rng.random((samples, lanes)) < rate
    size = reach * 10.0 ** rng.uniform(-3.0, 0.0, lanes)
    levels = rng.uniform(-1.0, 1.0, (samples, lanes))
    last = np.maximum.accumulate(np.where(jumps, np.arange(samples)[:, np.newaxis], 0), axis=0)
    wanted = np.rint(np.take_along_axis(levels, last, axis=0) * size).astype(np.int64)
    noise = rng.uniform(-1.0, 1.0, (samples, lanes)) * rng.choice([0.0, 0.5, 2.0], lanes)
    start = wanted[0] + sensor.zero_count
    pair = _Pair(task, controller, start, rng.uniform(-0.5, 0.5, lanes), phases)
    for k in range(samples):
        counts, _, real = pair.counts(noise[k])
        pair.step(wanted[k] + sensor.zero_count, counts, real)
    free = ~pair.limited
    random = float(pair.largest[free].max(initial=0.0))
    random_at = float(pair.at_samples[free].max(initial=0.0))
    return SeenDeviation(
        count=max(steered, random),
        at_samples=max(steered_at, random_at),
        steered=steered,
        random=random,
        limited_lanes=int(np.count_nonzero(pair.limited)),
    )


def _steered(
    task: Task, controller: WordController, samples: int, phases: int
) -> tuple[float, float]:
    """One run in which noise and reference are chosen sample by sample, among candidates."""
    columns, names, responses = loop_responses(task, controller, samples, phases=phases)
    errors = [i for i, c in enumerate(columns) if c.kind in ("sensor", "rounding")]
    half = np.array([0.5 * (columns[i].high - columns[i].low) for i in errors])
    rows = [i for i, n in enumerate(names) if n == "position"]
    weight = np.abs(responses[:, rows][:, :, errors]).sum(axis=0) @ half
    row = rows[int(np.argmax(weight))]
    wanted = responses[::-1, row][:, errors] * np.sign(task.count_per_position)
    sensor = task.loop.sensor
    moves = np.arange(-24, 25)
    shifts = np.arange(-1, 2)
    lanes = len(moves) * len(shifts)
    move, shift = (v.reshape(-1) for v in np.meshgrid(moves, shifts, indexing="ij"))
    start = np.full(lanes, sensor.zero_count, dtype=np.int64)
    pair = _Pair(task, controller, start, np.zeros(lanes), phases)
    rounded = [columns[i].name for i in errors if columns[i].kind == "rounding"]
    assert columns[errors[0]].kind == "sensor"
    nearly = 0.5 - 1e-9
    past = _RealList(controller)
    for k in range(samples):
        # the sensor's error is what it is asked to be: noise puts the position there
        error = nearly if wanted[k, 0] >= 0.0 else -nearly
        _, seen, _ = pair.counts(np.zeros(lanes))
        target = np.floor(seen + 0.5) + shift
        counts, _, real = pair.counts(target - error - seen)
        reference = start + move
        state = pair.words.state
        past.start(state)
        pair.words.update(reference, counts)
        wide = {
            "reference": _real(reference),
            "position": _real(counts),
            "added": np.zeros(lanes),
        }
        for name, words in pair.words.signals.items():
            wide[name] = _real(words * past.unit[name])
        score = np.zeros(lanes)
        for j, name in enumerate(rounded, 1):
            score += wanted[k, j] * (wide[name] - past.sums(wide, name))
        best = int(np.argmax(score))
        pair.words.restore(state)
        pair.step(
            np.full(lanes, reference[best]),
            np.full(lanes, counts[best]),
            np.full(lanes, real[best]),
        )
    if bool(pair.limited.any()):
        return 0.0, 0.0
    return float(pair.largest.max()), float(pair.at_samples.max())


# --------------------------------------------------------------------------------------------------
# Rest


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenLimitCycle:
    """Largest motion at rest that was seen, with everything standing still.

    Parameters
    ----------
    count : float
        Half the peak-to-peak position, between the samples too. [count]
    position : float
        The same. [m or rad]
    period_s : float or None
        Time between upward crossings of its middle, on average; None where it is at rest or drifts.
        [s]
    reference : int
        Raw reference of that lane. [count]
    force : float
        Its constant force beside bias and spring. [N or N m]
    median : float
        Median over the lanes. [count]
    moving : float
        Share of lanes whose codes still change. [-]
    lanes, samples : int
        How many lanes, and samples that were looked at after the decay.
    limited_lanes : int
        Lanes in which something was limited at the end; they are left out.

    Notes
    -----
    See `seen_limit_cycle`.
    """

    count: float
    position: float
    period_s: float | None
    reference: int
    force: float
    median: float
    moving: float
    lanes: int
    samples: int
    limited_lanes: int


class _Rest:
    """The loop as built around the linear plant, without noise."""

    def __init__(
        self,
        task: Task,
        controller: WordController,
        start: Words,
        offset: Real,
        force: Real,
        phases: int,
    ) -> None:
        self.task, self.controller = task, controller
        sampled, space = task.sampled, task.sampled.space
        sensor, actuator = task.loop.sensor, task.loop.actuator
        self.words = LaneController(controller, len(start))
        code = self.words.resting_output(start)
        self.words.reset(start, code)
        self.force = force + constant_force(task.plant)
        position = (start - sensor.zero_count + offset) / task.count_per_position
        effort = (code - actuator.zero_code) * task.effort_per_code
        self.states = resting_state(
            space, position=position, effort=effort, force=self.force
        ).T.copy()
        self.efforts = [_real(effort)] * (sampled.whole_delay + 2)
        self.code = code
        early = sampled.fraction * sampled.period_s
        self.early = propagate(space, early) if early > 0.0 else None
        self.looks = [
            (t > early, propagate(space, t - early if t > early else t))
            for t in (sampled.period_s * i / phases for i in range(1, phases))
        ]
        self.looking = False
        self.limited: Flags = np.zeros(len(start), dtype=bool)
        self.changed: Flags = np.zeros(len(start), dtype=bool)
        self.low, self.high = np.full(len(start), math.inf), np.full(len(start), -math.inf)

    def look(self) -> None:
        """From here on extremes are kept."""
        self.looking = True

    def sample(self, reference: Words) -> Real:
        """One update and the way to the next sample; returns the position before. [count]"""
        task, sampled = self.task, self.task.sampled
        sensor, d = task.loop.sensor, task.sampled.whole_delay
        seen = (sampled.c_measured * task.count_per_position) @ self.states + sensor.zero_count
        counts = np.floor(seen + 0.5).astype(np.int64)
        counts = np.clip(counts, sensor.low_count, sensor.high_count)
        code = self.words.update(reference, counts)
        effort = _real((code - task.loop.actuator.zero_code) * task.effort_per_code)
        self.efforts = [effort, *self.efforts[:-1]]
        row = sampled.c_position * task.count_per_position
        here: Real = row @ self.states
        if self.looking:
            self._look(row, here, code)
        self.code = code
        self.states += (
            sampled.psi @ self.states
            + np.outer(sampled.gamma0, self.efforts[d])
            + np.outer(sampled.gamma1, self.efforts[d + 1])
            + np.outer(sampled.gamma_force, self.force)
        )
        return here

    def _look(self, row: Real, here: Real, code: Words) -> None:
        self.changed |= code != self.code
        self.limited = _at_limits(self.controller, self.words.signals, self.limited)
        positions = [here]
        old = self.efforts[self.task.sampled.whole_delay + 1]
        new = self.efforts[self.task.sampled.whole_delay]
        at_update = self.states
        if self.early is not None:
            at_update = self._later(self.states, self.early, old)
        for late, step in self.looks:
            base, effort = (at_update, new) if late else (self.states, old)
            positions.append(row @ self._later(base, step, effort))
        for position in positions:
            self.low = np.minimum(self.low, position)
            self.high = np.maximum(self.high, position)

    def _later(self, states: Real, step: tuple[Real, Real, Real], effort: Real) -> Real:
        psi, gain, gain_force = step
        return _real(
            states + psi @ states + np.outer(gain, effort) + np.outer(gain_force, self.force)
        )


def seen_limit_cycle(
    task: Task,
    controller: WordController,
    *,
    reference: float,
    settle: int,
    samples: int,
    lanes: int = 256,
    phases: int = 4,
    seed: int = 1,
) -> SeenLimitCycle:
    """Search for the largest motion at rest, over references, starts and constant forces.

    Parameters
    ----------
    task : Task
        Plant and scales.
    controller : WordController
        The words.
    reference : float
        References stand still within this distance of sensor zero. [m or rad]
    settle : int
        Samples before the motion is looked at, at least 1.
    samples : int
        Samples in which it is looked at, at least 2.
    lanes : int
        Number of rest states, at least 1.
    phases : int
        Instants per period at which the position is looked at.
    seed : int
        Of the rest states.

    Returns
    -------
    SeenLimitCycle
        The largest motion; an estimate from below, no bound.

    Raises
    ------
    OutOfRangeError
        If there are too few samples or lanes.

    Notes
    -----
    Every lane has a reference of its own, a start up to a few counts away from it, and a constant
    force of up to one code and one count of holding force, so that every sub-count place of rest
    can occur. A motion that needs longer than `settle` samples to show is not seen, and one that
    drifts counts with what it drifts.
    """
    if settle < 1 or samples < 2 or lanes < 1:
        raise OutOfRangeError("samples", samples, "", "must be at least 2", "ask for a longer run")
    rng = np.random.default_rng(seed)
    sensor, scale = task.loop.sensor, abs(task.count_per_position)
    reach = math.floor(reference * scale)
    near = np.where(np.arange(lanes) < lanes // 4, min(reach, 3), reach)
    wanted = sensor.zero_count + rng.integers(-near, near + 1)
    kick = np.rint(rng.normal(0.0, 1.0, lanes) * 10.0 ** rng.uniform(-1.0, 1.0, lanes))
    start = np.clip(wanted + kick.astype(np.int64), sensor.low_count, sensor.high_count)
    code_force = abs(task.effort_per_code) * (task.force_limit / task.effort_limit)
    count_force = task.plant.stiffness / scale
    force = rng.uniform(-1.0, 1.0, lanes) * (code_force + count_force)
    rest = _Rest(task, controller, start, rng.uniform(-0.5, 0.5, lanes), force, phases)
    for _ in range(settle):
        rest.sample(wanted)
    rest.look()
    track = np.empty((samples, lanes))
    for k in range(samples):
        track[k] = rest.sample(wanted)
    half = 0.5 * (rest.high - rest.low)
    free = ~rest.limited
    best = int(np.argmax(np.where(free, half, -1.0)))
    seen = float(half[best]) if free.any() else 0.0
    above = track[:, best] > 0.5 * (rest.high[best] + rest.low[best])
    ups = np.flatnonzero(above[1:] & ~above[:-1])
    period = float(ups[-1] - ups[0]) / (len(ups) - 1) if len(ups) > 1 else None
    return SeenLimitCycle(
        count=seen,
        position=seen / scale,
        period_s=None if period is None else period * task.period_s,
        reference=int(wanted[best]),
        force=float(force[best]),
        median=float(np.median(half[free])) if free.any() else 0.0,
        moving=float(np.mean(rest.changed)),
        lanes=lanes,
        samples=samples,
        limited_lanes=int(np.count_nonzero(~free)),
    )
