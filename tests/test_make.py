"""The set-up behind `make` and the demo's last step.

Rules of this file:

- No test here installs anything; virtual environments are real, but without pip.
"""

from __future__ import annotations

import ast
import importlib.util
import json
import os
import shutil
import subprocess
import sys
import venv
from pathlib import Path
from types import ModuleType

import pytest

ROOT = Path(__file__).resolve().parent.parent


def load(path: Path) -> ModuleType:
    """A script of the checkout as a module."""
    spec = importlib.util.spec_from_file_location(path.stem, path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


prepare = load(ROOT / ".ci" / "prepare.py")


@pytest.fixture
def checkout(tmp_path: Path) -> Path:
    """A small checkout with a `.venv` that finds its plant2 and says that all is installed."""
    root = tmp_path.resolve() / "checkout"
    (root / "plant2").mkdir(parents=True)
    (root / "plant2" / "__init__.py").write_text("raise RuntimeError('must not be run')\n")
    (root / "pyproject.toml").write_text("[project]\n")
    venv.create(root / ".venv", symlinks=True)
    (packages,) = (root / ".venv").glob("lib/python*/site-packages")
    (packages / "plant2.pth").write_text(f"{root}\n")
    stamp = prepare.wanted(root, sys.version_info[:3], ["test"])
    (root / ".venv" / "installed.json").write_text(json.dumps(stamp))
    return root


def test_finished_set_up_is_left_alone(checkout: Path) -> None:
    assert prepare.ready(checkout, checkout / ".venv", ["test"])
    assert prepare.ready(checkout, checkout / ".venv", [])


def test_changed_project_file_is_installed_again(checkout: Path) -> None:
    (checkout / "pyproject.toml").write_text("[project]\nname = 'plant2'\n")
    assert not prepare.ready(checkout, checkout / ".venv", [])


def test_further_extra_is_installed(checkout: Path) -> None:
    assert not prepare.ready(checkout, checkout / ".venv", ["test", "more"])


def test_moved_checkout_is_installed_again(checkout: Path) -> None:
    moved = checkout.with_name("moved")
    shutil.copytree(checkout, moved, symlinks=True)
    assert not prepare.ready(moved, moved / ".venv", ["test"])


def test_unreadable_stamp_is_no_stamp(checkout: Path) -> None:
    (checkout / ".venv" / "installed.json").write_text('{"extras":')
    assert not prepare.ready(checkout, checkout / ".venv", [])


def test_run_that_was_cut_off_is_built_anew(checkout: Path) -> None:
    (checkout / ".venv" / "installing").touch()
    assert not prepare.ready(checkout, checkout / ".venv", ["test"])
    assert not prepare.usable(checkout / ".venv")


def test_interpreter_that_is_gone_is_built_anew(checkout: Path) -> None:
    python = prepare.interpreter(checkout / ".venv")
    python.unlink()
    python.symlink_to(checkout / "gone")
    assert not prepare.ready(checkout, checkout / ".venv", ["test"])
    assert not prepare.usable(checkout / ".venv")


def test_environment_without_pip_is_built_anew(checkout: Path) -> None:
    assert prepare.probe(checkout / ".venv") is not None
    assert not prepare.usable(checkout / ".venv")


def test_failed_install_leaves_the_environment_and_no_stamp(
    checkout: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(prepare.SetUpError, match="pip could not install plant2"):
        prepare.install(checkout, checkout / ".venv", [])
    assert "No module named pip" in capfd.readouterr().err
    left = {path.name for path in (checkout / ".venv").iterdir()}
    assert not {"installing", "installed.json"} & left
    assert prepare.probe(checkout / ".venv") is not None


def test_old_interpreter_is_told_so() -> None:
    with pytest.raises(prepare.SetUpError, match=r"python3 is 3\.10, plant2 needs 3\.11 or newer"):
        prepare.require_version((3, 10, 12))
    prepare.require_version((3, 11, 0))


def test_old_interpreter_can_read_the_set_up() -> None:
    text = (ROOT / ".ci" / "prepare.py").read_text("utf-8")
    with pytest.raises(SyntaxError):
        ast.parse("(n := 1)", feature_version=(3, 7))
    assert ast.parse(text, feature_version=(3, 7)).body


@pytest.mark.parametrize(
    ("goal", "order"),
    [
        ("demo", ["prepare.py", "plant2 emit", "run_selfcheck.py"]),
        ("test", ["prepare.py test", "pytest"]),
        ("lint", ["prepare.py test", "ruff check", "ruff format --check", "mypy --strict"]),
        ("bench", ["prepare.py", "startup.py"]),
    ],
)
def test_goals_set_up_before_they_run(goal: str, order: list[str]) -> None:
    done = subprocess.run(
        ["make", "--no-print-directory", "--dry-run", goal],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=True,
        # An outer make must not hand its own flags down.
        env={name: value for name, value in os.environ.items() if not name.startswith("MAKE")},
    )
    places = [done.stdout.find(step) for step in order]
    assert -1 not in places and places == sorted(places), done.stdout


def emitted(folder: Path, *, returns: int, update: str = "return position;") -> None:
    """Files with the names of emitted ones, small enough to be read here."""
    folder.mkdir()
    (folder / "axis.h").write_text(
        "#include <stdint.h>\nint32_t axis_update(int32_t position);\nint axis_selfcheck(void);\n"
    )
    (folder / "axis.c").write_text(
        f'#include "axis.h"\nint32_t axis_update(int32_t position)\n{{\n    {update}\n}}\n'
    )
    (folder / "axis_selfcheck.c").write_text(
        '#include "axis.h"\n'
        f"int axis_selfcheck(void)\n{{\n    return axis_update(3) == 3 ? {returns} : 1;\n}}\n"
    )


def run_selfcheck(folder: Path, **environment: str) -> subprocess.CompletedProcess[str]:
    """The demo's last step on the files in `folder`."""
    return subprocess.run(
        [sys.executable, str(ROOT / "examples" / "run_selfcheck.py"), "axis", str(folder)],
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, **environment},
    )


def test_demo_compiles_and_runs_the_self_check(tmp_path: Path) -> None:
    emitted(tmp_path / "axis", returns=0)
    before = {path.name for path in (tmp_path / "axis").iterdir()}
    done = run_selfcheck(tmp_path / "axis")
    assert done.returncode == 0, done.stdout + done.stderr
    assert "without a warning" in done.stdout
    assert "every stored word is repeated" in done.stdout
    assert {path.name for path in (tmp_path / "axis").iterdir()} == before


def test_demo_fails_when_the_words_differ(tmp_path: Path) -> None:
    emitted(tmp_path / "axis", returns=7)
    done = run_selfcheck(tmp_path / "axis")
    assert done.returncode == 1
    assert "first at entry 7" in done.stdout


def test_demo_fails_on_a_warning(tmp_path: Path) -> None:
    emitted(tmp_path / "axis", returns=0, update="int64_t x = position; return x;")
    done = run_selfcheck(tmp_path / "axis")
    assert done.returncode == 1
    assert "did not accept" in done.stderr


def test_demo_without_a_compiler_says_so_and_succeeds(tmp_path: Path) -> None:
    emitted(tmp_path / "axis", returns=0)
    done = run_selfcheck(tmp_path / "axis", PATH=str(tmp_path), CC="")
    assert done.returncode == 0
    assert "no C compiler found" in done.stdout
