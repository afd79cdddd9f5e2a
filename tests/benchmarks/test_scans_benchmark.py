"""How long reading and peak finding take, told as ratios to a general operation in the same run; nothing fails by the clock."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from tests.scans.scan_texts import crowded_scan, table
from xrdmica.scans.background import estimate_background
from xrdmica.scans.peaks import find_peaks
from xrdmica.scans.read import read_scan

POINTS = 7000


def seconds(function: Callable[[], object], rounds: int = 5) -> float:
    """Shortest time of several calls [s]."""
    best = float("inf")
    for _ in range(rounds):
        start = time.perf_counter()
        function()
        best = min(best, time.perf_counter() - start)
    return best


@pytest.mark.parametrize("kind", ["blanks", "decimal comma", "named columns with units"])
def test_reading_a_text_scan(benchmark: BenchmarkFixture, tmp_path: Path, kind: str) -> None:
    clean, file = tmp_path / "clean.xy", tmp_path / "scan.txt"
    clean.write_text(table(points=POINTS, step=0.01))
    texts = {
        "blanks": table(points=POINTS, step=0.01),
        "decimal comma": table(";", points=POINTS, step=0.01).replace(".", ","),
        "named columns with units": table(",", points=POINTS, step=0.01, header="Anode: Cu\n2-Theta [deg],Intensity [counts]\n"),
    }
    file.write_text(texts[kind])
    scan = benchmark.pedantic(read_scan, args=(file,), kwargs={"radiation": "Cu"}, rounds=10, warmup_rounds=1)
    assert scan.two_theta.size == POINTS
    reference = seconds(lambda: np.loadtxt(clean))
    benchmark.extra_info["times of numpy.loadtxt"] = round(seconds(lambda: read_scan(file, radiation="Cu")) / reference, 2)


def test_finding_peaks(benchmark: BenchmarkFixture) -> None:
    scan = crowded_scan()
    peaks = benchmark.pedantic(find_peaks, args=(scan,), rounds=10, warmup_rounds=1)
    assert len(peaks) >= 20
    reference = seconds(lambda: estimate_background(scan))
    benchmark.extra_info["times of estimate_background"] = round(seconds(lambda: find_peaks(scan)) / reference, 1)


def test_estimating_the_background(benchmark: BenchmarkFixture) -> None:
    scan = crowded_scan()
    found = benchmark.pedantic(estimate_background, args=(scan,), rounds=10, warmup_rounds=1)
    assert found.shape == scan.counts.shape
