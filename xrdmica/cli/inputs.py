"""How files given on the command line become samples."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Protocol, TypeVar

import click

from xrdmica.errors import SheetError, XrdmicaError

if TYPE_CHECKING:
    from xrdmica.scans.scan import Sample

__all__ = ["Loadable", "ScanFiles", "entries_of", "of_each"]

Result = TypeVar("Result")


class Loadable(Protocol):
    """A named sample whose scans are read when they are needed."""

    @property
    def name(self) -> str:
        """The sample."""
        ...

    def load(self) -> Sample:
        """Read the scans."""
        ...


@dataclass(frozen=True)
class ScanFiles:
    """Scan files that make up one sample.

    Attributes
    ----------
    name : str
        The sample.
    files : tuple of (pathlib.Path, str or None)
        Each file with its treatment; None to read it from the file name.
    radiation : str or None
        Tube given as an option.
    notes : tuple of str
        What was supposed.
    """

    name: str
    files: tuple[tuple[Path, str | None], ...]
    radiation: str | None
    notes: tuple[str, ...] = ()

    def load(self) -> Sample:
        """Read the files."""
        from xrdmica.scans.read import read_scan
        from xrdmica.scans.scan import Sample

        scans = tuple(read_scan(path, radiation=self.radiation, treatment=treatment) for path, treatment in self.files)
        return Sample(self.name, scans, notes=self.notes)


def entries_of(paths: Sequence[str], *, radiation: str | None, sample: str | None, allow_outside: bool = False) -> list[Loadable]:
    """The samples that the paths stand for.

    Parameters
    ----------
    paths : sequence of str
        One sheet, one folder, or the scan files of one sample, each plain or as ``FILE:treatment``.
    radiation : str or None
        Tube given as an option.
    sample : str or None
        Keep only this sample; for scan files, what to call the sample.
    allow_outside : bool
        Whether a sheet may name files outside its own folder.

    Raises
    ------
    XrdmicaError
        If nothing can be read from the paths or there is no such sample.
    """
    from xrdmica.batch.sheet import entries_from

    for path in map(Path, paths):
        if not path.exists():
            continue
        found = entries_from(path, radiation=radiation, allow_outside=allow_outside)
        if not path.is_dir() and found.sheet is None:
            continue
        if len(paths) > 1:
            raise SheetError(
                f"{path}: is a {'folder' if path.is_dir() else 'sample sheet'} among several paths",
                fix="give one sheet, one folder, or the scan files of one sample",
            )
        for skipped in found.skipped:
            click.echo(f"not read: {skipped.file.name}: {' '.join(skipped.reason.split())}", err=True)
        return _chosen(path, list(found), sample)
    return [_scan_files(paths, radiation, sample)]


def _chosen(source: Path, entries: list[Loadable], sample: str | None) -> list[Loadable]:
    if sample is None:
        return entries
    kept = [entry for entry in entries if entry.name == sample]
    if not kept:
        from difflib import get_close_matches

        close = get_close_matches(sample, [entry.name for entry in entries], n=3) or [e.name for e in entries[:5]]
        raise SheetError(f"{source}: has no sample {sample!r}", fix=f"name one that is there, such as {', '.join(close)}")
    return kept


def _scan_files(paths: Sequence[str], radiation: str | None, sample: str | None) -> ScanFiles:
    from xrdmica.scans.names import guess_from_name

    files = tuple(_file_and_treatment(text) for text in paths)
    names = list(dict.fromkeys(guess_from_name(path).sample for path, _ in files))
    notes: tuple[str, ...] = ()
    if sample is None and len(names) > 1:
        notes = (f"files named {', '.join(names)} were taken as one sample",)
    return ScanFiles(sample or names[0], files, radiation, notes)


def _file_and_treatment(text: str) -> tuple[Path, str | None]:
    """Split ``FILE:treatment``; a path that exists as it stands is not split."""
    name, colon, treatment = text.rpartition(":")
    if Path(text).exists() or not colon or not name:
        return Path(text), None
    if not Path(name).exists():
        # the drive letter of a path, or a file that is not there: reading it says so
        return Path(text) if not Path(name).suffix else Path(name), None
    from xrdmica.scans.treatment import Treatment

    try:
        Treatment.parse(treatment)
    except XrdmicaError as error:
        raise SheetError(f"{name}: {error.what}", fix=error.fix) from error
    return Path(name), treatment


def of_each(entries: Sequence[Loadable], function: Callable[[Sample], Result]) -> tuple[list[Result], int]:
    """Apply a function to every sample, telling on stderr which ones fail.

    Parameters
    ----------
    entries : sequence
        Samples.
    function : callable
        What to do with a sample.

    Returns
    -------
    results : list
        Of the samples that went well.
    failed : int
        How many did not.

    Raises
    ------
    XrdmicaError
        If the only sample fails.
    """
    results = []
    failed = 0
    for entry in entries:
        try:
            results.append(function(entry.load()))
        except XrdmicaError as error:
            if len(entries) == 1:
                raise
            failed += 1
            click.echo(f"xrdmica: {' '.join(str(error).split())}", err=True)
    return results, failed
