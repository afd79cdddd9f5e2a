"""Samples of several sheets, folders, files and patterns together."""

from __future__ import annotations

import glob
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from xrdmica.batch.sheet import (
    OPEN_SUFFIXES,
    SCAN_SUFFIXES,
    FoundSamples,
    SampleEntry,
    Skipped,
    entries_by_name,
    entries_from,
    is_sheet,
    natural_order,
    no_scan,
    suffix_of,
)
from xrdmica.batch.sheet_table import tube_of
from xrdmica.errors import SheetError
from xrdmica.radiation import Radiation

__all__ = ["Gathered", "gather"]


@dataclass(frozen=True)
class Gathered:
    """Samples from several places.

    Attributes
    ----------
    entries : tuple of SampleEntry
        In the order of the sources.
    skipped : tuple of Skipped
        Files that are no scans.
    sheets : tuple of Path
        The sheets that were used.
    """

    entries: tuple[SampleEntry, ...]
    skipped: tuple[Skipped, ...] = ()
    sheets: tuple[Path, ...] = ()

    def __iter__(self) -> Iterator[SampleEntry]:
        return iter(self.entries)

    def __len__(self) -> int:
        return len(self.entries)


def gather(
    sources: str | Path | Sequence[str | Path], *, radiation: str | Radiation | None = None, allow_outside: bool = False
) -> Gathered:
    """Samples of everything the user points at.

    Parameters
    ----------
    sources : path or sequence of paths
        Sample sheets, folders, exports, and patterns with ``*``, ``?``, ``[...]`` or ``**``. Exports that stand in the
        same folder are put together to samples by their names.
    radiation : str or Radiation, optional
        Tube for all scans for which a sheet does not name one.
    allow_outside : bool
        Whether a sheet may name files outside its own folder.

    Raises
    ------
    SheetError
        If a source cannot be used, a pattern finds nothing, or two sources name the same sample.
    """
    given = [sources] if isinstance(sources, str | Path) else list(sources)
    parts: list[tuple[str, FoundSamples]] = []
    loose: dict[Path, dict[Path, Path]] = {}
    skipped: list[Skipped] = []
    for text in given:
        matched = [path for path in _expand(text) if not path.name.startswith((".", "~"))]
        explicit = matched == [Path(text)]
        for path in matched:
            if path.is_dir() or is_sheet(path) or not path.exists():
                parts.append((str(path), entries_from(path, radiation=radiation, allow_outside=allow_outside)))
            elif not explicit and (reason := _other(path)) is not None:
                skipped.append(Skipped(path, reason))
            else:
                group = loose.setdefault(path.parent, {})
                group.setdefault(path.resolve(), path)
    for folder, files in loose.items():
        parts.append((str(folder), FoundSamples(entries_by_name(list(files.values()), tube_of(radiation)))))
    _no_sample_twice(parts)
    return Gathered(
        tuple(entry for _, found in parts for entry in found),
        (*skipped, *(item for _, found in parts for item in found.skipped)),
        tuple(found.sheet for _, found in parts if found.sheet is not None),
    )


def _other(path: Path) -> str | None:
    """Why a file that a pattern matched is no export; None when it is one, also a damaged one."""
    if suffix_of(path) not in SCAN_SUFFIXES:
        return "its name does not end like that of an export"
    return no_scan(path) if suffix_of(path) in OPEN_SUFFIXES else None


def _expand(text: str | Path) -> list[Path]:
    """What a pattern matches, in natural order; a path that exists is taken as it stands, whatever it is called."""
    path = Path(text)
    if path.exists() or not glob.has_magic(str(text)):
        return [path]
    # a pattern with ** also matches the folder it starts in
    found = sorted((Path(name) for name in glob.glob(str(text), recursive=True)), key=lambda p: (str(p.parent), natural_order(p)))  # noqa: PTH207
    if "**" in str(text):
        found = [p for p in found if not p.is_dir()]
    if not found:
        raise SheetError(f"{text}: the pattern matches nothing", fix="check it, and quote it so that the shell leaves it alone")
    return found


def _no_sample_twice(parts: Sequence[tuple[str, FoundSamples]]) -> None:
    owner: dict[str, str] = {}
    for place, found in parts:
        for entry in found:
            if entry.name in owner:
                both = f"{owner[entry.name]} and {place}" if owner[entry.name] != place else place
                raise SheetError(
                    f"sample {entry.name} stands twice: {both}", fix="rename one, or run them into folders of their own"
                )
            owner[entry.name] = place
