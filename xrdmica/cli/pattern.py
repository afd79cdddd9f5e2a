"""``xrdmica pattern``: the calculated pattern of a phase or of a formula."""

from __future__ import annotations

import csv
import io
import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from xrdmica.cli.options import csv_option, file_option, json_option

if TYPE_CHECKING:
    from xrdmica.calculated.pattern import CalculatedPattern
    from xrdmica.diffraction.scattering import FormFactors

__all__ = ["command"]


@click.command(name="pattern", epilog="Example: xrdmica pattern talc")
@click.argument("subject", metavar="PHASE|FORMULA")
@click.option("--mount", type=click.Choice(["oriented", "random"]), default="oriented", show_default=True, help="Kind of mount.")
@click.option("--radiation", metavar="TUBE", default="Cu", show_default=True, help="Cu, Co, Fe, Cr, Mo or a wavelength in Å.")
@click.option("--treatment", metavar="NAME", default="air_dried", show_default=True, help="Such as glycolated or heated_550.")
@click.option(
    "--range", "limits", type=float, nargs=2, default=(2.0, 70.0), show_default=True, metavar="LOW HIGH",
    help="Angles in degrees two-theta.",
)
@click.option("--step", type=float, default=0.02, show_default=True, metavar="DEGREES", help="Step of the curve.")
@click.option("--mean-layers", type=float, metavar="NUMBER", help="Mean number of layers per stack; usual value of the phase.")
@click.option(
    "--spread", type=float, default=12.0, show_default=True, metavar="DEGREES", help="Tilt of the layers in an oriented mount."
)
@click.option("--polytype", metavar="NAME", help="Polytype, such as 2M1; the usual one when left out.")
@click.option("--least", type=click.FloatRange(0, 100), default=1.0, show_default=True, metavar="PERCENT",
              help="Weakest line in the table on the screen; files hold all.")
@click.option(
    "--form-factors", type=click.Choice(["ionic", "neutral"]), default="ionic", show_default=True,
    help="Scattering of charged ions or of neutral atoms; the table shows what the other choice would give.",
)
@csv_option
@file_option("--curve", "Write the curve as CSV: two_theta, intensity.")
@json_option
@file_option("--figure", "Draw the pattern; FILE ends in .png, .svg or .pdf.")
@file_option("--cif", "Write the structure as CIF.")
def command(
    subject: str,
    mount: str,
    radiation: str,
    treatment: str,
    limits: tuple[float, float],
    step: float,
    mean_layers: float | None,
    spread: float,
    polytype: str | None,
    least: float,
    form_factors: FormFactors,
    csv_file: Path | None,
    curve_file: Path | None,
    json_file: Path | None,
    figure_file: Path | None,
    cif_file: Path | None,
) -> None:
    """Calculate the oriented or random pattern of a phase of the library, or of a formula.

    Quote a formula, such as "K(Mg2.2Fe2+0.8)(AlSi3)O10(OH)2". Intensities are areas relative to the strongest line.
    """  # fmt: skip
    from xrdmica.calculated.pattern import calculate_pattern
    from xrdmica.scans.write import write_atomically

    chosen: dict[str, Any] = {
        "mount": "random" if mount == "random" else "oriented", "treatment": treatment, "radiation": radiation,
        "two_theta_range": limits, "step": step, "mean_layers": mean_layers, "orientation_spread": spread, "polytype": polytype,
    }  # fmt: skip
    pattern = calculate_pattern(subject, model=form_factors, **chosen)
    other = calculate_pattern(subject, model="neutral" if form_factors == "ionic" else "ionic", **chosen)
    rival = _rival_intensities(pattern, other)
    # files first: a reader of the table may go away (`| head`)
    if csv_file is not None:
        write_atomically(csv_file, _table(pattern, rival))
    if curve_file is not None:
        write_atomically(curve_file, _curve(pattern))
    if json_file is not None:
        write_atomically(json_file, _as_json(pattern, form_factors, rival))
    if figure_file is not None:
        write_atomically(figure_file, _drawn(pattern, figure_file))
    if cif_file is not None:
        from xrdmica.calculated.subject import cif_of

        write_atomically(cif_file, cif_of(subject, polytype))
    _show(pattern, least, form_factors, rival)


def _rival_intensities(pattern: CalculatedPattern, other: CalculatedPattern) -> list[float | None]:
    """Intensity of every line with the other form factors; None for composite lines, which have no indices to compare by."""
    by_index = {line.hkl: line.intensity for line in other.reflections if line.hkl is not None}
    return [None if line.hkl is None else by_index.get(line.hkl) for line in pattern.reflections]


def _show(pattern: CalculatedPattern, least: float, form_factors: FormFactors, rival: list[float | None]) -> None:
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table

    notes = Console(stderr=True, highlight=False)
    for note in pattern.notes:
        notes.print(f"{pattern.name}: {note}", markup=False, soft_wrap=True)
    console = Console(highlight=False)
    rows = list(zip(pattern.reflections, rival, strict=True))
    shown = [(line, also) for line, also in rows if line.intensity >= least]
    unlike = "neutral atoms" if form_factors == "ionic" else "ions"
    tube = pattern.radiation.name
    console.print(
        f"{pattern.name}: {pattern.mount} mount, {pattern.treatment.label}, "
        f"{tube + ' radiation' if tube[0].isalpha() else f'wavelength {tube} Å'}", markup=False, soft_wrap=True,
    )  # fmt: skip
    table = Table(box=SIMPLE_HEAD, padding=(0, 1), pad_edge=False)
    for head in ("hkl", "d [Å]", "2θ [°]", "intensity", f"with {unlike}", "multiplicity"):
        table.add_column(head, justify="right", no_wrap=True)
    for line, also in shown:
        table.add_row(
            line.label or "composite", f"{line.d_spacing:.4f}", f"{line.two_theta:.3f}", f"{line.intensity:.1f}",
            "" if also is None else f"{also:.1f}", str(line.multiplicity),
        )  # fmt: skip
    console.print(table)
    if len(shown) < len(pattern.reflections):
        console.print(f"{len(pattern.reflections) - len(shown)} lines below {least:g} not shown", soft_wrap=True)


def _table(pattern: CalculatedPattern, rival: list[float | None]) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(["h", "k", "l", "d_spacing", "two_theta", "intensity", "multiplicity", "intensity_other_form_factors"])
    for line, also in zip(pattern.reflections, rival, strict=True):
        hkl = line.hkl or ("", "", "")
        numbers = [f"{line.d_spacing:.5f}", f"{line.two_theta:.4f}", f"{line.intensity:.4f}", line.multiplicity]
        writer.writerow([*hkl, *numbers, "" if also is None else f"{also:.4f}"])
    return stream.getvalue()


def _curve(pattern: CalculatedPattern) -> str:
    lines = ["two_theta,intensity"]
    lines += [f"{x:.4f},{y:.6g}" for x, y in zip(pattern.two_theta, pattern.intensity, strict=True)]
    return "\n".join(lines) + "\n"


def _as_json(pattern: CalculatedPattern, form_factors: FormFactors, rival: list[float | None]) -> str:
    record = {
        "name": pattern.name,
        "mount": pattern.mount,
        "treatment": pattern.treatment.name,
        "radiation": pattern.radiation.name,
        "wavelengths": list(pattern.radiation.wavelengths),
        "form_factors": form_factors,
        "notes": list(pattern.notes),
        "reflections": [
            {
                "hkl": None if line.hkl is None else list(line.hkl),
                "d_spacing": round(line.d_spacing, 5),
                "two_theta": round(line.two_theta, 4),
                "intensity": round(line.intensity, 4),
                "multiplicity": line.multiplicity,
                "intensity_other_form_factors": None if also is None else round(also, 4),
            }
            for line, also in zip(pattern.reflections, rival, strict=True)
        ],
        "two_theta": [round(float(x), 4) for x in pattern.two_theta],
        "intensity": [round(float(y), 5) for y in pattern.intensity],
    }
    return json.dumps(record, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def _drawn(pattern: CalculatedPattern, path: Path) -> bytes:
    from xrdmica.calculated.figure import pattern_figure
    from xrdmica.errors import XrdmicaError

    kind = path.suffix.lower().lstrip(".")
    if kind not in ("png", "svg", "pdf"):
        raise XrdmicaError(f"{path}: figures of this kind are not drawn", fix="end the name with .png, .svg or .pdf")
    stream = io.BytesIO()
    pattern_figure(pattern).savefig(stream, format=kind, dpi=150)
    return stream.getvalue()
