"""Step figures against arithmetic of 40 digits, against closed forms, and against brute force.

Rules of this file:

- The second arithmetic integrates by another way: closed forms in mpmath, or a fine grid by
  scipy's exponential.
- Random motions are wild on purpose: fast modes, coarse nodes, several extremes a piece.
"""

from __future__ import annotations

import math
from dataclasses import replace

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import expm

from plant2.errors import OutOfRangeError
from plant2.loopfile import Mode
from plant2.plant import Plant, StateSpace, state_space
from plant2.response import (
    Trajectory,
    held_space,
    part_of,
    step_figures,
    step_figures_of_samples,
    trajectory_of_samples,
)
from plant2.sampled import SampledPlant, propagate, sample


def held_motion(
    space: StateSpace,
    spans_s: list[float],
    inputs: np.ndarray,
    forces: np.ndarray | None = None,
    start: np.ndarray | None = None,
) -> Trajectory:
    """Motion under inputs (pieces, lanes), by one exact transition a piece."""
    lanes = inputs.shape[1]
    force = np.zeros_like(inputs) if forces is None else forces
    states = [np.zeros((lanes, space.a.shape[0])) if start is None else start]
    for span_s, u, f in zip(spans_s, inputs, force, strict=True):
        psi, gain, gain_force = propagate(space, span_s)
        x = states[-1]
        states.append(x + x @ psi.T + np.outer(u, gain) + np.outer(f, gain_force))
    return Trajectory(
        space=space,
        times_s=np.concatenate([[0.0], np.cumsum(spans_s)]),
        states=np.array(states),
        inputs=inputs,
        forces=force,
    )


def linear_loop(
    sampled: SampledPlant, *, kp: float, kd: float, a: float, kff: float, steps: np.ndarray, n: int
) -> Trajectory:
    """A step of a linear PD loop with filtered rate on the measurement and feedforward."""
    lanes, d = steps.size, sampled.whole_delay
    x, rate, before = np.zeros((lanes, 2)), np.zeros(lanes), np.zeros(lanes)
    states, outputs = [x], [np.zeros(lanes)] * (d + 1)
    for k in range(n):
        y = x[:, 0]
        rate = a * rate + kd * (1.0 - a) / sampled.period_s * (y - before)
        before = y
        outputs.append(kp * (steps - y) - rate + kff * steps)
        x = x + (
            x @ sampled.psi.T
            + np.outer(outputs[k + 1], sampled.gamma0)
            + np.outer(outputs[k], sampled.gamma1)
        )
        states.append(x)
    return trajectory_of_samples(
        sampled, states=np.array(states), inputs=np.array(outputs)[: n + d + 1]
    )


STAGE = Plant(mass=0.05, damping=0.4, stiffness=200.0)

# period, delay in periods, filter pole, kp, kd; overshoot, peak, settling to 1 %, 10 %, 90 %.
# Computed with 40 digits by closed forms from piece to piece (mpmath), own numbers.
LOOPS = [
    (
        (2e-4, 1.35, math.exp(-2.0 * math.pi * 1500.0 * 2e-4), 4951.84347488285, 23.804405318642),
        (0.01510773509792736, 0.01427052804466868, 0.01722064654378469),
        (0.001718945729179604, 0.00828438179646568),
    ),
    (
        (1.2e-3, 0.75, 0.0, 661.2925961654, 6.480316513295),
        (0.1608911107386797, 0.02454169413491245, 0.05728066065110975),
        (0.004354412136210, 0.014954242521314),
    ),
    (
        (4e-3, 0.5, 0.0, 206.5945950745, 4.907066759782),
        (0.1180288880945736, 0.02994146794056658, 0.07733847137257482),
        (0.007019456914273, 0.02056721888554719),
    ),
]


@pytest.mark.parametrize(("loop", "main", "rise"), LOOPS, ids=["200us", "1.2ms", "4ms"])
def test_sampled_loop_against_40_digits(
    loop: tuple[float, ...], main: tuple[float, ...], rise: tuple[float, ...]
) -> None:
    period_s, delay, a, kp, kd = loop
    sampled = sample(state_space(STAGE), period_s, delay * period_s)
    steps = np.array([1.0, -0.25, 3e-6])  # figures in percent and seconds do not see the size
    motion = linear_loop(sampled, kp=kp, kd=kd, a=a, kff=200.0, steps=steps, n=2000)
    figures = step_figures(motion, reference=steps, step=steps, band=0.01)
    assert figures.overshoot_percent / 100.0 == pytest.approx(main[0], rel=1e-11)
    assert figures.peak_time_s == pytest.approx(main[1], rel=1e-11)
    assert figures.settling_time_s == pytest.approx(main[2], rel=1e-11)
    assert figures.rise_from_s == pytest.approx(rise[0], rel=1e-12)
    assert figures.rise_to_s == pytest.approx(rise[1], rel=1e-12)
    assert figures.rise_time_s == pytest.approx(rise[1] - rise[0], rel=1e-11)
    assert figures.final_value == pytest.approx(steps, rel=1e-12)
    assert np.all(figures.final_error <= 1e-12 * np.abs(steps))
    assert figures.peak_value == pytest.approx(steps * (1.0 + main[0]), rel=1e-12)
    assert np.all(figures.start_value == 0.0)


def test_coarse_loop_by_mpmath() -> None:
    """The 4 ms loop again, here and now, by closed forms in 40 digits and root finding."""
    (period_s, delay, _, kp, kd), main, _ = LOOPS[2]
    with mp.workdps(40):
        m, b, k, t = mp.mpf("0.05"), mp.mpf("0.4"), mp.mpf(200), mp.mpf("0.004")
        assert float(t) == period_s
        alpha = b / (2 * m)
        wd = mp.sqrt(k / m - alpha**2)

        def move(x: mp.mpf, v: mp.mpf, u: mp.mpf, h: mp.mpf) -> tuple[mp.mpf, mp.mpf]:
            rest = u / k
            y, w = x - rest, (v + alpha * (x - rest)) / wd
            decay, c, s = mp.exp(-alpha * h), mp.cos(wd * h), mp.sin(wd * h)
            value = decay * (y * c + w * s)
            slope = -alpha * value + decay * wd * (-y * s + w * c)
            return rest + value, slope

        x = v = before = old = mp.mpf(0)
        pieces = []
        for n in range(60):
            u = mp.mpf(repr(kp)) * (1 - x) - mp.mpf(repr(kd)) / t * (x - before) + k
            before = x
            for offset, held, h in ((0, old, t * delay), (delay, u, t * (1 - delay))):
                pieces.append(((n + offset) * t, x, v, held, h))
                x, v = move(x, v, held, h)
            old = u
        peak_s, peak, last_s = mp.mpf(0), mp.mpf(0), mp.mpf(0)
        band = mp.mpf("0.01")
        for begin, x0, v0, u, h in pieces:
            x1, v1 = move(x0, v0, u, h)
            points = [(mp.mpf(0), x0), (h, x1)]
            if v0 * v1 < 0:
                at = mp.findroot(
                    lambda q, x0=x0, v0=v0, u=u: move(x0, v0, u, q)[1], (0, h), solver="anderson"
                )
                points.insert(1, (at, move(x0, v0, u, at)[0]))
            for (q0, y0), (q1, y1) in zip(points, points[1:], strict=False):
                if y1 > peak:
                    peak, peak_s = y1, begin + q1
                if abs(y0 - 1) > band >= abs(y1 - 1):
                    side = mp.sign(y0 - 1)
                    last_s = begin + mp.findroot(
                        lambda q, x0=x0, v0=v0, u=u, side=side: (
                            side * (move(x0, v0, u, q)[0] - 1) - band
                        ),
                        (q0, q1),
                        solver="anderson",
                    )
        assert float(peak - 1) == pytest.approx(main[0], rel=1e-14)
        assert float(peak_s) == pytest.approx(main[1], rel=1e-14)
        assert float(last_s) == pytest.approx(main[2], rel=1e-14)


# ------------------------------------------------------------------------------- brute force


def brute(motion: Trajectory, per_piece: int) -> tuple[np.ndarray, np.ndarray]:
    """Times and positions (points, lanes) on a fine grid, by scipy's exponential."""
    space = motion.space
    n = space.a.shape[0]
    wide = np.zeros((n + 2, n + 2))
    wide[:n, :n], wide[:n, n], wide[:n, n + 1] = space.a, space.b, space.b_force
    times, positions = [], []
    cache: dict[float, np.ndarray] = {}
    for i, span in enumerate(np.diff(motion.times_s)):
        h = float(span) / per_piece
        key = round(h, 15)
        if key not in cache:
            cache[key] = expm(wide * h)
        state = np.concatenate(
            [motion.states[i].T, motion.inputs[i : i + 1], motion.forces[i : i + 1]]
        )
        for j in range(per_piece):
            times.append(motion.times_s[i] + j * h)
            positions.append(space.c_position @ state[:n])
            state = cache[key] @ state
    times.append(motion.times_s[-1])
    positions.append(motion.positions()[-1])
    return np.array(times), np.array(positions)


PLANTS = {
    "spring": STAGE,
    "free mass": Plant(mass=2.0, damping=3.0),
    "fast mode": Plant(
        mass=0.05,
        damping=0.4,
        stiffness=200.0,
        modes=(Mode(frequency_rad_per_s=5000.0, damping_ratio=0.01, mass=0.4, sign=-1),),
    ),
    "volts": Plant(
        mass=0.05,
        damping=0.4,
        stiffness=200.0,
        drive="voltage",
        force_constant=10.0,
        resistance_ohm=5.0,
        inductance_h=1e-3,
        sensor_corner_rad_per_s=2e4,
    ),
    "stiff": Plant(
        mass=0.05,
        damping=60.0,
        stiffness=200.0,
        current_bandwidth_rad_per_s=5e4,
        modes=(Mode(frequency_rad_per_s=900.0, damping_ratio=0.3, mass=0.08, sign=1),),
    ),
}


@pytest.mark.parametrize("plant", PLANTS.values(), ids=PLANTS)
@pytest.mark.parametrize("seed", range(3))
def test_wild_motion_against_a_fine_grid(plant: Plant, seed: int) -> None:
    rng = np.random.default_rng(seed)
    lanes, pieces = 3, 24
    spans = rng.choice([1.3e-3, 0.7e-3, 4e-4], size=pieces).tolist()
    decay = np.exp(-np.arange(pieces) / 6.0)[:, np.newaxis]
    inputs = 1.0 + rng.normal(size=(pieces, lanes)) * decay
    forces = np.broadcast_to(rng.normal(size=lanes) * 0.1, (pieces, lanes)).copy()
    motion = held_motion(state_space(plant), spans, inputs, forces)
    times, positions = brute(motion, 400)
    part = part_of(motion)
    # A grid never sees more than the truth, and misses little of it.
    size = np.ptp(positions, axis=0)
    assert np.all(part.high >= positions.max(axis=0) - 1e-13 * size)
    assert np.all(part.low <= positions.min(axis=0) + 1e-13 * size)
    assert np.all(part.high - positions.max(axis=0) <= 2e-5 * size)
    assert np.all(positions.min(axis=0) - part.low <= 2e-5 * size)
    assert part.integral == pytest.approx(np.trapezoid(positions, times, axis=0), rel=1e-5)

    band, step = 0.3, float(size.max())
    figures = step_figures(motion, reference=0.0, step=step, band=band)
    end = times[-1]
    late = times >= 0.8 * end
    mean = np.trapezoid(positions[late], times[late], axis=0) / np.ptp(times[late])
    assert figures.final_value == pytest.approx(mean, rel=2e-4)
    grid_s = max(spans) / 400
    for lane in range(lanes):
        final = figures.final_value[lane]
        outside = np.nonzero(np.abs(positions[:, lane] - final) > band * step)[0]
        last = times[outside[-1]] if outside.size else 0.0
        if last > 0.8 * end:
            assert math.isnan(figures.settling_time_s[lane])
        else:
            assert 0.0 <= figures.settling_time_s[lane] - last <= 1.01 * grid_s
        for share, found in ((0.1, figures.rise_from_s), (0.9, figures.rise_to_s)):
            reached = (positions[:, lane] - share * final) * np.sign(final) >= 0.0
            assert 0.0 <= times[np.argmax(reached)] - found[lane] <= 1.01 * grid_s


def test_two_turns_of_the_velocity_in_one_piece() -> None:
    """A fast coil throws a mass back and forth: the peak hides between two equal signs."""
    space = state_space(
        replace(PLANTS["volts"], sensor_corner_rad_per_s=None, stiffness=0.0, damping=0.0)
    )
    # Forward at 1 mm/s, a current that brakes it, volts that drive it forward again.
    start = np.array([[0.0, 1e-3, -0.2]])
    long = held_motion(space, [1.2e-3], np.array([[0.5]]), start=start)
    times, positions = brute(long, 20000)
    turns = np.nonzero(np.diff(np.sign(np.diff(positions[:, 0]))))[0] + 1
    assert turns.size == 2 and long.states[1, 0, 1] > 0.0  # the case is what it claims to be
    end_s = float(times[turns[1]]) * 1.02
    part = part_of(held_motion(space, [end_s], np.array([[0.5]]), start=start))
    assert part.high[0] == pytest.approx(positions[turns[0], 0], rel=1e-6)
    assert part.high_s[0] == pytest.approx(times[turns[0]], rel=1e-3)
    assert part.low[0] == pytest.approx(positions[turns[1], 0], rel=1e-6)
    assert part.low_s[0] == pytest.approx(times[turns[1]], rel=1e-3)


@settings(max_examples=30)
@given(
    zeta=st.floats(0.05, 3.0),
    spans=st.lists(st.floats(0.01, 6.0), min_size=1, max_size=8),
    size=st.floats(-1e3, 1e3).filter(lambda s: abs(s) > 1e-6),
)
def test_nodes_do_not_matter(zeta: float, spans: list[float], size: float) -> None:
    """The same continuous step response, whatever the nodes: figures belong to the motion."""
    space = state_space(Plant(mass=1.0, damping=2.0 * zeta, stiffness=1.0))
    total = 40.0 + 60.0 * zeta
    cut = [s * total / sum(spans) for s in spans]
    many = held_motion(space, cut, np.full((len(cut), 1), size))
    one = held_motion(space, [total], np.full((1, 1), size))
    left, right = (
        step_figures(motion, reference=size, step=size, band=0.02) for motion in (many, one)
    )
    for name in ("final_value", "settling_time_s", "rise_from_s", "rise_to_s"):
        assert getattr(left, name) == pytest.approx(getattr(right, name), rel=1e-9, nan_ok=True)
    assert left.overshoot_percent == pytest.approx(right.overshoot_percent, rel=1e-9, abs=1e-9)


# ------------------------------------------------------------------------ parts, held pieces


def test_parts_give_the_figures_of_the_whole() -> None:
    period_s, delay, a, kp, kd = LOOPS[0][0]
    sampled = sample(state_space(STAGE), period_s, delay * period_s)
    steps = np.array([1e-3, -1e-3])
    motion = linear_loop(sampled, kp=kp, kd=kd, a=a, kff=200.0, steps=steps, n=300)
    loads: list[int] = []

    def cut(first: int, last: int) -> Trajectory:
        loads.append(first)
        return replace(
            motion,
            times_s=motion.times_s[first : last + 1],
            states=motion.states[first : last + 1],
            inputs=motion.inputs[first:last],
            forces=motion.forces[first:last],
        )

    edges = [0, 37, 120, 121, 333, 500, 600]
    parts = [
        part_of(cut(i, j), lambda i=i, j=j: cut(i, j))
        for i, j in zip(edges, edges[1:], strict=False)
    ]
    loads.clear()
    whole = step_figures(motion, reference=steps, step=steps, band=0.01)
    pieced = step_figures(parts, reference=steps, step=steps, band=0.01)
    for name in whole.__slots__:
        assert getattr(pieced, name) == pytest.approx(getattr(whole, name), rel=1e-13, abs=1e-18)
    assert len(loads) <= 6  # what the figures need, and no part over and over


def test_held_pieces_stand_still() -> None:
    """A mode rings on a mass that is held; without a mode nothing moves at all."""
    plant = replace(PLANTS["fast mode"], sensor_corner_rad_per_s=None)
    space = state_space(plant)
    still = held_space(space)
    start = np.array([[1e-3, 0.0, 2e-5, 0.0]])
    psi, gain, gain_force = propagate(still, 1e-3)
    assert gain_force.tolist() == [0.0] * 4
    end = start + start @ psi.T + 0.3 * gain
    assert end[0, :2].tolist() == [1e-3, 0.0]
    motion = Trajectory(
        space=space,
        times_s=np.array([0.0, 1e-3]),
        states=np.array([start, end]),
        inputs=np.array([[0.3]]),
        forces=np.array([[50.0]]),
        held=np.array([[True]]),
    )
    mode = plant.modes[0]
    w, z = mode.frequency_rad_per_s, mode.damping_ratio
    rest = 0.3 / (mode.mass * w * w)
    wd = w * math.sqrt(1.0 - z * z)
    t = np.linspace(0.0, 1e-3, 200001)
    away = 2e-5 - rest
    q = rest + away * np.exp(-z * w * t) * (np.cos(wd * t) + z * w / wd * np.sin(wd * t))
    part = part_of(motion)
    assert part.high[0] == pytest.approx(1e-3 - q.min(), rel=1e-12)
    assert part.low[0] == pytest.approx(1e-3 - q.max(), rel=1e-12)
    assert part.high_s[0] == pytest.approx(math.pi / wd, rel=1e-9)
    assert part.integral[0] == pytest.approx(np.trapezoid(1e-3 - q, t), rel=1e-9)


def test_an_impact_between_two_nodes_of_one_time() -> None:
    """A free mass at 2 m/s stops dead after 0.1 s: nothing beyond, and nothing invented."""
    space = state_space(Plant(mass=1.0))
    states = np.array([[[0.0, 2.0]], [[0.2, 2.0]], [[0.2, 0.0]], [[0.2, 0.0]]])
    motion = Trajectory(
        space=space,
        times_s=np.array([0.0, 0.1, 0.1, 1.0]),
        states=states,
        inputs=np.zeros((3, 1)),
        forces=np.array([[0.0], [0.0], [5.0]]),
        held=np.array([[False], [False], [True]]),
    )
    figures = step_figures(motion, reference=0.25, step=0.2, band=0.05)
    assert figures.overshoot_percent.tolist() == [0.0]
    assert figures.peak_value.tolist() == [0.2]
    assert figures.settling_time_s[0] == pytest.approx(0.095, rel=1e-12)
    assert figures.rise_time_s[0] == pytest.approx(0.08, rel=1e-12)
    assert figures.final_error[0] == pytest.approx(0.05, rel=1e-12)


# ------------------------------------------------------------------------------- definitions


def test_a_limit_cycle_larger_than_the_band_never_settles() -> None:
    space = state_space(Plant(mass=1.0, stiffness=1.0))  # swings for ever about 1
    motion = held_motion(space, [0.1] * 1000, np.ones((1000, 1)))
    wide = step_figures(motion, reference=1.0, step=1.0, band=1.1)
    narrow = step_figures(motion, reference=1.0, step=1.0, band=0.9)
    assert math.isnan(narrow.settling_time_s[0])
    assert wide.settling_time_s[0] == 0.0
    assert narrow.final_high[0] == pytest.approx(2.0, rel=1e-12)
    assert narrow.final_low[0] == pytest.approx(0.0, abs=1e-12)
    # Every peak is as high as the first, so which one is named is chance.
    half_turns = narrow.peak_time_s[0] / math.pi
    assert half_turns == pytest.approx(round(half_turns), rel=1e-9) and round(half_turns) % 2 == 1


def test_last_entry_counts_even_when_it_comes_from_the_other_side() -> None:
    """zeta = 0.3: the band of 20 % is left again below the final value, after the overshoot."""
    z = 0.3
    space = state_space(Plant(mass=1.0, damping=2.0 * z, stiffness=1.0))
    motion = held_motion(space, [120.0], np.ones((1, 1)))
    wd = math.sqrt(1.0 - z * z)
    first_peak = math.exp(-z * math.pi / wd)
    assert first_peak > 0.2 and first_peak**2 < 0.2
    figures = step_figures(motion, reference=1.0, step=1.0, band=0.2)
    assert math.pi / wd < figures.settling_time_s[0] < 2.0 * math.pi / wd
    t = mp.findroot(
        lambda t: mp.exp(-z * t) * (mp.cos(wd * t) + z / wd * mp.sin(wd * t)) + 0.2, 4.0
    )
    assert figures.settling_time_s[0] == pytest.approx(float(t), rel=1e-12)


def test_times_count_from_the_first_node() -> None:
    space = state_space(Plant(mass=1.0, damping=1.0, stiffness=1.0))
    motion = held_motion(space, [0.5] * 100, np.ones((100, 1)))
    later = replace(motion, times_s=motion.times_s + 7.0)
    left, right = (
        step_figures(each, reference=1.0, step=1.0, band=0.05) for each in (motion, later)
    )
    for name in ("peak_time_s", "settling_time_s", "rise_from_s", "rise_to_s", "final_value"):
        assert getattr(left, name) == pytest.approx(getattr(right, name), rel=1e-12)


def test_a_rest_has_no_rise() -> None:
    space = state_space(Plant(mass=1.0, damping=1.0, stiffness=1.0))
    motion = held_motion(space, [0.5] * 10, np.zeros((10, 1)))
    figures = step_figures(motion, reference=1.0, step=1.0, band=0.05)
    assert math.isnan(figures.rise_time_s[0])
    assert figures.settling_time_s[0] == 0.0
    assert figures.final_error[0] == 1.0


# --------------------------------------------------------------------------- recorded samples


def test_recorded_samples_are_joined_by_lines() -> None:
    times = np.array([0.0, 1.0, 2.0, 3.0, 5.0, 6.0, 7.0, 10.0])
    positions = np.array([0.0, 0.5, 1.2, 0.9, 1.02, 1.0, 1.0, 1.0])
    figures = step_figures_of_samples(times, positions, reference=1.1, step=1.0, band=0.05)
    assert figures.final_value[0] == pytest.approx(1.0, rel=1e-15)
    assert figures.overshoot_percent[0] == pytest.approx(20.0, rel=1e-13)
    assert figures.peak_time_s[0] == 2.0
    assert figures.rise_from_s[0] == pytest.approx(0.2, rel=1e-13)
    assert figures.rise_to_s[0] == pytest.approx(1.0 + 4.0 / 7.0, rel=1e-13)
    # 0.9 to 1.02 over 2 s: 0.95 is entered after 0.05/0.06 s.
    assert figures.settling_time_s[0] == pytest.approx(3.0 + 0.05 / 0.06, rel=1e-13)
    assert figures.final_error[0] == pytest.approx(0.1, rel=1e-13)


def test_recorded_samples_with_uneven_times() -> None:
    """Hundreds of different spans: the mean is that of the straight lines all the same."""
    rng = np.random.default_rng(4)
    times = np.cumsum(rng.uniform(0.5e-3, 1.5e-3, size=500))
    y = np.stack([1.0 - np.exp(-times / 0.02), -2.0 * (1.0 - np.exp(-times / 0.03))], axis=1)
    figures = step_figures_of_samples(times, y, reference=[1, -2], step=[1, -2], band=0.02)
    tail_s = times[-1] - 0.2 * (times[-1] - times[0])
    grid = np.concatenate([[tail_s], times[times > tail_s]])
    for lane in range(2):
        line = np.interp(grid, times, y[:, lane])
        mean = np.trapezoid(line, grid) / (times[-1] - tail_s)
        assert figures.final_value[lane] == pytest.approx(mean, rel=1e-12)


# ------------------------------------------------------------------------------------- errors


def test_bad_questions_are_refused() -> None:
    space = state_space(Plant(mass=1.0, damping=1.0, stiffness=1.0))
    motion = held_motion(space, [0.5] * 10, np.ones((10, 2)))
    for step, band in ((0.0, 0.1), ([1.0, math.nan], 0.1), (1.0, 0.0), (1.0, math.inf)):
        with pytest.raises(OutOfRangeError):
            step_figures(motion, reference=1.0, step=step, band=band)
    with pytest.raises(OutOfRangeError, match="horizon"):
        step_figures([], reference=1.0, step=1.0, band=0.1)
    with pytest.raises(OutOfRangeError, match="falls"):
        replace(motion, times_s=motion.times_s[::-1].copy())
    with pytest.raises(OutOfRangeError, match="arrays do not match"):
        replace(motion, inputs=motion.inputs[1:])
    with pytest.raises(OutOfRangeError, match="at least 2"):
        replace(motion, times_s=motion.times_s[:1])
    with pytest.raises(OutOfRangeError, match="does not rise"):
        step_figures_of_samples(
            np.array([0.0, 1.0, 1.0]), np.zeros(3), reference=1.0, step=1.0, band=0.1
        )
    with pytest.raises(OutOfRangeError, match="finite"):
        step_figures_of_samples(
            np.array([0.0, 1.0]), np.array([0.0, math.nan]), reference=1.0, step=1.0, band=0.1
        )
    sampled = sample(space, 0.1, 0.05)
    with pytest.raises(OutOfRangeError, match="inputs"):
        trajectory_of_samples(sampled, states=np.zeros((4, 1, 2)), inputs=np.zeros((3, 1)))
