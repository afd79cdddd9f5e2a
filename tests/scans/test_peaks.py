"""Peaks: positions, widths, areas, overlaps and false alarms."""

from __future__ import annotations

from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest

from tests.scans.scan_texts import crowded_scan
from xrdmica.radiation import Radiation
from xrdmica.scans.peaks import Peak, find_peaks
from xrdmica.scans.profile import pseudo_voigt
from xrdmica.scans.read import read_scan
from xrdmica.scans.scan import Scan

# NIST SRM 675, fluorophlogopite, d(001) 9.98104 angstrom (from memory) at Cu K-alpha1 1.5405929 angstrom
SRM_675_SPACING = 9.98104
SRM_675_ANGLES = (8.853, 17.758, 26.774, 35.962, 45.397, 55.169, 65.399, 76.254, 87.988, 101.024)
HEIGHTS = (2000, 300, 3000, 200, 800, 150, 120, 90, 120, 70)


def rise(x: np.ndarray, level: float = 80.0, slope: float = 3000.0) -> np.ndarray:
    return level + slope / x**1.3


def nearest(peaks: tuple[Peak, ...], angle: float) -> Peak:
    return min(peaks, key=lambda peak: abs(peak.two_theta - angle))


def area(height: float, fwhm: float, eta: float) -> float:
    """Area of a pseudo-Voigt, from the areas of Lorentzian and Gaussian (textbook integrals)."""
    return height * fwhm * (eta * np.pi / 2 + (1 - eta) * np.sqrt(np.pi / np.log(2)) / 2)


@pytest.mark.parametrize("tube", ["CuKa1", "Cu"])
def test_positions_of_srm_675(tube: str) -> None:
    radiation = Radiation.parse(tube)
    spacings = SRM_675_SPACING / np.arange(1, 11)
    alpha1 = 2 * np.degrees(np.arcsin(1.5405929 / 2 / spacings))
    np.testing.assert_allclose(alpha1, SRM_675_ANGLES, atol=6e-4)  # the angles as published
    x = np.arange(5, 105, 0.02)
    pulls = []
    for seed in range(6):
        model = rise(x)
        for angle, height in zip(radiation.two_theta(spacings), HEIGHTS, strict=True):
            model = model + height * pseudo_voigt(x, float(angle), 0.09 + 0.0008 * float(angle), 0.5, radiation)
        peaks = find_peaks(Scan.from_arrays(x, np.random.default_rng(seed).poisson(model), radiation=radiation))
        assert len(peaks) <= 12
        for spacing in spacings:
            peak = nearest(peaks, float(radiation.two_theta(spacing)))
            pulls.append((peak.d_spacing - spacing) / peak.d_error)
    # 3 standard errors, with the share that normal deviates have beyond them
    assert np.mean(np.abs(pulls) < 3) >= 0.98
    assert np.max(np.abs(pulls)) < 4.5
    assert 0.75 < np.std(pulls) < 1.25


def test_areas_and_widths() -> None:
    x = np.arange(5, 40, 0.02)
    radiation = Radiation.parse("Cu")
    truth = [(8.85, 800, 0.35, 0.4), (12.4, 1500, 0.3, 0.4), (19.9, 300, 1.0, 0.3), (26.65, 3000, 0.15, 0.5)]
    model = rise(x, 200, 6000)
    for centre, height, fwhm, eta in truth:
        model = model + height * pseudo_voigt(x, centre, fwhm, eta, radiation)
    peaks = find_peaks(Scan.from_arrays(x, np.random.default_rng(3).poisson(model)))
    assert len(peaks) == len(truth)
    for peak, (centre, height, fwhm, eta) in zip(peaks, truth, strict=True):
        assert peak.two_theta == pytest.approx(centre, abs=4 * peak.two_theta_error)
        assert peak.fwhm == pytest.approx(fwhm, rel=0.1)
        # tails of a Lorentzian are partly taken for background, which the error allows for
        assert peak.area == pytest.approx(area(height, fwhm, eta), rel=0.2)
        assert abs(peak.area - area(height, fwhm, eta)) < 3 * peak.area_error
        assert not peak.overlapped


def test_overlapping_lines_are_resolved() -> None:
    # kaolinite 002 and chlorite 004 at 3.575 and 3.535 angstrom (handbook spacings, from memory)
    radiation = Radiation.parse("Cu")
    x = np.arange(20, 32, 0.02)
    centres = radiation.two_theta(np.array([3.575, 3.535]))
    model = np.full_like(x, 150.0)
    for centre, height in zip(centres, (900, 600), strict=True):
        model = model + height * pseudo_voigt(x, float(centre), 0.22, 0.4, radiation)
    peaks = find_peaks(Scan.from_arrays(x, np.random.default_rng(2).poisson(model)))
    assert [round(peak.d_spacing, 2) for peak in peaks] in ([3.58, 3.54], [3.57, 3.54], [3.58, 3.53], [3.57, 3.53])
    assert all(peak.overlapped for peak in peaks)
    for peak, spacing in zip(peaks, (3.575, 3.535), strict=True):
        assert abs(peak.d_spacing - spacing) < 4 * peak.d_error


def test_narrow_line_on_a_hump() -> None:
    radiation = Radiation.parse("Cu")
    x = np.arange(3, 20, 0.02)
    model = rise(x, 100, 3000) + 1200 * pseudo_voigt(x, 7.0, 2.0, 0.2, radiation)
    model = model + 600 * pseudo_voigt(x, 8.85, 0.2, 0.4, radiation)
    peaks = find_peaks(Scan.from_arrays(x, np.random.default_rng(12).poisson(model)))
    assert nearest(peaks, 8.85).two_theta == pytest.approx(8.85, abs=0.02)
    assert nearest(peaks, 7.0).two_theta == pytest.approx(7.0, abs=0.25)
    assert nearest(peaks, 7.0).fwhm > 1.0


@pytest.mark.parametrize(("level", "slope"), [(2, 200), (20, 2000), (100, 8000), (400, 2000), (2000, 100000), (5, 0), (300, 0)])
def test_false_alarms_are_rare(level: float, slope: float) -> None:
    x = np.arange(3, 45, 0.02)
    found = []
    for seed in range(8):
        counts = np.random.default_rng([seed, int(level)]).poisson(level + slope / x**1.4)
        found.append(len(find_peaks(Scan.from_arrays(x, counts))))
    assert np.mean(found) < 1.0


def test_minimum_sigma_is_a_limit() -> None:
    x = np.arange(3, 45, 0.02)
    scan = Scan.from_arrays(x, np.random.default_rng(1).poisson(100 + 300 * np.exp(-(((x - 20) / 0.2) ** 2))))
    few, many = find_peaks(scan, minimum_sigma=6.0), find_peaks(scan, minimum_sigma=2.5)
    assert len(many) >= len(few) == 1
    assert all(peak.height_sigma >= 6 for peak in few)


def test_silicon_reference(shared: Path) -> None:
    # The specimen is made of coarse pieces at many heights: its 111 and 220 lines are smeared over two degrees.
    # Silicon a = 5.4309 angstrom (handbook, from memory): both smeared groups must hold their line.
    scan = read_scan(shared / "measured" / "exports" / "si_reference.xy")
    peaks = find_peaks(scan)
    for indices, low, high in ((3, 26.5, 29.5), (8, 45.0, 49.0)):
        group = [peak for peak in peaks if low < peak.two_theta < high]
        mean = np.average([peak.d_spacing for peak in group], weights=[peak.area for peak in group])
        assert mean * np.sqrt(indices) == pytest.approx(5.4309, rel=0.012)


def test_beryl_of_a_planetary_scan(shared: Path) -> None:
    # lines of beryl as the README beside the scans gives them [angstrom]; width 0.3 degrees
    scan = read_scan(shared / "measured" / "planetary" / "cmb_616745003rda24690762194ch00111p1.csv", radiation="1.7902")
    peaks = find_peaks(scan)
    strong = [peak for peak in peaks if peak.height > 1000]
    for spacing in (7.98, 4.60, 3.99, 3.25):
        assert min(abs(peak.d_spacing - spacing) for peak in strong) < 0.015
    assert np.median([peak.fwhm for peak in strong]) == pytest.approx(0.3, abs=0.06)
    # the window of the cell, 15.7 to 16.0
    assert any(15.6 < peak.d_spacing < 16.0 and peak.fwhm > 0.5 for peak in peaks)


def test_line_between_mica_and_talc(shared: Path) -> None:
    # 10 angstrom hump and narrow line at 9.21, README beside the scans
    scan = read_scan(shared / "measured" / "planetary" / "cmb_609535789rda23890751398ch00111p1.csv", radiation="1.7902")
    peaks = find_peaks(scan)
    assert min(abs(peak.d_spacing - 9.21) for peak in peaks) < 0.03
    assert any(9.8 < peak.d_spacing < 10.4 and peak.fwhm > 0.7 for peak in peaks)
    # the tail of the direct beam is no peak
    assert all(peak.d_spacing < 20 for peak in peaks)


def test_pyrite_of_a_powder_cif(shared: Path) -> None:
    # pyrite, a = 5.417 angstrom (handbook, from memory); the largest phase of that scan
    scan = read_scan(shared / "measured" / "exports" / "powder_co_no_angle_column.cif").restricted(30, 80)
    peaks = find_peaks(scan)
    for indices in (3, 4, 5, 6):
        assert min(abs(peak.d_spacing * np.sqrt(indices) - 5.417) for peak in peaks) < 0.01


def test_every_value_is_finite_and_in_order(shared: Path) -> None:
    for file in sorted((shared / "measured" / "planetary").glob("*rda*.csv")):
        peaks = find_peaks(read_scan(file, radiation="Co"))
        assert 10 < len(peaks) < 60
        angles = [peak.two_theta for peak in peaks]
        assert angles == sorted(angles)
        for peak in peaks:
            values = [getattr(peak, field.name) for field in fields(peak)]
            assert np.all(np.isfinite(values))
            assert peak.height_sigma >= 4
            assert min(peak.two_theta_error, peak.d_error, peak.area_error, peak.fwhm_error, peak.height, peak.area) > 0
            assert 0 <= peak.shape <= 1


def test_peaks_repeat_and_scale() -> None:
    x = np.arange(3, 45, 0.02)
    counts = np.random.default_rng(1).poisson(100 + 900 * np.exp(-(((x - 20) / 0.2) ** 2))).astype(float)
    scan = Scan.from_arrays(x, counts)
    assert find_peaks(scan) == find_peaks(scan)
    scaled = Scan.from_arrays(x, counts / 50, sigma=scan.sigma / 50)
    (one,), (other,) = find_peaks(scan), find_peaks(scaled)
    assert other.height * 50 == pytest.approx(one.height, rel=0.02)
    assert other.height_sigma == pytest.approx(one.height_sigma, rel=0.05)


def test_strange_scans_do_not_fail() -> None:
    rng = np.random.default_rng(0)
    x = np.linspace(2, 140, 400)
    spike = np.eye(1, 400, 200)[0] * 1e7
    for counts in (np.zeros(400), np.full(400, 5.0), rng.integers(0, 2, 400), 1e6 * rng.random(400), spike):
        assert isinstance(find_peaks(Scan.from_arrays(x, counts)), tuple)
    edges = np.cumsum(rng.uniform(0.01, 0.2, 400)) + 3
    assert isinstance(find_peaks(Scan.from_arrays(edges, rng.poisson(50, 400), radiation="Mo")), tuple)


def test_a_crowded_scan_comes_apart() -> None:
    scan = crowded_scan()
    assert 20 <= len(find_peaks(scan)) <= 23
