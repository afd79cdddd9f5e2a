"""One sentence for everything that is no scan."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
import pytest

from tests.scans.scan_texts import angles, counts, table
from xrdmica.errors import ScanError, XrdmicaError
from xrdmica.scans.read import read_scan


def changed(line: int, text: str) -> str:
    lines = table().splitlines()
    lines[line - 1] = text
    return "\n".join(lines)


def rows(first: np.ndarray, second: np.ndarray) -> str:
    return "\n".join(f"{a:.5f} {c:.1f}" for a, c in zip(first, second, strict=True))


CASES: dict[str, tuple[str | bytes, str]] = {
    "empty": (b"", "the file is empty"),
    "blank": (b"\xef\xbb\xbf \r\n\n", "the file is empty"),
    "binary": (bytes(range(256)) * 20, "a binary file"),
    "web page": ("<!DOCTYPE html><html><body>12 34</body></html>", "a web page"),
    "xml": ('<?xml version="1.0"?><scan/>', "this XML file holds no list of counts"),
    "json": ('{"two_theta": [1, 2]}', "a JSON file"),
    "workbook": (b"PK\x03\x04" + b"\x00" * 50, "a spreadsheet workbook"),
    "document": (b"%PDF-1.7 12 3", "a PDF document"),
    "one column": ("\n".join(str(i) for i in range(200)), "line 1: only one column of numbers"),
    "prose": ("no numbers in here\nat all\n", "no line holds an angle and counts"),
    "few points": (table(points=49), "only 49 points"),
    "not a number": (changed(61, "6.0000 nan"), "line 61: a value is not a finite number"),
    "overflow": (changed(61, "6.0000 1e999"), "line 61: a value is not a finite number"),
    "negative counts": (changed(61, "6.0000 -5"), "line 61: the intensity is negative, -5"),
    "constant": (rows(angles(), np.full(120, 7.0)), "every point has the same intensity"),
    "all zero": (rows(angles(), np.zeros(120)), "every point has the same intensity"),
    "repeated angle": (changed(62, "6.0000 9000"), "line 62: the angle 6 stands twice"),
    "too few decimals": (rows(np.round(angles(), 1), counts()), "stands twice: export with more decimals"),
    "two scans": (table() + table(), "line 121: the angle goes back from 8.95 to 3 .* several scans"),
    "shuffled": (rows(angles()[np.random.default_rng(1).permutation(120)], counts()), "the angles do not rise"),
    "radians": (rows(np.radians(angles(1000)), np.tile(counts(), 9)[:1000]), "looks like radians: .* --axis radians"),
    "radians by name": ("two-theta (rad) counts\n" + table(), "holds angles in radians: add the option --axis radians"),
    "spacings": ("d counts\n" + table(), "column 'd' holds d-spacings, not two-theta: add the option --axis d "),
    "transfer": ("q,intensity\n" + table(","), "column 'q' holds values of q, not two-theta: add the option --axis q "),
    "theta": ("theta,counts\n" + table(","), "column 'theta' holds theta, not two-theta"),
    "angle too large": (rows(angles() + 175, counts()), "is no two-theta in degrees"),
    "no intensity": ("2theta,temperature,pressure\n" + "\n".join(f"{a},20.1,3.2" for a in angles()), "is counts or intensity"),
    "unnamed columns": ("\n".join(f"{a} 1 2 3" for a in angles()), "4 columns that have no names"),
    "many bad lines": (table().replace("\n4.", "\npause\n4."), "line 21: 20 of 140 lines are not rows of numbers"),
    "contradiction": (table(header="Anode: Co\nWavelength: 1.5406\n"), "names both Co and a wavelength of 1.54059"),
    "damaged archive": (gzip.compress(table().encode())[:-30], "the gzip archive is damaged"),
    "short range": (rows(5 + 0.001 * np.arange(120), counts()), "covers only 0.119 degrees"),
    "cif without scan": ("data_x\n_cell_length_a 5.43\n", "holds no measured scan"),
    "cif damaged": ("data_x\nloop_\n_pd_meas_counts_total\n'12\n", "this CIF cannot be read"),
    "cif without angles": ("data_x\nloop_\n_pd_meas_counts_total\n" + "12 13 " * 60, "neither a two-theta column nor"),
    "cif of wrong length": (
        "data_x\n_pd_meas_2theta_range_min 3\n_pd_meas_2theta_range_max 60\n_pd_meas_2theta_range_inc 0.02\nloop_\n"
        "_pd_meas_counts_total\n" + "12 13 " * 60,
        "give 2851 points for 120 counts",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", CASES)
def test_sentence(tmp_path: Path, case: str) -> None:
    content, sentence = CASES[case]
    file = tmp_path / "scan.txt"
    file.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(ScanError, match=sentence) as caught:
        read_scan(file)
    assert str(file) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_file(tmp_path: Path) -> None:
    with pytest.raises(ScanError, match="there is no such file"):
        read_scan(tmp_path / "none.xy")


def test_folder(tmp_path: Path) -> None:
    with pytest.raises(ScanError, match="this is a folder"):
        read_scan(tmp_path)


def test_no_permission(unprivileged: Path) -> None:
    file = unprivileged / "scan.xy"
    file.write_text(table())
    file.chmod(0)
    with pytest.raises(ScanError, match="no permission"):
        read_scan(file)


def test_no_permission_as_told_by_the_system(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = tmp_path / "scan.xy"
    file.write_text(table())

    def refuse(self: Path) -> bytes:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "read_bytes", refuse)
    with pytest.raises(ScanError, match="no permission"):
        read_scan(file)


def test_too_large(tmp_path: Path) -> None:
    file = tmp_path / "scan.xy"
    with file.open("wb") as stream:
        stream.truncate(200_000_001)  # a file with a hole takes no room
    with pytest.raises(ScanError, match="200 MB, the limit is 200"):
        read_scan(file)


def test_archive_that_unpacks_too_large(tmp_path: Path) -> None:
    file = tmp_path / "scan.xy.gz"
    with gzip.open(file, "wb", compresslevel=1) as stream:
        for _ in range(201):
            stream.write(b"0" * 1_000_000)
    with pytest.raises(ScanError, match="unpacked it is larger than 200 MB"):
        read_scan(file)


def test_unknown_radiation(tmp_path: Path) -> None:
    file = tmp_path / "scan.xy"
    file.write_text(table())
    with pytest.raises(XrdmicaError, match="radiation 'Unobtainium' is not known"):
        read_scan(file, radiation="Unobtainium")
