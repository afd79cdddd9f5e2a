"""The commands `screen` and `profile`, and what indices and analyses add to `estimate`."""

from __future__ import annotations

import csv
import json
import shutil
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from xrdmica.cli.main import main
from xrdmica.paths import data_folder
from xrdmica.report.files import read_result


def call(*arguments: str) -> Result:
    return CliRunner().invoke(main, list(arguments))


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two demo samples with depth, clay fraction, index tests and an analysis."""
    out = tmp_path_factory.mktemp("soil")
    rows = ["sample,file,mount,treatment,radiation,depth_m,clay_percent,liquid_limit,plastic_limit,chemistry"]
    for name, depth, clay, suffix in (("GB1-04.2", 4.2, 35, ".xy"), ("TQ-A", 9.5, 20, ".xye")):
        for state, text in (("AD", "air_dried"), ("EG", "glycolated"), ("550", "heated_550")):
            shutil.copy(data_folder("demo_patterns") / f"{name}_{state}{suffix}", out)
            rows.append(f"{name},{name}_{state}{suffix},oriented,{text},Cu,{depth},{clay},62,27,oxides.csv")
    (out / "samples.csv").write_text("\n".join(rows) + "\n")
    (out / "oxides.csv").write_text(
        "sample,SiO2,Al2O3,Fe2O3,MgO,CaO,Na2O,K2O\nGB1-04.2,57,25,3.0,2.1,1.0,0.1,2.9\nTQ-A,48,8,6,31,0.1,0.1,0.1\n"
    )
    return out


def test_screen(folder: Path, tmp_path: Path) -> None:
    result = call("screen", str(folder / "samples.csv"), "--csv", str(tmp_path / "s.csv"), "--json", str(tmp_path / "s.json"))
    assert result.exit_code == 0, result.output
    with (tmp_path / "s.csv").open(newline="") as stream:
        rows = {row["sample"]: row for row in csv.DictReader(stream)}
    assert rows["GB1-04.2"]["verdict"] == "swelling"
    assert rows["TQ-A"]["verdict"] == "non-swelling"
    # expandable layers of the soil: those of the clay fraction times 35 %
    assert 8 < float(rows["GB1-04.2"]["expandable_percent"]) < 25
    assert "Skempton" in result.stdout
    assert "chlorite stands at 14" in result.stdout
    assert "licensed engineer" in result.stdout
    assert {record["sample"] for record in json.loads((tmp_path / "s.json").read_text())} == set(rows)


def test_screen_refuses_limits_that_are_the_wrong_way_round(folder: Path) -> None:
    result = call("screen", str(folder / "samples.csv"), "--liquid-limit", "20", "--plastic-limit", "30")
    assert result.exit_code == 2
    assert "exchange the two" in result.stderr


def test_profile(folder: Path, tmp_path: Path) -> None:
    assert call("batch", str(folder / "samples.csv"), "--out", str(tmp_path / "out"), "--no-figures", "--quiet").exit_code == 0
    result = call("profile", str(tmp_path / "out"), "--out", str(tmp_path / "profile"), "--format", "svg")
    assert result.exit_code == 0, result.output
    with (tmp_path / "profile" / "profile.csv").open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [float(row["coordinate"]) for row in rows] == sorted(float(row["coordinate"]) for row in rows)
    assert {row["sample"] for row in rows} == {"GB1-04.2", "TQ-A"}
    assert all(float(row["low95"]) <= float(row["weight_percent"]) <= float(row["high95"]) for row in rows)
    assert (tmp_path / "profile" / "profile.svg").read_text().lstrip().startswith("<?xml")
    refused = call("profile", str(tmp_path / "out"), "--along", "northing", "--out", str(tmp_path / "no"))
    assert refused.exit_code == 2
    assert "choose one of" in refused.stderr
    assert "depth_m" in refused.stderr


def test_indices_and_analysis_in_an_estimate(folder: Path, tmp_path: Path) -> None:
    line = tmp_path / "line.toml"
    line.write_text("slope = 1.1\nintercept = 0.01\n")
    result = call(
        "estimate", str(folder / "samples.csv"), "--sample", "GB1-04.2", "--width-calibration", str(line), "--joint-chemistry",
        "--json", str(tmp_path / "r.json"),
    )  # fmt: skip
    assert result.exit_code == 0, result.output
    assert "Kübler index" in result.stdout
    found = read_result(tmp_path / "r.json")
    kuebler = next(index for index in found.indices if index.id == "kuebler")
    assert "line.toml" in kuebler.validity
    assert found.chemistry is not None
    assert found.chemistry.agrees
    assert found.chemistry.joint
    assert "Analysis: the analysis agrees" in " ".join(result.stdout.split())


def test_a_known_formula_is_kept_to(folder: Path, tmp_path: Path) -> None:
    arguments = ["estimate", str(folder / "samples.csv"), "--sample", "TQ-A", "--json", str(tmp_path / "r.json")]
    result = call(*arguments, "--formula", "chlorite=(Mg3.6Fe2+1.4Al)(Si3Al)O10(OH)8")
    assert result.exit_code == 0, result.output
    free = call(*arguments[:-1], str(tmp_path / "free.json"))
    assert free.exit_code == 0
    names = [p.name for p in read_result(tmp_path / "r.json").proportions.parameters]
    assert not any("chlorite content of fe" in name for name in names)
    assert any("chlorite content of fe" in p.name for p in read_result(tmp_path / "free.json").proportions.parameters)
    wrong = call(*arguments, "--formula", "chlorite=Mg3Si4O10(OH)2")
    assert wrong.exit_code == 2
    assert "has a 2:1 layer, not 2:1:1" in wrong.stderr
