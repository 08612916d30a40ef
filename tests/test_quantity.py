"""Quantities as text: every way to write one wrongly, and exactness of those written right."""

from __future__ import annotations

import math
import os
import subprocess
import sys
import time
from fractions import Fraction
from pathlib import Path

import mpmath
import pint
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from plant2 import quantity
from plant2.errors import QuantityError
from plant2.quantity import KINDS, format_si, parse_quantity, quoted, suggestion_for


def refusal(text: object, kind: str) -> QuantityError:
    with pytest.raises(QuantityError) as caught:
        parse_quantity(text, KINDS[kind], name="x")
    return caught.value


# ----------------------------------------------------------------------------------------- refused

TRAPS = [
    # what came, kind, what to write instead, a word of the rule
    ("1,5 mm", "length", "1.5 mm", "comma"),
    ("1.234,5 mm", "length", None, "comma"),
    ("nan m", "length", None, "finite"),
    ("inf m", "length", None, "finite"),
    ("-Infinity m", "length", None, "finite"),
    ("9**9**9 m", "length", None, "letters"),
    ("1e400 m", "length", None, "between"),
    ("-1e400 m", "length", None, "between"),
    ("1e-400 m", "length", None, "between"),
    ("1e99999999999 m", "length", None, "letters"),
    ("5 " + "m*" * 30 + "m", "length", "5 mm", "40 characters"),
    ("5" * 50 + " m", "length", None, "40 characters"),
    ("5", "length", "5 mm", "unit is missing"),
    (5, "length", "5 mm", "text"),
    (0.25, "length", "0.25 mm", "text"),
    (float("nan"), "length", None, "text"),
    (10**5000, "length", None, "text"),
    (True, "length", None, "text"),
    (None, "length", None, "text"),
    (["5 mm"], "length", None, "text"),
    ({"value": 5}, "length", None, "text"),
    ("", "length", None, "number unit"),
    ("mm", "length", None, "number unit"),
    ("m 5", "length", None, "number unit"),
    ("5 mm mm", "length", "5 mm", "without spaces"),
    ("1 m m", "length", "1 m", "without spaces"),
    ("5 mm\n", "length", "5 mm", "number unit"),
    (" 5 mm", "length", "5 mm", "number unit"),
    ("5mm", "length", "5 mm", "space between"),
    ("5\tmm", "length", "5 mm", "number unit"),
    ("5 mm; import os", "length", None, "number unit"),
    ("0x10 m", "length", None, "number unit"),
    ("1_000 m", "length", None, "number unit"),
    (".5 mm", "length", "0.5 mm", "both sides"),
    ("5. mm", "length", "5 mm", "both sides"),
    ("--5 mm", "length", None, "number unit"),
    ("\u0665 m", "length", None, "number unit"),  # an Arabic digit
    ("\uff15 mm", "length", "5 mm", "number unit"),  # a full-width digit
    ("\u22125 mm", "length", "-5 mm", "number unit"),  # a minus sign that is no hyphen
    ("5 kg", "length", "1.5 mm", "not in kg"),
    ("5 ms", "length", "1.5 mm", "not in ms"),
    ("5 Mm", "length", "5 mm", "plausible"),
    ("48 Mg", "mass", "48 mg", "plausible"),
    ("5 KG", "mass", "5 kg", "KG is no unit"),
    ("10 S", "time", "10 s", "S is no unit"),
    ("5 kkm", "length", "5 mm", "kkm is no unit"),
    ("5 mum", "length", "5 mm", "mum is no unit"),
    ("5 foo", "length", "5 mm", "foo is no unit"),
    ("20 khz", "frequency", "20 kHz", "not khz"),
    ("20 KHz", "frequency", "20 kHz", "not KHz"),
    ("20 mhz", "frequency", "20 MHz", "not mhz"),
    ("20 s", "frequency", "150 Hz", "not s"),
    ("20 deg/s", "frequency", "150 Hz", "not deg/s"),
    ("60 Hz", "angle", "2.5 deg", "Hz is no unit"),
    ("2 mm", "angle", "2.5 deg", "not in mm"),
    ("2 deg", "length", "1.5 mm", "not in deg"),
    ("5 N*m", "rotary_stiffness", "12 mN*m/rad", "not in N*m"),
    ("5 N/m", "rotary_stiffness", "12 mN*m/rad", "not in N/m"),
    ("5 N*m/rad", "stiffness", "1.8 N/mm", "not in N*m/rad"),
    ("5 N*m*s", "rotary_damping", "2 uN*m*s/rad", "not in N*m*s"),
    ("12 mNm/rad", "rotary_stiffness", "12 mN*m/rad", "mNm is no unit"),
    ("5 N/(m/s)", "damping", "5 N/m*s", "parentheses"),
    ("5 N/(m*s)", "ki_force", "5 N/m/s", "parentheses"),
    ("5 N s/m", "damping", "5 N*s/m", "without spaces"),
    ("5 N * s / m", "damping", "5 N*s/m", "without spaces"),
    ("5 Ns/m", "damping", "5 N*s/m", "Ns is no unit"),
    ("5 N\u00b7s/m", "damping", "5 N*s/m", "letters"),
    ("0.6 g*cm^2", "inertia", "0.6 g*cm**2", "powers"),
    ("0.6 g*cm\u00b2", "inertia", "0.6 g*cm**2", "letters"),
    ("0.6 g*cm**22", "inertia", None, "letters"),
    ("45\u00b0", "phase", "45 deg", "letters"),
    ("2%", "ratio", "2 %", "space between"),
    ("0.02", "ratio", "0.02 %", "unit is missing"),
    ("6 db", "gain_db", "6 dB", "not db"),
    ("3 pieces", "count", "3 count", "not pieces"),
    ("5 N**9", "force", "0.3 N", "not in N**9"),
]


@pytest.mark.parametrize(("text", "kind", "instead", "word"), TRAPS, ids=range(len(TRAPS)))
def test_wrong_text_is_refused_with_the_text_to_write(
    text: object, kind: str, instead: str | None, word: str
) -> None:
    error = refusal(text, kind)
    assert word in error.rule
    if instead is not None:
        assert error.suggestion == instead
    assert math.isfinite(parse_quantity(error.suggestion, KINDS[kind]))
    assert str(error).endswith(f'write x = "{error.suggestion}"')


HOSTILE = ["9" * 10**6 + " m", "1e" + "9" * 10**6 + " m", "5 " + "m" * 10**6, "5 " + "m" * 39]
HOSTILE += ["(" * 10**5, "5 m" + "**9" * 10**5, "5 " + "mA" * 19, "1" + " " * 10**6 + "x"]


@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_hostile_text_does_not_run_away(text: str) -> None:
    parse_quantity("1 m", KINDS["length"])  # pint is loaded before the clock runs
    start = time.process_time()
    error = refusal(text, "length")
    # a pattern that runs away takes minutes; this is no measure of speed
    assert time.process_time() - start < 10.0
    assert len(str(error)) < 400


@given(st.text(max_size=60), st.sampled_from(sorted(KINDS)))
@example("5 mmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmmm", "length")
@example("1 \x00", "length")
def test_any_text_gives_a_finite_number_or_a_suggestion_that_passes(text: str, kind: str) -> None:
    try:
        value = parse_quantity(text, KINDS[kind])
    except QuantityError as error:
        value = parse_quantity(error.suggestion, KINDS[kind])
        assert str(error).isprintable()
    assert math.isfinite(value)


@given(
    st.from_regex(
        r"[+-]?[0-9]{1,3}([.,][0-9]{1,3})?(e-?[0-9])? ?[A-Za-z*/ ^()0-9]{0,12}", fullmatch=True
    ),
    st.sampled_from(sorted(KINDS)),
)
def test_near_misses_give_suggestions_that_pass(text: str, kind: str) -> None:
    assert math.isfinite(parse_quantity(suggestion_for(text, KINDS[kind]), KINDS[kind]))


def test_every_kind_has_an_example_that_passes_and_a_unit_of_its_own() -> None:
    for kind in KINDS.values():
        assert parse_quantity(kind.example, kind) > 0.0
        one = parse_quantity(f"1 {kind.unit}", kind)
        assert one == (0.01 if kind.unit == "%" else 1.0)


# ----------------------------------------------------------------------------------------- accepted


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("48 g", "mass", 0.048),
        ("2.4 N/mm", "stiffness", 2400.0),
        ("20 N/um", "stiffness", 2e7),
        ("18 us", "time", 18e-6),
        ("18 \u00b5s", "time", 18e-6),
        ("18 \u03bcs", "time", 18e-6),
        ("+1.5e-3 m", "length", 0.0015),
        ("-2 um", "length", -2e-6),
        ("1E3 mm", "length", 1.0),
        ("5  mm", "length", 0.005),
        ("0 m", "length", 0.0),
        ("0e9999 m", "length", 0.0),
        ("0.6 g*cm**2", "inertia", 0.6e-7),
        ("2 kg*m**2", "inertia", 2.0),
        ("12 mN*m/rad", "rotary_stiffness", 0.012),
        ("9 mN*m/A", "torque_constant", 0.009),
        ("7 V*s/m", "back_emf", 7.0),
        ("7 V/m*s", "back_emf", 7.0),
        ("90 N/mm/s", "ki_force", 90000.0),
        ("4.7 kohm", "resistance", 4700.0),
        ("4.7 \u2126", "resistance", 4.7),
        ("4.7 \u03a9", "resistance", 4.7),
        ("3 %", "ratio", 0.03),
        ("20 dB", "gain_db", 20.0),
        ("45 deg", "phase", 45.0),
        ("45 degrees", "phase", 45.0),
        ("2 count", "count", 2.0),
        ("1.5 counts", "count", 1.5),
        ("20 kHz", "frequency", 20000.0),
        ("64 MHz", "frequency", 64e6),
        ("3000 rpm", "frequency", 50.0),
    ],
)
def test_right_text_is_the_nearest_double(text: str, kind: str, value: float) -> None:
    assert parse_quantity(text, KINDS[kind]) == value


def test_angular_frequency_is_divided_by_two_pi() -> None:
    with mpmath.workdps(40):
        exact = 1131 / (2 * mpmath.pi)
        assert parse_quantity("1131 rad/s", KINDS["frequency"]) == float(exact)


@pytest.mark.parametrize(("unit", "share"), [("deg", 180), ("arcmin", 10800), ("arcsec", 648000)])
def test_parts_of_a_turn(unit: str, share: int) -> None:
    with mpmath.workdps(40):
        assert parse_quantity(f"2.5 {unit}", KINDS["angle"]) == float(
            mpmath.mpf("2.5") * mpmath.pi / share
        )
        assert parse_quantity(f"3 N*m/{unit}", KINDS["rotary_stiffness"]) == float(
            3 * share / mpmath.pi
        )


@given(
    st.decimals(min_value="0.001", max_value="999", places=3).map(str),
    st.sampled_from([("m", 0), ("mm", -3), ("um", -6), ("nm", -9), ("cm", -2)]),
)
def test_prefixes_shift_the_decimal_point_and_round_once(
    number: str, unit: tuple[str, int]
) -> None:
    # Python's own reading of decimal text is correctly rounded.
    assert parse_quantity(f"{number} {unit[0]}", KINDS["length"]) == float(f"{number}e{unit[1]}")


def test_factors_agree_with_the_full_list_of_pint() -> None:
    full = pint.UnitRegistry(cache_folder=None)
    checked = 0
    for atom in sorted(quantity._atoms()):
        for kind in KINDS.values():
            factor = quantity._factor(atom, kind.unit)
            if factor is None or kind.unit in quantity._OWN_FACTORS:
                continue
            expected = full.Quantity(1.0, atom).to(full.Unit(kind.unit)).magnitude
            assert float(factor) == pytest.approx(expected, rel=1e-14), (atom, kind.unit)
            checked += 1
    assert checked > 80


def test_pint_is_loaded_without_scipy_and_scipy_stays_within_reach(tmp_path: Path) -> None:
    code = (
        "import sys\nfrom plant2.quantity import KINDS, parse_quantity\n"
        "parse_quantity('5 mm', KINDS['length'])\n"
        "assert 'pint' in sys.modules and 'scipy' not in sys.modules\n"
        "import scipy\nprint(scipy.__name__)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        env=dict(os.environ, PYTHONPATH=str(Path(__file__).parents[1])),
        cwd=tmp_path,
        check=False,
    )
    assert (done.stdout, done.returncode) == ("scipy\n", 0), done.stderr


def test_radian_is_a_dimension() -> None:
    assert quantity._factor("N*m", "N*m/rad") is None
    assert quantity._factor("rad*m", "m") is None
    assert quantity._factor("N*m*s/deg", "N*m*s/rad") == Fraction(180) / quantity._PI


def test_disk_is_left_alone(tmp_path: Path) -> None:
    home = tmp_path / "home"
    home.mkdir()
    home.chmod(0o500)
    code = (
        "from plant2.quantity import KINDS, parse_quantity\n"
        "print(parse_quantity('2.4 N/mm', KINDS['stiffness']))"
    )
    surroundings = dict(os.environ, HOME=str(home), XDG_CACHE_HOME=str(home / "cache"))
    surroundings |= {"PYTHONDONTWRITEBYTECODE": "1", "PYTHONPATH": str(Path(__file__).parents[1])}
    done = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        env=surroundings,
        cwd=tmp_path,
        check=False,
    )
    assert (done.stdout, done.stderr, done.returncode) == ("2400.0\n", "", 0)
    assert [path.name for path in tmp_path.rglob("*")] == ["home"]


# --------------------------------------------------------------------------------- number to text


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [
        (1.2e-4, "m", "120 um"),
        (-1.2e-4, "m", "-120 um"),
        (0.00099999, "m", "1 mm"),
        (999.96, "N/m", "1 kN/m"),
        (999.94, "N/m", "999.9 N/m"),
        (2400.0, "N/m", "2.4 kN/m"),
        (0.9, "N s/m", "900 mN s/m"),
        (0.048, "kg", "48 g"),
        (1.5, "kg", "1.5 kg"),
        (52000.0, "kg", "5.2e+04 kg"),
        (6e-8, "kg m^2", "6e-08 kg m^2"),
        (6e-8, "kg*m**2", "6e-08 kg*m**2"),
        (1e-5, "m^2", "1e-05 m^2"),
        (1200.0, "s", "1200 s"),
        (2e-13, "m", "0.0002 nm"),
        (0.0, "m", "0 m"),
        (20000.0, "Hz", "20 kHz"),
        (6.4e7, "Hz", "64 MHz"),
        (3.2e9, "Hz", "3.2 GHz"),
        (45.0, "deg", "45 deg"),
        (1500.0, "count", "1500 count"),
        (0.5, "", "0.5"),
        (math.inf, "m", "inf m"),
        (math.nan, "m", "nan m"),
    ],
)
def test_engineering_text(value: float, unit: str, text: str) -> None:
    assert format_si(value, unit) == text
    assert text.isascii()


@given(st.floats(min_value=1e-9, max_value=1e3))
def test_engineering_text_can_be_read_back(value: float) -> None:
    text = format_si(value, "m", digits=17)
    if "e" not in text:
        assert parse_quantity(text, KINDS["length"]) == pytest.approx(value, rel=1e-15)
    number = float(format_si(value, "m").split(" ")[0])
    assert 1.0 <= number < 1000.0


def test_quoted_values_are_short_and_printable() -> None:
    assert quoted("a\nb\x1b[31m") == '"a\\nb\\x1b[31m"'
    assert quoted("\ud800") == '"\\ud800"'
    assert len(quoted("x" * 10**6)) < 70
    assert quoted([1]) == "a list" and quoted({}) == "a table"
    assert quoted(10**5000) == "a very large number"
    assert quoted(1.5) == "1.5" and quoted(False) == "false"
