"""Words: every sum fits, rest is rest, small gains are told, and the integers do what they say.

The reference for integer arithmetic is `fractions.Fraction` and the two simulations; ranges are
recomputed by `verify_ranges`, apart from the code that chose the formats.
"""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from loops import PID, lead_loop, reference_loop

from plant2.chain import built_closed_loop
from plant2.closedloop import log_pole, pair_figures, poles_delta
from plant2.design import TAU, Gains, Task, controller_of, design, place_gains, task_of
from plant2.equations import WordController, from_plain, to_plain, transfer, verify_ranges
from plant2.errors import DesignError, OutOfRangeError
from plant2.loopfile import Loop, Notch
from plant2.simulate import IntegerController
from plant2.words import Words, words_of

NOTCH = Notch(frequency_rad_per_s=TAU * 400, width=0.5, depth_db=20.0)

VARIANTS: dict[str, Loop] = {
    "pd": reference_loop(),
    "pid": reference_loop(*PID),
    "lead": lead_loop(),
    "free_mass": reference_loop('plant.stiffness="0 N/m"', 'plant.bias_force="1 N"'),
    "reversed": reference_loop("actuator.polarity=-1", "sensor.polarity=-1"),
    "offset": reference_loop(
        'actuator.coding="unsigned"',
        "actuator.zero_code=2000",
        'sensor.coding="unsigned"',
        "sensor.bits=15",
        "sensor.zero_count=16000",
        'plant.travel="1.5 mm"',
    ),
    "rest_and_bias": reference_loop('plant.rest_position="0.3 mm"', 'plant.bias_force="-2 N"'),
}
VARIANTS["notch"] = replace(VARIANTS["pd"], aim=replace(VARIANTS["pd"].aim, notches=(NOTCH,)))
_FAST = reference_loop('processor.sample_rate="40 kHz"', 'processor.delay="40 us"')
VARIANTS["slow_notch"] = replace(
    _FAST, aim=replace(_FAST.aim, notches=(replace(NOTCH, frequency_rad_per_s=TAU * 700),))
)
VARIANTS["pid_two_notches"] = replace(
    VARIANTS["pid"],
    aim=replace(
        VARIANTS["pid"].aim, notches=(NOTCH, replace(NOTCH, frequency_rad_per_s=TAU * 900))
    ),
)


def built(name: str, bits: int) -> tuple[Task, Gains, Words]:
    loop = VARIANTS[name]
    task = task_of(loop)
    found = design(loop, task, seek_nearest=False)
    assert found.gains is not None and not found.faults
    return task, found.gains, words_of(task, found.gains, bits)


@pytest.fixture(params=[(n, b) for n in VARIANTS for b in (16, 32)], ids=lambda p: f"{p[0]}-{p[1]}")
def case(request: pytest.FixtureRequest) -> tuple[Task, Gains, Words]:
    return built(*request.param)


def test_ranges_hold_and_are_not_believed(case: tuple[Task, Gains, Words]) -> None:
    controller = case[2].controller
    verify_ranges(controller)
    e = controller.update[-2]
    narrowed = replace(e, high=e.high - 1) if e.high > e.low else e
    broken = replace(
        controller,
        update=(*controller.update[:-2], narrowed, controller.update[-1]),
    )
    with pytest.raises(OutOfRangeError):
        verify_ranges(broken)


def test_stored_and_read_back(case: tuple[Task, Gains, Words]) -> None:
    controller = case[2].controller
    assert from_plain(to_plain(controller)) == controller


def test_transfer_functions_of_the_words(case: tuple[Task, Gains, Words]) -> None:
    """As built against as designed, at points off the unit circle."""
    task, gains, words = case
    exact = transfer(words.controller).in_delta()
    wanted = controller_of(task, gains)
    tolerance = 2e-3 if words.controller.word_bits == 16 else 1e-6
    for point in (0.3 + 0.4j, -0.5 + 0.2j, 2.0 + 0j):
        for name in ("reference", "position"):
            found = _value(getattr(exact, name), exact.denominator, point)
            asked = _value(getattr(wanted, name), wanted.denominator, point)
            assert abs(found / asked - 1) < tolerance


def _value(num: object, den: object, point: complex) -> complex:
    return complex(np.polyval(num, point) / np.polyval(den, point))  # type: ignore[call-overload]


@pytest.mark.parametrize("fraction", [-0.9, -0.3, 0.0, 0.4, 0.95])
def test_reset_is_rest(case: tuple[Task, Gains, Words], fraction: float) -> None:
    """Every later update with reference = position returns the output, clipped, as long as both
    stay."""
    task, _, words = case
    controller = words.controller
    sensor, actuator = task.loop.sensor, task.loop.actuator
    span = task.loop.mechanics.travel / sensor.step
    position = sensor.zero_count + round(fraction * span)
    low = actuator.zero_code - actuator.limit_code
    high = actuator.zero_code + actuator.limit_code
    machine = IntegerController(controller)
    resting = machine.resting_output(position)
    for output in (resting, low, high, actuator.zero_code + 7, high + 5, low - 5):
        machine.reset(position, output)
        expected = min(max(output, low), high)
        for _ in range(40):
            assert machine.update(position, position) == expected
            assert machine.update(position, position, 0) == expected


def test_resting_output_is_the_static_balance(case: tuple[Task, Gains, Words]) -> None:
    task, _, words = case
    loop = task.loop
    machine = IntegerController(words.controller)
    m = loop.mechanics
    for fraction in (-0.8, 0.0, 0.5):
        position = fraction * m.travel
        count = loop.sensor.zero_count + loop.sensor.polarity * round(position / loop.sensor.step)
        true = (count - loop.sensor.zero_count) * loop.sensor.polarity * loop.sensor.step
        force = m.stiffness * (true - m.rest_position) - m.bias_force
        code = force / loop.actuator.force_constant / loop.actuator.step
        code = max(-loop.actuator.limit_code, min(loop.actuator.limit_code, code))
        wanted = loop.actuator.zero_code + loop.actuator.polarity * code
        assert abs(machine.resting_output(count) - wanted) <= 0.51


def test_added_zero_changes_nothing(case: tuple[Task, Gains, Words]) -> None:
    words = case[2]
    a, b = IntegerController(words.controller), IntegerController(words.controller)
    zero = case[0].loop.sensor.zero_count
    a.reset(zero, a.resting_output(zero))
    b.reset(zero, b.resting_output(zero))
    for k in range(300):
        r, y = zero + 40 * (k % 7), zero + (k * 37) % 91
        assert a.update(r, y) == b.update(r, y, 0)
        assert a.state == b.state


def test_added_codes_are_added(case: tuple[Task, Gains, Words]) -> None:
    task, _, words = case
    machine = IntegerController(words.controller)
    zero = task.loop.sensor.zero_count
    machine.reset(zero, task.loop.actuator.zero_code)
    assert machine.update(zero, zero, 11) == task.loop.actuator.zero_code + 11
    top = 1 << (words.controller.word_bits - 1)
    limit = task.loop.actuator.limit_code
    machine.reset(zero, task.loop.actuator.zero_code)
    assert machine.update(zero, zero, top - 1) == task.loop.actuator.zero_code + limit
    assert machine.limited() == 1
    machine.reset(zero, task.loop.actuator.zero_code)
    assert machine.update(zero, zero, -top) == task.loop.actuator.zero_code - limit
    assert machine.limited() == -1


def test_inputs_out_of_range_act_as_clipped(case: tuple[Task, Gains, Words]) -> None:
    task, _, words = case
    sensor = task.loop.sensor
    top = 1 << (words.controller.word_bits - 1)
    a, b = IntegerController(words.controller), IntegerController(words.controller)
    zero = sensor.zero_count
    for machine in (a, b):
        machine.reset(zero, machine.resting_output(zero))
    reach = math.floor(task.loop.mechanics.travel / sensor.step)
    for k in range(60):
        wild = top - 1 if k % 2 else -top
        position = max(sensor.low_count, min(sensor.high_count, wild))
        reference = max(zero - reach, min(zero + reach, position))
        assert a.update(wild, wild) == b.update(reference, position)


def test_integral_does_not_wind_up() -> None:
    """Held against the limit for a thousand samples, the output leaves it soon after the error
    turns; an integral that had run into its own limit would stay there twice as long."""
    for bits in (16, 32):
        words = built("pid", bits)[2]
        machine = IntegerController(words.controller)
        machine.reset(0, 0)
        for _ in range(1000):
            machine.update(20000, 0)
        assert machine.limited() == 1
        integral = words.controller.equation("integral")
        assert integral.limit is not None
        assert machine.signals["integral"] < integral.limit[1]
        for _ in range(60):
            machine.update(0, 2000)
        assert machine.limited() == 0


def test_small_gain_is_told_not_lost() -> None:
    """An integral gain that 16-bit words cannot hold: the error names it."""
    task, gains, _ = built("pid", 32)
    with pytest.raises(DesignError, match="ki"):
        words_of(task, replace(gains, ki=gains.ki * 1e-7), 16)


def test_a_notch_needs_room_above_the_output() -> None:
    """16-bit codes fill a 16-bit word: differences of them do not fit, and the error says so."""
    base = reference_loop("actuator.bits=16")
    task = task_of(replace(base, aim=replace(base.aim, notches=(NOTCH,))))
    gains = built("notch", 32)[1]
    with pytest.raises(DesignError, match="use word = 32"):
        words_of(task, gains, 16)
    assert words_of(task, gains, 32).controller.word_bits == 32


def test_gains_that_are_no_gains() -> None:
    task, gains, _ = built("pid", 32)
    with pytest.raises(DesignError, match="negative"):
        words_of(task, replace(gains, kd=-1.0), 32)
    with pytest.raises(DesignError, match="kr"):
        words_of(task, replace(gains, beta=2e-308), 32)


def test_words_are_the_nearest() -> None:
    words = built("pd", 32)[2]
    for e in words.errors:
        assert abs(Fraction(e.stored) - Fraction(e.wanted)) <= Fraction(e.step) / 2
        assert abs(e.stored / e.wanted - 1) < 1e-8


@pytest.mark.parametrize(
    ("rate", "bits", "tolerance"),
    [
        ("5 kHz", 16, 3e-3),
        ("20 kHz", 16, 1e-2),
        ("5 kHz", 32, 1e-6),
        ("50 kHz", 32, 1e-6),
        ("400 kHz", 32, 1e-5),
    ],
)
def test_as_built_pair_is_near_the_design(rate: str, bits: int, tolerance: float) -> None:
    """In 16 bits the integral gain limits the rate: its step is 2^-19 code per count."""
    loop = reference_loop(*PID, f"processor.sample_rate={rate}", 'processor.delay="100 us"')
    task = task_of(loop)
    gains = place_gains(task, natural_frequency_rad_per_s=TAU * 60, damping_ratio=0.8)
    words = words_of(task, gains, bits)
    closed = built_closed_loop(task, words.controller)
    poles = poles_delta(closed)
    wanted = math.exp(-0.8 * TAU * 60 * task.period_s)
    pair = min((p for p in poles if p.imag > 0), key=lambda p: abs(abs(1 + p) - wanted))
    zeta, omega = pair_figures((complex(pair), complex(pair.conjugate())), task.period_s)
    assert omega == pytest.approx(TAU * 60, rel=tolerance)
    assert zeta == pytest.approx(0.8, rel=tolerance)


@pytest.mark.parametrize(("hz", "rate"), [(20, "10 kHz"), (40, "20 kHz"), (200, "20 kHz")])
def test_a_slow_notch_keeps_its_frequency_in_16_bits(hz: float, rate: str) -> None:
    """The shift form in 16 bits moves the first two by -12 % and more."""
    base = reference_loop(f"processor.sample_rate={rate}", 'processor.delay="30 us"')
    notch = Notch(frequency_rad_per_s=TAU * hz, width=0.3, depth_db=20.0)
    task = task_of(replace(base, aim=replace(base.aim, notches=(notch,))))
    gains = replace(built("pd", 32)[1], kp=3000.0, kd=15.0)
    found = transfer(words_of(task, gains, 16).controller).in_delta()
    s = log_pole(np.roots(found.denominator).astype(complex), task.period_s)
    pole = s[np.argmax(s.imag)]
    assert abs(pole) == pytest.approx(TAU * hz, rel=1e-4)
    assert -pole.real / abs(pole) == pytest.approx(0.15, rel=0.02)
    z = log_pole(np.roots(found.position).astype(complex), task.period_s)
    zero = z[np.argmax(z.imag)]
    assert abs(zero) == pytest.approx(TAU * hz, rel=1e-4)


@settings(
    max_examples=60,
    derandomize=True,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)
@given(
    law=st.sampled_from(["pd", "pid"]),
    bits=st.sampled_from([16, 32]),
    sensor_bits=st.integers(8, 16),
    actuator_bits=st.integers(8, 16),
    hz=st.floats(15, 200),
    zeta=st.floats(0.3, 2.0),
    rate=st.sampled_from([2e3, 5e3, 2e4, 1e5]),
    delay=st.floats(0, 2.5),
    seed=st.integers(0, 2**32 - 1),
)
def test_no_word_leaves_its_range(
    law: str,
    bits: int,
    sensor_bits: int,
    actuator_bits: int,
    hz: float,
    zeta: float,
    rate: float,
    delay: float,
    seed: int,
) -> None:
    """Random loops under hostile input: the reference path refuses any sum out of its range."""
    loop = reference_loop(
        f"aim.law={law}",
        'aim.derivative_corner="400 Hz"',
        f"sensor.bits={sensor_bits}",
        f"actuator.bits={actuator_bits}",
        f"processor.sample_rate={rate} Hz",
        f"processor.delay={delay / rate:.9f} s",
    )
    loop = replace(loop, aim=replace(loop.aim, derivative_corner_hz=None))
    task = task_of(loop)
    try:
        gains = place_gains(task, natural_frequency_rad_per_s=TAU * hz, damping_ratio=zeta)
        if min(gains.kp, gains.kd, gains.ki) < 0:
            return
        words = words_of(task, gains, bits)
    except DesignError:
        return
    low = task.loop.actuator.zero_code - task.loop.actuator.limit_code
    high = task.loop.actuator.zero_code + task.loop.actuator.limit_code
    codes = _hostile(words.controller, seed)
    assert (min(codes), max(codes)) == (low, high)


def _hostile(controller: WordController, seed: int) -> list[int]:
    """Codes under extremes and noise; the machine itself refuses a word out of its range."""
    machine = IntegerController(controller)
    top = 1 << (controller.word_bits - 1)
    machine.reset(0, 0)
    value = seed
    codes = []
    for k in range(400):
        value = (value * 6364136223846793005 + 1442695040888963407) % 2**64
        if k % 50 < 20:
            r = y = a = top - 1 if (k // 50) % 2 else -top
            y = -y - 1
        else:
            r = (value >> 33) % (2 * top) - top
            y = (value >> 13) % (2 * top) - top
            a = (value >> 3) % (2 * top) - top if k % 3 == 0 else 0
        codes.append(machine.update(r, y, a))
    return codes
