"""``xrdmica identify``: which phases, and why."""

from __future__ import annotations

from pathlib import Path

import click

from xrdmica.cli import options

__all__ = ["command"]


@click.command(name="identify", epilog="Example: xrdmica identify demo_patterns --sample GB3-02.0")
@options.paths_argument
@options.sample_option
@options.radiation_option
@options.outside_option
@options.phase_option
@options.instrument_option
@options.json_option
@options.csv_option
@click.option("--all", "everything", is_flag=True, help="Print all facts, not the weightiest of each phase.")
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
    everything: bool,
) -> None:
    """Say which phases are in a sample, with the evidence for and against each.

    PATH is a sample sheet, a folder of exports, or the scan files of one sample. The treatment of a file is read from
    its name (S12_EG.xy) or given behind a colon (scan7.xy:glycolated).
    """
    from xrdmica.cli.inputs import entries_of, of_each
    from xrdmica.crystals.library import load_phase
    from xrdmica.diffraction.optics import load_instrument
    from xrdmica.identify.decide import identify
    from xrdmica.report.files import EVIDENCE_HEADER, evidence_rows, write_csv, write_text
    from xrdmica.report.scans import scan_summaries
    from xrdmica.report.tables import console_for, evidence_table

    library = [load_phase(phase) for phase in phases] or None
    geometry = load_instrument(instrument) if instrument is not None else None
    entries = entries_of(paths, radiation=radiation, sample=sample, allow_outside=allow_outside)
    pairs, failed = of_each(entries, lambda scans: (identify(scans, library, geometry), scan_summaries(scans)))
    # files first: a reader of the table may go away (`| head`)
    if json_file is not None:
        texts = [findings.model_dump_json(indent=2) for findings, _ in pairs]
        write_text(json_file, options.json_of(texts, single=len(entries) == 1))
        click.echo(f"wrote {json_file}", err=True)
    if csv_file is not None:
        write_csv(csv_file, EVIDENCE_HEADER, evidence_rows(findings for findings, _ in pairs))
        click.echo(f"wrote {csv_file}", err=True)
    console = console_for()
    for k, (findings, scans) in enumerate(pairs):
        if k:
            console.rule(characters="-")
        evidence_table(findings, console, scans=scans, most=None if everything else 8)
    if failed:
        ctx.exit(1)
