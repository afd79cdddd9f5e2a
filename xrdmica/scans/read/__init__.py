"""From a diffractometer export to a Scan.

Every module of this package that has `matches(head, path)` and `read(data, path, column)` is a reader and is asked in the
order of its `RANK`; a new kind of file needs a new module and nothing else.
"""

from __future__ import annotations

import gzip
import importlib
import pkgutil
import zlib
from functools import lru_cache
from io import BytesIO
from pathlib import Path
from typing import Any

from xrdmica.errors import ScanError, SheetError
from xrdmica.radiation import Radiation
from xrdmica.scans.names import guess_from_name
from xrdmica.scans.read.axis import to_two_theta
from xrdmica.scans.read.finish import finish
from xrdmica.scans.read.raw import Axis, NotAScanError, RawScan
from xrdmica.scans.read.refuse import refuse_foreign, refuse_unknown
from xrdmica.scans.scan import Mount, RadiationOrigin, Scan
from xrdmica.scans.treatment import Treatment

__all__ = ["NotAScanError", "read_scan"]

_LARGEST = 200_000_000  # bytes
_HEAD = 65536


@lru_cache(maxsize=1)
def _readers() -> tuple[Any, ...]:
    modules = [importlib.import_module(f"{__name__}.{info.name}") for info in pkgutil.iter_modules(__path__)]
    readers = [module for module in modules if hasattr(module, "matches") and hasattr(module, "read")]
    return tuple(sorted(readers, key=lambda module: (getattr(module, "RANK", 50), module.__name__)))


def read_scan(
    path: str | Path,
    *,
    radiation: str | Radiation | None = None,
    radiation_origin: RadiationOrigin = "option",
    mount: Mount | None = None,
    treatment: str | Treatment | None = None,
    axis: Axis | None = None,
    column: str | None = None,
) -> Scan:
    """Read one diffractometer export.

    Parameters
    ----------
    path : str or Path
        Text table, powder CIF, XML or NeXus (HDF5), also packed with gzip.
    radiation : str or Radiation, optional
        Tube, such as ``"Cu"``, or wavelength [angstrom]; goes before what the header says. When neither says
        anything, Cu is assumed and a note of the scan says so.
    radiation_origin : str
        Where `radiation` was given.
    mount : str, optional
        ``"oriented"`` or ``"random"``; by default read from the file name, else random with a note.
    treatment : str or Treatment, optional
        State of the mount; by default read from the file name, else ``none`` with a note.
    axis : str, optional
        What the file gives its intensities against: ``"two_theta"`` [degree], ``"theta"`` [degree], ``"radians"``
        (two-theta), ``"d"`` [angstrom] or ``"q"`` [1/angstrom, unless the column says 1/nm].
    column : str, optional
        Name or number (from 1) of the column of intensities, for tables with many scans side by side.

    Returns
    -------
    Scan
        Angles rising, with notes on everything that had to be decided.

    Raises
    ------
    ScanError
        With one sentence that names the file and the line.
    """
    path = Path(path)
    tube = Radiation.parse(radiation) if isinstance(radiation, str) else radiation
    state = Treatment.parse(treatment) if isinstance(treatment, str) else treatment
    data = _content(path)
    if not data.strip(b"\x00 \t\r\n\xef\xbb\xbf"):
        raise ScanError(f"{path}: the file is empty", fix="export the scan again")
    head = data[:_HEAD]
    refuse_foreign(head, path)
    reader = next((module for module in _readers() if module.matches(head, path)), None)
    if reader is None:
        raise refuse_unknown(head, path)
    raw = to_two_theta(reader.read(data, path, column), str(path), axis, tube)
    guess = guess_from_name(path)
    if mount is None and state is None:
        mount, state, notes = _said_in_header(raw) or (guess.mount, guess.treatment, guess.notes)
        raw = raw.noted(*notes)
    elif mount is None:
        mount = "random" if state is not None and state.condition == "none" else "oriented"
    elif state is None:
        state = guess.treatment if guess.known else Treatment("none" if mount == "random" else "air_dried")
        raw = raw.noted(f"treatment was taken as {state.name}")
    assert state is not None
    return finish(raw, str(path), radiation=tube, radiation_origin=radiation_origin, mount=mount, treatment=state)


def _said_in_header(raw: RawScan) -> tuple[Mount, Treatment, tuple[str, ...]] | None:
    """Mount and treatment when the header gives both in the words of the sample sheet, as `write_scan_csv` does."""
    mounts: dict[str, Mount] = {"oriented": "oriented", "random": "random"}
    mount = mounts.get(raw.metadata.get("mount", ""))
    try:
        state = Treatment.parse(raw.metadata.get("treatment", ""))
    except SheetError:
        return None
    if mount is None:
        return None
    return mount, state, (f"mount {mount} and treatment {state.name} were read from the header of the file",)


def _content(path: Path) -> bytes:
    """All bytes of a file, unpacked when it is gzip."""
    try:
        if path.is_dir():
            raise ScanError(f"{path}: this is a folder", fix="name a file, or give the folder to the batch command")
        size = path.stat().st_size
        if size > _LARGEST:
            raise ScanError(f"{path}: the file has {size / 1e6:.0f} MB, the limit is 200", fix="export a single scan")
        data = path.read_bytes()
    except (FileNotFoundError, NotADirectoryError):
        raise ScanError(f"{path}: there is no such file", fix="check the name and the folder") from None
    except PermissionError:
        raise ScanError(f"{path}: no permission to read it", fix="ask its owner for the right to read it") from None
    except (OSError, ValueError) as problem:
        raise ScanError(f"{path}: it cannot be read", why=str(problem), fix="check the name and the disk") from None
    if not data.startswith(b"\x1f\x8b"):
        return data
    try:
        with gzip.open(BytesIO(data)) as packed:
            content = packed.read(_LARGEST + 1)
    except (OSError, EOFError, zlib.error):
        raise ScanError(f"{path}: the gzip archive is damaged", fix="pack or copy the file again") from None
    if len(content) > _LARGEST:
        raise ScanError(f"{path}: unpacked it is larger than 200 MB", fix="export a single scan")
    return content
