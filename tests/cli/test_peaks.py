"""The command `peaks`."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from xrdmica.cli.main import main
from xrdmica.scans.figure import peak_figure
from xrdmica.scans.peaks import find_peaks
from xrdmica.scans.read import read_scan
from xrdmica.scans.scan import Scan
from xrdmica.scans.write import write_scan_csv

CENTRES = (8.85, 17.7, 26.7)


@pytest.fixture
def scan() -> Scan:
    x = np.arange(5, 35, 0.02)
    model = np.full_like(x, 120.0)
    for centre in CENTRES:
        model = model + 900 * np.exp(-4 * np.log(2) * ((x - centre) / 0.25) ** 2)
    return Scan.from_arrays(x, np.random.default_rng(1).poisson(model), radiation="CuKa1")


@pytest.fixture
def file(scan: Scan, tmp_path: Path) -> Path:
    path = tmp_path / "S1_AD.csv"
    write_scan_csv(scan, path)
    return path


def test_table_and_files(file: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    arguments = ["peaks", str(file), "--csv", str(out / "p.csv"), "--json", str(out / "p.json"), "--figure", str(out / "p.png")]
    result = CliRunner().invoke(main, arguments)
    assert result.exit_code == 0, result.output
    assert "3 peaks" in result.stdout
    # Bragg's law for 8.85 degrees and 1.54059 angstrom gives 9.984
    assert "9.98" in result.stdout
    assert "read from the header" in result.stderr
    with (out / "p.csv").open() as stream:
        rows = list(csv.DictReader(stream))
    np.testing.assert_allclose([float(row["two_theta"]) for row in rows], CENTRES, atol=0.02)
    # 9.98 angstrom and its orders are the basal lines of mica (handbook, common practice)
    assert all(any(mica in row["may_be"] for mica in ("muscovite", "phlogopite", "biotite", "illite")) for row in rows)
    (entry,) = json.loads((out / "p.json").read_text())
    assert entry["radiation"] == "CuKa1"
    np.testing.assert_allclose([peak["two_theta"] for peak in entry["peaks"]], CENTRES, atol=0.02)
    assert [words[0].split()[-1] for words in (peak["may_be"] for peak in entry["peaks"])] == ["001", "002", "003"]
    assert (out / "p.png").read_bytes().startswith(b"\x89PNG")
    assert sorted(path.name for path in out.iterdir()) == ["p.csv", "p.json", "p.png"]


def test_alignment_by_quartz(tmp_path: Path) -> None:
    # quartz 100 and 101 at 20.860 and 26.640 degrees with Cu K-alpha1 (4.2550 and 3.3435 angstrom, from memory), 0.1 too high
    x = np.arange(5, 35, 0.02)
    model = np.full_like(x, 120.0)
    for centre in (20.96, 26.74):
        model = model + 2000 * np.exp(-4 * np.log(2) * ((x - centre) / 0.15) ** 2)
    write_scan_csv(Scan.from_arrays(x, np.random.default_rng(1).poisson(model), radiation="CuKa1"), tmp_path / "S.csv")
    result = CliRunner().invoke(main, ["peaks", str(tmp_path / "S.csv"), "--align", "quartz"])
    assert result.exit_code == 0, result.output
    assert "corrected for a displacement of +0.10" in " ".join(result.stderr.split())
    assert "3.34" in result.stdout
    assert CliRunner().invoke(main, ["peaks", str(tmp_path / "S.csv"), "--align", "granite"]).exit_code == 2


def test_several_files_and_limit(file: Path, scan: Scan) -> None:
    limit = max(peak.height_sigma for peak in find_peaks(scan)) + 1
    result = CliRunner().invoke(main, ["peaks", str(file), str(file), "--minimum-sigma", f"{limit:.2f}"])
    assert result.exit_code == 0
    assert result.stdout.count(": 0 peaks") == 2


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["none.xy"], "there is no such file"),
        (["."], "this is a folder"),
        ([], "Missing argument"),
        (["FILE", "--radiation", "Xx"], "radiation 'Xx' is not known"),
        (["FILE", "--minimum-sigma", "0"], "is not in the range"),
        (["FILE", "--figure", "p.gif"], "end the name with .png, .svg or .pdf"),
        (["FILE", "--csv", "/nowhere/p.csv"], "/nowhere/p.csv: cannot be written"),
    ],
)
def test_wrong_use_is_one_sentence(file: Path, arguments: list[str], sentence: str) -> None:
    result = CliRunner().invoke(main, ["peaks", *(str(file) if word == "FILE" else word for word in arguments)])
    assert result.exit_code == 2
    assert sentence in " ".join(result.stderr.split())
    assert "Traceback" not in result.output


def test_figure_shows_scan_background_and_spacings(scan: Scan) -> None:
    peaks = find_peaks(scan)
    figure = peak_figure([(scan, peaks), (scan, ())])
    first, second = figure.axes
    assert {text.get_text() for text in first.texts} == {f"{peak.d_spacing:.2f}" for peak in peaks}
    assert len(peaks) == 3
    np.testing.assert_array_equal(first.lines[0].get_ydata(), scan.counts)
    assert [text.get_text() for text in first.get_legend().get_texts()] == ["scan", "background", "background + peaks"]
    assert not second.texts
    assert "2θ" in first.get_xlabel()


@pytest.mark.parametrize("suffix", [".cif", ".csv", ".json"])
def test_writing_the_scan(file: Path, scan: Scan, tmp_path: Path, suffix: str) -> None:
    target = tmp_path / f"copy{suffix}"
    assert CliRunner().invoke(main, ["peaks", str(file), "--write-scan", str(target)]).exit_code == 0
    copy = read_scan(target)
    np.testing.assert_allclose(copy.two_theta, scan.two_theta, atol=1e-6)
    np.testing.assert_allclose(copy.counts, scan.counts)


def test_writing_the_scan_refused(file: Path, tmp_path: Path) -> None:
    result = CliRunner().invoke(main, ["peaks", str(file), "--write-scan", str(tmp_path / "copy.xls")])
    assert result.exit_code == 2
    assert "end the name with .cif, .csv, .json" in result.stderr
    result = CliRunner().invoke(main, ["peaks", str(file), str(file), "--write-scan", str(tmp_path / "copy.csv")])
    assert result.exit_code == 2
    assert "2 scans do not go into one file" in result.stderr
