"""Sample sheets and folders of scans: which file is which mount of which sample."""

from __future__ import annotations

import csv
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType

from xrdmica.errors import ScanError, SheetError, XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.scans.entry import SampleEntry, SheetRow
from xrdmica.scans.names import guess_from_name
from xrdmica.scans.read import NotAScanError, read_scan
from xrdmica.scans.read.decode import text_lines
from xrdmica.scans.scan import Mount, RadiationOrigin
from xrdmica.scans.treatment import Treatment

__all__ = ["FoundSamples", "SampleEntry", "SheetRow", "Skipped", "entries_from", "read_sheet", "samples_in_folder"]

_SCAN_SUFFIXES = (".xy", ".xye", ".dat", ".txt", ".csv", ".tsv", ".asc", ".cif")
_TABLE_SUFFIXES = (".csv", ".tsv", ".txt", ".dat", ".cif")  # may be something else than a scan: looked into
_SHEET_SUFFIXES = (".csv", ".tsv", ".txt")
_KNOWN = ("sample", "file", "mount", "treatment", "radiation")
_MOUNTS: dict[str, Mount] = {
    "oriented": "oriented", "orientated": "oriented", "random": "random", "powder": "random", "bulk": "random",
}  # fmt: skip
# columns that hold one number per sample, with their least and largest value
_NUMBERS: dict[str, tuple[float, float]] = {
    "clay_percent": (0.0, 100.0), "standard_percent": (0.0, 100.0), "depth_m": (-12000.0, 12000.0), "mass_mg_cm2": (0.0, 1e4),
}  # fmt: skip
_PER_MOUNT = ("mass_mg_cm2",)
_LARGEST = 50_000_000  # bytes


@dataclass(frozen=True)
class Skipped:
    """A file of a folder that is no scan, and why."""

    file: Path
    reason: str


@dataclass(frozen=True)
class FoundSamples:
    """Samples of a sheet or folder.

    Attributes
    ----------
    entries : tuple of SampleEntry
        The samples.
    skipped : tuple of Skipped
        Files that look like tables but are no scans.
    sheet : Path or None
        The sheet that was used.
    """

    entries: tuple[SampleEntry, ...]
    skipped: tuple[Skipped, ...] = ()
    sheet: Path | None = None

    def __iter__(self) -> Iterator[SampleEntry]:
        return iter(self.entries)

    def __len__(self) -> int:
        return len(self.entries)


def entries_from(
    path: str | Path, *, radiation: str | Radiation | None = None, allow_outside: bool = False
) -> FoundSamples:
    """Samples of whatever the user points at: a sample sheet, a folder or a single scan.

    Parameters
    ----------
    path : str or Path
        Sheet, folder or export.
    radiation : str or Radiation, optional
        Tube for all scans for which a sheet does not name one.
    allow_outside : bool
        Whether a sheet may name files outside its own folder.

    Raises
    ------
    SheetError
        If the sheet or the folder cannot be used.
    """
    path = Path(path)
    if path.is_dir():
        return samples_in_folder(path, radiation=radiation, allow_outside=allow_outside)
    if not path.exists():
        raise SheetError(f"{path}: there is no such file or folder", fix="check the name")
    if _is_sheet(path):
        return FoundSamples(tuple(read_sheet(path, radiation=radiation, allow_outside=allow_outside)), sheet=path)
    guess = guess_from_name(path)
    tube = _tube(radiation)
    row = SheetRow(None, path, guess.mount, guess.treatment, tube, notes=guess.notes)
    return FoundSamples((SampleEntry(guess.sample, (row,)),))


def _tube(radiation: str | Radiation | None) -> Radiation | None:
    return Radiation.parse(radiation) if isinstance(radiation, str) else radiation


# --- folders -----------------------------------------------------------------------------------------------------


def _suffix(path: Path) -> str:
    return Path(path.name.lower().removesuffix(".gz")).suffix


def _natural(path: Path) -> list[tuple[int, int, str]]:
    """Sort key under which S2 comes before S10."""
    return [(0, int(part), "") if part.isdigit() else (1, 0, part) for part in re.split(r"(\d+)", path.name.lower()) if part]


def _is_sheet(path: Path) -> bool:
    """Whether the first filled line of a table names the columns sample and file."""
    if path.suffix.lower() not in _SHEET_SUFFIXES:
        return False
    try:
        with path.open("rb") as stream:
            lines = text_lines(stream.read(65536))
    except OSError:
        return False
    first = next((line for line in lines if line.strip() and not line.lower().lstrip('"').startswith("sep=")), "")
    names = [cell.strip().strip('"').strip().lower() for cell in re.split(r"[,;\t]", first)]
    return "sample" in names and "file" in names


_ORDER = ("air_dried", "glycolated", "glycerolated", "heated", "none")


def samples_in_folder(
    folder: str | Path, *, radiation: str | Radiation | None = None, allow_outside: bool = False
) -> FoundSamples:
    """Samples of a folder: by its sheet when it holds exactly one, else by file names such as ``S12_K-550.xy``.

    A number alone at the end of a name counts as a heating temperature only when another file of the same sample
    names its treatment in letters, because ``core_150.xy`` may as well be core number 150.

    Parameters
    ----------
    folder : str or Path
        The folder; folders inside are not searched.
    radiation : str or Radiation, optional
        Tube for all scans for which a sheet does not name one.
    allow_outside : bool
        Whether a sheet may name files outside the folder.

    Raises
    ------
    SheetError
        If the folder holds no scans or several sheets.
    """
    folder = Path(folder)
    tube = _tube(radiation)
    try:
        files = sorted((p for p in folder.iterdir() if p.is_file() and not p.name.startswith((".", "~"))), key=_natural)
    except OSError as problem:
        raise SheetError(f"{folder}: the folder cannot be read", why=problem.strerror, fix="check its name and rights") from None
    sheets = [path for path in files if _is_sheet(path)]
    if len(sheets) == 1:
        return FoundSamples(
            tuple(read_sheet(sheets[0], radiation=tube, allow_outside=allow_outside)), sheet=sheets[0]
        )
    if sheets:
        names = ", ".join(path.name for path in sheets[:5])
        raise SheetError(f"{folder}: the folder holds {len(sheets)} sample sheets ({names})", fix="give the one to be used")
    skipped: list[Skipped] = []
    scans: list[Path] = []
    for path in files:
        if _suffix(path) not in _SCAN_SUFFIXES or re.match(r"(?i)(readme|license|notes?\b)", path.name):
            continue
        reason = _no_scan(path) if _suffix(path) in _TABLE_SUFFIXES else None
        if reason is None:
            scans.append(path)
        else:
            skipped.append(Skipped(path, reason))
    if not scans:
        raise SheetError(
            f"{folder}: no scans were found", fix=f"put exports ({', '.join(_SCAN_SUFFIXES)}) or a sample sheet into it"
        )
    return FoundSamples(_entries_by_name(scans, tube), tuple(skipped))


def _no_scan(path: Path) -> str | None:
    """Why a file is something else than a scan; None for scans, also for damaged ones, which fail in their sample."""
    try:
        read_scan(path, radiation="Cu")
    except NotAScanError as problem:
        return str(problem)
    except ScanError:
        return None
    return None


def _entries_by_name(scans: list[Path], tube: Radiation | None) -> tuple[SampleEntry, ...]:
    guesses = {path: guess_from_name(path) for path in scans}
    lettered = {guess.sample.lower() for guess in guesses.values() if guess.known and not guess.bare_number}
    rows: dict[str, list[SheetRow]] = {}
    names: dict[str, str] = {}
    for path, guess in guesses.items():
        if guess.bare_number and guess.sample.lower() not in lettered:
            guess = guess_from_name(path, numbers=False)
        name = names.setdefault(guess.sample.lower(), guess.sample)
        rows.setdefault(name, []).append(SheetRow(None, path, guess.mount, guess.treatment, tube, notes=guess.notes))
    return tuple(
        SampleEntry(name, tuple(sorted(group, key=lambda row: (row.mount == "random", *_state_order(row.treatment)))))
        for name, group in rows.items()
    )


def _state_order(state: Treatment) -> tuple[str, int, float]:
    return (state.cation or "", _ORDER.index(state.condition), state.temperature or 0.0)


# --- sheets ------------------------------------------------------------------------------------------------------


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
    tube = _tube(radiation)
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

    known = [*_KNOWN, *_NUMBERS]
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
    """Check the columns that hold numbers; a decimal comma becomes a point."""
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
