"""NeXus and other HDF5 files: a list of intensities against two-theta, with the optional package h5py.

Names of groups and attributes are those of the NeXus definition (NXdata, signal, axes, default).
"""

from __future__ import annotations

import importlib.util
import json
import os
import subprocess
import sys
from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np

from xrdmica.errors import ScanError
from xrdmica.scans.read.header import counting_seconds, header_radiation
from xrdmica.scans.read.raw import IntensityUnit, NotAScanError, RawScan

__all__ = ["RANK", "matches", "read"]

RANK = 5
PATIENCE = 60.0  # seconds after which a file counts as damaged
_SIGNATURE = b"\x89HDF\r\n\x1a\n"
_FIX = "export the scan as two columns of text, two-theta and counts"


def matches(head: bytes, path: Path) -> bool:
    """Whether the file begins like HDF5."""
    return head.startswith(_SIGNATURE)


def read(data: bytes, path: Path, column: str | None = None) -> RawScan:
    """Read the default, or the first, scan of an HDF5 file.

    Parameters
    ----------
    data : bytes
        Content of the file.
    path : Path
        For messages.
    column : str or None
        Not used: the file says what is what.

    Raises
    ------
    ScanError
        If h5py is not installed, the file is damaged or holds no scan.
    """
    if not _installed():
        raise ScanError(
            f"{path}: this is an HDF5 (NeXus) file, and the package that reads these is not installed",
            fix='install it with: pip install "xrdmica[nexus]"',
        )
    arrays = _looked_at(data, path)
    said = json.loads(str(arrays["said"]))
    if "damage" in said:
        raise ScanError(f"{path}: this HDF5 file is damaged", why=said["damage"] or None, fix="copy or export the file again")
    if "axis" not in said:
        raise NotAScanError(f"{path}: this HDF5 file holds no list of intensities against two-theta", fix=_FIX)
    notes = []
    if said["lists"] > 1:
        notes = [f"the file holds {said['lists']} lists of intensities, {said['intensity_name']} was read"]
    unit: IntensityUnit = "unknown"
    word = said["unit"].lower()
    if "counts" in word or word in ("cps", "1/s"):
        unit = "counts per second" if "/s" in word or "cps" in word else "counts"
    items = said["items"]
    radiation, conflict = header_radiation(items)
    return RawScan(
        arrays["axis"], arrays["intensity"], arrays.get("sigma"), unit, counting_seconds(items), radiation, conflict, None, items,
        tuple(notes), said["axis"], 0.1 if "nm" in said["axis_unit"] else 1.0, said["axis_name"],
    )  # fmt: skip


def _installed() -> bool:
    try:
        return importlib.util.find_spec("h5py") is not None
    except ValueError:
        return False


def _looked_at(data: bytes, path: Path) -> dict[str, Any]:
    """Answer of the process that opens the file."""
    command = [sys.executable, "-m", "xrdmica.scans.read.hdf5_child"]
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(filter(None, sys.path))}
    try:
        done = subprocess.run(command, input=data, capture_output=True, timeout=PATIENCE, env=environment, check=True)
        with np.load(BytesIO(done.stdout), allow_pickle=False) as archive:
            return {name: archive[name] for name in archive.files}
    except subprocess.TimeoutExpired:
        why = "looking into it does not come to an end"
    except (subprocess.CalledProcessError, OSError, ValueError, EOFError):
        why = "the library that reads it gave up"
    raise ScanError(f"{path}: this HDF5 file is damaged", why=why, fix="copy or export the file again")
