"""From a checked loop to the text of its C files.

Rules of this file:

- Nothing is computed here that the check did not compute; numbers become text with their units.
- What is written carries its loop file's hash and options, never a path, a date or a name.
"""

from __future__ import annotations

import json
from dataclasses import dataclass

from plant2.cautions import cautions
from plant2.check import Report, as_json
from plant2.emit import EmitFacts, RecordedStep, render, selfcheck_vectors
from plant2.errors import Plant2Error
from plant2.present import gains_text, requirement_text
from plant2.proof import ProofError, as_plain, prove
from plant2.quantity import format_si


@dataclass(frozen=True, slots=True, kw_only=True)
class Firmware:
    """What an emission writes and tells.

    Parameters
    ----------
    files : dict of str to str
        File name to text.
    told : str
        What was proven, in one line.

    Notes
    -----
    Nothing is written here.
    """

    files: dict[str, str]
    told: str


def firmware_files(report: Report, *, despite_misses: bool = False) -> Firmware:
    """All emitted files of a checked loop, as text.

    Parameters
    ----------
    report : Report
        Evidence and verdicts.
    despite_misses : bool
        Write marked files although a requirement is missed.

    Returns
    -------
    Firmware
        Files and what was proven of them.

    Raises
    ------
    Plant2Error
        If a requirement is missed and marks were not asked for, or there are no words.
    ProofError
        If the C text is not proven equal to the words for every state and input.

    Notes
    -----
    One description feeds the check and the C: the words of the evidence.
    """
    e = report.evidence
    controller, step = e.controller, e.step
    if controller is None or step is None or not (report.met or despite_misses):
        raise Plant2Error(e.loop.name, None, "", "a requirement is missed", "nothing is written")
    loop = e.loop
    length = "rad" if loop.mechanics.motion == "rotary" else "m"
    amount = "V" if loop.actuator.drive == "voltage" else "A"
    options = tuple(f"--set {text}" for text in loop.overrides)
    marks: tuple[str, ...] = ()
    if not report.met:
        options += ("--despite-misses",)
        marks = tuple(requirement_text(r) for r in report.requirements if r.met is not True)
    facts = EmitFacts(
        about=loop.about or loop.name,
        position_unit=f"{format_si(loop.sensor.step, length)} per count",
        code_unit=f"{format_si(loop.actuator.step, amount)} per code",
        sample_rate=format_si(loop.processor.sample_rate_hz, "Hz", 9),
        delay=format_si(loop.processor.delay_s, "s"),
        law=gains_text(e),
        sha256=loop.sha256,
        options=options,
        marks=marks,
        cautions=cautions(loop),
    )
    lane, record = 0, step.record
    samples = len(record.codes) if record.first_kept == 0 else 0
    recorded = RecordedStep(
        position=int(record.start_count[lane]),
        output=int(record.start_output[lane]),
        references=(int(step.reference_count[lane]),) * samples,
        positions=tuple(int(v) for v in record.counts[:samples, lane]),
        codes=tuple(int(v) for v in record.codes[:samples, lane]),
    )
    vectors = selfcheck_vectors(controller, closed_loop=recorded)
    evidence_name = f"{controller.name}_check.json"
    files = render(controller, facts, vectors, "{}\n")
    proof = prove(files[f"{controller.name}.c"], files[f"{controller.name}.h"], controller)
    if not proof.proven:
        raise ProofError(
            f"{controller.name}.c",
            None,
            "",
            f"is not proven equal to the checked words: {proof.first_failure}",
            "nothing is written; this is a defect of plant2",
        )
    data = as_json(report, command="emit", with_words=True)
    data["units"] = {"position": facts.position_unit, "code": facts.code_unit}
    data["cautions"] = list(facts.cautions)
    data["marks"] = list(marks)
    data["proof"] = as_plain(proof)
    files[evidence_name] = json.dumps(data, indent=2, allow_nan=False) + "\n"
    told = (
        f"proof: {len(proof.obligations)} statements about the C text hold for every stored state "
        f"and every input ({proof.solver} {proof.solver_version})"
    )
    return Firmware(files=files, told=told)
