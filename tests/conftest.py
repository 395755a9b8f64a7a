"""Fixtures shared by all tests."""

from __future__ import annotations

from pathlib import Path

import pytest

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
