"""Result files: whole or not at all, safe names, tables that spreadsheets cannot be tricked with."""

from __future__ import annotations

import csv
import errno
import json
import os
from pathlib import Path

import pytest

from xrdmica.errors import XrdmicaError
from xrdmica.report import files
from xrdmica.results import SampleResult

# Names that people and attackers write. What is refused: characters of Windows file names and of POSIX path separators,
# device names (Microsoft, "Naming Files, Paths, and Namespaces"; POSIX.1-2017 section 3.170).
ODD_NAMES = [
    "a/b", "..", ".", "../../etc/passwd", ".hidden", "C:\\x", "<script>alert(1)</script>", "=cmd()", "a\nb", "a\x00b", "NUL",
    "con.1", "", "   ", "x" * 400, "样品" * 100, "عينة ١", "$x_y$", "trailing. ", "a\u202eb", "run", "Index", "é" * 90,
]  # fmt: skip


@pytest.mark.parametrize("name", ODD_NAMES)
def test_stem_is_safe_everywhere(name: str) -> None:
    stem = files.file_stem(name)
    assert stem
    assert not set(stem) & set('/\\:*?"<>|')
    assert stem.isprintable()
    assert not stem.startswith(".")
    assert stem == stem.rstrip(". ")
    assert len(stem.encode()) <= 130
    assert stem.casefold() not in {"run", "index", "nul", "con"}
    assert stem.split(".")[0].casefold() not in {"nul", "con"}


def test_letters_of_any_script_stay() -> None:
    assert files.file_stem("عينة-7 样品") == "عينة-7 样品"
    assert files.file_stem("Probe Ü3") == "Probe Ü3"


def test_stems_differ_even_without_case() -> None:
    names = ["a/b", "a_b", "a:b", "S1", "s1", "x" * 300, "x" * 301, "plain"]
    stems = files.plan_stems(names)
    assert len({stem.casefold() for stem in stems.values()}) == len(names)
    assert stems["a_b"] == "a_b"
    assert stems["plain"] == "plain"


def test_stem_leaves_the_file_of_another_sample_alone(make_result, tmp_path: Path) -> None:
    first = files.write_result(make_result("a/b", curves=False), tmp_path)
    second = files.write_result(make_result("a_b", curves=False), tmp_path)
    assert first != second
    assert {files.read_result(p).sample for p in (first, second)} == {"a/b", "a_b"}
    assert files.write_result(make_result("a_b", verdict="no", curves=False), tmp_path) == second
    assert files.read_result(second).swelling.verdict == "no"
    (tmp_path / "other.json").write_text("{}")
    assert files.write_result(make_result("other", curves=False), tmp_path).name != "other.json"
    assert (tmp_path / "other.json").read_text() == "{}"


@pytest.mark.parametrize("name", ["S12", "<script>", "=cmd()", "a/b", "$x_y$", "عينة", "样品", "x" * 300, 'quo"te\\', "a\nb"])
def test_result_comes_back(make_result, tmp_path: Path, name: str) -> None:
    result = make_result(name, points=60)
    path = files.write_result(result, tmp_path)
    assert path.parent == tmp_path
    assert files.sample_of_file(path) == name
    back = files.read_result(path)
    assert back.model_copy(update={"curves": ()}) == result.model_copy(update={"curves": ()})
    for curve, original in zip(back.curves, result.curves, strict=True):
        assert curve.observed == original.observed
        assert curve.two_theta == pytest.approx(original.two_theta, abs=1e-5)
        assert curve.calculated == pytest.approx(original.calculated, rel=1e-5)
        assert curve.marks == original.marks


def test_json_is_plain_json_with_one_line_per_curve(full_result: SampleResult, tmp_path: Path) -> None:
    text = files.write_result(full_result, tmp_path).read_text(encoding="utf-8")
    data = json.loads(text, parse_constant=lambda name: pytest.fail(f"{name} is not JSON"))
    assert set(data) == set(SampleResult.model_fields)
    curves = [line for line in text.splitlines() if line.startswith('    {"scan"')]
    assert len(curves) == len(full_result.curves)


def test_result_without_curves_comes_back(make_result, tmp_path: Path) -> None:
    result = make_result(curves=False)
    assert files.read_result(files.write_result(result, tmp_path)) == result


def test_number_that_json_cannot_hold_is_told(make_result, tmp_path: Path) -> None:
    result = make_result(points=60)
    broken = result.curves[0].model_copy(update={"calculated": (float("nan"),)})
    with pytest.raises(XrdmicaError, match=r"not finite at curves\.0\.calculated\.0"):
        files.write_result(result.model_copy(update={"curves": (broken,)}), tmp_path)
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("content", "says"),
    [("", "not a result file"), ("{", "not a result file"), ('{"sample": 1}', "sample"), ("[1, 2]", "not a result file")],
)
def test_wrong_file_is_one_sentence(tmp_path: Path, content: str, says: str) -> None:
    path = tmp_path / "r.json"
    path.write_text(content)
    with pytest.raises(XrdmicaError, match=says) as caught:
        files.read_result(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_and_binary_files_are_told(tmp_path: Path) -> None:
    with pytest.raises(XrdmicaError, match="cannot be read"):
        files.read_result(tmp_path / "none.json")
    (tmp_path / "b.json").write_bytes(b"\xff\xfe\x00\x81")
    with pytest.raises(XrdmicaError, match="UTF-8"):
        files.read_result(tmp_path / "b.json")
    assert files.sample_of_file(tmp_path / "b.json") is None


def test_full_disk_leaves_the_old_file_and_no_rubbish(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = files.write_text(tmp_path / "t.csv", "old")

    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(Path, "replace", full)
    with pytest.raises(XrdmicaError, match=os.strerror(errno.ENOSPC)):
        files.write_text(path, "new")
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["t.csv"]


def test_folder_that_is_a_file_is_told(tmp_path: Path) -> None:
    (tmp_path / "f").write_text("x")
    with pytest.raises(XrdmicaError, match="cannot be written"):
        files.write_text(tmp_path / "f" / "t.txt", "x")


def test_csv_cells(tmp_path: Path) -> None:
    # characters that start a formula in spreadsheets: OWASP, "CSV Injection"
    rows = [
        ("=1+1", "+x", "-x", "@x", "\tx", "\rx"),
        ("-5.2", "+3", "a,b", 'q"q', "two\nlines", "样品"),
        (None, float("nan"), 0.0, -0.04, 12.3456, 100.0),
        (0.012345, 1e-7, 123456.789, 7, 99.995, float("inf")),
    ]
    path = files.write_csv(tmp_path / "t.csv", list("abcdef"), rows)
    with path.open(encoding="utf-8", newline="") as stream:
        read = list(csv.reader(stream))
    assert read[0] == list("abcdef")
    assert read[1] == ["'=1+1", "'+x", "'-x", "'@x", "'\tx", "'\nx"]
    assert read[2] == list(rows[1])
    assert read[3] == ["", "", "0", "-0.04", "12.35", "100"]
    assert read[4] == ["0.0123", "0.0000001", "123456.79", "7", "100", ""]
    with pytest.raises(ValueError, match="cells"):
        files.write_csv(tmp_path / "t.csv", ["a"], [("x", "y")])


def test_tables_of_results(make_result, tmp_path: Path) -> None:
    results = [make_result("=cmd()", curves=False, origin="assumed"), make_result("S2", curves=False)]
    path = files.write_csv(tmp_path / "p.csv", files.PROPORTIONS_HEADER, files.proportions_rows(results))
    with path.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    head = path.read_text().splitlines()[0]
    assert head == "sample,phase,name,group,status,weight_percent,low95,high95,detection_limit,basis"
    assert len(rows) == sum(len(r.proportions.phases) for r in results)
    assert rows[0]["sample"] == "'=cmd()"
    absent = next(r for r in rows if r["phase"] == "vermiculite")
    assert (absent["weight_percent"], absent["status"], absent["detection_limit"]) == ("", "not_detected", "2.04")
    weights = [float(r["weight_percent"]) for r in rows if r["sample"] == "S2" and r["weight_percent"]]
    assert sum(weights) == pytest.approx(100.0, abs=0.05)
    assert all(len(row) == len(files.GROUPS_HEADER) for row in files.groups_rows(results))
    summary = files.summary_rows(results)
    assert summary[0][5] == "Illite 41.3; Kaolinite 24.6; Smectite 18.2; Chlorite 14.1"
    assert summary[0][6] == "Talc"
    assert str(summary[0][8]).startswith("radiation assumed for air_dried")
    assert not str(summary[1][8]).startswith("radiation assumed")
    assert files.failures_rows([("a", "two\n lines")]) == [("a", "two lines")]
