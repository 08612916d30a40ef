"""Compile an emitted controller with every warning on, and run its self-check on this machine.

Usage: ``python examples/run_selfcheck.py NAME FOLDER``, with the files that
``plant2 emit LOOP --into FOLDER`` wrote for the loop called NAME. Exit status: 0 when the stored
words are repeated, or when there is no C compiler to try it with; 1 otherwise.
"""

import os
import shlex
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

WARNINGS = (
    "-std=c99 -Wall -Wextra -Wpedantic -Wconversion -Wsign-conversion -Wshadow -Wundef "
    "-Wstrict-prototypes -Wmissing-prototypes -Wdouble-promotion -Werror"
).split()

MAIN = """\
#include <stdio.h>

int {name}_selfcheck(void);

int main(void)
{{
    const int first = {name}_selfcheck();

    if (first != 0) {{
        printf("{name}: the words differ, first at entry %d\\n", first);
        return 1;
    }}
    printf("{name}: every stored word is repeated by this machine\\n");
    return 0;
}}
"""


def find_compiler() -> list[str] | None:
    """Return the command of a C compiler: $CC when set, else the first of cc, gcc, clang."""
    chosen = shlex.split(os.environ.get("CC", ""))
    if chosen:
        return chosen if shutil.which(chosen[0]) else None
    for name in ("cc", "gcc", "clang"):
        if shutil.which(name):
            return [name]
    return None


def main(name: str, folder: Path) -> int:
    """Compile and run; return the exit status."""
    compiler = find_compiler()
    if compiler is None:
        print(f"no C compiler found (cc, gcc, clang): {folder} is written, but not compiled")
        return 0
    with tempfile.TemporaryDirectory() as scratch:
        program = Path(scratch) / "selfcheck"
        starter = Path(scratch) / "main.c"
        starter.write_text(MAIN.format(name=name), encoding="utf-8")
        sources = [folder / f"{name}.c", folder / f"{name}_selfcheck.c", starter]
        command = [*compiler, *WARNINGS, "-O2", "-I", str(folder), "-o", str(program)]
        compiled = subprocess.run([*command, *map(str, sources)], check=False)
        if compiled.returncode != 0:
            print(f"{shlex.join(compiler)} did not accept the files in {folder}", file=sys.stderr)
            return 1
        print(f"{shlex.join(compiler)} compiled {folder} without a warning")
        sys.stdout.flush()
        return subprocess.run([str(program)], check=False).returncode and 1


if __name__ == "__main__":
    if len(sys.argv) != 3:
        sys.exit("usage: run_selfcheck.py NAME FOLDER")
    sys.exit(main(sys.argv[1], Path(sys.argv[2])))
