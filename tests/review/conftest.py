"""A run of one's own to review."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest


@pytest.fixture
def run(sample: Path, tmp_path: Path) -> Path:
    """Return a copy of the sample's run that may be changed."""
    return Path(shutil.copytree(sample, tmp_path / "run"))
