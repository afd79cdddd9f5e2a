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
    assert result.stderr.splitlines() == ["[1/2] S1", "[2/2] S2"]
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
