"""Shared fixtures. Open recordings are found beside the checkout or through SIGGUARD_OPEN_DATA."""

from __future__ import annotations

import os
from pathlib import Path

import pytest


def find_open_data() -> Path | None:
    named = os.environ.get("SIGGUARD_OPEN_DATA")
    folder = Path(named) if named else Path(__file__).resolve().parents[2] / "shared" / "data"
    return folder if folder.is_dir() else None


@pytest.fixture(scope="session")
def open_data() -> Path:
    folder = find_open_data()
    if folder is None:
        pytest.skip("open recordings not found: set SIGGUARD_OPEN_DATA or put them at ../shared/data")
    return folder
