"""Shared fixtures."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import settings

# The same examples on every run, so that a run says something about the code and not about luck. To look for new ones:
# LANDCARBON_FUZZ=1 python -m pytest
settings.register_profile("repeatable", derandomize=True)
if not os.environ.get("LANDCARBON_FUZZ"):
    settings.load_profile("repeatable")

ROOT = Path(__file__).resolve().parent.parent


@pytest.fixture(scope="session")
def reference() -> Path:
    """Folder with the open reference data (``real/`` and ``facts/``), which are not part of the project."""
    given = os.environ.get("LANDCARBON_REFERENCE")
    folder = Path(given) if given else ROOT.parent / "shared"
    if not (folder / "real").is_dir() or not (folder / "facts").is_dir():
        pytest.skip(f"reference data not found at {folder}; set LANDCARBON_REFERENCE to a folder with real/ and facts/")
    return folder
