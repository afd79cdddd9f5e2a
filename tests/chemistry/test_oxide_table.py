"""Tables of oxide analyses in the shapes that spreadsheets write, and the command that reads them."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from xrdmica.chemistry.oxide_table import read_oxide_table, read_quantity
from xrdmica.cli.main import main
from xrdmica.errors import ChemistryError

ROWS = "sample,SiO2,SiO2 sigma,Al2O3,K2O,total\nA,45.25,0.2,38.40,11.82,95.47\nB,45.3,,38.3,<0.1,83.6\n"
# the same two analyses, decimal comma, one per column
COLUMNS = "oxide;A;A sigma;B\nSiO2 (wt%);45,25;0,2;45,3\nAl2O3;38,40;;38,3\nK2O;11,82;;<0,1\nTotal;95,47;;83,6\n"


@pytest.mark.parametrize("text", [ROWS, COLUMNS, ROWS.replace(",", "\t"), "\ufeff# made up\n" + ROWS])
def test_rows_and_columns_are_the_same(tmp_path: Path, text: str) -> None:
    path = tmp_path / "a.csv"
    path.write_text(text, encoding="utf-8")
    analyses, problems = read_oxide_table(path)
    assert not problems
    assert [a.name for a in analyses] == ["A", "B"]
    assert dict(analyses[0].percent) == {"SiO2": 45.25, "Al2O3": 38.40, "K2O": 11.82}
    assert dict(analyses[0].sigma) == {"SiO2": 0.2}
    assert dict(analyses[1].percent) == {"SiO2": 45.3, "Al2O3": 38.3}
    assert "counted as not there" in analyses[1].notes[0]


def test_headings_with_units_and_marks() -> None:
    expected = {
        "SiO₂ wt.%": ("SiO2", 1.0, False), "Fe2O3 (total)": ("Fe2O3t", 1.0, False), "FeO*": ("FeOt", 1.0, False),
        "Rb2O (ppm)": ("Rb2O", 1e-4, False), "MgO ±": ("MgO", 1.0, True), "K2O_1s": ("K2O", 1.0, True),
        "LOI": ("LOI", 1.0, False),
    }  # fmt: skip
    for heading, (name, factor, sigma) in expected.items():
        quantity = read_quantity(heading)
        assert quantity is not None, heading
        assert (quantity.name, quantity.factor, quantity.sigma) == (name, factor, sigma)
    # Ba in ppm to BaO in percent: 153.33 / 137.33
    barium = read_quantity("Ba ppm")
    assert barium is not None
    assert barium.factor == pytest.approx(1.1165e-4, rel=1e-3)
    two = read_quantity("CaO 2 sigma")
    assert two is not None
    assert two.divisor == 2
    assert read_quantity("sample") is None


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("sample,SiO2,Al203,K2O\nA,45,38,11\n", "'Al203' is no oxide known here"),
        ("sample,SiO2,Al2O3,XyO2\nA,45,38,11\n", "'XyO2' is no oxide known here"),
        ("sample,SiO2,SiO2,K2O\nA,45,38,11\n", "SiO2 is given twice"),
        ("a,b,c\n1,2,3\n", "no oxides are named"),
        ("SiO2,Al2O3\n", "no table of analyses"),
        ("", "no table of analyses"),
    ],
)
def test_unusable_tables_are_refused(tmp_path: Path, text: str, sentence: str) -> None:
    path = tmp_path / "a.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(ChemistryError, match=r"a\.csv") as caught:
        read_oxide_table(path)
    assert sentence in str(caught.value)


def test_files_that_cannot_be_read_are_refused(tmp_path: Path) -> None:
    binary = tmp_path / "b.csv"
    binary.write_bytes(b"PK\x03\x04\0\0\0")
    for path, sentence in ((binary, "no text"), (tmp_path, "folder"), (tmp_path / "none.csv", "cannot be read")):
        with pytest.raises(ChemistryError) as caught:
            read_oxide_table(path)
        assert sentence in str(caught.value)


def test_one_bad_row_does_not_stop_the_others(tmp_path: Path) -> None:
    path, out, table = tmp_path / "a.csv", tmp_path / "o.json", tmp_path / "o.csv"
    path.write_text(ROWS + "C,x,,38,11,\nD,45,0.1,-3,11,\nE,10,0.1,5,1,\n", encoding="utf-8")
    result = CliRunner().invoke(main, ["formula", "--oxides", str(path), "--json", str(out), "--csv", str(table)])
    assert result.exit_code == 1
    for words in ("line 4, SiO2: 'x' is no number", "line 5, Al2O3 (D) is negative", "sum to 16.0 %"):
        assert words in result.stderr
    records = json.loads(out.read_text(encoding="utf-8"))["formulas"]
    assert [r["analysis"] for r in records] == ["A", "B"]
    assert records[0]["name"] == "muscovite"
    assert records[0]["sigma"]["tetrahedral Si4+"] > 0
    rows = list(csv.DictReader(table.open(encoding="utf-8")))
    assert float(rows[0]["interlayer K+"]) == pytest.approx(1.0, abs=0.005)
    assert rows[1]["tetrahedral Si4+ sigma"] == ""
    assert "muscovite" in result.stdout


def test_a_table_without_a_usable_row_is_wrong_use(tmp_path: Path) -> None:
    path = tmp_path / "a.csv"
    path.write_text("sample,SiO2,Al2O3\nA,80,80\n", encoding="utf-8")
    result = CliRunner().invoke(main, ["formula", "--oxides", str(path)])
    assert result.exit_code == 2
    assert "sum to 160.0 %" in result.stderr
    both = CliRunner().invoke(main, ["formula", "KAl3Si3O10(OH)2", "--oxides", str(path)])
    assert both.exit_code == 2


@pytest.mark.parametrize(
    "text",
    [
        "sample,SiO2,sigma SiO2,Al2O3,1s Al2O3,K2O,σ K2O\nm1,45.2,0.4,38.4,0.3,11.8,0.1\n",
        "sample,SiO2,2 sigma SiO2,Al2O3,2s Al2O3,K2O,2 sigma of K2O\nm1,45.2,0.8,38.4,0.6,11.8,0.2\n",
        "oxide,m1,sigma m1\nSiO2,45.2,0.4\nAl2O3,38.4,0.3\nK2O,11.8,0.1\n",
    ],
)
def test_sigma_in_front_of_a_name(tmp_path: Path, text: str) -> None:
    path = tmp_path / "t.csv"
    path.write_text(text, encoding="utf-8")
    analyses, problems = read_oxide_table(path)
    assert not problems
    assert [a.name for a in analyses] == ["m1"]
    assert dict(analyses[0].percent) == {"SiO2": 45.2, "Al2O3": 38.4, "K2O": 11.8}
    assert dict(analyses[0].sigma) == pytest.approx({"SiO2": 0.4, "Al2O3": 0.3, "K2O": 0.1})
