"""Draft a sample sheet from the names of the files in a folder."""

from __future__ import annotations

import csv
import io
import os
from pathlib import Path

from xrdmica.batch.sheet import samples_in_folder
from xrdmica.errors import ScanError, SheetError
from xrdmica.scans.entry import SheetRow
from xrdmica.scans.read import read_scan
from xrdmica.scans.write import write_atomically

__all__ = ["SHEET_NAME", "write_sheet"]

SHEET_NAME = "samples.csv"
_HEADER = ("sample", "file", "mount", "treatment", "radiation", "note")


def write_sheet(folder: str | Path, path: str | Path | None = None) -> Path:
    """Write a sample sheet into a folder of scans, to be checked and completed by hand.

    Sample, mount and treatment come from the file names; the radiation is filled in where the file itself names it and
    left empty elsewhere. The note says what had to be supposed and which files cannot be read as they are.

    Parameters
    ----------
    folder : str or Path
        Folder with the exports; folders inside are not searched.
    path : str or Path, optional
        The new sheet; by default ``samples.csv`` in the folder. Files are named as they are seen from where it stands.

    Returns
    -------
    Path
        The new sheet.

    Raises
    ------
    SheetError
        If the folder holds no scans or has a sample sheet already.
    """
    folder = Path(folder)
    path = folder / SHEET_NAME if path is None else Path(path)
    if path.exists():
        raise SheetError(f"{path}: there is a file of this name already", fix="rename or remove it, or edit it instead")
    found = samples_in_folder(folder)
    if found.sheet is not None:
        raise SheetError(f"{found.sheet}: the folder has a sample sheet already", fix="edit it, or remove it first")
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\r\n")
    writer.writerow(_HEADER)
    for entry in found:
        for row in entry.rows:
            radiation, note = _known(row)
            writer.writerow([entry.name, _seen_from(path.parent, row.path), row.mount, row.treatment.name, radiation, note])
    # the mark at the start tells spreadsheets that this is UTF-8
    write_atomically(path, "\ufeff" + stream.getvalue())
    return path


def _seen_from(place: Path, file: Path) -> str:
    return Path(os.path.relpath(file.resolve(), place.resolve())).as_posix()


def _known(row: SheetRow) -> tuple[str, str]:
    """Radiation that the file names, and what the user should look at."""
    notes = [note for note in row.notes if "says nothing" in note]
    radiation = ""
    try:
        scan = read_scan(row.path, mount=row.mount, treatment=row.treatment)
    except ScanError as problem:
        notes.append(f"cannot be read: {problem.what.removeprefix(str(row.path)).lstrip(':, ')}")
    else:
        if scan.radiation_origin == "file header":
            radiation = scan.radiation.name
        else:
            notes.append("the file does not name the radiation")
    return radiation, "; ".join(notes)
