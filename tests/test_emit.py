"""The code generator: numbers, names and texts that reach C, stored words, files on disk.

Rules of this file:

- Goldens are kept whole. ``PLANT2_RENEW_GOLDENS=1`` writes them anew; read the difference.
- Stored words are judged by fractions, not by the simulation that made them.
"""

from __future__ import annotations

import hashlib
import os
import pickle
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
import sample_words
from hypothesis import given
from hypothesis import strategies as st
from sample_words import FractionController

from plant2 import emit
from plant2.emit import EmitFacts, RecordedStep, SelfcheckVectors
from plant2.equations import StateWord, WordController, WordTerm, from_plain, to_plain
from plant2.errors import OutOfRangeError, Plant2Error
from plant2.simulate import IntegerController

GOLDEN = Path(__file__).resolve().parent / "golden"

SAMPLES = {controller.name: controller for controller in sample_words.stored()}
VECTORS = {name: emit.selfcheck_vectors(controller) for name, controller in SAMPLES.items()}

FACTS = {
    "focus_stage": EmitFacts(
        about="Flexure-guided objective of a slide scanner",
        position_unit="152.6 nm per count",
        code_unit="0.7324 mA per code",
        sample_rate="20 kHz",
        delay="18 us",
        law="pd, Kp = 59 N/mm, Kd = 86 N*s/m, reference weighted to a static gain of 1",
        sha256="4c1b1ff0" * 8,
        cautions=(
            "Check the sign with the actuator's supply at a tenth: a push must be answered by a "
            "push back.",
            "The end stops are not known to this code.",
        ),
    ),
    "tilt_mirror": EmitFacts(
        about="Mirror on a torsion hinge, with a notch on its second mode",
        position_unit="12 urad per count",
        code_unit="0.4 mA per code",
        sample_rate="8 kHz",
        delay="40 us",
        law="pid with one notch",
        sha256="",
        options=("--set aim.law=pid", "--despite-misses"),
        marks=("overshoot = 7.2 %, limit 5 %: missed", "load: not judged, no cycle count"),
        cautions=("Keep the beam enclosed until the loop has been seen to hold.",),
    ),
    "gauge_table": EmitFacts(
        about="Table under a gauge, 0.5 \u00b5m a count; counts and codes from zeros of their own",
        position_unit="0.5 um per count",
        code_unit="2 mA per code",
        sample_rate="2 kHz",
        delay="600 us",
        law="pd",
        sha256="a5" * 32,
    ),
    "valve_spool": EmitFacts(
        about="Spool of a proportional valve; counts and codes run backward",
        position_unit="0.5 um per count",
        code_unit="2 mA per code",
        sample_rate="5 kHz",
        delay="100 us",
        law="lead on a spring",
        sha256="0f" * 32,
    ),
}

CHECK_JSON = '{\n  "format": 1,\n  "verdict": "met"\n}'


@pytest.fixture(params=list(SAMPLES))
def controller(request: pytest.FixtureRequest) -> WordController:
    """Each stored controller in turn."""
    return SAMPLES[request.param]


def rendered(controller: WordController, **changes: Any) -> dict[str, str]:
    """All files of a stored controller."""
    facts = replace(FACTS[controller.name], **changes)
    return emit.render(controller, facts, VECTORS[controller.name], CHECK_JSON)


# ------------------------------------------------------------------------------------ the goldens


def test_goldens(controller: WordController) -> None:
    folder = GOLDEN / controller.name
    files = rendered(controller)
    if os.environ.get("PLANT2_RENEW_GOLDENS") == "1":
        emit.write_files(folder, files)
    assert {p.name for p in folder.iterdir()} == set(files)
    for name, text in files.items():
        assert (folder / name).read_bytes().decode("utf-8") == text, name


def test_same_input_same_bytes(controller: WordController) -> None:
    """In another process with another hash seed, from the controller read back from JSON."""
    digest = hashlib.sha256("".join(rendered(controller).values()).encode()).hexdigest()
    program = (
        "import hashlib, test_emit\n"
        f"c = test_emit.SAMPLES[{controller.name!r}]\n"
        "c = test_emit.from_plain(test_emit.to_plain(c))\n"
        "vectors = test_emit.emit.selfcheck_vectors(c)\n"
        "facts = test_emit.FACTS[c.name]\n"
        "files = test_emit.emit.render(c, facts, vectors, test_emit.CHECK_JSON)\n"
        "print(hashlib.sha256(''.join(files.values()).encode()).hexdigest())\n"
    )
    here = Path(__file__).resolve().parent
    surroundings = dict(
        os.environ,
        PYTHONHASHSEED="12345",
        PYTHONPATH=os.pathsep.join([str(here), str(here.parent)]),
    )
    done = subprocess.run(
        [sys.executable, "-c", program],
        capture_output=True,
        text=True,
        env=surroundings,
        check=False,
    )
    assert done.stdout.strip() == digest, done.stderr


# ------------------------------------------------------------------ what the C looks like to people


def code_of(text: str) -> str:
    """C text without its comments."""
    return re.sub(r"/\*.*?\*/", "", text, flags=re.S)


def test_files_and_their_order(controller: WordController) -> None:
    name = controller.name
    assert list(rendered(controller)) == [
        f"{name}.h",
        f"{name}.c",
        f"{name}_words.h",
        f"{name}_selfcheck.c",
        f"{name}_check.json",
    ]
    assert rendered(controller)[f"{name}_check.json"] == CHECK_JSON + "\n"


def test_form_of_every_c_file(controller: WordController) -> None:
    name = controller.name
    for file, text in rendered(controller).items():
        if file.endswith(".json"):
            continue
        assert "\r" not in text and "\t" not in text
        assert text.endswith("\n") and not text.endswith("\n\n") and "\n\n\n" not in text
        long = [
            line for line in text.splitlines() if len(line) > emit.LINE or line != line.rstrip()
        ]
        assert not long
        code = code_of(text)
        assert not re.search(r"\b(float|double|malloc|static_assert|goto)\b", code)
        assert not re.search(r"[/%]", code.replace("<stdint.h>", "")), "a division"
        defined = re.findall(r"#define (\w+)", code)
        assert defined == ([f"{name.upper()}{'_WORDS' * ('_words' in file)}_H"] * (".h" in file))
        includes = set(re.findall(r"#include (\S+)", code))
        assert includes <= {"<stdint.h>", f'"{name}.h"'}
        assert "This file may be used without conditions." in text
        # Everything at file scope carries the loop's name.
        outside = re.sub(r"#ifdef __cplusplus\n.*?#endif\n", "", code, flags=re.S)
        outside = re.sub(r"^#.*", "", outside, flags=re.M)
        for _ in range(8):
            outside = re.sub(r"\{[^{}]*\}", ";", outside)
        assert "{" not in outside
        statements = [x for x in re.split(r"[;}]", outside) if re.search(r"\w", x)]
        names = [re.split(r"[(=]", x)[0].split() for x in statements]
        assert statements and all(n[-1].startswith(f"{name}_") or n == ["enum"] for n in names), (
            names
        )


def test_longest_loop_name_keeps_the_lines_short(controller: WordController) -> None:
    name = "a" * 31
    vectors = VECTORS[controller.name]
    files = emit.render(
        replace(controller, name=name),
        replace(FACTS[controller.name], about="long words " * 40, law="Kp " * 60),
        vectors,
        "{}",
    )
    for text in files.values():
        assert max(map(len, text.splitlines())) <= emit.LINE


def test_header_tells_what_a_reader_needs(controller: WordController) -> None:
    facts = FACTS[controller.name]
    text = rendered(controller)[f"{controller.name}.h"]
    flat = " ".join(text.replace("\n * ", " ").split())
    for fact in (
        facts.about,
        facts.position_unit,
        facts.code_unit,
        f"Sample rate {facts.sample_rate}",
        facts.delay,
        facts.law,
        facts.sha256,
        *facts.options,
    ):
        assert fact in flat, fact
    for caution in facts.cautions:
        assert " ".join(caution.split()) in " ".join(re.sub(r"\n \* +", " ", text).split())
    for i in controller.inputs:
        low, high = sample_words.clip_of(controller, i)
        assert f"- {i}: {low} .. {high} {'code' if i == 'added' else 'count'}" in flat
    for s in controller.state:
        member = re.search(rf"(/\*(?:(?!/\*).)*?\*/)\n    int\d+_t {s.name};", text, re.S)
        assert member, s.name
        assert f"{s.low} .. {s.high}, one step is " in " ".join(
            member[1].replace("\n     * ", " ").split()
        )


def test_marks_head_every_file() -> None:
    controller = SAMPLES["tilt_mirror"]
    for file, text in rendered(controller).items():
        if not file.endswith(".json"):
            assert "overshoot = 7.2 %, limit 5 %: missed" in text.split("#include")[0]
            assert "load: not judged" in text
            assert "Written although" not in rendered(SAMPLES["focus_stage"])["focus_stage.c"]


def test_every_sum_states_its_bound_and_what_is_spare(controller: WordController) -> None:
    text = rendered(controller)[f"{controller.name}.c"]
    flat = " ".join(text.replace("\n     * ", " ").split())
    room = controller.sum_bits - 1
    stated = re.findall(r"lies in (-?\d+) \.\. (-?\d+), (\d+) of (\d+) bits to spare", flat)
    ranges = {
        (e.sum_low, e.sum_high)
        for equations in (controller.update, controller.reset, controller.resting)
        for e in equations
    }
    assert len(stated) >= 7
    for low, high, spare, bits in stated:
        assert (int(low), int(high)) in ranges and int(bits) == room
        assert -(1 << room - int(spare)) <= int(low) and int(high) < 1 << room - int(spare)
        less = room - int(spare) - 1
        assert less < 0 or not (-(1 << less) <= int(low) and int(high) < 1 << less)


def test_free_text_cannot_leave_its_comment() -> None:
    controller = SAMPLES["focus_stage"]
    nasty = 'a */ int x; /* b "c" \\\n#define D ??/ \u202e \x07 **/ //e'
    files = rendered(
        controller, about=nasty, law=nasty, marks=(nasty,), options=(nasty,), cautions=(nasty,)
    )
    for file, text in rendered(controller).items():
        if not file.endswith(".json"):
            assert code_of(files[file]) == code_of(text)


@given(st.text())
def test_comment_text(text: str) -> None:
    fit = emit.comment_text(text)
    assert not re.search(r"\*/|/\*|\?\?|\\|[\x00-\x1f\x7f]", fit)
    assert emit.comment_text(fit) == fit
    if not re.search(r"[*/?\\]", text) and text.isascii() and text.isprintable():
        assert fit.split() == text.split()


# ------------------------------------------------------------------------------- numbers and names


@given(st.integers(-(1 << 70), 1 << 70), st.sampled_from([16, 32, 64]))
def test_literals_fit_or_are_refused(value: int, bits: int) -> None:
    if -(1 << bits - 1) <= value < 1 << bits - 1:
        text = emit.c_literal(value, bits=bits)
        assert eval(text) == value  # digits, minus, parentheses: checked next line
        assert re.fullmatch(r"-?\d+|\(-\d+ - 1\)", text)
        # No digit string may be larger than the type holds: it would be of a wider type.
        assert max(int(d) for d in re.findall(r"\d+", text)) < 1 << bits - 1
    else:
        with pytest.raises(OutOfRangeError, match=f"does not fit int{bits}_t"):
            emit.c_literal(value, bits=bits)


@pytest.mark.parametrize("bits", [16, 32, 64])
def test_ends_of_the_types(bits: int) -> None:
    half = 1 << bits - 1
    assert emit.c_literal(-half, bits=bits) == f"(-{half - 1} - 1)"
    assert emit.c_literal(half - 1, bits=bits) == str(half - 1)
    for value in (half, -half - 1):
        with pytest.raises(OutOfRangeError) as caught:
            emit.c_literal(value, bits=bits)
        again = pickle.loads(pickle.dumps(caught.value))
        assert str(again) == str(caught.value) and type(again) is OutOfRangeError


def changed(controller: WordController, name: str, **changes: Any) -> WordController:
    """The controller with one equation of its update changed."""
    return replace(
        controller,
        update=tuple(replace(e, **changes) if e.name == name else e for e in controller.update),
    )


def renamed(controller: WordController, old: str, new: str) -> WordController:
    """The controller with one signal of its update under another name."""

    def term(t: WordTerm) -> WordTerm:
        return replace(t, signal=new) if t.signal == old else t

    def state(s: StateWord) -> StateWord:
        return replace(s, signal=new) if s.signal == old else s

    return replace(
        controller,
        update=tuple(
            replace(e, name=new if e.name == old else e.name, terms=tuple(map(term, e.terms)))
            for e in controller.update
        ),
        state=tuple(map(state, controller.state)),
    )


@pytest.mark.parametrize(
    ("new", "rule"),
    [
        ("register", "is no name for C"),
        ("new", "is no name for C"),
        ("Change", "is no name for C"),
        ("int8_t", "is no name for C"),
        ("added", "is made twice"),
        ("rate", "is made twice"),
        ("state", "is used for two things"),
        ("rate_sum", "is used for two things"),
        ("rate_rest", "is used for two things"),
        ("kr", "is used for two things"),
        ("change; int x", "is no name for C"),
    ],
)
def test_names_that_would_not_serve_in_c(new: str, rule: str) -> None:
    controller = SAMPLES["focus_stage"]
    with pytest.raises(OutOfRangeError, match=rule):
        emit.render(renamed(controller, "change", new), FACTS["focus_stage"], no_vectors(), "{}")


def no_vectors() -> SelfcheckVectors:
    """Nothing to replay."""
    return SelfcheckVectors(sections=(), states=((0,) * 5,))


def test_a_renamed_signal_serves() -> None:
    controller = renamed(SAMPLES["focus_stage"], "change", "difference")
    files = emit.render(controller, FACTS["focus_stage"], VECTORS["focus_stage"], "{}")
    assert "const int32_t difference = (int32_t)difference_wide;" in files["focus_stage.c"]


def test_lists_that_do_not_fit_together() -> None:
    good = SAMPLES["focus_stage"]
    facts = FACTS["focus_stage"]

    def refused(controller: WordController, rule: str) -> None:
        with pytest.raises(OutOfRangeError, match=rule):
            emit.render(controller, facts, no_vectors(), "{}")

    refused(replace(good, inputs=("position", "reference", "added")), "not the usual three")
    refused(replace(good, word_bits=24, sum_bits=48), "neither 16 and 32 nor 32 and 64")
    refused(replace(good, name="While"), "is no name for C")
    refused(replace(good, state=good.state[1:]), "is read but not kept in the state")
    refused(replace(good, state=good.state[:-1]), "is not kept in the state")
    refused(replace(good, state=(*good.state, good.state[0])), "has a name twice")
    refused(replace(good, output="unlimited"), "is not a word")
    refused(replace(good, resting=()), "has no equation")
    rate = good.equation("rate")
    twice = (rate.terms[0], rate.terms[1], replace(rate.terms[1], name="kr"))
    refused(changed(good, "rate", terms=twice), "is two different words")
    nameless = (replace(rate.terms[1], name=None),)
    refused(changed(good, "rate", terms=nameless), "a coefficient without a name")
    too_large = (*rate.terms[:1], replace(rate.terms[1], word=1 << 31), *rate.terms[2:])
    refused(changed(good, "rate", terms=too_large), "does not fit a word")
    refused(changed(good, "rate", limit=(-(1 << 31) - 5, 1 << 65)), "leaves its stated range")
    refused(changed(good, "rate", limit=(-(1 << 40), 1 << 40)), "leaves its stated range")
    wide = changed(good, "rate", limit=(-(1 << 40), 1 << 40), low=-(1 << 40), high=1 << 40)
    refused(wide, "partial sum overflows")
    lifted = (replace(rate.terms[0], lift=63), *rate.terms[1:])
    refused(changed(good, "rate", terms=lifted), "formats do not add up")
    refused(changed(good, "rate", shift=64), "formats do not add up")
    old = replace(good.state[0], name="x", lag=3)
    refused(replace(good, state=(*good.state, old)), "has no younger word before it")
    lost = replace(good.state[0], after_reset="nothing")
    refused(replace(good, state=(lost, *good.state[1:])), "starts from nothing")


def test_templates_stop_instead_of_printing_wrong_c() -> None:
    environment = emit._environment(SAMPLES["tilt_mirror"])
    with pytest.raises(OutOfRangeError, match="no bit to drop"):
        environment.from_string('{% require 1 > 2, "no bit to drop" %}').render()
    assert environment.from_string('{% require 1 < 2, "x" %}\ny').render() == "y"
    with pytest.raises(Exception, match="'nowhere' is undefined"):
        environment.from_string("{{ nowhere }}").render()
    with pytest.raises(OutOfRangeError, match="does not fit int16_t"):
        environment.from_string("{{ 32768 | word_literal }}").render()
    assert environment.from_string("{{ 32768 | sum_literal }}").render() == "32768"
    with pytest.raises(OutOfRangeError, match="does not fit int32_t"):
        environment.from_string("{{ (2 ** 31) | sum_literal }}").render()
    for count in (0, 32, -1):
        with pytest.raises(OutOfRangeError, match="drops no bit or all"):
            environment.from_string(f"{{{{ ({count}) | shift_literal }}}}").render()
    with pytest.raises(OutOfRangeError, match="is no plain text"):
        environment.from_string("{{ 'a */ b' | columns }}").render()
    with pytest.raises(OutOfRangeError, match="the sample rate and the delay are not told"):
        rendered(SAMPLES["tilt_mirror"], delay="")


def test_limits_at_the_end_of_the_type_are_not_written() -> None:
    """A comparison that is always false is a warning with every strict compiler."""
    controller = changed(SAMPLES["focus_stage"], "added_code", limit=(-(1 << 31), 4095))
    update = sample_words.with_ranges(controller.update, controller.inputs, 32)
    controller = replace(controller, update=update)
    text = emit.render(controller, FACTS["focus_stage"], no_vectors(), "{}")["focus_stage.c"]
    assert "if (added_code > 4095)" in text and "if (added_code <" not in text


# ----------------------------------------------------------------------------------- stored words


def check_replay(controller: WordController, vectors: SelfcheckVectors) -> None:
    """Replay every entry on fractions."""
    names = [s.name for s in controller.state]
    machine = FractionController(controller)
    machine.reset(0, 0)
    for number, row in enumerate(vectors.rows, 1):
        assert row.times >= 1
        for _ in range(row.times):
            if row.ask == "from_state":
                machine.load(dict(zip(names, vectors.states[row.words[0]], strict=True)))
            elif row.ask == "same_state":
                expected = dict(zip(names, vectors.states[row.words[0]], strict=True))
                assert machine.state() == expected, number
            elif row.ask == "reset":
                machine.reset(row.words[0], row.words[1])
            elif row.ask == "resting_output":
                assert machine.resting_output(row.words[0]) == row.expected, number
            else:
                assert row.ask == "update" or row.ask == "update_added"
                code = machine.update(*row.words)
        if row.ask.startswith("update"):
            assert (code, machine.limited()) == (row.expected, row.limited), number


def test_stored_words_are_those_of_fractions(controller: WordController) -> None:
    vectors = VECTORS[controller.name]
    check_replay(controller, vectors)
    assert 200 <= len(vectors.rows) <= 500
    assert len(vectors.states) <= 120
    wrong = replace(vectors.rows[1], expected=vectors.rows[1].expected + 1)
    title, rows = vectors.sections[0]
    with pytest.raises(AssertionError):
        check_replay(
            controller,
            replace(vectors, sections=((title, (rows[0], wrong)), *vectors.sections[1:])),
        )


def test_stored_words_hit_ties_and_limits(controller: WordController) -> None:
    """Every rounding of the update ties exactly and just misses; every limit acts on both sides."""
    vectors = VECTORS[controller.name]
    names = [s.name for s in controller.state]
    ties: set[str] = set()
    misses: set[str] = set()
    acts: set[tuple[str, str]] = set()
    machine = FractionController(controller)
    machine.reset(0, 0)
    for row in vectors.rows:
        if row.ask == "from_state":
            machine.load(dict(zip(names, vectors.states[row.words[0]], strict=True)))
        elif row.ask == "reset":
            machine.reset(row.words[0], row.words[1])
        elif row.ask.startswith("update"):
            for _ in range(row.times):
                machine.update(*row.words)
            for e in controller.update:
                total = machine.sums[e.name] * (1 << e.sum_frac_bits)
                past = int(total + e.rounding) % (1 << e.shift) if e.shift else None
                ties |= {e.name} if past == 0 else set()
                misses |= {e.name} if past is not None and past >= (1 << e.shift) - 2 else set()
                value = machine.before[e.name] * (1 << e.frac_bits)
                if e.limit is not None and value < e.limit[0]:
                    acts.add((e.name, "lower"))
                if e.limit is not None and value > e.limit[1]:
                    acts.add((e.name, "upper"))
    rounded = {e.name for e in controller.update if e.shift}
    assert ties == misses == rounded
    silent = set()
    if controller.name in {"focus_stage", "valve_spool"}:
        silent = {("excess", "lower"), ("excess", "upper")}
    limited = {(e.name, s) for e in controller.update if e.limit for s in ("lower", "upper")}
    assert acts == limited - silent
    told = {tuple(note.split(": the ")) for note in vectors.unreached if "can never act" in note}
    assert told == {(name, f"{side} limit can never act") for name, side in silent}


def test_nearest_count_to_a_tie_is_told(controller: WordController) -> None:
    """Where no count ties, the nearest of all counts is stored and the distance is told."""
    position, code, *_ = controller.resting
    sums = [
        code.constant + code.terms[0].factor * p + code.rounding
        for p in range(position.low, position.high + 1)
    ]
    nearest = min(s % (1 << code.shift) for s in sums)
    notes = [n for n in VECTORS[controller.name].unreached if n.startswith(f"{code.name}: ")]
    distance = [int(n.split()[-2]) for n in notes]
    assert nearest > 0 and len(distance) == 1
    # Only counts whose coefficient has something to multiply were taken.
    assert distance[0] >= nearest
    assert distance[0] in {s % (1 << code.shift) for s in sums}


def closed_loop(controller: WordController, samples: int) -> RecordedStep:
    """A reference step on a position that follows slowly: a record like one of the loop."""
    machine = IntegerController(controller)
    start = sum(sample_words.clip_of(controller, "position")) // 2
    output = (controller.equation("output_code").low + controller.equation("output_code").high) // 2
    machine.reset(start, output)
    references = tuple(start + (60 if k > 2 else 0) for k in range(samples))
    positions = tuple(start + max(0, min(60, k // 3 - 2)) for k in range(samples))
    codes = tuple(machine.update(r, p) for r, p in zip(references, positions, strict=True))
    return RecordedStep(
        position=start, output=output, references=references, positions=positions, codes=codes
    )


def test_recorded_step_is_check_replay(controller: WordController) -> None:
    record = closed_loop(controller, 250)
    vectors = emit.selfcheck_vectors(controller, closed_loop=record)
    check_replay(controller, vectors)
    title, rows = vectors.sections[-1]
    assert "closed loop" in title
    updates = [r for r in rows if r.ask == "update"]
    assert tuple(r.expected for r in updates) == record.codes[:200]
    wrong = replace(record, codes=(*record.codes[:7], record.codes[7] + 1, *record.codes[8:]))
    with pytest.raises(Plant2Error, match="code at sample 7"):
        emit.selfcheck_vectors(controller, closed_loop=wrong)


@given(
    slope=st.integers(-(1 << 20), 1 << 20),
    start=st.integers(-(1 << 20), 1 << 20),
    bits=st.integers(0, 12),
    last=st.integers(0, 60),
)
def test_nearest_remainder_is_the_least_of_all(
    slope: int, start: int, bits: int, last: int
) -> None:
    modulus = 1 << bits
    x, remainder = emit._nearest_remainder(slope, start, modulus, last)
    every = [(start - slope * k) % modulus for k in range(last + 1)]
    assert 0 <= x <= last
    assert remainder == every[x] == min(every)


def test_generator_of_the_noise_is_the_published_one() -> None:
    """First numbers of xorshift32 from 2463534242 (Marsaglia 2003, from memory: 723471715)."""
    noise = emit._Noise(2463534242)
    assert noise.bits() == 723471715
    draws = [noise.between(-3, 3) for _ in range(2000)]
    assert set(draws) == set(range(-3, 4))
    assert {noise.near_middle(5, 9) for _ in range(500)} == set(range(5, 10))


# ---------------------------------------------------------------------------------- files on disk


def test_files_are_written_whole(tmp_path: Path) -> None:
    folder = tmp_path / "a" / "b"
    emit.write_files(folder, {"x.h": "one\n", "x.c": "zwei \u00b5\n"})
    assert (folder / "x.c").read_bytes() == b"zwei \xc2\xb5\n"
    emit.write_files(folder, {"x.h": "three\n"})
    assert (folder / "x.h").read_text("utf-8") == "three\n"
    assert sorted(p.name for p in folder.iterdir()) == ["x.c", "x.h"]


def test_mode_is_that_of_any_new_file(tmp_path: Path) -> None:
    (tmp_path / "usual").write_text("", "utf-8")
    emit.write_files(tmp_path, {"x.h": "one\n"})
    assert (tmp_path / "x.h").stat().st_mode == (tmp_path / "usual").stat().st_mode


def contents(folder: Path) -> dict[str, bytes | None]:
    """Everything below a folder."""
    return {
        str(p.relative_to(folder)): None if p.is_dir() else p.read_bytes()
        for p in sorted(folder.rglob("*"))
    }


@pytest.mark.parametrize("failing", [1, 2, 3])
def test_failed_rename_leaves_everything_as_it_was(
    failing: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "x.c").write_text("old\n", "utf-8")
    before = contents(tmp_path)
    real, calls = os.replace, []

    def rename(source: Path, target: Path) -> None:
        calls.append(target)
        if len(calls) == failing:
            raise OSError(28, "No space left on device", str(source))
        real(source, target)

    monkeypatch.setattr(os, "replace", rename)
    with pytest.raises(Plant2Error, match="no space left on device; choose another folder"):
        emit.write_files(tmp_path, {"x.h": "1\n", "x.c": "2\n", "x_words.h": "3\n"})
    assert contents(tmp_path) == before


def test_made_folders_go_again_after_a_failure(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def rename(source: Path, target: Path) -> None:
        raise OSError(5, "Input/output error", str(source))

    monkeypatch.setattr(os, "replace", rename)
    with pytest.raises(Plant2Error):
        emit.write_files(tmp_path / "a" / "b", {"x.h": "1\n"})
    assert contents(tmp_path) == {}


def test_interrupt_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def rename(source: Path, target: Path) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "replace", rename)
    with pytest.raises(KeyboardInterrupt):
        emit.write_files(tmp_path / "a", {"x.h": "1\n"})
    assert contents(tmp_path) == {}


def test_folder_that_is_a_file(tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("mine\n", "utf-8")
    for folder in (tmp_path / "taken", tmp_path / "taken" / "below"):
        with pytest.raises(Plant2Error, match="choose another folder") as caught:
            emit.write_files(folder, {"x.h": "1\n"})
        assert str(caught.value).startswith(f"{folder}: ")
    assert contents(tmp_path) == {"taken": b"mine\n"}


def test_name_that_is_taken_by_a_folder(tmp_path: Path) -> None:
    (tmp_path / "x.c").mkdir()
    with pytest.raises(Plant2Error, match=r"x\.c: is a directory"):
        emit.write_files(tmp_path, {"x.h": "1\n", "x.c": "2\n"})
    assert contents(tmp_path) == {"x.c": None}


def test_folder_that_may_not_be_written(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir(mode=0o500)
    # Whoever may write anywhere is still refused by the kernel's own folder.
    folder = tmp_path / "a" if os.geteuid() else Path("/proc/self")
    with pytest.raises(Plant2Error, match="choose another folder") as caught:
        emit.write_files(folder, {"x.h": "1\n"})
    assert str(caught.value).startswith(f"{folder}: ")
    assert contents(tmp_path) == {"a": None}


def test_stored_controllers_survive_json(controller: WordController) -> None:
    assert from_plain(to_plain(controller)) == controller
