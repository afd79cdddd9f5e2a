"""Powder CIF: measured counts with an angle column, or with start, end and increment only.

Tag names are those of the powder CIF dictionary of the International Union of Crystallography.
"""

from __future__ import annotations

import math
import re
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import ScanError, XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.scans.read.decode import decode, looks_like_text
from xrdmica.scans.read.header import header_radiation, radiation_from_wavelength
from xrdmica.scans.read.raw import IntensityUnit, NotAScanError, RawScan

__all__ = ["RANK", "matches", "read"]

RANK = 10
_INTENSITY: tuple[tuple[str, IntensityUnit], ...] = (
    ("_pd_meas_counts_total", "counts"), ("_pd_meas_intensity_total", "unknown"),
    ("_pd_proc_intensity_total", "unknown"), ("_pd_proc_intensity_net", "unknown"),
)  # fmt: skip
_ANGLE = ("_pd_meas_2theta_scan", "_pd_meas_2theta_corrected", "_pd_proc_2theta_corrected")
_RANGE = ("_pd_meas_2theta_range", "_pd_proc_2theta_range")
_TUBE = ("_diffrn_source_target", "_diffrn_radiation_type", "_diffrn_source", "_diffrn_radiation_wavelength_id")
_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)(?:\((\d+)\))?")
_FIX = "export the scan as two columns of text, two-theta and counts"


def matches(head: bytes, path: Path) -> bool:
    """Whether the content looks like a CIF."""
    if b"data_" not in head.replace(b"\x00", b"") or not looks_like_text(head):
        return False
    text = decode(head)
    return bool(re.search(r"^data_", text, re.M)) and bool(re.search(r"^\s*(?:_\w|loop_)", text, re.M))


def read(data: bytes, path: Path, column: str | None = None) -> RawScan:
    """Read the first scan of a powder CIF.

    Parameters
    ----------
    data : bytes
        Content of the file.
    path : Path
        For messages.
    column : str or None
        Not used: the tags say what is what.

    Raises
    ------
    ScanError
        If the CIF cannot be parsed or holds no measured scan.
    """
    from gemmi import cif

    try:
        document = cif.read_string(decode(data))
    except (ValueError, RuntimeError) as problem:
        raise ScanError(f"{path}: this CIF cannot be read", why=str(problem).splitlines()[0][:120], fix=_FIX) from None
    blocks = [block for block in document if any(_column(block, tag) for tag, _ in _INTENSITY)]
    if not blocks:
        raise NotAScanError(
            f"{path}: this CIF holds no measured scan", why="there is no list of powder intensities in it", fix=_FIX
        )
    block = blocks[0]
    notes = [f"the file holds {len(blocks)} scans, the first ({block.name}) was read"] if len(blocks) > 1 else []
    tag, unit = next(pair for pair in _INTENSITY if _column(block, pair[0]))
    texts = _column(block, tag)
    counts, errors = _values(texts)
    if tag.endswith("_net"):
        notes.append("intensities are net, the background has been taken off already")
    two_theta, angle_notes = _angles(block, len(texts), path)
    notes += angle_notes
    known = np.array([text not in ("?", ".") for text in texts])
    if not known.all():
        notes.append(f"{int((~known).sum())} points without a value were left out")
    sigma = errors if np.all(np.isfinite(errors[known])) and known.any() else None
    radiation, conflict = _radiation(block)
    raw = RawScan(two_theta, counts, sigma, unit, None, radiation, conflict, None, _metadata(block), tuple(notes))
    return raw.points(known)


def _column(block: Any, tag: str) -> list[str]:
    """Values of a loop column; an empty list when the tag is not looped."""
    column = block.find_loop(tag)
    return list(column) if column else []


def _value(block: Any, tag: str) -> str | None:
    """Value of a single tag, without its quotes."""
    from gemmi import cif

    raw = block.find_value(tag)
    if raw is None or raw in ("?", "."):
        return None
    return str(cif.as_string(raw)).strip()


def _number(text: str | None) -> float | None:
    match = _NUMBER.fullmatch(text.strip()) if text else None
    return float(match.group(1)) if match else None


def _values(texts: list[str]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Numbers and their standard errors from ``1125(34)``; nan where there is none."""
    values = np.full(len(texts), math.nan)
    errors = np.full(len(texts), math.nan)
    for index, text in enumerate(texts):
        match = _NUMBER.fullmatch(text)
        if match:
            values[index] = float(match.group(1))
            if match.group(2):
                decimals = len(match.group(1).partition(".")[2]) if "e" not in match.group(1).lower() else 0
                errors[index] = float(match.group(2)) * 10.0**-decimals
    return values, errors


def _angles(block: Any, count: int, path: Path) -> tuple[NDArray[np.float64], list[str]]:
    for tag in _ANGLE:
        texts = _column(block, tag)
        if len(texts) == count:
            return _values(texts)[0], []
    for stem in _RANGE:
        low, high, step = (_number(_value(block, f"{stem}_{end}")) for end in ("min", "max", "inc"))
        if low is None or step is None or step <= 0 or not (abs(low) < 360 and step < 360):
            continue
        if high is None:
            angles = np.asarray(low + step * np.arange(count), dtype=np.float64)
            return angles, ["angles were built from the start and the increment in the file"]
        if abs((high - low) / step + 1 - count) > max(1.5, 0.002 * count):
            raise ScanError(
                f"{path}: {stem}_min, _max and _inc give {(high - low) / step + 1:.0f} points for {count} counts",
                fix=_FIX,
            )
        # the increment is often rounded in the file, so the ends are trusted more
        angles = np.asarray(np.linspace(low, high, count), dtype=np.float64)
        return angles, ["angles were built from the range and the number of points in the file"]
    raise ScanError(f"{path}: this CIF gives counts but neither a two-theta column nor the range of angles", fix=_FIX)


def _radiation(block: Any) -> tuple[Radiation | None, str | None]:
    waves = [v for v in (_number(t) for t in _column(block, "_diffrn_radiation_wavelength")) if v and 0.1 <= v <= 5]
    single = _number(_value(block, "_diffrn_radiation_wavelength"))
    if not waves and single and 0.1 <= single <= 5:
        waves = [single]
    if waves:
        first = radiation_from_wavelength(waves[0])
        kind = _value(block, "_diffrn_radiation_type") or ""
        if len(waves) == 1 and (kind == "single wavelength" or "~1~" in kind):
            single_line = Radiation.tube(first.name, doublet=False) if "~1~" in kind and first.name.isalpha() else None
            return single_line or Radiation.from_wavelength(waves[0]), None
        if len(waves) == 1 or len(first.wavelengths) > 1:
            return first, None
        weights = [v or 0.0 for v in (_number(t) for t in _column(block, "_diffrn_radiation_wavelength_wt"))]
        if len(weights) == len(waves) and min(weights) > 0:
            total = sum(weights)
            return Radiation(f"{waves[0]:g}", tuple(waves), tuple(weight / total for weight in weights)), None
        return first, None
    for tag in _TUBE:
        text = _value(block, tag)
        try:
            if text and not re.fullmatch(r"[\d.]+", text):
                return Radiation.parse(text.split("~")[0]), None
        except XrdmicaError:
            found = header_radiation({"target": text or ""})
            if found[0] is not None:
                return found
    return None, None


def _metadata(block: Any) -> dict[str, str]:
    items = {"block": str(block.name)}
    for tag in ("_pd_spec_description", "_pd_char_colour", "_pd_meas_number_of_points", *_TUBE):
        text = _value(block, tag)
        if text:
            items[tag.lstrip("_")] = text[:200]
    said = re.fullmatch(r"mount (\w+), treatment (\S+)", items.get("pd_spec_description", ""))
    if said:
        items |= {"mount": said[1], "treatment": said[2]}
    return items
