"""``xrdmica batch``: all samples of sheets, folders and patterns."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from xrdmica.cli import options
from xrdmica.cli.batch_progress import show_progress

if TYPE_CHECKING:
    from xrdmica.batch.run import Progress
    from xrdmica.results import SampleResult

__all__ = ["command"]

_MOST_LINES = 200  # of the table on the screen


@click.command(name="batch", epilog="Example: xrdmica batch demo_patterns --out results")
@click.argument("sources", metavar="SHEET_OR_FOLDER...", nargs=-1, required=True)
@click.option("--out", metavar="DIR", type=click.Path(path_type=Path), help="Folder for the results.")
@options.radiation_option
@options.outside_option
@options.phase_option
@options.instrument_option
@options.calibration_option
@options.formula_option
@options.joint_option
@options.bootstrap_options
@options.workers_option
@click.option("--scheduler", metavar="ADDRESS|local", help="Compute on a Dask cluster, or on one started on this machine.")
@click.option("--time-limit", type=click.FloatRange(min=0, min_open=True), metavar="SECONDS",
              help="Stop and report a sample that takes longer.")  # fmt: skip
@click.option("--redo", is_flag=True, help="Do everything again, also what an earlier run has finished.")
@click.option("--report", is_flag=True, help="Write a page per sample and an overview.")
@click.option("--no-figures", is_flag=True, help="Draw no figures.")
@click.option("--bom", is_flag=True, help="Start tables with the mark by which some spreadsheets know UTF-8.")
@click.option("--quiet", is_flag=True, help="No progress and no table; failures are still told.")
@click.option("--write-sheet", metavar="FILE", type=click.Path(dir_okay=False, path_type=Path),
              help="Only draft a sample sheet from the file names of the folder.")  # fmt: skip
@click.pass_context
def command(
    ctx: click.Context, /, sources: tuple[str, ...], out: Path | None, radiation: str | None, allow_outside: bool,
    phases: tuple[str, ...], instrument: str | None, quiet: bool, write_sheet: Path | None, **how: Any,
) -> None:  # fmt: skip
    """Analyse all samples of sample sheets, folders of exports, and quoted patterns such as "scans/*.xy".

    Each sample is written to DIR as soon as it is finished; the tables over all samples come at the end. A sample that
    fails is reported and does not stop the others. The same command again keeps what is finished and has not changed, and
    does the rest.
    """
    if write_sheet is not None:
        _draft(sources, write_sheet)
        return
    if out is None:
        raise click.UsageError("Missing option '--out'.")
    from xrdmica.batch.sources import gather

    found = gather(sources, radiation=radiation, allow_outside=allow_outside)
    for skipped in found.skipped:
        click.echo(f"not read: {skipped.file.name}: {' '.join(skipped.reason.split())}", err=True)
    more = {name: how.pop(name) for name in ("width_calibration", "formulas", "joint_chemistry", "seed")}
    more["bootstrap"] = how.pop("bootstrap") or 0
    results, last = _run(found, out, options.settings_from(radiation, phases, instrument, **more), quiet, how)
    if not quiet:
        _print_table(results, out, len(found))
    if last is not None and (last.failed or (out / "failures.csv").exists()):
        what = f"{last.failed} of {last.total} samples failed" if last.failed else "figures or pages are wanting"
        click.echo(f"xrdmica: {what}, reasons in {out / 'failures.csv'}", err=True)
        ctx.exit(1)


def _run(found: Any, out: Path, settings: Any, quiet: bool, how: dict[str, Any]) -> tuple[list[SampleResult], Progress | None]:
    """The results to be listed, in the order of the sheet, and what was told at the end."""
    from xrdmica.batch.executors import available_cores
    from xrdmica.batch.run import run_batch

    told: list[Progress] = []
    with show_progress(quiet) as show:

        def on_progress(progress: Progress) -> None:
            told[:] = [progress]
            show(progress)

        listed: list[tuple[int, SampleResult]] = []
        workers = how["workers"] or (None if how["scheduler"] else available_cores())
        for result in run_batch(
            found, out, settings=settings, workers=workers, scheduler=how["scheduler"], time_limit=how["time_limit"],
            redo=how["redo"], report=how["report"], figures=not how["no_figures"], bom=how["bom"], curves=False,
            on_progress=on_progress,
        ):  # fmt: skip
            # a table of thousands of lines helps nobody, and the results would fill the memory
            if len(found) <= _MOST_LINES:
                listed.append((told[0].index, result))
    # workers finish in any order; the table follows the sheet like the files do
    return [result for _, result in sorted(listed, key=lambda pair: pair[0])], told[0] if told else None


def _draft(sources: Sequence[str], path: Path) -> None:
    """Write a sheet to be checked, and tell what to check."""
    if len(sources) != 1 or not Path(sources[0]).is_dir():
        raise click.UsageError("--write-sheet takes one folder of exports.")
    from xrdmica.batch.sheet_draft import write_sheet

    sheet = write_sheet(sources[0], path)
    folder = Path(sources[0]).resolve()
    outside = "" if folder.is_relative_to(sheet.resolve().parent) else " --allow-outside"
    click.echo(
        f"{sheet}: drafted from the file names. Check sample, mount and treatment of every row, fill in the radiation where "
        f"it is missing, read the notes, then run: xrdmica batch {sheet}{outside} --out DIR",
        err=True,
    )


def _print_table(results: list[SampleResult], out: Path, total: int) -> None:
    from xrdmica.report.tables import batch_table, cautions_of, console_for, list_section

    console = console_for()
    if results:
        batch_table(results, console)
    elif total > _MOST_LINES:
        console.print(f"{total} samples: see summary.csv", markup=False)
    assumed = [r.sample for r in results if any(s.radiation_origin == "assumed" for s in r.scans)]
    if assumed:
        some = ", ".join(assumed[:5]) + (f" and {len(assumed) - 5} more" if len(assumed) > 5 else "")
        list_section(console, "Radiation ASSUMED", [f"{some}: no file or sheet says the tube; give --radiation if it is wrong"])
    list_section(console, f"Files in {out}", [
        "proportions.csv, groups.csv, indices.csv, summary.csv: all samples; run.json: how they were made",
        "proportions_wide.csv: one row per sample, with quality flags and groups of similar samples",
        *(["repeats.csv: repeatability"] if (out / "repeats.csv").exists() else []),
        *(["proportions.svg, ternary.svg: figures over all samples"] if (out / "proportions.svg").exists() else []),
        *(["index.html: overview; <sample>.html: a page per sample"] if (out / "index.html").exists() else []),
        "<sample>.json: everything about a sample" + ("; <sample>.png: its scans" if any(out.glob("*.png")) else ""),
    ])  # fmt: skip
    list_section(console, "Cautions", cautions_of(results))
