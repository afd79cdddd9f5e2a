"""What ``xrdmica formula --oxides`` shows and writes."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import click

if TYPE_CHECKING:
    from rich.console import Console

    from xrdmica.chemistry.analysis import AnalysisFormula, Basis, Iron
    from xrdmica.chemistry.formula import SiteFormula
    from xrdmica.chemistry.oxide_table import TableError

__all__ = [
    "analyses_csv", "analysis_record", "parse_interlayer_magnesium", "predicted_record", "read_all", "show_analysis",
    "show_predicted",
]  # fmt: skip

_SITES = ("interlayer", "octahedral", "tetrahedral", "anions")


def parse_interlayer_magnesium(
    ctx: click.Context, parameter: click.Parameter, value: str | None
) -> float | Literal["excess"]:
    """Click callback: a number of atoms, or ``excess``."""
    if value is None:
        return 0.0
    if value == "excess":
        return "excess"
    try:
        return float(value)
    except ValueError:
        raise click.BadParameter(f"{value!r} is neither a number nor 'excess'") from None


def read_all(
    path: Path,
    *,
    layer_type: Basis,
    iron: Iron,
    tetrahedral_iron: bool,
    interlayer_magnesium: float | Literal["excess"],
) -> tuple[list[AnalysisFormula], list[str]]:
    """Formulas of all analyses of a table, and one sentence for each that cannot be used.

    Raises
    ------
    ChemistryError
        If the table cannot be read, or none of its analyses can be used.
    """
    from xrdmica.chemistry.analysis import formulas_from_oxides
    from xrdmica.chemistry.oxide_table import read_oxide_table
    from xrdmica.errors import ChemistryError

    analyses, problems = read_oxide_table(path)
    found: list[AnalysisFormula] = []
    failed: list[ChemistryError | TableError] = list(problems)
    for analysis in analyses:
        try:
            found += formulas_from_oxides(
                analysis, layer_type=layer_type, iron=iron, tetrahedral_iron=tetrahedral_iron,
                interlayer_magnesium=interlayer_magnesium,
            )  # fmt: skip
        except ChemistryError as error:
            failed.append(ChemistryError(f"{path}: {error.what}", why=error.why, fix=error.fix))
    if not found:
        if failed:
            raise failed[0]
        raise ChemistryError(f"{path}: no analysis", fix="add a row or column of numbers")
    return found, [str(error) for error in failed]


def predicted_record(formula: SiteFormula) -> dict[str, Any]:
    """Predicted b, d(001) and d(060) with standard errors [angstrom], or why there are none."""
    from xrdmica.crystals.spacing import predict_spacing
    from xrdmica.errors import StructureError

    try:
        found = predict_spacing(formula)
    except StructureError as error:
        return {"predicted": None, "not_predicted": str(error)}
    names = ("d001", "d001_sigma", "b", "b_sigma", "d060", "d060_sigma")
    return {"predicted": {**{name: _plain(getattr(found, name), 5) for name in names}, "notes": list(found.notes)}}


def show_predicted(console: Console, formula: SiteFormula) -> None:
    """One line: predicted spacings, or why there are none."""
    from rich.markup import escape

    from xrdmica.crystals.spacing import predict_spacing
    from xrdmica.errors import StructureError

    try:
        found = predict_spacing(formula)
    except StructureError as error:
        console.print(f"no predicted spacing: {escape(str(error))}", highlight=False, soft_wrap=True)
        return
    console.print(found.text(), highlight=False, soft_wrap=True)
    for note in found.notes:
        console.print(f"note on the prediction: {escape(note)}", highlight=False, soft_wrap=True)


def _plain(value: float, digits: int = 4) -> float:
    return round(value, digits) + 0.0


def analysis_record(found: AnalysisFormula) -> dict[str, Any]:
    """All numbers of one formula of an analysis."""
    from xrdmica.chemistry.naming import classify

    formula = found.formula
    named = classify(formula)
    return {
        "analysis": found.analysis.name,
        "iron": found.iron,
        "text": formula.rounded(3).text(),
        "name": named.name,
        "species": named.species,
        "series": named.series,
        "group": named.group,
        "octahedral_character": named.character,
        "layer_type": formula.layer_type,
        "sites": {site: {ion: _plain(n, 5) for ion, n in getattr(formula, site).items()} for site in _SITES},
        "layer_charge": _plain(formula.layer_charge),
        "sigma": {key: _plain(value, 5) for key, value in found.sigma.items()},
        "anhydrous_total": _plain(found.analysis.anhydrous_total),
        "water_by_difference": _plain(found.water_by_difference),
        "water_of_formula": _plain(found.water_of_formula),
        **predicted_record(formula),
        "end_members": {name: _plain(share) for name, share in named.shares},
        "reasons": list(named.reasons),
        "flags": list(found.flags),
        "notes": list(found.notes),
    }


def show_analysis(console: Console, found: AnalysisFormula) -> None:
    """Tables for people."""
    from rich.markup import escape
    from rich.table import Table

    from xrdmica.chemistry.naming import classify

    formula, sigma = found.formula, found.sigma
    named = classify(formula)
    iron = "" if found.iron == "none" else f", iron {'as given' if found.iron == 'given' else 'all ' + found.iron}"
    console.print(f"[bold]{escape(found.analysis.name)}[/bold]{iron}: [bold]{escape(named.name)}[/bold]", highlight=False)
    console.print(escape(formula.rounded(2).text()), highlight=False)
    table = Table("site", "ions per formula unit")
    table.add_column("sum", justify="right")
    for site in _SITES:
        content: Mapping[str, float] = getattr(formula, site)
        cells = []
        for ion, n in content.items():
            error = sigma.get(f"{site} {ion}")
            cells.append(f"{ion} {n:.3f}" + (f"±{error:.3f}" if error else ""))
        total = sum(content.values())
        error = sigma.get(f"{site} sum")
        table.add_row(site, "  ".join(cells) or "none", f"{total:.3f}" + (f"±{error:.3f}" if error else ""))
    console.print(table)
    charge = sigma.get("layer charge")
    console.print(
        f"layer charge {_plain(formula.layer_charge):.3f}" + (f" ± {charge:.3f}" if charge else "")
        + f"; total without water {found.analysis.anhydrous_total:.2f} %, water by difference {found.water_by_difference:.2f} %, "
        f"of the formula {found.water_of_formula:.2f} %", highlight=False, soft_wrap=True,
    )  # fmt: skip
    show_predicted(console, formula)
    for reason in named.reasons:
        console.print(f"because: {escape(reason)}", highlight=False, soft_wrap=True)
    for note in found.notes:
        console.print(f"note: {escape(note)}", highlight=False, soft_wrap=True)
    for flag in found.flags:
        console.print(f"[bold]look again:[/bold] {escape(flag)}", highlight=False, soft_wrap=True)
    console.print()


def analyses_csv(records: Sequence[dict[str, Any]]) -> str:
    """One row per formula: every ion of every site with its error."""
    ions: dict[str, None] = {}
    for record in records:
        for site in _SITES:
            ions.update(dict.fromkeys(f"{site} {ion}" for ion in record["sites"][site]))
    ordered = sorted(ions, key=lambda key: _SITES.index(key.split()[0]))
    some_sigma = any(record["sigma"] for record in records)
    plain = ("analysis", "iron", "name", "group", "octahedral_character", "layer_type", "text", "layer_charge")
    columns = [*plain, *(["layer_charge sigma"] if some_sigma else [])]
    for key in ordered:
        columns += [key, f"{key} sigma"] if some_sigma else [key]
    columns += ["anhydrous_total", "water_by_difference", "water_of_formula", "end_members", "flags", "notes"]
    stream = io.StringIO()
    writer = csv.DictWriter(stream, columns, lineterminator="\n", extrasaction="ignore")
    writer.writeheader()
    for record in records:
        row: dict[str, Any] = {key: record[key] for key in plain}
        row.update({key: record[key] for key in ("anhydrous_total", "water_by_difference", "water_of_formula")})
        row["layer_charge sigma"] = record["sigma"].get("layer charge", "")
        for key in ordered:
            site, ion = key.split(" ", 1)
            row[key] = record["sites"][site].get(ion, "")
            row[f"{key} sigma"] = record["sigma"].get(key, "") if ion in record["sites"][site] else ""
        row["end_members"] = "; ".join(f"{name} {share:.3f}" for name, share in record["end_members"].items())
        row["flags"] = "; ".join(record["flags"])
        row["notes"] = "; ".join(record["notes"])
        writer.writerow(row)
    return stream.getvalue()
