"""``xrdmica estimate``: how much of each phase, and whether the sample swells."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import click

from xrdmica.cli import options

__all__ = ["command"]


@click.command(name="estimate", epilog="Example: xrdmica estimate demo_patterns --sample TQ-A --figure talc.pdf")
@options.paths_argument
@options.sample_option
@options.radiation_option
@options.outside_option
@options.phase_option
@options.instrument_option
@options.calibration_option
@options.formula_option
@options.joint_option
@options.bootstrap_options
@options.json_option
@options.csv_option
@options.figure_option
@click.pass_context
def command(
    ctx: click.Context,
    paths: tuple[str, ...],
    sample: str | None,
    radiation: str | None,
    allow_outside: bool,
    phases: tuple[str, ...],
    instrument: str | None,
    width_calibration: str | None,
    formulas: tuple[tuple[str, str], ...],
    joint_chemistry: bool,
    bootstrap: int | None,
    seed: int,
    json_file: Path | None,
    csv_file: Path | None,
    figure_file: Path | None,
) -> None:
    """Estimate weight percent with 95 % intervals and detection limits, and screen for swelling.

    PATH is a sample sheet, a folder of exports, or the scan files of one sample. The treatment of a file is read from
    its name (S12_EG.xy) or given behind a colon (scan7.xy:glycolated).
    """
    if figure_file is not None and figure_file.suffix.lower() not in (".png", ".svg", ".pdf"):
        raise click.BadParameter(f"{figure_file} does not end in .png, .svg or .pdf.", param_hint="--figure")
    from xrdmica.batch.analyse import analyse_sample
    from xrdmica.cli.inputs import entries_of, of_each
    from xrdmica.report.files import PROPORTIONS_HEADER, proportions_rows, result_text, write_csv, write_text
    from xrdmica.report.tables import console_for, result_table

    entries = entries_of(paths, radiation=radiation, sample=sample, allow_outside=allow_outside)
    if figure_file is not None and len(entries) > 1:
        raise click.UsageError("--figure draws one sample: choose it with --sample, or use `xrdmica batch` for all.")
    settings = options.settings_from(
        radiation, phases, instrument, curves=figure_file is not None or json_file is not None,
        width_calibration=width_calibration, formulas=formulas, joint_chemistry=joint_chemistry,
        bootstrap=bootstrap or 0, seed=seed,
    )  # fmt: skip
    results, failed = of_each(entries, lambda scans: analyse_sample(scans, settings, on_draw=_told(scans.name)))
    # files first: a reader of the table may go away (`| head`)
    if json_file is not None:
        write_text(json_file, options.json_of([result_text(result) for result in results], single=len(entries) == 1))
        click.echo(f"wrote {json_file}", err=True)
    if csv_file is not None:
        write_csv(csv_file, PROPORTIONS_HEADER, proportions_rows(results))
        click.echo(f"wrote {csv_file}", err=True)
    if figure_file is not None:
        from xrdmica.report.figures import sample_figure, save_figure

        save_figure(sample_figure(results[0]), figure_file)
        click.echo(f"wrote {figure_file}", err=True)
    console = console_for()
    for k, result in enumerate(results):
        if k:
            console.rule(characters="-")
        result_table(result, console)
    if failed:
        ctx.exit(1)


def _told(sample: str) -> Callable[[int, int], None]:
    """Tells every tenth draw of a bootstrap on stderr."""

    def tell(done: int, total: int) -> None:
        if done == total or done % 10 == 0:
            click.echo(f"{sample}: {done} of {total} draws", err=True)

    return tell
