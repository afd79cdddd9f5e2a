"""``xrdmica formula``: what a formula says."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import click

from xrdmica.cli.oxide_analyses import (
    analyses_csv,
    analysis_record,
    parse_interlayer_magnesium,
    predicted_record,
    read_all,
    show_analysis,
    show_predicted,
)

if TYPE_CHECKING:
    from rich.console import Console

    from xrdmica.chemistry.analysis import Basis, Iron
    from xrdmica.chemistry.formula import SiteFormula

__all__ = ["command"]

_COLUMNS = (
    "formula", "text", "name", "layer_type", "group", "octahedral_character", "layer_charge", "imbalance", "molar_mass", "water",
)  # fmt: skip


def _record(given: str, formula: SiteFormula) -> dict[str, Any]:
    from xrdmica.chemistry.formula import SITES
    from xrdmica.chemistry.naming import classify

    named = classify(formula)
    return {
        "formula": given,
        "text": formula.text(),
        "name": named.name,
        "species": named.species,
        "series": named.series,
        "end_members": {name: _plain(share) for name, share in named.shares},
        "reasons": list(named.reasons),
        "layer_type": formula.layer_type,
        "group": formula.group,
        "octahedral_character": formula.octahedral_character,
        "sites": {site: {ion: n for ion, n in formula.site(site).items() if n} for site in SITES},
        "layer_charge": _plain(formula.layer_charge),
        "imbalance": _plain(formula.imbalance),
        "molar_mass": _plain(formula.molar_mass),
        "water": formula.water,
        **predicted_record(formula),
        "oxides": {name: _plain(value) for name, value in formula.oxides().items()},
        "notes": list(formula.notes),
    }


def _plain(value: float) -> float:
    # + 0.0 turns the -0.0 of a rounded residue into 0.0
    return round(value, 6) + 0.0


def _show(console: Console, formula: SiteFormula) -> None:
    from rich.markup import escape
    from rich.table import Table

    from xrdmica.chemistry.formula import SITES
    from xrdmica.chemistry.naming import classify

    named = classify(formula)
    console.print(f"[bold]{escape(formula.text())}[/bold]", highlight=False)
    sites = Table("site", "ions per formula unit", title="Sites", title_justify="left")
    for heading in ("sum", "charge"):
        sites.add_column(heading, justify="right")
    for site in SITES:
        ions = "  ".join(f"{ion} {n:.4g}" for ion, n in formula.site(site).items() if n) or "none"
        sites.add_row(site, ions, f"{formula.site_sum(site):.3f}", f"{_plain(formula.site_charge(site)):+.3f}")
    console.print(sites)
    facts = Table(show_header=False, title="What follows", title_justify="left")
    facts.add_row("name", escape(named.name))
    facts.add_row("group", formula.group)
    facts.add_row("octahedral sheet", formula.octahedral_character)
    facts.add_row("layer", formula.layer_type)
    facts.add_row("layer charge per formula unit", f"{round(formula.layer_charge, 3) + 0.0:.3f}")
    facts.add_row("sum of all charges", f"{round(formula.imbalance, 3) + 0.0:+.3f}")
    facts.add_row("molar mass, dry (g/mol)", f"{formula.molar_mass:.2f}")
    if formula.water:
        facts.add_row("interlayer water, not in the mass", f"{formula.water:g} H2O")
    console.print(facts)
    oxides = Table("oxide", title="Composition, dry", title_justify="left")
    oxides.add_column("wt %", justify="right")
    percent = formula.oxides()
    for name, value in percent.items():
        oxides.add_row(name, f"{value:.2f}")
    oxides.add_section()
    oxides.add_row("sum", f"{sum(percent.values()):.2f}")
    console.print(oxides)
    show_predicted(console, formula)
    for reason in named.reasons:
        console.print(f"because: {escape(reason)}", highlight=False)
    for note in formula.notes:
        console.print(f"note: {escape(note)}", highlight=False)


def _csv_text(records: list[dict[str, Any]]) -> str:
    import csv
    import io

    from xrdmica.chemistry.oxides import OXIDE_ORDER

    found = {name for record in records for name in record["oxides"]}
    columns = [*_COLUMNS, *(name for name in OXIDE_ORDER if name in found), "notes"]
    stream = io.StringIO()
    writer = csv.DictWriter(stream, columns, lineterminator="\n")
    writer.writeheader()
    for record in records:
        row = {key: record[key] for key in _COLUMNS}
        writer.writerow({**row, **record["oxides"], "notes": "; ".join(record["notes"])})
    return stream.getvalue()


_FILE = click.Path(dir_okay=False, path_type=Path)


@click.command(name="formula", epilog="Example: xrdmica formula 'K Mg3 (Al Si3) O10 (OH)2'")
@click.argument("formulas", metavar="[FORMULA]...", nargs=-1)
@click.option("--oxides", "oxide_file", metavar="FILE", type=_FILE, help="Table of analyses in weight percent of oxides.")
@click.option(
    "--layer", "layer_type", type=click.Choice(["auto", "2:1", "1:1", "2:1:1"]), default="auto", show_default=True,
    help="Layer that the analyses are normalised to (2:1:1 is chlorite).",
)
@click.option(
    "--iron", type=click.Choice(["auto", "given", "ferrous", "ferric"]), default="auto", show_default=True,
    help="Oxidation of iron; auto brackets it unless FeO and Fe2O3 are both given.",
)
@click.option("--tetrahedral-iron", is_flag=True, help="Fill a short tetrahedral site with Fe3+.")
@click.option(
    "--interlayer-magnesium", metavar="ATOMS|excess", callback=parse_interlayer_magnesium,
    help="Mg to put between the layers, or all above a full octahedral sheet.",
)
@click.option("--json", "json_file", metavar="FILE", type=_FILE, help="Write all numbers as JSON.")
@click.option("--csv", "csv_file", metavar="FILE", type=_FILE, help="Write one row per formula.")
@click.pass_context
def command(
    ctx: click.Context,
    formulas: tuple[str, ...],
    oxide_file: Path | None,
    layer_type: Basis,
    iron: Iron,
    tetrahedral_iron: bool,
    interlayer_magnesium: float | Literal["excess"],
    json_file: Path | None,
    csv_file: Path | None,
) -> None:
    """Read structural formulas or oxide analyses: sites, layer charge, name with reasons, molar mass and oxides.

    Quote each FORMULA, such as "K(Mg2.2Fe2+0.8)(AlSi3)O10(OH)2", or name the sites:
    "I: K0.9 | M: Al2 | T: Si3.1 Al0.9 | A: O10 (OH)2".
    """  # fmt: skip
    import json

    from rich.console import Console

    from xrdmica.chemistry.formula import SiteFormula
    from xrdmica.errors import ChemistryError
    from xrdmica.report.files import write_text

    if bool(formulas) == (oxide_file is not None):
        raise click.UsageError("give formulas, or a table with --oxides FILE")
    console = Console()
    if oxide_file is not None:
        found, failed = read_all(
            oxide_file, layer_type=layer_type, iron=iron, tetrahedral_iron=tetrahedral_iron,
            interlayer_magnesium=interlayer_magnesium,
        )  # fmt: skip
        for one in found:
            show_analysis(console, one)
        records = [analysis_record(one) for one in found]
        table = analyses_csv(records)
    else:
        read: list[SiteFormula] = []
        failed = []
        for text in formulas:
            try:
                read.append(SiteFormula.parse(text))
            except ChemistryError as error:
                raise ChemistryError(f"formula {text!r}: {error.what}", why=error.why, fix=error.fix) from error
        for formula in read:
            _show(console, formula)
        records = [_record(text, formula) for text, formula in zip(formulas, read, strict=True)]
        table = _csv_text(records)
    for sentence in failed:
        click.echo(f"xrdmica: {sentence}", err=True)
    if json_file is not None:
        write_text(json_file, json.dumps({"formulas": records}, indent=2, ensure_ascii=False) + "\n")
        click.echo(f"wrote {json_file}", err=True)
    if csv_file is not None:
        write_text(csv_file, table)
        click.echo(f"wrote {csv_file}", err=True)
    if failed:
        ctx.exit(1)
