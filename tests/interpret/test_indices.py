"""Trade indices: worked relations, conditions under which they are computed, and calibration lines."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.errors import XrdmicaError
from xrdmica.interpret.index_readings import IndexInput, MeasuredScan, width_for_copper
from xrdmica.interpret.indices import INDICES, trade_indices
from xrdmica.interpret.width_calibration import WidthCalibration, fit_standards, load_width_calibration
from xrdmica.radiation import Radiation
from xrdmica.results import Findings, IndexValue, PhaseFinding, Swelling
from xrdmica.scans.peaks import Peak
from xrdmica.scans.scan import Scan
from xrdmica.scans.treatment import Treatment

X = np.arange(3.0, 65.0, 0.02)


def peak(d: float, area: float, *, fwhm: float = 0.2, tube: str = "Cu", overlapped: bool = False) -> Peak:
    angle = float(Radiation.parse(tube).two_theta(d))
    return Peak(angle, 0.005, d, 0.001, area / fwhm, 50.0, area, area / 50, fwhm, fwhm / 50, 0.5, overlapped)


def scan_of(text: str, *peaks: Peak, mount: str = "oriented", tube: str = "Cu", width: float = 0.1) -> MeasuredScan:
    scan = Scan.from_arrays(X, np.full_like(X, 100.0), radiation=tube, treatment=Treatment.parse(text), mount=mount)
    return MeasuredScan(text, scan, peaks, width, lambda angle: 0.0)


def finding(phase: str, group: str, status: str = "present") -> PhaseFinding:
    return PhaseFinding(phase=phase, name=phase, group=group, status=status, reason="as set")  # type: ignore[arg-type]


ILLITE, CHLORITE = finding("illite", "true mica"), finding("chlorite", "chlorite")
KAOLINITE, SMECTITE = finding("kaolinite", "kaolin"), finding("smectite", "smectite")
NO = Swelling(verdict="cannot tell", reason="as set")


def indices(scans: list[MeasuredScan], *phases: PhaseFinding, swelling: Swelling = NO, **more: object) -> dict[str, IndexValue]:
    found = trade_indices(IndexInput(tuple(scans), Findings(sample="s", phases=phases), swelling, **more))  # type: ignore[arg-type]
    return {index.id: index for index in found}


def test_every_definition_says_what_a_reader_needs() -> None:
    for definition in INDICES:
        assert definition.definition
        assert definition.source
        assert definition.validity
        assert definition.weakness
    assert len({d.id for d in INDICES}) == len(INDICES)


def test_kuebler_is_the_width_of_the_air_dried_line() -> None:
    found = indices([scan_of("air_dried", peak(10.0, 400, fwhm=0.31))], ILLITE)["kuebler"]
    assert found.value == pytest.approx(0.31)
    assert found.scan == "air_dried"
    assert "not calibrated" in found.validity


def test_widths_of_another_tube_are_converted() -> None:
    # size broadening: lambda/(L cos theta); for 10 A with Co: 1.7902/1.5418 x cos(4.42)/cos(5.14)
    expected = 0.36 * 1.5418 / 1.7902 * np.cos(np.radians(5.14)) / np.cos(np.radians(4.42))
    assert width_for_copper(0.36, float(Radiation.parse("Co").two_theta(10.0)), Radiation.parse("Co")) == pytest.approx(
        expected, rel=2e-3
    )
    found = indices([scan_of("air_dried", peak(10.0, 400, fwhm=0.36, tube="Co"), tube="Co")], ILLITE)["kuebler"]
    assert found.value == pytest.approx(expected, rel=2e-3)


@pytest.mark.parametrize(
    ("scans", "phases", "words"),
    [
        ([scan_of("glycolated", peak(10.0, 1))], (ILLITE,), "there is no air-dried oriented scan"),
        ([scan_of("air_dried", peak(10.0, 1))], (KAOLINITE,), "no mica or illite was found"),
        ([scan_of("air_dried", peak(7.15, 1))], (ILLITE,), "has no line of mica"),
        ([scan_of("air_dried", peak(10.0, 1, overlapped=True))], (ILLITE,), "overlaps another one"),
        ([scan_of("air_dried", peak(10.0, 1))], (ILLITE, finding("illite_smectite", "interstratified")), "mixed-layer phase"),
    ],
)
def test_kuebler_is_not_computed_without_its_conditions(
    scans: list[MeasuredScan], phases: tuple[PhaseFinding, ...], words: str
) -> None:
    found = indices(scans, *phases)["kuebler"]
    assert found.value is None
    assert found.reason.startswith("not computed because")
    assert words in found.reason


def test_arkai_needs_chlorite_alone_at_seven_angstrom() -> None:
    scan = scan_of("air_dried", peak(7.09, 300, fwhm=0.28))
    assert indices([scan], CHLORITE)["arkai"].value == pytest.approx(0.28)
    assert "shares the 7 angstrom line" in indices([scan], CHLORITE, KAOLINITE)["arkai"].reason


def test_esquevin_is_a_ratio_of_heights() -> None:
    scan = scan_of("glycolated", peak(10.0, 100), peak(5.0, 35))
    # Esquevin (1969), from memory: 0.3-0.4 is phengite
    assert indices([scan], ILLITE)["esquevin"].value == pytest.approx(0.35)


def test_biscaye_worked_example() -> None:
    # Biscaye (1965), from memory: 1 x 17, 4 x 10, 2 x 7; areas 1000, 100, 200 -> 1000 + 400 + 400 = 1800
    scan = scan_of(
        "glycolated", peak(17.0, 1000), peak(10.0, 100), peak(7.1, 200), peak(3.58, 30), peak(3.54, 10)
    )
    found = indices([scan], SMECTITE, ILLITE, KAOLINITE, CHLORITE)
    expected = {"smectite": 1000, "illite": 400, "kaolinite": 400 * 0.75, "chlorite": 400 * 0.25}
    for part, amount in expected.items():
        assert found[f"biscaye_{part}"].value == pytest.approx(100 * amount / 1800, abs=1e-3)
    total = sum(found[f"biscaye_{part}"].value or 0.0 for part in expected)
    assert total == pytest.approx(100.0, abs=1e-2)


def test_biscaye_says_when_the_seven_angstrom_line_cannot_be_split() -> None:
    scan = scan_of("glycolated", peak(17.0, 1000), peak(7.1, 200))
    assert "are not resolved" in indices([scan], SMECTITE, KAOLINITE)["biscaye_kaolinite"].reason
    assert "no glycolated" in indices([scan_of("air_dried")], SMECTITE)["biscaye_smectite"].reason


def test_scherrer_by_hand() -> None:
    # own width sqrt(0.5^2 - 0.1^2) = 0.4899 degrees = 0.008550 rad; 0.9 x 1.5418 / (0.008550 cos 4.42) = 162.8 A
    found = indices([scan_of("air_dried", peak(10.0, 100, fwhm=0.5))], ILLITE)["size_mica"]
    assert found.value == pytest.approx(162.8, rel=5e-3)
    narrow = indices([scan_of("air_dried", peak(10.0, 100, fwhm=0.102))], ILLITE)["size_mica"]
    assert "lower limit" in narrow.reason


@pytest.mark.parametrize(("d", "percent"), [(5.61, 10), (5.44, 50), (5.28, 70), (5.10, 90)])
def test_percent_illite_by_the_table(d: float, percent: float) -> None:
    # Moore & Reynolds (1997), glycolated illite-smectite, 002/003, from memory
    mixed = finding("illite_smectite", "interstratified")
    found = indices([scan_of("glycolated", peak(d, 100))], mixed)["illite_percent"]
    assert found.value == pytest.approx(percent, abs=1.0)
    assert (found.standard_error or 0.0) >= 5.0


def test_b0_is_six_times_d060() -> None:
    muscovite = finding("muscovite", "true mica")
    found = indices([scan_of("none", peak(1.503, 50), mount="random")], muscovite)["b0"]
    assert found.value == pytest.approx(9.018, abs=0.002)


def test_expandable_layers_of_the_soil() -> None:
    swelling = Swelling(verdict="yes", reason="as set", expandable_percent=40.0, low95=30.0, high95=50.0)
    found = indices([scan_of("glycolated")], SMECTITE, swelling=swelling, clay_percent=35.0)
    assert found["expandable_soil"].value == pytest.approx(14.0)
    assert found["expandable_soil"].standard_error == pytest.approx(10 / 1.96 * 0.35, rel=1e-3)
    assert "clay_percent" in indices([scan_of("glycolated")], SMECTITE, swelling=swelling)["expandable_soil"].reason


def test_calibration_line_is_applied_and_named() -> None:
    line = WidthCalibration(1.2, -0.02, 0.05, 0.01, 0.0, "standards of 2026")
    found = indices([scan_of("air_dried", peak(10.0, 400, fwhm=0.30))], ILLITE, calibration=line)["kuebler"]
    assert found.value == pytest.approx(0.34)
    assert found.standard_error == pytest.approx(np.sqrt((1.2 * 0.006) ** 2 + (0.05 * 0.30) ** 2 + 0.01**2), rel=1e-2)
    assert "standards of 2026" in found.validity


@settings(max_examples=50, deadline=None)
@given(st.floats(0.5, 2.0), st.floats(-0.1, 0.1), st.integers(3, 8))
def test_a_line_through_exact_standards_is_found(slope: float, intercept: float, count: int) -> None:
    measured = np.linspace(0.2, 0.9, count)
    line = fit_standards(measured, slope * measured + intercept)
    assert line.slope == pytest.approx(slope, abs=1e-8)
    assert line.intercept == pytest.approx(intercept, abs=1e-8)


def test_weighted_line_against_numpy() -> None:
    rng = np.random.default_rng(3)
    measured = np.array([0.2, 0.35, 0.5, 0.7, 0.9])
    reference = 1.1 * measured + 0.03 + rng.normal(0, 0.01, 5)
    line = fit_standards(measured, reference)
    (slope, intercept), covariance = np.polyfit(measured, reference, 1, cov=True)
    assert line.slope == pytest.approx(slope)
    assert line.intercept == pytest.approx(intercept)
    # numpy divides by n - m as well
    assert line.slope_error == pytest.approx(np.sqrt(covariance[0, 0]), rel=1e-6)


def test_calibration_files(tmp_path: Path) -> None:
    toml = tmp_path / "line.toml"
    toml.write_text("slope = 1.1\nintercept = 0.02\nslope_error = 0.03\n")
    assert load_width_calibration(toml).slope == 1.1
    table = tmp_path / "standards.csv"
    table.write_text("name;measured;reference\nA;0,20;0,25\nB;0,40;0,47\nC;0,80;0,91\n")
    assert load_width_calibration(table).slope == pytest.approx(1.1, abs=1e-6)


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        ("a.toml", "slope = 1.1\n", "intercept"),
        ("a.toml", "slope = ", "not valid TOML"),
        ("a.csv", "x,y\n1,2\n", "no columns measured and reference"),
        ("a.csv", "measured,reference\n0.2,0.3\n0.4,wide\n", "row 3: '0.4, wide' are no numbers"),
        ("a.csv", "measured,reference\n0.2,0.3\n0.4,0.5\n", "needs three standards"),
    ],
)
def test_calibration_files_refused(tmp_path: Path, name: str, text: str, words: str) -> None:
    (tmp_path / name).write_text(text)
    with pytest.raises(XrdmicaError, match=words):
        load_width_calibration(tmp_path / name)
