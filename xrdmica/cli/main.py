"""The command ``xrdmica``: finds the commands, and turns every error a user can act on into one sentence."""

from __future__ import annotations

import errno
import importlib
import os
import sys
from collections.abc import Sequence
from typing import Any, NamedTuple, NoReturn

import click

from xrdmica._version import __version__
from xrdmica.errors import XrdmicaError

__all__ = ["COMMANDS", "LazyCommand", "LazyGroup", "main", "run"]


class LazyCommand(NamedTuple):
    """Where a command is, and its line in the help, so that the help need not import it."""

    module: str
    help: str


COMMANDS: dict[str, LazyCommand] = {
    "formula": LazyCommand("xrdmica.cli.formula", "Site-assigned formula and name from a formula or an oxide analysis."),
    "phases": LazyCommand("xrdmica.cli.phases", "The phases of the library, or one of them in full."),
    "pattern": LazyCommand("xrdmica.cli.pattern", "Calculated pattern of a phase."),
    "peaks": LazyCommand("xrdmica.cli.peaks", "Lines of scans with positions, widths and their errors."),
    "identify": LazyCommand("xrdmica.cli.identify", "Which phases are in a sample, with the evidence for each."),
    "estimate": LazyCommand("xrdmica.cli.estimate", "Proportions with intervals, and whether the sample swells."),
    "screen": LazyCommand("xrdmica.cli.screen", "Does this soil swell? Class, expected CEC and surface, index tests, hazards."),
    "profile": LazyCommand("xrdmica.cli.profile", "Proportions against depth or another coordinate, as figure and table."),
    "trial": LazyCommand("xrdmica.cli.trial", "How well would this work for my kind of sample? Simulated samples."),
    "batch": LazyCommand("xrdmica.cli.batch", "All samples of a sheet or folder, with tables and figures."),
    "report": LazyCommand("xrdmica.cli.report", "Pages to read in a browser, from results."),
}


class _Sentence(click.ClickException):
    """An error as one line on stderr with exit code 2."""

    exit_code = 2

    def show(self, file: Any = None) -> None:
        click.echo(f"xrdmica: {one_line(self.message)}", file=file or sys.stderr)


def one_line(text: str) -> str:
    """The text on one line, without characters that steer a terminal."""
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


class LazyGroup(click.Group):
    """A group whose commands are imported when they are called."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Names in the order of the work."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Import the command."""
        entry = COMMANDS.get(cmd_name)
        if entry is None:
            return None
        command = importlib.import_module(entry.module).command
        if not isinstance(command, click.Command):
            raise TypeError(f"{entry.module}.command is no click command")
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the list of commands from the table, importing none."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, entry.help) for name, entry in COMMANDS.items()])

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command; an error a user can act on becomes a sentence and an exit code."""
        try:
            value = super().invoke(ctx)
            sys.stdout.flush()
        except XrdmicaError as error:
            raise _Sentence(str(error)) from error
        except click.UsageError as error:
            used = (error.ctx or ctx).command_path
            raise _Sentence(f"{error.format_message().rstrip('.')}: see `{used} --help`") from error
        except KeyboardInterrupt:
            click.echo("xrdmica: stopped by the user; what was finished is kept", err=True)
            ctx.exit(130)
        except BrokenPipeError:
            _leave_pipe()
            ctx.exit(0)
        except OSError as error:
            if error.errno == errno.EPIPE:
                _leave_pipe()
                ctx.exit(0)
            raise _Sentence(_disk_words(error)) from error
        return value


def _disk_words(error: OSError) -> str:
    what = error.strerror or str(error) or type(error).__name__
    where = f"{error.filename}: " if error.filename else ""
    advice = {
        errno.ENOSPC: "make room on the disk or write elsewhere",
        errno.EDQUOT: "make room in the quota or write elsewhere",
        errno.EACCES: "choose a place you may read and write",
        errno.EPERM: "choose a place you may read and write",
        errno.EROFS: "choose a place that can be written",
        errno.ENOENT: "check the path",
        errno.EMFILE: "close other programs or use fewer workers",
    }.get(error.errno or 0, "check the disk and the path")
    return f"{where}{what}: {advice}"


def _leave_pipe() -> None:
    """The reader went away (`xrdmica ... | head`): send what is still buffered nowhere."""
    try:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    except (OSError, ValueError):
        sys.stdout = open(os.devnull, "w")  # noqa: PTH123, SIM115


@click.group(
    cls=LazyGroup,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog="Exit codes: 0 done, 1 some samples failed (the others are kept), 2 wrong use or unreadable input.",
)
@click.version_option(__version__, prog_name="xrdmica", message="%(prog)s %(version)s")
def main() -> None:
    """From diffractometer exports of clay fractions to named sheet silicates, their proportions and a swelling verdict.

    Scans are read from a sample sheet, from a folder, or file by file. `xrdmica COMMAND --help` tells more.
    """


def run(arguments: Sequence[str] | None = None) -> NoReturn:
    """Entry of the console script.

    Parameters
    ----------
    arguments : sequence of str, optional
        Command line without the program; by default that of the process.
    """
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        # the matrices here are small: threads of the linear algebra would cost more than they do
        os.environ.setdefault(name, "1")
    for stream in (sys.stdout, sys.stderr):
        # a terminal that cannot show a letter gets a question mark, not a traceback
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="replace")
    try:
        main.main(args=None if arguments is None else list(arguments), prog_name="xrdmica")
    except KeyboardInterrupt:
        click.echo("xrdmica: stopped by the user", err=True)
    sys.exit(130)
