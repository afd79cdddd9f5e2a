"""Options that several commands share."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from xrdmica.errors import XrdmicaError

if TYPE_CHECKING:
    from xrdmica.batch.analyse import Settings

__all__ = [
    "bootstrap_options", "calibration_option", "csv_option", "figure_option", "file_option", "formula_option",
    "instrument_option", "joint_option", "json_of", "json_option", "outside_option", "paths_argument",
    "phase_option", "radiation_option", "sample_option", "settings_from", "workers_option",
]  # fmt: skip

Command = TypeVar("Command", bound=Callable[..., Any])


def _radiation(ctx: click.Context, parameter: click.Parameter, value: str | None) -> str | None:
    if value is None:
        return None
    from xrdmica.radiation import Radiation

    try:
        Radiation.parse(value)
    except XrdmicaError as error:
        raise click.BadParameter(str(error)) from error
    return value


def _phases(ctx: click.Context, parameter: click.Parameter, value: tuple[str, ...]) -> tuple[str, ...]:
    if value:
        from xrdmica.crystals.library import load_phase

        for phase in value:
            load_phase(phase)
    return tuple(dict.fromkeys(value))


def radiation_option(command: Command) -> Command:
    """``--radiation``: the tube; goes before what a file says, a sheet's own column goes before it."""
    return click.option(
        "--radiation", metavar="TUBE", callback=_radiation,
        help="Tube (Cu, Co, Fe, Cr, Mo) or wavelength in angstrom; a sheet's column goes before it, a file's header after it.",
    )(command)  # fmt: skip


def outside_option(command: Command) -> Command:
    """``--allow-outside``: files of a sheet may stand anywhere."""
    return click.option(
        "--allow-outside", is_flag=True, help="Let a sample sheet name files outside its own folder."
    )(command)


def phase_option(command: Command) -> Command:
    """``--phase``: restrict the library."""
    return click.option(
        "--phase", "phases", metavar="ID", multiple=True, callback=_phases,
        help="Consider only this phase; may be given several times. `xrdmica phases` lists them.",
    )(command)  # fmt: skip


def instrument_option(command: Command) -> Command:
    """``--instrument``: geometry of the diffractometer."""
    return click.option(
        "--instrument", type=click.Path(exists=True, dir_okay=False), help="TOML file with the geometry of the diffractometer."
    )(command)


def sample_option(command: Command) -> Command:
    """``--sample``: only this sample."""
    return click.option("--sample", metavar="NAME", help="Only this sample of the sheet or folder.")(command)


def workers_option(command: Command) -> Command:
    """``--workers``: processes."""
    return click.option(
        "--workers", type=click.IntRange(min=1), metavar="N", help="Worker processes; by default as many as there are cores."
    )(command)


def file_option(name: str, text: str) -> Callable[[Command], Command]:
    """An option that names a file to write."""
    return click.option(name, f"{name.removeprefix('--')}_file", type=click.Path(dir_okay=False, path_type=Path),
                        metavar="FILE", help=text)  # fmt: skip


json_option = file_option("--json", "Write the result as JSON.")
csv_option = file_option("--csv", "Write the table as CSV.")
figure_option = file_option("--figure", "Draw the scans; FILE ends in .png, .svg or .pdf.")


def paths_argument(command: Command) -> Command:
    """``PATH...``: a sheet, a folder, or the scan files of one sample."""
    return click.argument("paths", metavar="PATH...", nargs=-1, required=True)(command)


def calibration_option(command: Command) -> Command:
    """``--width-calibration``: the laboratory's line for width indices."""
    return click.option(
        "--width-calibration", type=click.Path(exists=True, dir_okay=False), metavar="FILE",
        help="Calibration of width indices: TOML with slope and intercept, or CSV of standards (measured, reference).",
    )(command)  # fmt: skip


def formula_option(command: Command) -> Command:
    """``--formula``: known mineral formulas."""
    return click.option(
        "--formula", "formulas", metavar="PHASE=FORMULA", multiple=True, callback=_formulas,
        help="Mineral formula known otherwise, such as \"biotite=K(Mg1.5Fe2+1.5)(Si3Al)O10(OH)2\"; may be given several times.",
    )(command)  # fmt: skip


def bootstrap_options(command: Command) -> Command:
    """``--bootstrap`` and ``--seed``: intervals from scans drawn again."""
    seed = click.option("--seed", type=click.IntRange(min=0), default=0, show_default=True, help="Fixes what a bootstrap draws.")
    draws = click.option(
        "--bootstrap", type=click.IntRange(min=20), metavar="N", help="Intervals from N sets of scans drawn and fitted again."
    )
    return draws(seed(command))


def joint_option(command: Command) -> Command:
    """``--joint-chemistry``: weights from scans and analysis together."""
    return click.option(
        "--joint-chemistry", is_flag=True, help="With an analysis (sheet column chemistry): weights that both support."
    )(command)


def _formulas(ctx: click.Context, parameter: click.Parameter, value: tuple[str, ...]) -> tuple[tuple[str, str], ...]:
    out = []
    for text in value:
        phase, equals, formula = text.partition("=")
        if not equals:
            raise click.BadParameter(f"{text!r} is not PHASE=FORMULA.")
        from xrdmica.chemistry.formula import SiteFormula
        from xrdmica.crystals.layer import exchanges_of
        from xrdmica.crystals.library import load_phase

        exchanges_of(load_phase(phase.strip()), SiteFormula.parse(formula))
        out.append((phase.strip(), formula.strip()))
    return tuple(out)


def settings_from(
    radiation: str | None, phases: Sequence[str] = (), instrument: str | None = None, *, curves: bool = True, **more: Any
) -> Settings:
    """The settings that the options stand for."""
    from xrdmica.batch.analyse import Settings

    return Settings(radiation=radiation, phases=tuple(phases), instrument=instrument, curves=curves, **more)


def json_of(texts: Sequence[str], *, single: bool) -> str:
    """One JSON text: the record itself for a single sample, else a list of records."""
    if single and len(texts) == 1:
        return texts[0].rstrip() + "\n"
    return "[\n" + ",\n".join(text.rstrip() for text in texts) + "\n]\n"
