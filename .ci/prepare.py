"""Make `.venv` ready: create it, or reuse it, and install plant2 there in editable form.

Usage: ``python3 .ci/prepare.py [EXTRA ...]``

Rules of this file:

- Standard library only, and no syntax newer than Python 3.6: an interpreter that is too old must
  get as far as the sentence that says so.
- When nothing has changed it costs one short run of the interpreter in `.venv`.
- `.venv/installing` stands while pip works. Found at the start, it tells of a run that was cut
  off: what lies there is half made and is built anew.
- `.venv/installed.json` tells what is installed: a digest of pyproject.toml, the extras, and the
  interpreter.
"""

import hashlib
import json
import shutil
import subprocess
import sys
from pathlib import Path

OLDEST = (3, 11)
ROOT = Path(__file__).resolve().parent.parent

# Finds the package without running it, so that a slip in plant2 is no reason to install again.
PROBE = """
import importlib.util, json, sys
spec = importlib.util.find_spec("plant2")
print(json.dumps([list(sys.version_info[:3]), spec.origin if spec else None]))
"""


class SetUpError(Exception):
    """The set-up cannot go on; the text says why and what to do."""


def require_version(version):
    """Raise SetUpError when the interpreter is too old."""
    if tuple(version) < OLDEST:
        raise SetUpError(
            "python3 is {}.{}, plant2 needs {}.{} or newer; "
            "name a newer one, for example: make PYTHON=python3.12 test".format(
                *tuple(version)[:2], *OLDEST
            )
        )


def interpreter(venv):
    """Path of the interpreter of a virtual environment."""
    return venv / ("Scripts" if sys.platform == "win32" else "bin") / "python"


def probe(venv):
    """Version of the interpreter in `venv` and where it finds plant2; None when it does not run."""
    try:
        done = subprocess.run(
            [str(interpreter(venv)), "-I", "-c", PROBE],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            check=True,
        )
        version, origin = json.loads(done.stdout.decode())
    except (OSError, subprocess.CalledProcessError, ValueError):
        return None
    return version, origin


def wanted(root, version, extras):
    """What `.venv/installed.json` holds when nothing is to do."""
    return {
        "pyproject": hashlib.sha256((root / "pyproject.toml").read_bytes()).hexdigest(),
        "python": list(version),
        "extras": sorted(extras),
    }


def ready(root, venv, extras):
    """Tell whether `venv` runs, holds this checkout and at least these extras."""
    if (venv / "installing").exists():
        return False
    found = probe(venv)
    if found is None or found[1] is None:
        return False
    if Path(found[1]).resolve().parent != root / "plant2":
        return False
    try:
        stamp = json.loads((venv / "installed.json").read_text(encoding="utf-8"))
        known = set(stamp["extras"])
    except (OSError, ValueError, KeyError, TypeError):
        return False
    return known >= set(extras) and stamp == wanted(root, found[0], known)


def usable(venv):
    """Tell whether an existing `venv` can be installed into: whole, new enough, with pip."""
    if (venv / "installing").exists():
        return False
    found = probe(venv)
    if found is None or tuple(found[0]) < OLDEST:
        return False
    done = subprocess.run(
        [str(interpreter(venv)), "-I", "-m", "pip", "--version"],
        stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    return done.returncode == 0


def create(venv):
    """Create `venv`, in place of whatever is there."""
    say("creating .venv")
    if venv.is_symlink() or venv.is_file():
        venv.unlink()
    elif venv.exists():
        shutil.rmtree(str(venv))
    done = subprocess.run([sys.executable, "-m", "venv", str(venv)], stdin=subprocess.DEVNULL)
    if done.returncode != 0:
        shutil.rmtree(str(venv), ignore_errors=True)
        raise SetUpError(
            "python3 could not create .venv: its venv module must be there "
            "(on Debian and Ubuntu: apt-get install python3-venv)"
        )


def install(root, venv, extras):
    """Install plant2 in editable form with the extras, and what was installed before."""
    stamp = venv / "installed.json"
    marker = venv / "installing"
    try:
        before = set(json.loads(stamp.read_text(encoding="utf-8"))["extras"])
    except (OSError, ValueError, KeyError, TypeError):
        before = set()
    extras = sorted(before | set(extras))
    target = str(root) + ("[" + ",".join(extras) + "]" if extras else "")
    say("installing plant2 and what it needs into .venv (once, and when pyproject.toml changes)")
    if stamp.exists():
        stamp.unlink()
    marker.touch()
    done = subprocess.run(
        [str(interpreter(venv)), "-m", "pip", "install", "--quiet", "--no-input"]
        + ["--disable-pip-version-check", "--editable", target],
        stdin=subprocess.DEVNULL,
        cwd=str(root),
    )
    # pip gave up by itself and left things as they were: the next run may go on from here.
    marker.unlink()
    if done.returncode != 0:
        raise SetUpError("pip could not install plant2; its own words stand above")
    found = probe(venv)
    if found is None or found[1] is None:
        raise SetUpError("pip reported success, yet .venv does not find plant2; remove .venv")
    stamp.write_text(json.dumps(wanted(root, found[0], extras)) + "\n", encoding="utf-8")


def say(text):
    """Tell what happens, at once."""
    print(f"set-up: {text}", flush=True)


def main(extras):
    """Bring `.venv` up to date; return the exit status."""
    try:
        venv = ROOT / ".venv"
        if not ready(ROOT, venv, extras):
            if not usable(venv):
                require_version(sys.version_info)
                create(venv)
            install(ROOT, venv, extras)
    except SetUpError as error:
        print(f"set-up: {error}", file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
