"""Shared fixtures."""

from __future__ import annotations

from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parent.parent


@pytest.fixture(scope="session")
def shared() -> Path:
    """The folder with published structures and measured scans that developers have beside the repository."""
    folder = REPOSITORY.parent / "shared"
    if not folder.is_dir():
        pytest.skip("the folder 'shared' with published structures and measured scans is not beside the repository")
    return folder
