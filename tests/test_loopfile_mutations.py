"""Broken loop files: whatever is done to one, the outcome is a loop or a list of complaints."""

from __future__ import annotations

import math
import re
import tempfile
from dataclasses import fields, is_dataclass
from pathlib import Path

from hypothesis import given, settings
from hypothesis import strategies as st
from test_loopfile import FULL, PLAIN, ROTARY

from plant2 import loopfile
from plant2.errors import LoopFileError
from plant2.loopfile import Loop, load_loop, loop_from_text

VALUES = [
    *("5", "-3", "0", "0.25", "1e308", "-1e-308", "nan", "-inf", "true", "07:32:00", "1979-05-27"),
    *("[]", "{}", "[1, 2]", '["5 mm"]', '{a = "5 mm"}', "0xffffffffffff", "9" * 4000),
    "0x" + "f" * 6000,
    *('""', '"x"', '"5"', '"5 mm"', '"-5 mm"', '"0 m"', '"5 Mm"', '"1e308 m"', '"1e-300 m"'),
    *('"1,5 mm"', '"nan m"', '"1e400 m"', '"9**9**9 m"', '"5 kg"', '"5 N*m/rad"', '"3 kHz"'),
    *('"2 %"', '"500 %"', '"-2 %"', '"20 dB"', '"3 count"', '"fastest"', '"auto"', '"rotary"'),
    *('"voltage"', '"unsigned"', '"lead"', '"pid"', '"host"', '"1 ohm"', '"5 V"', '"5 A"'),
    *('"\\u0000"', '"\\n"', '"' + "m" * 500 + '"', "'''a\nb'''", '"5 N/(m*s)"', '"1e-12 kg"'),
    *(
        '"10000 kg"',
        '"1e12 N/m"',
        '"1e10 Hz"',
        '"1e-9 Hz"',
        '"1e4 s"',
        '"1e-15 s"',
        "32",
        "2",
        "16",
    ),
]

KEYS = sorted(set(re.findall(r"(?m)^([a-z_]+) = ", FULL + ROTARY)))
KEYS += ["mas", "Mass", "zero", "kp", "kd", "ki", "resolution", "constructor", '"a b"', '"\\u0000"']
HEADS = sorted(set(re.findall(r"(?m)^\[+[a-z.]+\]+", FULL)))
HEADS += ["[plnt]", "[plant.mod]", "[plant.mode.x]", "[]", "[[loop]]", "[plant.mode]", "[limits.x]"]
LINES = [line for text in (FULL, ROTARY) for line in text.splitlines() if line]


@st.composite
def broken_texts(draw: st.DrawFn) -> str:
    """A loop file after one to six slips of any kind."""
    lines = draw(st.sampled_from([FULL, ROTARY, PLAIN])).splitlines()
    for _ in range(draw(st.integers(1, 6))):
        at = draw(st.integers(0, len(lines) - 1))
        slip = draw(st.integers(0, 9))
        key, equals, value = lines[at].partition(" = ")
        if slip == 0:
            del lines[at]
            lines = lines or [""]
        elif slip == 1 and equals:
            lines[at] = f"{draw(st.sampled_from(KEYS))} = {value}"
        elif slip in (2, 3, 4) and equals:
            lines[at] = f"{key} = {draw(st.sampled_from(VALUES))}"
        elif slip == 5:
            lines.insert(at, draw(st.sampled_from(LINES)))
        elif slip == 6:
            lines.insert(at, draw(st.sampled_from(HEADS)))
        elif slip == 7:
            other = draw(st.integers(0, len(lines) - 1))
            lines[at], lines[other] = lines[other], lines[at]
        elif slip == 8:
            where = draw(st.integers(0, len(lines[at])))
            lines[at] = lines[at][:where] + draw(st.characters()) + lines[at][where:]
        elif slip == 9:
            lines[at] = lines[at][: draw(st.integers(0, len(lines[at])))]
    return "\n".join(lines)


@st.composite
def override_texts(draw: st.DrawFn) -> str:
    """TABLE.KEY=VALUE, well or badly formed."""
    parts = [
        *KEYS[:40],
        "plant",
        "aim",
        "loop",
        "limits",
        "tolerance",
        "mode",
        "notch",
        "0",
        "7",
        "",
    ]
    loose = st.lists(st.sampled_from(parts), max_size=4).map(".".join)
    path = draw(loose | st.sampled_from(loopfile._known_paths()))
    return path + draw(st.sampled_from(["=", " = ", ""])) + draw(st.sampled_from(VALUES))


def check_outcome(outcome: Loop | LoopFileError) -> None:
    """A loop of finite numbers, or complaints that say something, on printable lines."""
    if isinstance(outcome, Loop):
        check_finite(outcome)
        assert outcome.actuator.limit_code >= 1
        assert outcome.actuator.low_code <= outcome.actuator.zero_code <= outcome.actuator.high_code
        assert outcome.sensor.step <= outcome.step <= outcome.mechanics.travel
        return
    assert outcome.complaints
    for complaint in outcome.complaints:
        assert complaint.rule
        line = str(complaint)
        assert line.isprintable(), ascii(line)
        assert len(line) < 500 and line[-1] not in ".!", line


def check_finite(record: object) -> None:
    for field in fields(record):  # type: ignore[arg-type]
        value = getattr(record, field.name)
        for item in value if isinstance(value, tuple) else (value,):
            if is_dataclass(item):
                check_finite(item)
            elif isinstance(item, float):
                assert math.isfinite(item), field.name


def read(text: str, overrides: tuple[str, ...] = ()) -> Loop | LoopFileError:
    try:
        return loop_from_text(text, overrides)
    except LoopFileError as error:
        return error


# The same examples everywhere: a list of slips that is kept, not a search for new ones.
MANY = settings(derandomize=True, max_examples=200, deadline=None)


@MANY
@given(broken_texts())
def test_broken_text_is_a_loop_or_complaints(text: str) -> None:
    check_outcome(read(text))


@MANY
@given(st.sampled_from([FULL, ROTARY]), st.lists(override_texts(), min_size=1, max_size=4))
def test_broken_overrides_are_a_loop_or_complaints(text: str, overrides: list[str]) -> None:
    check_outcome(read(text, tuple(overrides)))


@MANY
@given(st.lists(st.sampled_from(KEYS), max_size=12), st.data())
def test_values_of_any_kind_at_any_key(keys: list[str], data: st.DataObject) -> None:
    """Overrides at keys that exist: nothing but the values is wrong."""
    sets = []
    for line in FULL.splitlines():
        if line.startswith("["):
            table = line.strip("[]")
        key = line.partition(" = ")[0]
        if key in keys:
            place = f"{table}.0" if table in {"plant.mode", "aim.notch"} else table
            sets.append(f"{place}.{key}={data.draw(st.sampled_from(VALUES))}")
    outcome = read(FULL, tuple(sets))
    check_outcome(outcome)
    if isinstance(outcome, LoopFileError):
        assert not {item.allowed for item in outcome.complaints if item.key.startswith("--set")}


@MANY
@given(st.binary(max_size=200), st.integers(0, len(FULL) - 1))
def test_bytes_in_a_file_are_a_loop_or_complaints(junk: bytes, at: int) -> None:
    raw = FULL.encode()
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "loop.toml"
        for content in (junk, raw[:at] + junk + raw[at:]):
            path.write_bytes(content)
            try:
                outcome: Loop | LoopFileError = load_loop(path)
            except LoopFileError as error:
                outcome = error
            check_outcome(outcome)
