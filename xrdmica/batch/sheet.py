"""Sheets, folders and files of scans: which file is which mount of which sample."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from xrdmica.batch.sheet_table import read_sheet, tube_of
from xrdmica.errors import ScanError, SheetError
from xrdmica.radiation import Radiation
from xrdmica.scans.entry import SampleEntry, SheetRow
from xrdmica.scans.names import guess_from_name
from xrdmica.scans.read import NotAScanError, read_scan
from xrdmica.scans.read.decode import text_lines
from xrdmica.scans.treatment import Treatment

__all__ = [
    "OPEN_SUFFIXES",
    "SCAN_SUFFIXES",
    "FoundSamples",
    "SampleEntry",
    "SheetRow",
    "Skipped",
    "entries_by_name",
    "entries_from",
    "is_sheet",
    "natural_order",
    "no_scan",
    "read_sheet",
    "samples_in_folder",
    "suffix_of",
]  # fmt: skip

# may be something else than a scan: looked into
OPEN_SUFFIXES = (".csv", ".tsv", ".txt", ".dat", ".cif", ".prn", ".xml", ".nxs", ".h5", ".hdf5")
SCAN_SUFFIXES = (".xy", ".xye", ".asc", *OPEN_SUFFIXES)
_SHEET_SUFFIXES = (".csv", ".tsv", ".txt")


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
    if is_sheet(path):
        return FoundSamples(tuple(read_sheet(path, radiation=radiation, allow_outside=allow_outside)), sheet=path)
    guess = guess_from_name(path)
    tube = tube_of(radiation)
    row = SheetRow(None, path, guess.mount, guess.treatment, tube, notes=guess.notes)
    return FoundSamples((SampleEntry(guess.sample, (row,)),))


def suffix_of(path: Path) -> str:
    """Suffix in small letters, that of the packed file for ``.gz``."""
    return Path(path.name.lower().removesuffix(".gz")).suffix


def natural_order(path: Path) -> list[tuple[int, int, str]]:
    """Sort key under which S2 comes before S10."""
    return [(0, int(part), "") if part.isdigit() else (1, 0, part) for part in re.split(r"(\d+)", path.name.lower()) if part]


def is_sheet(path: Path) -> bool:
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
    tube = tube_of(radiation)
    try:
        files = sorted((p for p in folder.iterdir() if p.is_file() and not p.name.startswith((".", "~"))), key=natural_order)
    except OSError as problem:
        raise SheetError(f"{folder}: the folder cannot be read", why=problem.strerror, fix="check its name and rights") from None
    sheets = [path for path in files if is_sheet(path)]
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
        if suffix_of(path) not in SCAN_SUFFIXES or re.match(r"(?i)(readme|license|notes?\b)", path.name):
            continue
        reason = no_scan(path) if suffix_of(path) in OPEN_SUFFIXES else None
        if reason is None:
            scans.append(path)
        else:
            skipped.append(Skipped(path, reason))
    if not scans:
        raise SheetError(
            f"{folder}: no scans were found", fix=f"put exports ({', '.join(SCAN_SUFFIXES)}) or a sample sheet into it"
        )
    return FoundSamples(entries_by_name(scans, tube), tuple(skipped))


def no_scan(path: Path) -> str | None:
    """Why a file is something else than a scan; None for scans, also for damaged ones, which fail in their sample."""
    try:
        read_scan(path, radiation="Cu")
    except NotAScanError as problem:
        return str(problem)
    except ScanError:
        return None
    return None


def entries_by_name(scans: list[Path], tube: Radiation | None) -> tuple[SampleEntry, ...]:
    """Samples out of the names of their files."""
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
