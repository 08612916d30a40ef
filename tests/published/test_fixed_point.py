"""Fixed-point arithmetic and recursions: published words, cycles, gains and noise.

Rules of this file:

- Each case names its source, the printed digits, and a tolerance of half the last printed digit,
  or the reason for another one. "From memory" stands where the source could not be opened.
- The arithmetic is that of `IntegerController`: floor(x + 1/2), ties toward plus infinity, and
  limits that saturate. Sources that truncate or round ties away from zero are told apart.
"""

from __future__ import annotations

import math
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from loops import reference_loop

from plant2 import plant as pl
from plant2.closedloop import (
    ClosedLoop,
    Controller,
    LoopMatrices,
    linear_step,
    pair_figures,
    rms_gain,
)
from plant2.design import notch_section
from plant2.equations import (
    StateWord,
    WordController,
    WordEquation,
    WordTerm,
    partial_sum_range,
    signal_range,
    verify_ranges,
)
from plant2.errors import OutOfRangeError
from plant2.loopfile import Notch
from plant2.plant import Plant, state_space
from plant2.sampled import propagate, sample
from plant2.simulate import IntegerController, LaneController, count_of

TAU = 2.0 * math.pi
WORD16 = (-32768, 32767)
WORD32 = (-(1 << 31), (1 << 31) - 1)


def with_ranges(
    equations: tuple[WordEquation, ...], inputs: tuple[str, ...], word_bits: int
) -> tuple[WordEquation, ...]:
    """Fill in the ranges, which `verify_ranges` then judges."""
    top = 1 << (word_bits - 1)
    ranges = dict.fromkeys(inputs, (-top, top - 1))
    ranges |= {e.name: e.limit for e in equations if e.limit is not None}
    filled = []
    for e in equations:
        whole, partial = partial_sum_range(e, ranges)
        low, high = ranges[e.name] = e.limit or signal_range(e, whole)
        filled.append(replace(e, low=low, high=high, sum_low=partial[0], sum_high=partial[1]))
    return tuple(filled)


def controller_of(
    *equations: WordEquation, word_bits: int, older: bool = False, carry: bool = False
) -> WordController:
    """A list whose last signal is returned; after a reset its past is the reset's arguments.

    `position` gives the last value and, where two are kept, `output` gives the one before.
    """
    output = equations[-1]
    nothing = WordEquation(
        name="excess",
        meaning="no limit is told apart here",
        unit="code",
        terms=(WordTerm(signal=output.name), WordTerm(signal=output.name, sign=-1)),
        frac_bits=output.frac_bits,
        wide=True,
    )
    update = with_ranges((*equations, nothing), ("reference", "position", "added"), word_bits)
    made = {e.name: e for e in update}
    starts = tuple(
        WordEquation(
            name=name,
            meaning="start",
            unit="code",
            terms=(WordTerm(signal=name.removeprefix("start_")),),
            limit=output.limit,
        )
        for name in ("start_position", "start_output")
    )

    def word(name: str, lag: int, start: str | None, signal: str | None = None) -> StateWord:
        e = made[signal] if signal else output
        low, high = (e.low, e.high) if signal else made[output.name].rest_range
        return StateWord(
            name=name,
            wide=signal is None or e.wide,
            low=low,
            high=high,
            signal=signal,
            lag=lag,
            after_reset=start,
            meaning=name,
        )

    state = [word("excess_kept", 0, None, "excess")]
    if any(t.lag for e in equations for t in e.terms):
        state.append(word("before", 1, "start_position", output.name))
    if older:
        state.append(word("before2", 2, "start_output", output.name))
    if carry:
        state.append(word("rest", 0, None))
    rest = WordEquation(
        name="still", meaning="none", unit="code", terms=(WordTerm(signal="position"),)
    )
    controller = WordController(
        name="published",
        word_bits=word_bits,
        sum_bits=2 * word_bits,
        inputs=("reference", "position", "added"),
        update=update,
        output=output.name,
        excess="excess",
        reset=with_ranges(starts, ("position", "output"), word_bits),
        resting=with_ranges((rest,), ("position",), word_bits),
        state=tuple(state),
    )
    verify_ranges(controller)
    return controller


def equation(
    *terms: WordTerm,
    shift: int = 0,
    limit: tuple[int, int] = WORD16,
    name: str = "y",
    rest: str | None = None,
    frac_bits: int = 0,
    wide: bool = False,
) -> WordEquation:
    """One equation."""
    return WordEquation(
        name=name,
        meaning=name,
        unit="code",
        terms=terms,
        shift=shift,
        limit=limit,
        rest=rest,
        frac_bits=frac_bits,
        wide=wide,
    )


REFERENCE, POSITION = WordTerm(signal="reference"), WordTerm(signal="position")


def product(word: int, *, shift: int, word_bits: int, **extra: object) -> WordController:
    """word x position / 2^shift, rounded and limited."""
    term = WordTerm(signal="position", word=word, name="k", word_frac_bits=shift)
    return controller_of(
        equation(term, shift=shift, **extra),  # type: ignore[arg-type]
        word_bits=word_bits,
    )


# ------------------------------------------------------------------------ saturating operators


@pytest.mark.parametrize(
    ("first", "second", "printed"),
    [(32767, 1, 32767), (-32768, -1, -32768), (32767, -32768, -1)],
)
def test_add_saturates(first: int, second: int, printed: int) -> None:
    """ITU-T G.191, STL, basop32.c v2.3 (30 Nov 2009), read: add(32767, 1) = 32767."""
    controller = controller_of(equation(REFERENCE, POSITION), word_bits=16)
    assert IntegerController(controller).update(first, second) == printed
    assert LaneController(controller, 1).update(first, second).tolist() == [printed]


@pytest.mark.parametrize(("value", "printed"), [(-32768, 32767), (32767, -32767), (0, 0)])
def test_negate_saturates(value: int, printed: int) -> None:
    """Same file: negate(-32768) = 32767."""
    controller = controller_of(equation(replace(POSITION, sign=-1)), word_bits=16)
    assert IntegerController(controller).update(0, value) == printed


@pytest.mark.parametrize(
    ("first", "second", "printed"),
    [(-32768, -32768, 32767), (-1, 1, 0), (1, 1, 0), (16384, 1, 1), (-16384, 1, 0)],
)
def test_multiply_rounds_and_saturates(first: int, second: int, printed: int) -> None:
    """Same file: mult_r(-32768, -32768) = 32767, mult_r(-1, 1) = 0.

    mult, which truncates, gives -1 for the second: this arithmetic never truncates.
    """
    assert IntegerController(product(first, shift=15, word_bits=16)).update(0, second) == printed


def test_long_multiply_saturates() -> None:
    """Same file: L_mult(-32768, -32768) = 0x7fffffff, which is 2 x 2^30 in a sum of 64 bits."""
    term = WordTerm(signal="position", word=-32768, name="k", lift=1)
    long = equation(term, limit=WORD32, frac_bits=1)
    single = IntegerController(controller_of(long, word_bits=32))
    assert single.update(0, -32768) == 0x7FFFFFFF
    assert single.update(0, 32767) == -2 * 32768 * 32767
    # A sum of 32 bits has no room for it, and the list is refused before it runs.
    with pytest.raises(OutOfRangeError, match="a partial sum overflows"):
        controller_of(long, word_bits=16)


@pytest.mark.parametrize(
    ("total", "printed"), [(0x7FFFFFFF, 0x7FFFFFFF), (5, 7), (-(1 << 31), -(1 << 31) + 2)]
)
def test_multiply_accumulate_saturates(total: int, printed: int) -> None:
    """Same file: L_mac(0x7fffffff, 1, 1) = 0x7fffffff, L_mac(c, a, b) = L_add(c, L_mult(a, b))."""
    twice = WordTerm(signal="position", word=1, name="k", lift=1)
    total_so_far = replace(REFERENCE, word_frac_bits=1)  # in the halves that L_mult counts in
    accumulate = equation(total_so_far, twice, limit=WORD32, frac_bits=1)
    assert IntegerController(controller_of(accumulate, word_bits=32)).update(total, 1) == printed


@pytest.mark.parametrize(
    ("value", "printed"),
    [(0x7FFF8000, 32767), (0x8000, 1), (0x7FFF, 0), (-0x8000, 0), (-0x8001, -1)],
)
def test_round_to_the_upper_half(value: int, printed: int) -> None:
    """Same file: round(0x7fff8000) = 32767, round(0x8000) = 1, round(-0x8000) = 0."""
    drop = equation(replace(POSITION, word_frac_bits=16), shift=16)
    assert IntegerController(controller_of(drop, word_bits=32)).update(0, value) == printed


@pytest.mark.parametrize(("value", "printed"), [(-3, -1), (3, 2), (1, 1), (-1, 0), (-4, -2)])
def test_shift_right_rounds(value: int, printed: int) -> None:
    """Same file: shr_r(-3, 1) = -1."""
    halve = equation(replace(POSITION, word_frac_bits=1), shift=1)
    assert IntegerController(controller_of(halve, word_bits=16)).update(0, value) == printed


def test_rounded_product_is_the_upper_half_of_the_long_one() -> None:
    """Same file, definitions: mult_r(a, b) is round(L_mult(a, b)), saturated alike."""
    rng = np.random.default_rng(7)
    for word in (-32768, -12345, 1, 32767):
        term = WordTerm(signal="position", word=word, name="k", lift=1)
        long = equation(term, limit=WORD32, frac_bits=1, wide=True, name="long")
        upper = equation(WordTerm(signal="long", word_frac_bits=15), shift=16)
        two_steps = IntegerController(controller_of(long, upper, word_bits=32))
        one_step = IntegerController(product(word, shift=15, word_bits=16))
        for value in [-32768, 32767, *rng.integers(-32768, 32768, 500).tolist()]:
            assert two_steps.update(0, value) == one_step.update(0, value)


def test_which_way_ties_go() -> None:
    """-4.5 becomes -4 here and -5 in Oppenheim and Schafer's overflow example (from memory).

    floor(x + 1/2), as `round` of the same G.191 file: the rule must be told, not guessed.
    """
    single = IntegerController(product(-9, shift=1, word_bits=16))
    assert single.update(0, 1) == -4
    assert single.update(0, -1) == 5


# ------------------------------------------------------------------------ zero-input limit cycles


def first_order(numerator: int, frac_bits: int, *, carry: bool = False) -> IntegerController:
    """y = Q(a y[1]), a = numerator/2^frac_bits; rounding by itself or with its rest carried."""
    term = WordTerm(signal="y", lag=1, word=numerator, name="a", word_frac_bits=frac_bits)
    one = equation(term, shift=frac_bits, limit=(-2047, 2047), rest="rest" if carry else None)
    return IntegerController(controller_of(one, word_bits=16, carry=carry))


def decay(single: IntegerController, start: int, length: int) -> list[int]:
    """Start value and what follows without input."""
    single.reset(start, 0)
    return [start] + [single.update(0, 0) for _ in range(length - 1)]


@pytest.mark.parametrize(
    ("numerator", "frac_bits", "start", "printed"),
    [
        (1, 1, 15, [15, 8, 4, 2, 1, 1, 1, 1]),
        (3, 2, 15, [15, 11, 8, 6, 5, 4, 3, 2, 2, 2]),
        (1, 1, 7, [7, 4, 2, 1, 1, 1]),
    ],
)
def test_cycles_of_a_first_order_recursion(
    numerator: int, frac_bits: int, start: int, printed: list[int]
) -> None:
    """J. Proakis, D. Manolakis, Digital Signal Processing, table 9.2, set-up read, in sixteenths.

    And A. Oppenheim, R. Schafer, Discrete-Time Signal Processing, ch. 6, in eighths, from memory.
    They round magnitudes; on positive values that is the same as ties upward.
    """
    assert decay(first_order(numerator, frac_bits), start, len(printed)) == printed


@pytest.mark.parametrize(
    ("numerator", "frac_bits"), [(1, 1), (3, 2), (7, 3), (15, 4), (-3, 2), (-7, 3), (-15, 4)]
)
def test_dead_band_of_blackman(numerator: int, frac_bits: int) -> None:
    """R. Blackman, 1965, as Oppenheim and Schafer quote him; from memory: |y| <= 1/2/(1 - |a|).

    From every start the recursion ends there; with positive a it stops at the very bound.
    """
    bound = Fraction(1, 2) / (1 - abs(Fraction(numerator, 1 << frac_bits)))
    ends = set()
    for start in range(-300, 301, 13):
        path = decay(first_order(numerator, frac_bits), start, 200)
        ends |= set(path[-4:])
    assert max(abs(e) for e in ends) <= bound
    if numerator > 0:
        assert max(ends) == int(bound)


def test_cycle_that_ties_upward_do_not_have() -> None:
    """Same example of Oppenheim and Schafer, a = -1/2: 7, -4, 2, -1, 1, -1 with rounded magnitudes.

    Ties upward end it, since -1/2 x 1 becomes 0: the words after -1 are ours, not the book's.
    """
    assert decay(first_order(-1, 1), -7, 8) == [-7, 4, -2, 1, 0, 0, 0, 0]


@pytest.mark.parametrize(("numerator", "frac_bits"), [(1, 1), (3, 2), (7, 3), (15, 4)])
def test_carried_rest_ends_the_cycle(numerator: int, frac_bits: int) -> None:
    """Own numbers: the same recursions with their rests carried come to 0 from every start."""
    for start in range(-100, 101, 9):
        assert decay(first_order(numerator, frac_bits, carry=True), start, 400)[-1] == 0


def test_carried_rest_is_no_cure_near_minus_one() -> None:
    """Own numbers: a = -3/4 swings by up to 3 with its rest carried, by up to 1 without."""
    largest = {}
    for carry in (False, True):
        paths = [decay(first_order(-3, 2, carry=carry), start, 400) for start in range(-50, 51)]
        largest[carry] = max(abs(path[-1]) for path in paths)
    assert largest == {False: 1, True: 3}


# ------------------------------------------------------------------------ overflow oscillations


def test_saturation_ends_the_overflow_oscillation() -> None:
    """D. L. Jones, OpenStax-CNX module m11928; read: 1/(1 - 1/z + 1/2/z^2) from 0.8, -0.8.

    Wrapped sums alternate between 0.8 and -0.8 for ever although the poles have radius 0.707;
    saturation removes it. In 1/2^30; what rounding leaves is ours, 2 at most.
    """
    scale = 1 << 30
    start = round(0.8 * scale)
    terms = (
        WordTerm(signal="y", lag=1, word=2, name="a1", word_frac_bits=1),
        WordTerm(signal="y", lag=2, word=-1, name="a2", word_frac_bits=1),
    )
    one = equation(*terms, shift=1, limit=(-scale, scale - 1))
    single = IntegerController(controller_of(one, word_bits=32, older=True))
    single.reset(-start, start)
    path = [single.update(0, 0) for _ in range(200)]
    assert path[0] == -scale  # -0.8 - 0.4 is cut at -1
    assert max(map(abs, path[100:])) <= 2

    def wrapped(value: int) -> int:
        return (value + scale) % (2 * scale) - scale

    last, older = -start, start
    for k in range(200):
        last, older = wrapped(math.floor(Fraction(2 * last - older, 2) + Fraction(1, 2))), last
        assert last == pytest.approx(start if k % 2 == 0 else -start, abs=2)


# ------------------------------------------------------------------------ noise and gain


@pytest.mark.parametrize(("radius", "angle"), [(0.9, 0.5), (0.95, 0.2), (0.99, 0.1)])
def test_noise_gain_of_a_two_pole_section(radius: float, angle: float) -> None:
    """Oppenheim and Schafer, ch. 6, second-order example; from memory, a formula.

    (1 + r^2)/(1 - r^2)/(1 + r^4 - 2 r^2 cos 2 theta) is the sum of the squared impulse response.
    """
    square = radius * radius
    printed = (1.0 + square) / (1.0 - square)
    printed /= 1.0 + square * square - 2.0 * square * math.cos(2.0 * angle)
    transition = np.array([[2.0 * radius * math.cos(angle), -square], [1.0, 0.0]])
    section = LoopMatrices(
        m=transition - np.eye(2),
        b_reference=np.zeros(2),
        b_noise=np.array([1.0, 0.0]),
        b_force=np.zeros(2),
        c_position=transition[0],
        c_effort=np.zeros(2),
        d_effort_reference=0.0,
        d_effort_noise=0.0,
    )
    assert rms_gain(section, transition[0], 1.0) ** 2 == pytest.approx(printed, rel=1e-10)


@pytest.mark.parametrize("ratio", [0.05, 0.2, 0.5])
def test_peak_gain_is_the_variation_of_the_step(ratio: float) -> None:
    """coth(pi z/(2 sqrt(1 - z^2))) = (1 + Mp)/(1 - Mp); a known identity.

    S. Boyd, C. Barratt, Linear Controller Design, ch. 5, define the norm; from memory. Sampled so
    that the extremes of the step fall on samples, the variation of `linear_step` is exact.
    """
    period_s = math.pi / math.sqrt(1.0 - ratio**2) / 16.0
    open_loop = ClosedLoop(
        sampled=sample(
            state_space(Plant(mass=1.0, damping=2.0 * ratio, stiffness=1.0)), period_s, 0.0
        ),
        controller=Controller(reference=np.ones(1), position=np.zeros(1), denominator=np.ones(1)),
        count_per_position=1.0,
        effort_per_code=1.0,
    )
    states, _ = linear_step(open_loop, math.ceil(40.0 / ratio / period_s))
    variation = float(np.abs(np.diff(states[:, 0])).sum())
    identity = 1.0 / math.tanh(0.5 * math.pi * ratio / math.sqrt(1.0 - ratio**2))
    assert variation == pytest.approx(identity, rel=1e-10)
    printed = {0.05: 12.742672, 0.2: 3.224941, 0.5: 1.389582}  # ours, by direct integration
    assert variation == pytest.approx(printed[ratio], abs=5e-7)
    rise = pl.overshoot(ratio)
    assert (1.0 + rise) / (1.0 - rise) == pytest.approx(identity, rel=1e-13)


@pytest.mark.parametrize(("bits", "printed_db"), [(16, 98.1), (12, 74.0)])
def test_noise_of_a_uniform_converter(bits: int, printed_db: float) -> None:
    """W. Bennett, 1948, as Oppenheim and Schafer quote him; from memory: 6.02 B + 1.76 dB.

    98.1 dB for a full-scale sine in 16 bits; 74.0 dB in 12 by the same rule.
    """
    loop = reference_loop(f"sensor.bits={bits}")
    step = loop.sensor.step
    assert step == pytest.approx(4e-3 / 2**bits)
    phase = TAU * (math.sqrt(5.0) - 1.0) / 2.0 * np.arange(400_001)
    sine = step * (2 ** (bits - 1) - 0.5) * np.sin(phase)
    error = count_of(loop, sine) * step - sine
    ratio_db = 10.0 * math.log10(float((sine**2).mean() / (error**2).mean()))
    assert ratio_db == pytest.approx(printed_db, abs=0.05)
    assert ratio_db == pytest.approx(6.02 * bits + 1.76, abs=0.05)


# ------------------------------------------------------------------------ delta against shift form


def test_delta_form_becomes_the_continuous_one() -> None:
    """R. Middleton, G. Goodwin, IEEE Trans. Automatic Control 31 (1986) 1015; abstract read.

    "Delta coefficients converge to the continuous ones at fast sampling": of a sampled plant, and
    of a section. The error falls with the period.
    """
    space = state_space(Plant(mass=0.05, damping=0.4, stiffness=200.0))
    notch = Notch(frequency_rad_per_s=TAU * 20.0, width=1.0, depth_db=20.0)
    errors = []
    for period_s in (1e-4, 1e-5, 1e-6):
        psi, gain, _ = propagate(space, period_s)
        plant_error = np.abs(psi / period_s - space.a).max() / np.abs(space.a).max()
        assert gain / period_s == pytest.approx(space.b, abs=2e3 * period_s)
        section = notch_section(notch, period_s)
        pole_error = abs(section.p0 / period_s**2 / (TAU * 20.0) ** 2 - 1.0)
        damping_error = abs(section.p1 / period_s / (TAU * 20.0) - 1.0)
        errors.append((plant_error, pole_error, damping_error))
    for slow, fast in zip(errors[:-1], errors[1:], strict=True):
        for a, b in zip(slow, fast, strict=True):
            assert b == pytest.approx(0.1 * a, rel=0.03)
    assert max(errors[-1]) < 2e-4


def test_delta_form_needs_fewer_bits() -> None:
    """Same paper, its statement; the numbers are ours.

    Poles of 20 Hz with damping 0.5, sampled at 10 kHz, 16-bit coefficients: z^2 + a1 z + a2 in
    steps of 2^-14 moves them by -11.80 %, delta^2 + p1 delta + p0 with 15 fraction bits after
    scaling each by a power of two by +0.00019 %.
    """
    period_s = 1e-4
    notch = Notch(frequency_rad_per_s=TAU * 20.0, width=1.0, depth_db=20.0)
    section = notch_section(notch, period_s)

    def moved(p1: float, p0: float) -> float:
        first, second = (complex(r) for r in np.roots([1.0, p1, p0]))
        _, frequency = pair_figures((first, second), period_s)
        return frequency / (TAU * 20.0) - 1.0

    def mantissa(value: float) -> float:
        _, exponent = math.frexp(value)
        return math.ldexp(round(math.ldexp(value, 15 - exponent)), exponent - 15)

    a1, a2 = (round(c * 2**14) / 2**14 for c in (section.p1 - 2.0, 1.0 - section.p1 + section.p0))
    assert abs(moved(section.p1, section.p0)) < 1e-12
    assert moved(a1 + 2.0, 1.0 + a1 + a2) == pytest.approx(-0.1180, abs=5e-5)
    assert moved(mantissa(section.p1), mantissa(section.p0)) == pytest.approx(1.9e-6, abs=5e-8)
