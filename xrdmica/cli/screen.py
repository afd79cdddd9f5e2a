"""``xrdmica screen``: the swelling screen of a soil."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrdmica.cli import options

if TYPE_CHECKING:
    from rich.console import Console

    from xrdmica.interpret.screening import IndexTests, Screening
    from xrdmica.results import SampleResult

__all__ = ["command"]

_PERCENT = click.FloatRange(0, 100)
_HEADER = (
    "sample", "verdict", "expandable_percent", "low95", "high95", "basis", "cec_low", "cec_typical", "cec_high", "surface_low",
    "surface_typical", "surface_high", "uptake", "reason",
)  # fmt: skip


@click.command(
    name="screen",
    epilog='Example: xrdmica screen demo_patterns --clay-percent 35 --liquid-limit 62 --plastic-limit 27 --csv screen.csv',
)
@options.paths_argument
@options.sample_option
@options.radiation_option
@options.outside_option
@options.instrument_option
@click.option("--clay-percent", type=_PERCENT, metavar="PERCENT", help="Clay fraction of the soil; a sheet's column goes first.")
@click.option("--liquid-limit", type=click.FloatRange(0, 1000), metavar="PERCENT", help="Liquid limit of the soil.")
@click.option("--plastic-limit", type=click.FloatRange(0, 1000), metavar="PERCENT", help="Plastic limit of the soil.")
@click.option("--methylene-blue", type=click.FloatRange(0, 1000), metavar="MG_PER_G", help="Methylene blue taken up by the soil.")
@click.option("--cec", type=click.FloatRange(0, 300), metavar="CMOL_PER_KG", help="Cation exchange capacity of the soil.")
@options.json_option
@options.csv_option
@click.pass_context
def command(
    ctx: click.Context,
    paths: tuple[str, ...],
    sample: str | None,
    radiation: str | None,
    allow_outside: bool,
    instrument: str | None,
    clay_percent: float | None,
    liquid_limit: float | None,
    plastic_limit: float | None,
    methylene_blue: float | None,
    cec: float | None,
    json_file: Path | None,
    csv_file: Path | None,
) -> None:
    """Say whether a soil swells, from its swelling layers, and hold the laboratory's index tests against it.

    PATH is a sample sheet, a folder of exports, or the scan files of one sample. A sheet's columns clay_percent, liquid_limit,
    plastic_limit, methylene_blue and cec go before the options. The screen is no design value.
    """
    if liquid_limit is not None and plastic_limit is not None and plastic_limit > liquid_limit:
        raise click.UsageError("--plastic-limit is above --liquid-limit: exchange the two.")
    from xrdmica.batch.analyse import analyse_sample
    from xrdmica.cli.inputs import entries_of, of_each
    from xrdmica.interpret.screening import IndexTests, screen_soil
    from xrdmica.report.files import write_csv, write_text
    from xrdmica.report.tables import console_for

    entries = entries_of(paths, radiation=radiation, sample=sample, allow_outside=allow_outside)
    settings = options.settings_from(radiation, (), instrument, curves=False)
    results, failed = of_each(entries, lambda scans: analyse_sample(scans, settings))
    usual = IndexTests(clay_percent, liquid_limit, plastic_limit, methylene_blue, cec)
    screens = [
        screen_soil(r.findings, r.proportions, r.swelling, _tests_of(r, usual), cautions=r.cautions) for r in results
    ]  # fmt: skip
    if json_file is not None:
        texts = [screen.model_dump_json(indent=2) for screen in screens]
        write_text(json_file, options.json_of(texts, single=len(entries) == 1))
        click.echo(f"wrote {json_file}", err=True)
    if csv_file is not None:
        write_csv(csv_file, _HEADER, (_row(screen) for screen in screens))
        click.echo(f"wrote {csv_file}", err=True)
    console = console_for()
    for k, screen in enumerate(screens):
        if k:
            console.rule(characters="-")
        _show(screen, console)
    if failed:
        ctx.exit(1)


def _tests_of(result: SampleResult, usual: IndexTests) -> IndexTests:
    """The index tests of a sample: columns of the sheet before the options."""
    from dataclasses import fields, replace

    from xrdmica.errors import SheetError

    found = {}
    for field in fields(usual):
        text = result.details.get(field.name, "").strip().replace(",", ".")
        if text:
            try:
                found[field.name] = float(text)
            except ValueError:
                where = f"sample {result.sample}, column {field.name}"
                raise SheetError(f"{where}: {text!r} is no number", fix="correct it") from None
    return replace(usual, **found)


def _row(screen: Screening) -> tuple[str | float | None, ...]:
    ranges = {p.name: p for p in screen.properties}
    numbers: list[float | None] = []
    for name in ("CEC", "specific surface"):
        found = ranges.get(name)
        numbers += [None, None, None] if found is None else [found.low, found.typical, found.high]
    return (
        screen.sample, screen.verdict, screen.expandable_percent, screen.low95, screen.high95, screen.basis, *numbers,
        screen.uptake, screen.reason,
    )  # fmt: skip


def _show(screen: Screening, console: Console) -> None:
    from rich.padding import Padding
    from rich.text import Text

    from xrdmica.report.tables import list_section, plain

    console.print(Text(f"Sample {plain(screen.sample)}: {screen.verdict}", style="bold"))
    console.print(Padding(Text(plain(screen.reason)), (0, 0, 0, 2), expand=False))
    lines = []
    if screen.expandable_percent is not None:
        span = "" if screen.low95 is None or screen.high95 is None else f" ({screen.low95:.1f} to {screen.high95:.1f}, 95 %)"
        lines.append(f"expandable layers {screen.expandable_percent:.1f} %{span}, {screen.basis}")
    if screen.interlayer:
        lines.append(screen.interlayer)
    lines += [f"expected {p.name} {p.typical:.0f} {p.unit} ({p.low:.0f} to {p.high:.0f})" for p in screen.properties]
    if screen.uptake:
        lines.append(f"water uptake: {screen.uptake}")
    for title, rows in (
        ("What follows", lines), ("Look-alikes that do not swell", screen.look_alikes), ("Other hazards seen", screen.hazards),
        ("Index tests", screen.consistency), ("Measure next", screen.measure_next), ("Cautions", screen.cautions),
    ):  # fmt: skip
        if rows:
            list_section(console, title, list(rows))
