"""Physical quantities as text, "2.4 N/mm", to SI numbers, and back for reports.

Rules of this file:

- The pattern comes first: a sign, digits, a space, a unit of letters, ``*``, ``/``, ``**`` and
  small integers. Only what passes it reaches pint, and pint only converts.
- Frequencies, decibels, percent and counts have factors of our own. The radian is a dimension: a
  stiffness of "5 N*m" is not one of "5 N*m/rad".
- Conversion is exact and rounded once, so "18 us" is the double nearest to 18e-6.
- Plausible ranges are wide; they catch a slip of case (Mm for mm) and keep absurd numbers out of
  the arithmetic that follows.
- Nothing is read from or written to disk.
"""

from __future__ import annotations

import functools
import math
import re
import sys
import unicodedata
from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction
from types import ModuleType
from typing import Any, cast

from plant2.errors import QuantityError

MAX_UNIT_CHARACTERS = 40
"""Longest unit text that is looked at."""

MAX_NUMBER_CHARACTERS = 40
"""Longest number text that is looked at."""

# Digits from memory; far more of them than a double holds.
_PI = Fraction("3.14159265358979323846264338327950288419716939937510")

_PREFIX_NAMES = {
    "G": "giga- = 1e9 = G-",
    "M": "mega- = 1e6 = M-",
    "k": "kilo- = 1e3 = k-",
    "c": "centi- = 1e-2 = c-",
    "m": "milli- = 1e-3 = m-",
    "u": "micro- = 1e-6 = u-",
    "n": "nano- = 1e-9 = n-",
    "p": "pico- = 1e-12 = p-",
}

_PREFIXED_UNITS = {
    "m": "metre = [length] = m",
    "g": "gram = [mass] = g",
    "s": "second = [time] = s",
    "A": "ampere = [current] = A",
    "rad": "radian = [angle] = rad = radians",
    "N": "newton = kilogram * metre / second ** 2 = N",
    "V": "volt = newton * metre / second / ampere = V",
    "ohm": "ohm = volt / ampere",
    "H": "henry = volt * second / ampere = H",
}

_UNPREFIXED_UNITS = {
    "deg": f"degree = {(_PI / 180).numerator} / {(_PI / 180).denominator} * radian = deg",
    "arcmin": "arcmin = degree / 60",
    "arcsec": "arcsec = degree / 3600",
    "inch": "inch = 0.0254 * metre",
    "lb": "pound = 0.45359237 * kilogram = lb",
    "lbf": "pound_force = 4.4482216152605 * newton = lbf",
}

_ALIASES = {"degree": "deg", "degrees": "deg", "radian": "rad", "radians": "rad"}

_FREQUENCIES = {
    "Hz": Fraction(1),
    "kHz": Fraction(10**3),
    "MHz": Fraction(10**6),
    "rad/s": 1 / (2 * _PI),
    "rpm": Fraction(1, 60),
}

_OWN_FACTORS: dict[str, dict[str, Fraction]] = {
    "Hz": _FREQUENCIES,
    "%": {"%": Fraction(1, 100)},
    "dB": {"dB": Fraction(1)},
    "count": {"count": Fraction(1), "counts": Fraction(1)},
}

_NUMBER = r"[+-]?[0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]{1,4})?"
_FACTOR = r"[A-Za-z]+(?:\*\*-?[0-9])?"
_UNIT = rf"%|{_FACTOR}(?:[*/]{_FACTOR})*"
_PATTERN = re.compile(rf"({_NUMBER}) +({_UNIT})")
_LENIENT = re.compile(r"\s*([+-]?)\s*([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]{1,4})?(?!\.)\s*(.*)")
_SPELLINGS = str.maketrans(
    {
        "\u00b5": "u",  # micro sign
        "\u03bc": "u",  # Greek mu
        "\u03a9": "ohm",
        "\u2126": "ohm",
    }
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """A kind of quantity: what it is called, its unit, what is plausible.

    Parameters
    ----------
    title : str
        With its article, "a length".
    unit : str
        The unit that `parse_quantity` returns, as loop files spell it.
    example : str
        A text that passes.
    smallest : float
        Least plausible magnitude other than zero. [`unit`]
    largest : float
        Largest plausible magnitude. [`unit`]
    """

    title: str
    unit: str
    example: str
    smallest: float
    largest: float


def _kind(title: str, unit: str, example: str, smallest: float, largest: float) -> Kind:
    return Kind(title=title, unit=unit, example=example, smallest=smallest, largest=largest)


KINDS: dict[str, Kind] = {
    "length": _kind("a length", "m", "1.5 mm", 1e-15, 1e4),
    "angle": _kind("an angle", "rad", "2.5 deg", 1e-15, 1e4),
    "mass": _kind("a mass", "kg", "35 g", 1e-12, 1e4),
    "inertia": _kind("an inertia", "kg*m**2", "0.6 g*cm**2", 1e-18, 1e6),
    "force": _kind("a force", "N", "0.3 N", 1e-18, 1e6),
    "torque": _kind("a torque", "N*m", "4 mN*m", 1e-18, 1e6),
    "stiffness": _kind("a stiffness", "N/m", "1.8 N/mm", 1e-15, 1e12),
    "rotary_stiffness": _kind("a rotary stiffness", "N*m/rad", "12 mN*m/rad", 1e-15, 1e12),
    "damping": _kind("a damping", "N*s/m", "0.6 N*s/m", 1e-15, 1e9),
    "rotary_damping": _kind("a rotary damping", "N*m*s/rad", "2 uN*m*s/rad", 1e-18, 1e9),
    "force_constant": _kind("a force constant", "N/A", "7 N/A", 1e-9, 1e6),
    "torque_constant": _kind("a torque constant", "N*m/A", "9 mN*m/A", 1e-12, 1e6),
    "back_emf": _kind("a back-EMF", "V*s/m", "7 V*s/m", 1e-15, 1e6),
    "rotary_back_emf": _kind("a rotary back-EMF", "V*s/rad", "9 mV*s/rad", 1e-15, 1e6),
    "current": _kind("a current", "A", "1.6 A", 1e-12, 1e4),
    "voltage": _kind("a voltage", "V", "12 V", 1e-12, 1e5),
    "resistance": _kind("a resistance", "ohm", "4 ohm", 1e-9, 1e9),
    "inductance": _kind("an inductance", "H", "0.5 mH", 1e-15, 1e4),
    "time": _kind("a time", "s", "20 us", 1e-15, 1e4),
    "frequency": _kind("a frequency", "Hz", "150 Hz", 1e-9, 1e10),
    "ratio": _kind("a ratio in percent", "%", "5 %", 1e-15, 1e6),
    "gain_db": _kind("a ratio in decibel", "dB", "8 dB", 1e-9, 1e3),
    "phase": _kind("a phase angle", "deg", "50 deg", 1e-9, 1e5),
    "count": _kind("a number of counts", "count", "2 count", 1e-9, 1e10),
    "kp_volt": _kind("a proportional gain", "V/m", "9 V/mm", 1e-15, 1e15),
    "kd_volt": _kind("a derivative gain", "V*s/m", "12 V*s/m", 1e-15, 1e12),
    "kp_rotary_volt": _kind("a proportional gain", "V/rad", "40 V/rad", 1e-15, 1e15),
    "kd_rotary_volt": _kind("a derivative gain", "V*s/rad", "0.05 V*s/rad", 1e-15, 1e12),
    "ki_force": _kind("an integral gain", "N/m/s", "90 N/mm/s", 1e-15, 1e18),
    "ki_torque": _kind("an integral gain", "N*m/rad/s", "2 N*m/rad/s", 1e-15, 1e18),
    "ki_volt": _kind("an integral gain", "V/m/s", "80 V/mm/s", 1e-15, 1e18),
    "ki_rotary_volt": _kind("an integral gain", "V/rad/s", "500 V/rad/s", 1e-15, 1e18),
}
"""Every kind of quantity that a loop file knows, by name."""


# ---------------------------------------------------------------------------------- text to number


def parse_quantity(text: object, kind: Kind, *, name: str = "quantity", example: str = "") -> float:
    """Read "number unit" as a number in the unit of its kind.

    Parameters
    ----------
    text : object
        What came; only a string can pass.
    kind : Kind
        The kind of quantity that is wanted, usually from `KINDS`.
    name : str
        What an error calls it.
    example : str
        A text that passes and fits the place better than the example of the kind.

    Returns
    -------
    float
        The double nearest to the exact value; percent becomes a fraction. [`kind.unit`, % aside]

    Raises
    ------
    QuantityError
        If the text does not follow the pattern, is of another dimension, or lies outside the
        plausible range; it carries the text to write instead.

    Notes
    -----
    The number is read as an exact fraction and multiplied by an exact factor before it is rounded;
    own derivation.

    Examples
    --------
    >>> parse_quantity("2.4 N/mm", KINDS["stiffness"])
    2400.0
    >>> parse_quantity("1131 rad/s", KINDS["frequency"])
    180.00424063693362
    """
    came = quoted(text)
    if not isinstance(text, str):
        raise QuantityError(
            name, came, f"{kind.title} is a text with its unit", suggestion_for(text, kind, example)
        )
    spelled = text.translate(_SPELLINGS)
    match = _PATTERN.fullmatch(spelled)
    if match is None or not _short(match[1], match[2]):
        raise QuantityError(
            name, came, _pattern_rule(text, kind), suggestion_for(text, kind, example)
        )
    value = _convert(match[1], match[2], kind)
    if value is None:
        rule = _unit_rule(match[2], kind)
        raise QuantityError(name, came, rule, suggestion_for(text, kind, example))
    if not _plausible(value, kind):
        rule = (
            f"{kind.title} between {kind.smallest:g} and {kind.largest:g} {kind.unit} is plausible"
        )
        raise QuantityError(name, came, rule, suggestion_for(text, kind, example))
    return value


def suggestion_for(text: object, kind: Kind, example: str = "") -> str:
    """Guess what was meant by a text that does not pass; an example where nothing can be guessed.

    Parameters
    ----------
    text : object
        What came.
    kind : Kind
        The kind of quantity that is wanted.
    example : str
        A text that passes and fits the place better than the example of the kind.

    Returns
    -------
    str
        A text that `parse_quantity` accepts.

    Notes
    -----
    Tries usual slips one after the other: decimal comma, missing space, spaces or dots for the
    product sign, parentheses, a missing ``*``, a slip of case, a missing or foreign unit.

    Examples
    --------
    >>> suggestion_for("1,5 mm", KINDS["length"])
    '1.5 mm'
    >>> suggestion_for("12 mNm/rad", KINDS["rotary_stiffness"])
    '12 mN*m/rad'
    """
    example = example or kind.example
    if isinstance(text, int | float) and not isinstance(text, bool) and abs(text) < 1e15:
        text = str(text)
    if not isinstance(text, str) or len(text) > 200:
        return example
    match = _LENIENT.fullmatch(_tidy(text.strip()))
    if match is None:
        return example
    sign, digits, exponent, rest = match[1], match[2], match[3] or "", match[4].strip()
    whole, _, decimals = digits.partition(".")
    number = sign + (whole or "0") + (f".{decimals}" if decimals else "") + exponent
    if re.search(r"(?<!\*\*)(?<!\*\*-)[0-9]", rest):
        return example
    units = list(_unit_candidates(rest))
    # A unit of another kind says that the number means something else, too.
    if not _is_unit(rest):
        units.append(example.split(" ")[1])
    for unit in units:
        if _fits_pattern(unit) and _short(number, unit):
            value = _convert(number, unit, kind)
            if value is not None and _plausible(value, kind):
                return f"{number} {unit}"
    return example


def quoted(value: object) -> str:
    """Write a value the way TOML does, shortened, on one line, for a message.

    Parameters
    ----------
    value : object
        Anything that a TOML file can hold.

    Returns
    -------
    str
        At most about 60 printable characters.

    Notes
    -----
    Texts keep their quotes, so that "48" and 48 look different; own choice.

    Examples
    --------
    >>> quoted("48 g"), quoted(True)
    ('"48 g"', 'true')
    """
    if isinstance(value, str):
        short = value if len(value) <= 60 else value[:57] + "..."
        return '"' + "".join(c if c.isprintable() else ascii(c)[1:-1] for c in short) + '"'
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return "a list"
    if isinstance(value, int) and abs(value) >= 10**40:
        return "a very large number"
    return str(value)


def _fits_pattern(unit: str) -> bool:
    return re.fullmatch(_UNIT, unit) is not None


def _is_unit(text: str) -> bool:
    """Whether a text as it stands is a unit of any kind."""
    if text in _FREQUENCIES:
        return True
    return _fits_pattern(text) and len(text) <= MAX_UNIT_CHARACTERS and _root(text) is not None


def _short(number: str, unit: str) -> bool:
    return len(number) <= MAX_NUMBER_CHARACTERS and len(unit) <= MAX_UNIT_CHARACTERS


def _plausible(value: float, kind: Kind) -> bool:
    return value == 0.0 or kind.smallest <= abs(value) <= kind.largest


def _convert(number: str, unit: str, kind: Kind) -> float | None:
    """Value in the unit of its kind; None for a foreign unit; infinite or nan when out of range."""
    factor = _factor(unit, kind.unit)
    if factor is None:
        return None
    # Huge exponents are settled in floating point: an exact fraction of them would fill the memory.
    rough = float(number)
    if math.isinf(rough):
        return rough
    if rough == 0.0 and re.search(r"[1-9]", number.lower().split("e")[0]):
        return math.nan
    try:
        return float(Fraction(number) * factor)
    except OverflowError:
        return math.copysign(math.inf, rough)


@functools.lru_cache(maxsize=512)
def _factor(unit: str, wanted: str) -> Fraction | None:
    """Exact factor from one unit to another; None where the dimensions differ."""
    own = _OWN_FACTORS.get(wanted)
    if own is not None:
        return own.get(unit)
    scale, goal = _root(unit), _root(wanted)
    if scale is None or goal is None or scale[1] != goal[1]:
        return None
    return scale[0] / goal[0]


@functools.lru_cache(maxsize=512)
def _root(unit: str) -> tuple[Fraction, dict[str, Any]] | None:
    """Factor to pint's root units and the dimensions; None for an unknown unit."""
    atoms = re.findall(r"[A-Za-z]+", unit)
    if not atoms or not set(atoms) <= _atoms():
        return None
    plain = re.sub(r"[A-Za-z]+", lambda match: _ALIASES.get(match[0], match[0]), unit)
    registry = _registry()
    parsed = registry.parse_units(plain)
    factor, _ = registry.get_root_units(parsed)
    return Fraction(str(factor)), dict(registry.get_dimensionality(parsed))


@functools.lru_cache(maxsize=1)
def _registry() -> Any:
    """Our own short list of units: the full list takes a fifth of a second and knows too much."""
    pint = _pint_alone()
    registry = pint.UnitRegistry(None, cache_folder=None, non_int_type=Fraction)
    for table in (_PREFIX_NAMES, _PREFIXED_UNITS, _UNPREFIXED_UNITS):
        for definition in table.values():
            registry.define(definition)
    return registry


def _pint_alone() -> ModuleType:
    """Import pint without scipy: pint would load it for unit choices that are never asked for."""
    hidden = not {"pint", "scipy"} & set(sys.modules)
    if hidden:
        sys.modules["scipy"] = cast(Any, None)
    try:
        import pint
    finally:
        if hidden:
            del sys.modules["scipy"]
    return pint


@functools.lru_cache(maxsize=1)
def _atoms() -> frozenset[str]:
    """Every single unit symbol that is known."""
    prefixed = {
        prefix + symbol
        for prefix in ("", *_PREFIX_NAMES)
        for symbol in _PREFIXED_UNITS
        if prefix != "c" or symbol == "m"
    }
    return frozenset(prefixed | set(_UNPREFIXED_UNITS) | set(_ALIASES))


@functools.lru_cache(maxsize=1)
def _atoms_by_case() -> dict[str, list[str]]:
    """Known symbols by their lower-case form, the likelier first: m before M."""
    found: dict[str, list[str]] = {}
    for atom in sorted(_atoms(), key=lambda symbol: (symbol[0] in "GM", symbol)):
        found.setdefault(atom.lower(), []).append(atom)
    return found


# -------------------------------------------------------------------------------- what went wrong


def _pattern_rule(text: str, kind: Kind) -> str:
    """Say how a text breaks the pattern."""
    wanted = f'{kind.title} reads "number unit"'
    number, _, unit = text.strip().partition(" ")
    if re.fullmatch(r"[+-]?(nan|inf|infinity)\b.*", text.strip(), re.I | re.S):
        return f"{wanted}, with a finite number"
    if len(number) > MAX_NUMBER_CHARACTERS:
        return f"{wanted}, the number with at most {MAX_NUMBER_CHARACTERS} characters"
    if len(unit) > MAX_UNIT_CHARACTERS:
        return f"{wanted}, the unit with at most {MAX_UNIT_CHARACTERS} characters"
    if re.fullmatch(_NUMBER, text.strip()):
        return f"{wanted}: the unit is missing"
    if "," in text:
        return f"{wanted}, with a decimal point and no comma"
    if "(" in text or ")" in text:
        return f"{wanted}, the unit without parentheses"
    if "^" in text:
        return f"{wanted}, powers as **"
    if re.match(r"[+-]?(\.[0-9]|[0-9]+\.(?![0-9]))", text.strip()):
        return f"{wanted}, with digits on both sides of the decimal point"
    if re.fullmatch(rf"{_NUMBER}.*", text) and " " in unit.strip():
        return f"{wanted}, the unit without spaces"
    if re.fullmatch(rf"{_NUMBER}({_UNIT})", text):
        return f"{wanted}, with a space between them"
    return f"{wanted}, the unit of letters, *, / and ** only"


def _unit_rule(unit: str, kind: Kind) -> str:
    """Say why a unit that follows the pattern is refused."""
    own = _OWN_FACTORS.get(kind.unit)
    if own is not None:
        return f"{kind.title} takes {', '.join(own)}, not {unit}"
    for atom in re.findall(r"[A-Za-z]+", unit):
        if atom not in _atoms():
            return f"{kind.title} in {kind.unit} or the like; {atom} is no unit that is known here"
    return f"{kind.title} in {kind.unit} or the like, not in {unit}"


def _tidy(text: str) -> str:
    """Undo habits of writing that leave no doubt about what is meant."""
    text = text.translate(_SPELLINGS)
    for written, meant in (("\u00b2", "**2"), ("\u00b0", " deg"), ("^", "**"), ("\u2212", "-")):
        text = text.replace(written, meant)
    text = re.sub("[\u00b7\u22c5\u00d7\u2219]", "*", unicodedata.normalize("NFKC", text))
    if re.fullmatch(r"\s*[+-]?[0-9]+,[0-9]+([eE][+-]?[0-9]+)?[^0-9,.]*", text):
        text = text.replace(",", ".")
    return text


def _unit_candidates(rest: str) -> Iterator[str]:
    """Units that may be meant by the text behind the number, the likelier first."""
    flat = _without_parentheses(re.sub(r"\s*([*/])\s*", r"\1", rest))
    joined = re.sub(r"\s+", "*", flat)
    for unit in (flat, joined, flat.split(" ")[0]):
        if not unit or len(unit) > MAX_UNIT_CHARACTERS:
            continue
        yield unit
        by_case = {known.lower(): known for known in _FREQUENCIES}
        if unit.lower() in by_case:
            yield by_case[unit.lower()]
        yield from _respelled(unit)


def _without_parentheses(unit: str) -> str:
    """Write a/(b*c) as a/b/c and a/(b/c) as a/b*c; leave anything harder alone."""
    match = re.fullmatch(r"([^()]*)/\(([^()]*)\)", unit)
    if match is None:
        return unit
    inside = re.sub(r"\s+", "*", match[2].strip())
    # The minus of the outer slash turns every product sign inside into a slash, and back; ** stays.
    swapped = re.sub(r"(?<!\*)([*/])(?!\*)", lambda sign: "/" if sign[1] == "*" else "*", inside)
    return f"{match[1]}/{swapped}"


def _respelled(unit: str) -> Iterator[str]:
    """The unit with each unknown symbol split into known ones, or with its case set right."""
    texts = [""]
    for part in re.findall(r"[A-Za-z]+|[^A-Za-z]+", unit):
        choices = [part]
        if part.isalpha():
            choices = _spellings_of(part)
        texts = [text + choice for text in texts for choice in choices][:64]
    yield from texts


def _spellings_of(part: str) -> list[str]:
    """What a run of letters may mean: itself, itself split into known symbols, in another case."""
    known = _atoms()
    found = [part] if part in known else []
    # Longer runs are no slip of a star, and their splits would be too many.
    for first in range(1, len(part) if len(part) <= 8 else 1):
        head, tail = part[:first], part[first:]
        if head in known:
            tails = [other for other in _spellings_of(tail) if "*" in other or other in known]
            found += [f"{head}*{other}" for other in tails]
    found += [atom for atom in _atoms_by_case().get(part.lower(), []) if atom != part]
    return found or [part]


# ---------------------------------------------------------------------------------- number to text

_STEPS = ((1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "u"), (1e-9, "n"))
_UNPREFIXED = {"", "%", "dB", "deg", "count", "counts", "code", "codes", "rpm", "-"}


def format_si(value: float, unit: str, digits: int = 4) -> str:
    """Write an SI number with a prefix of engineering, in ASCII.

    Parameters
    ----------
    value : float
        The number. [`unit`]
    unit : str
        Its unit; masses in kg are written in g below one kilogram.
    digits : int
        Significant digits, at least 3.

    Returns
    -------
    str
        Number, space, unit.

    Notes
    -----
    Units that start with a power or a product of kilograms, and percent, dB, deg and count, take no
    prefix; seconds take none above one. Own choice.

    Examples
    --------
    >>> format_si(1.2e-4, "m"), format_si(2400.0, "N/m"), format_si(0.048, "kg")
    ('120 um', '2.4 kN/m', '48 g')
    """
    first = re.match(r"[A-Za-z%]*", unit)
    leading = first[0] if first else ""
    power = (
        unit[len(leading) : len(leading) + 1] in {"^", "*"}
        and not unit[len(leading) + 1 :][:1].isalpha()
    )
    if not math.isfinite(value) or value == 0.0 or unit in _UNPREFIXED or power:
        return _joined(value, unit, digits)
    if leading == "kg":
        if unit != "kg" or abs(value) >= 1.0:
            return _joined(value, unit, digits)
        value, unit, leading = value * 1000.0, "g", "g"
    for scale, prefix in _STEPS:
        if leading in {"s", "g"} and scale > 1.0:
            continue
        # Rounded first, so that 999.96 at four digits becomes 1 k and not 1000.
        rounded = float(f"{value / scale:.{digits - 1}e}")
        if abs(rounded) >= 1.0 or prefix == "n":
            return _joined(rounded, prefix + unit, digits)
    raise AssertionError("the last step always returns")


def _joined(value: float, unit: str, digits: int) -> str:
    return f"{value:.{digits}g} {unit}".rstrip()
