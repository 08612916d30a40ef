"""The loop file: every key read, every rule complained about, all complaints at once."""

from __future__ import annotations

import hashlib
import json
import math
import os
import re
import subprocess
import sys
from dataclasses import fields, is_dataclass
from pathlib import Path

import pytest

from plant2 import loopfile
from plant2.errors import Complaint, LoopFileError
from plant2.loopfile import (
    CORES,
    Loop,
    load_loop,
    loop_from_text,
    new_loop_text,
    text_with_values,
)

PLAIN = new_loop_text("x_stage")

FULL = """
[loop]
name = "lens_7"
about = "A lens on leaf springs"
[plant]
motion = "linear"
mass = "62 g"
damping = "1.1 N*s/m"
stiffness = "3.4 N/mm"
rest_position = "-0.05 mm"
travel = "0.9 mm"
bias_force = "-0.61 N"
friction = "20 mN"
[plant.tolerance]
mass = "2 %"
damping = "60 %"
stiffness = "7 %"
force = "5 %"
resistance = "9 %"
mode_frequency = "4 %"
sensor = "1 %"
delay = "3 us"
bias = "0.1 N"
[[plant.mode]]
frequency = "1.1 kHz"
damping_ratio = 0.012
mass = "0.7 kg"
sign = -1
[[plant.mode]]
frequency = "15000 rad/s"
damping_ratio = 0
mass = "2 kg"
sign = 1
[actuator]
drive = "current"
force_constant = "11 N/A"
full_scale = "1.8 A"
bits = 10
coding = "unsigned"
zero_code = 500
polarity = -1
limit = "1.7 A"
bandwidth = "7 kHz"
continuous = "0.8 A"
[sensor]
full_scale = "1 mm"
bits = 12
coding = "unsigned"
zero_count = 2000
polarity = -1
noise = "80 nm"
noise_peak = "0.4 um"
filter_corner = "30 kHz"
[processor]
core = "rv32imc"
clock = "72 MHz"
wait_states = 2
sample_rate = "12.5 kHz"
delay = "95 us"
word = 16
[aim]
law = "pid"
damping_ratio = 0.9
natural_frequency = "110 Hz"
derivative_corner = "0.9 kHz"
integral_corner = "12 Hz"
beta = 0.4
[[aim.notch]]
frequency = "1.1 kHz"
width = 0.3
depth = "15 dB"
[[aim.notch]]
frequency = "2.4 kHz"
width = 0.1
depth = "6 dB"
[check]
step = "120 um"
[limits]
overshoot = "4 %"
settling_time = "14 ms"
settling_band = "2 %"
final_error = "3 um"
phase_margin = "38 deg"
gain_margin = "5 dB"
gain_reduction = "7 dB"
delay_margin = "35 us"
peak_sensitivity = 2.2
position_noise = "0.5 um"
stiffness_at_dc = "15 N/mm"
deviation = "2.5 count"
limit_cycle = "4 count"
rms_current = "0.75 A"
update_time = "25 us"
load = "35 %"
"""

ROTARY = """
[loop]
name = "mirror"
[plant]
motion = "rotary"
inertia = "0.7 g*cm**2"
damping = "3 uN*m*s/rad"
stiffness = "0.2 mN*m/deg"
rest_position = "0.5 deg"
travel = "9 deg"
bias_torque = "0.1 mN*m"
friction = "5 uN*m"
[plant.tolerance]
inertia = "3 %"
torque = "6 %"
bias = "20 %"
[[plant.mode]]
frequency = "2.2 kHz"
damping_ratio = 0.01
inertia = "9 g*cm**2"
sign = 1
[actuator]
drive = "voltage"
torque_constant = "8 mN*m/A"
full_scale = "10 V"
bits = 12
limit = "9 V"
resistance = "6 ohm"
inductance = "0.4 mH"
[sensor]
resolution = "5 urad"
[processor]
core = "host"
sample_rate = "20 kHz"
delay = "0 us"
[aim]
law = "lead"
crossover = "210 Hz"
phase_margin = "48 deg"
[check]
step = "8 mrad"
"""

PI = math.pi


def complaints_of(text: str, *overrides: str) -> tuple[Complaint, ...]:
    with pytest.raises(LoopFileError) as caught:
        loop_from_text(text, overrides)
    return caught.value.complaints


def without(text: str, *lines: str) -> str:
    """The text without the lines that start so; each must be there once."""
    for start in lines:
        kept = [line for line in text.split("\n") if not line.startswith(start)]
        assert len(kept) == text.count("\n"), start
        text = "\n".join(kept)
    return text


def facts(record: object, prefix: str = "") -> dict[str, object]:
    """All plain values of nested records, by dotted name."""
    found: dict[str, object] = {}
    for field in fields(record):  # type: ignore[arg-type]
        value = getattr(record, field.name)
        name = f"{prefix}{field.name}"
        if is_dataclass(value):
            found |= facts(value, f"{name}.")
        elif isinstance(value, tuple) and value and is_dataclass(value[0]):
            for index, item in enumerate(value):
                found |= facts(item, f"{name}.{index}.")
        else:
            found[name] = value
    return found


# ------------------------------------------------------------------------------------- what is read


def test_every_key_of_a_linear_loop_arrives_in_si() -> None:
    expected: dict[str, object] = {
        "name": "lens_7",
        "about": "A lens on leaf springs",
        "mechanics.motion": "linear",
        "mechanics.mass": 0.062,
        "mechanics.damping": 1.1,
        "mechanics.stiffness": 3400.0,
        "mechanics.rest_position": -5e-5,
        "mechanics.travel": 9e-4,
        "mechanics.bias_force": -0.61,
        "mechanics.friction": 0.02,
        "mechanics.tolerance.mass": 0.02,
        "mechanics.tolerance.damping": 0.6,
        "mechanics.tolerance.stiffness": 0.07,
        "mechanics.tolerance.force": 0.05,
        "mechanics.tolerance.resistance": 0.09,
        "mechanics.tolerance.mode_frequency": 0.04,
        "mechanics.tolerance.sensor": 0.01,
        "mechanics.tolerance.delay_s": 3e-6,
        "mechanics.tolerance.bias": 0.1,
        "mechanics.modes.0.frequency_rad_per_s": pytest.approx(2200 * PI, rel=1e-15),
        "mechanics.modes.0.damping_ratio": 0.012,
        "mechanics.modes.0.mass": 0.7,
        "mechanics.modes.0.sign": -1,
        "mechanics.modes.1.frequency_rad_per_s": pytest.approx(15000.0, rel=1e-15),
        "mechanics.modes.1.damping_ratio": 0.0,
        "mechanics.modes.1.mass": 2.0,
        "mechanics.modes.1.sign": 1,
        "actuator.drive": "current",
        "actuator.force_constant": 11.0,
        "actuator.full_scale": 1.8,
        "actuator.bits": 10,
        "actuator.zero_code": 500,
        "actuator.low_code": 0,
        "actuator.high_code": 1023,
        "actuator.polarity": -1,
        "actuator.limit": 1.7,
        "actuator.limit_code": 483,  # 1.7/1.8 x 512 = 483.6
        "actuator.bandwidth_rad_per_s": pytest.approx(14000 * PI, rel=1e-15),
        "actuator.continuous_a": 0.8,
        "actuator.resistance_ohm": None,
        "actuator.inductance_h": 0.0,
        "actuator.back_emf": 11.0,
        "sensor.step": 1e-3 / 2048,
        "sensor.bits": 12,
        "sensor.zero_count": 2000,
        "sensor.low_count": 0,
        "sensor.high_count": 4095,
        "sensor.polarity": -1,
        "sensor.noise": 8e-8,
        "sensor.noise_peak": 4e-7,
        "sensor.filter_corner_rad_per_s": pytest.approx(60000 * PI, rel=1e-15),
        "processor.core": "rv32imc",
        "processor.clock_hz": 72e6,
        "processor.wait_states": 2,
        "processor.sample_rate_hz": 12500.0,
        "processor.delay_s": 95e-6,
        "processor.word": 16,
        "aim.law": "pid",
        "aim.damping_ratio": 0.9,
        "aim.fastest": False,
        "aim.bandwidth_hz": None,
        "aim.natural_frequency_hz": 110.0,
        "aim.crossover_hz": None,
        "aim.phase_margin_deg": None,
        "aim.derivative_corner_hz": 900.0,
        "aim.integral_corner_hz": 12.0,
        "aim.kp": None,
        "aim.kd": None,
        "aim.ki": None,
        "aim.beta": 0.4,
        "aim.notches.0.frequency_rad_per_s": pytest.approx(2200 * PI, rel=1e-15),
        "aim.notches.0.width": 0.3,
        "aim.notches.0.depth_db": 15.0,
        "aim.notches.1.frequency_rad_per_s": pytest.approx(4800 * PI, rel=1e-15),
        "aim.notches.1.width": 0.1,
        "aim.notches.1.depth_db": 6.0,
        "step": 1.2e-4,
        "limits.overshoot": 0.04,
        "limits.settling_time_s": 0.014,
        "limits.settling_band": 0.02,
        "limits.final_error": 3e-6,
        "limits.phase_margin_deg": 38.0,
        "limits.gain_margin_db": 5.0,
        "limits.gain_reduction_db": 7.0,
        "limits.delay_margin_s": 35e-6,
        "limits.peak_sensitivity": 2.2,
        "limits.position_noise": 5e-7,
        "limits.stiffness_at_dc": 15000.0,
        "limits.deviation_count": 2.5,
        "limits.limit_cycle_count": 4.0,
        "limits.rms_current_a": 0.75,
        "limits.update_time_s": 25e-6,
        "limits.load": 0.35,
        "assumptions": (),
        "sha256": hashlib.sha256(FULL.encode()).hexdigest(),
        "overrides": (),
    }
    assert facts(loop_from_text(FULL)) == expected


def test_every_key_of_a_rotary_loop_arrives_in_si() -> None:
    loop = loop_from_text(ROTARY)
    mechanics, actuator, sensor = loop.mechanics, loop.actuator, loop.sensor
    degree = PI / 180
    assert mechanics.motion == "rotary"
    assert mechanics.mass == 0.7e-7
    assert mechanics.damping == 3e-6
    assert mechanics.stiffness == pytest.approx(2e-4 / degree, rel=1e-15)
    assert mechanics.rest_position == pytest.approx(0.5 * degree, rel=1e-15)
    assert mechanics.travel == pytest.approx(9 * degree, rel=1e-15)
    assert (mechanics.bias_force, mechanics.friction) == (1e-4, 5e-6)
    assert (mechanics.tolerance.mass, mechanics.tolerance.force) == (0.03, 0.06)
    assert mechanics.tolerance.bias == pytest.approx(2e-5, rel=1e-15)  # 20 % of the bias torque
    assert mechanics.modes[0].mass == 9e-7
    assert (actuator.drive, actuator.full_scale, actuator.limit) == ("voltage", 10.0, 9.0)
    assert (actuator.resistance_ohm, actuator.inductance_h) == (6.0, 4e-4)
    assert (actuator.force_constant, actuator.back_emf) == (0.008, 0.008)
    assert actuator.bandwidth_rad_per_s is None
    assert (sensor.step, sensor.bits) == (5e-6, 32)
    assert (sensor.low_count, sensor.high_count) == (-(2**31), 2**31 - 1)
    assert (loop.processor.core, loop.processor.clock_hz, loop.processor.word) == (
        "host",
        None,
        "auto",
    )
    assert (loop.aim.crossover_hz, loop.aim.phase_margin_deg) == (210.0, 48.0)
    assert loop.step == 0.008
    assert loop.assumptions == (
        "the sensor has no noise of its own",
        "back_emf = 8 mV*s/rad, like torque_constant",
        "word = auto",
        "no limits are given, so only the design itself is judged",
    )


def test_derived_properties() -> None:
    loop = loop_from_text(FULL)
    assert loop.actuator.step == 1.8 / 512
    assert loop.processor.period_s == 8e-5
    notch = loop.aim.notches[0]
    assert notch.zp == 0.15
    assert 20 * math.log10(notch.zp / notch.zz) == pytest.approx(15.0, rel=1e-14)


def test_natural_frequency_form_gives_the_same_plant() -> None:
    direct = loop_from_text(PLAIN).mechanics
    w = math.sqrt(direct.stiffness / direct.mass)
    ratio = direct.damping / (2 * math.sqrt(direct.stiffness * direct.mass))
    short = re.sub(r'(?m)^(damping|stiffness) = "[^%"]*".*\n', "", PLAIN)
    given = (f"plant.natural_frequency={w / 2 / PI!r} Hz", f"plant.damping_ratio={ratio!r}")
    by_mass = loop_from_text(short, given).mechanics
    assert by_mass.stiffness == pytest.approx(direct.stiffness, rel=1e-14)
    assert by_mass.damping == pytest.approx(direct.damping, rel=1e-14)
    assert by_mass.mass == direct.mass
    short = re.sub(r'(?m)^mass = "35 g".*\n', "", short)
    by_stiffness = loop_from_text(short, (*given, "plant.stiffness=1.8 N/mm")).mechanics
    assert by_stiffness.mass == pytest.approx(direct.mass, rel=1e-14)
    assert by_stiffness.damping == pytest.approx(direct.damping, rel=1e-14)


@pytest.mark.parametrize(
    ("limit", "full_scale", "bits", "code"),
    [
        ("1.6 A", "2 A", 12, 1638),
        ("2 A", "2 A", 12, 2047),  # the converter's last code
        ("0.4125 A", "1.1 A", 12, 768),  # three eighths exactly, whatever the doubles say
        ("0.3 A", "2.4 A", 12, 256),
        ("0.7 A", "5.6 A", 16, 4096),
        ("1 mA", "2 A", 12, 1),
    ],
)
def test_limit_is_rounded_down_to_a_code(limit: str, full_scale: str, bits: int, code: int) -> None:
    sets = (f"actuator.limit={limit}", f"actuator.full_scale={full_scale}", f"actuator.bits={bits}")
    assert loop_from_text(PLAIN, sets).actuator.limit_code == code


def test_limit_stays_inside_an_offset_code_range() -> None:
    sets = ("actuator.coding=unsigned", "actuator.zero_code=1000")
    actuator = loop_from_text(PLAIN, sets).actuator
    assert (actuator.low_code, actuator.high_code) == (0, 4095)
    assert actuator.limit_code == 1000
    middle = loop_from_text(PLAIN, sets[:1]).actuator
    assert (middle.zero_code, middle.limit_code) == (2048, 1638)


def test_fastest_is_a_damping_ratio() -> None:
    aim = loop_from_text(PLAIN, ["aim.damping_ratio=fastest"]).aim
    assert (aim.damping_ratio, aim.fastest) == (None, True)


GAINS = [
    ("linear", "current", "25 N/mm", "60 N*s/m", "90 N/mm/s", (25000.0, 60.0, 90000.0)),
    ("linear", "voltage", "9 V/mm", "12 V*s/m", "80 V/mm/s", (9000.0, 12.0, 80000.0)),
    ("rotary", "current", "0.5 N*m/rad", "2 mN*m*s/rad", "3 N*m/rad/s", (0.5, 0.002, 3.0)),
    ("rotary", "voltage", "40 V/rad", "0.05 V*s/rad", "500 V/rad/s", (40.0, 0.05, 500.0)),
]


@pytest.mark.parametrize(("motion", "drive", "kp", "kd", "ki", "si"), GAINS)
def test_units_of_given_gains_follow_motion_and_drive(
    motion: str, drive: str, kp: str, kd: str, ki: str, si: tuple[float, float, float]
) -> None:
    text = re.sub(r"(?m)^(damping_ratio|bandwidth) = (0.75|\"140 Hz\").*\n", "", PLAIN)
    if motion == "rotary":
        text = re.sub(r'(?m)^(crossover|phase_margin|law) = ".*"\n', "", ROTARY)
    scales = ("12 V", "10 V") if drive == "voltage" else ("2 A", "1.5 A")
    sets = [f"actuator.drive={drive}", "actuator.resistance=5 ohm", "aim.law=pid"]
    sets += [f"actuator.full_scale={scales[0]}", f"actuator.limit={scales[1]}"]
    gains = [f"aim.kp={kp}", f"aim.kd={kd}", f"aim.ki={ki}"]
    aim = loop_from_text(text, sets + gains).aim
    assert (aim.kp, aim.kd, aim.ki) == si
    for other in GAINS:
        if other[:2] == (motion, drive):
            continue
        wrong = [f"aim.kp={other[2]}", f"aim.ki={other[4]}", gains[1]]
        found = {(item.table, item.key) for item in complaints_of(text, *sets, *wrong)}
        assert found == {("aim", "kp"), ("aim", "ki")}


# ------------------------------------------------------------------------------------- assumptions


@pytest.mark.parametrize(
    ("overrides", "line"),
    [
        ((), "noise_peak = 6 x noise = 300 nm"),
        ((), "taken as 0: rest_position, bias_force, friction"),
        (("plant.friction=1 mN",), "taken as 0: rest_position, bias_force"),
        (
            ("plant.travel=2 mm",),
            "travel = 2 mm, beyond the 1.6 mm that the sensor sees: outside of these the counts "
            "stand still",
        ),
        (("plant.tolerance.bias=10 %",), "tolerance bias = 10 % of a bias of 0 is 0"),
        (
            ("actuator.resistance=4 ohm",),
            "without effect with drive = current: resistance",
        ),
        (("aim.integral_corner=5 Hz",), "without effect with law = pd: integral_corner"),
    ],
)
def test_assumptions_that_matter_are_said(overrides: tuple[str, ...], line: str) -> None:
    assert line in loop_from_text(PLAIN, overrides).assumptions


def test_travel_defaults_to_what_the_sensor_sees() -> None:
    loop = loop_from_text(without(PLAIN, "travel = "))
    assert loop.mechanics.travel == 8191 * 1.6e-3 / 8192
    assert "travel = 1.6 mm, what the sensor sees either side" in loop.assumptions


def test_about_and_tolerances_may_be_absent() -> None:
    text = re.sub(r"(?s)\[plant.tolerance\].*?(?=# \[\[plant.mode)", "", without(PLAIN, "about"))
    loop = loop_from_text(text)
    assert loop.about == ""
    assert set(facts(loop.mechanics.tolerance).values()) == {0.0}
    assert "no tolerances: every unit is like the nominal one" in loop.assumptions


# --------------------------------------------------------------------------------------- complaints


RULES = [
    # what is set, table and key that are complained about, words of the rule
    ("loop.name=9lives", "loop.name", "C identifier"),
    ("loop.name=Stage", "loop.name", "C identifier"),
    ("loop.name=x" + "y" * 31, "loop.name", "C identifier"),
    ("loop.name=while", "loop.name", "language C"),
    ('loop.about="a\\nb"', "loop.about", "one line"),
    ("plant.motion=spinning", "plant.motion", '"linear", "rotary"'),
    ("plant.mass=0 g", "plant.mass", "above 0"),
    ("plant.mass=-5 g", "plant.mass", "above 0"),
    ("plant.mass=48", "plant.mass", "text with its unit"),
    ("plant.mass=1e300 kg", "plant.mass", "plausible"),
    ("plant.damping=-1 N*s/m", "plant.damping", "at least 0"),
    ("plant.stiffness=-1 N/m", "plant.stiffness", "at least 0"),
    ("plant.stiffness=5 N*m/rad", "plant.stiffness", "not in N*m/rad"),
    ("plant.friction=-1 N", "plant.friction", "at least 0"),
    ("plant.travel=0 mm", "plant.travel", "above 0"),
    ("plant.natural_frequency=36 Hz", "plant.damping_ratio", "natural_frequency needs it"),
    ("plant.tolerance.mass=95 %", "plant.tolerance.mass", "at most 90 %"),
    ("plant.tolerance.damping=101 %", "plant.tolerance.damping", "at most 100 %"),
    ("plant.tolerance.force=-1 %", "plant.tolerance.force", "at least 0"),
    ("plant.tolerance.delay=30 us", "plant.tolerance.delay", "at most the delay itself, 22 us"),
    ("plant.tolerance.bias=1 mm", "plant.tolerance.bias", "not in mm"),
    ("actuator.drive=ampere", "actuator.drive", '"current", "voltage"'),
    ("actuator.bits=33", "actuator.bits", "2 to 32"),
    ("actuator.bits=12.0", "actuator.bits", "whole number"),
    ("actuator.bits=true", "actuator.bits", "whole number"),
    ("actuator.bits='12'", "actuator.bits", "without quotes"),
    ("actuator.polarity=0", "actuator.polarity", "1, -1"),
    ("actuator.coding=offset", "actuator.coding", '"signed", "unsigned"'),
    ("actuator.zero_code=3000", "actuator.zero_code", "-2048 to 2047"),
    ("actuator.limit=2.1 A", "actuator.limit", "at most full_scale"),
    ("actuator.limit=0.9 mA", "actuator.limit", "at least one code, 976.6 uA"),
    ("actuator.full_scale=12 V", "actuator.full_scale", "not in V"),
    ("sensor.resolution=20 nm", "sensor.resolution", "keep one of the two"),
    ("sensor.noise=-1 nm", "sensor.noise", "at least 0"),
    ("sensor.noise_peak=10 nm", "sensor.noise_peak", "at least the rms noise"),
    ("sensor.zero_count=9000", "sensor.zero_count", "-8192 to 8191"),
    ("processor.core=cortex-m7", "processor.core", "cortex-m4"),
    ("processor.clock=10 kHz", "processor.clock", "faster than the sample rate"),
    ("processor.wait_states=-1", "processor.wait_states", "0 to 15"),
    ("processor.sample_rate=0 Hz", "processor.sample_rate", "above 0"),
    ("processor.sample_rate=16", "processor.sample_rate", "text with its unit"),
    ("processor.delay=-1 us", "processor.delay", "at least 0"),
    ("processor.delay=13 ms", "processor.delay", "at most 200 sample periods"),
    ("processor.word=24", "processor.word", '16, 32, "auto"'),
    ("aim.law=pi", "aim.law", '"pd", "lead", "pid"'),
    ("aim.damping_ratio=0", "aim.damping_ratio", "above 0 up to 5"),
    ("aim.damping_ratio=5.1", "aim.damping_ratio", "above 0 up to 5"),
    ("aim.damping_ratio=nan", "aim.damping_ratio", "above 0 up to 5"),
    ("aim.damping_ratio=slowest", "aim.damping_ratio", '"fastest"'),
    ("aim.natural_frequency=90 Hz", "aim.natural_frequency", "keep one of the two"),
    ("aim.crossover=90 Hz", "aim.crossover", "law = lead"),
    ("aim.kp=5 N/m", "aim.kp", "keep one or the other"),
    ("aim.ki=5 N/m/s", "aim.ki", "keep one or the other"),
    ("aim.derivative_corner=8 kHz", "aim.derivative_corner", "below half the sample rate, 8 kHz"),
    ("aim.notch=[{}]", "aim.notch.0.frequency", "missing"),
    ("check.step=0 um", "check.step", "above 0"),
    ("check.step=0.19 um", "check.step", "at least one count, 195.3 nm"),
    ("check.step=1.5 mm", "check.step", "at most the travel, 1.4 mm"),
    ("check.step=5 deg", "check.step", "not in deg"),
    ("limits.overshoot=0.02", "limits.overshoot", "text with its unit"),
    ("limits.overshoot=150 %", "limits.overshoot", "at most 100 %"),
    ("limits.peak_sensitivity=1.0", "limits.peak_sensitivity", "above 1"),
    ("limits.peak_sensitivity='2 dB'", "limits.peak_sensitivity", "without unit"),
    ("limits.deviation=2 um", "limits.deviation", "not um"),
    ("limits.load=101 %", "limits.load", "at most 100 %"),
]


@pytest.mark.parametrize(("override", "place", "words"), RULES, ids=range(len(RULES)))
def test_broken_rule_is_complained_about_with_a_line_that_heals(
    override: str, place: str, words: str
) -> None:
    found = [item for item in complaints_of(PLAIN, override) if f"{item.table}.{item.key}" == place]
    assert len(found) == 1
    assert words in found[0].allowed
    if found[0].remedy:
        key, _, value = found[0].remedy.partition(" = ")
        assert place.endswith(f".{key}")
        try:
            loop_from_text(PLAIN, [override, f"{found[0].table}.{key}={value}"])
        except LoopFileError as error:
            assert place not in {f"{item.table}.{item.key}" for item in error.complaints}


@pytest.mark.parametrize(
    ("sets", "place", "words"),
    [
        (("actuator.drive=voltage",), "actuator.resistance", "drive = voltage needs it"),
        (
            ("actuator.drive=voltage", "actuator.bandwidth=5 kHz"),
            "actuator.bandwidth",
            "goes with drive = current",
        ),
        (("processor.word=16", "sensor.bits=17"), "sensor.bits", "at most 16 bits"),
        (("processor.word=16", "actuator.bits=17"), "actuator.bits", "at most 16 bits"),
        (
            ("processor.word=16", "sensor.bits=16", "sensor.coding=unsigned"),
            "sensor.bits",
            "unsigned codes have at most 15 bits",
        ),
        (
            ("processor.word=32", "actuator.bits=32", "actuator.coding=unsigned"),
            "actuator.bits",
            "unsigned codes have at most 31 bits",
        ),
        (("aim.law=lead",), "aim.bandwidth", "takes crossover and phase_margin"),
        (("aim.law=lead",), "aim.crossover", "missing"),
        (("plant.natural_frequency=9 Hz", "plant.damping_ratio=0.1"), "plant.damping", "same"),
        (("plant.natural_frequency=9 Hz", "plant.damping_ratio=0.1"), "plant.stiffness", "two of"),
    ],
)
def test_keys_that_do_not_go_together(sets: tuple[str, ...], place: str, words: str) -> None:
    found = {f"{item.table}.{item.key}": item.allowed for item in complaints_of(PLAIN, *sets)}
    assert words in found[place]


def test_encoder_with_16_bit_words_needs_few_bits() -> None:
    text = PLAIN.replace('full_scale = "1.6 mm"', 'resolution = "50 nm"')
    loop_from_text(text, ["processor.word=16"])
    text = without(text, "bits = 14")
    found = complaints_of(text, "processor.word=16")
    assert [(item.table, item.key, item.came) for item in found] == [("sensor", "bits", "32")]


@pytest.mark.parametrize("bits", [15, 16])
def test_word_16_takes_what_fits(bits: int) -> None:
    sets = ("processor.word=16", f"sensor.bits={bits}", f"actuator.bits={bits}")
    assert loop_from_text(PLAIN, sets).sensor.bits == bits


NEEDED = [
    ("name = ", "loop.name"),
    ("motion = ", "plant.motion"),
    ('mass = "35 g"', "plant.mass"),
    ('damping = "0.6', "plant.damping"),
    ('stiffness = "1.8', "plant.stiffness"),
    ("drive = ", "actuator.drive"),
    ("force_constant = ", "actuator.force_constant"),
    ('full_scale = "2 A"', "actuator.full_scale"),
    ("bits = 12", "actuator.bits"),
    ("limit = ", "actuator.limit"),
    ('full_scale = "1.6 mm"', "sensor.full_scale"),
    ("bits = 14", "sensor.bits"),
    ("core = ", "processor.core"),
    ("clock = ", "processor.clock"),
    ("sample_rate = ", "processor.sample_rate"),
    ('delay = "22', "processor.delay"),
    ("law = ", "aim.law"),
    ("damping_ratio = ", "aim.damping_ratio"),
    ("bandwidth = ", "aim.bandwidth"),
    ("step = ", "check.step"),
    ("settling_band = ", "limits.settling_band"),
]


@pytest.mark.parametrize(("line", "place"), NEEDED)
def test_missing_key_is_complained_about_with_a_line_that_heals(line: str, place: str) -> None:
    text = without(PLAIN, line)
    (found,) = complaints_of(text)
    assert f"{found.table}.{found.key}" == place
    assert "missing" in found.allowed and found.came == ""
    key, _, value = found.remedy.partition(" = ")
    assert isinstance(loop_from_text(text, [f"{found.table}.{key}={value}"]), Loop)


def test_empty_text_names_all_that_is_needed_and_their_lines_make_a_loop() -> None:
    lines = ["[loop]"]
    text = ""
    for _ in range(3):  # targets are asked for when the law is known
        found = complaints_of(text) if not lines[1:] else found_or_none(text)
        if found is None:
            break
        for item in found:
            lines += [f"{item.table}.{item.remedy}"]
        text = "\n".join(lines[1:])
    assert isinstance(loop_from_text(text), Loop)


def found_or_none(text: str) -> tuple[Complaint, ...] | None:
    try:
        loop_from_text(text)
    except LoopFileError as error:
        return error.complaints
    return None


def test_all_complaints_come_at_once_in_the_order_of_the_tables() -> None:
    sets = [override for override, _, _ in RULES if not override.startswith("aim.n")]
    last = {override.partition("=")[0]: override for override in sets}
    found = [item.table for item in complaints_of(PLAIN, *last.values())]
    assert len(found) > 30
    order = [name for name in loopfile._TABLES if name in found]
    assert list(dict.fromkeys(found)) == order


def test_a_wrong_value_causes_no_second_complaint() -> None:
    for override in ("plant.mass=48", "plant.travel=1 kg", "sensor.bits=x", "actuator.limit=1 V"):
        assert len(complaints_of(PLAIN, override)) == 1


# -------------------------------------------------------------------------- unknown keys and tables


def only(text: str) -> Complaint:
    (found,) = complaints_of(text)
    return found


def test_misspelt_key_names_the_nearest_and_is_not_missed_again() -> None:
    found = only(PLAIN.replace("sample_rate = ", "samplerate = "))
    assert (found.table, found.key, found.came) == ("processor", "samplerate", '"16 kHz"')
    assert found.nearest == "sample_rate"
    assert found.remedy == 'sample_rate = "16 kHz"'


def test_far_off_key_still_names_a_known_one() -> None:
    assert only(PLAIN.replace("[check]", "[check]\nqq = 1")).nearest == "step"


def test_key_in_the_wrong_table_names_the_right_one() -> None:
    clock = 'clock = "48 MHz"'
    text = PLAIN.replace(clock, "").replace("[actuator]", f"[actuator]\n{clock}")
    found = only(text)
    assert (found.table, found.key, found.nearest) == ("actuator", "clock", "processor.clock")
    assert found.remedy == f"{clock} under [processor]"


def test_key_of_several_tables_names_them_all() -> None:
    found = only(PLAIN.replace("[check]", '[check]\nlimit_cycle = "2 count"\n'))
    assert "[limits]" in found.allowed
    found = only(PLAIN.replace("[check]", "[check]\nbits = 5\n"))
    assert "[actuator] or [sensor]" in found.allowed


def test_key_above_all_tables_names_its_table() -> None:
    found = only('mass = "5 g"\n' + PLAIN)
    assert found.nearest == "plant.mass" and found.remedy == 'mass = "5 g" under [plant]'


def test_misspelt_table_names_the_nearest_and_its_keys_are_not_missed() -> None:
    found = only(PLAIN.replace("[sensor]", "[senzor]"))
    assert (found.table, found.nearest, found.remedy) == ("senzor", "sensor", "[sensor]")


@pytest.mark.parametrize(
    ("name", "nearest", "remedy"),
    [
        ("tolerance", "plant.tolerance", "[plant.tolerance]"),
        ("notch", "aim.notch", "[[aim.notch]]"),
        ("plant.mod", "plant.mode", "[[plant.mode]]"),
        ("aim.notches", "aim.notch", "[[aim.notch]]"),
    ],
)
def test_table_in_the_wrong_place(name: str, nearest: str, remedy: str) -> None:
    found = only(f"{PLAIN}\n[{name}]\nx = 1\n")
    assert (found.nearest, found.remedy) == (nearest, remedy)


def test_table_written_once_that_may_stand_several_times_and_the_reverse() -> None:
    found = only(f'{PLAIN}\n[plant.mode]\nfrequency = "1 kHz"\n')
    assert found.remedy == "[[plant.mode]]"
    found = only(PLAIN.replace("[sensor]", "[[sensor]]"))
    assert found.remedy == "[sensor]"


def test_names_of_the_other_motion() -> None:
    found = only(PLAIN.replace('mass = "35 g"', 'inertia = "35 g"'))
    assert (found.key, found.nearest) == ("inertia", "mass")
    assert found.remedy == 'mass = "35 g"'
    found = only(ROTARY.replace("torque_constant", "force_constant"))
    assert (found.key, found.nearest) == ("force_constant", "torque_constant")
    assert found.remedy == 'torque_constant = "8 mN*m/A"'
    found = only(ROTARY.replace("\ntorque =", "\nforce ="))
    assert (found.table, found.key, found.nearest) == ("plant.tolerance", "force", "torque")
    found = only(ROTARY.replace('inertia = "9 g*cm**2"', "inertia = 9"))
    assert (found.table, found.key) == ("plant.mode.0", "inertia")


def test_rotary_loop_with_linear_units_is_refused_key_by_key() -> None:
    keys = {item.key for item in complaints_of(FULL, "plant.motion=rotary")}
    assert {"mass", "damping", "stiffness", "travel", "force_constant", "step", "noise"} <= keys


# ---------------------------------------------------------------------------------------- overrides


def test_overrides_replace_before_anything_is_checked() -> None:
    broken = PLAIN.replace('mass = "35 g"', "mass = 35")
    loop = loop_from_text(broken, ["plant.mass=52 g", "loop.name = y_stage "])
    assert (loop.mechanics.mass, loop.name) == (0.052, "y_stage")
    assert loop.overrides == ("plant.mass=52 g", "loop.name = y_stage ")
    assert loop.sha256 == hashlib.sha256(broken.encode()).hexdigest()


@pytest.mark.parametrize(
    ("override", "value"),
    [
        ("plant.mass=52 g", 0.052),
        ('plant.mass="52 g"', 0.052),
        ("plant.mass='52 g'", 0.052),
        (" plant . mass = 52 g ", 0.052),
    ],
)
def test_override_values_with_and_without_quotes(override: str, value: float) -> None:
    assert loop_from_text(PLAIN, [override]).mechanics.mass == value


def test_overrides_reach_tables_in_tables_and_lists() -> None:
    sets = ["plant.tolerance.mass=9 %", "plant.mode.1.frequency=3 kHz", "aim.notch=[]"]
    loop = loop_from_text(FULL, sets)
    assert loop.mechanics.tolerance.mass == 0.09
    assert loop.mechanics.modes[1].frequency_rad_per_s == pytest.approx(6000 * PI, rel=1e-15)
    assert loop.mechanics.modes[0].frequency_rad_per_s == pytest.approx(2200 * PI, rel=1e-15)
    assert loop.aim.notches == ()
    loop = loop_from_text(ROTARY, ["plant.inertia=1 g*cm**2", "limits.overshoot=3 %"])
    assert (loop.mechanics.mass, loop.limits.overshoot) == (1e-7, 0.03)


@pytest.mark.parametrize(
    ("override", "nearest"),
    [
        ("mass=52 g", "plant.mass"),
        ("plant.mas=52 g", "plant.mass"),
        ("plnt.mass=52 g", "plant.mass"),
        ("plant.mode.frequency=5 Hz", "plant.mode.0.frequency"),
        ("limit.overshoot=2 %", "limits.overshoot"),
        ("plant=5", "plant.mass"),
        ("=5", None),
        ("", None),
        ("\u00b2.x=1", None),
        ("a.b.c.d.e=1", None),
    ],
)
def test_unknown_override_names_the_nearest(override: str, nearest: str | None) -> None:
    found = complaints_of(PLAIN, override)[0]
    assert found.key.startswith("--set")
    if nearest:
        assert found.nearest == nearest
        assert found.remedy.startswith(f"--set '{nearest}=")


def test_override_of_a_mode_that_is_not_there() -> None:
    found = complaints_of(FULL, "plant.mode.2.mass=1 kg")[0]
    assert found.allowed == "the file has 2 of [[plant.mode]]; they count from 0"
    assert complaints_of(PLAIN, f"plant.mode.{'9' * 5000}.mass=1 kg")[0].allowed.startswith("the")


def test_bare_number_in_an_override_is_no_quantity() -> None:
    (found,) = complaints_of(PLAIN, "plant.mass=52")
    assert (found.table, found.key, found.came, found.remedy) == (
        "plant",
        "mass",
        "52",
        'mass = "52 g"',
    )


def test_newline_in_an_override_starts_no_second_key() -> None:
    found = complaints_of(PLAIN, 'plant.mass="52 g"\nother = 1')
    assert [item.key for item in found] == ["mass"]


# -------------------------------------------------------------------------------------------- files


def test_file_with_mark_and_foreign_newlines_reads_alike(tmp_path: Path) -> None:
    plain, foreign = tmp_path / "a.toml", tmp_path / "b.toml"
    plain.write_bytes(PLAIN.encode())
    foreign.write_bytes(b"\xef\xbb\xbf" + PLAIN.replace("\n", "\r\n").encode())
    assert load_loop(plain) == load_loop(str(foreign)) == loop_from_text(PLAIN)
    assert load_loop(plain).sha256 == hashlib.sha256(PLAIN.encode()).hexdigest()


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"[plant]\n\nmass = \xff\n", "line 3: a byte that is no utf-8"),
        ("[plant]\n".encode("utf-16"), "line 1: a byte that is no utf-8"),
        (b"[plant]\nmass = 48 g\n", "line 2, column 11 (mass = 48 g): expected newline"),
        (b"[plant]\nmass = \n", "line 2"),
        (b'[plant]\nmass = "48 g\n', "line 2"),
        (b'[plant]\nmass = "1 g"\nmass = "2 g"\n', "line 3"),
        (b"[plant\n", "line 1"),
        (b"[plant]\n[plant]\n", "line 2"),
        (b"x = " + b"[" * 100000, "nested too deeply"),
        (b"x = " + b"9" * 5000, "a value that toml cannot hold"),
        (b"x = 2024-02-31\n", "line 1"),
        (b"#" * (2 << 20), "at most 1048576 bytes"),
        (b"\x00", "line 1"),
    ],
    ids=range(13),
)
def test_unreadable_content_is_one_complaint_with_its_line(
    tmp_path: Path, content: bytes, words: str
) -> None:
    path = tmp_path / "loop.toml"
    path.write_bytes(content)
    with pytest.raises(LoopFileError) as caught:
        load_loop(path)
    assert len(caught.value.complaints) == 1
    text = str(caught.value)
    assert text.startswith(f"{path}: ") and words in text
    assert "\n" not in text and text.isprintable()


def test_quotes_that_are_missing_are_shown() -> None:
    found = only("[plant]\nmass = 48 g   # a weight\n")
    assert found.remedy == 'mass = "48 g"'


def test_missing_file_and_folder(tmp_path: Path) -> None:
    with pytest.raises(LoopFileError, match="there is no such file"):
        load_loop(tmp_path / "none.toml")
    with pytest.raises(LoopFileError, match="this is a folder"):
        load_loop(tmp_path)
    with pytest.raises(LoopFileError, match="cannot be read"):
        load_loop("a\0b")


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="root reads everything")
def test_file_without_permission(tmp_path: Path) -> None:
    path = tmp_path / "loop.toml"
    path.touch(mode=0o000)
    with pytest.raises(LoopFileError, match="cannot be read: permission denied"):
        load_loop(path)


def test_lone_surrogate_in_text_is_no_traceback() -> None:
    assert complaints_of('[loop]\nabout = "\ud800"\n')


def test_loading_reads_nothing_but_the_file_and_loads_nothing_heavy(tmp_path: Path) -> None:
    path = tmp_path / "loop.toml"
    path.write_text(PLAIN, "utf-8")
    code = (
        "import json, sys\nfrom plant2.loopfile import load_loop\n"
        f"load_loop({str(path)!r})\n"
        "print(json.dumps(sorted({name.split('.')[0] for name in sys.modules})))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        cwd=tmp_path,
        env=dict(os.environ, PYTHONPATH=str(Path(__file__).parents[1]), HOME=str(tmp_path)),
        check=False,
    )
    assert done.returncode == 0, done.stderr
    loaded = set(json.loads(done.stdout))
    assert not {"scipy", "control", "matplotlib", "tomlkit"} & loaded
    assert [item.name for item in tmp_path.iterdir()] == ["loop.toml"]


# ----------------------------------------------------------------------------- a file to begin with


@pytest.mark.parametrize("name", ["x_stage", "X Stage 7", "7", "while", "", "\u00e9", "a" * 99])
def test_new_file_loads_whatever_its_name(name: str) -> None:
    loop = loop_from_text(new_loop_text(name))
    assert re.fullmatch(r"[a-z][a-z0-9_]{0,30}", loop.name)
    assert (loop.mechanics.motion, loop.actuator.drive, loop.aim.law) == ("linear", "current", "pd")
    assert loop.processor.core in CORES


def test_new_file_keeps_its_columns() -> None:
    for name in ("x_stage", "a_rather_long_name_for_a_stage"):
        lines = new_loop_text(name).splitlines()
        assert all(len(line) <= 100 for line in lines)
        lines = [line for line in lines if re.match(r"[a-z_]+ = .*#", line)]
        assert {line.index("#") for line in lines if len(name) < 20 or name not in line} == {32}


def test_new_file_with_its_optional_keys_loads_too() -> None:
    text = PLAIN
    for line in PLAIN.splitlines():
        if re.match(r"# (\[\[|[a-z_]+ = )", line):
            text = text.replace(line, line[2:])
    assert text.count("\n# ") <= 4
    loop = loop_from_text(text)
    assert len(loop.mechanics.modes) == len(loop.aim.notches) == 1
    assert loop.actuator.polarity == -1 and loop.sensor.filter_corner_rad_per_s is not None


# ------------------------------------------------------------------------------------- writing back


def test_values_are_written_back_with_comments_kept() -> None:
    values = {"plant.mass": "52.5 g", "sensor.bits": 13, "aim.damping_ratio": 0.8}
    text = text_with_values(PLAIN, values)
    before, after = PLAIN.splitlines(), text.splitlines()
    changed = [index for index in range(len(before)) if before[index] != after[index]]
    assert len(before) == len(after) and len(changed) == 3
    for index in changed:
        assert before[index].partition("#")[2] == after[index].partition("#")[2]
    loop = loop_from_text(text)
    assert (loop.mechanics.mass, loop.sensor.bits, loop.aim.damping_ratio) == (0.0525, 13, 0.8)


def test_values_are_written_into_tables_and_lists_that_lack_them() -> None:
    text = text_with_values(FULL, {"plant.mode.1.mass": "3 kg", "processor.clock": "80 MHz"})
    assert loop_from_text(text).mechanics.modes[1].mass == 3.0
    text = text_with_values(PLAIN, {"plant.friction": "2 mN"})
    assert loop_from_text(text).mechanics.friction == 0.002
    text = text_with_values(ROTARY, {"limits.overshoot": "5 %"})
    assert loop_from_text(text).limits.overshoot == 0.05


def test_writing_back_refuses_what_is_no_key_or_no_toml() -> None:
    with pytest.raises(LoopFileError, match=r"the nearest is plant\.mass"):
        text_with_values(PLAIN, {"plant.mas": "1 g"})
    with pytest.raises(LoopFileError, match="line 1"):
        text_with_values("[plant", {"plant.mass": "1 g"})
