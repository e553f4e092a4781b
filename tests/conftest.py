"""Fixtures that more than one folder of tests needs."""

import importlib.util
import itertools
import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any

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


_PREFIXES = itertools.count(1)


@pytest.fixture(scope="session")
def _s3_server() -> Iterator[Any]:
    if importlib.util.find_spec("moto") is None or importlib.util.find_spec("obstore") is None:
        pytest.skip("moto or obstore is not installed (the extras test and s3)")
    from tests.s3_server import S3Server

    server = S3Server()
    yield server
    server.stop()


@pytest.fixture
def s3_server(_s3_server: Any, monkeypatch: pytest.MonkeyPatch) -> Any:
    """An object store on loopback, named in the environment as a user would."""
    for name, value in _s3_server.environment.items():
        monkeypatch.setenv(name, value)
    return _s3_server


@pytest.fixture
def bucket_url(s3_server: Any) -> str:
    """URL of a place in the object store at which nothing lies yet."""
    return f"s3://coast/lake-{next(_PREFIXES)}"
