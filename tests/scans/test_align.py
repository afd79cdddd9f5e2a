"""The angle scale is put right by known lines, and left alone when these disagree."""

from __future__ import annotations

import numpy as np
import pytest

from xrdmica.errors import ScanError
from xrdmica.radiation import Radiation
from xrdmica.scans.align import aligned, aligned_by, shift_from_lines, shift_from_orders
from xrdmica.scans.peaks import find_peaks
from xrdmica.scans.profile import pseudo_voigt
from xrdmica.scans.scan import Scan

# NIST SRM 675, fluorophlogopite: 001 to 005 at Cu K-alpha1 (certificate, from memory)
SRM_675 = (8.853, 17.758, 26.774, 35.962, 45.397)
# quartz 100 and 101 at Cu K-alpha1 for 4.2550 and 3.3435 angstrom (Bragg's law; handbook spacings, from memory)
QUARTZ = (20.860, 26.640)


def measured(true: tuple[float, ...], zero: float = 0.0, displaced: float = 0.0, tube: str = "CuKa1", seed: int = 0) -> Scan:
    x = np.arange(5, 50, 0.02)
    radiation = Radiation.parse(tube)
    model = np.full_like(x, 80.0)
    for angle in true:
        model = model + 2500 * pseudo_voigt(x, angle + zero + displaced * np.cos(np.radians(angle) / 2), 0.12, 0.5, radiation)
    return Scan.from_arrays(x, np.random.default_rng(seed).poisson(model), radiation=radiation)


@pytest.mark.parametrize("off", [-0.15, 0.0, 0.08])
@pytest.mark.parametrize("kind", ["zero", "displacement"])
def test_srm_675(off: float, kind: str) -> None:
    scan = measured(SRM_675, **({"zero": off} if kind == "zero" else {"displaced": off}))
    shift = shift_from_lines(scan, "fluorophlogopite", kind=kind)  # type: ignore[arg-type]
    assert shift.shift == pytest.approx(off, abs=3 * shift.error)
    assert shift.error < 0.01
    assert shift.checked
    assert len(shift.lines) == 5
    corrected = aligned(scan, shift)
    for angle in SRM_675:
        assert min(abs(peak.two_theta - angle) for peak in find_peaks(corrected)) < 0.012
    assert f"{shift.shift:+.3f} ± {shift.error:.3f} degrees (fluorophlogopite)" in corrected.notes[-1]


def test_quartz() -> None:
    shift = shift_from_lines(measured((*QUARTZ, 12.4), displaced=0.1), "quartz")
    assert shift.shift == pytest.approx(0.1, abs=3 * shift.error)
    # a displacement s shifts by 2 s cos(theta) / R: 0.1 degrees at R = 185 mm are 0.161 mm
    assert shift.displacement(185.0) == pytest.approx(0.1 * np.pi / 180 * 185 / 2, abs=0.03)


def test_one_line_is_not_checked() -> None:
    scan = measured((QUARTZ[1],), zero=0.05)
    shift = shift_from_lines(scan, "quartz", kind="zero")
    assert not shift.checked
    assert "one line only and so not checked" in aligned(scan, shift).notes[-1]


def test_lines_that_disagree() -> None:
    with pytest.raises(ScanError, match=r"lines of quartz disagree .* 4.255 A by"):
        shift_from_lines(measured((QUARTZ[0] + 0.12, QUARTZ[1] - 0.05)), "quartz")


def test_no_line_and_unknown_standard() -> None:
    with pytest.raises(ScanError, match="no line of quartz was found"):
        shift_from_lines(measured((8.8, 17.7)), "quartz")
    with pytest.raises(ScanError, match="standard 'granite' is not known: choose one of quartz"):
        shift_from_lines(measured(QUARTZ), "granite")


@pytest.mark.parametrize("kind", ["zero", "displacement"])
def test_orders_of_mica(kind: str) -> None:
    scan = measured(SRM_675, **({"zero": 0.1} if kind == "zero" else {"displaced": 0.1}))
    shift, spacing = shift_from_orders(scan, 10.0, kind=kind)  # type: ignore[arg-type]
    assert shift.shift == pytest.approx(0.1, abs=3 * shift.error)
    assert spacing == pytest.approx(9.98104, abs=0.02)
    assert 0.005 < shift.error < 0.05


def test_orders_that_are_not_one_series() -> None:
    with pytest.raises(ScanError, match="the 10 A series disagree"):
        shift_from_orders(measured((8.853, 17.758 + 0.15, 26.774, 45.397)), 10.0)
    with pytest.raises(ScanError, match="only 2 orders of 10 A were found"):
        shift_from_orders(measured((8.853, 17.758)), 10.0)


def test_scan_is_not_changed() -> None:
    scan = measured(QUARTZ, zero=0.1)
    before = scan.two_theta.copy()
    corrected = aligned(scan, shift_from_lines(scan, "quartz", kind="zero"))
    np.testing.assert_array_equal(scan.two_theta, before)
    np.testing.assert_allclose(corrected.two_theta, before - 0.1, atol=0.02)


def test_by_name() -> None:
    assert "a displacement of +0.1" in aligned_by(measured(SRM_675, displaced=0.1), "mica").notes[-1]
    assert "a zero of +0.1" in aligned_by(measured(QUARTZ, zero=0.1), "quartz", kind="zero").notes[-1]
    with pytest.raises(ScanError, match=r"angle scale 'granite' is not known: choose one of quartz, .*, mica"):
        aligned_by(measured(QUARTZ), "granite")
