"""Logs: every kind of ugliness is read or refused, and nothing is repaired in silence.

Rules of this file:

- Each fault is planted at a known line, and its complaint must carry that line.
- Clean logs with noise, quantisation, flat tops and rests must raise no complaint.
"""

from __future__ import annotations

import math
import pickle
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from loops import reference_loop

from plant2.logs import Log, LogComplaint, LogError, in_units_of, log_from_text, log_of_samples
from plant2.logs import read_log as read


def swing(n: int = 400, amplitude: float = 900.0, cycles: float = 7.3) -> np.ndarray:
    """A decaying swing in whole counts."""
    t = np.arange(n) / n
    return np.rint(amplitude * np.exp(-1.2 * t) * np.cos(2.0 * math.pi * cycles * t + 0.4))


def text_of(
    position: np.ndarray,
    *,
    period_ms: float = 0.5,
    header: str = "time [ms],position [count]",
    stamps: np.ndarray | None = None,
) -> str:
    """A log with a time column; row k stands in line k + 2."""
    if stamps is None:
        stamps = np.arange(position.size) * period_ms
    rows = [f"{t:.6g},{x:.10g}" for t, x in zip(stamps, position, strict=True)]
    return header + "\n" + "\n".join(rows) + "\n"


def kinds(log: Log) -> list[str]:
    """Kinds of the complaints, in their order."""
    return [complaint.kind for complaint in log.complaints]


def of_kind(log: Log, kind: str) -> list[LogComplaint]:
    """Complaints of one kind."""
    return [complaint for complaint in log.complaints if complaint.kind == kind]


# ------------------------------------------------------------------------------------- what is read


def test_clean_log_is_read_without_complaint() -> None:
    position = swing()
    log = log_from_text(text_of(position))
    assert log.complaints == ()
    assert log.rate_hz == pytest.approx(2000.0, rel=1e-12)
    assert log.period_s == pytest.approx(5e-4, rel=1e-12)
    np.testing.assert_array_equal(log.position, position)
    np.testing.assert_array_equal(log.index, np.arange(400))
    np.testing.assert_array_equal(log.lines, np.arange(2, 402))
    np.testing.assert_allclose(log.time_s, np.arange(400) * 5e-4, rtol=1e-12)
    assert (log.position_unit, log.position_step, log.samples) == ("count", 1.0, 400)
    assert log.reference is None and log.output_code is None


@pytest.mark.parametrize("separator", [",", ";", "\t", " , ", "; "])
@pytest.mark.parametrize("newline", ["\n", "\r\n", "\r"])
def test_separators_and_newlines(separator: str, newline: str) -> None:
    text = text_of(swing()).replace(",", separator).replace("\n", newline)
    log = log_from_text(text)
    assert log.complaints == ()
    np.testing.assert_array_equal(log.position, swing())


@pytest.mark.parametrize("separator", [";", "\t"])
def test_decimal_commas(separator: str) -> None:
    rows = [f"{k * 0.25:.2f}{separator}{math.sin(k):.4f}".replace(".", ",") for k in range(50)]
    log = log_from_text(f"time [ms]{separator}position [um]\n" + "\n".join(rows))
    assert log.complaints == ()
    assert log.rate_hz == pytest.approx(4000.0, rel=1e-12)
    np.testing.assert_allclose(log.position, [round(math.sin(k), 4) * 1e-6 for k in range(50)])


def test_decimal_commas_in_quotes() -> None:
    rows = [f'"{k * 0.25:.2f}","{math.sin(k):.4f}"'.replace(".", ",") for k in range(50)]
    log = log_from_text('"time [ms]","position [um]"\n' + "\n".join(rows))
    assert log.complaints == ()
    np.testing.assert_allclose(log.position, [round(math.sin(k), 4) * 1e-6 for k in range(50)])


def test_decimal_commas_between_commas_are_refused() -> None:
    rows = [f"{k * 0.25:.2f}X{math.sin(k):.4f}".replace(".", ",") for k in range(50)]
    text = "time [ms],position [um]\n" + "\n".join(row.replace("X", ",") for row in rows)
    with pytest.raises(LogError, match="line 2: most rows .*4 cells .*semicolons or tabs"):
        log_from_text(text)


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "latin-1"])
def test_encodings(encoding: str, tmp_path: Path) -> None:
    text = text_of(swing(), header="time [\u00b5s],position [\u00b5m]", period_ms=50.0)
    path = tmp_path / "a.csv"
    path.write_bytes(text.encode(encoding))
    log = read(path)
    assert log.complaints == ()
    assert log.rate_hz == pytest.approx(20_000.0, rel=1e-12)
    np.testing.assert_allclose(log.position, swing() * 1e-6, rtol=1e-15)
    assert log.position_step == pytest.approx(1e-6, rel=1e-12)
    assert log.source == str(path)


def test_preamble_and_comment_mark_and_other_columns() -> None:
    rows = [f"{k},{k * 0.5},{x:g},{2 * k}" for k, x in enumerate(swing())]
    text = (
        "bench 4, stage [B]\nrate 2 kHz\n\n"
        "# note,time [ms],Position [count],coil [C]\n" + "\n".join(rows)
    )
    log = log_from_text(text)
    assert [str(complaint) for complaint in log.complaints] == [
        "line 4: column 'note' is not used",
        "line 4: column 'coil [C]' is not used",
    ]
    np.testing.assert_array_equal(log.position, swing())
    assert log.lines[0] == 5


def test_columns_of_words_are_left_alone() -> None:
    rows = [f"{k * 0.5},run,{x:g}" for k, x in enumerate(swing())]
    log = log_from_text("time [ms],state,position [count]\n" + "\n".join(rows))
    assert kinds(log) == ["unused"]
    np.testing.assert_array_equal(log.position, swing())


@pytest.mark.parametrize("end", [",", ",,", ", "])
def test_separators_at_the_ends_of_rows(end: str) -> None:
    body = text_of(swing()).split("\n", 1)
    text = body[0] + "\n" + body[1].replace("\n", end + "\n")
    log = log_from_text(text)
    assert log.complaints == ()
    np.testing.assert_array_equal(log.position, swing())
    log = log_from_text(body[0] + end + "\n" + body[1])
    np.testing.assert_array_equal(log.position, swing())


def test_all_columns_in_si() -> None:
    header = "current [mA];time [us];reference [um];force [mN];position [mm];output [code]"
    rows = [f"{k};{100 * k};{2 * k};{3 * k};{k % 7};{-k}" for k in range(40)]
    log = log_from_text(header + "\n" + "\n".join(rows))
    k = np.arange(40)
    assert log.current_a is not None and log.reference is not None
    assert log.force is not None and log.output_code is not None
    np.testing.assert_allclose(log.current_a, k * 1e-3)
    np.testing.assert_allclose(log.reference, k * 2e-6)
    np.testing.assert_allclose(log.force, k * 3e-3)
    np.testing.assert_allclose(log.position, (k % 7) * 1e-3)
    np.testing.assert_allclose(log.output_code, -k)
    assert (log.position_unit, log.reference_unit, log.force_unit) == ("m", "m", "N")
    assert log.rate_hz == pytest.approx(10_000.0, rel=1e-12)


def test_rotary_units() -> None:
    rows = [f"{k},{10 * math.sin(k):.6f},{k}" for k in range(40)]
    log = log_from_text("time [ms],position [deg],force [mN*m]\n" + "\n".join(rows))
    assert (log.position_unit, log.force_unit) == ("rad", "N m")
    np.testing.assert_allclose(log.position, np.radians(10 * np.sin(np.arange(40))), atol=1e-7)


def test_no_time_column_takes_the_rate() -> None:
    text = "position [count]\n" + "\n".join(f"{x:g}" for x in swing())
    log = log_from_text(text, rate_hz=2000.0)
    assert (log.rate_hz, log.complaints) == (2000.0, ())
    spaced = log_from_text(text.replace("\n", "\n\n"), rate_hz=2000.0)
    np.testing.assert_array_equal(spaced.index, np.arange(400))
    with pytest.raises(LogError, match="no time column, and no rate was given; .*--rate"):
        log_from_text(text)


def test_rate_beside_a_time_column_is_not_used_and_said() -> None:
    log = log_from_text(text_of(swing()), rate_hz=1.0)
    assert log.rate_hz == pytest.approx(2000.0, rel=1e-12)
    assert kinds(log) == ["rate"]


def test_arrays_are_read_only_and_logs_are_what_arrays_say() -> None:
    log = log_of_samples(swing(), rate_hz=2000.0, position_unit="count")
    np.testing.assert_array_equal(log.position, log_from_text(text_of(swing())).position)
    with pytest.raises(ValueError, match="read-only"):
        log.position[0] = 1.0


# ---------------------------------------------------------------------------------- what is refused


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "no header among its first lines"),
        ("1,2\n3,4\n", "no header .*'1,2'.*name the columns"),
        ("time [ms],velocity [m/s]\n1,2\n", "names no position; write position .count."),
        ("time [ms],position\n1,2\n", "column position: has no unit; write position .count."),
        ("time,position [um]\n1,2\n", "column time: has no unit; write time .ms."),
        ("time [ms],position []\n1,2\n", "column position: has no unit"),
        ("time [um],position [um]\n1,2\n", r"time = \[um\]: its unit is a time"),
        ("time [ms],position [volts]\n1,2\n", "its unit is a count or length or angle"),
        ("time [ms],output [V],position [um]\n1,2,3\n", "its unit is a code"),
        ("time [ms],position [um],position [count]\n1,2,3\n", "stands there twice"),
        ("time [ms],position [um],reference [deg]\n1,2,3\n", "of different kinds"),
        ("time [ms],position [um]\n", "log = 0 rows: at least 8 rows"),
        ("time [ms],position [um]\n1,2\n2,3\n", "log = 2 rows: at least 8 rows"),
        ("time [ms],position [um]\n" + "1,2\n" * 20, "time does not advance"),
        (
            "time [ms],position [um]\n" + "".join(f"{t},1\n" for t in [*range(20), 3, 4, 5]),
            "line 22: time goes back from 19 to 3; log each run",
        ),
        ("time [ms],position [um]\n" + "a,b\n" * 20, "line 2: most rows cannot be read"),
    ],
)
def test_refusals(text: str, message: str) -> None:
    with pytest.raises(LogError, match=message):
        log_from_text(text)


def test_refusals_of_files(tmp_path: Path) -> None:
    with pytest.raises(LogError, match=r"a\.csv: cannot be read: no such file"):
        read(tmp_path / "a.csv")
    with pytest.raises(LogError, match="cannot be read: is a directory"):
        read(tmp_path)
    (tmp_path / "b.csv").write_bytes(b"\x00\x01\x02" * 50)
    with pytest.raises(LogError, match=r"b\.csv: is no text file"):
        read(tmp_path / "b.csv")


@pytest.mark.parametrize("rate", [0.0, -1.0, math.nan, math.inf])
def test_refused_rates(rate: float) -> None:
    with pytest.raises(LogError, match="rate = .*must be finite and above 0"):
        log_of_samples(swing(), rate_hz=rate)
    with pytest.raises(LogError, match="rate = .*must be finite and above 0"):
        log_from_text(text_of(swing()), rate_hz=rate)


def test_refused_arrays() -> None:
    with pytest.raises(LogError, match="output = 3 samples: the position has 400"):
        log_of_samples(swing(), rate_hz=1.0, output_code=np.zeros(3))
    bad = swing()
    bad[7] = math.nan
    with pytest.raises(LogError, match=r"position\[7\] = nan: must be finite"):
        log_of_samples(bad, rate_hz=1.0)
    with pytest.raises(LogError, match="position_unit = mm: must be m, rad or count"):
        log_of_samples(swing(), rate_hz=1.0, position_unit="mm")
    with pytest.raises(LogError, match="log = 3 rows"):
        log_of_samples(np.zeros(3), rate_hz=1.0)


def test_errors_survive_pickling() -> None:
    error = LogError("a.csv", None, "", "no", "yes")
    again = pickle.loads(pickle.dumps(error))
    assert (type(again), str(again), again.remedy) == (LogError, str(error), "yes")


HEADS = ["time [ms],position [count]\n", "time [s];position [um];output [code]\n", "position [m]\n"]


@given(
    st.sampled_from(HEADS),
    st.lists(st.text(alphabet="0123456789,;.-+e \tnaNif\"'#", max_size=12), max_size=30),
)
def test_no_text_escapes_the_two_outcomes(head: str, rows: list[str]) -> None:
    try:
        log = log_from_text(head + "\n".join(rows), rate_hz=1000.0)
    except LogError as error:
        assert str(error)
    else:
        assert np.isfinite(log.position).all() and np.all(np.diff(log.index) > 0)


# ------------------------------------------------------------------------------- what is complained


@pytest.mark.parametrize("bad", ["oops", "7.5,nan", "7.5,", "7.5", "7.5,1,2", "7.5,--3", "7,5,3"])
def test_unreadable_row_is_left_out_with_its_line(bad: str) -> None:
    rows = text_of(swing()).split("\n")
    rows[100] = bad
    log = log_from_text("\n".join(rows))
    assert [(c.kind, c.line) for c in log.complaints] == [("unreadable", 101), ("gap", 102)]
    assert repr(bad) in log.complaints[0].text
    assert log.samples == 399
    np.testing.assert_array_equal(log.position, np.delete(swing(), 99))
    np.testing.assert_array_equal(log.index, np.delete(np.arange(400), 99))


def test_last_row_cut_short() -> None:
    log = log_from_text(text_of(swing()) + "200.0")
    assert [(c.kind, c.line) for c in log.complaints] == [("unreadable", 402)]
    assert log.samples == 400


def test_many_faults_are_counted_not_listed() -> None:
    rows = text_of(swing()).split("\n")
    for row in range(50, 350, 10):
        rows[row] = "x"
    log = log_from_text("\n".join(rows))
    assert len(of_kind(log, "unreadable")) == 5
    assert of_kind(log, "unreadable")[-1].text == (
        "from here on 26 more rows could not be read and were left out"
    )
    assert of_kind(log, "gap")[-1].text.endswith("26 more gaps; 30 samples missing in all")


def test_gap_keeps_the_sample_numbers() -> None:
    rows = text_of(swing()).split("\n")
    del rows[200:203]
    log = log_from_text("\n".join(rows))
    assert [str(c) for c in log.complaints] == [
        "line 201: 3 samples missing before this line; not filled in"
    ]
    np.testing.assert_array_equal(log.index, np.delete(np.arange(400), [199, 200, 201]))
    assert log.rate_hz == pytest.approx(2000.0, rel=1e-12)


def test_duplicate_rows_are_left_out() -> None:
    rows = text_of(swing()).split("\n")
    rows.insert(150, rows[149])
    log = log_from_text("\n".join(rows))
    assert [str(c) for c in log.complaints] == ["line 151: same time as line 150; left out"]
    np.testing.assert_array_equal(log.position, swing())


def test_jitter_is_measured_and_not_taken_for_gaps() -> None:
    random = np.random.default_rng(1)
    stamps = (np.arange(2000) + random.normal(0.0, 0.12, 2000)) * 0.5
    text = "time [ms],position [count]\n" + "\n".join(
        f"{t:.9f},{x:g}" for t, x in zip(stamps, swing(2000), strict=True)
    )
    log = log_from_text(text)
    assert kinds(log) == ["jitter"]
    assert "60" in log.complaints[0].text and "us rms" in log.complaints[0].text
    np.testing.assert_array_equal(log.index, np.arange(2000))
    # Five standard deviations of a line through 2000 stamps: 5 x 0.12 sqrt(12)/2000^1.5.
    assert log.rate_hz == pytest.approx(2000.0, rel=2.4e-5)


def test_late_stamps_are_jitter_not_gaps() -> None:
    stamps = np.arange(400) * 0.5
    stamps[[60, 200, 333]] += 0.42
    log = log_from_text(text_of(swing(), stamps=stamps))
    assert kinds(log) == ["jitter"]
    np.testing.assert_array_equal(log.index, np.arange(400))


def test_rounded_stamps_are_no_jitter() -> None:
    stamps = np.round(np.arange(400) * 0.3125, 1)
    log = log_from_text(text_of(swing(), stamps=stamps))
    assert log.complaints == ()
    assert log.rate_hz == pytest.approx(3200.0, rel=1e-4)


def test_coarse_stamps_are_counted_out() -> None:
    stamps = np.floor(np.arange(4000) * 0.1)
    log = log_from_text(text_of(swing(4000), stamps=stamps))
    assert kinds(log) == ["coarse"]
    assert log.rate_hz == pytest.approx(10_000.0, rel=1e-4)
    np.testing.assert_array_equal(log.index, np.arange(4000))
    stamps[2000:] += 40.0
    log = log_from_text(text_of(swing(4000), stamps=stamps))
    assert "samples may be lost" in log.complaints[0].text


@pytest.mark.parametrize("bits", [16, 32])
def test_time_counter_wraps(bits: int) -> None:
    stamps = (2**bits - 5000 + 125 * np.arange(400)) % 2**bits
    rows = [f"{t},{x:g}" for t, x in zip(stamps, swing(), strict=True)]
    log = log_from_text("time [us],position [count]\n" + "\n".join(rows))
    assert [str(c) for c in log.complaints] == [
        f"line 42: the time counter wraps at 2^{bits}; unwrapped"
    ]
    assert log.rate_hz == pytest.approx(8000.0, rel=1e-9)
    np.testing.assert_array_equal(log.index, np.arange(400))


@pytest.mark.parametrize("bits", [8, 12, 16])
@pytest.mark.parametrize("signed", [True, False])
def test_position_counter_wraps(bits: int, signed: bool) -> None:
    turn = 2**bits
    true = swing(4000, amplitude=0.8 * turn) + 0.1 * turn
    low = -turn // 2 if signed else 0
    wrapped = (np.rint(true) - low) % turn + low
    log = log_from_text(text_of(wrapped))
    assert set(kinds(log)) == {"wrap"}
    first = int(np.flatnonzero(np.abs(np.diff(wrapped)) > turn / 2)[0]) + 1
    assert log.complaints[0].line == log.lines[first]
    shift = log.position - np.rint(true)
    assert np.ptp(shift) == 0.0 and shift[0] % turn == 0.0


def test_square_wave_is_no_wrap() -> None:
    position = np.where(np.arange(400) // 50 % 2 == 0, 100.0, -100.0)
    assert "wrap" not in kinds(log_from_text(text_of(position)))


def test_clipping() -> None:
    position = np.clip(swing(), -500.0, 511.0)
    log = log_from_text(text_of(position))
    assert set(kinds(log)) == {"clipping"}
    first = int(np.flatnonzero(np.abs(position) >= 500.0)[0])
    lines = [c.line for c in log.complaints]
    assert all(abs(swing()[line - 2]) >= 500.0 for line in lines)
    assert min(lines) <= first + 2 + 60


def test_stuck_value() -> None:
    position = swing()
    position[120:128] = position[120]
    log = log_from_text(text_of(position))
    assert [(c.kind, c.line) for c in log.complaints] == [("stuck", 122)]
    assert "for 8 samples in the midst of motion" in log.complaints[0].text


@pytest.mark.parametrize("noise", [0.0, 0.2, 0.6, 3.0])
@pytest.mark.parametrize("amplitude", [6.0, 900.0, 30_000.0])
@pytest.mark.parametrize("samples", [300, 20_000])
def test_clean_motion_raises_no_complaint(noise: float, amplitude: float, samples: int) -> None:
    """Hold, release, decay, long rest: flat parts and flat tops are not clipped and not stuck."""
    random = np.random.default_rng(7)
    moving = (
        amplitude * np.exp(-3.0 * np.linspace(0, 1, samples)) * np.cos(np.linspace(0, 60, samples))
    )
    whole = np.concatenate([np.full(samples // 3, amplitude), moving, np.zeros(samples)])
    whole = np.rint(whole + random.normal(0.0, noise, whole.size))
    log = log_of_samples(whole, rate_hz=1000.0, position_unit="count")
    assert log.complaints == ()


@pytest.mark.parametrize(
    ("values", "step"),
    [
        (np.rint(swing()) * 0.125, 0.125),
        (np.round(np.sin(np.arange(500)), 3), 0.001),
        (np.rint(swing()) * 3.7e-8 + 1.0, 3.7e-8),
        (np.sin(np.arange(500)), None),
        (np.zeros(500), None),
    ],
)
def test_quantisation_step(values: np.ndarray, step: float | None) -> None:
    found = log_of_samples(values, rate_hz=1.0).position_step
    if step is None:
        assert found is None
    else:
        assert found == pytest.approx(step, rel=1e-5)


# --------------------------------------------------------------------------------- with a loop file


def test_counts_become_positions() -> None:
    loop = reference_loop(
        "sensor.polarity=-1", 'sensor.coding="unsigned"', "sensor.zero_count=30000"
    )
    counts = 30000.0 + swing()
    log = log_from_text(text_of(counts, period_ms=0.2), loop=loop)
    assert (log.position_unit, log.complaints) == ("m", ())
    np.testing.assert_allclose(log.position, -swing() * loop.sensor.step, rtol=1e-12)
    assert log.position_step == pytest.approx(loop.sensor.step, rel=1e-12)
    same = in_units_of(log, loop)
    np.testing.assert_array_equal(same.position, log.position)


def test_reference_in_counts_becomes_a_position() -> None:
    loop = reference_loop()
    log = log_of_samples(swing(), rate_hz=5000.0, position_unit="count", reference=np.ones(400))
    scaled = in_units_of(log, loop)
    assert scaled.reference is not None
    np.testing.assert_allclose(scaled.reference, loop.sensor.step, rtol=1e-15)
    assert scaled.reference_unit == "m"


def test_factor_of_a_thousand_in_position_and_time() -> None:
    loop = reference_loop()
    microns = swing(amplitude=700.0)
    right = log_from_text(text_of(microns, period_ms=0.2, header="time [ms],position [um]"))
    assert in_units_of(right, loop).complaints == ()
    wrong = log_from_text(text_of(microns, period_ms=0.2, header="time [ms],position [mm]"))
    found = in_units_of(wrong, loop).complaints
    assert [c.kind for c in found] == ["scale"]
    assert "times the travel" in found[0].text and "factor of 1000" in found[0].text
    tiny = log_from_text(text_of(microns, period_ms=0.2, header="time [ms],position [nm]"))
    tiny = log_of_samples(tiny.position * 1e-6, rate_hz=5000.0)
    assert "less than one count" in in_units_of(tiny, loop).complaints[0].text
    slow = log_from_text(text_of(microns, period_ms=0.2, header="time [s],position [um]"))
    assert "unit of time" in in_units_of(slow, loop).complaints[0].text


def test_counts_at_the_rail_of_the_converter() -> None:
    loop = reference_loop()
    counts = np.clip(40.0 * swing(), -32768.0, 32767.0)
    log = log_of_samples(counts, rate_hz=5000.0, position_unit="count")
    assert "clipping" in kinds(in_units_of(log, loop))


def test_other_kind_of_motion_is_refused() -> None:
    log = log_of_samples(swing() * 1e-3, rate_hz=5000.0, position_unit="rad")
    with pytest.raises(LogError, match="position = in rad: the loop file moves in m"):
        in_units_of(log, reference_loop())
