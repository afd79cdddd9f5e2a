"""The sample sheet as a table: every row one scan, every complaint with its row and column."""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping
from pathlib import Path
from types import MappingProxyType

from xrdmica.errors import SheetError, XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.scans.align import ANGLE_SCALES
from xrdmica.scans.entry import SampleEntry, SheetRow
from xrdmica.scans.names import guess_from_name
from xrdmica.scans.read.decode import text_lines
from xrdmica.scans.scan import Mount, RadiationOrigin
from xrdmica.scans.treatment import Treatment

__all__ = ["read_sheet", "tube_of"]

_KNOWN = ("sample", "file", "mount", "treatment", "radiation")
_MOUNTS: dict[str, Mount] = {
    "oriented": "oriented", "orientated": "oriented", "random": "random", "powder": "random", "bulk": "random",
}  # fmt: skip
# columns that hold one number per sample, with their least and largest value
_NUMBERS: dict[str, tuple[float, float]] = {
    "clay_percent": (0.0, 100.0), "standard_percent": (0.0, 100.0), "depth_m": (-12000.0, 12000.0), "mass_mg_cm2": (0.0, 1e4),
    "liquid_limit": (0.0, 1000.0), "plastic_limit": (0.0, 1000.0), "methylene_blue": (0.0, 1000.0), "cec": (0.0, 300.0),
}  # fmt: skip
# columns with a fixed choice of words
_CHOICES: dict[str, tuple[str, ...]] = {"angle_scale": ANGLE_SCALES}
_PER_MOUNT = ("mass_mg_cm2",)
_LARGEST = 50_000_000  # bytes


def tube_of(radiation: str | Radiation | None) -> Radiation | None:
    """The tube that a text stands for; None stays None."""
    return Radiation.parse(radiation) if isinstance(radiation, str) else radiation


def read_sheet(
    path: str | Path, *, radiation: str | Radiation | None = None, allow_outside: bool = False
) -> list[SampleEntry]:
    """Read a sample sheet.

    Parameters
    ----------
    path : str or Path
        CSV, TSV or ``;``-separated table with a header; columns ``sample`` and ``file``, optionally ``mount``,
        ``treatment``, ``radiation`` and any others, which are passed through.
    radiation : str or Radiation, optional
        Tube for rows without one.
    allow_outside : bool
        Whether files may stand outside the folder of the sheet.

    Returns
    -------
    list of SampleEntry
        In the order of the sheet.

    Raises
    ------
    SheetError
        With row and column, at the first thing that is wrong.
    """
    path = Path(path)
    tube = tube_of(radiation)
    header, rows = _table(path)
    entries: dict[str, list[SheetRow]] = {}
    seen: dict[Path, tuple[int, str]] = {}
    for line, cells in rows:
        values = dict(zip(header, cells, strict=False))
        name = values.get("sample", "")
        if not name:
            raise _wrong(path, line, "sample", "the name of the sample is missing", "fill it in")
        if re.search(r"[\x00-\x1f/\\]", name) or name in (".", ".."):
            raise _wrong(path, line, "sample", f"{name!r} cannot name result files", "leave out slashes and line breaks")
        row = _row(path, line, values, tube, allow_outside)
        key = row.path.resolve()
        if key in seen:
            earlier, owner = seen[key]
            whose = "the same sample" if owner == name else f"sample {owner}"
            raise _wrong(path, line, "file", f"{row.path.name} stands in row {earlier} for {whose}", "remove one of them")
        seen[key] = (line, name)
        entries.setdefault(name, []).append(row)
    if not entries:
        raise SheetError(f"{path}: the sheet has a header but no rows", fix="add one row per scan")
    return [SampleEntry(name, tuple(group), _joined(path, group)) for name, group in entries.items()]


def _wrong(path: Path, line: int, column: str, what: str, fix: str) -> SheetError:
    return SheetError(f"{path}, row {line}, column {column}: {what}", fix=fix)


def _table(path: Path) -> tuple[list[str], list[tuple[int, list[str]]]]:
    """Header in small letters, and rows with their line numbers."""
    try:
        if path.stat().st_size > _LARGEST:
            raise SheetError(f"{path}: too large for a sample sheet", fix="check that it is the right file")
        data = path.read_bytes()
    except OSError as problem:
        raise SheetError(f"{path}: the sheet cannot be read", why=problem.strerror, fix="check its name and rights") from None
    if data.startswith((b"PK\x03\x04", b"\xd0\xcf\x11\xe0")):
        raise SheetError(f"{path}: this is a spreadsheet workbook", fix="save it as CSV")
    lines = text_lines(data)
    if lines and re.fullmatch(r"\"?sep=.?\"?[,;\t ]*", lines[0].strip("\n\r"), re.IGNORECASE):
        lines[0] = ""  # a spreadsheet's own line that names the separator
    start = next((index for index, line in enumerate(lines) if line.strip(" \t,;")), None)
    if start is None:
        raise SheetError(f"{path}: the sheet is empty", fix="add a header with the columns sample and file, and rows")
    separator = max(",;\t", key=lines[start].count)
    try:
        reader = csv.reader((line + "\n" for line in lines[start:]), delimiter=separator, skipinitialspace=True)
        numbered = [(start + reader.line_num, [cell.strip() for cell in cells]) for cells in reader]
    except csv.Error as problem:
        raise SheetError(f"{path}: the sheet cannot be read", why=str(problem), fix="save it again as CSV") from None
    header = [re.sub(r"\s+", "_", cell.lower()) for cell in numbered[0][1]]
    while header and not header[-1]:
        header.pop()
    for column in ("sample", "file"):
        if column not in header:
            raise SheetError(
                f"{path}, row {start + 1}: the header has no column {column!r}",
                why=f"it reads {', '.join(header)[:100]}",
                fix="name the columns sample, file, mount, treatment, radiation",
            )
    for column in header:
        if column and header.count(column) > 1:
            raise SheetError(f"{path}, row {start + 1}, column {column}: it stands twice in the header", fix="rename one")
        _check_spelling(path, start + 1, column, header)
    rows = [(line, cells) for line, cells in numbered[1:] if any(cells)]
    for line, cells in rows:
        if any(cells[len(header) :]):
            raise SheetError(
                f"{path}, row {line}: {len(cells)} cells but the header has {len(header)}",
                fix=f"quote cells that hold the separator {separator!r}",
            )
    return header, rows


def _check_spelling(path: Path, line: int, column: str, header: list[str]) -> None:
    """Refuse ``treatement``: as a column of the user's own it would be passed through and the treatment guessed."""
    from difflib import get_close_matches

    known = [*_KNOWN, *_NUMBERS, *_CHOICES]
    close = [] if column in known else get_close_matches(column, [name for name in known if name not in header], n=1, cutoff=0.85)
    if close:
        raise SheetError(f"{path}, row {line}, column {column}: looks like a misspelt {close[0]!r}", fix="correct or rename it")


def _row(path: Path, line: int, values: dict[str, str], tube: Radiation | None, allow_outside: bool) -> SheetRow:
    file = _file(path, line, values.get("file", ""), allow_outside)
    notes: list[str] = []
    state: Treatment | None = None
    text = values.get("treatment", "")
    if text:
        try:
            state = Treatment.parse(text)
        except XrdmicaError as problem:
            raise _wrong(path, line, "treatment", problem.what, problem.fix) from None
    mount: Mount | None = None
    text = values.get("mount", "")
    if text:
        mount = _MOUNTS.get(text.lower())
        if mount is None:
            raise _wrong(path, line, "mount", f"mount {text!r} is not known", "write oriented or random")
    origin: RadiationOrigin = "option"
    text = values.get("radiation", "")
    if text:
        try:
            tube, origin = Radiation.parse(text), "sample sheet"
        except XrdmicaError as problem:
            raise _wrong(path, line, "radiation", problem.what, problem.fix) from None
    if mount is None and state is None:
        guess = guess_from_name(file)
        mount, state = guess.mount, guess.treatment
        notes += guess.notes
    elif mount is None and state is not None:
        mount = "random" if state.condition == "none" else "oriented"
        notes.append(f"the sheet does not name the mount: taken as {mount} because the treatment is {state.name}")
    elif state is None:
        state = Treatment("none" if mount == "random" else "air_dried")
        notes.append(f"the sheet does not name the treatment: taken as {state.name}")
    assert mount is not None
    assert state is not None
    details = {key: _detail(path, line, key, value) for key, value in values.items() if key and key not in _KNOWN and value}
    return SheetRow(line, file, mount, state, tube, origin, MappingProxyType(details), tuple(notes))


def _file(path: Path, line: int, text: str, allow_outside: bool) -> Path:
    if not text:
        raise _wrong(path, line, "file", "the name of the file is missing", "fill it in")
    if "\x00" in text:
        raise _wrong(path, line, "file", "the name holds a zero character", "write it again")
    folder = path.parent
    file = folder / text
    if not file.exists() and "\\" in text:
        file = folder / text.replace("\\", "/")  # written on another kind of computer
    inside = file.resolve().is_relative_to(folder.resolve())
    if not inside and not allow_outside:
        raise _wrong(
            path, line, "file", f"{text} is outside the folder of the sheet", "move it beside the sheet or allow it explicitly"
        )
    if not file.is_file():
        what = "is a folder" if file.is_dir() else "does not exist"
        raise _wrong(path, line, "file", f"{text} {what}", "names count from the folder of the sheet")
    return file


def _detail(path: Path, line: int, column: str, value: str) -> str:
    """Check the columns that hold numbers or one of some words; a decimal comma becomes a point."""
    if column in _CHOICES:
        if value.lower() not in _CHOICES[column]:
            raise _wrong(path, line, column, f"{value!r} is not known", f"choose one of {', '.join(_CHOICES[column])}")
        return value.lower()
    if column not in _NUMBERS:
        return value
    low, high = _NUMBERS[column]
    try:
        number = float(value.replace(",", "."))
    except ValueError:
        number = float("nan")
    if not low <= number <= high:
        raise _wrong(path, line, column, f"{value!r} is no number from {low:g} to {high:g}", "correct it or leave it empty")
    return value.replace(",", ".")


def _joined(path: Path, rows: list[SheetRow]) -> Mapping[str, str]:
    """Details of a sample out of those of its rows."""
    out: dict[str, str] = {}
    for row in rows:
        for key, value in row.details.items():
            if key not in out:
                out[key] = value
            elif key in _NUMBERS and key not in _PER_MOUNT and float(out[key]) != float(value):
                raise _wrong(
                    path, row.line or 0, key, f"{value} contradicts {out[key]} in an earlier row of the sample", "give one value"
                )
            elif key not in _NUMBERS and value not in out[key].split("; "):
                out[key] += f"; {value}"
    return MappingProxyType(out)
