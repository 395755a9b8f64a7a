"""Fixtures shared by all tests."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import settings

# the same examples every time, and no verdict by the clock of a busy machine; look for new
# examples with `pytest --hypothesis-profile=default`
settings.register_profile("steady", derandomize=True, deadline=None)
settings.load_profile("steady")

ROOT = Path(__file__).parent.parent
OPEN_LAYOUTS = Path(__file__).parent / ".data" / "open130"


@pytest.fixture(scope="session")
def open_layouts() -> Path:
    """Folder with the GDSII files of the open 130 nm process."""
    if not (OPEN_LAYOUTS / "scr1.gds").is_file():
        pytest.fail("open layouts are absent; run: python tests/fetch_open_layouts.py")
    return OPEN_LAYOUTS


@pytest.fixture(scope="session")
def repository() -> Path:
    """Top folder of the project."""
    return ROOT
