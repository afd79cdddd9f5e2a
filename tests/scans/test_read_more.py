"""Readers besides plain columns: XML, HDF5, counts below a header, tables of many scans, and other axes."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from tests.scans.scan_texts import angles, counts, table
from xrdmica.cli.main import main
from xrdmica.errors import ScanError
from xrdmica.scans.read import NotAScanError, read_scan
from xrdmica.scans.scan import Scan

WAVELENGTH = 1.5418718  # Cu K-alpha, the 2:1 mean of 1.5405929 and 1.5444274 (Hoelzer et al. 1997)


def agrees(scan: Scan, atol: float = 1e-9) -> Scan:
    np.testing.assert_allclose(scan.two_theta, angles(), atol=atol)
    np.testing.assert_array_equal(scan.counts, counts())
    return scan


# --- XML ---------------------------------------------------------------------------------------------------------

LISTED = " ".join(f"{value:.0f}" for value in counts())
XML = {
    "positions by axis": f"""<?xml version="1.0"?>
<measurements xmlns="urn:example"><sample><id>Brickfield 7</id></sample>
<measurement><anodeMaterial>Co</anodeMaterial><scan><dataPoints>
<positions axis="2Theta" unit="deg"><startPosition>3.0</startPosition><endPosition>8.95</endPosition></positions>
<positions axis="Omega" unit="deg"><startPosition>1.5</startPosition><endPosition>4.475</endPosition></positions>
<commonCountingTime unit="seconds">2</commonCountingTime>
<intensities unit="counts">{LISTED}</intensities></dataPoints></scan></measurement></measurements>""",
    "attributes": f'<run tube="Co" ><axis name="two theta" start="3.0" stop="8.95" step="0.05"/><counts>{LISTED}</counts></run>',
    "two lists": f"<scan><anode>Co</anode><tth>{' '.join(map(str, angles()))}</tth><intensity>{LISTED}</intensity></scan>",
    "start and end alone": f"<s target='Co'><first>3</first><last>8.95</last><v>{LISTED.replace(' ', ',')}</v></s>",
    "namespace": f"<a:s xmlns:a='urn:x' target='Co'><a:start>3</a:start><a:end>8.95</a:end><a:counts>{LISTED}</a:counts></a:s>",
}


@pytest.mark.parametrize("case", XML)
@pytest.mark.parametrize("encoding", ["utf-8", "utf-16"])
def test_xml(tmp_path: Path, case: str, encoding: str) -> None:
    (tmp_path / "scan.xml").write_bytes(XML[case].encode(encoding))
    assert agrees(read_scan(tmp_path / "scan.xml")).radiation.name == "Co"


def test_xml_counting_time_and_sample(tmp_path: Path) -> None:
    (tmp_path / "scan.xml").write_text(XML["positions by axis"].replace('unit="counts"', 'unit="cps"'))
    scan = read_scan(tmp_path / "scan.xml")
    np.testing.assert_allclose(scan.counts, 2 * counts())
    assert scan.metadata["id"] == "Brickfield 7"


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        (f"<s><counts>{LISTED}</counts></s>", "not from where to where in two-theta"),
        (f"<s><omega><start>3</start><end>9</end></omega><counts>{LISTED}</counts></s>", "not from where to where in two-theta"),
        ("<s><start>3</start><end>9</end></s>", "holds no list of counts"),
        (f"<s><start>3</start><end>9</end><counts>{LISTED}</s>", "line 1: this XML is damaged"),
        ('<!DOCTYPE s [<!ENTITY a "1 2 3">]><s><counts>&a;</counts></s>', "declares a document type or entities"),
        ('<?xml version="1.0"?><!DOCTYPE s SYSTEM "file:///etc/passwd"><s/>', "declares a document type or entities"),
        ("<s>" * 150 + "</s>" * 150, "too many or too deep elements"),
        ('<?xml version="1.0" encoding="ebcdic-xx"?><s/>', "XML"),
    ],
)
def test_xml_refused(tmp_path: Path, text: str, sentence: str) -> None:
    (tmp_path / "scan.xml").write_text(text)
    with pytest.raises(ScanError, match=sentence):
        read_scan(tmp_path / "scan.xml")


def test_entities_are_not_expanded(tmp_path: Path) -> None:
    levels = "".join(f'<!ENTITY e{i} "{f"&e{i - 1};" * 10}">' for i in range(1, 30))
    (tmp_path / "scan.xml").write_text(f'<!DOCTYPE s [<!ENTITY e0 "1 ">{levels}]><s><counts>&e29;</counts></s>')
    with pytest.raises(ScanError, match="entities"):
        read_scan(tmp_path / "scan.xml")


# --- HDF5 --------------------------------------------------------------------------------------------------------


def test_nexus_of_a_laboratory(shared: Path) -> None:
    pytest.importorskip("h5py")
    # values as they stand in the file: first three counts, first and second angle, 5027 points, copper
    scan = read_scan(shared / "measured" / "exports" / "nexus_scan.nxs")
    assert scan.two_theta.size == 5027
    assert list(scan.counts[:3]) == [1305, 1310, 1345]
    assert list(scan.two_theta[:2]) == pytest.approx([4.00656514, 4.01969542], abs=5e-9)
    assert (scan.radiation.name, scan.radiation_origin) == ("Cu", "file header")


def test_hdf5_without_attributes_and_with_errors(tmp_path: Path) -> None:
    h5py = pytest.importorskip("h5py")
    with h5py.File(tmp_path / "scan.h5", "w") as file:
        group = file.create_group("run/data")
        group["2theta"], group["counts"], group["counts_errors"] = angles(), counts(), 2 * np.sqrt(counts())
        file["run/wavelength"] = 0.17902
        file["run/wavelength"].attrs["units"] = "nm"
    scan = agrees(read_scan(tmp_path / "scan.h5"))
    np.testing.assert_allclose(scan.sigma, 2 * np.sqrt(counts()))
    assert scan.radiation.mean_wavelength == pytest.approx(1.7902, abs=1e-3)


def test_hdf5_in_q(tmp_path: Path) -> None:
    h5py = pytest.importorskip("h5py")
    with h5py.File(tmp_path / "scan.h5", "w") as file:
        file["d/q"], file["d/intensity"] = 4 * np.pi / WAVELENGTH * np.sin(np.radians(angles()) / 2), counts()
    with pytest.raises(ScanError, match="--axis q"):
        read_scan(tmp_path / "scan.h5")
    agrees(read_scan(tmp_path / "scan.h5", axis="q"), atol=1e-4)


def test_hdf5_refused(tmp_path: Path) -> None:
    h5py = pytest.importorskip("h5py")
    other = tmp_path / "other.h5"
    with h5py.File(other, "w") as file:
        file["twotheta"], file["counts"] = angles(), counts()
    with h5py.File(tmp_path / "linked.h5", "w") as file:
        file["twotheta"] = h5py.ExternalLink(str(other), "twotheta")
        file["counts"] = h5py.ExternalLink(str(other), "counts")
    with pytest.raises(NotAScanError, match="no list of intensities"):
        read_scan(tmp_path / "linked.h5")
    (tmp_path / "cut.h5").write_bytes(other.read_bytes()[:700])
    with pytest.raises(ScanError, match="damaged"):
        read_scan(tmp_path / "cut.h5")


def test_hdf5_without_the_package(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "h5py", None)
    (tmp_path / "scan.nxs").write_bytes(b"\x89HDF\r\n\x1a\n" + bytes(100))
    with pytest.raises(ScanError, match=r'install it with: pip install "xrdmica\[nexus\]"'):
        read_scan(tmp_path / "scan.nxs")


# --- counts below a header ---------------------------------------------------------------------------------------


def wrapped(width: int, mark: str = " ") -> str:
    texts = [f"{value:.0f}" for value in counts()]
    return "\n".join(mark.join(texts[i : i + width]) for i in range(0, len(texts), width)) + "\n"


@pytest.mark.parametrize(
    "header",
    [
        "3.00 0.05 8.95\n", "3.00 8.95 0.05\n", "Clay 7, oriented\n3.00 0.05 8.95 Cu\n3.00, 0.05, 8.95\n",
        "Start = 3.0\nStep = 0.05\nStop = 8.95\n", "#StartAngle: 3.0\n#EndAngle: 8.95\n#StepSize: 0.05\n",
        "2Theta start: 3,0\n2Theta end: 8,95\nStep width: 0,05\n", "start: 3.0\nincrement: 0.05\n",
    ],
)  # fmt: skip
@pytest.mark.parametrize(("width", "mark"), [(1, ""), (8, " "), (10, ","), (5, "  ")])
def test_counts_alone(tmp_path: Path, header: str, width: int, mark: str) -> None:
    (tmp_path / "scan.dat").write_text(header + wrapped(width, mark))
    agrees(read_scan(tmp_path / "scan.dat"))


def test_counts_alone_of_the_wrong_number(tmp_path: Path) -> None:
    (tmp_path / "scan.dat").write_text("3.00 0.05 12.00\n" + wrapped(8))
    with pytest.raises(ScanError, match=r"3 to 12 in steps of 0\.05 are 181 points but 120 counts follow"):
        read_scan(tmp_path / "scan.dat")


# --- many scans side by side, other axes, Japanese ---------------------------------------------------------------


def side_by_side() -> str:
    rows = [f"{a:.4f};{c:.0f};{2 * c:.0f};{3 * c:.0f}" for a, c in zip(angles(), counts(), strict=True)]
    return "2-Theta;Pit 1;Pit 2;Pit 3\n" + "\n".join(rows)


def test_many_scans_with_a_common_angle(tmp_path: Path) -> None:
    (tmp_path / "scan.csv").write_text(side_by_side())
    with pytest.raises(ScanError, match=r"line 2: .* 3 scans side by side \(Pit 1, Pit 2, Pit 3\): say which .* --column"):
        read_scan(tmp_path / "scan.csv")
    agrees(read_scan(tmp_path / "scan.csv", column="Pit 1"))
    np.testing.assert_array_equal(read_scan(tmp_path / "scan.csv", column="pit 2").counts, 2 * counts())
    np.testing.assert_array_equal(read_scan(tmp_path / "scan.csv", column="4").counts, 3 * counts())
    with pytest.raises(ScanError, match="no column of counts 'Pit 9': choose one of 2-Theta, Pit 1"):
        read_scan(tmp_path / "scan.csv", column="Pit 9")


@pytest.mark.parametrize(
    ("axis", "values", "header"),
    [
        ("d", WAVELENGTH / 2 / np.sin(np.radians(angles()) / 2), "d [A];counts\n"),
        ("d", WAVELENGTH / 2 / np.sin(np.radians(angles()) / 2), ""),
        ("q", 4 * np.pi / WAVELENGTH * np.sin(np.radians(angles()) / 2), "q (1/A);counts\n"),
        ("q", 40 * np.pi / WAVELENGTH * np.sin(np.radians(angles()) / 2), "q (1/nm);counts\n"),
        ("theta", angles() / 2, "theta;counts\n"),
        ("radians", np.radians(angles()), "2theta (rad);counts\n"),
        ("radians", np.radians(angles()), ""),
    ],
)
def test_other_axes(tmp_path: Path, axis: str, values: np.ndarray, header: str) -> None:
    rows = "\n".join(f"{value:.9f};{count:.0f}" for value, count in zip(values, counts(), strict=True))
    file = tmp_path / "scan.csv"
    file.write_text(header + rows)
    # no radiation in the file: copper is assumed and told
    scan = agrees(read_scan(file, axis=axis), atol=1e-4)  # type: ignore[arg-type]
    assert any("two-theta" in note or "radians" in note for note in scan.notes)
    if header:
        with pytest.raises(ScanError, match=f"--axis {axis} "):
            read_scan(file)


def test_axis_that_contradicts_or_cannot_be(tmp_path: Path) -> None:
    file = tmp_path / "scan.csv"
    file.write_text("2theta,counts\n" + table(","))
    with pytest.raises(ScanError, match="holds two-theta in degrees: leave out the option --axis"):
        read_scan(file, axis="d")
    file.write_text(table(","))
    with pytest.raises(ScanError, match=r"line 105: q = 8.2 cannot be reached with Cu"):
        read_scan(file, axis="q")
    with pytest.raises(ScanError, match="axis 's' is not known: choose one of two_theta"):
        read_scan(file, axis="s")  # type: ignore[arg-type]


def test_axis_and_column_on_the_command_line(tmp_path: Path) -> None:
    (tmp_path / "scan.csv").write_text(side_by_side())
    result = CliRunner().invoke(main, ["peaks", str(tmp_path / "scan.csv"), "--column", "Pit 2"])
    assert result.exit_code == 0, result.output
    result = CliRunner().invoke(main, ["peaks", str(tmp_path / "scan.csv"), "--column", "Pit 2", "--axis", "q"])
    assert result.exit_code == 2
    assert "leave out the option --axis" in " ".join(result.stderr.split())


def test_japanese_headers(tmp_path: Path) -> None:
    # sample name, tube and column names in Shift-JIS
    header = "試料名: 粘土 七号\nターゲット: Cu\n角度\t強度\n"
    (tmp_path / "scan.txt").write_bytes((header + table("\t")).encode("cp932"))
    scan = agrees(read_scan(tmp_path / "scan.txt"))
    assert scan.metadata["試料名"] == "粘土 七号"


def test_western_headers_are_not_taken_for_japanese(tmp_path: Path) -> None:
    header = "Échantillon: été préparé à 20 °C\nAngle [°]\tIntensité\n"
    (tmp_path / "scan.txt").write_bytes((header + table("\t")).encode("latin-1"))
    assert agrees(read_scan(tmp_path / "scan.txt")).metadata["Échantillon"] == "été préparé à 20 °C"
