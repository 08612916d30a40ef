"""Faults planted in the emitted C: the self-check that is emitted beside it finds them.

Rules of this file:

- A fault is a single edit of the emitted text, made by rule and named after what it breaks.
- Whatever the self-check does not find is listed below with the reason why nobody could, and that
  reason is proven here, by intervals or by trying every input; nothing is left out of the count.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest
import sample_words

from plant2.equations import WordController, partial_sum_range

FUNCTIONS = (
    "reset",
    "update_added",
    "update",
    "resting_output",
    "limited",
    "shift",
    "selfcheck",
    "same_state",
)


STORED = {controller.name: controller for controller in sample_words.stored()}


@pytest.fixture(params=list(STORED))
def controller(request: pytest.FixtureRequest) -> WordController:
    """Each stored controller in turn: what is listed below was proven for these."""
    return STORED[request.param]


@dataclass(frozen=True, slots=True, kw_only=True)
class Mutant:
    """One edit of the emitted source."""

    name: str
    text: str


def function_bodies(text: str) -> Iterator[tuple[str, int, int]]:
    """Name and place of every function that is defined in the text."""
    for match in re.finditer(r"^[^\n#/* }][^;{}]*?(\w+)\([^;{}]*\)\n\{\n", text, re.M):
        yield match[1], match.end(), text.index("\n}\n", match.end())


def edits(body: str) -> Iterator[tuple[str, int, int, str]]:
    """Name, place and new text of every single fault of a function's body."""

    def at(match: re.Match[str], group: int | str, new: str) -> tuple[int, int, str]:
        return match.start(group), match.end(group), new

    for m in re.finditer(r"~\(~x >> n\)", body):
        yield "rounds toward zero", *at(m, 0, "-(-x >> n)")
        yield "negative numbers unshifted", *at(m, 0, "~(~x)")
    for m in re.finditer(r"static const \w+ (\w+) = (-?\d+);", body):
        for off in (1, -1):
            yield f"word {m[1]} {off:+d}", *at(m, 2, str(int(m[2]) + off))
        yield f"word {m[1]} negated", *at(m, 2, str(-int(m[2])))
    for m in re.finditer(r"_shift\((\w+)_sum \+ (\d+), (\d+)\)", body):
        constant, places = int(m[2]), int(m[3])
        yield f"{m[1]}: truncated for rounded", *at(m, 2, "0")
        yield f"{m[1]}: rounding constant one too small", *at(m, 2, str(constant - 1))
        yield f"{m[1]}: rounding constant one too large", *at(m, 2, str(constant + 1))
        yield f"{m[1]}: one place more", *at(m, 3, str(places + 1))
        yield f"{m[1]}: one place less", *at(m, 3, str(places - 1))
    limit = r"    if \((\w+) ([<>]) \(?(-?\d+)(?: - 1\))?\) \{\n        \1 = [^;]*;\n    \}\n"
    for m in re.finditer(limit, body):
        side = "lower" if m[2] == "<" else "upper"
        bound = int(m[3])
        for off in (1, -1):
            moved = bound + off
            new = f"    if ({m[1]} {m[2]} {moved}) {{\n        {m[1]} = {moved};\n    }}\n"
            yield f"{m[1]}: {side} limit {off:+d}", *at(m, 0, new)
        yield f"{m[1]}: no {side} limit", *at(m, 0, "")
        new = f"    if ({m[1]} {m[2]} {bound}) {{\n        {m[1]} = {-bound - 3};\n    }}\n"
        yield f"{m[1]}: {side} limit gives another value", *at(m, 0, new)
    for statement in re.finditer(r"    (?:const )?\w+_t (\w+) = ((?:[^;](?!_shift))*);", body):
        if statement[1].endswith("_rest"):
            continue
        yield f"{statement[1]}: first term negated", *at(statement, 2, f"- {statement[2]}")
        for m in re.finditer(r"\s([+-]) ", statement[2]):
            start = statement.start(2) + m.start(1)
            term = statement[2][m.end() :].split("\n")[0]
            yield f"{statement[1]}: sign of {term}", start, start + 1, "+-"[m[1] == "+"]
    for m in re.finditer(r" \* (\d+)(?=;|\n| [+-])", body):
        line = body[body.rfind("\n", 0, m.start()) + 1 : body.find("\n", m.end())].strip()
        yield f"lift doubled in `{line}`", *at(m, 1, str(int(m[1]) * 2))
        yield f"lift halved in `{line}`", *at(m, 1, str(int(m[1]) // 2))
    for m in re.finditer(r"= (-?\d{2,})\n", body):
        for off in (1, -1):
            yield f"constant {m[1]} {off:+d}", *at(m, 1, str(int(m[1]) + off))
    for m in re.finditer(r"= state->(\w+)\n        \+ ", body):
        yield f"{m[1]} left out", *at(m, 0, "= ")
    for m in re.finditer(r"        \+ state->(\w+)\n", body):
        yield f"{m[1]} left out", *at(m, 0, "")
    for m in re.finditer(r"const \w+ (\w+_rest) = (.*);", body):
        yield f"{m[1]}: no carry", *at(m, 2, "0")
    stores = list(re.finditer(r"    state->(\w+) = ([^;]*);\n", body))
    for m in stores:
        yield f"{m[1]} not stored", *at(m, 0, "")
    for a, b in zip(stores, stores[1:], strict=False):
        if a[2] != b[2]:
            new = f"    state->{a[1]} = {b[2]};\n    state->{b[1]} = {a[2]};\n"
            yield f"{a[1]} and {b[1]} swapped", a.start(), b.end(), new
    reads = sorted(set(re.findall(r"state->(\w+)", body[: stores[0].start()] if stores else "")))
    for a_name, b_name in zip(reads, reads[1:], strict=False):
        for m in re.finditer(rf"state->{a_name}\b", body[: stores[0].start()]):
            yield f"{b_name} read for {a_name}", *at(m, 0, f"state->{b_name}")
    for m in re.finditer(r"    if \(state->\w+ ([<>]) (0)\) \{\n        return (-?1);", body):
        yield f"limited: {m[1]} turned", *at(m, 1, "<" if m[1] == ">" else ">")
        yield f"limited: beyond {m[1]} 1", *at(m, 2, "1" if m[1] == ">" else "-1")
        yield f"limited: {m[3]} negated", *at(m, 3, str(-int(m[3])))


def mutants_of(text: str) -> list[Mutant]:
    """All single faults of an emitted source."""
    found: dict[str, Mutant] = {}
    for function, first, last in function_bodies(text):
        for name, start, end, new in edits(text[first : last + 1]):
            changed = text[: first + start] + new + text[first + end :]
            if changed == text:
                continue
            short = function.split("_", 2)[-1]
            key = f"{short}: {name}"
            while key in found:
                key += " again"
            found[key] = Mutant(name=key, text=changed)
    return list(found.values())


HARNESS = """\
#include "{name}.h"
#include <stdio.h>
{parts}
static int (*const checks[])(void) = {{{checks}}};
int main(void)
{{
    for (unsigned i = 0; i < sizeof checks / sizeof *checks; i++) {{
        printf("%d\\n", checks[i]());
    }}
    return 0;
}}
"""


def selfchecks(
    name: str, sources: list[str], folder: Path, cc: str, emitted: Path, command: Callable[..., str]
) -> list[int]:
    """What the emitted self-check answers about each source; all built into one program."""
    parts = []
    for number, text in enumerate(sources):
        (folder / f"source{number}.c").write_text(text, "utf-8")
        parts += [f"#define {name}_{f} s{number}_{f}" for f in FUNCTIONS]
        # The prototypes of the header, once more under the new names.
        parts += [
            f"void {name}_reset({name}_state *, {name}_code, {name}_code);",
            f'#include "source{number}.c"',
            f'#include "{name}_selfcheck.c"',
        ]
        parts += [f"#undef {name}_{f}" for f in FUNCTIONS]
    checks = ", ".join(f"s{number}_selfcheck" for number in range(len(sources)))
    main = folder / "harness.c"
    main.write_text(
        HARNESS.format(name=name, parts="\n".join(parts), checks=checks), encoding="utf-8"
    )
    program = folder / "harness"
    # A fault may overflow: let it wrap, so that the answer is the machine's and not a surprise.
    command([cc, "-std=c99", "-O0", "-fwrapv", "-I", emitted, "-o", program, main])
    return [int(line) for line in command([program]).splitlines()]


def eight(function: str, local: str) -> set[str]:
    """Names of every fault of a limit."""
    kinds = ("limit +1", "limit -1", "no {} limit", "limit gives another value")
    return {
        f"{function}: {local}: {kind.format(side) if '{' in kind else f'{side} {kind}'}"
        for side in ("lower", "upper")
        for kind in kinds
    }


# Which faults change nothing that anybody could see, each with the reason that is proven below.
NEVER_ACTS = {
    "focus_stage": eight("update_added", "excess_wide"),
    "tilt_mirror": set(),
    "valve_spool": eight("update_added", "excess_wide"),
    "gauge_table": set(),
}
"""The interval of the sum lies within the limit (the type's own range, or nearly)."""

NEVER_ACTS_IN_RESET = {
    "focus_stage": set(),
    "tilt_mirror": eight("reset", "start_integral"),
    "valve_spool": set(),
    "gauge_table": set(),
}
"""The sum is linear in position and output, and its four corners lie within the limit."""

ONLY_EVEN_SUMS = {
    "focus_stage": set(),
    "tilt_mirror": set(),
    "valve_spool": {"update_added: lead: rounding constant one too large"},
    "gauge_table": set(),
}
"""Every sum is even and so is the next tie: one more reaches no tie that was not reached."""

NO_COUNT_SHOWS_IT = {
    "focus_stage": eight("resting_output", "rest_code_wide")
    | {
        "resting_output: rest_code: rounding constant one too large",
        "resting_output: rest_code: rounding constant one too small",
        "resting_output: rest_position: lower limit +1",
        "resting_output: rest_position: lower limit -1",
        "resting_output: rest_position: upper limit +1",
        "resting_output: rest_position: upper limit -1",
        "resting_output: word spring +1",
        "resting_output: word spring -1",
    },
    "tilt_mirror": eight("resting_output", "rest_code_wide")
    | {
        "resting_output: rest_code: rounding constant one too large",
        "resting_output: rest_code: rounding constant one too small",
        "resting_output: rest_position: lower limit +1",
        "resting_output: rest_position: upper limit +1",
        "resting_output: word spring +1",
        "resting_output: word spring -1",
    },
    "valve_spool": eight("resting_output", "rest_code_wide")
    | {
        "resting_output: rest_code: rounding constant one too large",
        "resting_output: rest_code: rounding constant one too small",
        "resting_output: rest_position: lower limit +1",
        "resting_output: rest_position: lower limit -1",
        "resting_output: rest_position: lower limit gives another value",
        "resting_output: rest_position: upper limit +1",
        "resting_output: rest_position: upper limit -1",
    },
    "gauge_table": eight("resting_output", "rest_limited_wide")
    | {
        "resting_output: rest_limited: rounding constant one too large",
        "resting_output: rest_limited: rounding constant one too small",
        "resting_output: rest_position_wide: lower limit +1",
        "resting_output: rest_position_wide: lower limit -1",
        "resting_output: rest_position_wide: upper limit +1",
        "resting_output: rest_position_wide: upper limit -1",
        "resting_output: word spring +1",
    },
}
"""The function of one count gives the same code at every count: all of them are tried."""


COUNTS = {"focus_stage": 196, "tilt_mirror": 304, "valve_spool": 210, "gauge_table": 211}
"""How many faults are planted: fewer would mean that a rule no longer finds its place."""


def test_every_fault_is_found(
    controller: WordController,
    emitted: Path,
    any_cc: str,
    command: Callable[..., str],
    tmp_path: Path,
) -> None:
    name = controller.name
    text = (emitted / f"{name}.c").read_text("utf-8")
    mutants = mutants_of(text)
    assert len(mutants) == COUNTS[name]
    answers = selfchecks(
        name, [text, *(m.text for m in mutants)], tmp_path, any_cc, emitted, command
    )
    assert answers[0] == 0
    survivors = {m.name for m, a in zip(mutants, answers[1:], strict=True) if a == 0}
    harmless = (NEVER_ACTS, NEVER_ACTS_IN_RESET, ONLY_EVEN_SUMS, NO_COUNT_SHOWS_IT)
    assert survivors == set().union(*(table[name] for table in harmless))


def test_limits_that_never_act(controller: WordController) -> None:
    half = 1 << (controller.word_bits - 1)
    ranges = dict.fromkeys(controller.inputs, (-half, half - 1))
    ranges |= {e.name: (e.low, e.high) for e in controller.update}
    for fault in NEVER_ACTS[controller.name]:
        e = controller.equation(fault.split(": ")[1].removesuffix("_wide"))
        (low, high), _ = partial_sum_range(e, ranges)
        assert e.shift == 0 and e.limit is not None
        # One count of room, so that a limit one count narrower does not act either.
        assert e.limit[0] + 1 <= low and high <= e.limit[1] - 1


def test_limits_that_never_act_in_a_reset(controller: WordController) -> None:
    for fault in NEVER_ACTS_IN_RESET[controller.name]:
        e = next(x for x in controller.reset if x.name == fault.split(": ")[1])
        made = {x.name: x for x in controller.reset}
        assert e.shift == 0 and e.limit is not None and e.held is None and e.rest is None
        # Every signal it reads is a clipped input, so its sum is linear in the two of them.
        assert all(not made[t.signal].shift and len(made[t.signal].terms) == 1 for t in e.terms)
        reads = {t.signal for t in e.terms}
        for corner in range(1 << len(reads)):
            at = {
                signal: made[signal].high if corner >> i & 1 else made[signal].low
                for i, signal in enumerate(sorted(reads))
            }
            total = e.constant + sum(t.factor * at[t.signal] for t in e.terms)
            assert e.limit[0] + 1 <= total <= e.limit[1] - 1


def test_sums_that_are_all_even(controller: WordController) -> None:
    for fault in ONLY_EVEN_SUMS[controller.name]:
        e = controller.equation(fault.split(": ")[1])
        assert e.held is None and e.rest is None
        assert all(t.factor % 2 == 0 for t in e.terms)
        assert (e.constant + e.rounding) % 2 == 0 and e.shift >= 1


COUNTING = """\
#include "{name}.h"
#include <stdio.h>
{parts}
static {name}_code (*const functions[])({name}_code) = {{{functions}}};
static int same({name}_code position)
{{
    int which;
    for (which = 1; which < (int)(sizeof functions / sizeof *functions); which++) {{
        if (functions[which](position) != functions[0](position)) {{
            printf("%d at %ld\\n", which, (long)position);
            return 0;
        }}
    }}
    return 1;
}}
int main(void)
{{
    {name}_code position;
    for (position = {low}; position <= {high}; position++) {{
        if (!same(position)) {{
            return 0;
        }}
    }}
    if (same({least}) && same({most})) {{
        printf("all the same\\n");
    }}
    return 0;
}}
"""


def counting_program(
    name: str, controller: WordController, sources: list[str], folder: Path
) -> Path:
    """C text that compares the resting output of all sources at every count that can differ."""
    clip = sample_words.clip_of(controller, "position")
    half = 1 << (controller.word_bits - 1)
    parts = []
    for number, text in enumerate(sources):
        (folder / f"counted{number}.c").write_text(text, "utf-8")
        parts += [f"#define {name}_{f} s{number}_{f}" for f in FUNCTIONS]
        parts += [f'#include "counted{number}.c"']
        parts += [f"#undef {name}_{f}" for f in FUNCTIONS]
    main = folder / "counting.c"
    main.write_text(
        COUNTING.format(
            name=name,
            parts="\n".join(parts),
            functions=", ".join(f"s{n}_resting_output" for n in range(len(sources))),
            # Beyond the limit and its neighbours every version is constant: the ends stand for it.
            low=max(clip[0] - 5, -half),
            high=min(clip[1] + 5, half - 2),
            least=f"-{half - 1} - 1",
            most=half - 1,
        ),
        "utf-8",
    )
    return main


def test_faults_that_no_count_shows(
    controller: WordController,
    emitted: Path,
    any_cc: str,
    command: Callable[..., str],
    tmp_path: Path,
) -> None:
    name = controller.name
    text = (emitted / f"{name}.c").read_text("utf-8")
    mutants = {m.name: m.text for m in mutants_of(text)}
    harmless = [mutants[fault] for fault in sorted(NO_COUNT_SHOWS_IT[name])]
    visible = mutants[
        "resting_output: word spring negated"
        if name != "valve_spool"
        else "resting_output: word k_spring negated"
    ]
    program = tmp_path / "counting"
    for others, answer in ((harmless, "all the same\n"), ([visible], "1 at ")):
        main = counting_program(name, controller, [text, *others], tmp_path)
        command([any_cc, "-std=c99", "-O1", "-fwrapv", "-I", emitted, "-o", program, main])
        assert command([program]).startswith(answer)
