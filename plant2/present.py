"""What people read on the terminal: tables and sentences, no arithmetic on results.

Rules of this file:

- Every number comes with its unit; every requirement with its verdict.
- The first line says for which unit the figures hold; the last lines are the cautions.
- Layout only: it draws on the evidence and prints to the console it is given.
"""

from __future__ import annotations

import decimal
import math
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from plant2.cautions import cautions
from plant2.check import Report, Requirement
from plant2.closedloop import LoopFigures
from plant2.errors import Plant2Error
from plant2.plant import (
    damped_frequency_rad_per_s,
    damping_ratio,
    decay_time_s,
    natural_frequency_rad_per_s,
    quality_factor,
    regime,
    round_trip,
    unit_chain,
)
from plant2.quantity import format_si

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from plant2.chain import Evidence

NAMES = {
    "overshoot": "overshoot",
    "settling_time": "settling time",
    "final_error": "final error",
    "phase_margin": "phase margin",
    "gain_margin": "gain margin",
    "gain_reduction": "gain reduction",
    "delay_margin": "delay margin",
    "peak_sensitivity": "peak sensitivity",
    "position_noise": "position noise, rms",
    "stiffness_at_dc": "stiffness at rest",
    "deviation": "deviation",
    "limit_cycle": "limit cycle",
    "rms_current": "rms current, estimate",
    "update_time": "update time",
    "load": "load",
    "design": "design",
}


def _hz(value_rad_per_s: float) -> str:
    return format_si(value_rad_per_s / (2.0 * math.pi), "Hz")


def _amount(value: float | None, unit: str) -> str:
    return "-" if value is None else format_si(value, unit)


def requirement_text(r: Requirement) -> str:
    """One requirement as one line of text.

    Parameters
    ----------
    r : Requirement
        With its verdict.

    Returns
    -------
    str
        Name, verdict, numbers with units, reason.

    Notes
    -----
    Wording only.
    """
    parts = [f"{NAMES.get(r.name, r.name)}: {r.verdict}"]
    if r.value is not None:
        parts.append(f"value {_amount(r.value, r.unit)}")
    if r.limit is not None:
        parts.append(f"{'at most' if r.at_most else 'at least'} {_amount(r.limit, r.unit)}")
    if r.reason:
        parts.append(r.reason)
    return ", ".join(parts)


def _gain_units(evidence: Evidence) -> tuple[str, str, str]:
    rotary = evidence.loop.mechanics.motion == "rotary"
    length = "rad" if rotary else "m"
    force = "V" if evidence.loop.actuator.drive == "voltage" else ("N m" if rotary else "N")
    return f"{force}/{length}", f"{force} s/{length}", f"{force}/({length} s)"


def gains_text(evidence: Evidence) -> str:
    """Law and gains in one line.

    Parameters
    ----------
    evidence : Evidence
        With a design.

    Returns
    -------
    str
        Law, gains with units, corners.

    Notes
    -----
    Wording only.
    """
    gains = evidence.design.gains
    if gains is None:
        return f"{evidence.loop.aim.law}: no gains"
    p, d, i = _gain_units(evidence)
    parts = [f"{gains.law}: kp {format_si(gains.kp, p, 6)}", f"kd {format_si(gains.kd, d, 6)}"]
    if gains.law == "pid":
        parts += [f"ki {format_si(gains.ki, i, 6)}", f"set-point weight {gains.beta:.4f}"]
    elif gains.kff:
        parts.append(f"reference feedforward {format_si(gains.kff, p, 6)}")
    parts.append(f"derivative corner {format_si(gains.derivative_corner_hz, 'Hz')}")
    if gains.integral_corner_hz is not None:
        parts.append(f"integral corner {format_si(gains.integral_corner_hz, 'Hz')}")
    return ", ".join(parts)


def _table(*, right: tuple[int, ...] = ()) -> Table:
    from rich.table import Table

    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    for column in range(4):
        table.add_column(justify="right" if column in right else "left", overflow="fold")
    return table


def _show(console: Console, table: Table) -> None:
    """Print a table without the blanks that fill its last column, so that output can be piped."""
    if console.is_terminal:
        console.print(table)
        return
    with console.capture() as captured:
        console.print(table)
    for line in captured.get().splitlines():
        console.out(line.rstrip())


def head(console: Console, evidence: Evidence) -> None:
    """The first lines: what this is and for which unit the figures hold.

    Parameters
    ----------
    console : Console
        Where it is printed.
    evidence : Evidence
        The loop.

    Notes
    -----
    Layout only.
    """
    loop = evidence.loop
    tolerance = loop.mechanics.tolerance
    spread = any(
        (
            tolerance.mass, tolerance.damping, tolerance.stiffness, tolerance.force,
            tolerance.resistance, tolerance.mode_frequency, tolerance.sensor, tolerance.delay_s,
            tolerance.bias,
        )
    )  # fmt: skip
    note = "tolerances are not in these figures" if spread else "no tolerances are given"
    console.print(f"{loop.name}: the nominal unit; {note}", style="bold", markup=False)
    if loop.about:
        console.print(loop.about, markup=False)
    for line in loop.assumptions:
        console.print(f"assumed: {line}", markup=False)
    for line in evidence.notes:
        console.print(line, markup=False)


def plant(console: Console, evidence: Evidence) -> None:
    """The bare plant: regime, frequencies, damping, decay.

    Parameters
    ----------
    console : Console
        Where it is printed.
    evidence : Evidence
        The loop.

    Notes
    -----
    Closed forms of `plant2.plant`.
    """
    p = evidence.task.plant
    rows: list[tuple[str, str]] = [("regime", regime(p))]

    def row(name: str, text: object) -> None:
        try:
            rows.append((name, str(text() if callable(text) else text)))
        except (Plant2Error, ZeroDivisionError):
            rows.append((name, "-"))

    row("natural frequency", lambda: _hz(natural_frequency_rad_per_s(p)))
    row("damped frequency", lambda: _hz(damped_frequency_rad_per_s(p)))
    row("damping ratio", lambda: f"{damping_ratio(p):.5g}")
    row("decay time", lambda: format_si(decay_time_s(p), "s"))
    row("quality factor", lambda: f"{quality_factor(p):.4g}")
    for i, mode in enumerate(p.modes, 1):
        row(
            f"mode {i}",
            f"{_hz(mode.frequency_rad_per_s)}, damping ratio {mode.damping_ratio:.4g}, "
            f"sign {mode.sign:+d}",
        )
    _block(console, "the plant by itself", rows)


def units(console: Console, evidence: Evidence) -> None:
    """The unit chain with each factor, and its round trip.

    Parameters
    ----------
    console : Console
        Where it is printed.
    evidence : Evidence
        The loop.

    Notes
    -----
    See `plant2.plant.unit_chain`.
    """
    rows = [(f"{k.from_unit} to {k.to_unit}", k.text) for k in unit_chain(evidence.loop)]
    rows.append(("round trip", f"agrees to {round_trip(evidence.loop):.1e}"))
    _block(console, "units, once around the loop", rows)


def _block(console: Console, title: str, rows: list[tuple[str, str]]) -> None:
    console.print()
    console.print(title, style="bold", markup=False)
    table = _table()
    for name, text in rows:
        table.add_row(f"  {name}", text)
    _show(console, table)


def gains(console: Console, evidence: Evidence) -> None:
    """Gains, one a line.

    Parameters
    ----------
    console : Console
        Where it is printed.
    evidence : Evidence
        With a design.

    Notes
    -----
    Layout only.
    """
    found = evidence.design.gains
    if found is None or evidence.controller is None:
        return
    how = "as given" if evidence.design.given else "chosen for the sampled loop"
    p, d, i = _gain_units(evidence)
    rows = [("kp", format_si(found.kp, p, 6)), ("kd", format_si(found.kd, d, 6))]
    if found.law == "pid":
        rows += [
            ("ki", format_si(found.ki, i, 6)),
            ("set-point weight", f"{found.beta:.5f}"),
        ]
    else:
        rows.append(("reference feedforward", format_si(found.kff, p, 6)))
    rows.append(("derivative corner", format_si(found.derivative_corner_hz, "Hz")))
    if found.integral_corner_hz is not None:
        rows.append(("integral corner", format_si(found.integral_corner_hz, "Hz")))
    _block(console, f"gains, {found.law}, {how}", rows)


def loops(console: Console, evidence: Evidence) -> None:
    """The loop as designed beside the loop as built.

    Parameters
    ----------
    console : Console
        Where it is printed.
    evidence : Evidence
        With both loops.

    Notes
    -----
    Natural frequency, crossover and bandwidth always together, with the rise time of the step.
    """
    designed, built = evidence.designed, evidence.built
    if built is None or evidence.controller is None:
        return
    words = f"{evidence.controller.word_bits}-bit words"
    console.print()
    table = _table(right=(1, 2))
    table.add_row("the sampled loop", "as designed", f"as built, {words}", style="bold")

    def row(name: str, pick: object, unit: str, digits: int = 5) -> None:
        assert callable(pick)

        def text(figures: LoopFigures | None) -> str:
            value = None if figures is None else pick(figures)
            if value is None:
                return "-"
            return format_si(value, unit, digits) if unit else f"{value:.{digits}g}"

        table.add_row(f"  {name}", text(designed), text(built))

    row("damping ratio", lambda f: f.damping_ratio, "")
    row("natural frequency", lambda f: f.natural_frequency_hz, "Hz")
    row("bandwidth", lambda f: f.bandwidth_hz, "Hz")
    row("crossover", lambda f: f.crossover_hz, "Hz")
    row("phase margin", lambda f: f.phase_margin_deg, "deg", 4)
    row("gain margin", lambda f: f.gain_margin_db, "dB", 4)
    row("gain reduction", lambda f: f.gain_reduction_db, "dB", 4)
    row("delay margin", lambda f: f.delay_margin_s, "s", 4)
    row("peak sensitivity", lambda f: f.peak_sensitivity, "", 4)
    _show(console, table)
    light = light_poles(evidence)
    for line in light:
        console.print(f"  {line}", markup=False)


def light_poles(evidence: Evidence) -> tuple[str, ...]:
    """Lightly damped poles of the loop as built, beside the placed pair.

    Parameters
    ----------
    evidence : Evidence
        With the loop as built.

    Returns
    -------
    tuple of str
        One sentence a pair of poles with a damping ratio below 0.1.

    Notes
    -----
    s = ln(z)/T.
    """
    from plant2.closedloop import log_pole

    if evidence.built is None or not evidence.task.plant.modes:
        return ()
    out = []
    for z in evidence.built.poles_z:
        if z.imag <= 0.0 or abs(z) < 1e-3:
            continue
        s = complex(log_pole(z - 1.0, evidence.task.period_s))
        ratio = -s.real / abs(s)
        if ratio < 0.1:
            out.append(
                f"lightly damped pole: {_hz(abs(s))}, damping ratio {ratio:.4f}, |z| {abs(z):.5f}"
            )
    return tuple(out)


def step(console: Console, evidence: Evidence) -> None:
    """The checked step.

    Parameters
    ----------
    console : Console
        Where it is printed.
    evidence : Evidence
        With the step.

    Notes
    -----
    The worst of both signs and 16 starts within a count.
    """
    seen = evidence.step
    if seen is None or evidence.linear is None:
        return
    length = "rad" if evidence.loop.mechanics.motion == "rotary" else "m"
    from plant2.design import settling_band

    band = 100.0 * settling_band(evidence.loop)
    settled = (
        "does not stay in the band"
        if math.isnan(seen.settling_time_s)
        else format_si(seen.settling_time_s, "s")
    )
    rows = [
        ("size", format_si(seen.size, length)),
        ("overshoot", f"{seen.overshoot_percent:.3g} %"),
        (f"settling time, {band:g} %", settled),
        ("rise time, 10-90 %", "-" if math.isnan(seen.rise_time_s)
            else format_si(seen.rise_time_s, "s")),
        ("final error", format_si(seen.final_error, length)),
        (
            "largest output",
            f"{seen.peak_code} of {evidence.loop.actuator.limit_code} codes"
            + (", limited on the way" if seen.saturated else ""),
        ),
        ("largest linear step", format_si(evidence.linear.linear_step, length)),
        ("unrest at the end", f"{seen.rest_peak_to_peak_count:.3g} counts peak to peak"),
    ]  # fmt: skip
    if seen.touched_stop:
        rows.append(("end stop", "touched"))
    _block(console, "the checked step, these integers around the continuous plant", rows)


def fixed_point(console: Console, evidence: Evidence) -> None:
    """Words and ranges, short.

    Parameters
    ----------
    console : Console
        Where it is printed.
    evidence : Evidence
        With words.

    Notes
    -----
    Every sum fits for every input in the type and every stored state.
    """
    controller = evidence.controller
    if controller is None:
        return
    top = (1 << (controller.sum_bits - 1)) - 1
    fullest = max(
        controller.update, key=lambda e: max(-e.sum_low, e.sum_high) if e.shift or e.terms else 0
    )
    size = max(-fullest.sum_low, fullest.sum_high)
    rows = [
        (
            "fullest sum",
            f"{fullest.name}, {100.0 * size / top:.0f} % of {controller.sum_bits} bits, "
            "for every input and state",
        ),
    ]
    if evidence.words is not None and evidence.words.errors:
        worst = max(evidence.words.errors, key=lambda w: abs(w.stored / w.wanted - 1.0))
        rows.append(
            (
                "coarsest word",
                f"{worst.word}, {100.0 * abs(worst.stored / worst.wanted - 1.0):.2g} % off",
            )
        )
    away, unrest = evidence.deviation, evidence.limit_cycles
    if away is not None and unrest is not None:
        voids = f"; void with {', '.join(away.voids)}" if away.voids else ""
        rows += [
            (
                "deviation, bound",
                f"{away.count:.3g} counts: sensor steps {away.sensor:.3g}, output rounding "
                f"{away.output:.3g}, inner roundings {away.inner:.2g}{voids}",
            ),
            ("limit cycle, bound", f"{unrest.count:.3g} counts, half of peak to peak, at rest"),
        ]
    _block(console, f"integers, {controller.word_bits}-bit words", rows)


def verdicts(console: Console, report: Report) -> None:
    """The table of requirements.

    Parameters
    ----------
    console : Console
        Where it is printed.
    report : Report
        With verdicts.

    Notes
    -----
    Layout only.
    """
    console.print()
    table = _table(right=(1, 2))
    table.add_row("requirement", "value", "limit", "verdict", style="bold")
    for r in report.requirements:
        bound = (
            "" if r.limit is None else f"{'<=' if r.at_most else '>='} {_amount(r.limit, r.unit)}"
        )
        value = "" if r.name == "design" else _amount(r.value, r.unit)
        style = {True: "green", False: "red", None: "yellow"}[r.met]
        table.add_row(f"  {NAMES.get(r.name, r.name)}", value, bound, f"[{style}]{r.verdict}[/]")
    _show(console, table)
    reasons: dict[str, list[str]] = {}
    for r in report.requirements:
        if r.reason:
            reasons.setdefault(r.reason, []).append(NAMES.get(r.name, r.name))
    for reason, names in reasons.items():
        console.print(f"  {'; '.join(names)}: {reason}", markup=False, soft_wrap=True)
    nearest(console, report)
    console.print(
        f"verdict: {'met' if report.met else 'missed'}",
        style="bold green" if report.met else "bold red",
        markup=False,
    )


def _inward(value: float | None, below: bool) -> str:
    """Six digits, rounded to the side that works, so that the printed line can be used."""
    context = decimal.Context(
        prec=6, rounding=decimal.ROUND_FLOOR if below else decimal.ROUND_CEILING
    )
    rounded = context.create_decimal_from_float(math.nan if value is None else value)
    return f"{rounded.normalize():f}"


def nearest(console: Console, report: Report) -> None:
    """The nearest target that works, where the target does not.

    Parameters
    ----------
    console : Console
        Where it is printed.
    report : Report
        With its design.

    Notes
    -----
    The line to write into the loop file is given.
    """
    design = report.evidence.design
    near = design.nearest
    if near is None:
        if design.faults and not design.given:
            console.print(
                "  no target of this kind works for this plant, delay and sample rate",
                markup=False,
                soft_wrap=True,
            )
        return
    found = near.natural_frequency_hz if near.crossover_hz is None else near.crossover_hz
    below = found is None or near.fails_at_hz > found
    wanted = report.evidence.loop.aim.bandwidth_hz is not None
    if near.crossover_hz is not None:
        line = f'crossover = "{_inward(near.crossover_hz, below)} Hz"'
    elif wanted and near.bandwidth_hz is not None:
        line = (
            f'bandwidth = "{_inward(near.bandwidth_hz, below)} Hz" '
            f"(natural frequency {near.natural_frequency_hz:.6g} Hz)"
        )
    else:
        line = f'natural_frequency = "{_inward(near.natural_frequency_hz, below)} Hz"'
    console.print(f"  nearest target that works: {line}", markup=False, soft_wrap=True)
    console.print(
        f"  one step of 0.1 % beyond, at {near.fails_at_hz:.6g} Hz: {near.reason}",
        markup=False,
        soft_wrap=True,
    )


def design_verdict(console: Console, report: Report) -> None:
    """Whether the target can be had.

    Parameters
    ----------
    console : Console
        Where it is printed.
    report : Report
        With its design.

    Notes
    -----
    The first requirement.
    """
    console.print()
    first = report.requirements[0]
    if first.met:
        console.print("design: met", style="bold green", markup=False)
        return
    console.print("design: missed", style="bold red", markup=False)
    console.print(f"  {first.reason}", markup=False, soft_wrap=True)
    nearest(console, report)


def report(console: Console, outcome: Report) -> None:
    """Everything that `check` prints.

    Parameters
    ----------
    console : Console
        Where it is printed.
    outcome : Report
        Evidence and verdicts.

    Notes
    -----
    The cautions come last.
    """
    evidence = outcome.evidence
    head(console, evidence)
    gains(console, evidence)
    loops(console, evidence)
    step(console, evidence)
    fixed_point(console, evidence)
    verdicts(console, outcome)
    console.print()
    for sentence in cautions(evidence.loop):
        console.print(f"caution: {sentence}", markup=False, style="dim")


def written(console: Console, folder: Path, files: Mapping[str, str], told: str) -> None:
    """Which files were written.

    Parameters
    ----------
    console : Console
        Where it is printed.
    folder : Path
        Where they are.
    files : mapping of str to str
        Name to text.
    told : str
        What was proven of them.

    Notes
    -----
    Layout only.
    """
    console.print(told, markup=False, soft_wrap=True)
    console.print(f"wrote {', '.join(files)} into {folder}", markup=False, soft_wrap=True)
