"""Stored controllers for tests: difference equations in words, written down, not designed.

Goldens and compiled tests start here, so that they do not move with the last bits of a numerical
library. The figures are plausible for small stages and mirrors; nothing depends on how good the
loops are. Ranges are filled in by interval arithmetic, and `verify_ranges` judges them.
"""

from collections.abc import Mapping
from dataclasses import replace
from fractions import Fraction

from plant2.equations import (
    StateWord,
    WordController,
    WordEquation,
    WordTerm,
    partial_sum_range,
    signal_range,
    verify_ranges,
)

Range = tuple[int, int]


def _plain(signal: str, lag: int = 0, *, sign: int = 1, lift: int = 0) -> WordTerm:
    return WordTerm(signal=signal, lag=lag, sign=sign, lift=lift)


def _gain(
    name: str, word: int, frac_bits: int, signal: str, lag: int = 0, *, lift: int = 0
) -> WordTerm:
    return WordTerm(
        signal=signal, lag=lag, word=word, name=name, word_frac_bits=frac_bits, lift=lift
    )


def _clip(name: str, meaning: str, unit: str, source: str, limit: Range) -> WordEquation:
    return WordEquation(name=name, meaning=meaning, unit=unit, terms=(_plain(source),), limit=limit)


def with_ranges(
    equations: tuple[WordEquation, ...], inputs: tuple[str, ...], word_bits: int
) -> tuple[WordEquation, ...]:
    """Fill in low, high, sum_low, sum_high; a signal read before it is made needs a limit."""
    ranges: dict[str, Range] = dict.fromkeys(
        inputs, (-(1 << (word_bits - 1)), (1 << (word_bits - 1)) - 1)
    )
    ranges.update({e.name: e.limit for e in equations if e.limit is not None})
    done = []
    for e in equations:
        whole, partial = partial_sum_range(e, ranges)
        low, high = signal_range(e, whole)
        ranges[e.name] = (low, high) if e.limit is None else e.limit
        low, high = ranges[e.name]
        done.append(replace(e, low=low, high=high, sum_low=partial[0], sum_high=partial[1]))
    return tuple(done)


def _state(
    equations: tuple[WordEquation, ...],
    resets: Mapping[str, str | None],
    kept: tuple[str, ...],
) -> tuple[StateWord, ...]:
    """State words for everything the update reads from the past, and for what is kept."""
    made = {e.name: e for e in equations}
    depth: dict[str, int] = {}
    for e in equations:
        for t in e.terms:
            depth[t.signal] = max(depth.get(t.signal, 0), t.lag)
    words = []
    for e in equations:
        if e.held is not None:
            words.append(
                StateWord(
                    name=e.held,
                    wide=True,
                    low=e.held_range[0],
                    high=e.held_range[1],
                    signal=None,
                    lag=0,
                    after_reset=resets.get(e.held),
                    meaning=f"constant term of {e.name}, written by reset only",
                )
            )
        for lag in range(1, 0 if e.name in kept else depth.get(e.name, 0) + 1):
            name = f"{e.name}_before" + ("" if lag == 1 else str(lag))
            words.append(
                StateWord(
                    name=name,
                    wide=e.wide,
                    low=e.low,
                    high=e.high,
                    signal=e.name,
                    lag=lag,
                    after_reset=resets.get(name),
                    meaning=f"{e.meaning}, {lag} sample{'s' if lag > 1 else ''} ago",
                )
            )
        if e.rest is not None:
            words.append(
                StateWord(
                    name=e.rest,
                    wide=True,
                    low=e.rest_range[0],
                    high=e.rest_range[1],
                    signal=None,
                    lag=0,
                    after_reset=None,
                    meaning=f"what the last rounding of {e.name} left over",
                )
            )
        if e.name in kept:
            words.append(
                StateWord(
                    name=e.name,
                    wide=made[e.name].wide,
                    low=e.low,
                    high=e.high,
                    signal=e.name,
                    lag=depth.get(e.name, 0),
                    after_reset=resets.get(e.name),
                    meaning=e.meaning,
                )
            )
    return tuple(words)


def _controller(
    *,
    name: str,
    word_bits: int,
    update: tuple[WordEquation, ...],
    reset: tuple[WordEquation, ...],
    resting: tuple[WordEquation, ...],
    resets: Mapping[str, str | None],
) -> WordController:
    reset = with_ranges(reset, ("position", "output"), word_bits)
    started = {e.name: e for e in reset}
    # A held word takes its range from the reset equation that writes it.
    update = tuple(
        e
        if e.held is None
        else replace(
            e,
            held_range=(
                min(0, started[str(resets[e.held])].low),
                max(0, started[str(resets[e.held])].high),
            ),
        )
        for e in update
    )
    update = with_ranges(update, ("reference", "position", "added"), word_bits)
    controller = WordController(
        name=name,
        word_bits=word_bits,
        sum_bits=2 * word_bits,
        inputs=("reference", "position", "added"),
        update=update,
        output="output_code",
        excess="excess",
        reset=reset,
        resting=with_ranges(resting, ("position",), word_bits),
        state=_state(update, resets, ("excess",)),
    )
    verify_ranges(controller)
    return controller


def focus_stage() -> WordController:
    """PD on a spring, 32-bit words and 64-bit sums: 14-bit counts, 12-bit codes.

    kp = 1.294 code/count, kr = 1.3466 code/count, the filtered difference has gain 14.17
    code/count and pole 0.6242.
    """
    counts, travel, codes = (-8192, 8191), (-7864, 7864), (-1638, 1638)
    kp, kr = 1389422058, 1445900743  # 2^-30
    update = (
        _clip("position_count", "measured position", "count", "position", counts),
        _clip("reference_count", "position asked for", "count", "reference", travel),
        _clip("added_code", "codes added by the caller", "code", "added", (-4095, 4095)),
        WordEquation(
            name="change",
            meaning="change of position since the last sample",
            unit="count",
            terms=(_plain("position_count"), _plain("position_count", 1, sign=-1)),
        ),
        WordEquation(
            name="rate",
            meaning="part of the output that opposes speed",
            unit="code",
            terms=(
                _plain("rate", 1, lift=31),
                _gain("rate_decay", -807015219, 31, "rate", 1),
                _gain("rate_gain", 950930227, 26, "change", lift=17),
            ),
            rest="rate_rest",
            shift=31,
            frac_bits=12,
            limit=(-1073741823, 1073741823),
        ),
        WordEquation(
            name="unlimited",
            meaning="output before its limit",
            unit="code",
            terms=(
                _gain("kr", kr, 30, "reference_count"),
                _gain("kp", -kp, 30, "position_count"),
                _plain("rate", sign=-1, lift=18),
                _plain("added_code", lift=30),
            ),
            held="standing_output",
            shift=30,
            wide=True,
        ),
        _clip("output_code", "returned code", "code", "unlimited", codes),
        WordEquation(
            name="excess",
            meaning="what the limit took away",
            unit="code",
            terms=(_plain("unlimited"), _plain("output_code", sign=-1)),
            limit=(-2147483647, 2147483647),
        ),
    )
    reset = (
        _clip("start_position", "position to start at", "count", "position", counts),
        # The law's reference is clipped to the travel, so its part of the rest is, too.
        _clip("start_reference", "reference to start at", "count", "position", travel),
        _clip("start_output", "code to start with", "code", "output", codes),
        WordEquation(
            name="start_standing",
            meaning="what the law lacks at the start",
            unit="code",
            terms=(
                _plain("start_output", lift=30),
                _gain("kr_down", -kr, 30, "start_reference"),
                _gain("kp_up", kp, 30, "start_position"),
            ),
            frac_bits=30,
            wide=True,
        ),
    )
    resting = (
        _clip("rest_position", "position to rest at", "count", "position", counts),
        WordEquation(
            name="rest_code",
            meaning="code that holds the spring there",
            unit="code",
            terms=(_gain("spring", 1809517379, 35, "rest_position"),),
            shift=35,
            limit=codes,
        ),
    )
    return _controller(
        name="focus_stage",
        word_bits=32,
        update=update,
        reset=reset,
        resting=resting,
        resets={
            "standing_output": "start_standing",
            "position_count_before": "start_position",
        },
    )


def tilt_mirror() -> WordController:
    """PID with a notch, 16-bit words and 32-bit sums: 12-bit counts, 12-bit codes.

    The integral is wide and is led back by a quarter of what the limit took away, one sample
    later; the notch has equal sums of words above and below, so its gain at rest is exactly 1.
    """
    counts, codes = (-2048, 2047), (-1800, 1800)
    kp, kr = 21299, 14910  # 2^-14
    b0, b1, b2, a1, a2 = 7373, -13107, 6635, -13107, 5816  # 2^-13
    assert b0 + b1 + b2 == (1 << 13) + a1 + a2
    update = (
        _clip("position_count", "measured position", "count", "position", counts),
        _clip("reference_count", "position asked for", "count", "reference", counts),
        _clip("added_code", "codes added by the caller", "code", "added", (-2047, 2047)),
        WordEquation(
            name="change",
            meaning="change of position since the last sample",
            unit="count",
            terms=(_plain("position_count"), _plain("position_count", 1, sign=-1)),
        ),
        WordEquation(
            name="rate",
            meaning="part of the output that opposes speed",
            unit="code",
            terms=(
                _plain("rate", 1, lift=11),
                _gain("rate_decay", -770, 11, "rate", 1),
                _gain("rate_gain", 29020, 11, "change", lift=3),
            ),
            rest="rate_rest",
            shift=11,
            frac_bits=3,
            limit=(-32767, 32767),
        ),
        WordEquation(
            name="error",
            meaning="reference less position",
            unit="count",
            terms=(_plain("reference_count"), _plain("position_count", sign=-1)),
        ),
        WordEquation(
            name="integral",
            meaning="integral part of the output",
            unit="code",
            terms=(
                _plain("integral", 1),
                _gain("ki", 1967, 16, "error"),
                WordTerm(signal="excess", lag=1, sign=-1, lift=14, word_frac_bits=2),
            ),
            frac_bits=16,
            wide=True,
            limit=(-180000000, 180000000),
        ),
        WordEquation(
            name="wanted",
            meaning="output before the notch",
            unit="code",
            terms=(
                _plain("integral"),
                _gain("kr", kr, 14, "reference_count", lift=2),
                _gain("kp", -kp, 14, "position_count", lift=2),
                _plain("rate", sign=-1, lift=13),
                _plain("added_code", lift=16),
            ),
            shift=13,
            frac_bits=3,
            limit=(-32767, 32767),
        ),
        WordEquation(
            name="notched",
            meaning="output behind the notch",
            unit="code",
            terms=(
                _gain("notch_b0", b0, 13, "wanted"),
                _gain("notch_b1", b1, 13, "wanted", 1),
                _gain("notch_b2", b2, 13, "wanted", 2),
                _gain("notch_a1", -a1, 13, "notched", 1),
                _gain("notch_a2", -a2, 13, "notched", 2),
            ),
            rest="notched_rest",
            shift=13,
            frac_bits=3,
            limit=(-32767, 32767),
        ),
        WordEquation(
            name="unlimited",
            meaning="output before its limit",
            unit="code",
            terms=(_plain("notched"),),
            shift=3,
        ),
        _clip("output_code", "returned code", "code", "unlimited", codes),
        WordEquation(
            name="excess",
            meaning="what the limit took away",
            unit="code",
            terms=(_plain("unlimited"), _plain("output_code", sign=-1)),
            limit=(-2000, 2000),
        ),
    )
    reset = (
        _clip("start_position", "position to start at", "count", "position", counts),
        _clip("start_output", "code to start with", "code", "output", codes),
        WordEquation(
            name="start_integral",
            meaning="integral that gives the code there",
            unit="code",
            terms=(
                _plain("start_output", lift=16),
                _gain("kr_down", -kr, 14, "start_position", lift=2),
                _gain("kp_up", kp, 14, "start_position", lift=2),
            ),
            frac_bits=16,
            wide=True,
            limit=(-180000000, 180000000),
        ),
        WordEquation(
            name="start_notched",
            meaning="code on both sides of the notch",
            unit="code",
            terms=(_plain("start_output", lift=3),),
            frac_bits=3,
        ),
    )
    resting = (
        _clip("rest_position", "position to rest at", "count", "position", counts),
        WordEquation(
            name="rest_code",
            meaning="code that holds the hinge there",
            unit="code",
            terms=(_gain("spring", 26214, 16, "rest_position"),),
            shift=16,
            limit=codes,
        ),
    )
    return _controller(
        name="tilt_mirror",
        word_bits=16,
        update=update,
        reset=reset,
        resting=resting,
        resets={
            "position_count_before": "start_position",
            "integral_before": "start_integral",
            "wanted_before": "start_notched",
            "wanted_before2": "start_notched",
            "notched_before": "start_notched",
            "notched_before2": "start_notched",
        },
    )


def valve_spool() -> WordController:
    """Lead on a spring, 32-bit words, offset codes, both polarities reversed.

    Counts 0 to 4095 around 2040 that fall when the spool moves forward, codes 0 to 1023 around
    512 that fall for more force. Codes that the caller adds are in the sense of the returned code.
    """
    counts, codes = (0, 4095), (112, 912)
    zero_count, zero_code = 2040, 512
    gain, spring = 1181116006, 98784247  # 2^-32
    update = (
        _clip("position_count", "measured position", "count", "position", counts),
        _clip("reference_count", "position asked for", "count", "reference", (140, 3940)),
        _clip("added_code", "codes added by the caller", "code", "added", (-1023, 1023)),
        WordEquation(
            name="error",
            meaning="position less reference: forward, since the counts run backward",
            unit="count",
            terms=(_plain("position_count"), _plain("reference_count", sign=-1)),
        ),
        WordEquation(
            name="lead",
            meaning="filtered change of the error",
            unit="count",
            terms=(
                _gain("lead_pole", 1254130450, 31, "lead", 1),
                _gain("lead_gain", 893353197, 31, "error", lift=16),
                _gain("lead_gain_before", -893353197, 31, "error", 1, lift=16),
            ),
            shift=31,
            frac_bits=16,
            limit=(-100000000, 100000000),
        ),
        WordEquation(
            name="unlimited",
            meaning="returned code before its limit",
            unit="code",
            terms=(
                _gain("k_error", -gain, 32, "error", lift=8),
                _gain("k_lead", -1717986918, 24, "lead"),
                _gain("k_spring", spring, 32, "reference_count", lift=8),
                _plain("added_code", lift=40),
            ),
            constant=(zero_code << 40) - ((spring * zero_count) << 8),
            held="standing_output",
            shift=40,
            wide=True,
        ),
        _clip("output_code", "returned code", "code", "unlimited", codes),
        WordEquation(
            name="excess",
            meaning="what the limit took away",
            unit="code",
            terms=(_plain("unlimited"), _plain("output_code", sign=-1)),
            limit=(-2147483648, 2147483647),
        ),
    )
    reset = (
        _clip("start_position", "position to start at", "count", "position", counts),
        _clip("start_reference", "reference to start at", "count", "position", (140, 3940)),
        _clip("start_output", "code to start with", "code", "output", codes),
        WordEquation(
            name="start_error",
            meaning="error that a reference beyond the travel leaves",
            unit="count",
            terms=(_plain("start_position"), _plain("start_reference", sign=-1)),
        ),
        WordEquation(
            name="start_standing",
            meaning="what the law lacks at the start",
            unit="code",
            terms=(
                _plain("start_output", lift=40),
                _gain("k_spring_down", -spring, 32, "start_reference", lift=8),
                _gain("k_error_up", gain, 32, "start_error", lift=8),
            ),
            constant=((spring * zero_count) << 8) - (zero_code << 40),
            frac_bits=40,
            wide=True,
        ),
    )
    resting = (
        _clip("rest_position", "position to rest at", "count", "position", counts),
        WordEquation(
            name="rest_code",
            meaning="code that holds the spring there",
            unit="code",
            terms=(_gain("k_spring", spring, 32, "rest_position", lift=8),),
            constant=(zero_code << 40) - ((spring * zero_count) << 8),
            shift=40,
            limit=codes,
        ),
    )
    return _controller(
        name="valve_spool",
        word_bits=32,
        update=update,
        reset=reset,
        resting=resting,
        resets={"standing_output": "start_standing", "error_before": "start_error"},
    )


def gauge_table() -> WordController:
    """PD on a weak spring, 16-bit words, counts and codes from zeros of their own, both reversed.

    Counts 0 to 4095 around 2040 and codes 0 to 1023 around 512; inside, everything is counted from
    zero in the forward sense. The returned code is cut down when the force was cut up.
    """
    counts, travel, codes = (-2055, 2040), (-1900, 1900), (-400, 400)
    kp, kr = 5734, 6001  # 2^-14

    def from_zero(name: str, meaning: str, source: str, zero: int, limit: Range) -> WordEquation:
        unit = "count" if zero == 2040 else "code"
        e = _clip(name, meaning, unit, source, limit)
        return replace(e, terms=(_plain(source, sign=-1),), constant=zero)

    update = (
        from_zero("position_count", "position from zero", "position", 2040, counts),
        from_zero("reference_count", "reference from zero", "reference", 2040, travel),
        from_zero("added_code", "added codes, forward sense", "added", 0, (-1023, 1023)),
        WordEquation(
            name="change",
            meaning="change of position since the last sample",
            unit="count",
            terms=(_plain("position_count"), _plain("position_count", 1, sign=-1)),
        ),
        WordEquation(
            name="rate",
            meaning="part of the output that opposes speed",
            unit="code",
            terms=(
                _gain("rate_pole", 10240, 14, "rate", 1),
                _gain("rate_gain", 23001, 13, "change", lift=4),
            ),
            rest="rate_rest",
            shift=14,
            frac_bits=3,
            limit=(-32767, 32767),
        ),
        WordEquation(
            name="unlimited",
            meaning="output before its limit, from zero",
            unit="code",
            terms=(
                _gain("kr", kr, 14, "reference_count", lift=2),
                _gain("kp", -kp, 14, "position_count", lift=2),
                _plain("rate", sign=-1, lift=13),
                _plain("added_code", lift=16),
            ),
            held="standing_output",
            shift=16,
            wide=True,
        ),
        _clip("limited_code", "output within its limit, from zero", "code", "unlimited", codes),
        WordEquation(
            name="output_code",
            meaning="returned code",
            unit="code",
            terms=(_plain("limited_code", sign=-1),),
            constant=512,
        ),
        WordEquation(
            name="excess",
            meaning="what the limit took away from the returned code",
            unit="code",
            terms=(_plain("limited_code"), _plain("unlimited", sign=-1)),
        ),
    )
    reset = (
        from_zero("start_position", "position to start at", "position", 2040, counts),
        from_zero("start_reference", "reference to start at", "position", 2040, travel),
        from_zero("start_code", "code to start with, from zero", "output", 512, codes),
        WordEquation(
            name="start_standing",
            meaning="what the law lacks at the start",
            unit="code",
            terms=(
                _plain("start_code", lift=16),
                _gain("kr_down", -kr, 14, "start_reference", lift=2),
                _gain("kp_up", kp, 14, "start_position", lift=2),
            ),
            frac_bits=16,
            wide=True,
        ),
    )
    resting = (
        from_zero("rest_position", "position to rest at", "position", 2040, counts),
        WordEquation(
            name="rest_limited",
            meaning="output that holds the spring there",
            unit="code",
            terms=(_gain("spring", 4370, 18, "rest_position"),),
            shift=18,
            limit=codes,
        ),
        WordEquation(
            name="rest_code",
            meaning="the same as a returned code",
            unit="code",
            terms=(_plain("rest_limited", sign=-1),),
            constant=512,
        ),
    )
    return _controller(
        name="gauge_table",
        word_bits=16,
        update=update,
        reset=reset,
        resting=resting,
        resets={
            "standing_output": "start_standing",
            "position_count_before": "start_position",
        },
    )


def all_samples() -> tuple[WordController, ...]:
    """The stored controllers whose signals are counted as the caller counts them."""
    return (focus_stage(), tilt_mirror(), valve_spool())


def stored() -> tuple[WordController, ...]:
    """Every stored controller, one with zeros of its own among them."""
    return (*all_samples(), gauge_table())


def clip_of(controller: WordController, name: str) -> Range:
    """How far an input acts, as the caller counts it."""
    half = 1 << (controller.word_bits - 1)
    (reader,) = [e for e in controller.update for t in e.terms if t.signal == name]
    (t,) = reader.terms
    assert reader.limit is not None and abs(t.factor) == 1 and reader.shift == 0
    ends = [t.factor * (end - reader.constant) for end in reader.limit]
    return max(min(ends), -half), min(max(ends), half - 1)


class FractionController:
    """The same list on real numbers: no word, no shift, only values, units and one rounding.

    The reference for integer arithmetic. Signals are exact fractions in counts and codes; a word
    is its value, a lift is nothing, rounding is floor(x 2^n + 1/2) / 2^n, ties upward.
    """

    def __init__(self, controller: WordController) -> None:
        self.controller = controller
        self.frac_bits = {e.name: e.frac_bits for e in controller.update}
        self.sum_frac_bits: dict[str, int] = {}
        for e in controller.update:
            for name in (e.held, e.rest):
                if name is not None:
                    self.sum_frac_bits[name] = e.sum_frac_bits
        self.past: dict[tuple[str, int], Fraction] = {}
        self.kept: dict[str, Fraction] = {}
        self.sums: dict[str, Fraction] = {}
        self.before: dict[str, Fraction] = {}

    def load(self, state: Mapping[str, int]) -> None:
        """Take the words of a state struct."""
        self.past, self.kept = {}, {}
        for s in self.controller.state:
            if s.signal is None:
                self.kept[s.name] = Fraction(state[s.name], 1 << self.sum_frac_bits[s.name])
            else:
                value = Fraction(state[s.name], 1 << self.frac_bits[s.signal])
                self.past[s.signal, max(s.lag, 1)] = value

    def state(self) -> dict[str, int]:
        """The words of the state struct; every one is an integer."""
        words = {}
        for s in self.controller.state:
            if s.signal is None:
                value = self.kept[s.name] * (1 << self.sum_frac_bits[s.name])
            else:
                value = self.past[s.signal, max(s.lag, 1)] * (1 << self.frac_bits[s.signal])
            assert value.denominator == 1
            words[s.name] = int(value)
        return words

    def _pass(
        self, equations: tuple[WordEquation, ...], inputs: Mapping[str, int]
    ) -> dict[str, Fraction]:
        value = {name: Fraction(v) for name, v in inputs.items()}
        self.sums, self.before = {}, {}
        rests = {}
        for e in equations:
            total = Fraction(e.constant, 1 << e.sum_frac_bits)
            for name in (e.held, e.rest):
                total += self.kept[name] if name is not None else 0
            for t in e.terms:
                read = value[t.signal] if t.lag == 0 else self.past[t.signal, t.lag]
                if t.word is not None:
                    total += Fraction(t.word, 1 << t.word_frac_bits) * read
                else:
                    total += t.sign * Fraction(1, 1 << t.word_frac_bits) * read
            scale = 1 << e.frac_bits
            rounded = Fraction((total * scale + Fraction(1, 2)).__floor__(), scale)
            if e.rest is not None:
                rests[e.rest] = total - rounded
            self.sums[e.name], self.before[e.name] = total, rounded
            if e.limit is not None:
                low, high = (Fraction(x, scale) for x in e.limit)
                rounded = low if rounded < low else high if rounded > high else rounded
            value[e.name] = rounded
        self.kept.update(rests)
        return value

    def reset(self, position: int, output: int) -> None:
        """As the emitted function."""
        value = self._pass(self.controller.reset, {"position": position, "output": output})
        start = {
            s.name: Fraction(0) if s.after_reset is None else value[s.after_reset]
            for s in self.controller.state
        }
        self.kept = {s.name: start[s.name] for s in self.controller.state if s.signal is None}
        self.past = {
            (s.signal, max(s.lag, 1)): start[s.name]
            for s in self.controller.state
            if s.signal is not None
        }

    def update(self, reference: int, position: int, added: int = 0) -> int:
        """As the emitted function."""
        value = self._pass(
            self.controller.update,
            {"reference": reference, "position": position, "added": added},
        )
        self.past = {
            (name, lag): value[name] if lag == 1 else self.past[name, lag - 1]
            for name, lag in self.past
        }
        assert value[self.controller.output].denominator == 1
        return int(value[self.controller.output])

    def resting_output(self, position: int) -> int:
        """As the emitted function."""
        kept = dict(self.kept)
        value = self._pass(self.controller.resting, {"position": position})
        self.kept = kept
        return int(value[self.controller.resting[-1].name])

    def limited(self) -> int:
        """As the emitted function."""
        excess = self.past[self.controller.excess, 1]
        return (excess > 0) - (excess < 0)
