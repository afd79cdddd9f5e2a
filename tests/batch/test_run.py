"""A batch: every sample written at once, one bad sample stops nothing, tables independent of the workers."""

from __future__ import annotations

import csv
import hashlib
import json
import sys
from dataclasses import fields
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

from fake_batch import FakeEntry, FakeRow, FakeSettings, analyse

from xrdmica.batch.run import Progress, run_batch
from xrdmica.errors import XrdmicaError
from xrdmica.report.files import read_result

SETTINGS = FakeSettings()


def go(entries, out: Path, **options):
    options = {"settings": SETTINGS, "analyse": analyse, "figures": False} | options
    return run_batch(entries, out, **options)


def table(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def snapshot(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in sorted(folder.iterdir())}


def test_files_of_a_batch(tmp_path: Path) -> None:
    entries = [FakeEntry("S2"), FakeEntry("S1")]
    results = list(go(entries, tmp_path / "out", figures=True))
    assert [r.sample for r in results] == ["S2", "S1"]
    names = {"S1.json", "S1.png", "S2.json", "S2.png", "proportions.csv", "groups.csv", "summary.csv", "run.json"}
    names |= {"indices.csv", "proportions_wide.csv", "proportions.svg", "ternary.svg"}
    assert set(snapshot(tmp_path / "out")) == names
    assert read_result(tmp_path / "out" / "S1.json").curves
    rows = table(tmp_path / "out" / "proportions.csv")
    assert list(dict.fromkeys(row["sample"] for row in rows)) == ["S2", "S1"]
    for sample in ("S1", "S2"):
        weights = [float(r["weight_percent"]) for r in rows if r["sample"] == sample and r["weight_percent"]]
        assert sum(weights) == pytest.approx(100)


def test_results_are_written_as_they_come(tmp_path: Path) -> None:
    results = go([FakeEntry("S1"), FakeEntry("S2")], tmp_path)
    assert not list(tmp_path.iterdir())
    next(results)
    assert set(snapshot(tmp_path)) == {"S1.json", ".xrdmica-lock"}
    list(results)
    assert "summary.csv" in snapshot(tmp_path)


@pytest.mark.parametrize("workers", [None, 2])
def test_bad_samples_are_reported_and_the_others_finish(tmp_path: Path, workers: int | None) -> None:
    names = ["S1", "bad", "S2", "bug", "S3"] + (["killer"] if workers else [])
    told: list[Progress] = []
    results = list(go([FakeEntry(n) for n in names], tmp_path, workers=workers, on_progress=told.append))
    assert sorted(r.sample for r in results) == ["S1", "S2", "S3"]
    failed = table(tmp_path / "failures.csv")
    assert [row["sample"] for row in failed] == [n for n in names if not n.startswith("S")]
    assert failed[0]["reason"] == "sample bad: nothing to fit: measure it again"
    assert failed[1]["reason"] == "ZeroDivisionError: a mistake in the program"
    assert sorted(t.sample for t in told) == sorted(names)
    assert [t.done for t in told] == list(range(1, len(names) + 1))
    assert {t.sample for t in told if not t.finished} == {row["sample"] for row in failed}
    record = json.loads((tmp_path / "run.json").read_text(encoding="utf-8"))
    assert [s["status"] for s in record["samples"]][:2] == ["done", "failed"]


def test_number_of_workers_changes_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # somebody may be editing phase files meanwhile
    monkeypatch.setattr("xrdmica.batch.resume.structures_digest", lambda: None)
    entries = [FakeEntry(n) for n in ("slow", "S1", "bad", "S2", "عينة", "a/b")]
    for workers in (1, 2):
        list(go(entries, tmp_path / str(workers), workers=workers, figures=True))
    assert snapshot(tmp_path / "1") == snapshot(tmp_path / "2")


def test_old_failures_go_and_other_samples_stay(tmp_path: Path) -> None:
    list(go([FakeEntry("S1"), FakeEntry("bad")], tmp_path))
    assert (tmp_path / "failures.csv").exists()
    list(go([FakeEntry("S2")], tmp_path))
    assert not (tmp_path / "failures.csv").exists()
    assert (tmp_path / "S1.json").exists()
    assert {row["sample"] for row in table(tmp_path / "summary.csv")} == {"S2"}


def test_a_failed_sample_keeps_no_stale_result(tmp_path: Path) -> None:
    list(go([FakeEntry("S1")], tmp_path, figures=True))

    def fails(sample, settings):
        raise XrdmicaError("no", fix="try again")

    list(go([FakeEntry("S1")], tmp_path, figures=True, analyse=fails))
    assert not (tmp_path / "S1.json").exists()
    assert not (tmp_path / "S1.png").exists()


def test_without_figures_an_old_figure_goes(tmp_path: Path) -> None:
    list(go([FakeEntry("S1")], tmp_path, figures=True))
    list(go([FakeEntry("S1")], tmp_path, figures=False))
    assert not (tmp_path / "S1.png").exists()


def test_a_figure_that_fails_keeps_the_result(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import xrdmica.report.figures

    def fails(result):
        raise RuntimeError("no paper")

    monkeypatch.setattr(xrdmica.report.figures, "sample_figure", fails)
    told: list[Progress] = []
    assert len(list(go([FakeEntry("S1")], tmp_path, figures=True, on_progress=told.append))) == 1
    assert told[0].finished
    assert "no paper" in (told[0].reason or "")
    assert (tmp_path / "S1.json").exists()
    assert "figure could not be drawn" in table(tmp_path / "failures.csv")[0]["reason"]


def test_odd_names_stay_inside_the_folder(tmp_path: Path) -> None:
    names = ["../up", "a/b", "a_b", "<script>", "=cmd()", "x" * 300, "عينة", "样品", "$x_y$", "run", ".."]
    list(go([FakeEntry(n) for n in names], tmp_path / "out"))
    assert [p.name for p in tmp_path.iterdir()] == ["out"]
    written = [p for p in (tmp_path / "out").glob("*.json") if p.name != "run.json"]
    assert {read_result(p).sample for p in written} == set(names)
    record = json.loads((tmp_path / "out" / "run.json").read_text(encoding="utf-8"))
    for sample in record["samples"]:
        assert read_result(tmp_path / "out" / sample["result"]).sample == sample["sample"]
    assert {row["sample"] for row in table(tmp_path / "out" / "summary.csv")} == set(names) - {"=cmd()"} | {"'=cmd()"}


def test_record_of_the_run(tmp_path: Path) -> None:
    scan = tmp_path / "in" / "S1.xy"
    scan.parent.mkdir()
    scan.write_bytes(b"1 2\n")
    rows = (FakeRow(scan), FakeRow(tmp_path / "in" / "missing.xy"))
    list(go([FakeEntry("S1", rows)], tmp_path / "out", settings=FakeSettings(radiation="Co")))
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    given = {"radiation": "Co", "phases": [], "instrument": None, "curves": True}
    assert given.items() <= record["settings"].items()
    assert set(record["settings"]) == {field.name for field in fields(FakeSettings)}
    inputs = record["samples"][0]["inputs"]
    assert inputs == [
        {"file": "S1.xy", "sha256": hashlib.sha256(b"1 2\n").hexdigest()},
        {"file": "missing.xy", "sha256": None},
    ]
    assert record["packages"]["numpy"]
    assert record["version"]
    assert str(tmp_path) not in (tmp_path / "out" / "run.json").read_text()


def test_output_folders_that_are_refused(tmp_path: Path) -> None:
    scan = tmp_path / "in" / "S1.xy"
    scan.parent.mkdir()
    scan.write_text("1 2\n")
    entry = FakeEntry("S1", (FakeRow(scan),))
    with pytest.raises(XrdmicaError, match="is a file, not a folder"):
        go([entry], scan)
    with pytest.raises(XrdmicaError, match="is the folder with the scans"):
        go([entry], scan.parent)
    with pytest.raises(XrdmicaError, match="cannot be written"):
        go([entry], scan / "below")
    table_of_scans = tmp_path / "out" / "summary.csv"
    table_of_scans.parent.mkdir()
    table_of_scans.write_text("x")
    with pytest.raises(XrdmicaError, match=r"overwrite the input summary\.csv"):
        go([FakeEntry("S1", (FakeRow(table_of_scans),))], table_of_scans.parent)
    assert table_of_scans.read_text() == "x"
