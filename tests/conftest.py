"""Fixtures that more than one folder of tests needs."""

import os
from pathlib import Path

import pytest
from hypothesis import settings

# No test depends on seconds: a busy host must not fail a property.
settings.register_profile("untimed", deadline=None)
settings.load_profile("untimed")

ROOT = Path(__file__).parent.parent


@pytest.fixture(scope="session")
def reference_ecg() -> Path:
    """Folder of real annotated recordings; tests that need it are skipped where it is absent."""
    folder = Path(os.environ.get("BURDENLINE_REFERENCE_ECG", ROOT.parent / "shared" / "reference-ecg"))
    if not folder.is_dir():
        pytest.skip(f"no reference recordings in {folder}; set BURDENLINE_REFERENCE_ECG")
    return folder
