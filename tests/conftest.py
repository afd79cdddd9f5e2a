"""Shared fixtures."""

from __future__ import annotations

import os
import shutil
import signal
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parent.parent


if signal.getsignal(signal.SIGINT) is signal.SIG_IGN:
    # a shell's background job ignores Ctrl-C and its children inherit that; the tests send it to theirs
    signal.signal(signal.SIGINT, signal.default_int_handler)


@pytest.fixture(scope="session")
def shared() -> Path:
    """The folder with published structures and measured scans that developers have beside the repository."""
    folder = REPOSITORY.parent / "shared"
    if not folder.is_dir():
        pytest.skip("the folder 'shared' with published structures and measured scans is not beside the repository")
    return folder


@pytest.fixture
def unprivileged() -> Iterator[Path]:
    """A folder to work in as a user who may not do everything, also where the tests run as root."""
    if sys.platform == "win32":
        pytest.skip("permissions work differently on Windows")
    folder = Path(tempfile.mkdtemp(prefix="xrdmica-"))
    folder.chmod(0o777)
    root = os.geteuid() == 0
    if root:
        os.seteuid(65534)
    try:
        yield folder
    finally:
        if root:
            os.seteuid(0)
        for path in (folder, *folder.rglob("*")):
            path.chmod(0o700)
        shutil.rmtree(folder)
