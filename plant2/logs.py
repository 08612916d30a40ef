"""Measured logs: ugly CSV text to one frozen `Log`, with a complaint for everything that is odd.

Rules of this file:

- Nothing is repaired in silence: a row that is left out, a counter that is unwrapped, a gap, a
  clipped or stuck value becomes a complaint with its line.
- Nothing is filled in, smoothed or resampled. Missing samples stay missing: every row carries its
  sample number on an even grid.
- Units are those of the header cells; counts and codes stay counts and codes unless a loop file
  gives their scales.
- No estimation here: what the numbers mean for a plant is for others.
"""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from plant2.errors import Plant2Error, QuantityError
from plant2.loopfile import Loop
from plant2.quantity import KINDS, format_si, parse_quantity

Real = NDArray[np.float64]
Whole = NDArray[np.int64]
_Kind = TypeVar("_Kind", np.float64, np.int64)

MAX_PREAMBLE_LINES = 200
"""Lines in which the header is looked for."""

LISTED_PER_KIND = 4
"""Complaints of one kind that are listed one by one; the rest is counted."""

LEAST_SAMPLES = 8
"""Fewer rows than this are no log."""

UNITS: dict[str, tuple[str, ...]] = {
    "time": ("time",),
    "position": ("count", "length", "angle"),
    "reference": ("count", "length", "angle"),
    "output": ("code",),
    "current": ("current",),
    "force": ("force", "torque"),
}
"""Columns that are understood, and the kinds of unit that each may have."""

_SI = {
    "time": "s",
    "length": "m",
    "angle": "rad",
    "current": "A",
    "force": "N",
    "torque": "N m",
    "count": "count",
    "code": "code",
}
_EXAMPLES = {
    "time": "time [ms]",
    "position": "position [count]",
    "reference": "reference [count]",
    "output": "output [code]",
    "current": "current [A]",
    "force": "force [N]",
}
_SEPARATORS = (";", "\t", ",")
_NUMBER = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")
_CELL = re.compile(r"([A-Za-z]+)\s*\[([^\[\]]*)\]")
_CHUNK_LINES = 4096
_COUNTER_BITS = (8, 10, 12, 14, 16, 18, 20, 24, 32)


class LogError(Plant2Error):
    """A log cannot be used; the rule says why and the remedy what to do."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LogComplaint:
    """One thing that is odd in a log.

    Parameters
    ----------
    kind : str
        "unreadable", "unused", "duplicate", "gap", "jitter", "wrap", "clipping", "stuck", "scale",
        "rate" or "coarse".
    line : int
        Line of the file, from 1; 0 where no single line is concerned.
    text : str
        What is odd, and what was done about it.
    """

    kind: str
    line: int
    text: str

    def __str__(self) -> str:
        return f"line {self.line}: {self.text}" if self.line else self.text


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Log:
    """One measured record on an even grid of sample numbers.

    Parameters
    ----------
    source : str
        Name of the file; empty where the log came otherwise.
    rate_hz : float
        Samples per second, from all time stamps together. [Hz]
    index : array of int, shape (n,)
        Sample number of each row, rising, from 0; missing samples leave numbers out.
    lines : array of int, shape (n,)
        Line of the file of each row, from 1; row numbers from 1 where there is no file.
    position : array of float, shape (n,)
        Measured position. [`position_unit`]
    position_unit : str
        "m", "rad" or "count".
    reference : array of float, shape (n,), or None
        Set point. [`reference_unit`]
    reference_unit : str
        "m", "rad" or "count"; empty without a reference.
    output_code : array of float, shape (n,), or None
        What the controller wrote. [code]
    current_a : array of float, shape (n,), or None
        Coil current. [A]
    force : array of float, shape (n,), or None
        Force or torque. [N or N m]
    force_unit : str
        "N" or "N m"; empty without a force.
    position_step : float or None
        Least step between different positions; None where they are not on a grid.
        [`position_unit`]
    complaints : tuple of LogComplaint
        Everything odd, in the order of the lines.

    Notes
    -----
    The arrays are read-only.
    """

    source: str = ""
    rate_hz: float
    index: Whole
    lines: Whole
    position: Real
    position_unit: str
    reference: Real | None = None
    reference_unit: str = ""
    output_code: Real | None = None
    current_a: Real | None = None
    force: Real | None = None
    force_unit: str = ""
    position_step: float | None = None
    complaints: tuple[LogComplaint, ...] = ()

    @property
    def samples(self) -> int:
        """Number of rows. [-]"""
        return int(self.position.size)

    @property
    def period_s(self) -> float:
        """Time from one sample to the next. [s]"""
        return 1.0 / self.rate_hz

    @property
    def time_s(self) -> Real:
        """Time of each row on the even grid, from the first. [s]"""
        return self.index / self.rate_hz


# --------------------------------------------------------------------------------------------------
# Reading


def read_log(path: str | Path, *, rate_hz: float | None = None, loop: Loop | None = None) -> Log:
    """Read a CSV log.

    Parameters
    ----------
    path : str or Path
        The file.
    rate_hz : float or None
        Samples per second, above 0; needed where the log has no time column. [Hz]
    loop : Loop or None
        Gives scales to counts and codes, and figures to compare units with.

    Returns
    -------
    Log
        The rows that could be read, and what is odd about them.

    Raises
    ------
    LogError
        If the file cannot be read, has no header, no position, no sample rate, or too few rows.

    Notes
    -----
    UTF-8, UTF-16 with byte order mark, or one byte per character; any newlines; separators ``,``
    ``;`` or tab; decimal points, or decimal commas where the separator is another one. Format of
    this project's own.
    """
    source = str(path)
    try:
        raw = Path(path).read_bytes()
    except OSError as error:
        reason = (error.strerror or str(error)).lower()
        raise LogError(source, None, "", f"cannot be read: {reason}", "") from None
    return _log_of(_decoded(raw, source), source, rate_hz, loop)


def log_from_text(text: str, *, rate_hz: float | None = None, loop: Loop | None = None) -> Log:
    """Read the text of a CSV log.

    Parameters
    ----------
    text : str
        Header and rows.
    rate_hz : float or None
        Samples per second, above 0; needed where the log has no time column. [Hz]
    loop : Loop or None
        Gives scales to counts and codes, and figures to compare units with.

    Returns
    -------
    Log
        The rows that could be read, and what is odd about them.

    Raises
    ------
    LogError
        If the text has no header, no position, no sample rate, or too few rows.

    Notes
    -----
    Format of this project's own.

    Examples
    --------
    >>> rows = "".join(f"{k},{k * k}\\n" for k in range(9))
    >>> log = log_from_text("time [ms],position [um]\\n" + rows)
    >>> round(log.rate_hz, 6), float(log.position[3]), log.complaints
    (1000.0, 9e-06, ())
    """
    return _log_of(text.removeprefix("\ufeff"), "", rate_hz, loop)


def log_of_samples(
    position: Real,
    *,
    rate_hz: float,
    position_unit: str = "m",
    reference: Real | None = None,
    output_code: Real | None = None,
    current_a: Real | None = None,
    force: Real | None = None,
) -> Log:
    """Make a log of arrays, with the same look at the values as a file gets.

    Parameters
    ----------
    position : array of float, shape (n,)
        Evenly sampled position. [`position_unit`]
    rate_hz : float
        Samples per second, above 0. [Hz]
    position_unit : str
        "m", "rad" or "count".
    reference : array of float, shape (n,), or None
        Set point. [`position_unit`]
    output_code : array of float, shape (n,), or None
        What the controller wrote. [code]
    current_a : array of float, shape (n,), or None
        Coil current. [A]
    force : array of float, shape (n,), or None
        Force, or torque where the position is an angle. [N or N m]

    Returns
    -------
    Log
        All samples, numbered from 0.

    Raises
    ------
    LogError
        If the rate is not above 0, an array is of another length or not finite, or there are too
        few samples.

    Notes
    -----
    The same checks as for files; own choice.

    Examples
    --------
    >>> log_of_samples(np.arange(9.0), rate_hz=100.0, position_unit="count").position_step
    1.0
    """
    _check_rate(rate_hz)
    position = np.asarray(position, dtype=np.float64)
    arrays = {
        "position": position,
        "reference": reference,
        "output": output_code,
        "current": current_a,
        "force": force,
    }
    columns = {k: np.array(v, dtype=np.float64) for k, v in arrays.items() if v is not None}
    for name, values in columns.items():
        if values.shape != (position.size,):
            raise LogError(
                name,
                float(values.size),
                "samples",
                f"the position has {position.size}",
                "give arrays of one length",
            )
        if not np.isfinite(values).all():
            bad = int(np.flatnonzero(~np.isfinite(values))[0])
            raise LogError(
                f"{name}[{bad}]",
                float(values[bad]),
                "",
                "must be finite",
                "leave the sample out and log what is left",
            )
    if position_unit not in {"m", "rad", "count"}:
        raise LogError("position_unit", position_unit, "", "must be m, rad or count", "")
    units = {
        "position": position_unit,
        "reference": position_unit,
        "force": "N m" if position_unit == "rad" else "N",
    }
    _check_samples(position.size, "")
    lines = np.arange(1, position.size + 1, dtype=np.int64)
    return _finished("", rate_hz, lines - 1, lines, columns, units, [], None)


def in_units_of(log: Log, loop: Loop) -> Log:
    """Give a log the scales of a loop file: counts to positions.

    Parameters
    ----------
    log : Log
        A log in counts or in metres or radians.
    loop : Loop
        The loop file of the same sensor.

    Returns
    -------
    Log
        The same rows with position and reference in m or rad, and complaints about scales that
        look wrong by powers of ten.

    Raises
    ------
    LogError
        If the log's units are those of the other kind of motion.

    Notes
    -----
    ``position = polarity (count - zero count) step``. Codes are left as they are: what they do
    depends on the drive. A scale is doubted when positions reach beyond twenty times the travel.
    """
    unit = "rad" if loop.mechanics.motion == "rotary" else "m"
    sensor = loop.sensor
    complaints = list(log.complaints)

    def scaled(values: Real | None, from_unit: str) -> Real | None:
        if values is None or from_unit == unit:
            return values
        if from_unit != "count":
            raise LogError(
                "position",
                f"in {from_unit}",
                "",
                f"the loop file moves in {unit}",
                "compare with the loop file of the same axis",
            )
        return _frozen(sensor.polarity * sensor.step * (values - sensor.zero_count))

    if log.force is not None and log.force_unit != ("N m" if unit == "rad" else "N"):
        raise LogError(
            "force",
            f"in {log.force_unit}",
            "",
            f"the loop file moves in {unit}",
            "compare with the loop file of the same axis",
        )
    if log.position_unit == "count":
        for value, name in ((sensor.low_count, "least"), (sensor.high_count, "largest")):
            at = np.flatnonzero(log.position == value)
            already = any(c.kind == "clipping" for c in complaints)
            if at.size >= 3 and not already:
                complaints.append(
                    LogComplaint(
                        kind="clipping",
                        line=int(log.lines[at[0]]),
                        text=f"position is at the converter's {name} count {value} in "
                        f"{at.size} samples; what lies beyond is lost",
                    )
                )
    position = scaled(log.position, log.position_unit)
    assert position is not None
    swing = float(np.ptp(position))
    travel = 2.0 * loop.mechanics.travel
    if math.isfinite(travel) and swing > 20.0 * travel:
        complaints.append(
            LogComplaint(
                kind="scale",
                line=0,
                text=f"position moves over {format_si(swing, unit)}, {swing / travel:.3g} times "
                f"the travel of {format_si(travel, unit)} in the loop file; a unit is wrong, "
                f"perhaps by a factor of 1000",
            )
        )
    elif 0.0 < swing < 1e-3 * sensor.step:
        complaints.append(
            LogComplaint(
                kind="scale",
                line=0,
                text=f"position moves over {format_si(swing, unit)}, far less than one count of "
                f"{format_si(sensor.step, unit)} in the loop file; a unit is wrong, perhaps by a "
                f"factor of 1000",
            )
        )
    ratio = log.rate_hz / loop.processor.sample_rate_hz
    if ratio > 30.0 or ratio < 1.0 / 300.0:
        complaints.append(
            LogComplaint(
                kind="scale",
                line=0,
                text=f"the log has {format_si(log.rate_hz, 'Hz')}, {ratio:.3g} times the sample "
                f"rate of {format_si(loop.processor.sample_rate_hz, 'Hz')} in the loop file; the "
                f"unit of time may be wrong",
            )
        )
    step = log.position_step
    if step is not None and log.position_unit == "count":
        step *= sensor.step
    return replace(
        log,
        position=position,
        position_unit=unit,
        reference=scaled(log.reference, log.reference_unit),
        reference_unit=unit if log.reference is not None else "",
        position_step=step,
        complaints=_ordered(complaints),
    )


# --------------------------------------------------------------------------------------------------
# Text to columns


@dataclass(frozen=True, slots=True, kw_only=True)
class _Header:
    """Where the header stands and what its cells say."""

    line: int
    separator: str
    cells: tuple[str, ...]
    columns: dict[str, int]
    factors: dict[str, float]
    units: dict[str, str]
    kinds: dict[str, str]


def _decoded(raw: bytes, source: str) -> str:
    if raw[:2] in (b"\xff\xfe", b"\xfe\xff"):
        return raw.decode("utf-16", "replace")
    if b"\0" in raw[:4096]:
        raise LogError(source, None, "", "is no text file", "save the log as CSV text")
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        # One byte per character: numbers read the same, and a micro sign is 0xb5.
        return raw.decode("latin-1")


def _log_of(text: str, source: str, rate_hz: float | None, loop: Loop | None) -> Log:
    if rate_hz is not None:
        _check_rate(rate_hz)
    if "\r" in text:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    complaints: list[LogComplaint] = []
    header, body = _header_of(text, source)
    separator = header.separator
    if '"' in body:
        rows = csv.reader(io.StringIO(body), delimiter=separator)
        body, separator = "\n".join("\t".join(row) for row in rows), "\t"
    if separator != "," and "," in body:
        body = body.replace(",", ".")
    values, lines, ordinal = _numbers(body, separator, header, source, complaints)
    for cell, at in zip(header.cells, range(len(header.cells)), strict=True):
        if at not in header.columns.values() and cell:
            complaints.append(
                LogComplaint(
                    kind="unused", line=header.line, text=f"column {cell[:60]!r} is not used"
                )
            )
    columns = {
        name: values[:, number] * header.factors[name] for number, name in enumerate(header.columns)
    }
    _check_samples(lines.size, source)
    if "time" in columns:
        if rate_hz is not None:
            complaints.append(
                LogComplaint(
                    kind="rate",
                    line=header.line,
                    text="the log has a time column; the rate that was given is not used",
                )
            )
        stamps = columns.pop("time")
        rate_hz, index, keep = _clock(stamps, header.factors["time"], lines, source, complaints)
        columns = {name: column[keep] for name, column in columns.items()}
        lines = lines[keep]
        _check_samples(lines.size, source)
    elif rate_hz is None:
        raise LogError(
            source,
            None,
            "",
            "has no time column, and no rate was given",
            'add a column "time [ms]", or give the rate as in --rate "10 kHz"',
        )
    else:
        index = ordinal - ordinal[0]
        _complain_gaps(np.diff(index), lines, complaints)
    log = _finished(source, rate_hz, index, lines, columns, header.units, complaints, header)
    return log if loop is None else in_units_of(log, loop)


def _header_of(text: str, source: str) -> tuple[_Header, str]:
    start = 0
    first = ""
    for number in range(1, MAX_PREAMBLE_LINES + 1):
        end = text.find("\n", start)
        line = text[start : end if end >= 0 else len(text)]
        first = first or line.strip()
        header = _header_in(line, number, source)
        if header is not None:
            return header, text[end + 1 :] if end >= 0 else ""
        if end < 0:
            break
        start = end + 1
    raise LogError(
        source,
        None,
        "",
        f"no header among its first lines, which start with {first[:60]!r}",
        "name the columns, as in time [ms],position [count],output [code]",
    )


def _header_in(line: str, number: int, source: str) -> _Header | None:
    """The header that a line is, or None; a header with a fault raises."""
    if "[" not in line:
        return None
    for separator in _SEPARATORS:
        cells = [cell.strip().strip('"').strip() for cell in line.lstrip("#%").split(separator)]
        while len(cells) > 1 and not cells[-1]:
            cells.pop()
        matches = [_CELL.fullmatch(cell) for cell in cells]
        known = [m for m in matches if m is not None and m[1].lower() in UNITS]
        # A sentence of the preamble may hold a bracket; a header holds little else.
        if not known or sum(m is None and bool(c) for m, c in zip(matches, cells, strict=True)) > 8:
            continue
        return _understood(cells, matches, separator, number, source)
    return None


def _understood(
    cells: Sequence[str],
    matches: Sequence[re.Match[str] | None],
    separator: str,
    number: int,
    source: str,
) -> _Header:
    columns: dict[str, int] = {}
    factors: dict[str, float] = {}
    units: dict[str, str] = {}
    kinds: dict[str, str] = {}
    place = f"{source} line {number}".strip()
    for at, (cell, match) in enumerate(zip(cells, matches, strict=True)):
        name = match[1].lower() if match is not None else cell.lower()
        if name not in UNITS:
            continue
        if match is None or not match[2].strip():
            raise LogError(
                f"{place} column {name}", None, "", "has no unit", f"write {_EXAMPLES[name]}"
            )
        if name in columns:
            raise LogError(
                f"{place} column {name}", None, "", "stands there twice", "rename one of the two"
            )
        kind, factor = _unit_of(name, match[2].strip(), place)
        columns[name], factors[name] = at, factor
        units[name], kinds[name] = _SI[kind], kind
    if "position" not in columns:
        raise LogError(
            place, None, "", "the header names no position", f"write {_EXAMPLES['position']}"
        )
    if "reference" in units and units["reference"] != units["position"]:
        # Compared nowhere as they are; a loop file can bring both to one unit.
        if "count" not in (units["reference"], units["position"]):
            raise LogError(
                place,
                None,
                "",
                "reference and position are of different kinds",
                "log both in one unit",
            )
    return _Header(
        line=number,
        separator=separator,
        cells=tuple(cells),
        columns=columns,
        factors=factors,
        units=units,
        kinds=kinds,
    )


def _unit_of(name: str, unit: str, place: str) -> tuple[str, float]:
    """Kind of a unit and its factor to SI."""
    for kind in UNITS[name]:
        if kind == "code":
            if unit in {"code", "codes"}:
                return kind, 1.0
            continue
        try:
            return kind, parse_quantity(f"1 {unit}", KINDS[kind], name=name)
        except QuantityError:
            continue
    raise LogError(
        f"{place} column {name}",
        f"[{unit}]",
        "",
        f"its unit is a {' or '.join(UNITS[name])}",
        f"write {_EXAMPLES[name]} or the like",
    )


def _numbers(
    body: str, separator: str, header: _Header, source: str, complaints: list[LogComplaint]
) -> tuple[Real, Whole, Whole]:
    """Values of the used columns in the order of `header.columns`, their lines, their numbers."""
    body = body.rstrip("\n \t")
    if not body:
        _check_samples(0, source)
    used = list(header.columns.values())
    count = body.count("\n") + 1
    fast = _fast(body, count, separator, header, used)
    if fast is not None:
        numbers = np.arange(1, count + 1, dtype=np.int64)
        return fast, header.line + numbers, numbers

    rows: list[Real] = []
    lines: list[Whole] = []
    ordinals: list[Whole] = []
    blank = 0
    unreadable: list[tuple[int, str]] = []
    texts = body.split("\n")
    for start in range(0, count, _CHUNK_LINES):
        part = texts[start : start + _CHUNK_LINES]
        fast = _fast("\n".join(part), len(part), separator, header, used)
        first = header.line + 1 + start
        if fast is not None:
            rows.append(fast)
            lines.append(np.arange(first, first + len(part), dtype=np.int64))
            ordinals.append(lines[-1] - blank)
            continue
        for offset, line in enumerate(part):
            cells = _careful(line, separator, header, used)
            if cells is not None:
                rows.append(np.array([cells]))
                lines.append(np.array([first + offset], dtype=np.int64))
                ordinals.append(lines[-1] - blank)
            elif line.strip(" \t" + separator):
                unreadable.append((first + offset, line))
            else:
                blank += 1
    good = sum(row.shape[0] for row in rows)
    if unreadable and good < len(unreadable):
        number, line = unreadable[0]
        found = len(line.split(separator))
        rule = f"most rows cannot be read; this one is {line[:60]!r}"
        remedy = "give every row the cells of the header, as plain numbers"
        if found > len(header.cells):
            rule += f", {found} cells where the header has {len(header.cells)}"
            if separator == ",":
                remedy = "with decimal commas, separate the cells by semicolons or tabs"
        raise LogError(f"{source} line {number}".strip(), None, "", rule, remedy)
    _complain_each(
        "unreadable",
        [
            (number, f"{line.strip()[:40]!r} is no row of numbers; left out")
            for number, line in unreadable
        ],
        "more rows could not be read and were left out",
        complaints,
    )
    if not rows:
        _check_samples(0, source)
    return np.concatenate(rows), np.concatenate(lines), np.concatenate(ordinals)


def _fast(
    body: str, count: int, separator: str, header: _Header, used: Sequence[int]
) -> Real | None:
    """All rows at once; None where a single one is doubtful."""
    trailing = len(header.cells) - 1
    seps = body.count(separator)
    if seps == count * trailing:
        cells = len(header.cells)
    elif seps == count * (trailing + 1) and _all_end(body, separator):
        cells = len(header.cells) + 1
    else:
        return None
    every = cells == len(used)
    try:
        values = np.loadtxt(
            io.StringIO(body),
            delimiter=separator,
            usecols=None if every else tuple(used),
            comments=None,
            ndmin=2,
        )
    except ValueError:
        return None
    if every:
        values = values[:, list(used)]
    if values.shape[0] != count or not np.isfinite(values).all():
        return None
    return np.asarray(values, dtype=np.float64)


def _all_end(body: str, separator: str) -> bool:
    return body.count(separator + "\n") + body.endswith(separator) == body.count("\n") + 1


def _careful(line: str, separator: str, header: _Header, used: Sequence[int]) -> list[float] | None:
    cells = line.split(separator)
    while len(cells) > len(header.cells) and not cells[-1].strip():
        cells.pop()
    if len(cells) != len(header.cells):
        return None
    texts = [cells[at].strip() for at in used]
    if not all(_NUMBER.fullmatch(text) for text in texts):
        return None
    numbers = [float(text) for text in texts]
    return numbers if all(map(math.isfinite, numbers)) else None


# --------------------------------------------------------------------------------------------------
# The clock


def _clock(
    stamps: Real, factor: float, lines: Whole, source: str, complaints: list[LogComplaint]
) -> tuple[float, Whole, Whole]:
    """Sample rate, sample numbers, and the rows that are kept."""
    stamps = _unwrapped_time(stamps, factor, lines, source, complaints)
    steps = np.diff(stamps)
    rising = steps[steps > 0.0]
    if rising.size == 0:
        raise LogError(source, None, "", "its time does not advance", "log the time of each sample")
    if float(np.mean(steps == 0.0)) > 0.2:
        return _coarse_clock(stamps, float(rising.min()), lines, source, complaints)

    typical = float(np.median(rising))
    keep = np.concatenate([[True], steps > 0.02 * typical])
    _complain_each(
        "duplicate",
        [
            (int(lines[row]), f"same time as line {int(lines[row - 1])}; left out")
            for row in np.flatnonzero(~keep)
        ],
        "more rows repeat the time before and were left out",
        complaints,
    )
    rows = np.flatnonzero(keep)
    stamps, lines = stamps[rows], lines[rows]
    steps = np.diff(stamps)
    jumps = _jumps(stamps, typical)
    index = np.concatenate([[0], np.cumsum(jumps)]).astype(np.int64)
    period, deviation = _line(index.astype(np.float64), stamps)
    _complain_gaps(jumps.astype(np.int64), lines, complaints)
    _complain_jitter(deviation, period, steps, jumps, lines, complaints)
    return 1.0 / period, index, rows


def _jumps(stamps: Real, typical: float) -> Real:
    """Sample numbers from row to row: 1, or more across a gap.

    A late stamp makes a long step, too, but leaves the stamps around it in place; a gap moves all
    that follow. So the stamps on both sides of a long step are carried to it and compared.
    """
    steps = np.diff(stamps)
    jumps = np.ones(steps.size)
    long = np.flatnonzero(steps >= 1.5 * typical)
    if long.size == 0:
        return jumps
    calm = steps[(steps < 1.5 * typical) & (steps > 0.5 * typical)]
    period = float(calm.mean()) if calm.size else typical
    edges = np.concatenate([[-1], long, [steps.size]])
    for number, row in enumerate(long, 1):
        before = np.arange(max(edges[number - 1] + 1, row - 5), row + 1)
        after = np.arange(row + 1, min(edges[number + 1], row + 6) + 1)
        left = float(np.mean(stamps[before] + (row - before) * period))
        right = float(np.mean(stamps[after] - (after - row - 1) * period))
        jumps[row] = max(1.0, round((right - left) / period))
    return jumps


def _unwrapped_time(
    stamps: Real, factor: float, lines: Whole, source: str, complaints: list[LogComplaint]
) -> Real:
    steps = np.diff(stamps)
    back = np.flatnonzero(steps < 0.0)
    if back.size == 0:
        return stamps
    ticks = steps / factor
    usual = float(np.median(ticks[ticks > 0.0])) if (ticks > 0.0).any() else 0.0
    for bits in (16, 24, 32):
        lost = 2.0**bits + ticks[back]
        if usual > 0.0 and bool(((lost > 0.0) & (lost < 50.0 * usual)).all()):
            turns = np.zeros(stamps.size)
            turns[back + 1] = 2.0**bits * factor
            _complain_each(
                "wrap",
                [
                    (int(lines[row + 1]), f"the time counter wraps at 2^{bits}; unwrapped")
                    for row in back
                ],
                "more wraps of the time counter; unwrapped",
                complaints,
            )
            return stamps + np.cumsum(turns)
    row = int(back[0])
    raise LogError(
        f"{source} line {int(lines[row + 1])}".strip(),
        None,
        "",
        f"time goes back from {stamps[row] / factor:.10g} to {stamps[row + 1] / factor:.10g}",
        "log each run into a file of its own, or cut the file there",
    )


def _coarse_clock(
    stamps: Real, resolution: float, lines: Whole, source: str, complaints: list[LogComplaint]
) -> tuple[float, Whole, Whole]:
    """Stamps coarser than the sampling: the count of rows is the better clock."""
    index = np.arange(stamps.size, dtype=np.int64)
    period, deviation = _line(index.astype(np.float64), stamps)
    if not period > 0.0:
        raise LogError(source, None, "", "its time does not advance", "log the time of each sample")
    text = (
        f"time stamps of {format_si(resolution, 's')} are coarser than the sampling; rows are "
        f"taken as evenly spaced at {format_si(1.0 / period, 'Hz', 5)}"
    )
    worst = int(np.argmax(np.abs(deviation)))
    if abs(deviation[worst]) > 1.5 * resolution:
        text += (
            f", though the stamps leave that by {format_si(abs(float(deviation[worst])), 's')}: "
            f"samples may be lost, and none of the rates below can be relied on"
        )
    complaints.append(LogComplaint(kind="coarse", line=int(lines[worst]), text=text))
    return 1.0 / period, index, np.arange(stamps.size, dtype=np.int64)


def _line(x: Real, y: Real) -> tuple[float, Real]:
    """Slope of the least-squares line and what is left of it."""
    mean_x, mean_y = float(x.mean()), float(y.mean())
    across, up = x - mean_x, y - mean_y
    slope = float(np.sum(across * up)) / float(np.sum(across * across))
    return slope, up - slope * across


def _complain_gaps(jumps: Whole, lines: Whole, complaints: list[LogComplaint]) -> None:
    gaps = np.flatnonzero(jumps > 1)
    _complain_each(
        "gap",
        [
            (
                int(lines[row + 1]),
                f"{int(jumps[row]) - 1} sample{'s' if jumps[row] > 2 else ''} missing before "
                f"this line; not filled in",
            )
            for row in gaps
        ],
        "more gaps",
        complaints,
        total=f"; {int((jumps[gaps] - 1).sum())} samples missing in all",
    )


def _complain_jitter(
    deviation: Real,
    period: float,
    steps: Real,
    jumps: Real,
    lines: Whole,
    complaints: list[LogComplaint],
) -> None:
    rms = float(np.sqrt(np.mean(deviation**2)))
    single = steps[jumps == 1.0]
    # Differences of large stamps carry rounding errors; a millionth of a period is far above.
    # Zero belongs to the grid: steps are whole multiples of the resolution of the clock.
    resolution = _grid(np.concatenate([[0.0], np.round(single / period, 6)]))
    rounding = 0.0 if resolution is None else resolution * period
    if rms > 0.02 * period and rms > 0.6 * rounding:
        worst = int(np.argmax(np.abs(deviation)))
        complaints.append(
            LogComplaint(
                kind="jitter",
                line=int(lines[worst]),
                text=f"time stamps leave an even grid by {format_si(rms, 's', 3)} rms, at most "
                f"{format_si(abs(float(deviation[worst])), 's', 3)} here; samples are taken as "
                f"evenly spaced",
            )
        )


# --------------------------------------------------------------------------------------------------
# Looking at the values


def _finished(
    source: str,
    rate_hz: float,
    index: Whole,
    lines: Whole,
    columns: dict[str, Real],
    units: dict[str, str],
    complaints: list[LogComplaint],
    header: _Header | None,
) -> Log:
    position = columns["position"]
    unit = units["position"]
    if unit == "count":
        position = _unwrapped_counts(position, lines, complaints)
    raw = position if header is None else position / header.factors["position"]
    step = _grid(raw)
    if step is not None and header is not None:
        step *= header.factors["position"]
    _complain_flats(position, step, lines, complaints)
    return Log(
        source=source,
        rate_hz=rate_hz,
        index=_frozen(index),
        lines=_frozen(lines),
        position=_frozen(position),
        position_unit=unit,
        reference=_frozen(columns["reference"]) if "reference" in columns else None,
        reference_unit=units["reference"] if "reference" in columns else "",
        output_code=_frozen(columns["output"]) if "output" in columns else None,
        current_a=_frozen(columns["current"]) if "current" in columns else None,
        force=_frozen(columns["force"]) if "force" in columns else None,
        force_unit=units["force"] if "force" in columns else "",
        position_step=step,
        complaints=_ordered(complaints),
    )


def _frozen(values: NDArray[_Kind]) -> NDArray[_Kind]:
    values = np.ascontiguousarray(values)
    values.setflags(write=False)
    return values


def _grid(values: Real) -> float | None:
    """Least step of values that lie on a grid; None where they do not."""
    thinned = values[:: values.size // 100_000 + 1]
    levels = np.unique(thinned)
    if levels.size < 2:
        return None
    gaps = np.diff(levels)
    scale = float(np.max(np.abs(levels)))
    # Decimal fractions are not exact in binary; gaps of a few rounding errors are none.
    gaps = gaps[gaps > 64.0 * np.finfo(np.float64).eps * scale]
    if gaps.size == 0:
        return None
    step = float(gaps.min())
    multiples = gaps / step
    slack = 1e-3 + 16.0 * np.finfo(np.float64).eps * scale / step
    if slack > 0.1 or float(np.max(np.abs(multiples - np.rint(multiples)))) > slack:
        return None
    # The mean over the longest way is freer of rounding than the least gap.
    span = float(levels[-1] - levels[0])
    return span / max(1.0, float(np.rint(span / step)))


def _unwrapped_counts(position: Real, lines: Whole, complaints: list[LogComplaint]) -> Real:
    """Undo the wraps of a binary counter, where the jumps leave no other reading."""
    if not bool((position == np.rint(position)).all()):
        return position
    low, high = float(position.min()), float(position.max())
    steps = np.diff(position)
    largest = float(np.max(np.abs(steps)))
    for bits in _COUNTER_BITS:
        turn = 2.0**bits
        if high - low >= turn or largest <= 0.75 * turn:
            continue
        jumps = np.where(np.abs(steps) > 0.5 * turn, -np.sign(steps) * turn, 0.0)
        # A counter that wraps moves by little from sample to sample, wraps aside.
        if float(np.max(np.abs(steps + jumps))) > 0.125 * turn:
            continue
        rows = np.flatnonzero(jumps)
        _complain_each(
            "wrap",
            [
                (int(lines[row + 1]), f"the position counter wraps at 2^{bits}; unwrapped")
                for row in rows
            ],
            "more wraps of the position counter; unwrapped",
            complaints,
        )
        return np.asarray(position + np.concatenate([[0.0], np.cumsum(jumps)]))
    return position


def _complain_flats(
    position: Real, step: float | None, lines: Whole, complaints: list[LogComplaint]
) -> None:
    """Find values that stand still in the midst of motion: at the rails, or stuck.

    A smooth motion that turns within one step of the sensor enters and leaves that step by less
    than two steps per sample if it stays for three samples or more; what comes in and goes out
    faster did not turn there.
    """
    n = position.size
    changes = np.flatnonzero(position[1:] != position[:-1]) + 1
    if changes.size < 2:
        return
    starts, ends = changes[:-1], changes[1:]
    long = np.flatnonzero(ends - starts >= 3)
    if long.size == 0:
        return
    starts, ends = starts[long], ends[long]
    entry = np.abs(position[starts] - position[starts - 1])
    leave = np.abs(position[np.minimum(ends, n - 1)] - position[ends - 1])
    third = np.diff(position, 3)
    noise = 1.4826 * float(np.median(np.abs(third))) / math.sqrt(20.0) if third.size else 0.0
    floor = max(2.5 * (step or 0.0), 6.0 * noise, 1e-12 * float(np.ptp(position)))
    odd = (entry > floor) & (leave > floor)
    values = position[starts]
    at_rail = (values == position.max()) | (values == position.min())
    clipped = np.flatnonzero(odd & at_rail)
    stuck = np.flatnonzero(odd & ~at_rail & (ends - starts >= 4))
    _complain_each(
        "clipping",
        [
            (
                int(lines[starts[i]]),
                f"position is cut off at {values[i]:.6g} for {int(ends[i] - starts[i])} samples",
            )
            for i in clipped
        ],
        "more places where the position is cut off",
        complaints,
    )
    _complain_each(
        "stuck",
        [
            (
                int(lines[starts[i]]),
                f"position stands at {values[i]:.6g} for {int(ends[i] - starts[i])} samples in "
                f"the midst of motion",
            )
            for i in stuck
        ],
        "more places where the position is stuck",
        complaints,
    )


def _complain_each(
    kind: str,
    found: Iterable[tuple[int, str]],
    rest: str,
    complaints: list[LogComplaint],
    total: str = "",
) -> None:
    """List the first few, count the others."""
    found = list(found)
    for line, text in found[:LISTED_PER_KIND]:
        complaints.append(LogComplaint(kind=kind, line=line, text=text))
    more = len(found) - LISTED_PER_KIND
    if more > 0:
        line = found[LISTED_PER_KIND][0]
        complaints.append(
            LogComplaint(kind=kind, line=line, text=f"from here on {more} {rest}{total}")
        )


def _ordered(complaints: Iterable[LogComplaint]) -> tuple[LogComplaint, ...]:
    return tuple(sorted(complaints, key=lambda complaint: complaint.line))


def _check_samples(count: int, source: str) -> None:
    if count < LEAST_SAMPLES:
        raise LogError(
            source or "log",
            float(count),
            "rows",
            f"at least {LEAST_SAMPLES} rows of numbers are needed",
            "log for longer",
        )


def _check_rate(rate_hz: float) -> None:
    if not (math.isfinite(rate_hz) and rate_hz > 0.0):
        raise LogError(
            "rate", rate_hz, "Hz", "must be finite and above 0", 'give it as in --rate "10 kHz"'
        )
