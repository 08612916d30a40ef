"""From words to files: every law, every option of the converters, both word lengths, proven.

The proof reads the C text back; nothing of the templates is trusted here.
"""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from test_words import VARIANTS, built

from plant2.chain import run_chain
from plant2.check import judge
from plant2.emit import EmitFacts, SelfcheckRow, SelfcheckVectors, render
from plant2.errors import Plant2Error
from plant2.firmware import firmware_files
from plant2.loopfile import load_loop
from plant2.proof import prove

ROOT = Path(__file__).resolve().parent.parent
FACTS = EmitFacts(
    about="a loop of the tests",
    position_unit="61 nm per count",
    code_unit="2 mA per code",
    sample_rate="5 kHz",
    delay="270 us",
    law="as in the test",
    sha256="",
)


@pytest.mark.parametrize("bits", [16, 32])
@pytest.mark.parametrize("name", VARIANTS)
def test_text_of_every_variant_is_proven(name: str, bits: int) -> None:
    controller = built(name, bits)[2].controller
    row = SelfcheckRow(ask="resting_output", words=(0, 0, 0))
    vectors = SelfcheckVectors(
        sections=(("one entry", (row,)),), states=((0,) * len(controller.state),)
    )
    files = render(controller, FACTS, vectors, "{}")
    proof = prove(files[f"{controller.name}.c"], files[f"{controller.name}.h"], controller)
    assert proof.proven, proof.first_failure


def test_a_missed_requirement_gives_no_files() -> None:
    path = ROOT / "examples" / "focus_stage" / "loop.toml"
    report = judge(run_chain(load_loop(path, ("limits.overshoot=0.1 %",))))
    with pytest.raises(Plant2Error):
        firmware_files(report)
    marked = firmware_files(report, despite_misses=True)
    for name, text in marked.files.items():
        assert "overshoot: missed" in text.replace("\n * ", " "), name


def test_evidence_carries_words_and_proof() -> None:
    path = ROOT / "examples" / "lens_carrier" / "loop.toml"
    firmware = firmware_files(judge(run_chain(load_loop(path))))
    data = json.loads(firmware.files["lens_carrier_check.json"])
    assert data["proof"]["proven"] is True and data["proof"]["int_bits"] == [16, 32]
    assert data["words"]["name"] == "lens_carrier" and data["verdict"] == "met"
    assert "z3" in firmware.told
