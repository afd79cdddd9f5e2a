"""Text tables: two or three columns in any dialect, and wide tables whose header names the columns."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import ScanError
from xrdmica.scans.read.columns import ColumnNames, name_columns
from xrdmica.scans.read.decode import looks_like_text, text_lines
from xrdmica.scans.read.dialect import Dialect, is_comment, split_names, table_dialect
from xrdmica.scans.read.header import counting_seconds, header_items, header_radiation, radiation_from_wavelength
from xrdmica.scans.read.raw import Axis, IntensityUnit, NotAScanError, RawScan

__all__ = ["RANK", "matches", "read"]

RANK = 100  # the last reader to be asked: nearly everything is text
_EXPORT = "export the scan as two columns, two-theta in degrees and counts"
_NAME_LINES = 8  # how far above the numbers the names of the columns may stand
_LEADING = 5  # header lines that may look like rows of numbers
_BAD_SHARE = 0.1
_PLAIN = b"0123456789.,;eE+- \t\n"


def matches(head: bytes, path: Path) -> bool:
    """Whether the file begins with text."""
    return looks_like_text(head)


def read(data: bytes, path: Path, column: str | None = None) -> RawScan:
    """Read a text table.

    Parameters
    ----------
    data : bytes
        Content of the file.
    path : Path
        For messages.
    column : str or None
        Name or number (from 1) of the column of intensities, for files with several.

    Returns
    -------
    RawScan
        Columns and header.

    Raises
    ------
    ScanError
        If the text holds no scan; the sentence names file and line.
    """
    lines = text_lines(data)
    found = table_dialect(lines)
    if found is None:
        raise _no_table(lines, path)
    dialect, mask = found
    first = _first_row(lines, dialect, mask)
    names, unknown = _names_above(lines[:first], len(mask))
    if column is not None:
        names = _with_column(names, unknown, mask, column, f"{path}, line {first + 1}")
    angle, intensity, sigma, axis, notes = _choose(names, unknown, mask, path, first)
    wanted = [angle, intensity, *([sigma] if sigma is not None else []), *(_extra(names) if axis == "two_theta" else [])]
    plain = _plain_rows(lines, first, dialect, wanted, len(mask))
    rows, places, skipped = plain or _rows(lines, first, dialect, wanted, None if names else len(mask))
    notes += _note_skipped(skipped, places, lines, path)
    table, lead = _without_numeric_header(np.array(rows, dtype=float).reshape(-1, len(wanted)))
    if lead:
        notes.append(f"the first {lead} row(s) of numbers (from line {places[0]}) were taken as header and left out")
    at = np.array(places[lead:], dtype=np.int64)
    head = lines[:first] + ([] if plain else [line for line in lines[first:] if is_comment(line)])
    items = header_items(head)
    radiation, conflict = header_radiation(items, items_text(head))
    unit = _unit(names, items)
    sigmas = table[:, 2] if sigma is not None else None
    if sigmas is not None and names is None and not _like_errors(table[:, 1], sigmas):
        notes.append("the third column has no name and does not look like standard errors, so it was not used")
        sigmas = None
    if radiation is None and conflict is None and axis == "two_theta" and _extra(names):
        wavelength = _wavelength_of_columns(table[:, 0], table[:, -1])
        if wavelength is not None:
            radiation = radiation_from_wavelength(wavelength)
            notes.append(f"wavelength {wavelength:.4f} angstrom follows from the columns of two-theta and d")
    scale = 0.1 if names is not None and names.per_nanometre else 1.0
    return RawScan(
        table[:, 0], table[:, 1], sigmas, unit, counting_seconds(items), radiation, conflict, at, items, tuple(notes),
        axis, scale, names.names[angle] if names is not None else "", first + 1,
    )  # fmt: skip


def items_text(lines: list[str]) -> list[str]:
    """Header lines that can mention the tube in free text: all but lines of column names."""
    return [line for line in lines if "theta" not in line.lower()]


def _no_table(lines: list[str], path: Path) -> ScanError:
    filled = [(number, line.strip()) for number, line in enumerate(lines, 1) if line.strip()]
    dialect = Dialect(None, ".")
    single = sum(len(dialect.cells(line)) == 1 and dialect.number(line) is not None for _, line in filled)
    if single > 0.5 * len(filled):
        where = next(number for number, line in filled if dialect.number(line) is not None)
        return ScanError(f"{path}, line {where}: only one column of numbers, the angles are missing", fix=_EXPORT)
    number, line = filled[0] if filled else (1, "")
    return NotAScanError(
        f"{path}: not a scan, no line holds an angle and counts", why=f"line {number} reads {line[:60]!r}", fix=_EXPORT
    )


def _first_row(lines: list[str], dialect: Dialect, mask: tuple[bool, ...]) -> int:
    for index, line in enumerate(lines):
        if line.strip() and not is_comment(line) and tuple(v is not None for v in dialect.numbers(line)) == mask:
            return index
    return 0


def _names_above(header: list[str], count: int) -> tuple[ColumnNames | None, list[str] | None]:
    """The nearest line above the numbers that names the columns; else names that say nothing."""
    unknown: list[str] | None = None
    near = [line for line in header if line.strip()][-_NAME_LINES:]
    for line in reversed(near):
        cells = split_names(line, count)
        if cells is None or any(Dialect(None, ".").number(cell) is not None for cell in cells):
            continue
        names = name_columns(cells)
        if names.recognised:
            return names, None
        unknown = unknown or cells
    return None, unknown


def _choose(
    names: ColumnNames | None, unknown: list[str] | None, mask: tuple[bool, ...], path: Path, first: int
) -> tuple[int, int, int | None, Axis | None, list[str]]:
    """Which columns are angle, intensity and standard error, what the first is, and notes on what had to be supposed."""
    where = f"{path}, line {first + 1}"
    if names is None:
        listed = f"are {', '.join(unknown)[:120]}" if unknown else "have no names"
        if not all(mask) or len(mask) > 3:
            raise NotAScanError(
                f"{where}: the file has {len(mask)} columns that {listed}, and none is called two-theta",
                fix="name the columns in the line above the numbers (two-theta, counts) or export two columns",
            )
        notes = [f"columns called {' and '.join(unknown[:2])} were taken as two-theta and counts"] if unknown else []
        return 0, 1, 2 if len(mask) == 3 else None, None, notes
    angle, intensity = names.angle, names.intensity
    axis: Axis | None = ("radians" if names.radians else "two_theta") if angle >= 0 else None
    others: tuple[tuple[int, Axis], ...] = ((names.spacing, "d"), (names.transfer, "q"), (names.theta, "theta"))
    if angle < 0:
        angle, axis = next(((index, kind) for index, kind in others if index >= 0), (-1, None))
    if len(names.names) == 2:
        angle = 1 - intensity if angle < 0 else angle
        intensity = 1 - angle if intensity < 0 else intensity
    if angle >= 0 and intensity < 0 and len(names.names) > 3 and names.sigma < 0:
        listed = ", ".join(name for index, name in enumerate(names.names) if index != angle)
        raise ScanError(
            f"{where}: the file seems to hold {len(names.names) - 1} scans side by side ({listed[:120]})",
            fix="say which with the option --column NAME",
        )
    if angle < 0 or intensity < 0:
        missing = "two-theta" if angle < 0 else "counts or intensity"
        raise NotAScanError(
            f"{where}: none of the columns {', '.join(names.names)[:120]} is {missing}",
            fix=f"name the column of {missing} in the line above the numbers",
        )
    notes = []
    if axis is None or names.intensity < 0:
        notes = [f"columns {names.names[angle]!r} and {names.names[intensity]!r} were taken as two-theta and counts"]
    return angle, intensity, names.sigma if names.sigma >= 0 else None, axis, notes


def _with_column(
    names: ColumnNames | None, unknown: list[str] | None, mask: tuple[bool, ...], column: str, where: str
) -> ColumnNames:
    """The columns with the wanted one as intensity."""
    texts = list(names.names) if names is not None else list(unknown or map(str, range(1, len(mask) + 1)))
    wanted = column.strip().lower()
    at = next((index for index, text in enumerate(texts) if text.strip().lower() == wanted), -1)
    if at < 0 and wanted.isdecimal() and 1 <= int(wanted) <= len(texts):
        at = int(wanted) - 1
    base = names or name_columns(texts)
    angle = base.angle if max(base.angle, base.spacing, base.transfer, base.theta) >= 0 else 0
    if at < 0 or at == angle or not mask[at]:
        raise ScanError(f"{where}: there is no column of counts {column!r}", fix=f"choose one of {', '.join(texts)[:200]}")
    if at == base.intensity:
        return replace(base, angle=angle)
    return replace(base, angle=angle, intensity=at, sigma=-1, unit="unknown")


def _extra(names: ColumnNames | None) -> list[int]:
    return [names.spacing] if names is not None and names.spacing >= 0 else []


def _plain_rows(
    lines: list[str], first: int, dialect: Dialect, wanted: list[int], count: int
) -> tuple[NDArray[np.float64], list[int], list[int]] | None:
    """What `_rows` gives, by the compiled reader of numpy, for tables of numbers with nothing between the rows."""
    last = len(lines)
    while last > first and not lines[last - 1].strip():
        last -= 1
    block = "\n".join(lines[first:last])
    if block.encode("utf-8", "replace").translate(None, _PLAIN) or block.startswith(";") or "\n;" in block:
        return None
    if dialect.decimal == ",":
        block = block.replace(",", ".")
    try:
        table = np.loadtxt(block.split("\n"), delimiter=dialect.separator, comments=None, ndmin=2)
    except (ValueError, UserWarning):
        return None
    if table.shape != (last - first, count):
        return None
    return table[:, wanted], list(range(first + 1, last + 1)), []


def _rows(
    lines: list[str], first: int, dialect: Dialect, wanted: list[int], count: int | None
) -> tuple[list[list[float]] | NDArray[np.float64], list[int], list[int]]:
    """Rows of the wanted columns, the line of each, and the lines that are no rows."""
    rows: list[list[float]] = []
    places: list[int] = []
    skipped: list[int] = []
    least = max(wanted)
    for number in range(first, len(lines)):
        line = lines[number]
        if not line.strip() or is_comment(line):
            continue
        cells = dialect.cells(line)
        values = [dialect.number(cells[index]) for index in wanted] if len(cells) > least else [None]
        row = [value for value in values if value is not None]
        if len(row) == len(wanted) and (count is None or len(cells) == count):
            rows.append(row)
            places.append(number + 1)
        else:
            skipped.append(number + 1)
    return rows, places, skipped


def _note_skipped(skipped: list[int], places: list[int], lines: list[str], path: Path) -> list[str]:
    if not places:
        raise NotAScanError(f"{path}: not a scan, no line holds an angle and counts", fix=_EXPORT)
    inside = [number for number in skipped if number < places[-1]]
    if len(inside) > max(3, _BAD_SHARE * len(places)):
        raise ScanError(
            f"{path}, line {inside[0]}: {len(inside)} of {len(inside) + len(places)} lines are not rows of numbers",
            why=f"it reads {lines[inside[0] - 1].strip()[:60]!r}",
            fix="export the scan again or remove these lines",
        )
    if not skipped:
        return []
    return [f"{len(skipped)} line(s) that are not rows of numbers were skipped, the first is line {skipped[0]}"]


def _without_numeric_header(table: NDArray[np.float64]) -> tuple[NDArray[np.float64], int]:
    """Leave out leading rows that are header lines of numbers, such as start, stop and step of the scan.

    A row counts as header when it is off the angle grid of all the rows below it and either says start, stop,
    step or number of points, or stands apart from a grid that is regular from there on.
    """
    for lead in range(1, min(_LEADING, len(table) - 50) + 1):
        angles = table[lead:, 0]
        steps = np.diff(angles)
        step = float(np.median(steps))
        if not (np.isfinite(step) and step > 0 and np.all(np.abs(steps - step) < 0.5 * step)):
            continue
        if 0.5 * step < angles[0] - table[lead - 1, 0] < 1.5 * step:
            return table, 0
        said = np.array([angles[0], angles[-1], step, float(len(angles)), float(len(angles) - 1)])
        told = all(np.any(np.abs(value - said) <= 0.02 * np.abs(said) + 1e-9) for value in table[:lead].ravel())
        apart = np.all(np.abs(angles[0] - table[:lead, 0]) > 1.5 * step)
        if told or apart:
            return table[lead:], lead
        return table, 0
    return table, 0


def _like_errors(counts: NDArray[np.float64], sigma: NDArray[np.float64]) -> bool:
    """Whether a third column behaves like counting errors: positive, below the counts, growing as their root."""
    if not np.all(np.isfinite(sigma)) or np.any(sigma < 0) or not np.any(sigma > 0):
        return False
    good = (counts > 0) & (sigma > 0)
    if good.sum() < 10:
        return False
    ratio = sigma[good] / np.sqrt(counts[good])
    return bool(np.median(sigma[good] / counts[good]) < 1.5 and np.percentile(ratio, 90) < 5 * np.percentile(ratio, 10))


def _unit(names: ColumnNames | None, items: dict[str, str]) -> IntensityUnit:
    if names is not None and names.unit != "unknown":
        return names.unit
    for key, value in items.items():
        if "unit" in key.lower() or "intensit" in key.lower():
            text = value.lower()
            if "cps" in text or "counts/s" in text or "counts per second" in text:
                return "counts per second"
            if "counts" in text:
                return "counts"
    return "unknown"


def _wavelength_of_columns(two_theta: NDArray[np.float64], spacing: NDArray[np.float64]) -> float | None:
    """Wavelength [angstrom] by Bragg's law from two columns, None when they do not belong together."""
    good = np.isfinite(two_theta) & np.isfinite(spacing) & (spacing > 0)
    if good.sum() < 10:
        return None
    waves = 2 * spacing[good] * np.sin(np.radians(two_theta[good]) / 2)
    middle = float(np.median(waves))
    agrees = 0.1 <= middle <= 5.0 and np.percentile(np.abs(waves - middle), 95) < 2e-3 * middle
    return round(middle, 5) if agrees else None
