"""``xrdmica batch``: all samples of a sheet or folder."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrdmica.cli import options

if TYPE_CHECKING:
    from xrdmica.batch.run import Progress
    from xrdmica.results import SampleResult

__all__ = ["command"]


@click.command(name="batch", epilog="Example: xrdmica batch demo_patterns --out results")
@click.argument("source", metavar="SHEET_OR_FOLDER", type=click.Path(exists=True, path_type=Path))
@click.option("--out", required=True, metavar="DIR", type=click.Path(path_type=Path), help="Folder for the results.")
@options.radiation_option
@options.outside_option
@options.phase_option
@options.instrument_option
@options.workers_option
@click.option("--no-figures", is_flag=True, help="Do not draw a figure per sample.")
@click.option("--quiet", is_flag=True, help="No progress and no table; failures are still told.")
@click.pass_context
def command(
    ctx: click.Context,
    source: Path,
    out: Path,
    radiation: str | None,
    allow_outside: bool,
    phases: tuple[str, ...],
    instrument: str | None,
    workers: int | None,
    no_figures: bool,
    quiet: bool,
) -> None:
    """Analyse all samples of a sample sheet or of a folder of exports.

    Each sample is written to DIR as soon as it is finished; the tables over all samples come at the end. A sample that
    fails is reported and does not stop the others.
    """
    from xrdmica.batch.executors import available_cores
    from xrdmica.batch.run import run_batch
    from xrdmica.batch.sheet import entries_from

    found = entries_from(source, radiation=radiation, allow_outside=allow_outside)
    for skipped in found.skipped:
        click.echo(f"not read: {skipped.file.name}: {' '.join(skipped.reason.split())}", err=True)
    told: list[Progress] = []
    with _progress(quiet) as show:

        def on_progress(progress: Progress) -> None:
            told.append(progress)
            show(progress)

        batch = run_batch(
            found, out, settings=options.settings_from(radiation, phases, instrument),
            workers=workers or available_cores(), figures=not no_figures, on_progress=on_progress,
        )  # fmt: skip
        results = [result.model_copy(update={"curves": ()}) for result in batch]
    # workers finish in any order; the table follows the sheet like the files do
    place = {progress.sample: progress.index for progress in told}
    results.sort(key=lambda result: place[result.sample])
    if not quiet:
        _print_table(results, out)
    troubled = [progress for progress in told if progress.reason is not None]
    if troubled:
        failed = sum(not progress.finished for progress in troubled)
        click.echo(f"xrdmica: {failed} of {len(told)} samples failed, reasons in {out / 'failures.csv'}", err=True)
        ctx.exit(1)


def _print_table(results: list[SampleResult], out: Path) -> None:
    from xrdmica.report.tables import batch_table, cautions_of, console_for, list_section

    console = console_for()
    if results:
        batch_table(results, console)
    assumed = [r.sample for r in results if any(s.radiation_origin == "assumed" for s in r.scans)]
    if assumed:
        some = ", ".join(assumed[:5]) + (f" and {len(assumed) - 5} more" if len(assumed) > 5 else "")
        list_section(console, "Radiation ASSUMED", [f"{some}: no file or sheet says the tube; give --radiation if it is wrong"])
    figures = any(out.glob("*.png"))
    list_section(console, f"Files in {out}", [
        "proportions.csv, groups.csv, summary.csv: all samples; run.json: how they were made",
        "<sample>.json: everything about a sample" + ("; <sample>.png: its scans" if figures else ""),
    ])  # fmt: skip
    list_section(console, "Cautions", cautions_of(results))


@contextmanager
def _progress(quiet: bool) -> Iterator[Callable[[Progress], None]]:
    """A bar on a terminal, lines elsewhere, nothing but failures when quiet; all on stderr."""
    if quiet or not sys.stderr.isatty():
        yield lambda progress: _line(progress, quiet)
        return
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    from xrdmica.report.tables import console_for, plain

    columns = (TextColumn("{task.description}", markup=False), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Bar(*columns, console=console_for(stderr=True), transient=True) as bar:
        task = bar.add_task("samples", total=None)

        def show(progress: Progress) -> None:
            bar.update(task, total=progress.total, completed=progress.done, description=plain(progress.sample)[:30])
            if progress.reason is not None:
                bar.console.print(f"{plain(progress.sample)}: {plain(progress.reason)}")

        yield show


def _line(progress: Progress, quiet: bool) -> None:
    from xrdmica.report.tables import plain

    if progress.reason is not None:
        click.echo(f"[{progress.done}/{progress.total}] {plain(progress.sample)}: FAILED: {plain(progress.reason)}", err=True)
    elif not quiet:
        click.echo(f"[{progress.done}/{progress.total}] {plain(progress.sample)}", err=True)
