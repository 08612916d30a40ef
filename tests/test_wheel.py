"""What is built is whole: installed away from the checkout it writes the same files.

Rules of this file:

- Builds and installs without a network and without touching the checkout.
- The installed copy runs in its own interpreter, from a folder that holds nothing of the checkout.
"""

from __future__ import annotations

import shutil
import subprocess
import sys
import tarfile
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
TEMPLATES = ROOT / "templates"
QUIET = ["--quiet", "--disable-pip-version-check", "--no-deps", "--no-index"]


def run(arguments: list[str], cwd: Path) -> str:
    """Standard output of a Python command that must end well."""
    done = subprocess.run(
        [sys.executable, *arguments], cwd=cwd, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


def build_wheel(tree: Path, into: Path) -> Path:
    """Build the wheel of a source tree with the tools at hand."""
    run(
        ["-m", "pip", "wheel", *QUIET, "--no-build-isolation", "--wheel-dir", str(into), str(tree)],
        into.parent,
    )
    (wheel,) = into.glob("plant2-*.whl")
    return wheel


def content(wheel: Path) -> dict[str, bytes]:
    """Files of a wheel, without the installer's records."""
    with zipfile.ZipFile(wheel) as archive:
        return {
            name: archive.read(name) for name in archive.namelist() if ".dist-info/" not in name
        }


def plant2_from(folder: Path, *arguments: str, cwd: Path) -> str:
    """Run the command line of the plant2 in `folder`, and of no other."""
    program = (
        "import sys\n"
        f"sys.path.insert(0, {str(folder)!r})\n"
        "import plant2\n"
        f"assert plant2.__file__.startswith({str(folder)!r}), plant2.__file__\n"
        f"sys.argv = ['plant2', *{list(arguments)!r}]\n"
        "from plant2.cli import main\n"
        "main()\n"
    )
    return run(["-I", "-c", program], cwd)


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The wheel of this checkout."""
    return build_wheel(ROOT, tmp_path_factory.mktemp("wheel") / "dist")


def test_wheel_holds_the_package_and_the_templates(wheel: Path) -> None:
    files = content(wheel)
    expected = {
        f"plant2/templates/{path.relative_to(TEMPLATES).as_posix()}": path.read_bytes()
        for path in TEMPLATES.glob("**/*")
        if path.is_file()
    }
    assert any(name.endswith(".j2") for name in expected)
    for path in (ROOT / "plant2").glob("**/*"):
        if path.is_file() and "__pycache__" not in path.parts:
            expected[path.relative_to(ROOT).as_posix()] = path.read_bytes()
    assert files == expected


def test_installed_wheel_emits_what_the_checkout_emits(wheel: Path, tmp_path: Path) -> None:
    target = tmp_path / "elsewhere"
    away = tmp_path / "away"
    away.mkdir()
    shutil.copy(ROOT / "examples" / "focus_stage" / "loop.toml", away / "loop.toml")
    run(["-m", "pip", "install", *QUIET, "--target", str(target), str(wheel)], away)
    plant2_from(target, "emit", "loop.toml", "--into", "installed", cwd=away)
    plant2_from(ROOT, "emit", "loop.toml", "--into", "checkout", cwd=away)
    installed = {path.name: path.read_bytes() for path in (away / "installed").iterdir()}
    checkout = {path.name: path.read_bytes() for path in (away / "checkout").iterdir()}
    assert {"focus_stage.c", "focus_stage.h", "focus_stage_selfcheck.c"} <= set(installed)
    assert installed == checkout


def test_source_archive_builds_the_same_wheel(wheel: Path, tmp_path: Path) -> None:
    run(["-m", "hatchling", "build", "--target", "sdist", "--directory", str(tmp_path)], ROOT)
    (archive,) = tmp_path.glob("plant2-*.tar.gz")
    with tarfile.open(archive) as packed:
        # The first releases of Python 3.11 know no filter; later ones warn without one.
        filtered = {"filter": "data"} if hasattr(tarfile, "data_filter") else {}
        packed.extractall(tmp_path / "unpacked", **filtered)
    (tree,) = (tmp_path / "unpacked").iterdir()
    again = build_wheel(tree, tmp_path / "again")
    assert content(again) == content(wheel)
    assert again.name == wheel.name
