"""Examples of the documents and of the help are run as they stand."""

from __future__ import annotations

import json
import re
import shlex
from importlib import import_module
from pathlib import Path

import pytest
from click.testing import CliRunner

from xrdmica.cli.main import COMMANDS, main
from xrdmica.report.page.method import method_text, validation, write_method_page

REPOSITORY = Path(__file__).resolve().parents[2]
TUTORIAL = REPOSITORY / "xrdmica" / "docs" / "tutorial.md"


def blocks(path: Path, language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", path.read_text(encoding="utf-8"), flags=re.S)


@pytest.fixture(scope="module")
def workplace(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("work")
    (folder / "demo_patterns").symlink_to(REPOSITORY / "demo_patterns", target_is_directory=True)
    return folder


def run(line: str, monkeypatch: pytest.MonkeyPatch, folder: Path) -> str:
    words = shlex.split(line)
    assert words[0] == "xrdmica"
    monkeypatch.chdir(folder)
    outcome = CliRunner().invoke(main, words[1:])
    assert outcome.exit_code == 0, f"{line}: {outcome.output}"
    return outcome.output


def test_commands_of_the_tutorial(workplace: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    lines = [line for block in blocks(TUTORIAL, "sh") for line in block.splitlines() if line]
    outputs = [run(line, monkeypatch, workplace) for line in lines]
    assert len(lines) == 5
    # what the demonstration is made of stands in its truth.json
    truth = json.loads((REPOSITORY / "demo_patterns" / "truth.json").read_text(encoding="utf-8"))
    assert "TQ-A" in json.dumps(truth)
    assert "talc" in outputs[2]
    assert (workplace / "talc.pdf").read_bytes().startswith(b"%PDF")
    assert (workplace / "page" / "TQ-A.html").is_file()


@pytest.mark.parametrize("path", [TUTORIAL, REPOSITORY / "README.md"], ids=lambda p: p.name)
def test_python_of_the_documents(path: Path, workplace: Path, monkeypatch: pytest.MonkeyPatch, capsys) -> None:
    monkeypatch.chdir(workplace)
    scope: dict[str, object] = {}
    code = blocks(path, "python")
    assert code
    for block in code:
        exec(compile(block, path.name, "exec"), scope)
    assert capsys.readouterr().out.strip()


@pytest.mark.parametrize("name", list(COMMANDS))
def test_help_has_an_example(name: str) -> None:
    command = import_module(COMMANDS[name].module).command
    assert re.search(rf"xrdmica {name} \S", " ".join((command.epilog or "").split())), f"xrdmica {name} --help has no example"
    help_text = CliRunner().invoke(main, [name, "--help"]).output
    assert "Example: xrdmica" in help_text
    for parameter in command.params:
        if parameter.param_type_name == "option":
            assert parameter.help, f"{name}: {parameter.opts} has no help"


@pytest.mark.parametrize("name", [n for n in COMMANDS if n not in ("batch", "trial", "report")])
def test_examples_of_the_help_run(name: str, workplace: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    epilog = import_module(COMMANDS[name].module).command.epilog
    line = re.search(r"Example: (xrdmica [^\n]*)", epilog)[1]  # type: ignore[index]
    run(re.sub(r"\s{2,}\(.*", "", line), monkeypatch, workplace)


def test_method_page_has_the_measured_numbers(tmp_path: Path) -> None:
    numbers = validation()
    text = write_method_page(tmp_path).read_text(encoding="utf-8")
    for key in ("precision_percent", "recall_percent", "median_error_per_phase", "median_error_sum", "held_by_95_percent"):
        assert f"{numbers[key]} " in text
    assert "<table>" in text
    assert "{{" not in method_text()
    assert CliRunner().invoke(main, ["report", "--method", "--out", str(tmp_path / "m")]).exit_code == 0
    assert (tmp_path / "m" / "method.html").read_text(encoding="utf-8") == text
