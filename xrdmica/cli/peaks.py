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
    from xrdmica.scans.align import ShiftKind
    from xrdmica.scans.peaks import Peak
    from xrdmica.scans.read.raw import Axis
    from xrdmica.scans.scan import Scan

    Words = tuple[tuple[str, ...], ...]
    Found = list[tuple[Scan, tuple[Peak, ...], Words]]

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
    "--align", metavar="MINERAL", help="Correct the displacement of the specimen by the lines of quartz, silicon, corundum, "
    "zincite, fluorite or fluorophlogopite in the scan, or by the basal orders of mica, kaolinite, talc or pyrophyllite.",
)
@click.option(
    "--align-as", type=click.Choice(["displacement", "zero"]), default="displacement", show_default=True,
    help="Which error of the angle scale --align takes off.",
)
@click.option(
    "--write-scan", metavar="FILE", type=click.Path(dir_okay=False, path_type=Path),
    help="Write the scan as it was read, on its corrected scale: powder CIF, CSV or JSON by the suffix. For one FILE only.",
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
    align_as: ShiftKind,
    write_scan: Path | None,
    csv_file: Path | None,
    json_file: Path | None,
    figure_file: Path | None,
) -> None:
    """Find the peaks of scans and list their spacings, heights, areas and widths, and what each might be.

    What a line might be is read from its spacing alone; `xrdmica identify` decides by all lines and all mounts.
    """
    from xrdmica.identify.assign import likely_assignments
    from xrdmica.scans.peaks import find_peaks
    from xrdmica.scans.read import read_scan
    from xrdmica.scans.write import write_atomically

    found = []
    for path in files:
        scan = read_scan(path, radiation=radiation, axis=axis, column=column)
        if align is not None:
            from xrdmica.scans.align import aligned_by

            scan = aligned_by(scan, align, kind=align_as)
        peaks = find_peaks(scan, minimum_sigma=minimum_sigma)
        found.append((scan, peaks, likely_assignments(scan, peaks)))
    if write_scan is not None:
        _write_scan([scan for scan, _, _ in found], write_scan)
    for scan, peaks, words in found:
        _show(scan, peaks, words)
    if csv_file is not None:
        write_atomically(csv_file, _as_csv(found))
    if json_file is not None:
        write_atomically(json_file, _as_json(found))
    if figure_file is not None:
        write_atomically(figure_file, _drawn(found, figure_file))


def _write_scan(scans: list[Scan], path: Path) -> None:
    from xrdmica.errors import XrdmicaError
    from xrdmica.scans.write import write_scan_cif, write_scan_csv, write_scan_json

    writers = {".cif": write_scan_cif, ".csv": write_scan_csv, ".json": write_scan_json}
    writer = writers.get(path.suffix.lower())
    if writer is None:
        raise XrdmicaError(f"{path}: scans of this kind are not written", fix=f"end the name with {', '.join(writers)}")
    if len(scans) != 1:
        raise XrdmicaError(f"{path}: {len(scans)} scans do not go into one file", fix="give one FILE with --write-scan")
    writer(scans[0], path)


def _show(scan: Scan, peaks: tuple[Peak, ...], words: Words) -> None:
    """Table for people on stdout, notes on stderr."""
    from rich.box import SIMPLE_HEAD
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    notes = Console(stderr=True, highlight=False)
    for note in scan.notes:
        notes.print(f"{scan.source}: {note}", markup=False, soft_wrap=True)
    console = Console(highlight=False)
    if not console.is_terminal:
        console.width = max(console.width, 140)  # a pipe has no edge to fit into
    number = f"{len(peaks)} peak{'' if len(peaks) == 1 else 's'}"
    tube = f"{scan.radiation.name} radiation" if scan.radiation.name[0].isalpha() else f"wavelength {scan.radiation.name} Å"
    console.print(f"{scan.source}: {number}, {tube}", markup=False, soft_wrap=True)
    if not peaks:
        return
    table = Table(box=SIMPLE_HEAD, padding=(0, 1), pad_edge=False)
    for head in ("2θ [°]", "d [Å]", "height", "in sigma", "area", "FWHM [°]"):
        table.add_column(head, justify="right", no_wrap=True)
    table.add_column("may be", overflow="fold")
    for peak, may_be in zip(peaks, words, strict=True):
        table.add_row(
            f"{peak.two_theta:.3f}", f"{peak.d_spacing:.4f} ± {peak.d_error:.4f}", f"{peak.height:.0f}",
            f"{peak.height_sigma:.1f}", f"{peak.area:.1f} ± {peak.area_error:.1f}",
            f"{peak.fwhm:.3f} ± {peak.fwhm_error:.3f}",
            Text(f"{'(overlap) ' if peak.overlapped else ''}{', '.join(may_be)}"),
        )  # fmt: skip
    console.print(table)


def _as_csv(found: Found) -> str:
    from xrdmica.scans.peaks import Peak

    names = list(Peak.__dataclass_fields__)
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(["file", *names, "may_be"])
    for scan, peaks, words in found:
        for peak, may_be in zip(peaks, words, strict=True):
            values = asdict(peak)
            cells = [values[name] for name in names]
            numbers = [f"{cell:.6g}" if isinstance(cell, float) else cell for cell in cells]
            writer.writerow([scan.source, *numbers, "; ".join(may_be)])
    return stream.getvalue()


def _as_json(found: Found) -> str:
    scans = [
        {
            "file": scan.source,
            "radiation": scan.radiation.name,
            "radiation_origin": scan.radiation_origin,
            "notes": list(scan.notes),
            "peaks": [{**asdict(peak), "may_be": list(may_be)} for peak, may_be in zip(peaks, words, strict=True)],
        }
        for scan, peaks, words in found
    ]
    return json.dumps(scans, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _drawn(found: Found, path: Path) -> bytes:
    """The figure as bytes of the format that the suffix names."""
    from xrdmica.errors import XrdmicaError
    from xrdmica.scans.figure import peak_figure

    kind = path.suffix.lower().lstrip(".")
    if kind not in ("png", "svg", "pdf"):
        raise XrdmicaError(f"{path}: figures of this kind are not drawn", fix="end the name with .png, .svg or .pdf")
    stream = io.BytesIO()
    peak_figure([(scan, peaks) for scan, peaks, _ in found]).savefig(stream, format=kind, dpi=150)
    return stream.getvalue()
