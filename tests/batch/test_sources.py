"""Sheets, folders, files and patterns together."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.scans.scan_texts import table
from xrdmica.batch.sources import gather
from xrdmica.errors import SheetError


@pytest.fixture
def place(tmp_path: Path) -> Path:
    for name in ("a/S1_AD.xy", "a/S1_EG.xy", "a/S2_AD.xy", "a/S10_AD.xy", "b/T1_AD.xy", "b/deep/U1_AD.xy", "b/deep/U1_EG.xy"):
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_text(table())
    (tmp_path / "a" / "README.md").write_text("about")
    (tmp_path / "c").mkdir()
    (tmp_path / "c" / "V1.xy").write_text(table())
    (tmp_path / "c" / "sheet.csv").write_text("sample,file\nV,V1.xy\n")
    return tmp_path


def names(*sources: str | Path) -> list[str]:
    return [entry.name for entry in gather(sources)]


def test_several_sources_in_their_order(place: Path) -> None:
    found = gather([place / "c" / "sheet.csv", place / "b", place / "a"])
    assert [entry.name for entry in found] == ["V", "T1", "S1", "S2", "S10"]
    assert found.sheets == (place / "c" / "sheet.csv",)
    assert len(found) == 5


def test_patterns(place: Path) -> None:
    assert names(f"{place}/a/*.xy") == ["S1", "S2", "S10"]
    assert names(f"{place}/a/S[12]_*") == ["S1", "S2"]
    assert names(f"{place}/*/S1_??.xy") == ["S1"]
    assert sorted(names(f"{place}/[ab]/**/*.xy")) == ["S1", "S10", "S2", "T1", "U1"]
    (entry,) = gather(f"{place}/a/S1_*")
    assert [row.treatment.name for row in entry.rows] == ["air_dried", "glycolated"]
    assert names(f"{place}/?") == ["S1", "S2", "S10", "T1", "V"]
    assert names(f"{place}/*/*.csv") == ["V"]


def test_what_a_pattern_also_matches_is_told(place: Path) -> None:
    found = gather(f"{place}/a/*")
    assert [item.file.name for item in found.skipped] == ["README.md"]
    assert len(found) == 3
    (place / "a" / "summary.csv").write_text("sample,swelling\nS1,yes\n")
    found = gather(f"{place}/a/*.*")
    assert [item.file.name for item in found.skipped] == ["README.md", "summary.csv"]


def test_files_one_by_one_make_samples(place: Path) -> None:
    assert names(place / "a" / "S1_AD.xy", place / "a" / "S1_EG.xy", place / "b" / "T1_AD.xy") == ["S1", "T1"]
    (entry,) = gather([place / "a" / "S1_AD.xy", f"{place}/a/S1_*"])
    assert len(entry.rows) == 2


def test_a_name_with_brackets_is_no_pattern(tmp_path: Path) -> None:
    (tmp_path / "S[1]_AD.xy").write_text(table())
    assert len(gather(tmp_path / "S[1]_AD.xy")) == 1


def test_refusals(place: Path) -> None:
    with pytest.raises(SheetError, match="the pattern matches nothing"):
        gather(f"{place}/z/*.xy")
    with pytest.raises(SheetError, match="no such file or folder"):
        gather(place / "nothing")
    (place / "d").mkdir()
    (place / "d" / "S1_AD.xy").write_text(table())
    with pytest.raises(SheetError, match=r"sample S1 stands twice: .*a and .*d"):
        gather([place / "a", place / "d"])
    with pytest.raises(SheetError, match="sample S1 stands twice"):
        gather(f"{place}/*/S1_AD.xy")
