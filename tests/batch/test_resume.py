"""A second run does what is missing or changed and nothing else; one run at a time; every way a worker can fail."""

from __future__ import annotations

import json
import os
import socket
import sys
from dataclasses import dataclass, replace
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

import fake_batch
import fake_page
from fake_batch import FakeEntry, FakeRow
from fake_quick import QuickSettings, quick

import xrdmica.batch.resume
from xrdmica.batch.lock import LOCK_NAME, locked, refuse_if_locked
from xrdmica.batch.resume import digests_of, fingerprint_of, read_head
from xrdmica.batch.run import Progress, run_batch
from xrdmica.errors import XrdmicaError
from xrdmica.report.files import read_result


def go(entries, out: Path, **options) -> list[Progress]:
    """Run to the end; what was told."""
    told: list[Progress] = []
    options = {"settings": QuickSettings(), "analyse": quick, "figures": False} | options
    for _ in run_batch(entries, out, on_progress=told.append, **options):
        pass
    return told


def kept(told: list[Progress]) -> set[str]:
    return {progress.sample for progress in told if progress.kept}


def snapshot(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in sorted(folder.iterdir())}


def with_file(folder: Path, name: str, text: str) -> FakeEntry:
    path = folder / f"{name}.xy"
    path.write_text(text)
    return FakeEntry(name, (FakeRow(path),))


@pytest.fixture
def entries(tmp_path: Path) -> list[FakeEntry]:
    (tmp_path / "in").mkdir()
    return [with_file(tmp_path / "in", f"S{k}", f"{k} 1\n") for k in range(4)]


def test_nothing_is_done_twice(tmp_path: Path, entries: list[FakeEntry]) -> None:
    out = tmp_path / "out"
    assert kept(go(entries, out)) == set()
    first = {path: path.stat().st_mtime_ns for path in out.glob("S*.json")}
    before = snapshot(out)
    assert kept(go(entries, out)) == {"S0", "S1", "S2", "S3"}
    assert {path: path.stat().st_mtime_ns for path in out.glob("S*.json")} == first
    assert snapshot(out) == before
    assert kept(go(entries, out, redo=True)) == set()
    assert snapshot(out) == before


def test_what_changed_is_done_again(tmp_path: Path, entries: list[FakeEntry], monkeypatch: pytest.MonkeyPatch) -> None:
    out = tmp_path / "out"
    go(entries, out)
    (tmp_path / "in" / "S1.xy").write_text("other")
    assert kept(go(entries, out)) == {"S0", "S2", "S3"}
    changed = [replace(entries[0], details={"note": "new"}), *entries[1:]]
    assert kept(go(changed, out)) == {"S1", "S2", "S3"}
    (out / "S2.json").unlink()
    assert kept(go(changed, out)) == {"S0", "S1", "S3"}
    assert kept(go(changed, out, settings=QuickSettings(shade=1))) == set()
    assert kept(go(changed, out, settings=QuickSettings(shade=1))) == {"S0", "S1", "S2", "S3"}
    monkeypatch.setattr(xrdmica.batch.resume, "__version__", "99")
    assert kept(go(changed, out, settings=QuickSettings(shade=1))) == set()
    monkeypatch.setattr(xrdmica.batch.resume, "structures_digest", lambda: "other phase files")
    assert kept(go(changed, out, settings=QuickSettings(shade=1))) == set()


def test_a_file_that_a_setting_names_counts_by_its_content(tmp_path: Path, entries: list[FakeEntry]) -> None:
    one, two = tmp_path / "one.toml", tmp_path / "two.toml"
    one.write_text("a")
    two.write_text("a")
    go(entries, tmp_path / "out", settings=QuickSettings(instrument=str(one)))
    assert kept(go(entries, tmp_path / "out", settings=QuickSettings(instrument=str(two)))) == {"S0", "S1", "S2", "S3"}
    two.write_text("b")
    assert kept(go(entries, tmp_path / "out", settings=QuickSettings(instrument=str(two)))) == set()


@pytest.mark.parametrize("cut", [0, 100, -1, -40])
def test_a_damaged_result_is_made_again(tmp_path: Path, entries: list[FakeEntry], cut: int) -> None:
    out = tmp_path / "out"
    go(entries, out)
    before = snapshot(out)
    path = out / "S1.json"
    path.write_bytes(path.read_bytes()[:cut])
    assert kept(go(entries, out)) == {"S0", "S2", "S3"}
    assert snapshot(out) == before


def test_failed_samples_are_tried_again(tmp_path: Path) -> None:
    told = go([FakeEntry("S1"), FakeEntry("bad")], tmp_path)
    assert told[-1].failed == 1
    told = go([FakeEntry("S1"), FakeEntry("bad")], tmp_path)
    assert [(progress.sample, progress.kept) for progress in told] == [("S1", True), ("bad", False)]
    assert (tmp_path / "failures.csv").read_text().splitlines()[1] == "bad,ZeroDivisionError: a mistake in the program"


def test_a_file_that_changes_meanwhile(tmp_path: Path, entries: list[FakeEntry]) -> None:
    """Nobody knows which of the two was read: no result, and the next run makes it."""
    def slow(sample, settings):
        if sample.name == "S1" and not (tmp_path / "changed").exists():
            (tmp_path / "changed").write_text("")
            (tmp_path / "in" / "S1.xy").write_text("measured again")
        return quick(sample, settings)

    told = go(entries, tmp_path / "out", analyse=slow)
    assert [p.reason for p in told if p.reason] == [
        "its files changed while it was analysed: repeat the command when they are complete"
    ]
    assert kept(go(entries, tmp_path / "out", analyse=slow)) == {"S0", "S2", "S3"}
    assert (tmp_path / "out" / "S1.json").exists()


def test_a_missing_figure_is_drawn_from_the_result(tmp_path: Path, entries: list[FakeEntry]) -> None:
    go(entries[:2], tmp_path / "at once", figures=True)
    out = tmp_path / "later"
    go(entries[:2], out)
    stamp = (out / "S0.json").stat().st_mtime_ns
    go(entries[:2], out, figures=True)
    assert (out / "S0.json").stat().st_mtime_ns == stamp
    assert snapshot(out) == snapshot(tmp_path / "at once")
    go(entries[:2], out, figures=False)
    assert not list(out.glob("*.png"))
    assert not list(out.glob("*.svg"))


def test_pages(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "xrdmica.report.page", fake_page)
    entries = [FakeEntry("S1"), FakeEntry("bad"), FakeEntry("a/b")]
    go(entries, tmp_path, report=True)
    assert (tmp_path / "index.html").read_text().splitlines() == [
        "S1 S1.html ", "bad  ZeroDivisionError: a mistake in the program", "a/b a_b.html ",
    ]  # fmt: skip
    assert (tmp_path / "shared.js").exists()
    (tmp_path / "S1.html").unlink()
    go(entries, tmp_path, report=True)
    assert (tmp_path / "S1.html").read_text().startswith("<p>S1:")
    go(entries, tmp_path)
    assert not list(tmp_path.glob("*.html"))


def test_a_page_that_fails_keeps_the_result(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*arguments: object, **named: object) -> None:
        raise RuntimeError("no paper")

    monkeypatch.setitem(sys.modules, "xrdmica.report.page", fake_page)
    monkeypatch.setattr(fake_page, "write_sample_page", fails)
    (told,) = go([FakeEntry("S1")], tmp_path, report=True)
    assert told.finished
    assert told.reason == "the result is complete, but its page could not be written: no paper"


def test_results_are_those_of_the_files(tmp_path: Path) -> None:
    """Whether a result is fresh or kept, the iterator gives what the file has; without curves when they are not wanted."""
    options = {"settings": QuickSettings(), "analyse": quick, "figures": False}
    (fresh,) = run_batch([FakeEntry("S1")], tmp_path, **options)
    (again,) = run_batch([FakeEntry("S1")], tmp_path, **options)
    assert fresh == again == read_result(tmp_path / "S1.json")
    assert fresh.curves
    (bare,) = run_batch([FakeEntry("S1")], tmp_path, curves=False, **options)
    assert bare == fresh.model_copy(update={"curves": ()}) == read_head(tmp_path / "S1.json")


def test_fingerprint_is_independent_of_place_and_line(tmp_path: Path) -> None:
    @dataclass(frozen=True)
    class Row:
        path: Path
        line: int

    def fingerprint(row: Row) -> str:
        return fingerprint_of(FakeEntry("S", (row,)), digests_of([row.path]), "x")

    for place in ("one", "two"):
        (tmp_path / place).mkdir()
        (tmp_path / place / "a.xy").write_text("1 2")
    assert fingerprint(Row(tmp_path / "one" / "a.xy", 2)) == fingerprint(Row(tmp_path / "two" / "a.xy", 9))


# ---------------------------------------------------------------- the lock


def test_two_runs_at_once(tmp_path: Path) -> None:
    options = {"settings": QuickSettings(), "analyse": quick, "figures": False}
    first = run_batch([FakeEntry("S1"), FakeEntry("S2")], tmp_path, **options)
    late = run_batch([FakeEntry("S1")], tmp_path, **options)
    next(first)
    with pytest.raises(XrdmicaError, match="has a run under way there"):
        run_batch([FakeEntry("S1")], tmp_path, **options)
    with pytest.raises(XrdmicaError, match="has a run under way there"):
        next(late)
    first.close()
    assert not (tmp_path / LOCK_NAME).exists()
    go([FakeEntry("S1"), FakeEntry("S2")], tmp_path)


def lock_of(folder: Path, **changes: object) -> None:
    """Leave a lock as this process would write it, with changes."""
    with locked(folder):
        content = json.loads((folder / LOCK_NAME).read_text())
    (folder / LOCK_NAME).write_text(json.dumps(content | changes))


@pytest.mark.parametrize("changes", [{"start": "1"}, {"pid": 2**22 + 5}, {"boot": "another"}, {"pid": "x"}])
def test_stale_locks_are_taken_over(tmp_path: Path, changes: dict[str, object]) -> None:
    """The process is gone, its number was given to another, or the computer was started again since."""
    lock_of(tmp_path, **changes)
    refuse_if_locked(tmp_path)
    go([FakeEntry("S1")], tmp_path)
    assert not (tmp_path / LOCK_NAME).exists()
    assert not list(tmp_path.glob(".*"))


def test_an_unreadable_lock_is_stale(tmp_path: Path) -> None:
    (tmp_path / LOCK_NAME).write_text("{")
    go([FakeEntry("S1")], tmp_path)
    assert not (tmp_path / LOCK_NAME).exists()


def test_a_lock_of_another_computer_is_respected(tmp_path: Path) -> None:
    lock_of(tmp_path, host="elsewhere")
    with pytest.raises(XrdmicaError, match=r"another run writes there.*on elsewhere.*remove"):
        go([FakeEntry("S1")], tmp_path)
    assert (tmp_path / LOCK_NAME).exists()
    assert socket.gethostname() != "elsewhere"


def test_a_lock_of_another_process_is_respected(tmp_path: Path) -> None:
    from xrdmica.batch.lock import _start

    lock_of(tmp_path, pid=os.getppid(), start=_start(os.getppid()))
    with pytest.raises(XrdmicaError, match=f"process {os.getppid()} on "):
        go([FakeEntry("S1")], tmp_path)


# ---------------------------------------------------------------- workers in trouble


def test_workers_in_every_kind_of_trouble(tmp_path: Path) -> None:
    """One segfaults, one exits, one hangs asleep, one hangs at full speed, one raises: all others are complete."""
    names = ["S1", "segfault", "S2", "hang", "spin", "S3", "killer", "bug", "S4"]
    told = go([FakeEntry(n) for n in names], tmp_path, workers=2, time_limit=1.5, analyse=fake_batch.analyse)
    assert {progress.sample for progress in told if progress.finished} == {"S1", "S2", "S3", "S4"}
    reasons = {progress.sample: progress.reason or "" for progress in told if not progress.finished}
    assert "died by SIGSEGV" in reasons["segfault"] or sys.platform == "win32"
    assert "exit code 7" in reasons["killer"]
    assert reasons["hang"] == reasons["spin"] == "it was stopped after the time limit of 1.5 s"
    assert reasons["bug"] == "ZeroDivisionError: a mistake in the program"
    rows = (tmp_path / "failures.csv").read_text().splitlines()[1:]
    assert [row.split(",")[0] for row in rows] == ["segfault", "hang", "spin", "killer", "bug"]


def test_time_limit_needs_no_second_worker(tmp_path: Path) -> None:
    told = go([FakeEntry("hang"), FakeEntry("S1")], tmp_path, time_limit=0.5, analyse=fake_batch.analyse)
    assert [(progress.sample, progress.finished) for progress in told] == [("hang", False), ("S1", True)]
    with pytest.raises(XrdmicaError, match="above 0"):
        go([FakeEntry("S1")], tmp_path, time_limit=0)


def test_a_script_needs_no_guard(tmp_path: Path) -> None:
    """Workers do not import the script that starts them, and a notebook has none to import."""
    import subprocess

    root = Path(__file__).resolve().parents[2]
    script = tmp_path / "script.py"
    script.write_text(
        f"import sys; sys.path[:0] = [{str(root)!r}, {str(root / 'tests' / 'helpers')!r}]\n"
        "from fake_quick import quick, QuickSettings\nfrom fake_batch import FakeEntry\nimport xrdmica as xm\n"
        "entries = [FakeEntry(n) for n in 'abcd']\n"
        f"for r in xm.run_batch(entries, {str(tmp_path / 'out')!r}, workers=2, settings=QuickSettings(), analyse=quick,\n"
        "                      figures=False):\n    print(r.sample)\n"
    )
    done = subprocess.run([sys.executable, str(script)], capture_output=True, text=True, timeout=60, check=True)
    assert sorted(done.stdout.split()) == ["a", "b", "c", "d"]
    done = subprocess.run([sys.executable, "-"], input=script.read_text(), capture_output=True, text=True, timeout=60, check=True)
    assert sorted(done.stdout.split()) == ["a", "b", "c", "d"]


def test_a_function_that_workers_cannot_find(tmp_path: Path) -> None:
    def local(sample: object, settings: object) -> None: ...

    (one, _) = go([FakeEntry("S1"), FakeEntry("S2")], tmp_path, workers=2, analyse=local)
    assert not one.finished
    assert "cannot be sent to a worker process" in (one.reason or "")
