"""How a text table separates its cells and writes its decimals."""

from __future__ import annotations

import csv
import re
from collections import Counter
from dataclasses import dataclass

__all__ = ["COMMENT_MARKS", "Dialect", "is_comment", "split_names", "table_dialect"]

COMMENT_MARKS = ("#", "!", ";", "'", "*", "//", "%")
_FLAGS = re.IGNORECASE | re.ASCII
_POINT = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:e[+-]?\d{1,4})?|[+-]?(?:nan|inf|infinity)", _FLAGS)
_COMMA = re.compile(r"[+-]?\d+(?:,\d+)?(?:e[+-]?\d{1,4})?|[+-]?(?:nan|inf|infinity)", _FLAGS)
_NUMBER = r"[+-]?(?:\d+\.\d*|\.\d+|\d+)(?:[eE][+-]?\d{1,4})?"
_PLAIN = {
    (mark, decimal, count): re.compile(
        (rf"[ \t]*{mark}[ \t]*" if mark else r"[ \t]+").join([_NUMBER.replace(r"\.", decimal)] * count), re.ASCII
    )
    for mark, decimal in ((None, r"\."), ("\t", r"\."), (";", r"\."), (",", r"\."), ("\t", ","), (";", ","))
    for count in (2, 3)
}
_SAMPLE = 160  # lines looked at to tell the dialect


@dataclass(frozen=True)
class Dialect:
    """One way of writing a table; `separator` is None for any blanks."""

    separator: str | None
    decimal: str

    def cells(self, line: str) -> list[str]:
        """The cells of a line, without quotes, surrounding blanks and empty cells at the end."""
        if self.separator is None:
            return line.replace('"', " ").split()
        if '"' in line:
            try:
                cells = next(csv.reader([line], delimiter=self.separator, skipinitialspace=True), [])
            except csv.Error:
                cells = line.replace('"', "").split(self.separator)
        else:
            cells = line.split(self.separator)
        cells = [cell.strip() for cell in cells]
        while cells and not cells[-1]:
            cells.pop()
        return cells

    def number(self, cell: str) -> float | None:
        """The cell as a number, None for text."""
        if self.decimal == ".":
            return float(cell) if _POINT.fullmatch(cell) else None
        return float(cell.replace(",", ".")) if _COMMA.fullmatch(cell) else None

    def numbers(self, line: str) -> list[float | None]:
        """All cells of a line as numbers."""
        return [self.number(cell) for cell in self.cells(line)]


# in the order of preference when several read a table equally well
_DIALECTS = (
    Dialect("\t", "."), Dialect(None, "."), Dialect(";", "."), Dialect(",", "."),
    Dialect(";", ","), Dialect("\t", ","), Dialect(None, ","), Dialect(",", ","),
)  # fmt: skip


def is_comment(line: str) -> bool:
    """Whether a line is marked as a comment."""
    return line.lstrip().startswith(COMMENT_MARKS)


def table_dialect(lines: list[str]) -> tuple[Dialect, tuple[bool, ...]] | None:
    """Find the dialect in which most lines read as equal rows with at least two numbers.

    Parameters
    ----------
    lines : list of str
        All lines of the file.

    Returns
    -------
    tuple of Dialect and tuple of bool, or None
        The dialect and which cells of its rows are numbers; None when no line holds two numbers.
    """
    stride = max(1, len(lines) // _SAMPLE)
    sample = [line for line in lines[::stride] if line.strip() and not is_comment(line)]
    if len(sample) < _SAMPLE // 4:
        sample = [line for line in lines if line.strip() and not is_comment(line)]
    clean = _clean_dialect(sample)
    if clean is not None:
        return clean
    best: tuple[tuple[int, int], Dialect, tuple[bool, ...]] | None = None
    for dialect in _DIALECTS:
        separator = dialect.separator
        if separator and not any(separator in line for line in sample):
            continue
        masks = Counter(tuple(number is not None for number in dialect.numbers(line)) for line in sample)
        for mask, count in masks.items():
            if sum(mask) < 2:
                continue
            score = (count, sum(mask) - len(mask))
            if best is None or score > best[0]:
                best = (score, dialect, mask)
    return None if best is None else (best[1], best[2])


def _clean_dialect(sample: list[str]) -> tuple[Dialect, tuple[bool, ...]] | None:
    """The answer at once for plain tables, in which nearly every line is two or three numbers in one obvious dialect."""
    middle = sample[len(sample) // 2] if sample else ""
    if '"' in middle:
        return None
    separator = next((mark for mark in ("\t", ";", ",") if mark in middle.strip()), None)
    dialect = Dialect(separator, "," if separator in ("\t", ";") and "," in middle else ".")
    shape = tuple(number is not None for number in dialect.numbers(middle))
    if len(shape) not in (2, 3) or not all(shape):
        return None
    pattern = _PLAIN[separator, "," if dialect.decimal == "," else r"\.", len(shape)]
    good = sum(pattern.fullmatch(line.strip()) is not None for line in sample)
    return (dialect, shape) if good > 0.9 * len(sample) else None


def split_names(line: str, count: int) -> list[str] | None:
    """Split a line of column names into `count` cells, with whichever separator gives that number.

    A header often separates its names in another way than the table its numbers, and writes blanks inside names
    and units: ``# 2 Theta (deg)   Intensity (counts)``.
    """
    bare = line.strip().lstrip("#!;'*/% \t")
    for separator in ("\t", ";", ","):
        cells = Dialect(separator, ".").cells(bare)
        if len(cells) == count:
            return cells
    glued = re.sub(r"\s*([\(\[])\s*([^\)\]]*?)\s*([\)\]])", lambda m: m[1] + m[2].replace(" ", "") + m[3], bare)
    glued = re.sub(r"(?i)\b(2|two)[\s\-]+(theta|th|θ)", r"2\2", glued)
    cells = glued.replace('"', " ").replace(",", " ").replace(";", " ").split()
    return cells if len(cells) == count else None
