"""The loop file: TOML text to one frozen `Loop` in SI, or everything that is wrong with it.

Rules of this file:

- Complaints are gathered, never raised one by one; a key that is already complained about causes
  no second complaint elsewhere.
- A default is taken only where it is safe, and is said in `Loop.assumptions` where it matters.
- Rotary loops use the generalised names inside (mass for inertia, force for torque); complaints
  use the names of the file.
- This module knows the file's rules and no control: whether a loop can work is for others.
"""

from __future__ import annotations

import contextlib
import difflib
import hashlib
import math
import re
import tomllib
from collections.abc import Callable, Iterable, Mapping, MutableMapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Annotated, Any, cast

from pydantic import BaseModel, ConfigDict, PlainValidator, ValidationError, ValidationInfo

from plant2.errors import Complaint, LoopFileError, QuantityError
from plant2.quantity import KINDS, Kind, format_si, parse_quantity, quoted

CORES = ("avr", "cortex-m0plus", "cortex-m3", "cortex-m4", "rv32imc", "host")
"""Cores that a loop may run on."""

ENCODER_BITS = 32
"""Width of an encoder's count."""

MAX_FILE_BYTES = 1 << 20
"""Longest loop file that is read."""

_NAME = re.compile(r"[a-z][a-z0-9_]{0,30}")
_C_KEYWORDS = frozenset(
    """
    alignas alignof asm auto bool break case char const constexpr continue default do double else
    enum extern false float for goto if inline int long nullptr register restrict return short
    signed sizeof static static_assert struct switch thread_local true typedef typeof typeof_unqual
    union unsigned void volatile while
    """.split()
)


# ------------------------------------------------------------------------------ what a loop file is


@dataclass(frozen=True, slots=True, kw_only=True)
class Mode:
    """A parasitic flexure mode, in parallel to the main mass.

    Parameters
    ----------
    frequency_rad_per_s : float
        Natural frequency, above 0. [rad/s]
    damping_ratio : float
        At least 0. [-]
    mass : float
        Modal mass or inertia, above 0. [kg or kg m^2]
    sign : int
        +1 or -1: the side to which the sensor sees it move.
    """

    frequency_rad_per_s: float
    damping_ratio: float
    mass: float
    sign: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Tolerance:
    """Half-widths of what differs from unit to unit; 0 where none is given.

    Parameters
    ----------
    mass : float
        Relative, of the main mass. [-]
    damping : float
        Relative. [-]
    stiffness : float
        Relative. [-]
    force : float
        Relative, of the force constant. [-]
    resistance : float
        Relative. [-]
    mode_frequency : float
        Relative, of every mode. [-]
    sensor : float
        Relative, of the sensor's scale. [-]
    delay_s : float
        Absolute. [s]
    bias : float
        Absolute, of the bias force. [N or N m]
    """

    mass: float = 0.0
    damping: float = 0.0
    stiffness: float = 0.0
    force: float = 0.0
    resistance: float = 0.0
    mode_frequency: float = 0.0
    sensor: float = 0.0
    delay_s: float = 0.0
    bias: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Mechanics:
    """What moves: main mass, spring, damper, end stops, modes.

    Parameters
    ----------
    motion : str
        "linear" or "rotary".
    mass : float
        Main mass or inertia, above 0. [kg or kg m^2]
    damping : float
        Viscous, at least 0. [N s/m or N m s/rad]
    stiffness : float
        At least 0; 0 is a free mass. [N/m or N m/rad]
    rest_position : float
        Where the spring is relaxed, from sensor zero. [m or rad]
    travel : float
        End stop, either side of sensor zero, above 0. [m or rad]
    bias_force : float
        Constant force on the main mass. [N or N m]
    friction : float
        Coulomb level on the main mass, at least 0. [N or N m]
    tolerance : Tolerance
        Half-widths from unit to unit.
    modes : tuple of Mode
        Parasitic modes.

    Notes
    -----
    ``m x'' + b x' + k (x - rest) = F + bias``; Newton's law, own notation.
    """

    motion: str
    mass: float
    damping: float
    stiffness: float
    rest_position: float
    travel: float
    bias_force: float
    friction: float
    tolerance: Tolerance
    modes: tuple[Mode, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Actuator:
    """The drive and its converter: value = polarity (code - zero_code) full_scale / 2^(bits-1).

    Parameters
    ----------
    drive : str
        "current" or "voltage".
    force_constant : float
        Above 0. [N/A or N m/A]
    full_scale : float
        Value at code 2^(bits-1). [A or V]
    bits : int
        Width of a code.
    zero_code : int
        Code of value zero.
    low_code : int
        Least code of the converter.
    high_code : int
        Largest code of the converter.
    polarity : int
        +1 or -1.
    limit : float
        The controller never asks for more. [A or V]
    limit_code : int
        The limit in codes either side of `zero_code`, rounded down, at least 1.
    bandwidth_rad_per_s : float or None
        Corner of the current loop; None for an ideal one and with voltage drive. [rad/s]
    continuous_a : float or None
        Continuous rating, rms. [A]
    resistance_ohm : float or None
        Of the coil; always present with voltage drive. [ohm]
    inductance_h : float
        Of the coil, at least 0. [H]
    back_emf : float
        Voltage per velocity. [V s/m or V s/rad]
    """

    drive: str
    force_constant: float
    full_scale: float
    bits: int
    zero_code: int
    low_code: int
    high_code: int
    polarity: int
    limit: float
    limit_code: int
    bandwidth_rad_per_s: float | None
    continuous_a: float | None
    resistance_ohm: float | None
    inductance_h: float
    back_emf: float

    @property
    def step(self) -> float:
        """Value of one code. [A or V]"""
        return math.ldexp(self.full_scale, 1 - self.bits)


@dataclass(frozen=True, slots=True, kw_only=True)
class Sensor:
    """The position sensor: position = polarity (count - zero_count) step.

    Parameters
    ----------
    step : float
        Position of one count. [m or rad]
    bits : int
        Width of a count.
    zero_count : int
        Count at position zero.
    low_count : int
        Least count.
    high_count : int
        Largest count.
    polarity : int
        +1 or -1.
    noise : float or None
        Rms. [m or rad]
    noise_peak : float or None
        Largest magnitude that proofs reckon with. [m or rad]
    filter_corner_rad_per_s : float or None
        Corner of the analog low-pass; None where there is none. [rad/s]
    """

    step: float
    bits: int
    zero_count: int
    low_count: int
    high_count: int
    polarity: int
    noise: float | None
    noise_peak: float | None
    filter_corner_rad_per_s: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Processor:
    """Where and when the controller runs.

    Parameters
    ----------
    core : str
        One of `CORES`.
    clock_hz : float or None
        None on the host only. [Hz]
    wait_states : int
        Extra cycles per fetch from program memory.
    sample_rate_hz : float
        Updates per second. [Hz]
    delay_s : float
        Sampling instant to actuator update; may exceed one period. [s]
    word : int or str
        16, 32 or "auto".
    """

    core: str
    clock_hz: float | None
    wait_states: int
    sample_rate_hz: float
    delay_s: float
    word: int | str

    @property
    def period_s(self) -> float:
        """Time from one sampling instant to the next. [s]"""
        return 1.0 / self.sample_rate_hz


@dataclass(frozen=True, slots=True, kw_only=True)
class Notch:
    """A notch, (s^2 + 2 zz w s + w^2)/(s^2 + 2 zp w s + w^2).

    Parameters
    ----------
    frequency_rad_per_s : float
        Its centre. [rad/s]
    width : float
        Twice the damping ratio of the poles. [-]
    depth_db : float
        20 log10(zp/zz). [dB]
    """

    frequency_rad_per_s: float
    width: float
    depth_db: float

    @property
    def zp(self) -> float:
        """Damping ratio of the poles. [-]"""
        return self.width / 2.0

    @property
    def zz(self) -> float:
        """Damping ratio of the zeros. [-]"""
        return float(self.zp / 10.0 ** (self.depth_db / 20.0))


@dataclass(frozen=True, slots=True, kw_only=True)
class Aim:
    """The law and what it aims at: targets, or gains that are given.

    Parameters
    ----------
    law : str
        "pd", "lead" or "pid".
    damping_ratio : float or None
        Of the placed pair; None when `fastest`, or no target. [-]
    fastest : bool
        Whether the damping ratio of least settling time is wanted.
    bandwidth_hz : float or None
        -3 dB, reference to position. [Hz]
    natural_frequency_hz : float or None
        Of the placed pair. [Hz]
    crossover_hz : float or None
        Target of "lead". [Hz]
    phase_margin_deg : float or None
        Target of "lead". [deg]
    derivative_corner_hz : float or None
        None for the default. [Hz]
    integral_corner_hz : float or None
        None for the default. [Hz]
    kp : float or None
        Given proportional gain. [N/m, N m/rad, V/m or V/rad]
    kd : float or None
        Given derivative gain. [N s/m, N m s/rad, V s/m or V s/rad]
    ki : float or None
        Given integral gain. [N/(m s), N m/(rad s), V/(m s) or V/(rad s)]
    beta : float or None
        Set-point weight of "pid"; None for the default. [-]
    notches : tuple of Notch
        On the whole sum, before the limit.
    """

    law: str
    damping_ratio: float | None
    fastest: bool
    bandwidth_hz: float | None
    natural_frequency_hz: float | None
    crossover_hz: float | None
    phase_margin_deg: float | None
    derivative_corner_hz: float | None
    integral_corner_hz: float | None
    kp: float | None
    kd: float | None
    ki: float | None
    beta: float | None
    notches: tuple[Notch, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """Requirements; None where the key is absent.

    Parameters
    ----------
    overshoot : float or None
        Fraction of the step. [-]
    settling_time_s : float or None
        At most. [s]
    settling_band : float or None
        Fraction of the step. [-]
    final_error : float or None
        At most. [m or rad]
    phase_margin_deg : float or None
        At least. [deg]
    gain_margin_db : float or None
        At least. [dB]
    gain_reduction_db : float or None
        At least. [dB]
    delay_margin_s : float or None
        At least. [s]
    peak_sensitivity : float or None
        At most. [-]
    position_noise : float or None
        At most, rms. [m or rad]
    stiffness_at_dc : float or None
        At least, against a disturbance. [N/m or N m/rad]
    deviation_count : float or None
        At most. [count]
    limit_cycle_count : float or None
        At most. [count]
    rms_current_a : float or None
        At most. [A]
    update_time_s : float or None
        At most, worst update. [s]
    load : float or None
        At most, fraction of the period. [-]
    """

    overshoot: float | None = None
    settling_time_s: float | None = None
    settling_band: float | None = None
    final_error: float | None = None
    phase_margin_deg: float | None = None
    gain_margin_db: float | None = None
    gain_reduction_db: float | None = None
    delay_margin_s: float | None = None
    peak_sensitivity: float | None = None
    position_noise: float | None = None
    stiffness_at_dc: float | None = None
    deviation_count: float | None = None
    limit_cycle_count: float | None = None
    rms_current_a: float | None = None
    update_time_s: float | None = None
    load: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Loop:
    """Everything that a loop file says, in SI.

    Parameters
    ----------
    name : str
        A C identifier; every emitted name starts with it.
    about : str
        One line for people; may be empty.
    mechanics : Mechanics
        Table [plant].
    actuator : Actuator
        Table [actuator].
    sensor : Sensor
        Table [sensor].
    processor : Processor
        Table [processor].
    aim : Aim
        Table [aim].
    step : float
        The step that is checked, at least one count. [m or rad]
    limits : Limits
        Table [limits].
    assumptions : tuple of str
        Defaults that matter, one line each, to be shown.
    sha256 : str
        Of the file's text with newlines as line feeds, before overrides.
    overrides : tuple of str
        What replaced keys of the file, as given.
    """

    name: str
    about: str
    mechanics: Mechanics
    actuator: Actuator
    sensor: Sensor
    processor: Processor
    aim: Aim
    step: float
    limits: Limits
    assumptions: tuple[str, ...]
    sha256: str
    overrides: tuple[str, ...]


# ------------------------------------------------------------------------- readers of single values


class _Refusal(ValueError):
    """A value that breaks the rule of its key; `line` is the value to write, in TOML."""

    def __init__(self, rule: str, line: str) -> None:
        super().__init__(rule)
        self.rule, self.line = rule, line


@dataclass(frozen=True, slots=True, kw_only=True)
class _Situation:
    """What decides the units of a table's keys."""

    rotary: bool
    voltage: bool

    def pick(self, names: tuple[str, ...]) -> str:
        """One of 1, of 2 (linear, rotary), or of 4 (current drive, then the same with voltage)."""
        index = int(self.rotary) + 2 * int(self.voltage)
        return names[index % len(names)]

    def kind(self, names: tuple[str, ...]) -> Kind:
        """The kind of quantity, by its names as in `pick`."""
        return KINDS[self.pick(names)]


_Reader = Callable[[Any, _Situation], Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Rule:
    """How one key is read, and a value that passes, in TOML, for lines to write."""

    read: _Reader
    example: Callable[[_Situation], str]

    def __call__(self, value: Any, info: ValidationInfo) -> Any:
        return self.read(value, cast(_Situation, info.context))


def _quantity(
    *names: str, sign: str = "above 0", below: str = "", example: str | tuple[str, ...] = ()
) -> PlainValidator:
    """A "number unit" of a kind that motion and drive decide, with a rule for its sign."""
    examples = (example,) if isinstance(example, str) else example

    def shown(situation: _Situation) -> str:
        text = situation.pick(examples) if examples else situation.kind(names).example
        return f'"{text}"'

    def rule_broken(found: float, kind: Kind) -> str:
        if sign == "above 0" and found <= 0.0:
            return f"{kind.title} above 0 is needed"
        if sign == "at least 0" and found < 0.0:
            return f"{kind.title} of at least 0 is needed"
        if below and found > parse_quantity(below, kind):
            return f"at most {below} is allowed"
        return ""

    def read(value: Any, situation: _Situation) -> float:
        kind = situation.kind(names)
        try:
            found = parse_quantity(value, kind, example=shown(situation).strip('"'))
        except QuantityError as error:
            meant = f'"{error.suggestion}"'
            broken = rule_broken(parse_quantity(error.suggestion, kind), kind)
            raise _Refusal(error.rule, shown(situation) if broken else meant) from None
        if broken := rule_broken(found, kind):
            raise _Refusal(broken, shown(situation))
        return found

    return PlainValidator(_Rule(read=read, example=shown))


def _number(low: float, high: float, example: str, *, open_low: bool = False) -> PlainValidator:
    """A plain number without unit, within a range."""
    bound = f"above {low:g}" if open_low else f"from {low:g}"

    def read(value: Any, situation: _Situation) -> float:
        rule = f"a number without unit and quotes, {bound} up to {high:g}"
        if isinstance(value, bool) or not isinstance(value, int | float):
            text = value.strip() if isinstance(value, str) else ""
            plain = re.fullmatch(r"[+-]?[0-9]{1,9}(\.[0-9]{1,17})?", text)
            fits = plain is not None and (low < float(text) <= high or text == f"{low:g}")
            raise _Refusal(rule, text if fits and not open_low else example)
        if not (low < value <= high or (value == low and not open_low)):
            raise _Refusal(rule, example)
        return float(value)

    return PlainValidator(_Rule(read=read, example=lambda situation: example))


def _integer(low: int, high: int, example: str) -> PlainValidator:
    """A whole number within a range."""

    def read(value: Any, situation: _Situation) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise _Refusal(f"a whole number without quotes, {low} to {high}", example)
        return value

    return PlainValidator(_Rule(read=read, example=lambda situation: example))


def _choice(*values: str | int, example: str | int) -> PlainValidator:
    """One of a few values."""
    shown = ", ".join(quoted(value) for value in values)

    def read(value: Any, situation: _Situation) -> str | int:
        for candidate in values:
            if type(value) is type(candidate) and value == candidate:
                return candidate
        texts = {str(candidate).lower(): candidate for candidate in values}
        came = quoted(value).strip('"').lower()
        near = difflib.get_close_matches(came, texts, n=1, cutoff=0.5)
        raise _Refusal(f"one of {shown}", quoted(texts[near[0]] if near else example))

    return PlainValidator(_Rule(read=read, example=lambda situation: quoted(example)))


def _read_name(value: Any, situation: _Situation) -> str:
    if isinstance(value, str) and _NAME.fullmatch(value) and value not in _C_KEYWORDS:
        return value
    rule = "a C identifier: a small letter, then up to 30 small letters, digits or underscores"
    if isinstance(value, str) and value in _C_KEYWORDS:
        rule = "a word of the language C cannot name a loop"
    raise _Refusal(rule, quoted(_tame_name(value if isinstance(value, str) else "")))


def _tame_name(text: str) -> str:
    """The nearest loop name that is allowed."""
    name = re.sub(r"[^a-z0-9]+", "_", text[:60].lower()).strip("_")
    if not name or not name[0].isalpha() or name in _C_KEYWORDS:
        name = f"stage_{name}".rstrip("_")
    return name[:31]


def _read_about(value: Any, situation: _Situation) -> str:
    if isinstance(value, str) and value.isprintable() and len(value) <= 200:
        return value
    raise _Refusal("one line of text, at most 200 characters", '"what this loop moves"')


def _read_damping_target(value: Any, situation: _Situation) -> float | str:
    if value == "fastest":
        return "fastest"
    if not isinstance(value, bool) and isinstance(value, int | float) and 0.0 < value <= 5.0:
        return float(value)
    raise _Refusal('a number above 0 up to 5, without quotes, or "fastest"', "0.7")


def _read_bias_tolerance(value: Any, situation: _Situation) -> tuple[str, float]:
    """Absolute, or a share of the bias force."""
    kind = situation.kind(("force", "torque"))
    if isinstance(value, str) and value.rstrip().endswith("%"):
        found, sort = parse_quantity(value, KINDS["ratio"]), "share"
    else:
        found, sort = parse_quantity(value, kind), "absolute"
    if found < 0.0:
        raise _Refusal(f"{kind.title} or a ratio of at least 0 is needed", '"10 %"')
    return sort, found


_LENGTHS = ("length", "angle")
_MASSES = ("mass", "inertia")
_FORCES = ("force", "torque")
_DAMPINGS = ("damping", "rotary_damping")
_STIFFNESSES = ("stiffness", "rotary_stiffness")
_DRIVES = ("current", "current", "voltage", "voltage")
_KP = ("stiffness", "rotary_stiffness", "kp_volt", "kp_rotary_volt")
_KD = ("damping", "rotary_damping", "kd_volt", "kd_rotary_volt")
_KI = ("ki_force", "ki_torque", "ki_volt", "ki_rotary_volt")

# Any: the rule alone decides, and pydantic need not prepare for a type (a third of its time).
_AnyLength = Annotated[Any, _quantity(*_LENGTHS, sign="any", example=("0 mm", "0 deg"))]
_Length = Annotated[Any, _quantity(*_LENGTHS, example=("1.5 mm", "6 deg"))]
_Step = Annotated[Any, _quantity(*_LENGTHS, example=("80 um", "0.2 deg"))]
_Small = Annotated[Any, _quantity(*_LENGTHS, example=("1.5 um", "20 urad"))]
_Noise = Annotated[Any, _quantity(*_LENGTHS, sign="at least 0", example=("50 nm", "2 urad"))]
_Mass = Annotated[Any, _quantity(*_MASSES)]
_AnyForce = Annotated[Any, _quantity(*_FORCES, sign="any", example=("0 N", "0 N*m"))]
_Force = Annotated[Any, _quantity(*_FORCES, sign="at least 0", example=("0 N", "0 N*m"))]
_Damping = Annotated[Any, _quantity(*_DAMPINGS, sign="at least 0")]
_Stiffness = Annotated[Any, _quantity(*_STIFFNESSES, sign="at least 0")]
_Frequency = Annotated[Any, _quantity("frequency")]
_HighFrequency = Annotated[Any, _quantity("frequency", example="1.7 kHz")]
_Time = Annotated[Any, _quantity("time")]
_Delay = Annotated[Any, _quantity("time", sign="at least 0", example="20 us")]
_Current = Annotated[Any, _quantity("current", example="0.7 A")]
_Drive = Annotated[Any, _quantity(*_DRIVES)]
_Whole = Annotated[Any, _quantity("ratio", sign="at least 0", below="100 %")]
_Part = Annotated[Any, _quantity("ratio", sign="at least 0", below="90 %")]
_Decibel = Annotated[Any, _quantity("gain_db")]
_Count = Annotated[Any, _quantity("count", sign="at least 0")]
_Ratio = Annotated[Any, _number(0.0, 5.0, "0.02")]
_Sign = Annotated[Any, _choice(1, -1, example=1)]
_Bits = Annotated[Any, _integer(2, 32, "12")]
_Code = Annotated[Any, _integer(-(1 << 31), (1 << 32) - 1, "0")]
_Coding = Annotated[Any, _choice("signed", "unsigned", example="signed")]
_Name = Annotated[Any, PlainValidator(_Rule(read=_read_name, example=lambda s: '"x_stage"'))]
_About = Annotated[Any, PlainValidator(_Rule(read=_read_about, example=lambda s: '""'))]
_BiasTolerance = Annotated[
    Any, PlainValidator(_Rule(read=_read_bias_tolerance, example=lambda s: '"10 %"'))
]
_DampingTarget = Annotated[
    Any, PlainValidator(_Rule(read=_read_damping_target, example=lambda s: "0.7"))
]


class _Table(BaseModel):
    """A table of the file: every key optional here; what must be present is told later, at once."""

    model_config = ConfigDict(extra="forbid", frozen=True, hide_input_in_errors=True)


class _LoopTable(_Table):
    name: _Name = None
    about: _About = None


class _PlantTable(_Table):
    motion: Annotated[Any, _choice("linear", "rotary", example="linear")] = None
    mass: _Mass = None
    damping: _Damping = None
    stiffness: _Stiffness = None
    natural_frequency: _Frequency = None
    damping_ratio: _Ratio = None
    rest_position: _AnyLength = None
    travel: _Length = None
    bias_force: _AnyForce = None
    friction: _Force = None


class _ToleranceTable(_Table):
    mass: _Part = None
    damping: _Whole = None
    stiffness: _Whole = None
    force: _Part = None
    resistance: _Part = None
    mode_frequency: _Part = None
    sensor: _Part = None
    delay: _Delay = None
    bias: _BiasTolerance = None


class _ModeTable(_Table):
    frequency: _HighFrequency = None
    damping_ratio: _Ratio = None
    mass: _Mass = None
    sign: _Sign = None


class _ActuatorTable(_Table):
    drive: Annotated[Any, _choice("current", "voltage", example="current")] = None
    force_constant: Annotated[Any, _quantity("force_constant", "torque_constant")] = None
    full_scale: _Drive = None
    bits: _Bits = None
    coding: _Coding = None
    zero_code: _Code = None
    polarity: _Sign = None
    limit: _Drive = None
    bandwidth: Annotated[Any, _quantity("frequency", example="5 kHz")] = None
    continuous: _Current = None
    resistance: Annotated[Any, _quantity("resistance")] = None
    inductance: Annotated[Any, _quantity("inductance", sign="at least 0")] = None
    back_emf: Annotated[Any, _quantity("back_emf", "rotary_back_emf", sign="at least 0")] = None


class _SensorTable(_Table):
    full_scale: _Length = None
    resolution: _Small = None
    bits: _Bits = None
    coding: _Coding = None
    zero_count: _Code = None
    polarity: _Sign = None
    noise: _Noise = None
    noise_peak: _Noise = None
    filter_corner: Annotated[Any, _quantity("frequency", example="15 kHz")] = None


class _ProcessorTable(_Table):
    core: Annotated[Any, _choice(*CORES, example="cortex-m4")] = None
    clock: Annotated[Any, _quantity("frequency", example="48 MHz")] = None
    wait_states: Annotated[Any, _integer(0, 15, "0")] = None
    sample_rate: Annotated[Any, _quantity("frequency", example="16 kHz")] = None
    delay: _Delay = None
    word: Annotated[Any, _choice(16, 32, "auto", example=32)] = None


class _AimTable(_Table):
    law: Annotated[Any, _choice("pd", "lead", "pid", example="pd")] = None
    damping_ratio: _DampingTarget = None
    bandwidth: _Frequency = None
    natural_frequency: Annotated[Any, _quantity("frequency", example="100 Hz")] = None
    crossover: Annotated[Any, _quantity("frequency", example="120 Hz")] = None
    phase_margin: Annotated[Any, _quantity("phase", below="179 deg")] = None
    derivative_corner: Annotated[Any, _quantity("frequency", example="1.2 kHz")] = None
    integral_corner: Annotated[Any, _quantity("frequency", example="8 Hz")] = None
    kp: Annotated[Any, _quantity(*_KP, sign="any")] = None
    kd: Annotated[Any, _quantity(*_KD, sign="any")] = None
    ki: Annotated[Any, _quantity(*_KI, sign="any")] = None
    beta: Annotated[Any, _number(0.0, 10.0, "0.5")] = None


class _NotchTable(_Table):
    frequency: _HighFrequency = None
    width: Annotated[Any, _number(0.0, 10.0, "0.2", open_low=True)] = None
    depth: Annotated[Any, _quantity("gain_db", below="120 dB", example="18 dB")] = None


class _CheckTable(_Table):
    step: _Step = None


class _LimitsTable(_Table):
    overshoot: Annotated[Any, _quantity("ratio", sign="at least 0", below="100 %")] = None
    settling_time: Annotated[Any, _quantity("time", example="10 ms")] = None
    settling_band: Annotated[Any, _quantity("ratio", below="50 %", example="1 %")] = None
    final_error: _Small = None
    phase_margin: Annotated[Any, _quantity("phase", below="180 deg")] = None
    gain_margin: _Decibel = None
    gain_reduction: _Decibel = None
    delay_margin: _Time = None
    peak_sensitivity: Annotated[Any, _number(1.0, 1000.0, "1.9", open_low=True)] = None
    position_noise: _Small = None
    stiffness_at_dc: Annotated[Any, _quantity(*_STIFFNESSES)] = None
    deviation: _Count = None
    limit_cycle: _Count = None
    rms_current: _Current = None
    update_time: _Time = None
    load: Annotated[Any, _quantity("ratio", below="100 %", example="40 %")] = None


_TABLES: dict[str, type[_Table]] = {
    "loop": _LoopTable,
    "plant": _PlantTable,
    "plant.tolerance": _ToleranceTable,
    "plant.mode": _ModeTable,
    "actuator": _ActuatorTable,
    "sensor": _SensorTable,
    "processor": _ProcessorTable,
    "aim": _AimTable,
    "aim.notch": _NotchTable,
    "check": _CheckTable,
    "limits": _LimitsTable,
}
_LISTED = ("plant.mode", "aim.notch")
_TOP = tuple(name for name in _TABLES if "." not in name)

_ROTARY_NAMES: dict[str, dict[str, str]] = {
    "plant": {"mass": "inertia", "bias_force": "bias_torque"},
    "plant.tolerance": {"mass": "inertia", "force": "torque"},
    "plant.mode": {"mass": "inertia"},
    "actuator": {"force_constant": "torque_constant"},
}
"""Keys that are called otherwise with rotary motion."""


# ----------------------------------------------------------------------------------- reading a file


def load_loop(path: str | Path, overrides: Sequence[str] = ()) -> Loop:
    """Read a loop file.

    Parameters
    ----------
    path : str or Path
        The file.
    overrides : sequence of str
        Texts "TABLE.KEY=VALUE" that replace keys before anything is checked.

    Returns
    -------
    Loop
        Everything the file says, in SI.

    Raises
    ------
    LoopFileError
        If the file cannot be read or is no loop file; it carries every complaint.

    Notes
    -----
    UTF-8, with or without a byte order mark, any newlines; format of this project's own.
    """
    source = str(path)
    try:
        with open(path, "rb") as file:
            raw = file.read(MAX_FILE_BYTES + 1)
    except FileNotFoundError:
        raise LoopFileError((Complaint(allowed="there is no such file"),), source) from None
    except IsADirectoryError:
        rule = "this is a folder; a loop file is needed"
        raise LoopFileError((Complaint(allowed=rule),), source) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        rule = f"cannot be read: {reason.lower()}"
        raise LoopFileError((Complaint(allowed=rule),), source) from None
    if len(raw) > MAX_FILE_BYTES:
        rule = f"a loop file has at most {MAX_FILE_BYTES} bytes"
        raise LoopFileError((Complaint(allowed=rule),), source)
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        rule = f"line {line}: a byte that is no utf-8; save the file as utf-8"
        raise LoopFileError((Complaint(allowed=rule),), source) from None
    return _read(text, tuple(overrides), source)


def loop_from_text(text: str, overrides: Sequence[str] = ()) -> Loop:
    """Read the text of a loop file.

    Parameters
    ----------
    text : str
        TOML.
    overrides : sequence of str
        Texts "TABLE.KEY=VALUE" that replace keys before anything is checked.

    Returns
    -------
    Loop
        Everything the text says, in SI.

    Raises
    ------
    LoopFileError
        If the text is no loop file; it carries every complaint.

    Notes
    -----
    Format of this project's own.

    Examples
    --------
    >>> loop = loop_from_text(new_loop_text("x_stage"), ["plant.mass=52 g"])
    >>> loop.mechanics.mass, loop.overrides
    (0.052, ('plant.mass=52 g',))
    """
    return _read(text, tuple(overrides), "")


def _read(text: str, overrides: tuple[str, ...], source: str) -> Loop:
    text = text.removeprefix("\ufeff")
    complaints: list[Complaint] = []
    data = _parse_toml(text, source)
    for override in overrides:
        complaints += _override(data, override)
    plant, actuator = data.get("plant"), data.get("actuator")
    gathering = _Gathering(
        situation=_situation(plant, actuator), complaints=complaints, suspected=set()
    )
    views = {name: _view(gathering, name, data) for name in _TABLES if name not in _LISTED}
    lists = {name: _listed_views(gathering, name, data) for name in _LISTED}
    _complain_about_unknown_tables(gathering, data)
    plain = text.replace("\r\n", "\n").replace("\r", "\n").encode("utf-8", "surrogatepass")
    loop = _assemble(views, lists, hashlib.sha256(plain).hexdigest(), overrides)
    if complaints:
        order = list(_TABLES)

        def rank(complaint: Complaint) -> int:
            table = re.sub(r"\.[0-9]+$", "", complaint.table)
            return order.index(table) if table in order else -1

        raise LoopFileError(tuple(sorted(complaints, key=rank)), source)
    return loop


def _parse_toml(text: str, source: str) -> dict[str, Any]:
    """TOML to a dictionary, or one complaint with its line."""
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise LoopFileError((_toml_complaint(text, str(error)),), source) from None
    except RecursionError:
        rule = "lists or tables are nested too deeply"
        raise LoopFileError((Complaint(allowed=rule),), source) from None
    except ValueError as error:
        # Whole numbers of thousands of digits, dates that do not exist.
        rule = f"a value that toml cannot hold: {str(error).lower()}"
        raise LoopFileError((Complaint(allowed=rule),), source) from None


def _toml_complaint(text: str, message: str) -> Complaint:
    """A syntax error with its line, and with quotes to write where they are what is missing."""
    match = re.fullmatch(r"(.*) \(at (?:line (\d+), column (\d+)|end of document)\)", message, re.S)
    if match is None:
        return Complaint(allowed=f"no toml: {message[:1].lower()}{message[1:]}")
    lines = text.rstrip().split("\n")
    number = int(match[2]) if match[2] else len(lines)
    line = lines[number - 1].strip() if number <= len(lines) else ""
    came = _plain(line)
    what = match[1][:1].lower() + match[1][1:]
    where = f"line {number}, " + (f"column {match[3]}" if match[2] else "end of the file")
    bare = re.fullmatch(r"([A-Za-z_]+)\s*=\s*([^\"'\[\]{}#]+?)\s*(#.*)?", line)
    remedy = f'{bare[1]} = "{bare[2]}"' if bare and bare[2].isprintable() else ""
    return Complaint(allowed=f"{where}{came and f' ({came})'}: {what}", remedy=remedy)


# ---------------------------------------------------------------------------------------- overrides


def _known_paths() -> list[str]:
    """Every TABLE.KEY, index 0 standing for any."""
    found = []
    for table, model in _TABLES.items():
        place = f"{table}.0" if table in _LISTED else table
        names = [*model.model_fields, *_ROTARY_NAMES.get(table, {}).values()]
        found += [f"{place}.{name}" for name in names]
    return found


def _override(data: dict[str, Any], text: str) -> list[Complaint]:
    """Put one "TABLE.KEY=VALUE" into the data; complaints instead where that cannot be."""
    path, equals, written = text.partition("=")
    parts = [part.strip() for part in path.strip().split(".")]
    if not equals:
        rule = "an override reads TABLE.KEY=VALUE"
        return [
            Complaint(key=f"--set {quoted(text)}", allowed=rule, remedy="--set 'plant.mass=52 g'")
        ]
    value = _override_value(written.strip())
    table = ".".join(part for part in parts if not _is_index(part))
    if table in _LISTED and isinstance(value, list) and len(parts) == 2:
        node = data.setdefault(parts[0], {})
        if isinstance(node, dict):
            node[parts[1]] = value
        return []
    label = f"--set {_plain('.'.join(parts))}"
    return _put(data, parts, value, label=label, written=_plain(written.strip()))


def _plain(text: str) -> str:
    """A text for a message: short, and on one line."""
    return quoted(text)[1:-1]


def _is_index(part: str) -> bool:
    return part.isascii() and part.isdigit()


def _put(
    data: MutableMapping[str, Any], parts: list[str], value: Any, *, label: str, written: str
) -> list[Complaint]:
    """Put a value at a known path; complaints instead where there is no such path."""
    shown = ".".join("0" if _is_index(part) else part for part in parts)
    if shown not in _known_paths():
        near = _nearest_path(parts)
        rule = f"there is no such key; the nearest is {near}"
        line = f"--set '{near}={written}'"
        return [Complaint(key=label, came=quoted(value), allowed=rule, remedy=line, nearest=near)]
    node: Any = data
    for index, part in enumerate(parts[:-1]):
        if isinstance(node, list):
            if not _is_index(part):
                break
            number = int(part) if len(part) < 6 else len(node)
            if number >= len(node):
                name = ".".join(parts[:index])
                rule = f"the file has {len(node)} of [[{name}]]; they count from 0"
                return [Complaint(key=label, came=quoted(value), allowed=rule)]
            node = node[number]
        elif isinstance(node, MutableMapping):
            fresh: Any = [] if ".".join(parts[: index + 1]) in _LISTED else {}
            node = node.setdefault(part, fresh)
    # A table of the wrong type is complained about where tables are looked at.
    if isinstance(node, MutableMapping):
        node[parts[-1]] = value
    return []


def _override_value(written: str) -> Any:
    """A TOML value if it is one, else the text itself: shells swallow quotes."""
    with contextlib.suppress(ValueError, RecursionError):
        parsed = tomllib.loads(f"value = {written}")
        if set(parsed) == {"value"}:
            return parsed["value"]
    return written


def _nearest_path(parts: list[str]) -> str:
    known = _known_paths()
    ends = [path for path in known if path.rsplit(".", 1)[1] == parts[-1]]
    return _nearest(".".join(parts), ends or known)


def _nearest(name: str, known: Iterable[str]) -> str:
    """The known name that looks most like it; always one."""
    return difflib.get_close_matches(name[:60], list(known), n=1, cutoff=0.0)[0]


# ------------------------------------------------------------------------------------- writing back


def text_with_values(text: str, values: Mapping[str, str | int | float]) -> str:
    """Replace values in the text of a loop file; comments and order stay.

    Parameters
    ----------
    text : str
        A loop file.
    values : mapping of str to str, int or float
        New values by path, such as {"plant.mass": "52 g"}. [in the value's own text]

    Returns
    -------
    str
        The text with the values in place; a key that was not there stands last in its table.

    Raises
    ------
    LoopFileError
        If the text is no TOML, or if a path is no key of a loop file.

    Notes
    -----
    Nothing but the paths is checked; `loop_from_text` checks the result.

    Examples
    --------
    >>> text_with_values('[plant]\\nmass = "48 g"  # weighed\\n', {"plant.mass": "52 g"})
    '[plant]\\nmass = "52 g"  # weighed\\n'
    """
    import tomlkit

    complaints: list[Complaint] = []
    _parse_toml(text, "")
    document = tomlkit.parse(text)
    for path, value in values.items():
        complaints += _put(document, path.split("."), value, label=path, written=_plain(str(value)))
    if complaints:
        raise LoopFileError(tuple(complaints))
    return tomlkit.dumps(document)


# ---------------------------------------------------------------------------- tables and their keys


@dataclass(frozen=True, slots=True, kw_only=True)
class _Gathering:
    """Where complaints gather, and what decides the units."""

    situation: _Situation
    complaints: list[Complaint]
    suspected: set[str]  # paths of keys, and tables, that a misspelt or misplaced one stands for


@dataclass(frozen=True, slots=True, kw_only=True)
class _View:
    """One table as validated; missing and refused keys give a stand-in, so that reading goes on."""

    gathering: _Gathering
    table: str
    place: str
    values: _Table
    refused: set[str]
    absent: bool

    def name(self, key: str) -> str:
        """The key as the file calls it."""
        if self.gathering.situation.rotary:
            return _ROTARY_NAMES.get(self.table, {}).get(key, key)
        return key

    def suspected(self, key: str) -> bool:
        """Whether something else in the file seems to be meant for this key."""
        meant = self.gathering.suspected
        return self.table in meant or f"{self.table}.{self.name(key)}" in meant

    def given(self, key: str) -> bool:
        """Whether the file has the key, right or wrong."""
        return key in self.refused or getattr(self.values, key) is not None

    def sound(self, *keys: str) -> bool:
        """Whether all keys are there and passed their own rules."""
        return all(
            key not in self.refused and getattr(self.values, key) is not None for key in keys
        )

    def get(self, key: str) -> Any:
        """The value, or None."""
        return getattr(self.values, key)

    def example(self, key: str) -> str:
        """A value that passes, in TOML."""
        return _rule_of(type(self.values), key).example(self.gathering.situation)

    def need(self, key: str, why: str = "") -> Any:
        """The value; where it is missing a complaint and a stand-in."""
        value = getattr(self.values, key)
        if value is not None:
            return value
        example = self.example(key)
        if key not in self.refused and not self.absent and not self.suspected(key):
            rule = f"this key is missing ({why})" if why else "this key is missing"
            self.complain(key, rule, f"{self.name(key)} = {example}")
            self.refused.add(key)
        written = tomllib.loads(f"value = {example}")["value"]
        return _rule_of(type(self.values), key).read(written, self.gathering.situation)

    def complain(self, key: str, allowed: str, remedy: str = "", *, came: str = "") -> None:
        """Add a complaint about a key."""
        self.gathering.complaints.append(
            Complaint(
                table=self.place, key=self.name(key), came=came, allowed=allowed, remedy=remedy
            )
        )


def _rule_of(model: type[_Table], key: str) -> _Rule:
    """The rule that reads a key."""
    for mark in model.model_fields[key].metadata:
        if isinstance(mark, PlainValidator) and isinstance(mark.func, _Rule):
            return mark.func
    raise AssertionError(f"{key} has no rule")


def _situation(plant: object, actuator: object) -> _Situation:
    """Motion and drive as far as they can be told before anything is checked."""
    plant = plant if isinstance(plant, dict) else {}
    actuator = actuator if isinstance(actuator, dict) else {}
    motion, drive = plant.get("motion"), actuator.get("drive")
    rotary = motion == "rotary" or (motion != "linear" and "inertia" in plant)
    voltage = drive == "voltage" or (drive != "current" and "resistance" in actuator)
    return _Situation(rotary=rotary, voltage=voltage)


def _at(data: dict[str, Any], table: str) -> tuple[bool, Any]:
    """Whether a table is there, and what is there."""
    node: Any = data
    for part in table.split("."):
        if not isinstance(node, dict) or part not in node:
            return False, None
        node = node[part]
    return True, node


def _view(gathering: _Gathering, table: str, data: dict[str, Any]) -> _View:
    """Look at a table that may stand once."""
    there, raw = _at(data, table)
    if there and not isinstance(raw, dict):
        rule = "this is a table that stands once"
        gathering.complaints.append(
            Complaint(table=table, came=quoted(raw), allowed=rule, remedy=f"[{table}]")
        )
        return _validated(gathering, table, table, {}, absent=True)
    children = {name.rpartition(".")[2] for name in _TABLES if name.startswith(f"{table}.")}
    values = {key: value for key, value in (raw or {}).items() if key not in children}
    return _validated(gathering, table, table, values)


def _listed_views(gathering: _Gathering, table: str, data: dict[str, Any]) -> list[_View]:
    """Look at a table that may stand several times."""
    there, raw = _at(data, table)
    if not there:
        return []
    if not isinstance(raw, list) or not all(isinstance(item, dict) for item in raw):
        rule = "this table may stand several times, so it has double brackets"
        gathering.complaints.append(
            Complaint(table=table, came=quoted(raw), allowed=rule, remedy=f"[[{table}]]")
        )
        return []
    return [
        _validated(gathering, table, f"{table}.{index}", item) for index, item in enumerate(raw)
    ]


def _validated(
    gathering: _Gathering, table: str, place: str, raw: dict[str, Any], *, absent: bool = False
) -> _View:
    """Validate a table; what is refused is complained about and left out."""
    model, situation = _TABLES[table], gathering.situation
    outside = _ROTARY_NAMES.get(table, {}) if situation.rotary else {}
    inside = {name: key for key, name in outside.items()}
    # A key under its linear name is unknown to a rotary loop; no toml key holds a NUL.
    values = {
        f"\0{key}" if key in outside else inside.get(key, key): value for key, value in raw.items()
    }
    refused: set[str] = set()
    try:
        checked = model.model_validate(values, context=situation)
    except ValidationError as errors:
        for error in errors.errors(include_url=False):
            key = str(error["loc"][0])
            refused.add(key)
            came = values[key]
            if error["type"] == "extra_forbidden":
                complaint = _unknown_key(table, place, key.removeprefix("\0"), came, situation)
                near = complaint.nearest
                gathering.suspected.add(near if "." in near else f"{table}.{near}")
            else:
                complaint = _refused_key(place, outside.get(key, key), came, error["ctx"]["error"])
            gathering.complaints.append(complaint)
        good = {key: value for key, value in values.items() if key not in refused}
        checked = model.model_validate(good, context=situation)
    return _View(
        gathering=gathering,
        table=table,
        place=place,
        values=checked,
        refused=refused,
        absent=absent,
    )


def _refused_key(place: str, key: str, came: Any, error: Exception) -> Complaint:
    """A known key with a value that breaks its rule."""
    if isinstance(error, QuantityError):
        rule, line = error.rule, f'"{error.suggestion}"'
    else:
        assert isinstance(error, _Refusal)
        rule, line = error.rule, error.line
    return Complaint(
        table=place, key=key, came=quoted(came), allowed=rule, remedy=f"{key} = {line}"
    )


def _shown_names(table: str, situation: _Situation) -> list[str]:
    """The keys of a table as this motion calls them."""
    other = _ROTARY_NAMES.get(table, {}) if situation.rotary else {}
    return [other.get(key, key) for key in _TABLES[table].model_fields]


def _brackets(table: str) -> str:
    return f"[[{table}]]" if table in _LISTED else f"[{table}]"


def _shown_key(key: str) -> str:
    return key if re.fullmatch(r"[A-Za-z0-9_-]{1,60}", key) else quoted(key)


def _shown_value(value: Any) -> str:
    """A value for a line to write; dots for what does not fit on a line."""
    return "..." if isinstance(value, dict | list) else quoted(value)


def _unknown_key(table: str, place: str, key: str, came: Any, situation: _Situation) -> Complaint:
    """A key that its table does not know: another motion's, another table's, or misspelt."""
    shown, value = _shown_key(key), _shown_value(came)
    if isinstance(came, dict) or (isinstance(came, list) and came and isinstance(came[0], dict)):
        near = _nearest(f"{table}.{key}", _TABLES)
        rule = f"there is no such table; the nearest is {near}"
        return Complaint(
            table=place,
            key=shown,
            came=quoted(came),
            allowed=rule,
            remedy=_brackets(near),
            nearest=near,
        )
    names = _shown_names(table, situation)
    pairs = _ROTARY_NAMES.get(table, {})
    other = pairs | {rotary: linear for linear, rotary in pairs.items()}
    if key in other and other[key] in names:
        near = other[key]
        rule = f"with {'rotary' if situation.rotary else 'linear'} motion this key is {near}"
        line = f"{near} = {_kept_or_example(table, _inside(table, near), came, situation)}"
        return Complaint(
            table=place, key=shown, came=quoted(came), allowed=rule, remedy=line, nearest=near
        )
    homes = [name for name in _TABLES if key in _shown_names(name, situation)]
    if homes:
        rule = f"this key belongs in {' or '.join(_brackets(name) for name in homes)}"
        near = f"{homes[0]}.{key}"
        line = f"{shown} = {value} under {_brackets(homes[0])}"
        return Complaint(
            table=place, key=shown, came=quoted(came), allowed=rule, remedy=line, nearest=near
        )
    close = difflib.get_close_matches(key[:60], names, n=1, cutoff=0.6)
    near = close[0] if close else _nearest(key, names)
    rule = f"there is no such key; the nearest is {near}"
    return Complaint(
        table=place,
        key=shown,
        came=quoted(came),
        allowed=rule,
        remedy=f"{near} = {value}",
        nearest=near,
    )


def _kept_or_example(table: str, key: str, came: Any, situation: _Situation) -> str:
    """The value that came, where the key can take it; else one that it can."""
    rule = _rule_of(_TABLES[table], key)
    with contextlib.suppress(ValueError):
        rule.read(came, situation)
        return quoted(came)
    return rule.example(situation)


def _inside(table: str, name: str) -> str:
    """The generalised name of a key."""
    found = [key for key, rotary in _ROTARY_NAMES.get(table, {}).items() if rotary == name]
    return found[0] if found else name


def _complain_about_unknown_tables(gathering: _Gathering, data: dict[str, Any]) -> None:
    """Complain about what stands at the top of the file and does not belong there."""
    for name, value in data.items():
        if name in _TOP:
            continue
        is_list = isinstance(value, list) and bool(value) and isinstance(value[0], dict)
        if isinstance(value, dict) or is_list:
            inner = [table for table in _TABLES if table.endswith(f".{name}")]
            near = inner[0] if inner else _nearest(name, _TABLES)
            rule = f"there is no such table; the nearest is {near}"
            complaint = Complaint(
                table=_shown_key(name), allowed=rule, remedy=_brackets(near), nearest=near
            )
        else:
            paths = [path.replace(".0.", ".") for path in _known_paths()]
            ends = [path for path in paths if path.rsplit(".", 1)[1] == name]
            near = ends[0] if ends else _nearest(name, paths)
            table, _, key = near.rpartition(".")
            complaint = Complaint(
                key=_shown_key(name),
                came=quoted(value),
                allowed=f"a key stands below its table; the nearest is {near}",
                remedy=f"{key} = {_shown_value(value)} under {_brackets(table)}",
                nearest=near,
            )
        gathering.complaints.append(complaint)
        if near not in data:
            gathering.suspected.add(near)


# --------------------------------------------------------------------------------- table by table


def _assemble(
    views: dict[str, _View], lists: dict[str, list[_View]], sha256: str, overrides: tuple[str, ...]
) -> Loop:
    """Gather the tables into a loop; with complaints the result is of no use."""
    assumptions: list[str] = []
    loop, check = views["loop"], views["check"]
    about = loop.get("about")
    sensor = _sensor(views["sensor"], assumptions)
    mechanics = _mechanics(
        views["plant"], views["plant.tolerance"], lists["plant.mode"], sensor, views, assumptions
    )
    actuator = _actuator(views["actuator"], assumptions)
    processor = _processor(views["processor"], views, assumptions)
    aim = _aim(views["aim"], lists["aim.notch"], processor, views["processor"], assumptions)
    step = check.need("step")
    scale_known = views["sensor"].sound("bits", "full_scale") or views["sensor"].sound("resolution")
    unit = _length_unit(loop)
    if check.sound("step") and scale_known and step < sensor.step:
        one = format_si(sensor.step, unit)
        rule = f"the step is at least one count, {one}"
        check.complain("step", rule, f"step = {check.example('step')}")
    if check.sound("step") and views["plant"].sound("travel") and step > mechanics.travel:
        rule = f"the step is at most the travel, {format_si(mechanics.travel, unit)}"
        check.complain("step", rule, f'step = "{format_si(mechanics.travel / 4.0, unit)}"')
    return Loop(
        name=loop.need("name"),
        about=about if about is not None else "",
        mechanics=mechanics,
        actuator=actuator,
        sensor=sensor,
        processor=processor,
        aim=aim,
        step=step,
        limits=_limits(views["limits"], assumptions),
        assumptions=tuple(assumptions),
        sha256=sha256,
        overrides=overrides,
    )


def _length_unit(view: _View) -> str:
    return "rad" if view.gathering.situation.rotary else "m"


def _rad_per_s(frequency_hz: float) -> float:
    return 2.0 * math.pi * frequency_hz


def _angular(view: _View, key: str) -> float | None:
    frequency_hz = view.get(key)
    return None if frequency_hz is None else _rad_per_s(frequency_hz)


def _code_range(view: _View, bits: int, zero_key: str) -> tuple[int, int, int]:
    """Zero, least and largest code of a converter."""
    unsigned = view.get("coding") == "unsigned"
    half = 1 << (bits - 1)
    low, high = (0, 2 * half - 1) if unsigned else (-half, half - 1)
    zero = view.get(zero_key)
    if zero is None:
        zero = half if unsigned else 0
    elif not low < zero < high:
        remedy = f"{zero_key} = {half if unsigned else 0}"
        view.complain(zero_key, f"the codes go from {low} to {high}", remedy, came=str(zero))
        zero = half if unsigned else 0
    return zero, low, high


def _sensor(view: _View, assumptions: list[str]) -> Sensor:
    unit = _length_unit(view)
    encoder = view.given("resolution")
    if encoder and view.given("full_scale"):
        view.complain("resolution", "full_scale says the same; keep one of the two")
    if encoder:
        step = view.need("resolution")
        bits = view.get("bits") or ENCODER_BITS
    else:
        full_scale = view.need("full_scale", "or resolution, for an encoder")
        bits = view.need("bits")
        step = math.ldexp(full_scale, 1 - bits)
    zero, low, high = _code_range(view, bits, "zero_count")
    noise, noise_peak = view.get("noise"), view.get("noise_peak")
    if noise is not None and noise_peak is not None and noise_peak < noise:
        remedy = f'noise_peak = "{format_si(6.0 * noise, unit)}"'
        view.complain("noise_peak", "the peak is at least the rms noise", remedy)
    if noise is not None and noise_peak is None:
        noise_peak = 6.0 * noise
        assumptions.append(f"noise_peak = 6 x noise = {format_si(noise_peak, unit)}")
    if noise is None and noise_peak is None:
        assumptions.append("the sensor has no noise of its own")
    return Sensor(
        step=step,
        bits=bits,
        zero_count=zero,
        low_count=low,
        high_count=high,
        polarity=view.get("polarity") or 1,
        noise=noise,
        noise_peak=noise_peak,
        filter_corner_rad_per_s=_angular(view, "filter_corner"),
    )


def _mechanics(
    view: _View,
    tolerance: _View,
    modes: list[_View],
    sensor: Sensor,
    views: dict[str, _View],
    assumptions: list[str],
) -> Mechanics:
    motion = view.need("motion")
    mass, damping, stiffness = _mass_damping_stiffness(view)
    unit = _length_unit(view)
    seen = sensor.step * min(
        sensor.zero_count - sensor.low_count, sensor.high_count - sensor.zero_count
    )
    travel = view.get("travel")
    if travel is None:
        travel = seen
        assumptions.append(f"travel = {format_si(travel, unit)}, what the sensor sees either side")
    elif travel > sensor.step * (sensor.high_count - sensor.low_count + 1) / 2.0:
        assumptions.append(
            f"travel = {format_si(travel, unit)}, beyond the {format_si(seen, unit)} that the "
            "sensor sees: outside of these the counts stand still"
        )
    zero = [
        view.name(key) for key in ("rest_position", "bias_force", "friction") if not view.given(key)
    ]
    if zero:
        assumptions.append(f"taken as 0: {', '.join(zero)}")
    bias_force = view.get("bias_force") or 0.0
    return Mechanics(
        motion=motion,
        mass=mass,
        damping=damping,
        stiffness=stiffness,
        rest_position=view.get("rest_position") or 0.0,
        travel=travel,
        bias_force=bias_force,
        friction=view.get("friction") or 0.0,
        tolerance=_tolerance(tolerance, bias_force, views["processor"], assumptions),
        modes=tuple(_mode(mode) for mode in modes),
    )


def _mass_damping_stiffness(view: _View) -> tuple[float, float, float]:
    """Given as such, or by natural frequency, damping ratio and one of mass and stiffness."""
    mass_name = view.name("mass")
    if not view.given("natural_frequency") and not view.given("damping_ratio"):
        why = "or natural_frequency and damping_ratio"
        mass, damping = view.need("mass"), view.need("damping", why)
        return mass, damping, view.need("stiffness", why)
    w = _rad_per_s(view.need("natural_frequency", "damping_ratio needs it"))
    ratio = view.need("damping_ratio", "natural_frequency needs it")
    if view.given("damping"):
        view.complain("damping", "damping_ratio says the same; keep one of the two")
    if view.given("mass") and view.given("stiffness"):
        rule = f"natural_frequency and {mass_name} say the same; keep two of the three"
        view.complain("stiffness", rule)
    if view.given("stiffness"):
        stiffness = view.need("stiffness")
        mass = stiffness / (w * w)
        if view.sound("stiffness", "natural_frequency") and not view.given("mass"):
            kind = view.gathering.situation.kind(_MASSES)
            if stiffness == 0.0:
                rule = "a natural frequency needs a stiffness above 0"
                view.complain("stiffness", rule, f"stiffness = {view.example('stiffness')}")
            elif not kind.smallest <= mass <= kind.largest:
                rule = (
                    f"with this stiffness the {mass_name} is {mass:.4g} {kind.unit}, not plausible"
                )
                remedy = f"natural_frequency = {view.example('natural_frequency')}"
                view.complain("natural_frequency", rule, remedy)
    else:
        mass = view.need("mass", "or stiffness; natural_frequency needs one")
        stiffness = mass * w * w
    return mass, 2.0 * ratio * math.sqrt(stiffness * mass), stiffness


def _tolerance(
    view: _View, bias_force: float, processor: _View, assumptions: list[str]
) -> Tolerance:
    if all(value is None for value in view.values.model_dump().values()) and not view.refused:
        assumptions.append("no tolerances: every unit is like the nominal one")
    sort, bias = view.get("bias") or ("absolute", 0.0)
    if sort == "share":
        share, bias = bias, bias * abs(bias_force)
        if bias_force == 0.0 and share > 0.0:
            assumptions.append(f"tolerance bias = {100.0 * share:g} % of a bias of 0 is 0")
    delay, nominal = view.get("delay") or 0.0, processor.get("delay")
    if nominal is not None and delay > nominal:
        rule = f"a half-width is at most the delay itself, {format_si(nominal, 's')}"
        view.complain("delay", rule, f'delay = "{format_si(nominal, "s")}"')
    keys = ("mass", "damping", "stiffness", "force", "resistance", "mode_frequency", "sensor")
    relative = {key: view.get(key) or 0.0 for key in keys}
    return Tolerance(**relative, delay_s=delay, bias=bias)


def _mode(view: _View) -> Mode:
    return Mode(
        frequency_rad_per_s=_rad_per_s(view.need("frequency")),
        damping_ratio=view.need("damping_ratio"),
        mass=view.need("mass"),
        sign=view.need("sign"),
    )


def _actuator(view: _View, assumptions: list[str]) -> Actuator:
    drive = view.need("drive")
    voltage = view.gathering.situation.voltage
    unit = "V" if voltage else "A"
    force_constant = view.need("force_constant")
    full_scale, bits, limit = view.need("full_scale"), view.need("bits"), view.need("limit")
    zero, low, high = _code_range(view, bits, "zero_code")
    # Decimal text of the doubles: a limit of a quarter of full scale is that many codes exactly.
    codes = Fraction(repr(limit)) / Fraction(repr(full_scale)) * (1 << (bits - 1))
    room = min((1 << (bits - 1)) - 1, zero - low, high - zero)
    limit_code = min(math.floor(codes), room)
    if view.sound("full_scale", "bits", "limit"):
        one = format_si(math.ldexp(full_scale, 1 - bits), unit)
        if limit > full_scale:
            remedy = f'limit = "{format_si(full_scale, unit)}"'
            view.complain("limit", "the limit is at most full_scale", remedy)
        elif limit_code < 1:
            view.complain("limit", f"the limit is at least one code, {one}", f'limit = "{one}"')
    if voltage:
        resistance = view.need("resistance", "drive = voltage needs it")
        if view.given("bandwidth"):
            view.complain("bandwidth", "a current loop goes with drive = current; leave it out")
    else:
        resistance = view.get("resistance")
        idle = [key for key in ("resistance", "inductance", "back_emf") if view.given(key)]
        if idle:
            assumptions.append(f"without effect with drive = current: {', '.join(idle)}")
    back_emf = view.get("back_emf")
    if back_emf is None:
        back_emf = force_constant
        if voltage:
            emf_unit = view.gathering.situation.kind(("back_emf", "rotary_back_emf")).unit
            name = view.name("force_constant")
            assumptions.append(f"back_emf = {format_si(back_emf, emf_unit)}, like {name}")
    return Actuator(
        drive=drive,
        force_constant=force_constant,
        full_scale=full_scale,
        bits=bits,
        zero_code=zero,
        low_code=low,
        high_code=high,
        polarity=view.get("polarity") or 1,
        limit=limit,
        limit_code=limit_code,
        bandwidth_rad_per_s=None if voltage else _angular(view, "bandwidth"),
        continuous_a=view.get("continuous"),
        resistance_ohm=resistance,
        inductance_h=view.get("inductance") or 0.0,
        back_emf=back_emf,
    )


MAX_DELAY_PERIODS = 200
"""Longest delay in sample periods."""


def _processor(view: _View, views: dict[str, _View], assumptions: list[str]) -> Processor:
    core, clock = view.need("core"), view.get("clock")
    if clock is None and core != "host" and not view.given("clock"):
        clock = view.need("clock", f"core = {core} needs it")
    rate, delay = view.need("sample_rate"), view.need("delay")
    if view.sound("sample_rate", "delay") and delay * rate > MAX_DELAY_PERIODS:
        rule = f"the delay is at most {MAX_DELAY_PERIODS} sample periods"
        view.complain("delay", rule, f'delay = "{format_si(1.0 / rate, "s")}"')
    if view.sound("clock", "sample_rate") and view.get("clock") <= rate:
        rule = f"the clock is faster than the sample rate, {format_si(rate, 'Hz')}"
        view.complain("clock", rule, f"clock = {view.example('clock')}")
    word = view.get("word")
    if word is None:
        word = "auto"
        if not view.given("word"):
            assumptions.append("word = auto")
    if view.sound("word") and word != "auto":
        for name in ("actuator", "sensor"):
            _complain_about_word(views[name], word)
    return Processor(
        core=core,
        clock_hz=clock,
        wait_states=view.get("wait_states") or 0,
        sample_rate_hz=rate,
        delay_s=delay,
        word=word,
    )


def _complain_about_word(converter: _View, word: int) -> None:
    """Codes of the converter must fit the integer type of the word."""
    unsigned = converter.get("coding") == "unsigned"
    most = word - 1 if unsigned else word
    bits = converter.get("bits")
    if bits is None and converter.table == "sensor" and converter.sound("resolution"):
        bits = ENCODER_BITS
    if bits is not None and bits > most:
        sort = "unsigned codes" if unsigned else "codes"
        rule = f"with word = {word} {sort} have at most {most} bits"
        converter.complain("bits", rule, f"bits = {most}", came=str(bits))


_GAINS = ("kp", "kd", "ki")
_PAIR_TARGETS = ("damping_ratio", "bandwidth", "natural_frequency")
_LEAD_TARGETS = ("crossover", "phase_margin")


def _aim(
    view: _View,
    notches: list[_View],
    processor: Processor,
    timing: _View,
    assumptions: list[str],
) -> Aim:
    law = view.need("law")
    if view.sound("law"):
        _complain_about_targets(view, law)
        # Left in, such keys allow to try another law by changing one line.
        given_gains = any(view.given(key) for key in _GAINS)
        idle = [
            key
            for key in ("integral_corner", "beta")
            if view.given(key) and (law != "pid" or (given_gains and key == "integral_corner"))
        ]
        if idle:
            kind = f"law = {law}" + (" and given gains" if law == "pid" else "")
            assumptions.append(f"without effect with {kind}: {', '.join(idle)}")
    half_rate = processor.sample_rate_hz / 2.0
    if timing.sound("sample_rate"):
        rule = f"this lies below half the sample rate, {format_si(half_rate, 'Hz')}"
        line = format_si(half_rate / 2.0, "Hz")
        for key in ("derivative_corner", "integral_corner"):
            if view.sound(key) and view.get(key) >= half_rate:
                view.complain(key, rule, f'{key} = "{line}"')
        for notch in notches:
            if notch.sound("frequency") and notch.get("frequency") >= half_rate:
                notch.complain("frequency", rule, f'frequency = "{line}"')
    ratio = view.get("damping_ratio")
    return Aim(
        law=law,
        damping_ratio=None if ratio == "fastest" else ratio,
        fastest=ratio == "fastest",
        bandwidth_hz=view.get("bandwidth"),
        natural_frequency_hz=view.get("natural_frequency"),
        crossover_hz=view.get("crossover"),
        phase_margin_deg=view.get("phase_margin"),
        derivative_corner_hz=view.get("derivative_corner"),
        integral_corner_hz=view.get("integral_corner"),
        kp=view.get("kp"),
        kd=view.get("kd"),
        ki=view.get("ki"),
        beta=view.get("beta"),
        notches=tuple(
            Notch(
                frequency_rad_per_s=_rad_per_s(notch.need("frequency")),
                width=notch.need("width"),
                depth_db=notch.need("depth"),
            )
            for notch in notches
        ),
    )


def _complain_about_targets(view: _View, law: str) -> None:
    """Targets or gains, not both; those that belong to the law, all of them."""
    gains = [key for key in _GAINS if view.given(key)]
    targets = [key for key in (*_PAIR_TARGETS, *_LEAD_TARGETS) if view.given(key)]
    if gains and targets:
        view.complain(
            gains[0],
            f"gains are given, and targets too ({', '.join(targets)}); keep one or the other",
        )
        return
    if gains:
        if law != "pid" and "ki" in gains:
            view.complain("ki", f"this goes with law = pid; leave it out of law = {law}")
        wanted = _GAINS if law == "pid" else _GAINS[:2]
        for key in wanted:
            view.need(key, f"law = {law} with given gains needs {', '.join(wanted)}")
        return
    if law == "lead":
        for key in _PAIR_TARGETS:
            if view.given(key):
                view.complain(key, "law = lead takes crossover and phase_margin instead")
        for key in _LEAD_TARGETS:
            view.need(key, "law = lead needs it")
        return
    for key in _LEAD_TARGETS:
        if view.given(key):
            view.complain(key, f"this goes with law = lead; leave it out of law = {law}")
    view.need("damping_ratio", f"law = {law} needs it, or gains kp and kd")
    if view.given("bandwidth") and view.given("natural_frequency"):
        view.complain("natural_frequency", "bandwidth says the same; keep one of the two")
    if not view.given("bandwidth") and not view.given("natural_frequency"):
        if not view.suspected("natural_frequency"):
            view.need("bandwidth", "or natural_frequency")


def _limits(view: _View, assumptions: list[str]) -> Limits:
    if view.given("settling_time") and not view.given("settling_band"):
        view.need("settling_band", "settling_time needs it")
    plain = view.values.model_dump()
    if all(value is None for value in plain.values()) and not view.refused:
        assumptions.append("no limits are given, so only the design itself is judged")
    suffixed = {
        "settling_time": "settling_time_s",
        "phase_margin": "phase_margin_deg",
        "gain_margin": "gain_margin_db",
        "gain_reduction": "gain_reduction_db",
        "delay_margin": "delay_margin_s",
        "deviation": "deviation_count",
        "limit_cycle": "limit_cycle_count",
        "rms_current": "rms_current_a",
        "update_time": "update_time_s",
    }
    return Limits(**{suffixed.get(key, key): value for key, value in plain.items()})


# ----------------------------------------------------------------------------- a file to begin with


def new_loop_text(name: str) -> str:
    """A commented loop file to start from.

    Parameters
    ----------
    name : str
        Name of the loop; changed into the nearest C identifier where it is none.

    Returns
    -------
    str
        A complete loop file, with invented numbers; optional keys are commented out.

    Notes
    -----
    The numbers are this project's own and belong to no real stage.

    Examples
    --------
    >>> new_loop_text("X stage").splitlines()[4]
    'name = "x_stage"                # starts every emitted name; a C identifier in small letters'
    """
    tame = _tame_name(name)
    return _NEW_LOOP.replace("NAME", f'"{tame}"').replace("BLANK", " " * max(1, 23 - len(tame)))


_NEW_LOOP = """\
# A position loop. Every number below is invented: replace all of them by those of your own stage.
# A physical quantity is a text "number unit"; keys behind a # are optional.

[loop]
name = NAMEBLANK# starts every emitted name; a C identifier in small letters
about = "Replace by one line on what moves"

[plant]
motion = "linear"               # or "rotary": inertia, torque_constant, bias_torque; angles
mass = "35 g"
damping = "0.6 N*s/m"
stiffness = "1.8 N/mm"          # "0 N/m" for a free mass
# instead of mass, damping, stiffness: natural_frequency, damping_ratio and mass or stiffness
# rest_position = "0 mm"        # where the spring is relaxed, from sensor zero
travel = "1.4 mm"               # end stop, either side of sensor zero
# bias_force = "0 N"            # gravity or a preload
# friction = "0 N"              # Coulomb level

[plant.tolerance]               # half-widths from unit to unit, for the spread; all optional
mass = "4 %"
damping = "40 %"
stiffness = "8 %"
force = "6 %"
# resistance = "10 %"
# mode_frequency = "5 %"
# sensor = "1 %"
# bias = "10 %"                 # or in newton
delay = "2 us"

# [[plant.mode]]                # a flexure mode; may stand several times
# frequency = "1.7 kHz"
# damping_ratio = 0.015
# mass = "0.8 kg"
# sign = -1                     # -1: the sensor sees it move against the force

[actuator]
drive = "current"               # or "voltage": resistance, inductance, back_emf; then V for A
force_constant = "7.2 N/A"
full_scale = "2 A"              # value at code 2^(bits-1)
bits = 12
# coding = "unsigned"           # offset codes; zero_code = 2048 is the default then
# polarity = -1                 # a positive code pushes to the negative side
limit = "1.6 A"                 # the controller never asks for more
# bandwidth = "6 kHz"           # of the current loop
# continuous = "0.7 A"          # rms rating

[sensor]
full_scale = "1.6 mm"           # position at count 2^(bits-1); or resolution = "50 nm" (encoder)
bits = 14
noise = "50 nm"                 # rms
# noise_peak = "300 nm"         # what proofs reckon with; default 6 x noise
# filter_corner = "25 kHz"      # analog low-pass

[processor]
core = "cortex-m4"              # avr, cortex-m0plus, cortex-m3, cortex-m4, rv32imc, host
clock = "48 MHz"
# wait_states = 1
sample_rate = "16 kHz"
delay = "22 us"                 # sampling instant to actuator update
word = 32                       # 16, 32 or "auto"

[aim]
law = "pd"                      # "pd", "lead", "pid"
damping_ratio = 0.75            # or "fastest"
bandwidth = "140 Hz"            # or natural_frequency; law = "lead": crossover and phase_margin
# derivative_corner = "1.2 kHz"
# instead of targets, gains of a loop that exists: kp = "25 N/mm", kd = "60 N*s/m"

# [[aim.notch]]                 # may stand several times
# frequency = "1.7 kHz"
# width = 0.25
# depth = "18 dB"

[check]
step = "80 um"                  # the step that is checked

[limits]                        # every key becomes a requirement with a verdict
overshoot = "5 %"
settling_time = "12 ms"
settling_band = "1 %"           # goes with settling_time
# final_error = "2 um"
phase_margin = "40 deg"
gain_margin = "6 dB"
# gain_reduction = "8 dB"
delay_margin = "30 us"
peak_sensitivity = 2.0
# position_noise = "0.3 um"
# stiffness_at_dc = "10 N/mm"
# deviation = "3 count"
# limit_cycle = "3 count"
# rms_current = "0.7 A"
# update_time = "18 us"
# load = "40 %"
"""
