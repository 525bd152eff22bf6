"""Fixtures shared by all tests."""

import os
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent


@pytest.fixture(scope="session")
def reference_data() -> Path:
    """Folder of the published reference data; skips where it is absent."""
    named = os.environ.get("XCORR_REFERENCE_DATA")
    folder = Path(named) if named else ROOT.parent / "shared" / "data"
    if not folder.is_dir():
        pytest.skip("reference data absent: set XCORR_REFERENCE_DATA or put it in ../shared/data")
    return folder
