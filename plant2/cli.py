"""The command line: parse, call, print, exit status. No arithmetic.

Rules of this file:

- At import time only typer; everything else inside the command that needs it.
- Results go to standard output, complaints to standard error; with ``--json -`` nothing but JSON
  goes to standard output.
- Exit status: 0 all met, 1 a requirement missed, 2 bad input, 3 a tool that was asked for is
  missing. Never a traceback.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from rich.console import Console

    from plant2.chain import Evidence
    from plant2.check import Report
    from plant2.loopfile import Loop

# Matrices here are small: a second thread of the linear algebra only waits for the first, and on a
# busy machine it waits long. Before numpy is loaded, and never against the user's own setting.
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help=(
        "Position loops around a mass, a spring and a damper: gains for the loop that really "
        "runs, the same integers checked, proven to fit and written as C."
    ),
    epilog="Exit status: 0 all met, 1 a requirement missed, 2 bad input, 3 a tool is missing.",
)

DEFECT = "this loop file meets a defect of plant2, not of yours; nothing was checked"
"""What is said when an error was not foreseen; tests look for it."""

LoopArgument = Annotated[Path, typer.Argument(metavar="LOOP", help="The loop file.")]
SetOption = Annotated[
    list[str] | None,
    typer.Option(
        "--set",
        metavar="TABLE.KEY=VALUE",
        help='Override one key of the loop file, as in --set "plant.mass=52 g".',
    ),
]
JsonOption = Annotated[
    str | None,
    typer.Option("--json", metavar="FILE", help="Write everything as JSON; - is standard output."),
]


@app.callback()
def _top(
    version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False,
) -> None:
    if version:
        from plant2 import __version__

        typer.echo(f"plant2 {__version__}")
        raise typer.Exit(0)


@contextmanager
def _complaints() -> Iterator[None]:
    """Turn the errors that are meant for people into one message and an exit status."""
    from plant2.errors import Plant2Error, ToolMissingError

    try:
        yield
    except ToolMissingError as fault:
        _complain(str(fault))
        raise typer.Exit(3) from None
    except Plant2Error as fault:
        _complain(str(fault))
        raise typer.Exit(2) from None
    except OSError as fault:
        _complain(f"{fault.filename or 'file'}: {(fault.strerror or 'cannot be used').lower()}")
        raise typer.Exit(2) from None
    except (ArithmeticError, ValueError, LookupError, TypeError, AssertionError) as fault:
        # Not foreseen. One line, and never an exit status that a script could take for a verdict.
        _complain(f"{DEFECT} ({type(fault).__name__}: {fault})")
        raise typer.Exit(2) from None


def _complain(text: str) -> None:
    typer.echo(f"plant2: {text}", err=True)


def _console(to_json: str | None) -> Console:
    """Where people read: standard output, or standard error when JSON has standard output."""
    from rich.console import Console

    stream = sys.stderr if to_json == "-" else sys.stdout
    if stream.isatty():
        return Console(file=stream, highlight=False)
    # a pipe has no width: one line stays one line
    return Console(file=stream, highlight=False, soft_wrap=True, width=200)


def _load(path: Path, sets: Sequence[str] | None) -> Loop:
    from plant2.loopfile import load_loop

    return load_loop(path, tuple(sets or ()))


@contextmanager
def _progress() -> Iterator[Callable[[float], None] | None]:
    """A bar for long simulations, on a terminal only; it appears when work is long."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("simulating", total=1.0)
        yield lambda fraction: bar.update(task, completed=fraction)


def _write_json(data: dict[str, Any], target: str | None) -> None:
    if target is None:
        return
    import json

    text = json.dumps(data, indent=2, allow_nan=False) + "\n"
    if target == "-":
        sys.stdout.write(text)
    else:
        Path(target).write_text(text, encoding="utf-8", newline="\n")


@app.command()
def new(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="The loop file to write.")],
) -> None:
    """Write a commented loop file to start from; its numbers are invented."""
    with _complaints():
        import re

        from plant2.errors import Plant2Error
        from plant2.loopfile import new_loop_text

        if file.exists():
            raise Plant2Error(
                str(file), None, "", "exists and is not overwritten", "give another name"
            )
        stem = re.sub(r"[^a-z0-9_]+", "_", file.stem.lower()).strip("_")[:31]
        name = stem if re.fullmatch(r"[a-z][a-z0-9_]*", stem) and stem != "loop" else "my_stage"
        file.write_text(new_loop_text(name), encoding="utf-8", newline="\n")
        typer.echo(f"wrote {file}; edit it, then: plant2 check {file}")


@app.command("design")
def design_command(loop: LoopArgument, sets: SetOption = None, to_json: JsonOption = None) -> None:
    """Gains, the loop as designed and as built, feasibility, the unit chain."""
    with _complaints():
        from plant2 import present
        from plant2.chain import run_chain
        from plant2.check import as_json, judge

        evidence = run_chain(_load(loop, sets), step=False)
        report = judge(evidence)
        console = _console(to_json)
        present.head(console, evidence)
        present.plant(console, evidence)
        present.units(console, evidence)
        present.gains(console, evidence)
        present.loops(console, evidence)
        present.design_verdict(console, report)
        _write_json(as_json(report, command="design"), to_json)
        raise typer.Exit(0 if report.requirements[0].met else 1)


def _checked(
    loop: Path, sets: Sequence[str] | None, *, bounds: bool, words: Path | None = None
) -> tuple[Evidence, Report]:
    from plant2.chain import run_chain
    from plant2.check import judge, words_from_file

    described = _load(loop, sets)
    flashed = None if words is None else words_from_file(words, described)
    with _progress() as progress:
        evidence = run_chain(described, words_from=flashed, bounds=bounds, progress=progress)
    return evidence, judge(evidence)


@app.command()
def check(
    loop: LoopArgument,
    sets: SetOption = None,
    to_json: JsonOption = None,
    words: Annotated[
        Path | None,
        typer.Option(
            "--words",
            metavar="NAME_check.json",
            help="Check these flashed words against this plant instead of new ones.",
        ),
    ] = None,
) -> None:
    """Design, integers, the bit-true step, and a verdict on every requirement."""
    with _complaints():
        from plant2 import present
        from plant2.check import as_json

        evidence, report = _checked(loop, sets, bounds=to_json is not None, words=words)
        console = _console(to_json)
        present.report(console, report)
        _write_json(as_json(report), to_json)
        raise typer.Exit(0 if report.met else 1)


@app.command()
def emit(
    loop: LoopArgument,
    into: Annotated[Path, typer.Option("--into", metavar="DIR", help="Folder for the C files.")],
    sets: SetOption = None,
    despite_misses: Annotated[
        bool,
        typer.Option(
            "--despite-misses",
            help="Write the files although a requirement is missed, and mark every one of them.",
        ),
    ] = False,
) -> None:
    """Check, then write the C files; nothing is written when a requirement is missed."""
    with _complaints():
        from plant2 import present
        from plant2.emit import write_files
        from plant2.firmware import firmware_files
        from plant2.proof import ProofError

        evidence, report = _checked(loop, sets, bounds=True)
        console = _console(None)
        present.report(console, report)
        if not report.met and not (despite_misses and report.emittable_despite_misses):
            _complain("nothing is written, because a requirement is missed")
            if despite_misses:
                _complain("--despite-misses does not cover a loop that cannot run")
            elif report.emittable_despite_misses:
                _complain("--despite-misses writes the files and marks every one of them")
            raise typer.Exit(1)
        try:
            firmware = firmware_files(report, despite_misses=despite_misses)
        except ProofError as fault:
            _complain(str(fault))
            raise typer.Exit(1) from None
        write_files(into, firmware.files)
        present.written(console, into, firmware.files, firmware.told)
        raise typer.Exit(0 if report.met else 1)


@app.command()
def identify(
    log: Annotated[Path, typer.Argument(metavar="LOG", help="A CSV log with units in its header.")],
    kind: Annotated[
        str | None,
        typer.Option("--kind", help="ring-down or response; seen from the data when not given."),
    ] = None,
    for_loop: Annotated[
        Path | None,
        typer.Option("--for", metavar="LOOP", help="Loop file for scales and plausibility."),
    ] = None,
    rate: Annotated[
        str | None,
        typer.Option("--rate", metavar="RATE", help="Sample rate of a log without a time column."),
    ] = None,
    to_json: JsonOption = None,
) -> None:
    """Plant parameters from a log, with 95 % intervals and what the log cannot tell."""
    with _complaints():
        from plant2.identify import as_json, identification_text, identify_log
        from plant2.logs import read_log
        from plant2.quantity import KINDS, parse_quantity

        described = None if for_loop is None else _load(for_loop, None)
        rate_hz = None if rate is None else parse_quantity(rate, KINDS["frequency"], name="rate")
        record = read_log(log, rate_hz=rate_hz, loop=described)
        found = identify_log(record, None if kind is None else kind.replace("-", "_"), described)
        console = _console(to_json)
        for line in identification_text(found, described):
            console.print(line, markup=False)
        _write_json(as_json(found), to_json)


def main() -> None:
    """Entry point of the ``plant2`` command.

    Notes
    -----
    Nothing that goes wrong shows a traceback; an unforeseen error is told in one line.
    """
    try:
        app()
    except KeyboardInterrupt:
        _complain("interrupted")
        sys.exit(130)
    except BrokenPipeError:
        # the reader of a pipe has gone: nothing to tell it
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except MemoryError:
        _complain("out of memory; shorten the horizon or lower the sample rate")
        sys.exit(2)


if __name__ == "__main__":
    main()
