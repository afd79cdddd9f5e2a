"""`xrdmica peaks`: find and measure the peaks of scans."""

from __future__ import annotations

import csv
import io
import json
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrdmica.cli.options import csv_option, figure_option, json_option, radiation_option

if TYPE_CHECKING:
    from xrdmica.scans.peaks import Peak
    from xrdmica.scans.read.raw import Axis
    from xrdmica.scans.scan import Scan

__all__ = ["command"]

@click.command("peaks", epilog="Example: xrdmica peaks demo_patterns/TQ-A_AD.xye")
@click.argument("files", nargs=-1, required=True, metavar="FILE...", type=click.Path(path_type=Path))
@radiation_option
@click.option(
    "--minimum-sigma", type=click.FloatRange(1.0, 100.0), default=4.0, show_default=True, metavar="NUMBER",
    help="Smallest significance of a peak, in standard errors of its height.",
)  # fmt: skip
@click.option(
    "--axis", type=click.Choice(["two_theta", "theta", "radians", "d", "q"]),
    help="What the files give their counts against, when it is not two-theta in degrees.",
)
@click.option("--column", metavar="NAME", help="Column of counts to read from a table with many scans side by side.")
@click.option(
    "--align", metavar="STANDARD", help="Correct the displacement of the specimen by the lines of quartz, silicon, corundum, "
    "zincite, fluorite or fluorophlogopite in the scan.",
)
@csv_option
@json_option
@figure_option
def command(
    files: tuple[Path, ...],
    radiation: str | None,
    minimum_sigma: float,
    axis: Axis | None,
    column: str | None,
    align: str | None,
    csv_file: Path | None,
    json_file: Path | None,
    figure_file: Path | None,
) -> None:
    """Find the peaks of scans and list their spacings, heights, areas and widths."""
    from xrdmica.scans.peaks import find_peaks
    from xrdmica.scans.read import read_scan
    from xrdmica.scans.write import write_atomically

    found = []
    for path in files:
        scan = read_scan(path, radiation=radiation, axis=axis, column=column)
        if align is not None:
            from xrdmica.scans.align import aligned, shift_from_lines

            scan = aligned(scan, shift_from_lines(scan, align))
        found.append((scan, find_peaks(scan, minimum_sigma=minimum_sigma)))
    for scan, peaks in found:
        _show(scan, peaks)
    if csv_file is not None:
        write_atomically(csv_file, _as_csv(found))
    if json_file is not None:
        write_atomically(json_file, _as_json(found))
    if figure_file is not None:
        write_atomically(figure_file, _drawn(found, figure_file))


def _show(scan: Scan, peaks: tuple[Peak, ...]) -> None:
    """Table for people on stdout, notes on stderr."""
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table

    notes = Console(stderr=True, highlight=False)
    for note in scan.notes:
        notes.print(f"{scan.source}: {note}", markup=False, soft_wrap=True)
    console = Console(highlight=False)
    if not console.is_terminal:
        console.width = max(console.width, 100)  # a pipe has no edge to fit into
    number = f"{len(peaks)} peak{'' if len(peaks) == 1 else 's'}"
    tube = f"{scan.radiation.name} radiation" if scan.radiation.name[0].isalpha() else f"wavelength {scan.radiation.name} Å"
    console.print(f"{scan.source}: {number}, {tube}", markup=False, soft_wrap=True)
    if not peaks:
        return
    table = Table(box=SIMPLE_HEAD, padding=(0, 1), pad_edge=False)
    for head in ("2θ [°]", "d [Å]", "height", "in sigma", "area", "FWHM [°]", ""):
        table.add_column(head, justify="right", no_wrap=True)
    for peak in peaks:
        table.add_row(
            f"{peak.two_theta:.3f}", f"{peak.d_spacing:.4f} ± {peak.d_error:.4f}", f"{peak.height:.0f}",
            f"{peak.height_sigma:.1f}", f"{peak.area:.1f} ± {peak.area_error:.1f}",
            f"{peak.fwhm:.3f} ± {peak.fwhm_error:.3f}", "overlap" if peak.overlapped else "",
        )  # fmt: skip
    console.print(table)


def _as_csv(found: list[tuple[Scan, tuple[Peak, ...]]]) -> str:
    from xrdmica.scans.peaks import Peak

    names = list(Peak.__dataclass_fields__)
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(["file", *names])
    for scan, peaks in found:
        for peak in peaks:
            values = asdict(peak)
            cells = [values[name] for name in names]
            writer.writerow([scan.source, *(f"{cell:.6g}" if isinstance(cell, float) else cell for cell in cells)])
    return stream.getvalue()


def _as_json(found: list[tuple[Scan, tuple[Peak, ...]]]) -> str:
    scans = [
        {
            "file": scan.source,
            "radiation": scan.radiation.name,
            "radiation_origin": scan.radiation_origin,
            "notes": list(scan.notes),
            "peaks": [asdict(peak) for peak in peaks],
        }
        for scan, peaks in found
    ]
    return json.dumps(scans, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _drawn(found: list[tuple[Scan, tuple[Peak, ...]]], path: Path) -> bytes:
    """The figure as bytes of the format that the suffix names."""
    from xrdmica.errors import XrdmicaError
    from xrdmica.scans.figure import peak_figure

    kind = path.suffix.lower().lstrip(".")
    if kind not in ("png", "svg", "pdf"):
        raise XrdmicaError(f"{path}: figures of this kind are not drawn", fix="end the name with .png, .svg or .pdf")
    stream = io.BytesIO()
    peak_figure(found).savefig(stream, format=kind, dpi=150)
    return stream.getvalue()
