"""The output folder: the files of a sample appear together, the JSON last; tables are written row by row."""

from __future__ import annotations

import csv
import os
import tempfile
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import IO

from xrdmica.errors import XrdmicaError
from xrdmica.report.files import sample_of_file, table_cell
from xrdmica.report.rows import Cell

__all__ = ["SUFFIXES", "commit", "csv_table", "replace_bytes", "replace_text", "sweep", "withdraw"]

SUFFIXES = (".png", ".html", ".json")  # what a sample may have, the one that makes the others count at the end


def commit(folder: Path, stem: str, files: Mapping[str, bytes], *, keep: Sequence[str] = ()) -> None:
    """Put the files of a sample in their places.

    All are written beside their targets first, and forced to the disk; then the old ``.json`` goes, the others take their
    places, and the new ``.json`` comes last. Whenever the program or the power stops, a ``.json`` that is there belongs to
    the files beside it, and one that is missing is made again by the next run.

    Parameters
    ----------
    folder : Path
        Output folder.
    stem : str
        File name without suffix.
    files : mapping
        Suffix -> content.
    keep : sequence of str
        Suffixes of files that stay as they are; others of `SUFFIXES` that are not written are removed.

    Raises
    ------
    XrdmicaError
        If something cannot be written; the files of before are still there then.
    """
    drafts: dict[str, Path] = {}
    try:
        for suffix in sorted(files, key=SUFFIXES.index):
            drafts[suffix] = _draft(folder, f"{stem}{suffix}", files[suffix])
        if ".json" in files:
            (folder / f"{stem}.json").unlink(missing_ok=True)
        for suffix in SUFFIXES:
            target = folder / f"{stem}{suffix}"
            if suffix in drafts:
                drafts[suffix].replace(target)
            elif suffix not in keep and suffix != ".json":
                target.unlink(missing_ok=True)
        _settle(folder)
    except OSError as error:
        raise _cannot(folder / f"{stem}.json", error) from error
    finally:
        for draft in drafts.values():
            draft.unlink(missing_ok=True)


def withdraw(folder: Path, stem: str, sample: str) -> None:
    """Take away what an earlier run left for a sample that fails now, so that nobody takes it for the result of this run."""
    # without a JSON, a figure there is what a killed run left
    if sample_of_file(folder / f"{stem}.json") in (None, sample):
        for suffix in reversed(SUFFIXES):
            (folder / f"{stem}{suffix}").unlink(missing_ok=True)


def sweep(folder: Path) -> None:
    """Remove the unfinished files of runs that were killed; only while holding the lock."""
    for path in folder.glob(".*.part"):
        if path.is_file():
            path.unlink(missing_ok=True)


def replace_bytes(path: Path, content: bytes) -> None:
    """Write a file whole or not at all, forced to the disk.

    Raises
    ------
    XrdmicaError
        If it cannot be written.
    """
    draft: Path | None = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        draft = _draft(path.parent, path.name, content)
        draft.replace(path)
        _settle(path.parent)
    except OSError as error:
        raise _cannot(path, error) from error
    finally:
        if draft is not None:
            draft.unlink(missing_ok=True)


@contextmanager
def replace_text(path: Path, *, bom: bool = False) -> Iterator[IO[str]]:
    """A stream whose text becomes the file when all of it is written, else nothing changes.

    Raises
    ------
    XrdmicaError
        If it cannot be written.
    """
    temporary: Path | None = None
    try:
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
        temporary = Path(name)
        encoding = "utf-8-sig" if bom else "utf-8"
        with os.fdopen(handle, "w", encoding=encoding, errors="replace", newline="") as stream:
            yield stream
            stream.flush()
            os.fsync(stream.fileno())
        temporary.chmod(0o666 & ~_mask())
        temporary.replace(path)
        _settle(path.parent)
    except OSError as error:
        raise _cannot(path, error) from error
    finally:
        if temporary is not None:
            temporary.unlink(missing_ok=True)


@contextmanager
def csv_table(
    path: Path, header: Sequence[str], *, bom: bool = False
) -> Iterator[Callable[[Iterable[Sequence[Cell]]], None]]:
    """A comma-separated table that is written row by row, whole or not at all.

    Cells are made safe for spreadsheets as in `report.files.write_csv`.

    Parameters
    ----------
    path : Path
        Target.
    header : sequence of str
        Column names.
    bom : bool
        Whether to start with the mark by which some spreadsheets know UTF-8.

    Yields
    ------
    callable
        Takes rows of as many cells as the header has.

    Raises
    ------
    XrdmicaError
        If it cannot be written.
    """
    with replace_text(path, bom=bom) as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow([table_cell(name) for name in header])

        def write(rows: Iterable[Sequence[Cell]]) -> None:
            for row in rows:
                if len(row) != len(header):
                    raise ValueError(f"a row of {len(row)} cells under {len(header)} columns")
                writer.writerow([table_cell(value) for value in row])

        yield write


def _draft(folder: Path, name: str, content: bytes) -> Path:
    handle, temporary = tempfile.mkstemp(dir=folder, prefix=f".{name}.", suffix=".part")
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(content)
            stream.flush()
            os.fsync(stream.fileno())
        Path(temporary).chmod(0o666 & ~_mask())
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise
    return Path(temporary)


def _settle(folder: Path) -> None:
    """Force the names in a folder to the disk where the system can."""
    if not hasattr(os, "O_DIRECTORY"):
        return
    handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(handle)
    except OSError:
        pass  # some network file systems refuse this for folders; the files themselves are safe
    finally:
        os.close(handle)


def _mask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _cannot(path: Path, error: OSError) -> XrdmicaError:
    return XrdmicaError(
        f"{path}: cannot be written", why=error.strerror or str(error),
        fix="make room or choose a folder you may write to, then repeat the command: what is finished is kept",
    )  # fmt: skip
