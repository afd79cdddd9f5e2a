"""The program's own JSON of a scan, as `write_scan_json` makes it."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from xrdmica.errors import ScanError
from xrdmica.radiation import Radiation
from xrdmica.scans.read.raw import NotAScanError, RawScan
from xrdmica.scans.write import JSON_FORMAT

__all__ = ["RANK", "matches", "read"]

RANK = 15
_FIX = "export the scan as two columns of text, two-theta and counts"


def matches(head: bytes, path: Path) -> bool:
    """Whether the file begins like JSON."""
    return head[:256].lstrip(b"\xef\xbb\xbf \t\r\n").startswith((b"{", b"[{"))


def read(data: bytes, path: Path, column: str | None = None) -> RawScan:
    """Read the program's own JSON.

    Parameters
    ----------
    data : bytes
        Content of the file.
    path : Path
        For messages.
    column : str or None
        Not used.

    Raises
    ------
    ScanError
        If it is other JSON, or damaged.
    """
    try:
        content = json.loads(data.decode("utf-8-sig"))
    except (ValueError, RecursionError) as problem:
        raise NotAScanError(f"{path}: this is a JSON file, not a scan", why=str(problem)[:80], fix=_FIX) from None
    if not isinstance(content, dict) or content.get("format") != JSON_FORMAT:
        raise NotAScanError(f"{path}: this is a JSON file, not a scan", fix=_FIX)
    try:
        columns = [np.array(content[key], dtype=float) for key in ("two_theta", "counts", "sigma")]
        tube = _tube(content["radiation"])
        items = {str(key): str(value) for key, value in dict(content["metadata"]).items()}
        notes = tuple(str(note) for note in content["notes"])
        items |= {"mount": str(content["mount"]), "treatment": str(content["treatment"])}
    except (KeyError, TypeError, ValueError, OverflowError) as problem:
        why = f"{type(problem).__name__} {problem}"[:80]
        raise ScanError(f"{path}: this JSON of a scan is damaged", why=" ".join(why.split()), fix="write it again") from None
    if any(values.ndim != 1 or values.shape != columns[0].shape for values in columns):
        raise ScanError(f"{path}: this JSON of a scan is damaged", why="its columns differ in length", fix="write it again")
    return RawScan(columns[0], columns[1], columns[2], "unknown", None, tube, None, None, items, notes, "two_theta")


def _tube(said: Any) -> Radiation | None:
    """The radiation; None when it had only been assumed, so that this is told again."""
    waves, weights = (tuple(float(value) for value in said[key]) for key in ("wavelengths", "weights"))
    good = 0 < len(waves) == len(weights) < 10 and all(0.1 <= wave <= 5 for wave in waves) and min(weights) > 0
    if not good or abs(sum(weights) - 1) > 1e-6 or not str(said["name"]):
        raise ValueError("radiation")
    return None if said["origin"] == "assumed" else Radiation(str(said["name"]), waves, weights)
