"""The error tree: what people read, and that errors survive the way between processes."""

from __future__ import annotations

import pickle

import pytest

from plant2.errors import (
    Complaint,
    DesignError,
    LoopFileError,
    OutOfRangeError,
    Plant2Error,
    QuantityError,
    ToolMissingError,
)

STEP = Complaint(table="check", key="step", allowed="this key is missing", remedy='step = "1 um"')
MASS = Complaint(
    table="plant",
    key="mas",
    came='"48 g"',
    allowed="there is no such key; the nearest is mass",
    remedy='mass = "48 g"',
    nearest="mass",
)
FACTS = ("rate", 0.5, "Hz", "must be at least 1", "give the sample rate")

ERRORS = [
    Plant2Error(*FACTS),
    OutOfRangeError(*FACTS),
    DesignError(*FACTS),
    ToolMissingError("gcc", "compiles the emitted files", "install it, or leave out the host"),
    QuantityError("mass", '"48"', "a mass needs its unit", "48 g"),
    LoopFileError((STEP,), "loop.toml"),
    LoopFileError((STEP, MASS)),
]


@pytest.mark.parametrize("error", ERRORS, ids=lambda error: type(error).__name__)
def test_pickling_keeps_type_text_and_facts(error: Plant2Error) -> None:
    for protocol in range(2, pickle.HIGHEST_PROTOCOL + 1):
        copy = pickle.loads(pickle.dumps(error, protocol))
        assert type(copy) is type(error)
        assert str(copy) == str(error)
        assert vars(copy) == vars(error)


@pytest.mark.parametrize("error", ERRORS, ids=lambda error: type(error).__name__)
def test_text_is_lower_case_without_full_stop(error: Plant2Error) -> None:
    text = str(error)
    assert text[0].islower() or text[0].isdigit()
    assert text[-1] not in ".!"
    assert error.rule in text and error.remedy in text


def test_value_is_shown_with_six_digits_and_unit() -> None:
    error = OutOfRangeError("omega", 1.23456789, "rad/s", "must be 0", "leave it out")
    assert str(error) == "omega = 1.23457 rad/s: must be 0; leave it out"


def test_parts_that_are_absent_leave_no_gaps() -> None:
    assert str(Plant2Error("", None, "", "nothing to do", "")) == "nothing to do"
    assert str(Plant2Error("n", 3.0, "", "is odd", "")) == "n = 3: is odd"
    assert str(Plant2Error("n", None, "Hz", "is odd", "wait")) == "n: is odd; wait"


def test_branches_that_callers_catch() -> None:
    assert issubclass(OutOfRangeError, ValueError)
    assert issubclass(QuantityError, ValueError)
    for error in ERRORS:
        assert isinstance(error, Plant2Error)


def test_one_complaint_is_one_line() -> None:
    error = LoopFileError((STEP,), "loop.toml")
    assert str(error) == 'loop.toml: [check] step: this key is missing; write step = "1 um"'
    assert (error.name, error.rule) == ("check.step", "this key is missing")


def test_several_complaints_are_a_short_list() -> None:
    assert str(LoopFileError((STEP, MASS), "loop.toml")).splitlines() == [
        "loop.toml: 2 complaints",
        '  [check] step: this key is missing; write step = "1 um"',
        '  [plant] mas = "48 g": there is no such key; the nearest is mass; write mass = "48 g"',
    ]


def test_complaint_about_a_whole_table_or_file() -> None:
    assert str(Complaint(allowed="there is no such file")) == "there is no such file"
    table = Complaint(table="senzor", allowed="no such table", remedy="[sensor]")
    assert str(table) == "[senzor]: no such table; write [sensor]"
    assert table.rule == table.allowed
