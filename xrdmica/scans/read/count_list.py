"""Counts alone, one or several a line, below a header that gives start, step and stop of the angles."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np

from xrdmica.errors import ScanError
from xrdmica.scans.read.decode import decode, looks_like_text, text_lines
from xrdmica.scans.read.dialect import Dialect, is_comment
from xrdmica.scans.read.header import counting_seconds, header_items, header_radiation
from xrdmica.scans.read.raw import RawScan
from xrdmica.scans.scan import MINIMUM_POINTS

__all__ = ["RANK", "matches", "read"]

RANK = 90
_HEADER_LINES = 60
_BLANKS = Dialect(None, ".")
_FIX = "export the scan as two columns, two-theta in degrees and counts"
_NAMES = {
    "low": r"^(?:2?-?theta|angle|scan)?(?:start|begin|from|first|min)(?:ing)?(?:angle|2theta|position|pos)?$",
    "high": r"^(?:2?-?theta|angle|scan)?(?:stop|end|to|last|max|final)(?:ing)?(?:angle|2theta|position|pos)?$",
    "step": r"^(?:2?-?theta|angle|scan)?(?:step|increment|inc)(?:size|width|angle|2theta)?$",
}


def matches(head: bytes, path: Path) -> bool:
    """Whether a header with the range of angles stands above lines that are counts alone."""
    if not looks_like_text(head):
        return False
    # counts that begin farther down than this are not looked for
    most = _HEADER_LINES + 9
    return _split(decode(head).replace("\r\n", "\n").replace("\r", "\n").split("\n", most)[:most]) is not None


def _numbers(line: str) -> list[float] | None:
    bare = line.strip(" ,;\t")
    # a comma may also be a decimal sign: it separates only with a blank behind it or in long rows without blanks
    mark = "," if bare.count(",") > 2 and not re.search(r"[\s;]", bare) else r"[\s;]+|,\s+"
    cells = [_BLANKS.number(cell) for cell in re.split(mark, bare)] if bare else []
    values = [cell for cell in cells if cell is not None]
    return values if values and len(values) == len(cells) else None


def _split(lines: list[str]) -> tuple[int, float, float | None, float] | None:
    """First line of counts, start, stop and step; None when the text is something else."""
    numeric = [_numbers(line) if not is_comment(line) else None for line in lines]
    first = next(
        (i for i in range(len(lines)) if i + 4 < len(lines) and all(numeric[k] is not None for k in range(i, i + 4))), None
    )
    if first is None or first > _HEADER_LINES:
        return None
    for begin in range(first, min(first + 4, len(lines) - 3)):
        said = _said(lines[:begin])
        width = len(numeric[begin + 1] or [])
        if said is None or width in (0, 2, 3) or len(numeric[begin] or []) != width:
            continue
        low, high, step = said
        rising = [row[0] for row in numeric[begin : begin + 4] if row]
        if width > 3 and np.allclose(np.diff(rising), step, rtol=0.05):
            return None  # a wide table whose first column is the angle
        return begin, low, high, step
    return None


def _said(header: list[str]) -> tuple[float, float | None, float] | None:
    """Start, stop and step out of named items, or of one line of three numbers in any of the usual orders."""
    found: dict[str, float] = {}
    text = re.split(r"\n|[,;](?=\s*[A-Za-z])", re.sub(r"(?i)\b2[\s\-]?theta", "theta", "\n".join(header)))
    for key, value in header_items(text).items():
        word = re.sub(r"[\s_.\-()\[\]°]|deg(?:rees?)?", "", key.lower()).replace("twotheta", "2theta")
        number = re.match(r"[+-]?\d+(?:[.,]\d+)?", value)
        for kind, pattern in _NAMES.items():
            if number and (re.match(pattern, word) or re.match(pattern, word.replace("2theta", ""))):
                found.setdefault(kind, float(number[0].replace(",", ".")))
    if "low" in found and "step" in found and _sensible(found["low"], found.get("high"), found["step"]):
        return found["low"], found.get("high"), found["step"]
    for line in reversed(header):
        numbers = _numbers(line) or []
        if len(numbers) >= 3:
            a, b, c = numbers[:3]
            for low, high, step in ((a, c, b), (a, b, c)):
                if _sensible(low, high, step):
                    return low, high, step
    return None


def _sensible(low: float, high: float | None, step: float) -> bool:
    if not (0.0005 <= step <= 1.0 and -5 <= low < 175):
        return False
    return high is None or (low < high <= 180 and (high - low) / step >= MINIMUM_POINTS - 1)


def read(data: bytes, path: Path, column: str | None = None) -> RawScan:
    """Read the counts and build their angles.

    Parameters
    ----------
    data : bytes
        Content of the file.
    path : Path
        For messages.
    column : str or None
        Not used: there is one list of counts.

    Raises
    ------
    ScanError
        If a line is no list of counts, or their number does not fit the range.
    """
    lines = text_lines(data)
    found = _split(lines)
    if found is None:
        raise ScanError(f"{path}: the range of angles in the header cannot be read", fix=_FIX)
    first, low, high, step = found
    values: list[float] = []
    places: list[int] = []
    for number in range(first, len(lines)):
        line = lines[number]
        if not line.strip() or is_comment(line):
            continue
        row = _numbers(line)
        if row is None:
            raise ScanError(f"{path}, line {number + 1}: not a list of counts", why=f"it reads {line.strip()[:60]!r}", fix=_FIX)
        values += row
        places += [number + 1] * len(row)
    notes = ["angles were built from the start and the step in the header"]
    if high is not None:
        wanted = round((high - low) / step) + 1
        if len(values) - wanted not in (-1, 0):
            raise ScanError(
                f"{path}: {low:g} to {high:g} in steps of {step:g} are {wanted} points but {len(values)} counts follow",
                fix=_FIX,
            )
    items = header_items(lines[:first])
    radiation, conflict = header_radiation(items, lines[:first])
    return RawScan(
        np.asarray(low + step * np.arange(len(values)), dtype=np.float64), np.array(values), None, "unknown",
        counting_seconds(items), radiation, conflict, np.array(places, dtype=np.int64), items, tuple(notes), "two_theta",
    )  # fmt: skip
