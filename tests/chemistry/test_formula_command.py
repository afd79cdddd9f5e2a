"""The formula command, run as a user would."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from xrdmica.cli.formula import command
from xrdmica.errors import ChemistryError

MUSCOVITE = "KAl3Si3O10(OH)2"
SAPONITE = "Na0.33Mg3(Si3.67Al0.33)O10(OH,F)2·4H2O"


def test_tables(tmp_path: Path) -> None:
    json_file, csv_file = tmp_path / "f.json", tmp_path / "f.csv"
    result = CliRunner().invoke(command, [MUSCOVITE, SAPONITE, "--json", str(json_file), "--csv", str(csv_file)])
    assert result.exit_code == 0, result.output
    # oxides: the handbook values of muscovite, as in tests/published/test_ideal_compositions.py
    for words in ("K(Al2)(Si3Al)O10(OH)2", "true mica", "dioctahedral", "398.31", "11.82", "38.40", "45.25", "4.52", "smectite"):
        assert words in result.stdout
    assert "molar mass, dry (g/mol)" in result.stdout
    assert "note: (OH,F)2 gives no amounts" in result.stdout
    assert "-0.000" not in result.stdout
    records = json.loads(json_file.read_text(encoding="utf-8"))["formulas"]
    assert [r["group"] for r in records] == ["true mica", "smectite"]
    assert records[0]["sites"]["octahedral"] == {"Al3+": 2.0}
    assert records[1]["water"] == 4
    with csv_file.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert [row["formula"] for row in rows] == [MUSCOVITE, SAPONITE]
    assert float(rows[0]["K2O"]) == pytest.approx(11.82, abs=0.02)
    assert rows[1]["K2O"] == ""
    assert sorted(p.name for p in tmp_path.iterdir()) == ["f.csv", "f.json"]


def test_a_bad_formula_is_named_and_nothing_is_written(tmp_path: Path) -> None:
    target = tmp_path / "f.json"
    result = CliRunner().invoke(command, [MUSCOVITE, "K0.7Al2(AlSi3)O10(OH)2", "--json", str(target)])
    assert isinstance(result.exception, ChemistryError)
    assert str(result.exception).startswith("formula 'K0.7Al2(AlSi3)O10(OH)2': charges sum to -0.30")
    assert result.stdout == ""
    assert not target.exists()


def test_no_formula_is_wrong_use() -> None:
    assert CliRunner().invoke(command, []).exit_code == 2


def test_predicted_spacing_is_printed_and_written(tmp_path: Path) -> None:
    """Muscovite: d(001) 9.98, d(060) 1.499-1.504 (handbooks, from memory); kaolinite has no spacing from this model."""
    target = tmp_path / "f.json"
    result = CliRunner().invoke(command, ["KAl2(AlSi3)O10(OH)2", "Al2Si2O5(OH)4", "--json", str(target)])
    assert result.exit_code == 0
    assert "predicted d(001)" in result.stdout
    assert "no predicted spacing" in result.stdout
    mica, clay = json.loads(target.read_text(encoding="utf-8"))["formulas"]
    assert mica["predicted"]["d001"] == pytest.approx(9.98, abs=0.06)
    assert mica["predicted"]["d060"] == pytest.approx(1.5015, abs=0.006)
    assert 0 < mica["predicted"]["d060_sigma"] < 0.01
    assert clay["predicted"] is None
    assert "2:1 layers" in clay["not_predicted"]
