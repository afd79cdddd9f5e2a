"""Look into an HDF5 file in a process of its own, because the library hangs or crashes on some damaged files.

Run as ``python -m xrdmica.scans.read.hdf5_child`` with the file on stdin; the answer on stdout is an npz archive whose
entry `said` is JSON.
"""

from __future__ import annotations

import json
import sys
from io import BytesIO
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrdmica.scans.read.columns import clean_name, name_columns
from xrdmica.scans.read.raw import Axis

__all__ = ["look"]

_OBJECTS = 5000
_POINTS = 5_000_000
_LENGTH = 200


def look(data: bytes) -> dict[str, Any]:
    """Arrays `axis`, `intensity` and perhaps `sigma` of the default or first scan, and `said` about them as JSON.

    Parameters
    ----------
    data : bytes
        Content of the file.
    """
    import h5py

    try:
        with h5py.File(BytesIO(data), "r") as file:
            return _scan(h5py, file)
    except Exception as problem:
        # h5py turns damage into errors of many kinds
        return {"said": json.dumps({"damage": " ".join(str(problem).split())[:100]})}


def _scan(h5py: Any, file: Any) -> dict[str, Any]:
    groups, items = _survey(h5py, file)
    found = [pair for pair in (_columns(h5py, group) for group in groups) if pair is not None]
    if not found:
        return {"said": json.dumps({})}
    default = _default(h5py, file)
    angle, intensity, axis = next((pair for pair in found if pair[1].parent.name == default), found[0])
    said = {
        "axis": axis, "axis_name": str(angle.name), "intensity_name": str(intensity.name), "lists": len(found), "items": items,
        "axis_unit": _text(angle.attrs.get("units", "")), "unit": _text(intensity.attrs.get("units", "")),
    }  # fmt: skip
    arrays = {"axis": angle, "intensity": intensity}
    out: dict[str, Any] = {key: np.asarray(values[()], dtype=float).ravel() for key, values in arrays.items()}
    sigma = _errors(h5py, intensity)
    if sigma is not None:
        out["sigma"] = sigma
    return {**out, "said": json.dumps(said)}


def _survey(h5py: Any, file: Any) -> tuple[list[Any], dict[str, str]]:
    """All groups, and single values by name; links to other files are not followed."""
    groups: list[Any] = []
    items: dict[str, str] = {}
    pending, seen = [file["/"]], 0
    while pending:
        group = pending.pop()
        groups.append(group)
        below = []
        for name in group:
            seen += 1
            if seen > _OBJECTS:
                return groups, items
            child = _inside(h5py, group, name)
            if isinstance(child, h5py.Group):
                below.append(child)
            elif isinstance(child, h5py.Dataset) and child.size == 1 and len(items) < _LENGTH:
                _keep(items, name, child)
        pending += below[::-1]
    return groups, items


def _keep(items: dict[str, str], name: str, child: Any) -> None:
    value = _text(np.asarray(child[()]).ravel()[0])[:_LENGTH]
    unit = _text(child.attrs.get("units", "")).strip().lower()
    key = name.replace("_one", "1").replace("_two", "2")
    if "wavelength" in key and unit in ("nm", "m", "nanometer", "nanometre"):
        value = f"{float(value) * (1e10 if unit == 'm' else 10.0):.6g}"
    items.setdefault(key, value)


def _inside(h5py: Any, group: Any, name: str) -> Any:
    """A child that is stored in this file itself, else None."""
    if not isinstance(group.get(name, getlink=True), h5py.HardLink):
        return None
    child = group[name]
    if isinstance(child, h5py.Dataset) and (child.is_virtual or child.external):
        return None
    return child


def _text(value: Any) -> str:
    if isinstance(value, bytes):
        return value.decode("utf-8", errors="replace")
    if isinstance(value, np.ndarray):
        return _text(value.ravel()[0]) if value.size else ""
    return str(value)


def _line(h5py: Any, group: Any, name: str) -> Any:
    """A child that is a list of numbers, else None."""
    if not name or "/" in name or name not in group:
        return None
    child = _inside(h5py, group, name)
    if not isinstance(child, h5py.Dataset) or child.dtype.kind not in "iuf":
        return None
    long = 1 < child.size <= _POINTS and max(child.shape) == child.size
    return child if long else None


def _columns(h5py: Any, group: Any) -> tuple[Any, Any, Axis] | None:
    """Angle and intensity of one group: by the NeXus attributes, else by name."""
    names = [name for name in group if _line(h5py, group, name) is not None]
    if len(names) < 2:
        return None
    axes = group.attrs.get("axes", "")
    axis_names = [_text(value) for value in np.ravel(axes)] if not isinstance(axes, str | bytes) else [_text(axes)]
    signal = _text(group.attrs.get("signal", ""))
    known = name_columns(names)
    if signal not in names:
        signal = names[known.intensity] if known.intensity >= 0 else ""
    by_name = [names[index] for index in (known.angle, known.spacing, known.transfer) if index >= 0]
    for name in [*(name for name in axis_names if name in names), *by_name]:
        if signal not in names or name == signal:
            continue
        angle, intensity = group[name], group[signal]
        axis = _axis(name, _text(angle.attrs.get("units", "")).lower())
        if axis is not None and angle.size == intensity.size:
            return angle, intensity, axis
    return None


def _axis(name: str, unit: str) -> Axis | None:
    known = name_columns([clean_name(name)])
    if known.angle >= 0:
        return "radians" if unit.startswith("rad") else "two_theta"
    return "d" if known.spacing >= 0 else "q" if known.transfer >= 0 else None


def _errors(h5py: Any, intensity: Any) -> NDArray[np.float64] | None:
    """Standard errors beside the intensities, when there are any."""
    name = str(intensity.name).rsplit("/", 1)[-1]
    for other in (f"{name}_errors", f"{name}_error", "errors"):
        found = _line(h5py, intensity.parent, other)
        if found is not None and found.size == intensity.size:
            return np.asarray(found[()], dtype=float).ravel()
    return None


def _default(h5py: Any, file: Any) -> str:
    """Path of the group that the chain of `default` attributes leads to."""
    group = file["/"]
    for _ in range(10):
        name = _text(group.attrs.get("default", ""))
        if not name or "/" in name or name not in group:
            break
        child = _inside(h5py, group, name)
        if not isinstance(child, h5py.Group):
            break
        group = child
    return str(group.name)


def main() -> None:
    """Answer for the file on stdin."""
    stream = BytesIO()
    np.savez(stream, **look(sys.stdin.buffer.read()))
    sys.stdout.buffer.write(stream.getvalue())


if __name__ == "__main__":
    main()
