"""``xrdmica identify``: which phases, and why."""

from __future__ import annotations

from pathlib import Path

import click

from xrdmica.cli import options

__all__ = ["command"]


@click.command(name="identify")
@options.paths_argument
@options.sample_option
@options.radiation_option
@options.outside_option
@options.phase_option
@options.instrument_option
@options.json_option
@options.csv_option
@click.pass_context
def command(
    ctx: click.Context,
    paths: tuple[str, ...],
    sample: str | None,
    radiation: str | None,
    allow_outside: bool,
    phases: tuple[str, ...],
    instrument: str | None,
    json_file: Path | None,
    csv_file: Path | None,
) -> None:
    """Say which phases are in a sample, with the evidence for and against each.

    PATH is a sample sheet, a folder of exports, or the scan files of one sample. The treatment of a file is read from
    its name (S12_EG.xy) or given behind a colon (scan7.xy:glycolated).
    """
    from xrdmica.batch.analyse import analyse_sample
    from xrdmica.cli.inputs import entries_of, of_each
    from xrdmica.report.files import EVIDENCE_HEADER, evidence_rows, write_csv, write_text
    from xrdmica.report.tables import console_for, evidence_table

    settings = options.settings_from(radiation, phases, instrument, curves=False)
    entries = entries_of(paths, radiation=radiation, sample=sample, allow_outside=allow_outside)
    results, failed = of_each(entries, lambda scans: analyse_sample(scans, settings))
    console = console_for()
    for k, result in enumerate(results):
        if k:
            console.rule(characters="-")
        evidence_table(result.findings, console, scans=result.scans)
    if json_file is not None:
        texts = [result.findings.model_dump_json(indent=2) for result in results]
        write_text(json_file, options.json_of(texts, single=len(entries) == 1))
        click.echo(f"wrote {json_file}", err=True)
    if csv_file is not None:
        write_csv(csv_file, EVIDENCE_HEADER, evidence_rows(result.findings for result in results))
        click.echo(f"wrote {csv_file}", err=True)
    if failed:
        ctx.exit(1)
