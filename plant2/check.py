"""Verdicts for the nominal unit: every limit of the loop file against the evidence.

Rules of this file:

- Every limit becomes a requirement that is met, missed or not judged, with the reason; not judged
  counts as missed.
- Evidence comes from `chain`; nothing is simulated here.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path
from typing import Any

from plant2.chain import Evidence
from plant2.closedloop import LoopFigures
from plant2.design import Nearest, settling_band
from plant2.equations import (
    ControllerTransfer,
    WordController,
    WordEquation,
    from_plain,
    to_plain,
    transfer,
)
from plant2.errors import Plant2Error
from plant2.loopfile import Loop
from plant2.plant import damping_ratio, natural_frequency_rad_per_s, static_gain

_Outcome = tuple[float | None, bool | None, str]

FORMAT = 1
"""Version of the JSON layout."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Requirement:
    """One requirement with its verdict.

    Parameters
    ----------
    name : str
        Key of the loop file's [limits] table, or "design".
    limit, value : float or None
        In `unit`; None where there is no number.
    unit : str
        Unit of both.
    met : bool or None
        None when it was not judged, which counts as missed.
    reason : str
        Why, where that is not plain from the numbers.
    at_most : bool
        Whether the value must stay below the limit (else above it).
    nearest : Nearest or None
        For "design": the nearest target that works.

    Notes
    -----
    Definition.
    """

    name: str
    limit: float | None
    value: float | None
    unit: str
    met: bool | None
    reason: str = ""
    at_most: bool = True
    nearest: Nearest | None = None

    @property
    def verdict(self) -> str:
        """The verdict as a word.

        Notes
        -----
        "met", "missed" or "not judged".
        """
        return {True: "met", False: "missed", None: "not judged"}[self.met]


@dataclass(frozen=True, slots=True, kw_only=True)
class Report:
    """Evidence with verdicts.

    Parameters
    ----------
    evidence : Evidence
        What the verdicts rest on.
    requirements : tuple of Requirement
        In the order of the loop file's documentation, "design" first.

    Notes
    -----
    Facts only.
    """

    evidence: Evidence
    requirements: tuple[Requirement, ...] = field(default=())

    @property
    def met(self) -> bool:
        """Whether every requirement is met.

        Notes
        -----
        Not judged counts as missed.
        """
        return all(r.met is True for r in self.requirements)

    @property
    def emittable_despite_misses(self) -> bool:
        """Whether words exist that may be written with marks.

        Notes
        -----
        Never an unstable loop, a gain of wrong sign, or sums that are not shown to fit.
        """
        e = self.evidence
        return e.controller is not None and e.built is not None and e.built.stable


def judge(evidence: Evidence) -> Report:
    """Compare the evidence with the limits of the loop file.

    Parameters
    ----------
    evidence : Evidence
        Outcome of the chain.

    Returns
    -------
    Report
        One requirement for "design" and one for each limit that the loop file has.

    Notes
    -----
    Definitions in docs/definitions.md.
    """
    loop = evidence.loop
    limits = loop.limits
    rotary = loop.mechanics.motion == "rotary"
    length = "rad" if rotary else "m"
    out = [_design_requirement(evidence)]
    built, step, linear = evidence.built, evidence.step, evidence.linear
    absent = _why_nothing(evidence)

    def add(
        name: str,
        limit: float | None,
        unit: str,
        value: Callable[[], _Outcome],
        *,
        at_most: bool = True,
    ) -> None:
        if limit is None:
            return
        if absent:
            out.append(
                Requirement(
                    name=name,
                    limit=limit,
                    value=None,
                    unit=unit,
                    met=None,
                    reason=absent,
                    at_most=at_most,
                )
            )
            return
        number, verdict, reason = value()
        if number is not None and verdict is None and not reason:
            verdict = number <= limit if at_most else number >= limit
        out.append(
            Requirement(
                name=name,
                limit=limit,
                value=number,
                unit=unit,
                met=verdict,
                reason=reason,
                at_most=at_most,
            )
        )

    def plain(number: float) -> _Outcome:
        return number, None, ""

    def settled() -> _Outcome:
        assert step is not None
        if math.isnan(step.settling_time_s):
            return (
                None,
                False,
                "does not stay in the band within the horizon, for at least one start",
            )
        return plain(step.settling_time_s)

    def margin(number: float | None, nothing: str) -> _Outcome:
        return (None, True, nothing) if number is None else plain(number)

    if limits.overshoot is not None:
        add(
            "overshoot",
            100.0 * limits.overshoot,
            "%",
            lambda: plain(step.overshoot_percent),  # type: ignore[union-attr]
        )
    add("settling_time", limits.settling_time_s, "s", settled)
    add(
        "final_error",
        limits.final_error,
        length,
        lambda: plain(step.final_error),  # type: ignore[union-attr]
    )
    add(
        "phase_margin",
        limits.phase_margin_deg,
        "deg",
        lambda: margin(_of(built, "phase_margin_deg"), "the loop gain never crosses 1"),
        at_most=False,
    )
    add(
        "gain_margin",
        limits.gain_margin_db,
        "dB",
        lambda: margin(_of(built, "gain_margin_db"), "no rise of gain makes the loop unstable"),
        at_most=False,
    )
    add(
        "gain_reduction",
        limits.gain_reduction_db,
        "dB",
        lambda: margin(_of(built, "gain_reduction_db"), "no fall of gain makes the loop unstable"),
        at_most=False,
    )
    add(
        "delay_margin",
        limits.delay_margin_s,
        "s",
        lambda: margin(_of(built, "delay_margin_s"), "no delay makes the loop unstable"),
        at_most=False,
    )
    add(
        "peak_sensitivity",
        limits.peak_sensitivity,
        "",
        lambda: plain(_of(built, "peak_sensitivity") or math.nan),
    )
    add(
        "position_noise",
        limits.position_noise,
        length,
        lambda: (
            (None, None, "sensor.noise is not given")
            if linear is None or linear.position_noise is None
            else plain(linear.position_noise)
        ),
    )

    def stiff() -> _Outcome:
        assert linear is not None
        if math.isinf(linear.stiffness_at_dc):
            return None, True, "integral action: no deflection at rest"
        return plain(linear.stiffness_at_dc)

    add(
        "stiffness_at_dc",
        limits.stiffness_at_dc,
        "N m/rad" if rotary else "N/m",
        stiff,
        at_most=False,
    )

    def later(what: str) -> Callable[[], _Outcome]:
        return lambda: (None, None, what)

    def bounded(value: float | None, voids: tuple[str, ...]) -> _Outcome:
        if value is None:
            return None, None, f"no bound: {evidence.bound_fault}"
        if voids:
            return None, None, f"no bound holds with {', '.join(voids)}"
        return plain(value)

    away, unrest = evidence.deviation, evidence.limit_cycles
    add(
        "deviation",
        limits.deviation_count,
        "count",
        lambda: bounded(away.count if away else None, away.voids if away else ()),
    )

    def cycling() -> _Outcome:
        number, verdict, reason = bounded(
            unrest.count if unrest else None, unrest.voids if unrest else ()
        )
        reach = unrest.largest_reference if unrest else None
        if not reason and (reach is None or reach < loop.step):
            reason = "the loop is not proven to stay off its limits at rest at the target"
        if not reason or step is None or limits.limit_cycle_count is None:
            return number, verdict, reason
        seen = 0.5 * step.rest_peak_to_peak_count
        judged = seen <= limits.limit_cycle_count
        return seen, judged, f"the largest seen at the end of the checked step; {reason}"

    add("limit_cycle", limits.limit_cycle_count, "count", cycling)
    add(
        "rms_current",
        limits.rms_current_a,
        "A",
        lambda: plain(linear.rms_current_a),  # type: ignore[union-attr]
    )
    add(
        "update_time",
        limits.update_time_s,
        "s",
        later("this version does not count instructions"),
    )
    add(
        "load",
        None if limits.load is None else 100.0 * limits.load,
        "%",
        later("this version does not count instructions"),
    )
    return Report(evidence=evidence, requirements=tuple(out))


def _of(figures: LoopFigures | None, name: str) -> float | None:
    value: float | None = None if figures is None else getattr(figures, name)
    return value


def _why_nothing(evidence: Evidence) -> str:
    if evidence.controller is None:
        return "there are no words to check"
    if evidence.built is not None and not evidence.built.stable:
        return "the loop is unstable"
    if evidence.step is None:
        return "the step was not run"
    return ""


def _design_requirement(evidence: Evidence) -> Requirement:
    faults = list(evidence.design.faults) + list(evidence.word_faults)
    if evidence.built is not None and not evidence.built.stable:
        faults.append("the loop with these words is unstable")
    return Requirement(
        name="design",
        limit=None,
        value=None,
        unit="",
        met=not faults,
        reason="; ".join(faults),
        nearest=evidence.design.nearest,
    )


# --- JSON ---------------------------------------------------------------------------------------


def number(value: float | None) -> float | None:
    """A number as JSON can carry it.

    Parameters
    ----------
    value : float or None
        Any number. [any]

    Returns
    -------
    float or None
        None for None, nan and infinity.

    Notes
    -----
    JSON has no infinity and no nan (RFC 8259).
    """
    return None if value is None or not math.isfinite(value) else float(value)


def _falling(poly: tuple[Fraction, ...]) -> list[float]:
    return [float(c) for c in poly]


def _exact(transfer_of: ControllerTransfer) -> dict[str, Any]:
    parts = (transfer_of.reference, transfer_of.position, transfer_of.denominator)
    power = max(c.denominator.bit_length() - 1 for p in parts for c in p)

    def whole(poly: tuple[Fraction, ...]) -> list[str]:
        return [str(int(c * (1 << power))) for c in poly]

    return {
        "over_two_to_the": power,
        "reference": {
            "numerator": whole(transfer_of.reference),
            "denominator": whole(transfer_of.denominator),
        },
        "position": {
            "numerator": whole(transfer_of.position),
            "denominator": whole(transfer_of.denominator),
        },
    }


def _gain_keys(loop: Loop) -> tuple[str, str, str]:
    if loop.actuator.drive == "voltage":
        unit = "rad" if loop.mechanics.motion == "rotary" else "m"
        return f"kp_v_per_{unit}", f"kd_v_s_per_{unit}", f"ki_v_per_{unit}_s"
    if loop.mechanics.motion == "rotary":
        return "kp_n_m_per_rad", "kd_n_m_s_per_rad", "ki_n_m_per_rad_s"
    return "kp_n_per_m", "kd_n_s_per_m", "ki_n_per_m_s"


def nearest_as_json(nearest: Nearest | None) -> dict[str, Any] | None:
    """The nearest target as plain data.

    Parameters
    ----------
    nearest : Nearest or None
        What the design found.

    Returns
    -------
    dict or None
        Keys damping_ratio, natural_frequency_hz, bandwidth_hz, crossover_hz, reason, fails_at_hz.

    Notes
    -----
    docs/json.md.
    """
    if nearest is None:
        return None
    return {
        "damping_ratio": number(nearest.damping_ratio),
        "natural_frequency_hz": number(nearest.natural_frequency_hz),
        "bandwidth_hz": number(nearest.bandwidth_hz),
        "crossover_hz": number(nearest.crossover_hz),
        "reason": nearest.reason,
        "fails_at_hz": number(nearest.fails_at_hz),
    }


def figures_as_json(figures: LoopFigures | None) -> dict[str, Any]:
    """Figures of a sampled loop as plain data.

    Parameters
    ----------
    figures : LoopFigures or None
        As designed or as built.

    Returns
    -------
    dict
        All keys, null where there is no figure.

    Notes
    -----
    docs/json.md.
    """
    names = (
        "damping_ratio", "natural_frequency_hz", "bandwidth_hz", "phase_margin_deg",
        "gain_margin_db", "gain_reduction_db", "delay_margin_s", "peak_sensitivity",
        "crossover_hz",
    )  # fmt: skip
    out: dict[str, Any] = {n: None if figures is None else number(_of(figures, n)) for n in names}
    out["poles_z"] = (
        None if figures is None else [[float(p.real), float(p.imag)] for p in figures.poles_z]
    )
    out["stable"] = None if figures is None else figures.stable
    return out


def design_as_json(evidence: Evidence) -> dict[str, Any]:
    """Gains as plain data.

    Parameters
    ----------
    evidence : Evidence
        With its design.

    Returns
    -------
    dict
        law, gains with units in their names, beta, corners, faults, nearest.

    Notes
    -----
    docs/json.md.
    """
    gains = evidence.design.gains
    loop = evidence.loop
    usable = gains is not None and evidence.controller is not None
    kp, kd, ki = _gain_keys(loop)
    shown = gains if usable else None
    pid = loop.aim.law == "pid"
    return {
        "law": loop.aim.law,
        kp: None if shown is None else shown.kp,
        kd: None if shown is None else shown.kd,
        ki: None if shown is None or not pid else shown.ki,
        "kff": None if shown is None or pid else shown.kff,
        "beta": None if shown is None or not pid else shown.beta,
        "derivative_corner_hz": None if shown is None else shown.derivative_corner_hz,
        "integral_corner_hz": None if shown is None else number(shown.integral_corner_hz),
        "faults": list(evidence.design.faults),
        "nearest": nearest_as_json(evidence.design.nearest),
    }


def as_json(report: Report, *, command: str = "check", with_words: bool = False) -> dict[str, Any]:
    """The whole report as plain data.

    Parameters
    ----------
    report : Report
        Evidence and verdicts.
    command : str
        Name of the command that made it.
    with_words : bool
        Include the words themselves, as `check --words` reads them back.

    Returns
    -------
    dict
        Ready for json.dumps; no nan, no infinity, no path, no date.

    Notes
    -----
    Layout in docs/json.md.
    """
    e = report.evidence
    loop = e.loop
    rotary = loop.mechanics.motion == "rotary"
    suffix = "rad" if rotary else "m"
    gain = static_gain(e.task.plant)
    out: dict[str, Any] = {
        "format": FORMAT,
        "command": command,
        "loop": loop.name,
        "loop_sha256": loop.sha256,
        "options": list(loop.overrides),
        "verdict": "met" if report.met else "missed",
        "requirements": [_requirement_as_json(r) for r in report.requirements],
        "plant": {
            "natural_frequency_hz": natural_frequency_rad_per_s(e.task.plant) / (2.0 * math.pi),
            "damping_ratio": number(
                damping_ratio(e.task.plant) if e.task.plant.stiffness > 0.0 else None
            ),
            "static_gain_count_per_code": None
            if gain is None
            else gain * e.task.count_per_position * e.task.effort_per_code,
        },
        "sampling": {
            "rate_hz": loop.processor.sample_rate_hz,
            "delay_s": loop.processor.delay_s,
        },
        "design": design_as_json(e),
        "controller": None,
        "as_designed": figures_as_json(e.designed),
        "as_built": figures_as_json(e.built),
    }
    if e.controller is not None:
        words = transfer(e.controller)
        den = _falling(words.denominator)
        out["controller"] = {
            "reference": {"numerator": _falling(words.reference), "denominator": den},
            "position": {"numerator": _falling(words.position), "denominator": list(den)},
            "exact": _exact(words),
        }
    step = e.step
    band = 100.0 * settling_band(loop)
    out["step"] = {
        f"size_{suffix}": None if step is None else number(step.size),
        "overshoot_percent": None if step is None else number(step.overshoot_percent),
        "settling_time_s": None if step is None else number(step.settling_time_s),
        "settling_band_percent": band,
        "rise_time_s": None if step is None else number(step.rise_time_s),
        "peak_code": None if step is None else int(step.peak_code),
        f"final_error_{suffix}": None if step is None else number(step.final_error),
        f"linear_step_{suffix}": None if e.linear is None else number(e.linear.linear_step),
        "saturated": None if step is None else bool(step.saturated),
        "touched_stop": None if step is None else bool(step.touched_stop),
    }
    out["linear"] = {
        f"position_noise_{suffix}": None if e.linear is None else number(e.linear.position_noise),
        "rms_current_a": None if e.linear is None else number(e.linear.rms_current_a),
        "hold_current_a": None if e.linear is None else number(e.linear.hold_current_a),
        "stiffness_at_dc": None if e.linear is None else number(e.linear.stiffness_at_dc),
    }
    out["fixed_point"] = {
        "word_bits": None if e.controller is None else e.controller.word_bits,
        "sum_bits": None if e.controller is None else e.controller.sum_bits,
        "signals": []
        if e.controller is None
        else [
            {
                "name": q.name,
                "fraction_bits": q.frac_bits,
                "bound": _magnitude(q, e.controller),
                "capacity": _capacity(q, e.controller),
            }
            for q in e.controller.update
        ],
        "words": []
        if e.words is None
        else [
            {
                "equation": w.equation,
                "name": w.word,
                "wanted": w.wanted,
                "stored": w.stored,
                "step": w.step,
            }
            for w in e.words.errors
        ],
        "deviation_bound_count": number(None if e.deviation is None else e.deviation.count),
        "deviation_seen_count": None,
        "deviation_shares_count": None
        if e.deviation is None
        else {
            "sensor": number(e.deviation.sensor),
            "output": number(e.deviation.output),
            "inner": number(e.deviation.inner),
            "coefficients": number(e.deviation.coefficients),
        },
        "limit_cycle_bound_count": number(None if e.limit_cycles is None else e.limit_cycles.count),
        "limit_cycle_seen_count": None
        if step is None
        else number(0.5 * step.rest_peak_to_peak_count),
        "bounds_void_with": [] if e.deviation is None else list(e.deviation.voids),
        "rest_peak_to_peak_count": None if step is None else number(step.rest_peak_to_peak_count),
    }
    out["cost"] = [
        {
            "core": loop.processor.core,
            "instructions": None,
            "cycles": None,
            "load_percent": None,
            "code_bytes": None,
            "state_bytes": None,
        }
    ]
    out["assumptions"] = list(loop.assumptions)
    out["notes"] = list(e.notes)
    if with_words and e.controller is not None:
        out["words"] = to_plain(e.controller)
    return out


def _capacity(q: WordEquation, controller: WordController) -> int:
    return (1 << ((controller.sum_bits if q.wide else controller.word_bits) - 1)) - 1


def _magnitude(q: WordEquation, controller: WordController) -> int:
    """Largest magnitude; the one value of the type without a counterpart counts as that."""
    return max(q.high, min(-q.low, _capacity(q, controller)))


def _requirement_as_json(r: Requirement) -> dict[str, Any]:
    out: dict[str, Any] = {
        "name": r.name,
        "limit": number(r.limit),
        "value": number(r.value),
        "unit": r.unit,
        "met": r.met,
        "reason": r.reason,
    }
    if r.name == "design":
        out["nearest"] = nearest_as_json(r.nearest)
    return out


def words_from_file(path: Path, loop: Loop) -> WordController:
    """Words of an emitted NAME_check.json, for checking them against a plant.

    Parameters
    ----------
    path : Path
        The JSON file that `emit` wrote.
    loop : Loop
        The loop file whose plant they are checked against.

    Returns
    -------
    WordController
        The flashed words, their ranges verified again.

    Raises
    ------
    Plant2Error
        If the file cannot be read, carries no words, or its ranges do not hold.

    Notes
    -----
    Nothing in the file is believed but the words themselves.
    """

    def refuse(rule: str) -> Plant2Error:
        return Plant2Error(str(path), None, "", rule, "give the NAME_check.json that emit wrote")

    try:
        data = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError) as fault:
        reason = getattr(fault, "strerror", None) or "is not text"
        raise refuse(str(reason).lower()) from fault
    except json.JSONDecodeError as fault:
        raise refuse(f"is not JSON (line {fault.lineno})") from fault
    if not isinstance(data, dict) or "words" not in data:
        raise refuse("carries no words")
    try:
        controller = from_plain(data["words"])
    except (KeyError, TypeError, ValueError, IndexError) as fault:
        raise refuse(f"its words cannot be used ({fault})") from fault
    if loop.processor.word in (16, 32) and controller.word_bits != loop.processor.word:
        raise refuse(
            f"has {controller.word_bits}-bit words, the loop file asks for {loop.processor.word}"
        )
    return controller
