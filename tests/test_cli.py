"""The commands as people and scripts use them: output, exit status, files, bad input."""

from __future__ import annotations

import json
import math
import os
import re
import stat
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from typer.testing import CliRunner

from plant2.cli import DEFECT, app

ROOT = Path(__file__).resolve().parent.parent
FOCUS = ROOT / "examples" / "focus_stage" / "loop.toml"
runner = CliRunner()


def run(*arguments: str) -> Any:
    return runner.invoke(app, list(arguments))


def test_check_prints_verdicts_and_cautions() -> None:
    done = run("check", str(FOCUS))
    assert done.exit_code == 0
    first = done.stdout.splitlines()[0]
    assert first.startswith("focus_stage: the nominal unit")
    assert "verdict: met" in done.stdout
    assert done.stdout.rstrip().splitlines()[-1].startswith("caution:")
    assert done.stderr == ""


def test_json_alone_goes_to_standard_output() -> None:
    done = run("check", str(FOCUS), "--json", "-")
    data = json.loads(done.stdout)
    assert data["verdict"] == "met" and data["format"] == 1
    assert "verdict: met" in done.stderr


def test_json_has_the_promised_keys(tmp_path: Path) -> None:
    target = tmp_path / "out.json"
    done = run("check", str(FOCUS), "--json", str(target))
    assert done.exit_code == 0
    data = json.loads(target.read_text())
    assert {
        "format",
        "loop",
        "verdict",
        "requirements",
        "plant",
        "sampling",
        "design",
        "controller",
        "as_designed",
        "as_built",
        "step",
        "fixed_point",
        "cost",
    } <= set(data)
    assert {"natural_frequency_hz", "damping_ratio", "static_gain_count_per_code"} <= set(
        data["plant"]
    )
    assert {"law", "kp_n_per_m", "kd_n_s_per_m", "ki_n_per_m_s", "beta"} <= set(data["design"])
    figures = {
        "damping_ratio",
        "natural_frequency_hz",
        "bandwidth_hz",
        "poles_z",
        "stable",
        "phase_margin_deg",
        "gain_margin_db",
        "gain_reduction_db",
        "delay_margin_s",
        "peak_sensitivity",
        "crossover_hz",
    }
    assert figures <= set(data["as_designed"]) and figures <= set(data["as_built"])
    assert {
        "size_m",
        "overshoot_percent",
        "settling_time_s",
        "settling_band_percent",
        "rise_time_s",
        "peak_code",
        "final_error_m",
        "linear_step_m",
    } <= set(data["step"])
    assert {
        "word_bits",
        "sum_bits",
        "signals",
        "deviation_bound_count",
        "deviation_seen_count",
        "limit_cycle_bound_count",
        "limit_cycle_seen_count",
    } <= set(data["fixed_point"])
    for signal in data["fixed_point"]["signals"]:
        assert signal["bound"] <= signal["capacity"]
    magnitudes = [abs(complex(*p)) for p in data["as_built"]["poles_z"]]
    assert magnitudes == sorted(magnitudes, reverse=True)


def test_exact_transfer_functions_are_the_doubles(tmp_path: Path) -> None:
    from fractions import Fraction

    target = tmp_path / "out.json"
    run("check", str(ROOT / "examples" / "valve_spool" / "loop.toml"), "--json", str(target))
    controller = json.loads(target.read_text())["controller"]
    power = 1 << controller["exact"]["over_two_to_the"]
    for path in ("reference", "position"):
        for part in ("numerator", "denominator"):
            exact = [Fraction(int(c), power) for c in controller["exact"][path][part]]
            assert [float(c) for c in exact] == controller[path][part]
        assert controller[path]["denominator"][0] == 1.0


def test_rotary_keys(tmp_path: Path) -> None:
    target = tmp_path / "out.json"
    run("check", str(ROOT / "examples" / "scan_mirror" / "loop.toml"), "--json", str(target))
    data = json.loads(target.read_text())
    assert "kp_n_m_per_rad" in data["design"]
    assert {"size_rad", "final_error_rad", "linear_step_rad"} <= set(data["step"])


def test_missed_design_has_nulls_and_the_nearest_target(tmp_path: Path) -> None:
    target = tmp_path / "out.json"
    done = run("check", str(FOCUS), "--set", "aim.bandwidth=3 kHz", "--json", str(target))
    assert done.exit_code == 1
    data = json.loads(target.read_text())
    assert data["verdict"] == "missed" and data["controller"] is None
    assert data["as_built"]["damping_ratio"] is None and data["step"]["size_m"] is None
    first = data["requirements"][0]
    assert first["name"] == "design" and first["met"] is False
    near = first["nearest"]
    line = re.search(r'nearest target that works: (\w+) = "([^"]+)"', done.stdout)
    assert line and near["bandwidth_hz"] < 3000
    again = run("check", str(FOCUS), "--set", f"aim.{line[1]}={line[2]}")
    assert re.search(r"design +met", again.stdout)
    beyond = near["bandwidth_hz"] * near["fails_at_hz"] / near["natural_frequency_hz"]
    further = run("check", str(FOCUS), "--set", f"aim.bandwidth={beyond * 1.0005!r} Hz")
    assert re.search(r"design +missed", further.stdout)


def test_design_prints_the_plant_and_the_units() -> None:
    done = run("design", str(FOCUS))
    assert done.exit_code == 0
    for word in ("underdamped", "damped frequency", "decay time", "quality factor", "round trip"):
        assert word in done.stdout


def test_emit_writes_five_files_and_the_same_bytes_again(tmp_path: Path) -> None:
    first, second = tmp_path / "a", tmp_path / "b"
    assert run("emit", str(FOCUS), "--into", str(first)).exit_code == 0
    assert run("emit", str(FOCUS), "--into", str(second)).exit_code == 0
    names = {p.name for p in first.iterdir()}
    assert names == {
        "focus_stage.h", "focus_stage.c", "focus_stage_words.h", "focus_stage_selfcheck.c",
        "focus_stage_check.json",
    }  # fmt: skip
    for name in names:
        assert (first / name).read_bytes() == (second / name).read_bytes()
        assert str(tmp_path) not in (first / name).read_text(encoding="utf-8")


def test_emit_refuses_when_a_requirement_is_missed(tmp_path: Path) -> None:
    folder = tmp_path / "out"
    miss = ("--set", "limits.overshoot=0.1 %")
    done = run("emit", str(FOCUS), "--into", str(folder), *miss)
    assert done.exit_code == 1 and not folder.exists()
    done = run("emit", str(FOCUS), "--into", str(folder), *miss, "--despite-misses")
    assert done.exit_code == 1
    for path in folder.iterdir():
        text = path.read_text(encoding="utf-8")
        assert "overshoot" in text and ("missed" in text or "MISSED" in text), path.name


def test_despite_misses_never_writes_an_unstable_loop(tmp_path: Path) -> None:
    folder = tmp_path / "out"
    text = FOCUS.read_text(encoding="utf-8")
    text = text.replace("damping_ratio = 0.8", 'kp = "900 N/mm"').replace(
        'bandwidth = "150 Hz"            # -3 dB, reference to position', 'kd = "5 N*s/m"'
    )
    loop = tmp_path / "loop.toml"
    loop.write_text(text, encoding="utf-8")
    done = run("emit", str(loop), "--into", str(folder), "--despite-misses")
    assert done.exit_code == 1 and not folder.exists()
    assert "unstable" in done.stdout
    wrong_sign = loop.read_text(encoding="utf-8").replace('"900 N/mm"', '"-40 N/mm"')
    loop.write_text(wrong_sign, encoding="utf-8")
    done = run("emit", str(loop), "--into", str(folder), "--despite-misses")
    assert done.exit_code == 1 and not folder.exists()


def test_flashed_words_against_another_plant(tmp_path: Path) -> None:
    assert run("emit", str(FOCUS), "--into", str(tmp_path)).exit_code == 0
    words = str(tmp_path / "focus_stage_check.json")
    same = run("check", str(FOCUS), "--words", words, "--json", str(tmp_path / "a.json"))
    assert same.exit_code == 0
    heavy = run(
        "check", str(FOCUS), "--words", words, "--set", "plant.mass=75 g",
        "--json", str(tmp_path / "b.json"),
    )  # fmt: skip
    a, b = (json.loads((tmp_path / n).read_text()) for n in ("a.json", "b.json"))
    assert a["controller"] == b["controller"]
    assert b["as_built"]["natural_frequency_hz"] < a["as_built"]["natural_frequency_hz"]
    assert heavy.exit_code in (0, 1)
    (tmp_path / "bad.json").write_text("{}")
    assert run("check", str(FOCUS), "--words", str(tmp_path / "bad.json")).exit_code == 2


def test_new_writes_a_file_that_checks(tmp_path: Path) -> None:
    target = tmp_path / "my_axis.toml"
    done = run("new", str(target))
    assert done.exit_code == 0
    assert 'name = "my_axis"' in target.read_text(encoding="utf-8")
    assert run("check", str(target)).exit_code == 0
    assert run("new", str(target)).exit_code == 2


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("stiffness =", "stifness =", ("stifness", "stiffness")),
        ('"62 g"', "62", ("mass", '"62 g"')),
        ('"21 us"', '"21"', ("delay", "unit")),
        ('"0.9 mm"', '"0,9 mm"', ("travel", '"0.9 mm"')),
        ("[plant]", "[plnt]", ("plnt", "plant")),
        ('law = "pd"', 'law = "pdd"', ("law", "pid")),
        ("damping_ratio = 0.8", "damping_ratio = 0", ("damping_ratio",)),
        ('"8 ms"', '"8000 s"', ("samples", "settling_time")),
    ],
)
def test_slips_are_told_with_the_line_to_write(
    tmp_path: Path, old: str, new: str, words: tuple[str, ...]
) -> None:
    loop = tmp_path / "loop.toml"
    loop.write_text(FOCUS.read_text(encoding="utf-8").replace(old, new, 1), encoding="utf-8")
    done = run("check", str(loop))
    assert done.exit_code == 2 and done.stdout == ""
    for word in words:
        assert word in done.stderr
    assert "Traceback" not in done.stderr


def test_missing_file_and_folder(tmp_path: Path) -> None:
    assert run("check", str(tmp_path / "no.toml")).exit_code == 2
    assert run("check", str(tmp_path)).exit_code == 2
    blocked = tmp_path / "file"
    blocked.write_text("")
    assert run("emit", str(FOCUS), "--into", str(blocked)).exit_code == 2
    assert run("check", str(FOCUS), "--json", str(tmp_path / "no" / "x.json")).exit_code == 2


def test_unknown_option_is_bad_input() -> None:
    assert run("check", str(FOCUS), "--jsn", "-").exit_code == 2
    assert run("chek", str(FOCUS)).exit_code == 2


def test_three_samples_of_delay_and_twice_the_bandwidth() -> None:
    done = run("check", str(FOCUS), "--set", "processor.delay=150 us")
    assert done.exit_code in (0, 1) and "as built" in done.stdout
    done = run("check", str(FOCUS), "--set", "aim.bandwidth=300 Hz")
    assert done.exit_code in (0, 1) and "300 Hz" in done.stdout


def test_a_reader_that_goes_away_is_no_error() -> None:
    """`plant2 check LOOP | head -1` ends quietly."""
    done = subprocess.run(
        f'"{sys.executable}" -m plant2 check "{FOCUS}" | head -1',
        shell=True, cwd=ROOT, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.stderr == "" and done.stdout.startswith("focus_stage")


def test_a_home_that_cannot_be_written_changes_nothing(tmp_path: Path) -> None:
    """No cache, no configuration: the same bytes with a home folder that is not there."""
    usual = subprocess.run(
        [sys.executable, "-m", "plant2", "check", str(FOCUS), "--json", "-"],
        cwd=ROOT, capture_output=True, check=True,
    )  # fmt: skip
    locked = tmp_path / "home"
    locked.mkdir()
    locked.chmod(stat.S_IRUSR | stat.S_IXUSR)
    for home in (locked, tmp_path / "absent", Path(os.devnull)):
        environment = {
            **os.environ, "HOME": str(home), "XDG_CACHE_HOME": str(home),
            "XDG_CONFIG_HOME": str(home),
        }  # fmt: skip
        done = subprocess.run(
            [sys.executable, "-m", "plant2", "check", str(FOCUS), "--json", "-"],
            cwd=ROOT, env=environment, capture_output=True, check=True,
        )  # fmt: skip
        assert done.stdout == usual.stdout
    assert not list(locked.iterdir())


def test_identify_reads_a_free_decay(tmp_path: Path) -> None:
    """Simulated: 35.6 Hz, damping ratio 0.02, no noise; a free decay knows no mass."""
    log, target = tmp_path / "decay.csv", tmp_path / "out.json"
    rows = ["time [s], position [um]"]
    for k in range(4000):
        t = k * 5e-4
        swing = math.exp(-0.02 * 223.68 * t) * math.cos(223.68 * math.sqrt(1 - 4e-4) * t)
        rows.append(f"{t:.4f}, {1000 * swing:.3f}")
    log.write_text("\n".join(rows) + "\n", encoding="utf-8")
    done = run("identify", str(log), "--json", str(target))
    assert done.exit_code == 0
    data = json.loads(target.read_text())
    assert data["natural_frequency_hz"]["value"] == pytest.approx(223.68 / 2 / math.pi, rel=1e-5)
    assert data["damping_ratio"]["value"] == pytest.approx(0.02, rel=1e-3)
    assert data["mass_kg"] is None and "mass_kg" in data["unknown"]
    log.write_text("time [s], position [um]\n0, 5\n1, 5\n", encoding="utf-8")
    assert run("identify", str(log)).exit_code == 2
    assert run("identify", str(log), "--rate", "fast").exit_code == 2


# --- loop files written by someone in a hurry -----------------------------------------------------

LINES = FOCUS.read_text(encoding="utf-8").splitlines()
KEYS = [i for i, line in enumerate(LINES) if "=" in line and not line.startswith("#")]


def _mutated(data: st.DataObject) -> str:
    lines = list(LINES)
    for _ in range(data.draw(st.integers(1, 3))):
        i = data.draw(st.sampled_from(KEYS))
        kind = data.draw(st.sampled_from(["drop", "scale", "unit", "type", "swap", "text", "sign"]))
        key, _, value = lines[i].partition("=")
        number = re.search(r"-?[0-9.]+", value)
        if kind == "drop":
            lines[i] = ""
        elif kind == "scale" and number:
            factor = data.draw(st.sampled_from([0.0, 1e-9, 1e-3, 0.1, 0.5, 3.0, 30.0, 1e3, 1e9]))
            scaled = f"{float(number[0] or 0) * factor:.6g}" if number[0] != "." else "0"
            lines[i] = f"{key}={value.replace(number[0], scaled, 1)}"
        elif kind == "unit":
            other = data.draw(st.sampled_from(["mm", "kg", "Hz", "N", "us", "V", "deg", "N*m", ""]))
            lines[i] = f'{key}= "{number[0] if number else 1} {other}"'
        elif kind == "type":
            lines[i] = f"{key}= {data.draw(st.sampled_from(['true', '[]', '{}', '7', '-1.5']))}"
        elif kind == "swap":
            j = data.draw(st.sampled_from(KEYS))
            lines[i], lines[j] = lines[j], lines[i]
        elif kind == "sign" and number:
            lines[i] = f"{key}={value.replace(number[0], '-' + number[0], 1)}"
        else:
            lines[i] = data.draw(st.text("abc=[]\"'#\\ 0123é", max_size=20))
    return "\n".join(lines)


@settings(
    max_examples=200,
    derandomize=True,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)
@given(data=st.data())
def test_mutated_loop_files(tmp_path_factory: pytest.TempPathFactory, data: st.DataObject) -> None:
    """Exit 0, 1 or 2, each rightly, with a message; never a traceback, never half a folder."""
    folder = tmp_path_factory.mktemp("mutated")
    loop = folder / "loop.toml"
    loop.write_text(_mutated(data), encoding="utf-8")
    into = folder / "out"
    done = run("emit", str(loop), "--into", str(into))
    assert done.exception is None or isinstance(done.exception, SystemExit)
    assert done.exit_code in (0, 1, 2)
    assert DEFECT not in done.stderr
    written = sorted(p.name for p in into.iterdir()) if into.exists() else []
    if done.exit_code == 0:
        assert len(written) == 5 and "verdict: met" in done.stdout
    else:
        assert written == []
        assert done.stderr.startswith("plant2: ")
    if done.exit_code == 1:
        assert "verdict: missed" in done.stdout
    if done.exit_code == 2:
        assert done.stdout == ""
