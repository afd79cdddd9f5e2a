"""A drafted sheet says what the file names say, and can be read back."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest

from tests.scans.scan_texts import table
from xrdmica.batch.sheet import entries_from
from xrdmica.batch.sheet_draft import write_sheet
from xrdmica.errors import SheetError


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "S1_AD.xy").write_text(table(header="Anode: Co\n"))
    for name in ("S1_EG.xy", "S1_K-550.xy", "S10_random.xy", "S2.xy"):
        (tmp_path / name).write_text(table())
    (tmp_path / "S3_AD.xy").write_text(table(points=20))
    (tmp_path / "minerals.csv").write_text("MINERAL,PERCENT\nquartz,40\n")
    return tmp_path


def test_draft(folder: Path) -> None:
    path = write_sheet(folder)
    assert path == folder / "samples.csv"
    with path.open(encoding="utf-8-sig", newline="") as stream:
        rows = {row["file"]: row for row in csv.DictReader(stream)}
    assert list(rows) == ["S1_AD.xy", "S1_EG.xy", "S1_K-550.xy", "S2.xy", "S3_AD.xy", "S10_random.xy"]
    assert [rows["S1_K-550.xy"][key] for key in ("sample", "mount", "treatment")] == ["S1", "oriented", "K_heated_550"]
    assert (rows["S1_AD.xy"]["radiation"], rows["S1_AD.xy"]["note"]) == ("Co", "")
    assert rows["S1_EG.xy"]["radiation"] == ""
    assert rows["S1_EG.xy"]["note"] == "the file does not name the radiation"
    assert "says nothing of mount" in rows["S2.xy"]["note"]
    assert rows["S3_AD.xy"]["note"] == "cannot be read: only 20 points"
    back = entries_from(folder)
    assert back.sheet == path
    assert [entry.name for entry in back] == ["S1", "S2", "S3", "S10"]
    assert {row.treatment.name for row in back.entries[0].rows} == {"air_dried", "glycolated", "K_heated_550"}


def test_nothing_is_overwritten(folder: Path) -> None:
    path = write_sheet(folder)
    before = path.read_bytes()
    with pytest.raises(SheetError, match="there is a file of this name already"):
        write_sheet(folder)
    assert path.read_bytes() == before
    path.rename(folder / "mine.csv")
    with pytest.raises(SheetError, match=r"mine.csv: the folder has a sample sheet already"):
        write_sheet(folder)


def test_folder_without_scans(tmp_path: Path) -> None:
    with pytest.raises(SheetError, match="no scans were found"):
        write_sheet(tmp_path)
    with pytest.raises(SheetError, match="cannot be read"):
        write_sheet(tmp_path / "none")


def test_a_sheet_elsewhere_names_files_as_seen_from_there(tmp_path: Path) -> None:
    from xrdmica.batch.sheet import read_sheet

    scans = tmp_path / "scans"
    scans.mkdir()
    (scans / "S1_AD.xy").write_text(table())
    sheet = write_sheet(scans, tmp_path / "sheet.csv")
    assert sheet == tmp_path / "sheet.csv"
    (entry,) = read_sheet(sheet, radiation="Cu")
    assert entry.rows[0].path.resolve() == (scans / "S1_AD.xy").resolve()
    with pytest.raises(SheetError, match="there is a file of this name already"):
        write_sheet(scans, sheet)
