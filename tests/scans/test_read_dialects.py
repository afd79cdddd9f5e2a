"""The same scan in every dialect of text gives the same numbers."""

from __future__ import annotations

import gzip
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.scans.scan_texts import angles, counts, table
from xrdmica.errors import ScanError
from xrdmica.scans.read import read_scan
from xrdmica.scans.scan import Scan
from xrdmica.scans.treatment import Treatment
from xrdmica.scans.write import write_scan_cif, write_scan_csv, write_scan_json

HEADERS = [
    "",
    "# comment\n! another\n; third\n' fourth\n* fifth\n// sixth\n",
    "2Theta,Counts\n",
    "2 Theta (deg)   Intensity (counts)\n",
    "Sample: Brickfield 7\nDate: 12.05.2021 14:30\n2021 05 12\n\n",
    "17 lines of header\n3.0000 0.0500 8.9500\n",
    "3.0000 8.9500\n",
    "120\n",
    '"Angle","Intensity"\n',
]
DIALECTS = [(" ", "."), ("\t", "."), (",", "."), (";", "."), (";", ","), ("\t", ","), ("   ", "."), (", ", "."), ("  ", ",")]
ENCODINGS = ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "latin-1"]


def check(path: Path, data: bytes) -> Scan:
    path.write_bytes(data)
    scan = read_scan(path)
    np.testing.assert_allclose(scan.two_theta, angles(), atol=1e-9)
    np.testing.assert_array_equal(scan.counts, counts())
    return scan


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    dialect=st.sampled_from(DIALECTS),
    header=st.sampled_from(HEADERS),
    end=st.sampled_from(["\n", "\r\n", "\r"]),
    encoding=st.sampled_from(ENCODINGS),
    trailing=st.booleans(),
    packed=st.booleans(),
    exponent=st.booleans(),
)
def test_dialects(
    tmp_path: Path, dialect: tuple[str, str], header: str, end: str, encoding: str, trailing: bool, packed: bool, exponent: bool
) -> None:
    separator, decimal = dialect
    tail = separator.strip(" ") if trailing else ""
    number = "{:.6e}" if exponent else "{:.1f}"
    rows = [
        f"{a:.4f}{separator}{number.format(c)}".replace(".", decimal) + tail for a, c in zip(angles(), counts(), strict=True)
    ]
    text = header.replace("\n", end) + end.join(rows) + end
    data = text.encode(encoding)
    check(tmp_path / "scan.txt", gzip.compress(data) if packed else data)


def test_quoted_decimal_comma(tmp_path: Path) -> None:
    rows = [f'"{a:.4f}","{c:.1f}"'.replace(".", ",") for a, c in zip(angles(), counts(), strict=True)]
    check(tmp_path / "scan.csv", "\n".join(rows).encode())


def test_third_column_is_sigma(tmp_path: Path) -> None:
    sigma = np.sqrt(counts()) * 0.5
    rows = [f"{a:.4f} {c:.0f} {s:.6f}" for a, c, s in zip(angles(), counts(), sigma, strict=True)]
    scan = check(tmp_path / "scan.xye", "\n".join(rows).encode())
    np.testing.assert_allclose(scan.sigma, sigma, atol=1e-6)


def test_third_column_without_name_that_is_no_sigma(tmp_path: Path) -> None:
    rows = [f"{a:.4f} {c:.0f} {i}" for i, (a, c) in enumerate(zip(angles(), counts(), strict=True))]
    scan = check(tmp_path / "scan.xy", "\n".join(rows).encode())
    np.testing.assert_allclose(scan.sigma, np.sqrt(counts()))
    assert any("third column" in note for note in scan.notes)


def test_wide_table_by_names(tmp_path: Path) -> None:
    head = "Time;d [Å];Temp;Counts;2-Theta [°]\n"
    rows = [
        f"10:{i % 60:02d};{9 - 0.01 * i:.3f};21.5;{c:.0f};{a:.3f}"
        for i, (a, c) in enumerate(zip(angles(), counts(), strict=True))
    ]
    check(tmp_path / "scan.csv", (head + "\n".join(rows)).encode())


def test_falling_angles_are_turned_round(tmp_path: Path) -> None:
    lines = table().splitlines()[::-1]
    scan = check(tmp_path / "scan.xy", "\n".join(lines).encode())
    assert any("turned round" in note for note in scan.notes)


def test_skipped_lines_are_told(tmp_path: Path) -> None:
    lines = table().splitlines()
    lines[60:60] = ["pause of the shutter"]
    scan = check(tmp_path / "scan.xy", "\n".join(lines).encode())
    assert any("1 line(s)" in note and "line 61" in note for note in scan.notes)


def test_header_row_of_numbers_is_told(tmp_path: Path) -> None:
    scan = check(tmp_path / "scan.xy", table(header="3.0000 8.9500\n").encode())
    assert any("taken as header" in note for note in scan.notes)


@settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.lists(st.floats(0, 1e9), min_size=50, max_size=80).filter(
        lambda v: len(set(v)) > 1 and min(v[:3]) > 0 and min(v[-3:]) > 0
    ),
    st.sampled_from(["Cu", "CuKa1", "Co", "1.7902"]),
)
def test_written_scans_come_back(tmp_path: Path, values: list[float], tube: str) -> None:
    x = np.linspace(2.0, 60.0, len(values))
    scan = Scan.from_arrays(x, np.array(values), radiation=tube, treatment=Treatment.parse("K-550"))
    write_scan_csv(scan, tmp_path / "out.csv")
    back = read_scan(tmp_path / "out.csv")
    np.testing.assert_array_equal(back.two_theta, scan.two_theta)
    np.testing.assert_array_equal(back.counts, scan.counts)
    np.testing.assert_array_equal(back.sigma, scan.sigma)
    assert back.radiation == scan.radiation
    assert (back.mount, back.treatment) == ("oriented", scan.treatment)
    assert [path.name for path in tmp_path.iterdir()] == ["out.csv"]


@pytest.mark.parametrize("tube", ["Cu", "CuKa1", "Co", "1.7902"])
@pytest.mark.parametrize("write", [write_scan_cif, write_scan_json])
def test_other_formats_come_back(tmp_path: Path, tube: str, write: Callable[[Scan, Path], None]) -> None:
    x, y = angles(), counts() + 0.25
    scan = Scan.from_arrays(x, y, radiation=tube, treatment=Treatment.parse("Mg_glycerolated"), sigma=0.3 * np.sqrt(y))
    write(scan, tmp_path / "out.txt")
    back = read_scan(tmp_path / "out.txt")
    np.testing.assert_array_equal(back.two_theta, scan.two_theta)
    np.testing.assert_allclose(back.counts, scan.counts, rtol=1e-9)
    np.testing.assert_allclose(back.sigma, scan.sigma, rtol=0.006)
    assert back.radiation.name == scan.radiation.name
    np.testing.assert_allclose(back.radiation.weights, scan.radiation.weights, atol=1e-6)
    assert (back.mount, back.treatment) == ("oriented", scan.treatment)


@pytest.mark.parametrize(
    "text",
    ['{"format": "xrdmica scan 1"}', '{"format": "xrdmica scan 1", "two_theta": [1], "counts": "x", "sigma": {}}'],
)
def test_damaged_json(tmp_path: Path, text: str) -> None:
    (tmp_path / "scan.json").write_text(text)
    with pytest.raises(ScanError, match="this JSON of a scan is damaged"):
        read_scan(tmp_path / "scan.json")


@pytest.mark.parametrize(
    ("header", "name"),
    [
        ("Anode material: Cu\n", "Cu"),
        ("# Tube = Cobalt\n", "Co"),
        ("Wavelength,1.5406\n", "Cu"),
        ("K-Alpha1 wavelength,1.788996\nK-Alpha2 wavelength,1.792835\nK-Beta wavelength,1.62083\nK-A2/K-A1 Ratio,0.5\n", "Co"),
        ("lambda: 1.0332\n", "1.0332"),
        ("measured with Co K-alpha radiation, 40 kV\n", "Co"),
        ("; Radiation = CuKa\n", "Cu"),
    ],
)
def test_header_names_the_tube(tmp_path: Path, header: str, name: str) -> None:
    scan = check(tmp_path / "scan.xy", table(header=header).encode())
    assert (scan.radiation.name, scan.radiation_origin) == (name, "file header")


def test_option_goes_before_header(tmp_path: Path) -> None:
    (tmp_path / "scan.xy").write_text(table(header="Anode: Co\n"))
    scan = read_scan(tmp_path / "scan.xy", radiation="Cu")
    assert (scan.radiation.name, scan.radiation_origin) == ("Cu", "option")
    assert any("although the file names Co" in note for note in scan.notes)


def test_counts_per_second_with_time(tmp_path: Path) -> None:
    (tmp_path / "scan.csv").write_text(table(",", header="Time per step: 4 s\n2theta,Intensity (cps)\n"))
    scan = read_scan(tmp_path / "scan.csv")
    np.testing.assert_allclose(scan.counts, 4 * counts())
    np.testing.assert_allclose(scan.sigma, np.sqrt(4 * counts()))


def test_counts_per_second_without_time(tmp_path: Path) -> None:
    (tmp_path / "scan.csv").write_text(table(",", header="2theta,cps\n"))
    scan = read_scan(tmp_path / "scan.csv")
    np.testing.assert_allclose(scan.counts, counts())
    assert any("counting time is not known" in note for note in scan.notes)


def test_header_items_are_kept(tmp_path: Path) -> None:
    (tmp_path / "scan.xy").write_text(table(header="Sample: Brickfield 7\n"))
    assert read_scan(tmp_path / "scan.xy").metadata["Sample"] == "Brickfield 7"


@pytest.mark.parametrize(
    ("name", "mount", "treatment"),
    [
        ("S12_AD.xy", "oriented", "air_dried"), ("S12_EG.xy", "oriented", "glycolated"), ("S12_550.xy", "oriented", "heated_550"),
        ("S12_K-550.csv", "oriented", "K_heated_550"), ("S12_Mg_glycerolated.xy", "oriented", "Mg_glycerolated"),
        ("S12_random.xy", "random", "none"), ("S12_0117.xy", "random", "none"), ("S12.xy", "random", "none"),
        ("S12_oriented.xy", "oriented", "air_dried"), ("S12-EG.xy", "oriented", "glycolated"),
    ],
)  # fmt: skip
def test_name_tells_the_mount(tmp_path: Path, name: str, mount: str, treatment: str) -> None:
    (tmp_path / name).write_text(table("," if name.endswith("csv") else " "))
    scan = read_scan(tmp_path / name)
    assert (scan.mount, scan.treatment.name) == (mount, treatment)
    assert any("file name" in note for note in scan.notes)


def test_rows_that_stand_twice(tmp_path: Path) -> None:
    lines = table().splitlines()
    file = tmp_path / "twice.xy"
    file.write_text("\n".join(line for line in lines for _ in range(2)))
    scan = read_scan(file, radiation="Cu")
    np.testing.assert_array_equal(scan.two_theta, angles())
    np.testing.assert_array_equal(scan.counts, counts())
    assert any("120 angle(s) stood twice, the same row; the first is 3 (line 2)" in note for note in scan.notes)


def test_two_ranges_that_meet_in_a_point(tmp_path: Path) -> None:
    lines = table().splitlines()
    angle, count = lines[60].split()
    lines.insert(61, f"{angle} {int(count) + 20}")
    file = tmp_path / "joint.xy"
    file.write_text("\n".join(lines))
    scan = read_scan(file, radiation="Cu")
    expected = counts()
    expected[60] += 10
    np.testing.assert_array_equal(scan.counts, expected)
    assert any("1 angle(s) stood twice, with counts that agree; their mean was taken" in note for note in scan.notes)
