"""Fixtures: invented finished samples."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

from finished_sample import build_result

from xrdmica.results import SampleResult


@pytest.fixture
def make_result() -> Callable[..., SampleResult]:
    return build_result


@pytest.fixture(scope="session")
def full_result() -> SampleResult:
    return build_result()
