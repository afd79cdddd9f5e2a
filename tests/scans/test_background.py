"""Background: below peaks and humps, along the rise to low angles, never above the counts."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from xrdmica.scans.background import estimate_background
from xrdmica.scans.read import read_scan
from xrdmica.scans.scan import Scan


def rise(x: np.ndarray, level: float = 200.0, slope: float = 6000.0) -> np.ndarray:
    return level + slope / x**1.3


def gauss(x: np.ndarray, centre: float, height: float, fwhm: float) -> np.ndarray:
    return height * np.exp(-4 * np.log(2) * ((x - centre) / fwhm) ** 2)


@pytest.mark.parametrize("level", [50.0, 200.0, 2000.0])
def test_smooth_background_is_found(level: float) -> None:
    x = np.arange(3, 60, 0.02)
    truth = rise(x, level, 30 * level)
    scan = Scan.from_arrays(x, np.random.default_rng(4).poisson(truth))
    found = estimate_background(scan)
    # 5 % of the background, common practice for a background by eye; the very ends may be off by more
    assert np.percentile(np.abs(found / truth - 1), 98) < 0.06
    assert np.mean(found / truth) == pytest.approx(1.0, abs=0.02)


@pytest.mark.parametrize(("centre", "fwhm"), [(5.2, 1.2), (6.0, 2.0), (7.0, 2.5), (8.5, 3.0)])
def test_humps_of_swelling_clays_survive(centre: float, fwhm: float) -> None:
    x = np.arange(2, 40, 0.02)
    truth = rise(x)
    hump = gauss(x, centre, 1500.0, fwhm)
    scan = Scan.from_arrays(x, np.random.default_rng(5).poisson(truth + hump))
    above = scan.counts - estimate_background(scan)
    area = float(np.trapezoid(above, x))
    assert area == pytest.approx(float(np.trapezoid(hump, x)), rel=0.2)


def test_hump_of_glass_is_background() -> None:
    x = np.arange(5, 60, 0.02)
    truth = 150 + gauss(x, 24.0, 400.0, 9.0)
    found = estimate_background(Scan.from_arrays(x, np.random.default_rng(6).poisson(truth)))
    assert found[np.argmin(np.abs(x - 24))] > 0.8 * 550


def test_never_above_the_counts_on_real_scans(shared: Path) -> None:
    for file in sorted((shared / "measured" / "planetary").glob("*rda*.csv")):
        scan = read_scan(file, radiation="Co")
        found = estimate_background(scan)
        assert np.all(found >= 0)
        kernel = np.full(9, 1 / 9)
        mean = np.convolve(scan.counts, kernel, mode="valid")
        error = np.sqrt(np.convolve(scan.sigma**2, kernel**2, mode="valid"))
        assert np.mean(found[4:-4] > mean + 3 * error) < 0.01


def test_scale_of_the_counts_does_not_matter() -> None:
    x = np.arange(3, 40, 0.02)
    counts = np.random.default_rng(7).poisson(rise(x) + gauss(x, 8.8, 900, 0.3)).astype(float)
    plain = Scan.from_arrays(x, counts)
    rates = Scan.from_arrays(x, counts / 20, sigma=plain.sigma / 20)
    np.testing.assert_allclose(20 * estimate_background(rates), estimate_background(plain), rtol=0.02)


def test_scan_is_not_changed_and_repeats() -> None:
    x = np.arange(3, 40, 0.02)
    scan = Scan.from_arrays(x, np.random.default_rng(8).poisson(rise(x)))
    before = scan.counts.copy()
    np.testing.assert_array_equal(estimate_background(scan), estimate_background(scan))
    np.testing.assert_array_equal(scan.counts, before)


def test_short_and_empty_scans() -> None:
    x = np.linspace(5, 6.5, 50)
    assert np.all(np.isfinite(estimate_background(Scan.from_arrays(x, np.arange(50)))))
    assert np.all(estimate_background(Scan.from_arrays(x, np.zeros(50))) < 1)
