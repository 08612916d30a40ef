"""Every example runs, meets its requirements, and gives the figures that stand beside it.

`expected.json` beside each loop file holds the figures of the check as they were when the example
was last renewed (`PLANT2_RENEW_EXAMPLES=1 make test PYTEST_ARGS="tests/test_examples.py"`).
Integers must agree exactly, up to what a sum-wide bound owes to the last digit of a double; other
numbers to 1e-6: they come out of a floating-point library.
"""

from __future__ import annotations

import json
import os
from pathlib import Path
from typing import Any

import pytest

from plant2.chain import run_chain
from plant2.check import as_json, judge
from plant2.loopfile import load_loop

ROOT = Path(__file__).resolve().parent.parent
EXAMPLES = sorted(p.parent for p in (ROOT / "examples").glob("*/loop.toml"))
KEPT = (
    "verdict",
    "requirements",
    "plant",
    "design",
    "as_designed",
    "as_built",
    "step",
    "fixed_point",
)


def figures(folder: Path) -> dict[str, Any]:
    report = judge(run_chain(load_loop(folder / "loop.toml"), bounds=True))
    data = as_json(report)
    return {key: data[key] for key in KEPT}


def same(found: Any, kept: Any, where: str) -> None:
    if isinstance(kept, dict):
        assert set(found) == set(kept), where
        for key in kept:
            same(found[key], kept[key], f"{where}.{key}")
    elif isinstance(kept, list):
        assert len(found) == len(kept), where
        for i, (a, b) in enumerate(zip(found, kept, strict=True)):
            same(a, b, f"{where}[{i}]")
    elif isinstance(kept, int) and abs(kept) > 2**40:
        assert found == pytest.approx(kept, rel=1e-13), where
    elif isinstance(kept, float):
        assert found == pytest.approx(kept, rel=1e-6, abs=1e-12), where
    else:
        assert found == kept, where


def test_there_are_examples() -> None:
    assert {p.name for p in EXAMPLES} >= {
        "focus_stage", "valve_spool", "scan_mirror", "lens_carrier",
    }  # fmt: skip


@pytest.mark.parametrize("folder", EXAMPLES, ids=lambda p: p.name)
def test_example_gives_its_figures(folder: Path) -> None:
    found = figures(folder)
    kept = folder / "expected.json"
    if os.environ.get("PLANT2_RENEW_EXAMPLES"):
        kept.write_text(json.dumps(found, indent=1) + "\n", encoding="utf-8", newline="\n")
    assert found["verdict"] == "met"
    same(found, json.loads(kept.read_text(encoding="utf-8")), folder.name)


@pytest.mark.parametrize("folder", EXAMPLES, ids=lambda p: p.name)
def test_example_says_that_its_data_is_invented(folder: Path) -> None:
    assert "invented" in (folder / "README.md").read_text(encoding="utf-8")
    assert "invented" in (folder / "loop.toml").read_text(encoding="utf-8")
