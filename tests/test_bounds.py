"""Proven bounds against brute force that shares nothing with them.

Rules of this file:

- The checker is a plain interpreter of the list of equations in 34-digit arithmetic around a plant
  sampled by mpmath: no state space of the loop, no elimination, no ball.
- A proven upper bound must lie above the brute-force sum and close to it; the lower one below.
- Numbers of the reference loop were computed with mpmath at 40 digits, apart from this code.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cache
from itertools import product
from pathlib import Path

import flint
import mpmath
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from sample_words import all_samples, with_ranges

from plant2.bounds import (
    BITS,
    Column,
    LoopPeaks,
    Peaks,
    _doubles,
    _pace,
    _peaks,
    _powers,
    _remainder_range,
    _remainders,
    _rounding_of,
    _System,
    controller_bounds,
    controller_responses,
    dead_zones,
    deviation,
    hints,
    limit_cycles,
    loop_peaks,
    loop_responses,
    quantiser_gain,
    ranges,
)
from plant2.closedloop import ClosedLoop, gain_edges
from plant2.design import Task, controller_equations, design, place_gains, task_of
from plant2.equations import (
    Equations,
    StateWord,
    WordController,
    WordEquation,
    WordTerm,
    transfer,
)
from plant2.errors import DesignError, OutOfRangeError
from plant2.loopfile import Loop, Notch, load_loop
from plant2.sampled import propagate
from plant2.words import words_of
from tests.loops import PID, lead_loop, reference_loop

EXAMPLES = Path(__file__).resolve().parent.parent / "examples"
TAU = 2.0 * math.pi
NOTCH = Notch(frequency_rad_per_s=TAU * 400, width=0.5, depth_db=20.0)


def _with_notch(loop: Loop) -> Loop:
    return replace(loop, aim=replace(loop.aim, notches=(NOTCH,)))


VARIANTS: dict[str, Loop] = {
    "pd": reference_loop(),
    "pid": reference_loop(*PID),
    "lead": lead_loop(),
    "free_mass": reference_loop('plant.stiffness="0 N/m"', 'plant.bias_force="1 N"'),
    "reversed": reference_loop("actuator.polarity=-1", "sensor.polarity=-1"),
    "offset": reference_loop(
        'actuator.coding="unsigned"',
        "actuator.zero_code=2000",
        'sensor.coding="unsigned"',
        "sensor.bits=15",
        "sensor.zero_count=16000",
        'plant.travel="1.5 mm"',
    ),
    "rest_and_bias": reference_loop('plant.rest_position="0.3 mm"', 'plant.bias_force="-2 N"'),
    "no_delay": reference_loop('processor.delay="0 us"'),
    "whole_delay": reference_loop('processor.delay="400 us"'),
    "filtered": reference_loop('sensor.filter_corner="1.1 kHz"', 'actuator.bandwidth="900 Hz"'),
}
VARIANTS["pid_slow"] = reference_loop('aim.law="pid"', 'aim.integral_corner="2 Hz"')
VARIANTS["notch"] = _with_notch(VARIANTS["pd"])
VARIANTS["pid_notch"] = _with_notch(VARIANTS["pid"])
for _name in ("focus_stage", "lens_carrier", "scan_mirror", "valve_spool"):
    VARIANTS[_name] = load_loop(EXAMPLES / _name / "loop.toml")


@cache
def built(name: str, bits: int = 32) -> tuple[Task, WordController, Equations]:
    loop = VARIANTS[name]
    task = task_of(loop)
    found = design(loop, task, seek_nearest=False)
    assert found.gains is not None and not found.faults
    words = words_of(task, found.gains, bits)
    return task, words.controller, words.equations


@cache
def gains_of(name: str, bits: int = 32, force: bool = False) -> LoopPeaks:
    task, controller, _ = built(name, bits)
    return loop_peaks(task, controller, force=force)


# ---------------------------------------------------------------------------- the second arithmetic


@dataclass(frozen=True, slots=True, kw_only=True)
class Brute:
    """Impulse responses of one input: every signal, and the position at the sample."""

    signals: dict[str, list[mpmath.mpf]]
    position: list[mpmath.mpf]


class MpLoop:
    """The list, real coefficients as stored, around the plant sampled by mpmath."""

    def __init__(self, task: Task, controller: WordController | Equations) -> None:
        self.task, self.controller = task, controller
        bits = dict.fromkeys(controller.inputs, 0)
        if isinstance(controller, WordController):
            bits.update({e.name: e.frac_bits for e in controller.update})
            self.rows = [
                (
                    e.name,
                    [
                        (
                            t.signal,
                            t.lag,
                            mpmath.ldexp(
                                (t.sign if t.word is None else t.word),
                                t.lift + bits[t.signal] - e.frac_bits - e.shift,
                            ),
                        )
                        for t in e.terms
                    ],
                )
                for e in controller.update
            ]
        else:
            self.rows = [
                (e.name, [(t.signal, t.lag, mpmath.mpf(t.coefficient)) for t in e.terms])
                for e in controller.update
            ]
        space, sampled = task.sampled.space, task.sampled
        n = len(space.a)
        wide = mpmath.zeros(n + 1)
        for i in range(n):
            for j in range(n):
                wide[i, j] = mpmath.mpf(float(space.a[i, j]))
            wide[i, n] = mpmath.mpf(float(space.b[i])) * mpmath.mpf(task.effort_per_code)
        period = mpmath.mpf(sampled.period_s)
        early = period * mpmath.mpf(sampled.fraction)
        self.flows = [mpmath.expm(wide * early), mpmath.expm(wide * (period - early))]
        self.n = n

    def respond(self, kind: str, name: str, samples: int, carried: bool = False) -> Brute:
        task, sampled, n = self.task, self.task.sampled, self.n
        past: dict[str, list[mpmath.mpf]] = {row[0]: [mpmath.mpf(0)] * 8 for row in self.rows}
        past |= {x: [mpmath.mpf(0)] * 8 for x in self.controller.inputs}
        acting = [mpmath.mpf(0)] * (sampled.whole_delay + 3)
        x = [mpmath.mpf(0)] * n
        seen: dict[str, list[mpmath.mpf]] = {row[0]: [] for row in self.rows}
        positions = []
        ks = mpmath.mpf(task.count_per_position)
        measured = [mpmath.mpf(float(v)) for v in sampled.c_measured]
        shown = [mpmath.mpf(float(v)) for v in sampled.c_position]
        for k in range(samples):
            hit = mpmath.mpf(1 if k == 0 else -1 if carried and k == 1 else 0)
            positions.append(mpmath.fsum(c * v for c, v in zip(shown, x, strict=True)))
            now = {
                "position": ks * mpmath.fsum(c * v for c, v in zip(measured, x, strict=True)),
                "reference": mpmath.mpf(0),
                "added": mpmath.mpf(0),
            }
            if kind == "sensor":
                now["position"] += hit
            elif kind in now:
                now[kind] += hit
            for signal, terms in self.rows:
                value = mpmath.fsum(
                    f * (past[s][lag - 1] if lag else now[s]) for s, lag, f in terms
                )
                if kind == "rounding" and signal == name:
                    value += hit
                now[signal] = value
                seen[signal].append(value)
            for signal in past:
                past[signal] = [now[signal], *past[signal][:-1]]
            acts = now[self.controller.output] + (hit if kind == "output" else 0)
            acting = [acts, *acting[:-1]]
            for flow, lag in zip(self.flows, (1, 0), strict=True):
                u = acting[sampled.whole_delay + lag]
                x = [
                    mpmath.fsum(flow[i, j] * x[j] for j in range(n)) + flow[i, n] * u
                    for i in range(n)
                ]
        return Brute(signals=seen, position=positions)


CHECKED = (
    ("pd", 32),
    ("pid", 16),
    ("lead", 32),
    ("reversed", 16),
    ("notch", 16),
    ("no_delay", 32),
    ("whole_delay", 32),
    ("filtered", 32),
    ("focus_stage", 32),
    ("scan_mirror", 16),
)


@pytest.mark.parametrize(("name", "bits"), CHECKED)
def test_peak_gains_hold_the_brute_force_sums(name: str, bits: int) -> None:
    task, controller, _ = built(name, bits)
    gains = gains_of(name, bits)
    samples = gains.decay_samples // 2
    with mpmath.workdps(34):
        loop = MpLoop(task, controller)
        carried = {e.name for e in controller.update if e.rest is not None}
        for j, column in enumerate(gains.columns):
            if column.kind not in ("reference", "sensor", "rounding", "output", "added"):
                continue
            brute = loop.respond(column.kind, column.name, samples, column.name in carried)
            rows = [*(brute.signals[s] for s in gains.signals), brute.position]
            place = [*range(len(gains.signals)), gains.position.pieces[0][0]]
            for i, row in zip(place, rows, strict=True):
                total = float(mpmath.fsum(abs(v) for v in row))
                most, least = gains.peaks.most[i, j], gains.peaks.least[i, j]
                # the brute force stops early: what is left decays from its last samples
                left = float(max(abs(v) for v in row[-40:])) * samples
                assert total <= most * (1.0 + 1e-15)
                assert least <= total + left
                assert left <= 2e-3 * total + 1e-30
                assert most <= total * (1.0 + 1e-9) + left
                assert least >= total * (1.0 - 1e-9) - 1e-30
                if column.kind != "rounding" or column.name not in carried:
                    final = float(mpmath.fsum(row))
                    slack = gains.peaks.slack[i, j]
                    assert abs(gains.peaks.total[i, j] - final) <= slack + left + 1e-12 * total


@pytest.mark.parametrize(
    ("law", "expected"),
    [
        (
            "pd",
            {
                "r_x": 1.030669360754980,
                "n_x": 1.468091238456936,
                "du_x": 2.000583608139253e-4,
                "r_u": 12715.21974225990,
                "n_u": 230754.829039,
            },
        ),
        (
            "pid",
            {
                "r_x": 1.442288963554901,
                "n_x": 1.679184099835012,
                "du_x": 2.554311374409393e-4,
                "r_u": 17653.81716252146,
            },
        ),
    ],
)
def test_reference_loop(law: str, expected: dict[str, float]) -> None:
    """Figures from mpmath at 40 digits: position per reference, per sensor error, per newton."""
    loop = reference_loop(*(PID if law == "pid" else ()))
    task = task_of(loop)
    found = design(loop, task, seek_nearest=False)
    assert found.gains is not None
    real = controller_equations(task, replace(found.gains, beta=1.0), 32)
    gains = loop_peaks(task, real)
    ks, ka = gains.count_per_position, task.effort_per_code
    x, u = gains.position.pieces[0][0], gains.signals.index("output_code")
    places = {
        "r_x": (x, 0, ks),
        "n_x": (x, 1, ks),
        "du_x": (x, 3, 1.0 / ka),
        "r_u": (u, 0, ka * ks),
        "n_u": (u, 1, ka * ks),
    }
    for key, value in expected.items():
        i, j, scale = places[key]
        least, most = gains.peaks.least[i, j] * scale, gains.peaks.most[i, j] * scale
        printed = 1e-12 if key != "n_u" else 5e-12
        assert least * (1.0 - printed) <= value <= most * (1.0 + printed)
        assert most - least <= 5e-11 * value


def test_slow_integral_pole_is_summed_to_its_end() -> None:
    """Integral pole at 5 rad/s: time constant 1000 samples."""
    loop = reference_loop('aim.law="pid"', f'aim.integral_corner="{5 / TAU!r} Hz"')
    task = task_of(loop)
    gains = place_gains(task, natural_frequency_rad_per_s=TAU * 60, damping_ratio=0.8)
    peaks = loop_peaks(task, controller_equations(task, replace(gains, beta=1.0), 32))
    row = peaks.position.pieces[0][0]
    value = peaks.peaks.most[row, 0] * peaks.count_per_position
    assert value == pytest.approx(1.0283202284, abs=2e-10)
    assert peaks.peaks.most[row, 0] >= peaks.peaks.least[row, 0]


# ------------------------------------------------------------------------------ the sums themselves


def _peaks_of(a: list[list[float]], b: list[float], c: list[float], d: float = 0.0) -> Peaks:
    with flint.ctx.workprec(BITS):
        matrix = flint.arb_mat(a)
        pace = _pace(_doubles(matrix)[0])
        powers = _powers(matrix, pace.samples)
    n = len(a)
    zero = np.zeros((n, 1))
    return _peaks(
        _System(
            powers=powers,
            b=(np.array(b)[:, np.newaxis], zero),
            c=(np.array([c]), zero.T),
            d=(np.array([[d]]), np.zeros((1, 1))),
        ),
        pace,
    )


@pytest.mark.parametrize(
    ("a", "b", "c", "d", "expected"),
    [
        ([[0.5]], [0.5], [1.0], 1.0, 2.0),
        # resonator r = 0.95, theta = 0.2, from 40 digits
        (
            [[2 * 0.95 * math.cos(0.2), -0.95 * 0.95], [1.0, 0.0]],
            [1.0, 0.0],
            [1.0, 0.0],
            0.0,
            64.946413818767183532,
        ),
        # defective: 0.5 twice, sum k 0.5^(k-1) = 4
        ([[0.5, 1.0], [0.0, 0.5]], [0.0, 1.0], [1.0, 0.0], 0.0, 4.0),
        # nothing but delays
        (
            [[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [0.0] * 3],
            [0.0, 0.0, 3.0],
            [1.0, -1.0, 0.5],
            0.25,
            7.75,
        ),
        # slow: 1/(1 - a) with a = 1 - 2^-12
        ([[1.0 - 2.0**-12]], [1.0], [1.0], 0.0, 4096.0),
        ([[1.0 - 2.0**-30]], [1.0], [1.0], 0.0, 2.0**30),
        # slow beside fast, both positive: the sums add
        ([[1.0 - 2.0**-16, 0.0], [0.0, 0.5]], [3.0, 2.0], [1.0, 1.0], 0.0, 3 * 65536.0 + 4.0),
        ([[-0.75]], [1.0], [1.0], 0.0, 4.0),
    ],
    ids=[
        "first order",
        "resonator",
        "defective",
        "delays",
        "slow",
        "very slow",
        "slow and fast",
        "alternating",
    ],
)
def test_sums_with_known_values(
    a: list[list[float]], b: list[float], c: list[float], d: float, expected: float
) -> None:
    peaks = _peaks_of(a, b, c, d)
    most, least = float(peaks.most[0, 0]), float(peaks.least[0, 0])
    assert least <= expected <= most
    # a pole so near 1 answers the last bit of itself
    assert most - least <= max(2e-10, 2e-15 * expected) * expected


def test_sums_survive_states_of_any_size() -> None:
    """Scaling the states by powers of two changes nothing."""
    a = np.array([[0.97, 0.2, 0.0], [-0.25, 0.9, 0.1], [0.0, -0.3, 0.5]])
    b, c = np.array([0.1, 0.0, 1.0]), np.array([1.0, -2.0, 0.5])
    plain = _peaks_of(a.tolist(), b.tolist(), c.tolist())
    scale = 2.0 ** np.array([30, -25, 4])
    scaled = _peaks_of(
        (a * scale / scale[:, np.newaxis]).tolist(), (b / scale).tolist(), (c * scale).tolist()
    )
    assert scaled.most[0, 0] == pytest.approx(plain.most[0, 0], rel=1e-10)
    assert scaled.least[0, 0] <= plain.most[0, 0] and plain.least[0, 0] <= scaled.most[0, 0]


@pytest.mark.parametrize("pole", [1.0, 1.0000001, -1.0, 1.5, -1.0 + 1e-9])
def test_what_does_not_decay_has_no_sum(pole: float) -> None:
    with pytest.raises(OutOfRangeError, match="unstable, or too slow"):
        _peaks_of([[pole]], [1.0], [1.0])


def test_error_of_the_matrix_is_inside_the_bound() -> None:
    """A matrix that is only known to a radius: both ends of it must lie within the bounds."""
    radius = 1e-6
    with flint.ctx.workprec(BITS):
        ball = flint.arb_mat([[flint.arb(0.9, radius)]])
        powers = _powers(ball, 400.0)
    system = _System(
        powers=powers,
        b=(np.array([[1.0]]), np.array([[1e-7]])),
        c=(np.array([[1.0]]), np.array([[1e-7]])),
        d=(np.zeros((1, 1)), np.zeros((1, 1))),
    )
    peaks = _peaks(system, replace(_pace(np.array([[0.9]])), samples=400.0))
    for pole, b, c in product(
        (0.9 - radius, 0.9 + radius), (1 - 1e-7, 1 + 1e-7), (1 - 1e-7, 1 + 1e-7)
    ):
        true = b * c / (1.0 - pole)
        assert peaks.least[0, 0] <= true <= peaks.most[0, 0]
    assert peaks.most[0, 0] <= 10.0 * (1 + 3e-4)


# ------------------------------------------------------------------------------ roundings


@pytest.mark.parametrize("shift", [1, 2, 3, 5])
@pytest.mark.parametrize("grain", [1, 2, 3, 4, 6, 12, 40])
def test_error_of_a_rounding_is_exact(shift: int, grain: int) -> None:
    """All sums that can occur, against the stated range of the rounding error."""
    equation = WordEquation(
        name="x",
        meaning="",
        unit="code",
        terms=(WordTerm(signal="position", word=grain, name="k"),),
        shift=shift,
        frac_bits=3,
    )
    stated = _rounding_of(equation)
    errors = set()
    for s in range(-400 * grain, 400 * grain + 1, grain):
        value = (s + equation.rounding) >> shift
        errors.add((value - s / 2**shift) / 8.0)
    if stated is None:
        assert errors == {0.0}
        return
    assert (min(errors), max(errors)) == (stated.low, stated.high)


def test_carried_residue_is_one_minus_one_over_z() -> None:
    """What a carried rounding adds is r[k] - r[k-1] with every r within the stated range."""
    equation = WordEquation(
        name="x",
        meaning="",
        unit="code",
        terms=(WordTerm(signal="position", word=37, name="k"),),
        rest="x_rest",
        shift=6,
    )
    stated = _rounding_of(equation)
    assert stated is not None and stated.carried
    rng = np.random.default_rng(5)
    rest, before = 0, 0.0
    for s in rng.integers(-1000, 1000, 4000):
        total = rest + 37 * int(s)
        value = (total + 32) >> 6
        rest = total - (value << 6)
        error = value - 37 * int(s) / 64
        r = error + before
        assert stated.low <= r <= stated.high
        assert r == -rest / 64
        before = r


def test_limited_remainder_is_exact() -> None:
    """Every value of the signal, against the range that ends and corners give."""
    for sign, constant, limit in product((1, -1), (0, 3), ((-5, 7), (-2, 2), (4, 9))):
        update = (
            WordEquation(name="v", meaning="", unit="code", terms=(WordTerm(signal="position"),)),
            WordEquation(
                name="cut",
                meaning="",
                unit="code",
                terms=(WordTerm(signal="v", sign=sign),),
                constant=constant,
                limit=limit,
            ),
            WordEquation(
                name="rest",
                meaning="",
                unit="code",
                terms=(WordTerm(signal="v", sign=sign), WordTerm(signal="cut", sign=-1)),
                constant=constant,
            ),
        )
        controller = _tiny(with_ranges(update, ("position",), 16))
        pair = _remainders(controller)["rest"]
        assert pair == ("v", "cut")
        for low, high in ((-20, 20), (-3, 1), (6, 12)):
            values = []
            for v in range(low, high + 1):
                cut = min(max(sign * v + constant, limit[0]), limit[1])
                values.append(constant + sign * v - cut)
            found = _remainder_range(controller, "rest", pair, (low, high))
            assert found == (min(values), max(values))


def _tiny(update: tuple[WordEquation, ...]) -> WordController:
    return WordController(
        name="tiny",
        word_bits=16,
        sum_bits=32,
        inputs=("reference", "position", "added"),
        update=update,
        output=update[-1].name,
        excess=update[-1].name,
        reset=(),
        resting=(),
    )


# ------------------------------------------------------------------------------ between the samples


@pytest.mark.parametrize(
    ("name", "bits"),
    [
        ("pid", 32),
        ("no_delay", 32),
        ("whole_delay", 16),
        ("filtered", 32),
        ("lens_carrier", 16),
        ("valve_spool", 32),
    ],
)
def test_between_the_samples(name: str, bits: int) -> None:
    """Peak gains at 61 instants of a period that are not those of the bounds."""
    task, controller, _ = built(name, bits)
    gains = gains_of(name, bits)
    columns, names, states, efforts = _plant_responses(task, controller, gains.decay_samples)
    sampled = task.sampled
    early = sampled.fraction * sampled.period_s
    for motion, row in (
        (gains.position, sampled.c_position),
        (gains.main, sampled.c_main_position),
    ):
        largest = np.zeros(len(columns))
        for part in np.linspace(0.0, 1.0, 62)[:-1]:
            t = sampled.period_s * part
            psi, gain, _ = propagate(sampled.space, min(t, early))
            at = states + states @ psi.T + efforts[1][:, :, np.newaxis] * gain
            if t > early:
                psi, gain, _ = propagate(sampled.space, t - early)
                at = at + at @ psi.T + efforts[0][:, :, np.newaxis] * gain
            largest = np.maximum(largest, np.abs(at @ row).sum(axis=0))
        for j, column in enumerate(columns):
            if column.kind not in ("reference", "sensor", "output"):
                continue
            bound = max(
                float(gains.peaks.most[list(rows), j].max() + missed[j])
                for rows, missed in zip(motion.pieces, motion.missed, strict=True)
            )
            assert largest[j] <= bound * (1.0 + 1e-12)
            assert largest[j] >= bound * (1.0 - 2e-3)


def _plant_responses(
    task: Task, controller: WordController, samples: int
) -> tuple[tuple[Column, ...], tuple[str, ...], np.ndarray, tuple[np.ndarray, np.ndarray]]:
    """Plant states per impulse, and the efforts that act late and early in each period."""
    columns, names, rows = loop_responses(task, controller, samples)
    output = rows[:, names.index(controller.output)].copy()
    for j, column in enumerate(columns):
        if column.kind == "output":
            output[0, j] += 1.0
        if column.kind == "one":
            output[:, j] = 0.0
    output *= task.effort_per_code
    d = task.sampled.whole_delay

    def held(lag: int) -> np.ndarray:
        out = np.zeros_like(output)
        out[lag:] = output[: samples - lag]
        return out

    late, early = held(d), held(d + 1)
    sampled = task.sampled
    states = np.zeros((samples, output.shape[1], len(sampled.space.a)))
    x = np.zeros((output.shape[1], len(sampled.space.a)))
    for k in range(samples):
        states[k] = x
        x = (
            x
            + x @ sampled.psi.T
            + late[k][:, np.newaxis] * sampled.gamma0
            + early[k][:, np.newaxis] * sampled.gamma1
        )
    return columns, names, states, (late, early)


@pytest.mark.parametrize("name", ["pid", "focus_stage", "filtered"])
def test_force_at_any_time(name: str) -> None:
    """A force that changes 40 times a period, as bad as it can be, reaches the bound."""
    task, controller, _ = built(name)
    gains = gains_of(name, 32, True)
    assert gains.columns[-1].kind == "force"
    sampled = task.sampled
    parts = 40
    psi, _, kick = propagate(sampled.space, sampled.period_s / parts)
    # state at the next sample after a unit force during one part of the period
    starts = [kick]
    for _ in range(parts - 1):
        starts.append(starts[-1] + psi @ starts[-1])
    total = dict.fromkeys([*gains.signals, "position"], 0.0)
    for start in starts:
        signals, position = _free_response(task, controller, start, gains.decay_samples)
        for signal in gains.signals:
            total[signal] += float(np.abs(signals[signal]).sum())
        total["position"] += float(np.abs(position).sum())
    for i, signal in enumerate(gains.signals):
        bound = float(gains.peaks.most[i, -1])
        assert total[signal] <= bound * (1.0 + 1e-9)
        if total[signal] > 0.0 and signal != "excess":
            assert total[signal] >= 0.95 * bound
    row = gains.position.pieces[0][0]
    assert 0.99 * gains.peaks.most[row, -1] <= total["position"] <= gains.peaks.most[row, -1]


def _free_response(
    task: Task, controller: WordController, start: np.ndarray, samples: int
) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """All signals and the position after a start of the plant, list interpreted in doubles."""
    sampled = task.sampled
    bits = dict.fromkeys(controller.inputs, 0)
    bits.update({e.name: e.frac_bits for e in controller.update})
    rows = [
        (
            e.name,
            [
                (t.signal, t.lag, math.ldexp(t.factor, bits[t.signal] - e.sum_frac_bits))
                for t in e.terms
            ],
        )
        for e in controller.update
    ]
    past: dict[str, list[float]] = {e.name: [0.0] * 4 for e in controller.update}
    d = sampled.whole_delay
    acting = [0.0] * (d + 2)
    x = start.copy()
    out = {e.name: np.zeros(samples) for e in controller.update}
    position = np.zeros(samples)
    for k in range(samples):
        position[k] = sampled.c_position @ x
        now = {"position": task.count_per_position * float(sampled.c_measured @ x)}
        now |= {"reference": 0.0, "added": 0.0}
        for name, terms in rows:
            now[name] = sum(f * (past[s][lag - 1] if lag else now[s]) for s, lag, f in terms)
            out[name][k] = now[name]
        for name in past:
            past[name] = [now[name], *past[name][:-1]]
        acting = [now[controller.output] * task.effort_per_code, *acting[:-1]]
        x = x + sampled.psi @ x + sampled.gamma0 * acting[d] + sampled.gamma1 * acting[d + 1]
    return out, position


# ------------------------------------------------------------------------------ deviation


def textbook_pid() -> tuple[Task, WordController]:
    """The reference PID in words that were written down with its figures: set-point weight 1."""
    counts = (-32768, 32767)
    kp, kc, ka, ki = 712099, 5953467, 4975, 2462255  # 2^-24, 2^-23, 2^-15, 2^-32
    update = (
        WordEquation(
            name="position_count",
            meaning="",
            unit="count",
            terms=(WordTerm(signal="position"),),
            limit=counts,
        ),
        WordEquation(
            name="reference_count",
            meaning="",
            unit="count",
            terms=(WordTerm(signal="reference"),),
            limit=counts,
        ),
        WordEquation(
            name="error",
            meaning="",
            unit="count",
            terms=(
                WordTerm(signal="reference_count"),
                WordTerm(signal="position_count", sign=-1),
            ),
        ),
        WordEquation(
            name="change",
            meaning="",
            unit="count",
            terms=(
                WordTerm(signal="position_count"),
                WordTerm(signal="position_count", lag=1, sign=-1),
            ),
        ),
        WordEquation(
            name="rate",
            meaning="",
            unit="code",
            terms=(
                WordTerm(signal="rate", lag=1, word=ka, name="ka", word_frac_bits=15),
                WordTerm(signal="change", word=kc, name="kc", word_frac_bits=23),
            ),
            shift=15,
            frac_bits=8,
            limit=(-(1 << 30), 1 << 30),
        ),
        WordEquation(
            name="integral",
            meaning="",
            unit="code",
            terms=(
                WordTerm(signal="integral", lag=1),
                WordTerm(signal="error", word=ki, name="ki", word_frac_bits=32),
            ),
            frac_bits=32,
            wide=True,
            limit=(-(1 << 60), 1 << 60),
        ),
        WordEquation(
            name="output_code",
            meaning="",
            unit="code",
            terms=(
                WordTerm(signal="error", word=kp, name="kp", word_frac_bits=24, lift=8),
                WordTerm(signal="integral"),
                WordTerm(signal="rate", sign=-1, lift=24),
            ),
            shift=32,
            limit=(-4095, 4095),
        ),
        WordEquation(
            name="excess",
            meaning="",
            unit="code",
            terms=(WordTerm(signal="output_code"), WordTerm(signal="output_code", sign=-1)),
        ),
    )
    update = with_ranges(update, ("reference", "position", "added"), 32)
    kept = {e.name: e for e in update}
    state = tuple(
        StateWord(
            name=f"{name}_before",
            wide=kept[name].wide,
            low=kept[name].low,
            high=kept[name].high,
            signal=name,
            lag=1,
            after_reset=None,
            meaning="",
        )
        for name in ("position_count", "rate", "integral", "excess")
    )
    rest = with_ranges(
        (
            WordEquation(
                name="rest_code",
                meaning="",
                unit="code",
                terms=(WordTerm(signal="position", word=1342177, name="kh", word_frac_bits=30),),
                shift=30,
                limit=(-4095, 4095),
            ),
        ),
        ("position",),
        32,
    )
    controller = WordController(
        name="textbook",
        word_bits=32,
        sum_bits=64,
        inputs=("reference", "position", "added"),
        update=update,
        output="output_code",
        excess="excess",
        reset=(),
        resting=rest,
        state=state,
    )
    return task_of(reference_loop(*PID, "actuator.bits=13")), controller


def test_deviation_of_the_textbook_pid() -> None:
    """Figures from 192-bit balls, apart from this code: gains 1.679195198826 from the sensor,
    2.554328561349e-4 m/N from the output, 3.01107146288e-4 m/N from the filter; bound
    1.30421888 um at the samples, at most 1.30623757 um at any time by a cruder interpolation."""
    task, controller = textbook_pid()
    found = deviation(task, controller)
    gains = loop_peaks(task, controller)
    row, scale = gains.position.pieces[0][0], gains.count_per_position
    most = gains.peaks.most[row]
    assert most[gains.column("sensor")] * scale == pytest.approx(1.679195198826, rel=1e-11)
    newton = task.effort_per_code
    output = most[gains.column("rounding", "output_code")] / newton
    inner = most[gains.column("rounding", "rate")] / newton
    assert output == pytest.approx(2.554328561349e-4, rel=1e-11)
    assert inner == pytest.approx(3.01107146288e-4, rel=2e-11)
    # half a step each; a rounding by 15 bits errs by 2^-16 of a step less to one side
    whole = 0.5 * (
        most[gains.column("sensor")]
        + most[gains.column("rounding", "output_code")]
        + most[gains.column("rounding", "rate")] / 256
    )
    assert whole == pytest.approx(1.30421888e-6, abs=6e-15)
    assert 0.0 < whole - found.at_samples / scale < 4e-13
    assert found.at_samples <= found.count <= 1.30623757e-6 * scale
    assert found.sensor + found.output + found.inner == pytest.approx(found.count, rel=1e-9)
    assert [name for name, _ in found.inner_shares] == ["rate"]


def test_carried_residue_of_the_output() -> None:
    """With the residue carried the output's share falls from 1.2472 to 0.0707 um."""
    task, controller = textbook_pid()
    plain = deviation(task, controller)
    update = tuple(
        replace(e, rest="rest") if e.name == "output_code" else e for e in controller.update
    )
    update = with_ranges(update, ("reference", "position", "added"), 32)
    carried = deviation(task, replace(controller, update=update))
    scale = abs(task.count_per_position)
    gains = loop_peaks(task, controller)
    row = gains.position.pieces[0][0]
    at_samples = 0.5 * gains.peaks.most[row, gains.column("rounding", "output_code")]
    assert at_samples == pytest.approx(1.2472e-6, abs=5e-11)
    gains = loop_peaks(task, replace(controller, update=update))
    at_samples = 0.5 * gains.peaks.most[row, gains.column("rounding", "output_code")]
    assert at_samples == pytest.approx(0.0707e-6, abs=5e-11)
    assert carried.output < 0.07 * plain.output
    assert carried.output / scale < 0.08e-6


@pytest.mark.parametrize("name", ["pid", "pid_slow", "pid_notch"])
def test_share_of_coefficient_rounding(name: str) -> None:
    """The worst reference against both ideal loops in doubles, 16-bit words."""
    task, controller, equations = built(name, 16)
    share = deviation(task, controller, designed=equations, reference=0.4e-3).coefficients
    assert share is not None
    samples = gains_of(name, 16).decay_samples
    _, names, words = loop_responses(task, controller, samples, phases=4)
    _, _, real = loop_responses(task, equations, samples, phases=4)
    row = names.index("position")
    gap = words[:, row, 0] - real[:, row, 0]
    scale = abs(task.count_per_position)
    brute = float(np.abs(gap).sum()) * scale * 0.4e-3 * scale
    assert brute <= share * (1.0 + 1e-9)
    assert share <= brute * 1.01
    # finer words, smaller share
    task, controller, equations = built(name, 32)
    fine = deviation(task, controller, designed=equations, reference=0.4e-3).coefficients
    assert fine is not None and 0.0 < fine < 1e-3 * share


def test_deviation_grows_with_the_error_of_a_rounding() -> None:
    """One bit less in the output is twice the step: the share doubles."""
    task, controller = textbook_pid()
    coarse = task_of(reference_loop(*PID, "actuator.bits=12"))
    shares = deviation(task, controller), deviation(coarse, _halved(controller))
    assert shares[1].output == pytest.approx(2.0 * shares[0].output, rel=2e-4)
    assert shares[1].sensor == pytest.approx(shares[0].sensor, rel=2e-4)


def _halved(controller: WordController) -> WordController:
    """Gains halved, for an actuator whose codes do twice as much."""
    words = {"kp": 2, "kc": 2, "ki": 2}
    update = tuple(
        replace(
            e,
            terms=tuple(
                replace(t, word=round(t.word / words.get(t.name or "", 1)))
                if t.word is not None
                else t
                for t in e.terms
            ),
        )
        for e in controller.update
    )
    return replace(controller, update=with_ranges(update, ("reference", "position", "added"), 32))


# ------------------------------------------------------------------------------ ranges


def _every_case() -> Iterator[tuple[str, int]]:
    for name in VARIANTS:
        yield name, 32
    for name in ("pd", "pid", "reversed", "notch", "lens_carrier"):
        yield name, 16


@pytest.mark.parametrize(("name", "bits"), list(_every_case()))
def test_ranges_and_what_they_rest_on(name: str, bits: int) -> None:
    task, controller, _ = built(name, bits)
    gains = gains_of(name, bits)
    found = ranges(task, controller, gains=gains)
    assert found.linear == (not found.reached)
    assert found.voids == ()
    assert found.largest_reference_at_rest is not None
    if found.largest_reference is not None:
        assert found.largest_reference <= found.largest_reference_at_rest
        at_edge = ranges(task, controller, reference=found.largest_reference, gains=gains)
        assert at_edge.linear
        step = 1.5 / gains.count_per_position
        if found.largest_reference + step <= task.plant.travel:
            beyond = ranges(task, controller, reference=found.largest_reference + step, gains=gains)
            assert not beyond.linear
    for s in found.signals:
        assert s.low <= s.high
    assert found.signal("excess").low == found.signal("excess").high == 0.0
    low, high = found.position
    assert low <= -found.reference * (1 - 1e-9) and high >= found.reference * (1 - 1e-9)


def test_ranges_of_the_reference_pid() -> None:
    """|r| <= 0.2 mm, |n| <= 0.3 um, |F| <= 0.2 N; the reference alone makes 254.287 codes."""
    task = task_of(reference_loop(*PID, "actuator.bits=13"))
    gains = place_gains(task, natural_frequency_rad_per_s=TAU * 60, damping_ratio=0.8)
    controller = words_of(task, gains, 32).controller
    peaks = loop_peaks(task, controller, force=True)
    row = peaks.signals.index("unlimited_code")
    scale = peaks.count_per_position
    reference = 0.2e-3 * scale * peaks.peaks.most[row, 0]
    assert reference == pytest.approx(254.287, abs=2e-3)
    found = ranges(task, controller, reference=0.2e-3, noise=0.3e-6, force=0.2, gains=peaks).signal(
        "unlimited_code"
    )
    # sensor's noise and step, force, rounding of the output, start
    most = peaks.peaks.most[row]
    force = 0.2 * most[peaks.column("force")]
    assert force == pytest.approx(0.2 / task.effort_per_code * most[3], rel=2e-3)
    parts = (
        3276 / (0.2e-3 * scale) * reference
        + (0.3e-6 * scale + 0.5) * most[1]
        + force
        + 0.5 * most[peaks.column("rounding", "unlimited_code")]
    )
    assert parts < found.high < parts + 1.5
    assert found.low == pytest.approx(-found.high, rel=1e-9)


def test_friction_voids_the_bounds() -> None:
    task = task_of(reference_loop('plant.friction="0.2 N"'))
    controller = built("pd")[1]
    found = ranges(task, controller)
    assert not found.linear and found.reached == ()
    assert found.voids and "friction" in found.voids[0]
    assert deviation(task, controller).voids == found.voids
    assert limit_cycles(task, controller).voids == found.voids


@pytest.mark.parametrize("key", ["reference", "force", "noise", "added"])
@pytest.mark.parametrize("value", [-1.0, math.nan, math.inf])
def test_ranges_refuse_what_is_no_range(key: str, value: float) -> None:
    task, controller, _ = built("pd")
    with pytest.raises(OutOfRangeError, match=key):
        ranges(task, controller, gains=gains_of("pd"), **{key: value})


def test_unstable_loop_has_no_bounds() -> None:
    task = task_of(reference_loop('processor.delay="2.4 ms"'))
    controller = built("pd")[1]
    with pytest.raises(OutOfRangeError, match="unstable, or too slow"):
        loop_peaks(task, controller)
    with pytest.raises(OutOfRangeError, match="unstable, or too slow"):
        deviation(task, controller)


def test_a_force_needs_its_column() -> None:
    """Peak gains without a force are not used for a case with one."""
    task, controller, _ = built("pd")
    with_force = ranges(task, controller, force=0.5, gains=gains_of("pd"))
    without = ranges(task, controller, gains=gains_of("pd"))
    assert with_force.position[1] > without.position[1]
    assert with_force.signal("unlimited_code").high > without.signal("unlimited_code").high + 10


# ------------------------------------------------------------------------------ limit cycles, hints


def test_limit_cycle_bound_of_the_textbook_pid() -> None:
    """Half a step each of sensor, output and filter: 21.27 counts and what the filter adds."""
    task, controller = textbook_pid()
    found = limit_cycles(task, controller)
    dev = deviation(task, controller)
    assert found.count == pytest.approx(dev.count, rel=1e-6)
    assert 21.27 < found.count < 21.27 + 0.2
    assert found.count_per_code == pytest.approx(800.0, rel=1e-12)
    assert found.must_hunt
    assert found.dead_zones == (("integral", 0.0),)


def test_rule_of_steps_for_laws_without_an_integral() -> None:
    task, controller, _ = built("pd")
    found = limit_cycles(task, controller, gains=gains_of("pd"))
    assert not found.must_hunt and found.dead_zones == ()
    free = built("free_mass")
    assert limit_cycles(free[0], free[1], gains=gains_of("free_mass")).count_per_code is None


@pytest.mark.parametrize(("frac_bits", "zone"), [(8, 3.41), (12, 0.213)])
def test_dead_zone_of_a_rounded_integral(frac_bits: int, zone: float) -> None:
    """ki = 5.732883e-4 code per count; the integers agree: inputs below it move nothing."""
    ki = round(5.732883e-4 * 2**32)
    shift = 32 - frac_bits
    integral = WordEquation(
        name="integral",
        meaning="",
        unit="code",
        terms=(
            WordTerm(signal="integral", lag=1, lift=shift),
            WordTerm(signal="error", word=ki, name="ki", word_frac_bits=32),
        ),
        shift=shift,
        frac_bits=frac_bits,
        limit=(-30000, 30000),
    )
    error = WordEquation(
        name="error", meaning="", unit="count", terms=(WordTerm(signal="position"),)
    )
    controller = replace(_tiny((error, integral)), word_bits=32, sum_bits=64)
    ((name, found),) = dead_zones(controller)
    assert name == "integral" and found == pytest.approx(zone, rel=2e-3)
    below, above = math.floor(found), math.floor(found) + 1
    assert (ki * below + integral.rounding) >> shift == 0
    assert (ki * above + integral.rounding) >> shift >= 1
    carried = replace(controller, update=(error, replace(integral, rest="rest")))
    assert dead_zones(carried) == (("integral", 0.0),)


def test_quantiser_gain_against_its_integral() -> None:
    """First harmonic of a rounded sine, by a plain sum over a period."""
    angle = (np.arange(200_000) + 0.5) / 200_000 * TAU
    for amplitude in (0.51, math.sqrt(0.5), 1.2, 1.7, 3.3, 12.4):
        rounded = np.floor(amplitude * np.sin(angle) + 0.5)
        harmonic = 2.0 * float(np.mean(rounded * np.sin(angle)))
        assert quantiser_gain(amplitude) == pytest.approx(harmonic / amplitude, abs=2e-4)
    assert quantiser_gain(math.sqrt(0.5)) == pytest.approx(4 / math.pi, abs=1e-15)
    with pytest.raises(OutOfRangeError, match="amplitude"):
        quantiser_gain(0.0)


def test_hints_of_a_conditionally_stable_loop() -> None:
    """The reference PID loses stability for gains from 1/181.18 to 1/11.56, at 20.07 Hz there."""
    task, controller, _ = built("pid")
    loop = ClosedLoop(
        sampled=task.sampled,
        controller=transfer(controller).in_delta(),
        count_per_position=task.count_per_position,
        effort_per_code=task.effort_per_code,
    )
    edges = gain_edges(loop)
    found = hints(loop, edges)
    assert len(found) == 1
    assert found[0].gain == pytest.approx(1 / 11.56, rel=1e-3)
    assert found[0].frequency_hz == pytest.approx(20.07, abs=0.05)
    assert quantiser_gain(found[0].amplitude) >= found[0].gain
    assert hints(loop, [g for g in edges if g > 4 / math.pi]) == ()


# ------------------------------------------------------------------------------ controllers alone


@pytest.mark.parametrize("controller", all_samples(), ids=lambda c: c.name)
def test_controller_bounds_lie_within_the_stated_ranges(controller: WordController) -> None:
    found = controller_bounds(controller)
    assert [s.name for s in found.signals] == [e.name for e in controller.update]
    for s, e in zip(found.signals, controller.update, strict=True):
        assert e.low <= s.low <= s.high <= e.high
        assert e.sum_low <= s.sum_low <= s.sum_high <= e.sum_high
        assert s.bound == max(-s.low, s.high) <= s.capacity + 1
        assert found.signal(s.name) is s
        if s.linear:
            assert s.low > e.low or s.high < e.high
    for name in found.idle_limits:
        e, s = controller.equation(name), found.signal(name)
        assert e.limit is not None and e.limit[0] <= s.low and s.high <= e.limit[1]
    with pytest.raises(KeyError):
        found.signal("nobody")


def test_derivative_is_bounded_by_twice_its_gain() -> None:
    """The sum of absolute responses of c (1 - q)/(1 - a q) is exactly 2 c."""
    _, controller, _ = built("pd")
    found = controller_bounds(controller)
    e = controller.equation("damping_code")
    kd = next(t for t in e.terms if t.signal == "change_count")
    full = kd.factor * (32767 + 32768) / 2**e.shift
    s = found.signal("damping_code")
    assert s.linear and not s.at_limit and "damping_code" in found.idle_limits
    assert full <= s.high <= full + 2
    names, responses = controller_responses(controller, found.cuts, 400)
    column = names.index(("cut", "position_count"))
    total = np.abs(responses[:, 4, column]).sum()
    assert [x.name for x in controller.update][4] == "damping_code"
    assert total == pytest.approx(2.0 * kd.factor / 2**e.sum_frac_bits, rel=1e-12)


def test_starts_that_are_no_rest_leave_the_intervals() -> None:
    """A reset that forgets the last position kicks the derivative: intervals must do."""
    _, controller, _ = built("pd")
    usual = controller_bounds(controller)
    assert usual.signal("unlimited_code").linear
    forgetful = replace(
        controller,
        state=tuple(
            replace(w, after_reset=None) if w.name == "position_count_before" else w
            for w in controller.state
        ),
    )
    found = controller_bounds(forgetful)
    assert found.idle_limits == () and not any(s.linear for s in found.signals)
    for s, e in zip(found.signals, controller.update, strict=True):
        assert (s.low, s.high) == (e.low, e.high) or s.name == "excess"


def test_a_limit_that_may_act_is_not_followed() -> None:
    """Lowered below what the inputs can make, the limit itself becomes the bound."""
    _, controller, _ = built("pd")
    limit = controller_bounds(controller).signal("damping_code").high // 3
    update = tuple(
        replace(e, limit=(-limit, limit)) if e.name == "damping_code" else e
        for e in controller.update
    )
    kept = {e.name: e for e in update}
    lowered = replace(
        controller,
        update=with_ranges(update, controller.inputs, 32),
        state=tuple(
            replace(s, low=-limit, high=limit) if s.signal == "damping_code" else s
            for s in controller.state
        ),
    )
    lowered = replace(
        lowered,
        update=tuple(
            replace(e, low=kept[e.name].low, high=kept[e.name].high) if e.name == "excess" else e
            for e in lowered.update
        ),
    )
    found = controller_bounds(lowered)
    s = found.signal("damping_code")
    assert s.at_limit and (s.low, s.high) == (-limit, limit)
    assert "damping_code" not in found.idle_limits
    assert found.signal("unlimited_code").leans_on == ("damping_code",)


# ------------------------------------------------------------------------------ any loop


@st.composite
def loops(draw: st.DrawFn) -> Loop:
    """Loops of any size, rate, delay and law; designs that do not exist are left out later."""
    rate = draw(st.sampled_from([2000, 8000, 50000]))
    natural = rate / draw(st.floats(25.0, 150.0))
    mass = 10.0 ** draw(st.floats(-3.0, 0.0))
    own = TAU * natural * 10.0 ** draw(st.floats(-2.0, -0.2))
    damping = 2.0 * 10.0 ** draw(st.floats(-3.0, 0.0)) * mass * own
    force = mass * (TAU * natural) ** 2 * 4e-3
    sets = [
        f'plant.mass="{mass!r} kg"',
        f'plant.damping="{damping!r} N*s/m"',
        f'plant.stiffness="{mass * own * own!r} N/m"',
        f'processor.sample_rate="{rate} Hz"',
        f'processor.delay="{draw(st.sampled_from([0.0, 0.3, 0.75, 1.0, 1.35, 2.2])) / rate!r} s"',
        f"sensor.polarity={draw(st.sampled_from([1, -1]))}",
        f"actuator.polarity={draw(st.sampled_from([1, -1]))}",
        f"actuator.bits={draw(st.sampled_from([10, 14, 16]))}",
        f'actuator.force_constant="{force!r} N/A"',
        'actuator.full_scale="1 A"',
        'actuator.limit="0.9 A"',
        f'aim.natural_frequency="{natural!r} Hz"',
        f"aim.damping_ratio={draw(st.floats(0.4, 1.3))!r}",
        f'aim.derivative_corner="{rate / draw(st.floats(4.0, 15.0))!r} Hz"',
    ]
    if draw(st.booleans()):
        part = 10.0 ** draw(st.floats(0.4, 1.6))
        sets += ['aim.law="pid"', f'aim.integral_corner="{natural / part!r} Hz"']
    if draw(st.booleans()):
        sets.append(f'sensor.filter_corner="{rate * draw(st.floats(0.3, 3.0))!r} Hz"')
    return reference_loop(*sets)


@settings(max_examples=15)
@given(loop=loops(), bits=st.sampled_from([16, 32]))
def test_any_loop(loop: Loop, bits: int) -> None:
    """Impulse responses by the list in doubles, of the reference and of the sensor's error."""
    task = task_of(loop)
    found = design(loop, task, seek_nearest=False)
    assume(found.gains is not None and not found.faults)
    assert found.gains is not None
    try:
        controller = words_of(task, found.gains, bits).controller
        gains = loop_peaks(task, controller)
    except (DesignError, OutOfRangeError):
        # no words, or words that make it unstable
        assume(False)
        raise
    assume(gains.decay_samples < 4000)
    for kind, column in (("reference", 0), ("sensor", 1)):
        signals, position = _double_response(task, controller, kind, gains.decay_samples)
        for i, signal in enumerate(gains.signals):
            total = float(np.abs(signals[signal]).sum())
            most, least = gains.peaks.most[i, column], gains.peaks.least[i, column]
            assert least * (1.0 - 1e-9) - 1e-12 <= total <= most * (1.0 + 1e-9) + 1e-12
            assert most - least <= 1e-7 * most + 1e-12
        row = gains.position.pieces[0][0]
        total = float(np.abs(position).sum())
        most, least = gains.peaks.most[row, column], gains.peaks.least[row, column]
        assert least * (1.0 - 1e-9) <= total <= most * (1.0 + 1e-9)


def _double_response(
    task: Task, controller: WordController, kind: str, samples: int
) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """All signals and the position after one unit of an input, list interpreted in doubles."""
    sampled = task.sampled
    bits = dict.fromkeys(controller.inputs, 0)
    bits.update({e.name: e.frac_bits for e in controller.update})
    rows = [
        (
            e.name,
            [
                (t.signal, t.lag, math.ldexp(t.factor, bits[t.signal] - e.sum_frac_bits))
                for t in e.terms
            ],
        )
        for e in controller.update
    ]
    past: dict[str, list[float]] = {e.name: [0.0] * 4 for e in controller.update}
    d = sampled.whole_delay
    acting = [0.0] * (d + 2)
    x = np.zeros(len(sampled.space.a))
    measured = task.count_per_position * sampled.c_measured
    out = {e.name: np.zeros(samples) for e in controller.update}
    position = np.zeros(samples)
    for k in range(samples):
        hit = 1.0 if k == 0 else 0.0
        position[k] = sampled.c_position @ x
        now = {"position": float(measured @ x), "reference": 0.0, "added": 0.0}
        now["reference" if kind == "reference" else "position"] += hit
        for name, terms in rows:
            now[name] = sum(f * (past[s][lag - 1] if lag else now[s]) for s, lag, f in terms)
            out[name][k] = now[name]
        for name in past:
            past[name] = [now[name], *past[name][:-1]]
        acting = [now[controller.output] * task.effort_per_code, *acting[:-1]]
        x = x + sampled.psi @ x + sampled.gamma0 * acting[d] + sampled.gamma1 * acting[d + 1]
    return out, position
