"""Real exports read right or are refused with the right sentence."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from xrdmica.errors import ScanError
from xrdmica.scans.read import NotAScanError, read_scan


def test_planetary_scans(shared: Path) -> None:
    # two-theta from 2 or 3 to 52 degrees, step 0.05, cobalt: README beside the scans
    files = sorted((shared / "measured" / "planetary").glob("*rda*.csv"))
    assert len(files) == 11
    for file in files:
        scan = read_scan(file, radiation="1.7902", radiation_origin="sample sheet")
        assert scan.two_theta[0] in (2.0, 3.0)
        assert 51.9 <= scan.two_theta[-1] <= 53.0
        assert scan.step == pytest.approx(0.05, abs=0.0015)
        assert scan.radiation.wavelength == 1.7902
        assert scan.radiation_origin == "sample sheet"
        assert np.all(np.diff(scan.two_theta) > 0)


def test_radiation_is_assumed_with_a_note(shared: Path) -> None:
    file = next((shared / "measured" / "planetary").glob("*rda*.csv"))
    scan = read_scan(file)
    assert scan.radiation_origin == "assumed"
    assert any("Cu K-alpha was assumed" in note for note in scan.notes)


def test_mineral_tables_are_no_scans(shared: Path) -> None:
    files = sorted((shared / "measured" / "planetary").glob("*min*.csv"))
    assert files
    for file in files:
        with pytest.raises(NotAScanError, match=r"MINERAL, PERCENT, ERROR, and none is called two-theta"):
            read_scan(file)
    with pytest.raises(NotAScanError, match="no line holds an angle and counts"):
        read_scan(shared / "measured" / "planetary" / "catalogue.csv")


@pytest.mark.parametrize("name", ["si_reference.xy", "si_reference.dat"])
def test_two_columns(shared: Path, name: str) -> None:
    scan = read_scan(shared / "measured" / "exports" / name)
    # first and last lines as they stand in the files
    assert scan.two_theta[0] == pytest.approx(10.01163028)
    assert scan.counts[0] == 1263
    assert scan.two_theta[-1] == pytest.approx(50.00647132)
    assert scan.counts[-1] == 427
    assert scan.two_theta.size == 1524


def test_wide_table(shared: Path) -> None:
    scan = read_scan(shared / "measured" / "exports" / "multicolumn_whitespace_timestamp.dat")
    # row 299 of the table; 3.00 to 3.64 and the end are zeros
    at = int(np.argmin(np.abs(scan.two_theta - 8.96)))
    assert scan.counts[at] == 804.53
    assert scan.counts[0] > 0
    assert scan.counts[-1] > 0
    assert any("zero counts outside the measured window" in note for note in scan.notes)
    # 10 keV are 1.23984 angstrom (h c = 12.39842 keV angstrom, CODATA 2018), and q = 4 pi sin(theta) / lambda
    # gives the 0.26532 of the first row
    assert scan.radiation.wavelength == pytest.approx(1.23984, abs=2e-5)
    assert 4 * np.pi * np.sin(np.radians(1.5)) / scan.radiation.wavelength == pytest.approx(0.26532, abs=1e-5)
    assert scan.radiation_origin == "file header"


def test_powder_cif_with_cobalt(shared: Path) -> None:
    scan = read_scan(shared / "measured" / "exports" / "powder_co_no_angle_column.cif")
    assert scan.two_theta.size == 6092
    assert (scan.two_theta[0], scan.two_theta[-1]) == pytest.approx((10.01687, 89.99342))
    assert list(scan.counts[:3]) == [1125, 1129, 1150]
    assert (scan.radiation.name, scan.radiation_origin) == ("Co", "file header")


def test_powder_cif_with_copper(shared: Path) -> None:
    scan = read_scan(shared / "measured" / "exports" / "powder_range_increment.cif")
    assert scan.two_theta.size == 3728
    assert scan.step == pytest.approx(0.022, abs=1e-4)
    assert scan.radiation.name == "Cu"


@pytest.mark.parametrize(
    ("name", "sentence"),
    [
        ("comma_trailing_tab.xy", r"only 20 points"),
        ("many_scans_in_columns_first6.csv", r"6 columns .* none is called two-theta"),
        ("headerless_comma_single.csv", r"line 1376: the angle goes back from 66.0851 to 64.9822 .* overlapping ranges"),
    ],
)
def test_refused(shared: Path, name: str, sentence: str) -> None:
    with pytest.raises(ScanError, match=sentence):
        read_scan(shared / "measured" / "exports" / name)
