"""``xrdmica batch`` with a stand-in for the analysis."""

from __future__ import annotations

import csv
import json
import os
import subprocess
import sys
from pathlib import Path

import fake_program
import pytest
from click.testing import CliRunner, Result

from xrdmica.cli.main import main

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(autouse=True)
def stand_ins(monkeypatch: pytest.MonkeyPatch) -> None:
    for name, module in fake_program.modules().items():
        monkeypatch.setitem(sys.modules, name, module)


def sheet(folder: Path, *names: str) -> Path:
    path = folder / "sheet.csv"
    files = ["x.xy", *(f"x{k}.xy" for k in range(1, len(names)))]
    for file in files:
        (folder / file).write_text("".join(f"{3 + 0.1 * k:.1f} {100 + k % 7}\n" for k in range(200)))
    with path.open("w", encoding="utf-8", newline="") as stream:
        csv.writer(stream).writerows([("sample", "file"), *zip(names, files, strict=False)])
    return path


def call(*arguments: object) -> Result:
    return CliRunner().invoke(main, ["batch", *map(str, arguments)])


def test_all_well(tmp_path: Path) -> None:
    result = call(sheet(tmp_path, "S1", "S2"), "--out", tmp_path / "out", "--workers", 1)
    assert result.exit_code == 0, result.output
    rows = [line for line in result.stdout.splitlines() if line.startswith(("S1", "S2"))]
    assert len(rows) == 2
    assert "YES, 18.2 % expandable" in rows[0]
    assert "Illite 41.3" in rows[0]
    words = " ".join(result.stdout.split())
    assert "screening result" in words
    assert words.count("The swelling verdict is a screening result.") == 1
    assert str(tmp_path / "out") in words
    assert [line.split(" (")[0] for line in result.stderr.splitlines()] == ["[1/2] S1", "[2/2] S2"]
    assert (tmp_path / "out" / "S1.png").exists()


def test_options_reach_the_run(tmp_path: Path) -> None:
    arguments = ["--out", tmp_path / "out", "--radiation", "Co", "--phase", "illite", "--no-figures", "--workers", 1]
    assert call(sheet(tmp_path, "S1"), *arguments).exit_code == 0
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    assert record["settings"]["radiation"] == "Co"
    assert record["settings"]["phases"] == ["illite"]
    assert record["sheets"] == ["sheet.csv"]
    assert not (tmp_path / "out" / "S1.png").exists()


def test_some_fail(tmp_path: Path) -> None:
    result = call(sheet(tmp_path, "S1", "bad", "S2"), "--out", tmp_path / "out", "--workers", 1, "--no-figures")
    assert result.exit_code == 1
    assert "[2/3] bad: FAILED: sample bad: nothing to fit: measure it again" in result.stderr
    assert result.stderr.splitlines()[-1].startswith("xrdmica: 1 of 3 samples failed, reasons in ")
    assert "S1" in result.stdout
    assert "S2" in result.stdout


def test_quiet(tmp_path: Path) -> None:
    result = call(sheet(tmp_path, "S1"), "--out", tmp_path / "out", "--workers", 1, "--quiet", "--no-figures")
    assert (result.exit_code, result.output) == (0, "")


def test_wrong_use(tmp_path: Path) -> None:
    assert call(tmp_path / "none.csv", "--out", tmp_path / "out").exit_code == 2
    assert call(sheet(tmp_path, "S1")).exit_code == 2
    assert call(sheet(tmp_path, "S1"), "--out", tmp_path / "out", "--workers", 0).exit_code == 2
    unknown = call(sheet(tmp_path, "S1"), "--out", tmp_path / "out", "--phase", "unobtainium")
    assert unknown.exit_code == 2
    assert unknown.stderr.startswith("xrdmica: phase 'unobtainium' is not in the library")
    empty = call(sheet(tmp_path), "--out", tmp_path / "out")
    assert empty.exit_code == 2
    assert "no rows" in empty.stderr
    assert len(empty.stderr.splitlines()) == 1


def test_output_that_cannot_be_used_is_one_sentence(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x")
    for out in (tmp_path / "file", tmp_path / "file" / "below"):
        result = call(sheet(tmp_path, "S1"), "--out", out)
        assert result.exit_code == 2
        assert result.stderr.startswith("xrdmica: ")
        assert len(result.stderr.splitlines()) == 1
    result = call(sheet(tmp_path, "S1"), "--out", tmp_path)
    assert result.exit_code == 2
    assert "is the folder with the scans" in result.stderr


def test_folder_without_permission(unprivileged: Path) -> None:
    (unprivileged / "closed").mkdir(mode=0o500)
    result = call(sheet(unprivileged, "S1"), "--out", unprivileged / "closed" / "out")
    assert result.exit_code == 2
    assert "cannot be written" in result.stderr


def test_odd_names(tmp_path: Path) -> None:
    names = ["<script>", "=cmd()", "x" * 200, "عينة", "样品", "$x_y$", "[red]"]
    result = call(sheet(tmp_path, *names), "--out", tmp_path / "out", "--workers", 1)
    assert result.exit_code == 0, result.output
    for name in names:
        assert name[:20] in result.stdout
    assert len(list((tmp_path / "out").glob("*.png"))) == len(names)


def test_real_process_with_workers(tmp_path: Path) -> None:
    path = sheet(tmp_path, "slow", "S1", "bad", "S2")
    command = [sys.executable, str(ROOT / "tests" / "helpers" / "fake_program.py"), "batch", str(path)]
    done = subprocess.run(
        [*command, "--out", str(tmp_path / "out"), "--workers", "2", "--no-figures"],
        capture_output=True, text=True, encoding="utf-8", timeout=120,
        env={**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"},
    )  # fmt: skip
    assert done.returncode == 1, done.stderr
    order = [line.split()[0] for line in done.stdout.splitlines() if line.startswith(("slow", "S1", "S2"))]
    assert order == ["slow", "S1", "S2"]
    assert "1 of 4 samples failed" in done.stderr
    assert "\x1b" not in done.stdout + done.stderr


def test_folder_with_a_file_that_is_no_scan(tmp_path: Path) -> None:
    sheet(tmp_path).unlink()
    (tmp_path / "x.xy").rename(tmp_path / "S1_AD.xy")
    (tmp_path / "chemistry.csv").write_text("sample,SiO2\nS1,45.2\n")
    result = call(tmp_path, "--out", tmp_path / "out", "--workers", 1, "--no-figures", "--quiet")
    assert result.exit_code == 0, result.output
    assert result.stderr.startswith("not read: chemistry.csv: ")
    record = json.loads((tmp_path / "out" / "run.json").read_text())
    assert [item["file"] for item in record["not_read"]] == ["chemistry.csv"]
    assert [s["inputs"][0]["file"] for s in record["samples"]] == ["S1_AD.xy"]


def test_files_outside_the_folder_of_the_sheet(tmp_path: Path) -> None:
    sheet(tmp_path)
    below = tmp_path / "sheets"
    below.mkdir()
    (below / "s.csv").write_text("sample,file\nS1,../x.xy\n")
    arguments = [below / "s.csv", "--out", tmp_path / "out", "--workers", 1, "--no-figures"]
    assert call(*arguments).exit_code == 2
    assert call(*arguments, "--allow-outside").exit_code == 0


def test_again_and_redo(tmp_path: Path) -> None:
    arguments = [sheet(tmp_path, "S1", "bad"), "--out", tmp_path / "out", "--workers", 1, "--no-figures"]
    assert call(*arguments).exit_code == 1
    again = call(*arguments)
    assert again.exit_code == 1
    assert again.stderr.splitlines()[0] == "[1/2] S1 (kept)"
    assert again.stdout.startswith(call(*arguments, "--redo").stdout[:200])
    assert "(kept)" not in call(*arguments, "--redo").stderr


def test_several_sources_and_patterns(tmp_path: Path) -> None:
    sheet(tmp_path, "S1", "S2")
    (tmp_path / "more").mkdir()
    for name in ("T1_AD.xy", "T1_EG.xy", "T2_AD.xy"):
        (tmp_path / "more" / name).write_bytes((tmp_path / "x.xy").read_bytes())
    result = call(tmp_path / "sheet.csv", tmp_path / "more" / "T*.xy", "--out", tmp_path / "out", "--workers", 1, "--no-figures")
    assert result.exit_code == 0, result.output
    told = [line.split(" (")[0] for line in result.stderr.splitlines()]
    assert told == ["[1/4] S1", "[2/4] S2", "[3/4] T1", "[4/4] T2"]
    nothing = call(tmp_path / "no*.xy", "--out", tmp_path / "out")
    assert nothing.exit_code == 2
    assert "matches nothing" in nothing.stderr


def test_report_bom_and_time_limit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import fake_page

    monkeypatch.setitem(sys.modules, "xrdmica.report.page", fake_page)
    arguments = [sheet(tmp_path, "S1"), "--out", tmp_path / "out", "--report", "--bom", "--workers", 1]
    result = call(*arguments)
    assert result.exit_code == 0, result.output
    assert "index.html: overview" in result.stdout
    assert (tmp_path / "out" / "S1.html").exists()
    assert (tmp_path / "out" / "summary.csv").read_bytes().startswith(b"\xef\xbb\xbf")
    assert call(*arguments, "--time-limit", 0).exit_code == 2


def test_time_limit(tmp_path: Path) -> None:
    path = sheet(tmp_path, "hang", "S1")
    command = [sys.executable, str(ROOT / "tests" / "helpers" / "fake_program.py"), "batch", str(path), "--time-limit", "1"]
    done = subprocess.run(
        [*command, "--out", str(tmp_path / "out"), "--workers", "1", "--no-figures"],
        capture_output=True, text=True, timeout=60, env={**os.environ, "PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    assert done.returncode == 1
    assert "hang: FAILED: it was stopped after the time limit of 1 s" in done.stderr


def test_two_runs_into_one_folder(tmp_path: Path) -> None:
    from xrdmica.batch.lock import locked

    (tmp_path / "out").mkdir()
    with locked(tmp_path / "out"):
        result = call(sheet(tmp_path, "S1"), "--out", tmp_path / "out")
    assert result.exit_code == 2
    assert len(result.stderr.splitlines()) == 1


def test_drafted_sheet(tmp_path: Path) -> None:
    sheet(tmp_path).unlink()
    (tmp_path / "x.xy").rename(tmp_path / "S1_AD.xy")
    result = call(tmp_path, "--write-sheet", tmp_path / "new.csv")
    assert result.exit_code == 0, result.output
    assert "Check sample, mount and treatment" in result.stderr
    assert f"xrdmica batch {tmp_path / 'new.csv'} --out DIR" in result.stderr
    assert "S1,S1_AD.xy,oriented,air_dried" in (tmp_path / "new.csv").read_text(encoding="utf-8")
    assert call(tmp_path / "new.csv", "--write-sheet", tmp_path / "other.csv").exit_code == 2
    assert call(tmp_path, tmp_path, "--write-sheet", tmp_path / "other.csv").exit_code == 2
    assert call(tmp_path).exit_code == 2


def test_pace() -> None:
    from xrdmica.batch.run import Progress
    from xrdmica.cli.batch_progress import Pace

    now = [0.0]
    pace = Pace(lambda: now[0])

    def words(done: int, seconds: float, failed: int = 0, kept: bool = False) -> str:
        now[0] = seconds
        return pace.words(Progress("S", done, done, 100, None, True, failed, kept))

    assert words(1, 0.5, kept=True) == ""
    assert words(2, 2.0) == ""
    assert words(3, 4.0, failed=1) == "1 failed, 30.0/min, 3 min 14 s left"
    assert words(100, 10.0) == "9.9/s"
    now[0] = 0.0
    slow = Pace(lambda: now[0])
    now[0] = 7200.0
    assert slow.words(Progress("S", 1, 2, 100, None, True)) == "1.0/h, 98 h 00 min left"


def test_bar_on_a_terminal(tmp_path: Path) -> None:
    """A pseudo-terminal on stderr gets a bar that moves; nothing of it reaches stdout."""
    pty = pytest.importorskip("pty", reason="needs a pseudo-terminal")
    path = sheet(tmp_path, "S1", "bad", "S2", "slow")
    parent, child = pty.openpty()
    command = [sys.executable, str(ROOT / "tests" / "helpers" / "fake_program.py"), "batch", str(path)]
    run = subprocess.Popen(
        [*command, "--out", str(tmp_path / "out"), "--workers", "1", "--no-figures"],
        stdout=subprocess.PIPE, stderr=child, env={**os.environ, "PYTHONPATH": str(ROOT), "TERM": "xterm", "COLUMNS": "120"},
    )  # fmt: skip
    os.close(child)
    seen = b""
    while True:
        try:
            data = os.read(parent, 65536)
        except OSError:
            break
        if not data:
            break
        seen += data
    out, _ = run.communicate(timeout=60)
    assert run.returncode == 1
    assert b"4/4" in seen
    assert b"1 failed" in seen
    assert b"nothing to fit" in seen
    assert b"\x1b[" in seen
    assert b"\x1b[?25" not in out
