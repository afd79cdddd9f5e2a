"""The command as such: quick help, and one sentence for everything a user can act on."""

from __future__ import annotations

import errno
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import click
import pytest
from click.testing import CliRunner

from xrdmica.cli import main as entry
from xrdmica.errors import XrdmicaError

ROOT = Path(__file__).resolve().parents[2]
HEAVY = ("pymatgen", "lmfit", "matplotlib", "pydantic", "scipy", "rich", "pybaselines", "numpy", "xraydb", "gemmi")


def environment() -> dict[str, str]:
    return {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"}


def python(*arguments: str, **options) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, *arguments], capture_output=True, text=True, encoding="utf-8", env=environment(), timeout=120, **options
    )


@pytest.mark.parametrize("arguments", [["--help"], ["--version"], []])
def test_help_imports_nothing_heavy(arguments: list[str]) -> None:
    code = (
        "import sys\nfrom xrdmica.cli.main import run\n"
        f"try:\n    run({arguments!r})\nfinally:\n    print([m for m in {HEAVY!r} if m in sys.modules], file=sys.stderr)"
    )
    done = python("-c", code)
    assert done.stderr.strip().endswith("[]"), done.stderr


def test_help_lists_every_command() -> None:
    result = CliRunner().invoke(entry.main, ["--help"])
    assert result.exit_code == 0
    for name, command in entry.COMMANDS.items():
        assert name in result.output
        assert command.help.split()[0] in result.output


@pytest.mark.parametrize("name", ["identify", "estimate", "batch"])
def test_help_of_a_command(name: str) -> None:
    result = CliRunner().invoke(entry.main, [name, "--help"])
    assert result.exit_code == 0
    assert "--radiation" in result.output


def test_version() -> None:
    done = python("-m", "xrdmica", "--version")
    assert done.returncode == 0
    assert done.stdout.startswith("xrdmica ")


@pytest.mark.parametrize(
    "arguments",
    [["nonsense"], ["batch"], ["identify"], ["identify", "x", "--colour"], ["estimate", "x.xy", "--radiation", "Unobtainium"]],
)
def test_wrong_use_is_a_sentence(arguments: list[str]) -> None:
    done = python("-m", "xrdmica", *arguments)
    assert done.returncode == 2
    assert len(done.stderr.splitlines()) == 1
    assert done.stderr.startswith("xrdmica: ")
    assert "--help`" in done.stderr
    assert "Traceback" not in done.stderr
    assert done.stdout == ""


@pytest.fixture
def failing(monkeypatch: pytest.MonkeyPatch):
    """Run a command that raises the given error."""

    def go(error: BaseException):
        @click.command()
        def command() -> None:
            raise error

        monkeypatch.setattr(entry.LazyGroup, "get_command", lambda self, ctx, name: command)
        return CliRunner().invoke(entry.main, ["any"])

    return go


@pytest.mark.parametrize(
    ("error", "code", "says"),
    [
        (XrdmicaError("s.xy: line 3\nis \x1b[31mbad", fix="repeat it"), 2, "xrdmica: s.xy: line 3 is [31mbad: repeat it\n"),
        (OSError(errno.ENOSPC, os.strerror(errno.ENOSPC)), 2, f"xrdmica: {os.strerror(errno.ENOSPC)}: make room"),
        (PermissionError(errno.EACCES, os.strerror(errno.EACCES), "out/x"), 2, "xrdmica: out/x: "),
        (KeyboardInterrupt(), 130, "xrdmica: stopped by the user"),
        (BrokenPipeError(errno.EPIPE, "gone"), 0, ""),
    ],
)
def test_errors_become_one_line(failing, error: BaseException, code: int, says: str) -> None:
    result = failing(error)
    assert result.exit_code == code
    assert result.stderr.startswith(says)
    assert len(result.stderr.splitlines()) == (1 if says else 0)
    assert result.stdout == ""


def test_a_mistake_in_the_program_is_not_hidden(failing) -> None:
    assert isinstance(failing(ZeroDivisionError()).exception, ZeroDivisionError)


@pytest.mark.skipif(sys.platform == "win32", reason="pipes close differently there")
def test_a_reader_that_goes_away_is_no_error() -> None:
    code = (
        "import click\nfrom xrdmica.cli import main as m\n@click.command()\ndef c():\n    for k in range(200000):\n"
        "        click.echo(k)\nm.LazyGroup.get_command = lambda self, ctx, name: c\nm.run(['any'])"
    )
    process = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=environment())
    assert process.stdout is not None
    assert process.stderr is not None
    assert process.stdout.readline() == b"0\n"
    process.stdout.close()
    assert process.stderr.read() == b""
    assert process.wait(60) == 0


@pytest.mark.skipif(sys.platform == "win32", reason="sends SIGINT")
def test_ctrl_c() -> None:
    code = (
        "import click, time\nfrom xrdmica.cli import main as m\n@click.command()\ndef c():\n    click.echo('started')\n"
        "    time.sleep(60)\nm.LazyGroup.get_command = lambda self, ctx, name: c\nm.run(['any'])"
    )
    process = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=environment())
    assert process.stdout is not None
    assert process.stderr is not None
    assert process.stdout.readline() == b"started\n"
    time.sleep(0.1)
    process.send_signal(signal.SIGINT)
    assert process.wait(60) == 130
    assert process.stderr.read().decode() == "xrdmica: stopped by the user; what was finished is kept\n"


def test_letters_that_the_terminal_lacks_are_no_error() -> None:
    code = "import click\nfrom xrdmica.cli import main as m\n@click.command()\ndef c():\n    print('Å 样品')\n"
    code += "m.LazyGroup.get_command = lambda self, ctx, name: c\nm.run(['any'])"
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, env={**environment(), "PYTHONIOENCODING": "ascii"}, timeout=60
    )
    assert done.returncode == 0
    assert done.stdout == b"? ??\n"
