"""Tables of oxide analyses: one analysis per row or per column, as spreadsheets write them."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from xrdmica.chemistry.analysis import OxideAnalysis
from xrdmica.chemistry.ions import ion_name, mass_of
from xrdmica.chemistry.oxides import OXIDE_OF
from xrdmica.errors import ChemistryError

__all__ = ["Quantity", "TableError", "read_oxide_table", "read_quantity"]

_LARGEST = 20_000_000  # bytes
_SUBSCRIPT = str.maketrans("₀₁₂₃₄₅₆₇₈₉₊₋", "0123456789+-")
_OXIDES = {name.lower(): name for name, _, _ in OXIDE_OF.values()}
_OTHERS = {
    "f": "F", "cl": "Cl", "s": "S", "h2o": "H2O", "h2o+": "H2O+", "h2o-": "H2O-", "loi": "LOI", "p2o5": "P2O5", "so3": "SO3",
    "co2": "CO2",
}  # fmt: skip
_TOTAL_IRON = {
    f"{oxide}{mark}": name
    for oxide, name in (("feo", "FeOt"), ("fe2o3", "Fe2O3t"))
    for mark in ("t", "*", "tot", "total", "(t)", "(tot)", "(total)", "_t", "_tot", "_total", " total", " tot", " t")
}
# columns that a table may have without being oxides
_IGNORED = re.compile(
    r"(sum|total|totals|o\s*=\s*f2?|o\s*=\s*cl2?|o\s*=\s*f,?\s*cl|-o=f.*|less o.*|n|no\.?|number|points?|notes?|comment|"
    r"remarks?|ref|reference|depth.*|date|mineral|phase|locality|location)"
)
_NAME = re.compile(r"(sample|samples|name|id|analysis|label|spot|point|oxide|oxides|component|wt\.?\s*%?|weight\s*%|)")
_SIGMA = re.compile(
    r"(?:^|[\s_(])(?:(2)\s*)?(?:1\s*)?(sigma|σ|s\.?d\.?|std\.?|stdev|error|err|uncertainty|esd|1s|2s)\)?$|^(?:±|\+/-)\s*|\s*(?:±|\+/-)$"
)
# the same in front: "sigma SiO2", "2 sigma SiO2"
_SIGMA_FIRST = re.compile(
    r"((?:[12]\s*)?(?:sigma|σ|s\.?d\.?|std\.?|stdev|error|err|uncertainty|esd)|1s|2s)[\s_]+(?:of\s+)?(\S.*)", re.IGNORECASE
)
_UNIT = re.compile(r"[\s_(\[,]*(wt\.?\s*%|wt\.?|weight\s*%|mass\s*%|%|ppm|mg/kg|µg/g|ug/g)\s*[)\]]?\s*$")
_PPM = ("ppm", "mg/kg", "µg/g", "ug/g")
_ABSENT = {
    "", "-", "--", "—", "–", "nd", "n.d.", "n.d", "bdl", "b.d.l.", "b.d.", "bd", "na", "n.a.", "n/a", "nan", "none", "tr", "tr.",
    "<dl",
}  # fmt: skip
_OXIDE_LIKE = re.compile(r"\(?[A-Z][a-z]?[A-Z]?\d?\)?\d?O\d?|[A-Z][a-z]?\d?O\d?")


class TableError(ChemistryError):
    """A row or column of a table that cannot be used, while the others can."""


@dataclass(frozen=True)
class Quantity:
    """What a heading stands for: an oxide (or F, Cl, water) and how its numbers turn into weight percent."""

    name: str
    factor: float = 1.0
    sigma: bool = False
    divisor: float = 1.0


def _sigma_last(text: str) -> str:
    """``sigma SiO2`` as ``SiO2 sigma``."""
    found = _SIGMA_FIRST.fullmatch(text.strip())
    return f"{found.group(2)} {found.group(1)}" if found else text


def _element_factor(symbol: str) -> tuple[str, float] | None:
    """Weight of the usual oxide per weight of the element, for trace elements in ppm."""
    try:
        ion = ion_name(symbol)
    except ChemistryError:
        return None
    if ion not in OXIDE_OF:
        return None
    name, cations, oxygens = OXIDE_OF[ion]
    weight = mass_of(ion)
    return name, (weight + mass_of("O2-") * oxygens / cations) / weight


def read_quantity(heading: str) -> Quantity | None:
    """What a heading means, or None when it names no oxide: ``SiO2``, ``Al2O3 (wt%)``, ``Rb2O ppm``, ``FeO*``, ``SiO2 1s``."""
    text = _sigma_last(heading.strip().translate(_SUBSCRIPT).strip("\"'"))
    sigma, divisor = False, 1.0
    unit = ""
    for _ in range(2):
        found = _SIGMA.search(text.lower())
        if found and found.group(0):
            sigma = True
            divisor = 2.0 if found.group(1) == "2" or found.group(2) == "2s" else divisor
            text = (text[: found.start()] + text[found.end() :]).strip(" _(")
        marked = _UNIT.search(text.lower())
        if marked:
            unit = marked.group(1)
            text = text[: marked.start()].strip()
    low = text.lower()
    factor = 1e-4 if unit in _PPM else 1.0
    if low in _TOTAL_IRON or low.replace(" ", "") in _TOTAL_IRON:
        return Quantity(_TOTAL_IRON.get(low) or _TOTAL_IRON[low.replace(" ", "")], factor, sigma, divisor)
    if low in _OXIDES or low in _OTHERS:
        # Co, CO and the like: an oxide has a capital O, carbon monoxide is no column
        if low == "coo" and text not in ("CoO", "COO", "coo"):
            return None
        return Quantity(_OXIDES.get(low) or _OTHERS[low], factor, sigma, divisor)
    if unit in _PPM:
        element = _element_factor(text)
        if element is not None:
            return Quantity(element[0], 1e-4 * element[1], sigma, divisor)
    return None


def _text_of(path: Path) -> str:
    try:
        if path.is_dir():
            raise ChemistryError(f"{path}: this is a folder", fix="give a table of analyses")
        if path.stat().st_size > _LARGEST:
            raise ChemistryError(f"{path}: larger than 20 MB", fix="give a table of analyses as CSV")
        data = path.read_bytes()
    except OSError as error:
        raise ChemistryError(f"{path}: cannot be read", why=error.strerror or str(error), fix="check the path") from None
    if b"\0" in data[:4096] and not data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise ChemistryError(f"{path}: this is no text", fix="save the table as CSV")
    for encoding in ("utf-16",) if data.startswith((b"\xff\xfe", b"\xfe\xff")) else ("utf-8-sig", "cp1252"):
        try:
            return data.decode(encoding)
        except UnicodeDecodeError:
            continue
    return data.decode("latin-1")


def _rows(text: str) -> tuple[list[tuple[int, list[str]]], bool]:
    """Numbered rows of cells, and whether a comma is the decimal sign."""
    lines = [(i, line) for i, line in enumerate(text.splitlines(), 1) if line.strip() and not line.lstrip().startswith("#")]
    if not lines:
        return [], False
    delimiter = max(("\t", ";", ","), key=lambda d: (lines[0][1].count(d) > 0, d != ",", lines[0][1].count(d)))
    if lines[0][1].count(delimiter) == 0:
        delimiter = ","
    out = []
    for number, line in lines:
        cells = next(csv.reader(io.StringIO(line), delimiter=delimiter, skipinitialspace=True), [])
        out.append((number, [cell.strip() for cell in cells]))
    return out, delimiter != ","


def _value(cell: str, comma: bool, where: str) -> tuple[float | None, str]:
    """The number in a cell with a remark; None when nothing was found there."""
    text = cell.strip().lower().replace("\u2212", "-").replace(" ", "").removesuffix("%")
    if text in _ABSENT:
        return None, ""
    if text.startswith("<"):
        return None, f"{cell} counted as not there"
    if comma:
        text = text.replace(",", ".")
    try:
        return float(text), ""
    except ValueError:
        raise TableError(f"{where}: {cell!r} is no number", fix="write a number, or leave the cell empty") from None


def read_oxide_table(path: str | Path) -> tuple[list[OxideAnalysis], list[TableError]]:
    """Read a table of analyses.

    The first row names oxides (one analysis per row) or the first column does (one per column). Errors of one sigma stand in
    columns ``SiO2 sigma`` (or rows, for analyses in columns). Comma, semicolon and tab are understood, and the decimal comma
    with the latter two; ``<0.01``, ``bdl``, ``-`` and empty mean not there; lines that start with ``#`` are passed over.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    analyses : list of OxideAnalysis
        In the order of the table.
    problems : list of TableError
        One per analysis that cannot be read.

    Raises
    ------
    ChemistryError
        If the file cannot be read, holds no oxides, or a column of numbers has no known name.
    """
    path = Path(path)
    rows, comma = _rows(_text_of(path))
    if len(rows) < 2:
        raise ChemistryError(f"{path}: no table of analyses", fix="give a row of oxide names and a row per analysis")
    across = sum(read_quantity(cell) is not None for cell in rows[0][1])
    down = sum(bool(cells) and read_quantity(cells[0]) is not None for _, cells in rows)
    if max(across, down) < 2:
        raise ChemistryError(f"{path}: no oxides are named", fix="head the columns SiO2, Al2O3, FeO, MgO, K2O ...")
    if across >= down:
        return _by_rows(path, rows, comma)
    width = max(len(cells) for _, cells in rows)
    turned = [[cells[i] if i < len(cells) else "" for _, cells in rows] for i in range(width)]
    if read_quantity(turned[0][0]) is not None:
        turned = [["name", *turned[0]]] + [[str(i), *column] for i, column in enumerate(turned[1:], 1)]
    return _by_rows(path, list(enumerate(turned, 1)), comma, "column")


def _refuse_unknown(path: Path, heading: str, column: int, rows: Sequence[tuple[int, list[str]]], comma: bool) -> None:
    """A column of numbers with an unknown name is refused: nothing is dropped on the sly."""
    if _IGNORED.fullmatch(heading.strip().lower()) or _NAME.fullmatch(heading.strip().lower()):
        return
    cells = [cells[column] for _, cells in rows if column < len(cells)]
    numeric = 0
    for cell in cells:
        try:
            numeric += _value(cell, comma, "")[0] is not None
        except TableError:
            return
    if _OXIDE_LIKE.fullmatch(heading.strip()) or numeric:
        from difflib import get_close_matches

        close = get_close_matches(heading.lower(), [*_OXIDES, *_OTHERS], n=1)
        known = _OXIDES.get(close[0]) or _OTHERS[close[0]] if close else ""
        hint = f"did you mean {known}?" if known else "write oxides such as SiO2, or take the column out"
        raise ChemistryError(f"{path}: {heading!r} is no oxide known here", fix=hint)


def _by_rows(
    path: Path, rows: list[tuple[int, list[str]]], comma: bool, word: str = "line"
) -> tuple[list[OxideAnalysis], list[TableError]]:
    header, body = rows[0][1], rows[1:]
    columns: list[tuple[int, Quantity]] = []
    name_at: int | None = None
    previous: Quantity | None = None
    for i, heading in enumerate(header):
        quantity = read_quantity(heading)
        if quantity is None and previous is not None and _SIGMA.fullmatch(f" {heading.strip().lower()}"):
            # a bare "sigma" belongs to the oxide in front of it
            quantity = Quantity(previous.name, previous.factor, True)
        if quantity is not None:
            if any(quantity.name == q.name and quantity.sigma == q.sigma for _, q in columns):
                raise ChemistryError(f"{path}: {quantity.name} is given twice", fix="leave one of the columns")
            columns.append((i, quantity))
            previous = quantity
        elif name_at is None and _NAME.fullmatch(heading.strip().lower()):
            name_at = i
        else:
            _refuse_unknown(path, heading, i, body, comma)
    analyses: list[OxideAnalysis] = []
    problems: list[TableError] = []
    for number, cells in body:
        if not any(cells):
            continue
        name = cells[name_at] if name_at is not None and name_at < len(cells) and cells[name_at] else f"{word} {number}"
        try:
            analyses.append(_analysis(path, f"{word} {number}", name, cells, columns, comma))
        except TableError as error:
            problems.append(error)
    if word == "column":
        analyses = _with_sigma_columns(analyses)
    return analyses, problems


def _analysis(
    path: Path, place: str, name: str, cells: Sequence[str], columns: Sequence[tuple[int, Quantity]], comma: bool
) -> OxideAnalysis:
    percent: dict[str, float] = {}
    sigma: dict[str, float] = {}
    notes: list[str] = []
    for i, quantity in columns:
        where = f"{path}, {place}, {quantity.name}"
        value, remark = _value(cells[i] if i < len(cells) else "", comma, where)
        if remark:
            notes.append(f"{quantity.name}: {remark}")
        if value is None:
            continue
        if value < 0:
            raise TableError(f"{where} ({name}) is negative: {value:g}", fix="correct it, or leave the cell empty")
        if quantity.sigma:
            sigma[quantity.name] = value * quantity.factor / quantity.divisor
        else:
            percent[quantity.name] = value * quantity.factor
    return OxideAnalysis(name, percent, sigma, tuple(notes))


def _with_sigma_columns(analyses: Sequence[OxideAnalysis]) -> list[OxideAnalysis]:
    """Where analyses stand in columns, a column headed ``A1 sigma`` or ``sigma`` holds the errors of the one before it."""
    out: list[OxideAnalysis] = []
    for analysis in analyses:
        named = _sigma_last(analysis.name)
        found = _SIGMA.search(f" {named.lower()}")
        stem = named[: max(found.start() - 1, 0)].strip(" _(") if found else ""
        if found and out and stem in ("", out[-1].name):
            half = 2.0 if found.group(1) == "2" or found.group(2) == "2s" else 1.0
            last = out[-1]
            out[-1] = OxideAnalysis(last.name, last.percent, {k: v / half for k, v in analysis.percent.items()}, last.notes)
        else:
            out.append(analysis)
    return out
