"""``xrdmica identify`` and ``xrdmica estimate`` with a stand-in for the analysis."""

from __future__ import annotations

import csv
import json
import sys
from pathlib import Path

import fake_program
import numpy as np
import pytest
from click.testing import CliRunner, Result

from xrdmica.cli.inputs import entries_of
from xrdmica.cli.main import main
from xrdmica.errors import ScanError, SheetError
from xrdmica.report.files import read_result


@pytest.fixture(autouse=True)
def stand_ins(monkeypatch: pytest.MonkeyPatch) -> None:
    for name, module in fake_program.modules().items():
        monkeypatch.setitem(sys.modules, name, module)


def scan_file(path: Path) -> Path:
    angle = np.arange(3, 30, 0.1)
    path.write_text("".join(f"{a:.2f} {100 + 50 * np.exp(-((a - 8.8) ** 2)):.0f}\n" for a in angle))
    return path


@pytest.fixture
def scans(tmp_path: Path) -> list[Path]:
    return [scan_file(tmp_path / name) for name in ("S12_AD.xy", "S12_EG.xy")]


@pytest.fixture
def sheet(tmp_path: Path) -> Path:
    for name in ("x", "y", "z"):
        scan_file(tmp_path / f"{name}.xy")
    path = tmp_path / "sheet.csv"
    path.write_text("sample,file\nS1,x.xy\nbad,y.xy\nS2,z.xy\n")
    return path


def call(*arguments: object) -> Result:
    return CliRunner().invoke(main, [str(a) for a in arguments])


def test_identify_prints_and_writes_evidence(scans: list[Path], tmp_path: Path) -> None:
    result = call("identify", *scans, "--json", tmp_path / "f.json", "--csv", tmp_path / "f.csv")
    assert result.exit_code == 0, result.output
    assert result.stdout.startswith("Sample S12\n")
    assert "10 angstrom lines that no treatment moves" in result.stdout
    assert "wrote" in result.stderr
    data = json.loads((tmp_path / "f.json").read_text())
    assert data["sample"] == "S12"
    with (tmp_path / "f.csv").open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [row["weight"] for row in rows if row["phase"] == "illite"] == ["3.1", "2", "-0.6"]
    assert [row["d_observed"] for row in rows if row["phase"] == "illite"] == ["10.0200", "", ""]
    assert [row["reason"] for row in rows if row["phase"] == "vermiculite"] == ["nothing at 14.3 angstrom collapses to 10"]


def test_estimate_prints_and_writes_everything(scans: list[Path], tmp_path: Path) -> None:
    files = {"--json": tmp_path / "r.json", "--csv": tmp_path / "r.csv", "--figure": tmp_path / "r.svg"}
    result = call("estimate", *scans, *(part for pair in files.items() for part in pair))
    assert result.exit_code == 0, result.output
    assert "Swelling: YES" in result.stdout
    assert read_result(files["--json"]).sample == "S12"
    assert files["--csv"].read_text().startswith("sample,phase,name,group,status,weight_percent")
    assert "<svg" in files["--figure"].read_text()


def test_several_samples_and_one_that_fails(sheet: Path, tmp_path: Path) -> None:
    result = call("estimate", sheet, "--json", tmp_path / "r.json")
    assert result.exit_code == 1
    assert "Sample S1\n" in result.stdout
    assert "Sample S2\n" in result.stdout
    assert result.stderr.splitlines()[0] == "xrdmica: sample bad: nothing to fit: measure it again"
    assert [r["sample"] for r in json.loads((tmp_path / "r.json").read_text())] == ["S1", "S2"]


def test_only_sample_that_fails_is_an_error(sheet: Path) -> None:
    result = call("identify", sheet, "--sample", "bad")
    assert (result.exit_code, result.stdout) == (2, "")
    assert result.stderr == "xrdmica: sample bad: nothing to fit: measure it again\n"


def test_choice_of_a_sample(sheet: Path) -> None:
    result = call("estimate", sheet, "--sample", "S2")
    assert result.exit_code == 0
    assert "Sample S2" in result.stdout
    assert "Sample S1" not in result.stdout
    missing = call("estimate", sheet, "--sample", "S9")
    assert missing.exit_code == 2
    assert "has no sample 'S9'" in missing.stderr
    assert "S1" in missing.stderr


def test_wrong_use(sheet: Path, scans: list[Path], tmp_path: Path) -> None:
    assert call("estimate").exit_code == 2
    two = call("estimate", sheet, "--figure", tmp_path / "f.png")
    assert two.exit_code == 2
    assert "--sample" in two.stderr
    suffix = call("estimate", *scans, "--figure", tmp_path / "f.bmp")
    assert suffix.exit_code == 2
    assert ".png, .svg or .pdf" in suffix.stderr
    mixed = call("identify", sheet, scans[0])
    assert mixed.exit_code == 2
    assert "sample sheet among several paths" in mixed.stderr
    unwritable = call("identify", *scans, "--json", scans[0] / "x.json")
    assert unwritable.exit_code == 2
    assert "cannot be written" in unwritable.stderr


def test_files_are_one_sample_with_treatments(scans: list[Path], tmp_path: Path) -> None:
    (entry,) = entries_of([str(p) for p in scans], radiation="Co", sample=None)
    sample = entry.load()
    assert sample.name == "S12"
    assert [scan.treatment.name for scan in sample.scans] == ["air_dried", "glycolated"]
    assert {scan.radiation.name for scan in sample.scans} == {"Co"}
    assert {scan.radiation_origin for scan in sample.scans} == {"option"}


def test_treatment_behind_a_colon(tmp_path: Path) -> None:
    path = scan_file(tmp_path / "scan7.xy")
    (entry,) = entries_of([f"{path}:heated_550", f"{path}:EG"], radiation=None, sample="mine")
    sample = entry.load()
    assert sample.name == "mine"
    assert [scan.label for scan in sample.scans] == ["heated_550", "glycolated"]
    with pytest.raises(SheetError, match=r"scan7\.xy: treatment 'boiled' is not known"):
        entries_of([f"{path}:boiled"], radiation=None, sample=None)
    colon = scan_file(tmp_path / "odd:AD.xy")
    assert entries_of([str(colon)], radiation=None, sample=None)[0].load().scans[0].source == str(colon)


def test_files_of_different_names_are_told(tmp_path: Path) -> None:
    paths = [scan_file(tmp_path / name) for name in ("A_AD.xy", "B_EG.xy")]
    (entry,) = entries_of([str(p) for p in paths], radiation=None, sample=None)
    assert entry.load().notes == ("files named A, B were taken as one sample",)


def test_missing_file_is_told(tmp_path: Path) -> None:
    (entry,) = entries_of([str(tmp_path / "none.xy") + ":EG"], radiation=None, sample=None)
    with pytest.raises(ScanError, match=r"none\.xy: there is no such file"):
        entry.load()


def test_scans_are_listed_with_their_tube(scans: list[Path]) -> None:
    text = call("identify", *scans).stdout
    row = next(line for line in text.splitlines() if line.strip().startswith("glycolated"))
    assert row.split()[1:4] == ["oriented", "Cu", "ASSUMED"]
    assert "! Radiation Cu is ASSUMED for air_dried, glycolated" in text
    assert "ASSUMED" not in call("identify", *scans, "--radiation", "Co").stdout


def test_instrument_file(scans: list[Path], tmp_path: Path) -> None:
    good, wrong, broken = (tmp_path / name for name in ("good.toml", "wrong.toml", "broken.toml"))
    good.write_text("goniometer_radius = 200\n")
    assert call("identify", *scans, "--instrument", good).exit_code == 0
    wrong.write_text("radius = 200\n")
    broken.write_text("radius = \n")
    for path, says in ((wrong, "radius: "), (broken, "broken.toml")):
        result = call("identify", *scans, "--instrument", path)
        assert result.exit_code == 2
        assert says in result.stderr
        assert len(result.stderr.splitlines()) == 1
