"""Sample sheets, folders and single files."""

from __future__ import annotations

import pickle
from pathlib import Path

import numpy as np
import pytest

from tests.scans.scan_texts import table
from xrdmica.batch.sheet import entries_from, read_sheet, samples_in_folder
from xrdmica.errors import ScanError, SheetError


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    for name in ("S1_AD.xy", "S1_EG.xy", "S1_550.xy", "S1_random.xy", "S2_AD.xy"):
        (tmp_path / name).write_text(table())
    return tmp_path


def write(folder: Path, text: str, name: str = "samples.csv", encoding: str = "utf-8") -> Path:
    path = folder / name
    path.write_bytes(text.encode(encoding))
    return path


ROWS = [
    ["S1", "S1_AD.xy", "oriented", "AD", "Cu", "12,5", "grey clay"],
    ["S1", "S1_EG.xy", "oriented", "EG", "Cu", "", "grey clay"],
    ["S1", "S1_550.xy", "oriented", "550", "", "", "cracked"],
    ["S1", "S1_random.xy", "random", "none", "Co", "", ""],
    ["S2", "S2_AD.xy", "oriented", "air_dried", "1.7902", "30", ""],
]
HEADER = ["Sample", " FILE ", "mount", "Treatment", "radiation", "clay_percent", "note"]


@pytest.mark.parametrize("separator", [",", ";", "\t"])
@pytest.mark.parametrize("end", ["\n", "\r\n"])
@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16"])
def test_sheet_as_spreadsheets_write_it(folder: Path, separator: str, end: str, encoding: str) -> None:
    lines = [separator.join(f'"{cell}"' if "," in cell else cell for cell in row) for row in [HEADER, *ROWS]]
    lines.insert(2, separator * 6)
    lines.insert(4, "")
    one, two = read_sheet(write(folder, end.join(lines) + end, encoding=encoding))
    assert (one.name, two.name) == ("S1", "S2")
    assert [(row.path.name, row.mount, row.treatment.name) for row in one.rows] == [
        ("S1_AD.xy", "oriented", "air_dried"), ("S1_EG.xy", "oriented", "glycolated"), ("S1_550.xy", "oriented", "heated_550"),
        ("S1_random.xy", "random", "none"),
    ]  # fmt: skip
    assert dict(one.details) == {"clay_percent": "12.5", "note": "grey clay; cracked"}
    assert one.rows[0].line == 2
    assert one.rows[2].radiation is None
    sample = one.load()
    assert sample.labels == ("air_dried", "glycolated", "heated_550", "random_none")
    assert [scan.radiation.name for scan in sample.scans] == ["Cu", "Cu", "Cu", "Co"]
    assert [scan.radiation_origin for scan in sample.scans] == ["sample sheet", "sample sheet", "assumed", "sample sheet"]
    assert sample.scans[2].metadata["note"] == "cracked"


@pytest.mark.parametrize("encoding", ["cp1252", "utf-16", "cp932"])
def test_sheet_with_the_line_of_the_separator_and_other_code_pages(folder: Path, encoding: str) -> None:
    note = {"cp932": "粘土 七号 灰色"}.get(encoding, "Tonprobe, grün, 3 °")
    path = write(folder, f'sep=;\r\nsample;file;clay_percent;note\r\nS1;S1_AD.xy;12,5;"{note}"\r\n', encoding=encoding)
    assert entries_from(folder).sheet == path
    assert dict(read_sheet(path)[0].details) == {"clay_percent": "12.5", "note": note}


def test_option_fills_rows_without_radiation(folder: Path) -> None:
    path = write(folder, "sample,file,treatment,radiation\nS1,S1_AD.xy,AD,Cu\nS1,S1_EG.xy,EG,\n")
    scans = read_sheet(path, radiation="Co")[0].load().scans
    assert [(scan.radiation.name, scan.radiation_origin) for scan in scans] == [("Cu", "sample sheet"), ("Co", "option")]


def test_what_the_sheet_leaves_out_is_noted(folder: Path) -> None:
    path = write(folder, "sample,file,mount,treatment\nS1,S1_AD.xy,oriented,\nS1,S1_EG.xy,,EG\nS1,S1_random.xy,,\n")
    rows = read_sheet(path)[0].rows
    assert [(row.mount, row.treatment.name) for row in rows] == [
        ("oriented", "air_dried"), ("oriented", "glycolated"), ("random", "none"),
    ]  # fmt: skip
    assert all(row.notes for row in rows)


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("", "the sheet is empty"),
        ("sample,file\n", "has a header but no rows"),
        ("sample,scan\nS1,S1_AD.xy\n", "row 1: the header has no column 'file'"),
        ("sample,file,note,note\n", "row 1, column note: it stands twice"),
        ("sample,file\n,S1_AD.xy\n", "row 2, column sample: the name of the sample is missing"),
        ("sample,file\n../x,S1_AD.xy\n", "row 2, column sample: '../x' cannot name result files"),
        ("sample,file\n\nS1,\n", "row 3, column file: the name of the file is missing"),
        ("sample,file\nS1,none.xy\n", "row 2, column file: none.xy does not exist"),
        ("sample,file\nS1,.\n", r"row 2, column file: \. is a folder"),
        ("sample,file\nS1,../secret.xy\n", "row 2, column file: ../secret.xy is outside the folder"),
        ("sample,file\nS1,/etc/passwd\n", "row 2, column file: /etc/passwd is outside the folder"),
        ("sample,file,treatment\nS1,S1_AD.xy,boiled\n", "row 2, column treatment: treatment 'boiled' is not known"),
        ("sample,file,mount\nS1,S1_AD.xy,upright\n", "row 2, column mount: mount 'upright' is not known"),
        ("sample,file,radiation\nS1,S1_AD.xy,Xx\n", "row 2, column radiation: radiation 'Xx' is not known"),
        ("sample,file\nS1,S1_AD.xy\nS1,./S1_AD.xy\n", "row 3, column file: S1_AD.xy stands in row 2"),
        ("sample,file\nS1,S1_AD.xy\nS2,S1_AD.xy\n", "row 3, column file: S1_AD.xy stands in row 2 for sample S1"),
        ("sample,file,treatement\nS1,S1_AD.xy,AD\n", "row 1, column treatement: looks like a misspelt 'treatment'"),
        ("sample,file,clay_percent\nS1,S1_AD.xy,much\n", "row 2, column clay_percent: 'much' is no number from 0 to 100"),
        ("sample,file,angle_scale\nS1,S1_AD.xy,granite\n", "row 2, column angle_scale: 'granite' is not known: choose one"),
        ("sample,file,clay_percent\nS1,S1_AD.xy,101\n", "row 2, column clay_percent: '101' is no number"),
        ("sample,file,clay_percent\nS1,S1_AD.xy,10\nS1,S1_EG.xy,11\n", "row 3, column clay_percent: 11 contradicts 10"),
        ("sample,file,note\nS1,S1_AD.xy,wet, grey\n", "row 2: 4 cells but the header has 3"),
    ],
)
def test_sentence_of_a_bad_sheet(folder: Path, text: str, sentence: str) -> None:
    path = write(folder, text)
    with pytest.raises(SheetError, match=sentence) as caught:
        read_sheet(path)
    assert str(path) in str(caught.value)


def test_workbook_is_refused(folder: Path) -> None:
    path = folder / "samples.csv"
    path.write_bytes(b"PK\x03\x04 and more")
    with pytest.raises(SheetError, match="spreadsheet workbook"):
        read_sheet(path)


def test_files_outside_when_allowed(folder: Path) -> None:
    inner = folder / "sheets"
    inner.mkdir()
    path = write(inner, "sample,file\nS1,../S1_AD.xy\n")
    assert read_sheet(path, allow_outside=True)[0].load().name == "S1"


def test_link_to_the_outside_is_outside(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> None:
    other = tmp_path_factory.mktemp("other") / "scan.xy"
    other.write_text(table())
    (folder / "link.xy").symlink_to(other)
    with pytest.raises(SheetError, match="outside the folder"):
        read_sheet(write(folder, "sample,file\nS1,link.xy\n"))


def test_bad_file_spoils_only_its_sample(folder: Path) -> None:
    (folder / "S1_AD.xy").write_text("nothing")
    one, two = read_sheet(write(folder, "sample,file\nS1,S1_AD.xy\nS2,S2_AD.xy\n"))
    with pytest.raises(ScanError):
        one.load()
    assert two.load().name == "S2"


def test_folder_by_names(folder: Path) -> None:
    for name in ("S10_AD.xy", "core_150.xy", "core_200.xy", "README.txt", "notes.md", ".hidden.xy", "truth.json"):
        (folder / name).write_text(table())
    (folder / "minerals.csv").write_text("MINERAL,PERCENT\nquartz,40\n")
    found = samples_in_folder(folder)
    assert {entry.name: [row.treatment.name for row in entry.rows] for entry in found} == {
        "S1": ["air_dried", "glycolated", "heated_550", "none"], "S2": ["air_dried"], "S10": ["air_dried"],
        "core_150": ["none"], "core_200": ["none"],
    }  # fmt: skip
    names = [entry.name for entry in found]
    assert names.index("S2") < names.index("S10")
    assert [(skip.file.name, "not a scan" in skip.reason) for skip in found.skipped] == [("minerals.csv", True)]
    core = next(entry for entry in found if entry.name == "core_150")
    assert any("says nothing of mount" in note for note in core.load().scans[0].notes)


def test_folder_with_other_kinds_of_files(folder: Path) -> None:
    counts = " ".join(str(100 + k % 9) for k in range(101))
    (folder / "S7_EG.xml").write_text(
        f"<scan><axis>2Theta<start>3.0</start><end>13.0</end></axis><counts>{counts}</counts></scan>", encoding="utf-8"
    )
    (folder / "settings.xml").write_text("<settings><tube>Cu</tube></settings>")
    found = samples_in_folder(folder)
    assert "S7" in {entry.name for entry in found}
    assert "settings.xml" in {skip.file.name for skip in found.skipped}


def test_angle_scale_of_a_column(tmp_path: Path) -> None:
    # orders of SRM 675 (certificate, from memory; Cu K-alpha1), all read 0.1 degrees times cos(theta) too high
    x = np.arange(5, 50, 0.02)
    model = np.full_like(x, 80.0)
    for true in (8.853, 17.758, 26.774, 35.962, 45.397):
        seen = true + 0.1 * np.cos(np.radians(true) / 2)
        model += 3000 * np.exp(-4 * np.log(2) * ((x - seen) / 0.15) ** 2)
    rows = "\n".join(f"{a:.2f} {round(c)}" for a, c in zip(x, model, strict=True))
    (tmp_path / "M_AD.xy").write_text(rows)
    (entry,) = read_sheet(write(tmp_path, "sample,file,radiation,angle_scale\nM,M_AD.xy,CuKa1,Mica\n"))
    (scan,) = entry.load().scans
    assert x[0] - scan.two_theta[0] == pytest.approx(0.1, abs=0.02)
    assert "corrected for a displacement of +0.1" in scan.notes[-1]


def test_damaged_scan_in_a_folder_stays_a_sample(folder: Path) -> None:
    (folder / "S3_AD.csv").write_text(table(",", points=20))
    found = samples_in_folder(folder)
    with pytest.raises(ScanError, match="only 20 points"):
        next(entry for entry in found if entry.name == "S3").load()


def test_folder_with_a_sheet_uses_it(folder: Path) -> None:
    path = write(folder, "sample,file\nmine,S1_AD.xy\n")
    found = entries_from(folder)
    assert ([entry.name for entry in found], found.sheet) == (["mine"], path)


def test_folder_with_two_sheets(folder: Path) -> None:
    write(folder, "sample,file\nmine,S1_AD.xy\n")
    write(folder, "sample;file\nmine;S1_AD.xy\n", "other.csv")
    with pytest.raises(SheetError, match="holds 2 sample sheets"):
        entries_from(folder)


def test_empty_folder(tmp_path: Path) -> None:
    with pytest.raises(SheetError, match="no scans were found"):
        entries_from(tmp_path)


def test_sheet_or_single_file_or_nothing(folder: Path) -> None:
    path = write(folder, "sample,file\nmine,S1_AD.xy\n")
    assert [entry.name for entry in entries_from(path)] == ["mine"]
    (entry,) = entries_from(folder / "S1_EG.xy", radiation="Co")
    assert (entry.name, entry.rows[0].treatment.name, entry.load().scans[0].radiation.name) == ("S1", "glycolated", "Co")
    with pytest.raises(SheetError, match="no such file or folder"):
        entries_from(folder / "none.csv")


def test_entries_travel_to_workers(folder: Path) -> None:
    (entry,) = read_sheet(write(folder, "sample,file,depth_m\nmine,S1_AD.xy,3.5\n"))
    back = pickle.loads(pickle.dumps(entry))
    assert back.rows[0].path == entry.rows[0].path
    assert dict(back.details) == {"depth_m": "3.5"}
    assert back.load().details["depth_m"] == "3.5"


def test_real_folder(shared: Path) -> None:
    found = entries_from(shared / "measured" / "planetary")
    assert len(found) == 11
    assert len(found.skipped) == 9
