"""Settings that every test runs under.

Rules of this file:

- Nothing here may make a test pass that would fail for a user: only what varies from desk to desk
  (terminal width, colours, plot windows, random seeds) is pinned.
"""

from __future__ import annotations

import os
from collections.abc import Iterator

# One thread of linear algebra a worker, before numpy is loaded: the matrices are small, and more
# threads than cores wait for each other.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
from pathlib import Path

import pytest
from hypothesis import settings

ROOT = Path(__file__).resolve().parent.parent

# No deadline: two busy cores stretch single examples without anything being wrong. A fixed seed
# where a machine decides; at a desk every run tries new examples.
settings.register_profile("desk", deadline=None)
settings.register_profile("machine", deadline=None, derandomize=True, print_blob=True)
settings.load_profile("machine" if os.environ.get("CI") else "desk")


@pytest.fixture(scope="session")
def root() -> Path:
    """Top folder of the checkout."""
    return ROOT


@pytest.fixture(scope="session", autouse=True)
def plain_surroundings() -> Iterator[None]:
    """Same terminal for all: wide, without colours; plots never open a window."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("MPLBACKEND", "Agg")
        patch.setenv("COLUMNS", "120")
        patch.setenv("NO_COLOR", "1")
        for name in ("FORCE_COLOR", "CLICOLOR_FORCE", "PYTHONWARNINGS"):
            patch.delenv(name, raising=False)
        yield
