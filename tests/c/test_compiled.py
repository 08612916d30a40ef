"""The emitted files compile without a word, in C and C++, and repeat the stored words.

Rules of this file:

- Every combination is built from the emitted text as it is written for users.
"""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from plant2.equations import WordController

WARNINGS = (
    "-std=c99 -Wall -Wextra -Wpedantic -Wconversion -Wsign-conversion -Wshadow -Wundef "
    "-Wstrict-prototypes -Wmissing-prototypes -Wdouble-promotion -Werror"
).split()
CXX_WARNINGS = "-Wall -Wextra -Wpedantic -Wconversion -Wsign-conversion -Werror".split()

MAIN = """\
#include <stdio.h>
int {name}_selfcheck(void);
int main(void) {{ printf("%d\\n", {name}_selfcheck()); return 0; }}
"""

CXX_MAIN = """\
#include "{name}.h"
#include "{name}_words.h"
#include "{name}.h"
#include <cstdio>
int main()
{{
    {name}_state state;
    const {name}_code held = {name}_resting_output({middle});
    {name}_reset(&state, {middle}, held);
    const {name}_code first = {name}_update(&state, {middle}, {middle});
    const {name}_code second = {name}_update_added(&state, {middle}, {middle}, 0);
    std::printf("%d %d %d\\n", first == held, second == held, {name}_limited(&state));
}}
"""

Run = Callable[..., str]


@pytest.mark.parametrize("level", ["-O0", "-O2"])
def test_compiles_without_a_warning_and_repeats_the_stored_words(
    cc: str, level: str, controller: WordController, emitted: Path, command: Run, tmp_path: Path
) -> None:
    name = controller.name
    main = tmp_path / "main.c"
    main.write_text(MAIN.format(name=name), "utf-8")
    objects = []
    for source in (f"{name}.c", f"{name}_selfcheck.c"):
        target = tmp_path / f"{source}.o"
        command([cc, *WARNINGS, level, "-c", "-o", target, emitted / source])
        objects.append(target)
    program = tmp_path / "program"
    command([cc, "-std=c99", level, "-I", emitted, "-o", program, main, *objects])
    assert command([program]) == "0\n"


@pytest.mark.parametrize("level", ["-O0", "-O2"])
def test_nothing_undefined_happens_on_the_way(
    cc: str, level: str, controller: WordController, emitted: Path, command: Run, tmp_path: Path
) -> None:
    name = controller.name
    main = tmp_path / "main.c"
    main.write_text(MAIN.format(name=name), "utf-8")
    program = tmp_path / "program"
    checks = "undefined,integer" if cc == "clang" else "undefined"
    command(
        [
            cc, "-std=c99", level, f"-fsanitize={checks}", "-fno-sanitize-recover=all",
            "-I", emitted, "-o", program, main,
            emitted / f"{name}.c", emitted / f"{name}_selfcheck.c",
        ]
    )  # fmt: skip
    assert command([program]) == "0\n"


@pytest.mark.parametrize("compiler", ["g++", "clang++"])
def test_header_and_words_serve_from_cpp(
    compiler: str, controller: WordController, emitted: Path, command: Run, tmp_path: Path
) -> None:
    if shutil.which(compiler) is None:
        pytest.skip(f"{compiler} is not installed")
    plain = {"g++": "gcc", "clang++": "clang"}[compiler]
    if shutil.which(plain) is None:
        pytest.skip(f"{plain} is not installed")
    name = controller.name
    position = controller.equation("position_count")
    main = tmp_path / "main.cpp"
    middle = (position.low + position.high) // 2
    main.write_text(CXX_MAIN.format(name=name, middle=middle), "utf-8")
    part, program = tmp_path / "part.o", tmp_path / "program"
    command([plain, *WARNINGS, "-O2", "-c", "-o", part, emitted / f"{name}.c"])
    command([compiler, *CXX_WARNINGS, "-O2", "-I", emitted, "-o", program, main, part])
    assert command([program]) == "1 1 0\n"


def test_words_header_gives_the_words_and_warns_of_nothing_unused(
    cc: str, controller: WordController, emitted: Path, command: Run, tmp_path: Path
) -> None:
    name = controller.name
    words = {
        str(t.name): (t.word, t.word_frac_bits)
        for equations in (controller.update, controller.reset, controller.resting)
        for e in equations
        for t in e.terms
        if t.word is not None
    }
    assert words
    lines = [f'#include <stdio.h>\n#include "{name}_words.h"\nint main(void)\n{{']
    lines += [
        f'    printf("{w} %ld %d\\n", (long){name}_{w}, (int){name}_{w}_frac_bits);' for w in words
    ]
    printing, idle = tmp_path / "printing.c", tmp_path / "idle.c"
    printing.write_text("\n".join([*lines, "    return 0;\n}\n"]), "utf-8")
    idle.write_text(f'#include "{name}_words.h"\nint main(void) {{ return 0; }}\n', "utf-8")
    program = tmp_path / "program"
    command([cc, *WARNINGS, "-I", emitted, "-o", program, idle])
    command([cc, *WARNINGS, "-I", emitted, "-o", program, printing])
    printed = {
        line.split()[0]: tuple(map(int, line.split()[1:]))
        for line in command([program]).splitlines()
    }
    assert printed == words


def test_selfcheck_needs_nothing_but_the_header(
    cc: str, controller: WordController, emitted: Path, command: Run, tmp_path: Path
) -> None:
    """No library function is called: the object files ask the linker for our own names only."""
    if shutil.which("nm") is None:
        pytest.skip("nm is not installed")
    name = controller.name
    asked = set()
    for source in (f"{name}.c", f"{name}_selfcheck.c"):
        target = tmp_path / f"{source}.o"
        command([cc, "-std=c99", "-Os", "-c", "-o", target, emitted / source])
        for line in command(["nm", "-u", target]).splitlines():
            asked.add(line.split()[-1])
        written = command(["nm", target]).splitlines()
        # Nothing that can be written lies outside the caller's state.
        assert not [line for line in written if line.split()[-2] in "BbDdC"]
    own = {f"{name}_{f}" for f in ("reset", "update", "update_added", "resting_output", "limited")}
    # Compilers may copy a struct with memcpy; that is theirs to provide.
    assert asked - {"memcpy"} == own


PROCESSORS = {
    "avr": "avr",
    "msp430": "msp430",
    "thumbv6m-none-eabi": "thumb",
    "riscv32": "riscv32",
    "x86_64": "x86-64",
}
"""What clang is asked to read for, and under which name it lists what it knows."""


@pytest.mark.parametrize("target", PROCESSORS)
def test_no_warning_where_int_has_another_width(
    target: str, controller: WordController, emitted: Path, command: Run, tmp_path: Path
) -> None:
    """Read for other processors, two of them with an int of 16 bits; nothing is linked."""
    if shutil.which("clang") is None:
        pytest.skip("clang is not installed")
    known = {line.split()[0] for line in command(["clang", "--print-targets"]).splitlines()}
    if PROCESSORS[target] not in known:
        pytest.skip(f"this clang does not know {target}")
    quiet = ["-mmcu=atmega328p", "-Wno-avr-rtlib-linking-quirks"] if target == "avr" else []
    reading = ["clang", f"--target={target}", *quiet, *WARNINGS, "-ffreestanding", "-fsyntax-only"]
    width = tmp_path / "width.c"
    bits = 16 if target in {"avr", "msp430"} else 32
    width.write_text(f"typedef char right[sizeof(int) * 8 == {bits} ? 1 : -1];\n", "utf-8")
    for text in (
        width,
        emitted / f"{controller.name}.c",
        emitted / f"{controller.name}_selfcheck.c",
    ):
        assert command([*reading, text]) == ""
    words = tmp_path / "words.c"
    words.write_text(f'#include "{controller.name}_words.h"\nextern int unused;\n', "utf-8")
    assert command([*reading, "-I", emitted, words]) == ""
