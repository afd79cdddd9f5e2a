"""The command `pattern`."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from xrdmica.calculated.figure import pattern_figure
from xrdmica.calculated.pattern import calculate_pattern
from xrdmica.cli.main import main


def test_all_files_are_written(tmp_path: Path) -> None:
    names = {"--csv": "t.csv", "--curve": "c.csv", "--json": "p.json", "--figure": "f.svg", "--cif": "s.cif"}
    files = [word for option, name in names.items() for word in (option, str(tmp_path / name))]
    result = CliRunner().invoke(main, ["pattern", "talc", "--mount", "random", "--range", "5", "65", *files])
    assert result.exit_code == 0, result.output
    rows = list(csv.DictReader((tmp_path / "t.csv").open(encoding="utf-8")))
    record = json.loads((tmp_path / "p.json").read_text(encoding="utf-8"))
    assert len(rows) == len(record["reflections"])
    assert (rows[0]["h"], rows[0]["k"], rows[0]["l"]) == ("0", "0", "1")
    assert float(rows[0]["d_spacing"]) == pytest.approx(9.35)
    curve = (tmp_path / "c.csv").read_text(encoding="utf-8").splitlines()
    assert len(curve) == len(record["two_theta"]) + 1 == 3002
    assert "<svg" in (tmp_path / "f.svg").read_text(encoding="utf-8")


def test_the_cif_is_read_by_a_general_library(tmp_path: Path) -> None:
    from pymatgen.core.structure import Structure

    path = tmp_path / "kaolinite.cif"
    result = CliRunner().invoke(main, ["pattern", "kaolinite", "--cif", str(path)])
    assert result.exit_code == 0, result.output
    structure = Structure.from_file(path)
    # kaolinite: 2.6 g/cm3 (handbook, from memory)
    assert float(structure.density) == pytest.approx(2.6, abs=0.06)
    assert "Bish" in path.read_text(encoding="utf-8").splitlines()[1]


def test_table_on_the_screen_hides_weak_lines() -> None:
    result = CliRunner().invoke(main, ["pattern", "phlogopite", "--least", "5"])
    assert result.exit_code == 0
    assert "001" in result.stdout
    assert "lines below 5 not shown" in result.stdout


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["musc"], "did you mean muscovite"),
        (["KMg3(AlSi2)O10(OH)2"], "tetrahedral site holds 3.00 cations"),
        (["talc", "--radiation", "Xx"], "radiation 'Xx' is not known"),
        (["talc", "--figure", "f.gif"], "end the name with .png, .svg or .pdf"),
        (["talc", "--range", "40", "20"], "give two rising angles"),
        (["kaolinite", "--treatment", "550"], "shows no basal lines"),
        (["illite_smectite", "--cif", "x.cif"], "no published atoms"),
    ],
)
def test_wrong_use_is_one_sentence(arguments: list[str], sentence: str) -> None:
    result = CliRunner().invoke(main, ["pattern", *arguments])
    assert result.exit_code == 2
    assert sentence in " ".join(result.stderr.split())
    assert "Traceback" not in result.output


def test_figure_names_the_strong_lines() -> None:
    pattern = calculate_pattern("talc")
    axes = pattern_figure(pattern).axes[0]
    texts = [text.get_text() for text in axes.texts]
    assert any(text.startswith("001") and "9.350" in text for text in texts)
    assert len(axes.lines[0].get_xdata()) == pattern.two_theta.size
    assert "2θ" in axes.get_xlabel()
