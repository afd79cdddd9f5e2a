"""``xrdmica formula``: what a formula says."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from rich.console import Console

    from xrdmica.chemistry.formula import SiteFormula

__all__ = ["command"]

_COLUMNS = ("formula", "text", "layer_type", "group", "octahedral_character", "layer_charge", "imbalance", "molar_mass", "water")


def _record(given: str, formula: SiteFormula) -> dict[str, Any]:
    from xrdmica.chemistry.formula import SITES

    return {
        "formula": given,
        "text": formula.text(),
        "layer_type": formula.layer_type,
        "group": formula.group,
        "octahedral_character": formula.octahedral_character,
        "sites": {site: {ion: n for ion, n in formula.site(site).items() if n} for site in SITES},
        "layer_charge": _plain(formula.layer_charge),
        "imbalance": _plain(formula.imbalance),
        "molar_mass": _plain(formula.molar_mass),
        "water": formula.water,
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

    console.print(f"[bold]{escape(formula.text())}[/bold]", highlight=False)
    sites = Table("site", "ions per formula unit", title="Sites", title_justify="left")
    for heading in ("sum", "charge"):
        sites.add_column(heading, justify="right")
    for site in SITES:
        ions = "  ".join(f"{ion} {n:.4g}" for ion, n in formula.site(site).items() if n) or "none"
        sites.add_row(site, ions, f"{formula.site_sum(site):.3f}", f"{_plain(formula.site_charge(site)):+.3f}")
    console.print(sites)
    facts = Table(show_header=False, title="What follows", title_justify="left")
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


@click.command(name="formula")
@click.argument("formulas", metavar="FORMULA...", nargs=-1, required=True)
@click.option("--json", "json_file", metavar="FILE", type=_FILE, help="Write all numbers as JSON.")
@click.option("--csv", "csv_file", metavar="FILE", type=_FILE, help="Write one row per formula.")
def command(formulas: tuple[str, ...], json_file: Path | None, csv_file: Path | None) -> None:
    """Read structural formulas: sites, layer charge, group, molar mass and oxides.

    Quote each FORMULA, such as "K(Mg2.2Fe2+0.8)(AlSi3)O10(OH)2", or name the sites:
    "I: K0.9 | M: Al2 | T: Si3.1 Al0.9 | A: O10 (OH)2".
    """
    import json

    from rich.console import Console

    from xrdmica.chemistry.formula import SiteFormula
    from xrdmica.errors import ChemistryError
    from xrdmica.report.files import write_text

    read: list[SiteFormula] = []
    for text in formulas:
        try:
            read.append(SiteFormula.parse(text))
        except ChemistryError as error:
            raise ChemistryError(f"formula {text!r}: {error.what}", why=error.why, fix=error.fix) from error
    console = Console()
    for formula in read:
        _show(console, formula)
    records = [_record(text, formula) for text, formula in zip(formulas, read, strict=True)]
    if json_file is not None:
        write_text(json_file, json.dumps({"formulas": records}, indent=2, ensure_ascii=False) + "\n")
        click.echo(f"wrote {json_file}", err=True)
    if csv_file is not None:
        write_text(csv_file, _csv_text(records))
        click.echo(f"wrote {csv_file}", err=True)
