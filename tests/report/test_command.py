"""The command that writes pages."""

from __future__ import annotations

from pathlib import Path

import pytest
from click.testing import CliRunner

from xrdmica.cli.main import main
from xrdmica.report.files import write_result


def run(*arguments: str) -> tuple[int, str]:
    outcome = CliRunner().invoke(main, ["report", *arguments])
    return outcome.exit_code, outcome.output


def test_folder_and_file(make_result, tmp_path: Path) -> None:
    for name in ("S1", "S2", "<b>"):
        write_result(make_result(name, points=60), tmp_path / "results")
    (tmp_path / "results" / "run.json").write_text("{}")
    assert run(str(tmp_path / "results"), "--out", str(tmp_path / "pages"))[0] == 0
    assert {p.name for p in (tmp_path / "pages").iterdir()} == {"S1.html", "S2.html", "_b_.html", "index.html", "plotting.js"}
    assert run(str(tmp_path / "results" / "S1.json"), "--out", str(tmp_path / "one"))[0] == 0
    assert [p.name for p in (tmp_path / "one").iterdir()] == ["S1.html"]


@pytest.mark.parametrize(("arguments", "says"), [
    ((), "--method"), (("{tmp}",), "holds no result file"), (("{tmp}/bad.json",), "not a result file"),
])  # fmt: skip
def test_wrong_use_is_one_sentence(tmp_path: Path, arguments: tuple[str, ...], says: str) -> None:
    (tmp_path / "bad.json").write_text("[]")
    code, output = run(*(a.format(tmp=tmp_path) for a in arguments), "--out", str(tmp_path / "o"))
    assert code == 2
    assert says in output
    assert "Traceback" not in output


def test_out_that_is_a_file(make_result, tmp_path: Path) -> None:
    path = write_result(make_result(points=60), tmp_path)
    assert run(str(path), "--out", str(path))[0] == 2
