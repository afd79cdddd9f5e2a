"""``xrdmica phases``: what the library holds."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from rich.console import Console

    from xrdmica.crystals.library import Phase, State

__all__ = ["command"]

_TREATMENTS = ("air_dried", "glycolated", "glycerolated", "heated_400", "heated_550")
_WIDTH = 160
_COLUMNS = ("id", "name", "symbol", "group", *_TREATMENTS, "formula")


def _formula(phase: Phase) -> str:
    """The formula as usually met: exchange variables at their typical values."""
    if phase.stack is not None:
        return f"{phase.stack.first} + {phase.stack.second}, R{phase.stack.reichweite}"
    if phase.formula.framework:
        return _framework(phase.formula.framework)
    from xrdmica.chemistry.formula import SITES, SiteFormula
    from xrdmica.crystals.layer import formula_with

    usual = {v.id: v.typical for v in phase.variables if v.kind == "exchange"}
    formula = formula_with(phase, usual)
    # an exchange leaves the dust of binary fractions behind
    interlayer, octahedral, tetrahedral, anions = (
        {ion: round(n, 6) for ion, n in formula.site(site).items()} for site in SITES
    )  # fmt: skip
    return SiteFormula(formula.layer_type, interlayer, octahedral, tetrahedral, anions).text()


def _framework(content: Mapping[str, float]) -> str:
    from xrdmica.chemistry.ions import element_of

    text = ""
    for ion, n in content.items():
        element = element_of(ion)
        count = "" if n == 1 else f"{n:g}"
        # groups such as OH need brackets once they are counted
        text += f"({element}){count}" if count and element in ("OH", "H2O", "NH4") else f"{element}{count}"
    return text


def _spacing(state: State) -> str:
    return "lost" if state.lost or state.spacing is None else f"{state.spacing:.2f}"


def _by_treatment(phase: Phase, name: str) -> str:
    from xrdmica.scans.treatment import Treatment

    return " / ".join(dict.fromkeys(_spacing(state) for state in phase.states_for(Treatment.parse(name))))


def _row(phase: Phase) -> dict[str, str]:
    spacings = {name: _by_treatment(phase, name) for name in _TREATMENTS}
    facts = {"id": phase.id, "name": phase.name, "symbol": phase.symbol, "group": phase.group}
    return {**facts, **spacings, "formula": _formula(phase)}


def _near(phase: Phase, spacing: float, within: float) -> bool:
    """Whether the first basal line of any state may lie within `within` of `spacing` [angstrom]."""
    for state in phase.states:
        if state.spacing_range is None:
            continue
        low, high = state.spacing_range
        # the usual spacing counts with the tolerance, the range of the state as it stands
        if low <= spacing <= high or (state.spacing is not None and abs(state.spacing - spacing) <= within):
            return True
    return False


def _list(console: Console, rows: Sequence[dict[str, str]]) -> None:
    from rich.markup import escape
    from rich.table import Table

    table = Table(title="First basal spacing by treatment (angstrom)", title_justify="left")
    table.add_column("id", no_wrap=True)
    for heading in ("symbol", "group", "air-dried", "glycol", "glycerol", "400 °C", "550 °C", "formula"):
        table.add_column(heading, overflow="fold")
    for row in rows:
        table.add_row(*(escape(row[key]) for key in _COLUMNS if key != "name"))
    console.print(table)


def _table(console: Console, title: str, headings: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    from rich.markup import escape
    from rich.table import Table

    if not rows:
        return
    table = Table(title=title, title_justify="left")
    for heading in headings:
        table.add_column(heading, overflow="fold")
    for row in rows:
        table.add_row(*(escape(cell) for cell in row))
    console.print(table)


def _condition_words(state: State) -> str:
    text = ", ".join(c.replace("_", "-") for c in state.conditions)
    if state.temperature is not None and "heated" in state.conditions:
        text += f" ({state.temperature[0]:g}-{state.temperature[1]:g} °C)"
    return text + (f"; with {', '.join(state.cations)}" if state.cations else "")


def _show(console: Console, phase: Phase) -> None:
    from rich.markup import escape

    symbol = f" ({phase.symbol})" if phase.symbol else ""
    console.print(f"[bold]{escape(phase.name)}[/bold]{escape(symbol)}: {escape(phase.group)}", highlight=False)
    console.print(f"formula: {escape(_formula(phase))}", highlight=False)
    if phase.d060 is not None:
        console.print(f"d(060): {phase.d060:.3f} angstrom", highlight=False)
    if phase.stack is not None:
        low, usual, high = phase.stack.fraction
        console.print(
            f"stack: {phase.stack.first} {usual:.0%} ({low:.0%} to {high:.0%}), rest {phase.stack.second}; "
            f"Reichweite {phase.stack.reichweite}. {escape(phase.stack.source)}", highlight=False,
        )  # fmt: skip
    _table(
        console, "States", ("state", "treatment", "first spacing (angstrom)", "source"),
        [
            (
                s.id, _condition_words(s),
                _spacing(s) + (f" ({s.spacing_range[0]:g}-{s.spacing_range[1]:g})" if s.spacing_range else ""), s.source,
            )
            for s in phase.states
        ],
    )  # fmt: skip
    _table(
        console, "What a fit may move", ("variable", "lowest", "usual", "highest", "unit", "meaning"),
        [
            (
                v.id, f"{v.minimum:g}", f"{v.typical:g}", f"{v.maximum:g}", v.unit,
                f"{v.into} for {v.out}, {v.site}" if v.kind == "exchange" else "layers scattering together",
            )
            for v in phase.variables
        ],
    )  # fmt: skip
    _table(console, "Look-alikes", ("phase", "told by"), [(a.id, a.told_by) for a in phase.look_alikes])
    _table(
        console, "Cells", ("polytype", "a b c (angstrom) alpha beta gamma (degree)", "space group", "Z", "atoms", "source"),
        [
            (p.name, "  ".join(f"{x:g}" for x in p.cell), p.space_group, f"{p.formula_units:g}",
             f"{len(p.sites)} sites" if p.sites else "none", p.source)
            for p in phase.polytypes
        ],
    )  # fmt: skip
    if phase.layer is not None:
        console.print(f"layer: {escape(phase.layer.source)}", highlight=False)
    for source in phase.sources:
        console.print(f"source: {escape(source)}", highlight=False)
    console.print(f"checked against: {escape(phase.checked_against)}", highlight=False)
    for caution in phase.cautions:
        console.print(f"[bold]caution:[/bold] {escape(caution)}", highlight=False)


def _csv_text(rows: Sequence[dict[str, str]]) -> str:
    import csv
    import io

    stream = io.StringIO()
    writer = csv.DictWriter(stream, _COLUMNS, lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return stream.getvalue()


def _record(phase: Phase) -> dict[str, Any]:
    return phase.model_dump(mode="json", exclude_none=True)


def _chosen(group: str | None, near: float | None, within: float) -> list[Phase]:
    from xrdmica.crystals.library import all_phases

    phases = [p for p in all_phases() if group is None or p.group == group]
    if near is not None:
        phases = [p for p in phases if _near(p, near, within)]
    return phases


def _group(ctx: click.Context, parameter: click.Parameter, value: str | None) -> str | None:
    if value is None:
        return None
    from xrdmica.crystals.library import GROUPS

    if value.lower() not in GROUPS:
        raise click.BadParameter(f"{value!r} is none of {', '.join(GROUPS)}")
    return value.lower()


_FILE = click.Path(dir_okay=False, path_type=Path)


@click.command(name="phases", epilog="Example: xrdmica phases --near 9.6")
@click.option("--group", metavar="GROUP", callback=_group, help="Only this group, such as 'true mica' or companion.")
@click.option(
    "--near", metavar="D", type=click.FloatRange(3, 60),
    help="Only phases whose first basal line may lie near D angstrom after some treatment.",
)
@click.option(
    "--within", metavar="D", type=click.FloatRange(0, 5), default=0.15, show_default=True, help="Tolerance of --near in angstrom."
)
@click.option("--show", metavar="ID", help="All of one phase: formula, states, variables, look-alikes, sources, cautions.")
@click.option("--json", "json_file", metavar="FILE", type=_FILE, help="Write the phases in full as JSON.")
@click.option("--csv", "csv_file", metavar="FILE", type=_FILE, help="Write the table as CSV.")
def command(
    group: str | None, near: float | None, within: float, show: str | None, json_file: Path | None, csv_file: Path | None
) -> None:  # fmt: skip
    """List the phases of the library, or show one of them in full.

    --show also takes a phase file of your own, and so checks it.
    """
    import json

    from rich.console import Console

    from xrdmica.crystals.library import load_phase
    from xrdmica.report.files import write_text

    if show is not None and (group is not None or near is not None):
        raise click.UsageError("--show prints one phase: leave out --group and --near")
    console = Console()
    if not console.is_terminal:
        # a file or a pipe has no width of its own; the tables are wide
        console = Console(width=max(console.width, _WIDTH))
    phases = [load_phase(show)] if show is not None else _chosen(group, near, within)
    rows = [_row(phase) for phase in phases]
    if show is not None:
        _show(console, phases[0])
    elif phases:
        _list(console, rows)
    else:
        click.echo("no phase of the library answers this", err=True)
    if near is not None:
        click.echo("interstratified phases have no spacing of their own and are left out by --near", err=True)
    if json_file is not None:
        write_text(json_file, json.dumps({"phases": [_record(p) for p in phases]}, indent=2, ensure_ascii=False) + "\n")
        click.echo(f"wrote {json_file}", err=True)
    if csv_file is not None:
        write_text(csv_file, _csv_text(rows))
        click.echo(f"wrote {csv_file}", err=True)
