"""One sample from whatever the user points at."""

from __future__ import annotations

from pathlib import Path

from xrdmica.batch.sheet import entries_from
from xrdmica.errors import SheetError
from xrdmica.radiation import Radiation
from xrdmica.scans.scan import Sample

__all__ = ["read_sample"]


def read_sample(path: str | Path, name: str | None = None, *, radiation: str | Radiation | None = None) -> Sample:
    """Read a sample with all its scans.

    Parameters
    ----------
    path : str or pathlib.Path
        Sample sheet, folder of exports or a single scan.
    name : str, optional
        Which sample, when there are several.
    radiation : str or Radiation, optional
        Tube for scans for which a sheet does not name one.

    Returns
    -------
    Sample

    Raises
    ------
    SheetError
        If there is no such sample, or several and none is named.
    ScanError
        If one of its scans cannot be read.
    """
    found = entries_from(path, radiation=radiation)
    names = [entry.name for entry in found]
    chosen = [entry for entry in found if name is None or entry.name == name]
    if len(chosen) == 1:
        return chosen[0].load()
    listed = ", ".join(names[:8]) + (" ..." if len(names) > 8 else "")
    if name is None:
        raise SheetError(f"{path} holds {len(names)} samples", fix=f"name one of {listed}" if names else "check the path")
    raise SheetError(f"{path} holds no sample {name!r}", fix=f"name one of {listed}" if names else "check the path")
