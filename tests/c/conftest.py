"""What the compiled tests share: compilers that are there, emitted samples, one way to build.

Rules of this file:

- A compiler that is not there makes tests skip with its name; one that complains fails them.
"""

from __future__ import annotations

import ctypes
import shutil
import subprocess
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import sample_words

from plant2.design import design, task_of
from plant2.emit import EmitFacts, render, selfcheck_vectors, write_files
from plant2.equations import WordController
from plant2.loopfile import load_loop
from plant2.words import words_of

HERE = Path(__file__).resolve().parent

FACTS = EmitFacts(
    about="A stage for tests",
    position_unit="150 nm per count",
    code_unit="0.75 mA per code",
    sample_rate="20 kHz",
    delay="18 us",
    law="written down, not designed",
    sha256="",
)

EXAMPLES = sorted((HERE.parent.parent / "examples").glob("*/loop.toml"))


def example_words(path: Path) -> WordController:
    """Words of an example's loop file, named apart from the stored samples."""
    loop = load_loop(path)
    task = task_of(loop)
    gains = design(loop, task).gains
    assert gains is not None and loop.processor.word != "auto"
    controller = words_of(task, gains, int(loop.processor.word)).controller
    return replace(controller, name=f"example_{loop.name}")


SAMPLES = {
    controller.name: controller
    for controller in (*sample_words.stored(), *map(example_words, EXAMPLES))
}

Run = Callable[..., str]


@pytest.fixture(params=["gcc", "clang"])
def cc(request: pytest.FixtureRequest) -> str:
    """A C compiler."""
    if shutil.which(request.param) is None:
        pytest.skip(f"{request.param} is not installed")
    return str(request.param)


@pytest.fixture(scope="session")
def any_cc() -> str:
    """The first C compiler that is there."""
    for name in ("gcc", "clang"):
        if shutil.which(name):
            return name
    pytest.skip("neither gcc nor clang is installed")


@pytest.fixture(scope="session")
def emitted(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder with the files of every sample."""
    folder = tmp_path_factory.mktemp("emitted")
    for controller in SAMPLES.values():
        write_files(folder, render(controller, FACTS, selfcheck_vectors(controller), "{}"))
    return folder


@pytest.fixture(params=list(SAMPLES))
def controller(request: pytest.FixtureRequest) -> WordController:
    """Each stored controller in turn."""
    return SAMPLES[request.param]


def run(command: Sequence[str | Path]) -> str:
    """Run a command that must succeed; what it printed."""
    done = subprocess.run([str(c) for c in command], capture_output=True, text=True, check=False)
    if done.returncode != 0:
        pytest.fail(f"{' '.join(map(str, command))}\n{done.stdout}{done.stderr}", pytrace=False)
    return done.stdout


@pytest.fixture(scope="session")
def command() -> Run:
    """The way to run a command."""
    return run


def state_type(controller: WordController) -> np.dtype[np.void]:
    """The state struct as numpy sees it."""
    sizes = {False: f"i{controller.word_bits // 8}", True: f"i{controller.sum_bits // 8}"}
    return np.dtype([(s.name, sizes[s.wide]) for s in controller.state], align=True)


class Machine:
    """The emitted functions, called for many lanes at once."""

    def __init__(self, library: Path, controller: WordController) -> None:
        self.code = np.dtype(f"i{controller.word_bits // 8}")
        self.state = state_type(controller)
        self.library = ctypes.CDLL(str(library))
        self.library.state_size.restype = ctypes.c_long
        assert self.library.state_size() == self.state.itemsize
        pointer = np.ctypeslib.ndpointer
        words = pointer(self.code, flags="C")
        states = pointer(self.state, flags="C")
        count = ctypes.c_long
        answers = pointer(np.int8, flags="C")
        self.library.updates.argtypes = [
            count, count, states, words, words, words, words, answers,
        ]  # fmt: skip
        self.library.resets.argtypes = [count, states, words, words]
        self.library.resting_outputs.argtypes = [count, words, words]

    def updates(
        self, states: np.ndarray, reference: np.ndarray, position: np.ndarray, added: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Codes and answers about the limit, shape (samples, lanes); the states move on."""
        samples, lanes = reference.shape
        codes = np.empty((samples, lanes), self.code)
        limited = np.empty((samples, lanes), np.int8)
        given = [np.ascontiguousarray(x, self.code) for x in (reference, position, added)]
        self.library.updates(samples, lanes, states, *given, codes, limited)
        return codes, limited

    def resets(self, position: np.ndarray, output: np.ndarray) -> np.ndarray:
        """States after a reset, shape (lanes,)."""
        # Filled with something else first, so that a word that is not written shows.
        states = np.frombuffer(b"\xa5" * (self.state.itemsize * len(position)), self.state).copy()
        given = [np.ascontiguousarray(x, self.code) for x in (position, output)]
        self.library.resets(len(position), states, *given)
        return states

    def resting_outputs(self, position: np.ndarray) -> np.ndarray:
        """Codes, shape (lanes,)."""
        codes = np.empty(len(position), self.code)
        self.library.resting_outputs(
            len(position), np.ascontiguousarray(position, self.code), codes
        )
        return codes


@pytest.fixture(scope="session")
def machine(
    emitted: Path, any_cc: str, tmp_path_factory: pytest.TempPathFactory
) -> Callable[[WordController], Machine]:
    """Builds the emitted functions of a controller into a library that numpy can call."""

    def build(controller: WordController) -> Machine:
        name = controller.name
        library = tmp_path_factory.mktemp("library") / f"{name}.so"
        # Anything undefined stops the process at once: no answer is compared that C does not give.
        trap = "-fsanitize-undefined-trap-on-error" if any_cc == "gcc" else "-fsanitize-trap=all"
        run(
            [
                any_cc, "-std=c99", "-O2", "-fsanitize=undefined", trap, "-shared", "-fPIC",
                f"-DNAME={name}",
                f'-DHEADER="{name}.h"', "-I", emitted, "-o", library,
                emitted / f"{name}.c", HERE / "batch.c",
            ]
        )  # fmt: skip
        return Machine(library, controller)

    return build
