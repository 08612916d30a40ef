"""Verdicts: each requirement against its limit, on either side of it, and what is not judged."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import pytest

from plant2.chain import Evidence, horizon_samples, run_chain
from plant2.check import Report, as_json, judge
from plant2.errors import OutOfRangeError
from plant2.loopfile import load_loop

ROOT = Path(__file__).resolve().parent.parent
FOCUS = ROOT / "examples" / "focus_stage" / "loop.toml"


@pytest.fixture(scope="module")
def evidence() -> Evidence:
    return run_chain(load_loop(FOCUS), bounds=True)


def requirement(report: Report, name: str) -> tuple[float | None, bool | None, str]:
    (found,) = [r for r in report.requirements if r.name == name]
    return found.value, found.met, found.reason


@pytest.mark.parametrize(
    ("key", "name", "scale", "at_most"),
    [
        ("overshoot", "overshoot", 0.01, True),
        ("settling_time_s", "settling_time", 1.0, True),
        ("final_error", "final_error", 1.0, True),
        ("phase_margin_deg", "phase_margin", 1.0, False),
        ("gain_margin_db", "gain_margin", 1.0, False),
        ("delay_margin_s", "delay_margin", 1.0, False),
        ("peak_sensitivity", "peak_sensitivity", 1.0, True),
        ("position_noise", "position_noise", 1.0, True),
        ("stiffness_at_dc", "stiffness_at_dc", 1.0, False),
        ("deviation_count", "deviation", 1.0, True),
        ("limit_cycle_count", "limit_cycle", 1.0, True),
        ("rms_current_a", "rms_current", 1.0, True),
    ],
)
def test_verdict_turns_at_the_limit(
    evidence: Evidence, key: str, name: str, scale: float, at_most: bool
) -> None:
    """One part in a thousand on either side of the value decides."""
    loose = replace(evidence.loop, limits=replace(evidence.loop.limits, **{key: 1e3 * scale}))
    value, _, _ = requirement(judge(replace(evidence, loop=loose)), name)
    assert value is not None and value > 0
    for factor, side in ((1.001, True), (0.999, False)):
        limits = replace(evidence.loop.limits, **{key: value * scale * factor})
        report = judge(replace(evidence, loop=replace(evidence.loop, limits=limits)))
        _, met, _ = requirement(report, name)
        assert met is (side if at_most else not side)
        assert report.met is met


@pytest.mark.parametrize("key", ["update_time_s", "load"])
def test_what_is_not_judged_counts_as_missed(evidence: Evidence, key: str) -> None:
    limits = replace(evidence.loop.limits, **{key: 0.5})
    report = judge(replace(evidence, loop=replace(evidence.loop, limits=limits)))
    last = [r for r in report.requirements if r.met is None]
    assert len(last) == 1 and last[0].reason and not report.met
    assert as_json(report)["verdict"] == "missed"


def test_noise_limit_without_a_noise_figure() -> None:
    loop = load_loop(FOCUS)
    loop = replace(loop, sensor=replace(loop.sensor, noise=None, noise_peak=None))
    _, met, reason = requirement(judge(run_chain(loop)), "position_noise")
    assert met is None and "noise" in reason


def test_friction_voids_the_bounds_and_says_so() -> None:
    sets = ("plant.friction=0.02 N", "limits.deviation=9 count", "limits.limit_cycle=9 count")
    report = judge(run_chain(load_loop(FOCUS, sets)))
    _, met, reason = requirement(report, "deviation")
    assert met is None and "friction" in reason
    value, met, reason = requirement(report, "limit_cycle")
    assert met is True and value is not None and "largest seen" in reason


def test_integral_action_has_no_limit_of_stiffness() -> None:
    report = judge(
        run_chain(load_loop(FOCUS, ("aim.law=pid", "limits.stiffness_at_dc=1 GN/m")), step=True)
    )
    value, met, reason = requirement(report, "stiffness_at_dc")
    assert (value, met) == (None, True) and "integral" in reason


def test_limits_of_an_unstable_loop_are_not_judged() -> None:
    """Flashed words in a plant they were not made for."""
    good = run_chain(load_loop(FOCUS))
    other = load_loop(FOCUS, ("plant.mass=1 g", "plant.stiffness=0.01 N/mm"))
    report = judge(run_chain(other, words_from=good.controller))
    assert not report.met and not report.emittable_despite_misses
    _, met, reason = requirement(report, "design")
    assert met is False and "unstable" in reason
    _, met, _ = requirement(report, "overshoot")
    assert met is None


def test_horizon_is_ten_time_constants_and_three_settling_times(evidence: Evidence) -> None:
    import numpy as np

    closed, built = evidence.built_loop, evidence.built
    assert closed is not None and built is not None
    poles = np.array(built.poles_z) - 1.0
    limits = replace(evidence.loop.limits, settling_time_s=None)
    free = replace(evidence.loop, limits=limits)
    slowest = -1.0 / math.log(abs(built.poles_z[0]))
    assert horizon_samples(free, closed, poles) == math.ceil(10 * slowest)
    long = replace(free, limits=replace(limits, settling_time_s=0.1))
    assert horizon_samples(long, closed, poles) == 6000
    with pytest.raises(OutOfRangeError, match="samples"):
        horizon_samples(replace(free, limits=replace(limits, settling_time_s=1e4)), closed, poles)


def test_lead_and_voltage_and_fastest_run_through() -> None:
    lead = load_loop(ROOT / "examples" / "valve_spool" / "loop.toml")
    aim = replace(
        lead.aim,
        law="lead",
        damping_ratio=None,
        natural_frequency_hz=None,
        integral_corner_hz=None,
        crossover_hz=150.0,
        phase_margin_deg=50.0,
    )
    report = judge(run_chain(replace(lead, aim=aim)))
    data = as_json(report)
    assert data["as_built"]["crossover_hz"] == pytest.approx(150.0, rel=1e-6)
    assert data["as_built"]["phase_margin_deg"] == pytest.approx(50.0, abs=1e-4)
    assert data["design"]["ki_v_per_m_s"] is None

    fast = run_chain(load_loop(FOCUS, ("aim.damping_ratio=fastest",)))
    assert fast.step is not None and fast.loop.aim.damping_ratio is not None
    slower = run_chain(
        load_loop(FOCUS, (f"aim.damping_ratio={1.02 * fast.loop.aim.damping_ratio}",)), step=True
    )
    cliff = run_chain(
        load_loop(FOCUS, (f"aim.damping_ratio={0.985 * fast.loop.aim.damping_ratio}",)), step=True
    )
    assert slower.step is not None and cliff.step is not None
    assert fast.step.settling_time_s <= slower.step.settling_time_s
    assert fast.step.settling_time_s < 0.8 * cliff.step.settling_time_s
    assert fast.step.overshoot_percent < 1.0
