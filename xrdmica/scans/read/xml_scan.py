"""XML exports, by content: a list of counts or intensities, and the angles as a list or as start and end position.

The text is parsed by expat directly, because declarations of document types and entities have to be refused before
anything is expanded.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import ScanError
from xrdmica.scans.read.columns import clean_name, name_columns
from xrdmica.scans.read.header import counting_seconds, header_radiation
from xrdmica.scans.read.raw import Axis, IntensityUnit, NotAScanError, RawScan
from xrdmica.scans.scan import MINIMUM_POINTS

__all__ = ["RANK", "matches", "read"]

RANK = 20
_ELEMENTS, _DEPTH = 200_000, 100
_FIX = "export the scan as two columns of text, two-theta and counts"
_LIST = re.compile(r"[\d\s.,;eE+\-]+")
_ONE = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,3})?)\s*")
_START = ("start", "begin", "first", "from", "min")
_END = ("end", "stop", "last", "max", "final")
_OTHER = ("omega", "phi", "chi", "psi", "theta", "th", "x", "y", "z")


@dataclass
class _Node:
    """One element; `values` is its text when that is a list of numbers."""

    tag: str
    attributes: dict[str, str]
    parent: _Node | None
    parts: list[str] = field(default_factory=list)
    children: list[_Node] = field(default_factory=list)

    @property
    def text(self) -> str:
        return "".join(self.parts).strip()

    def below(self) -> Iterator[_Node]:
        """This element and all inside, in the order of the file."""
        pending = [self]
        while pending:
            node = pending.pop()
            yield node
            pending += node.children[::-1]

    def said(self) -> set[str]:
        """Cleaned name of the element and what its attributes say."""
        return {clean_name(word) for word in (self.tag, *self.attributes.values())}


def matches(head: bytes, path: Path) -> bool:
    """Whether the file begins like XML; web pages have been refused before."""
    start = head[:256].replace(b"\x00", b"").lstrip(b"\xef\xbb\xbf\xff\xfe \t\r\n")
    return start.startswith(b"<?xml") or re.match(rb"<[A-Za-z_!]", start) is not None


def read(data: bytes, path: Path, column: str | None = None) -> RawScan:
    """Read the first scan of an XML export.

    Parameters
    ----------
    data : bytes
        Content of the file.
    path : Path
        For messages.
    column : str or None
        Not used: the names of the elements say what is what.

    Raises
    ------
    ScanError
        If the XML is damaged, declares entities, or holds no scan.
    """
    root = _parsed(data, path)
    lists = [(node, _numbers(node.text)) for node in root.below() if len(node.text) > 2 * MINIMUM_POINTS]
    long = [(node, values) for node, values in lists if values is not None and values.size >= 2]
    counts = [pair for pair in long if _is_intensity(pair[0])]
    if not counts and len(long) == 1 and not _is_angle(long[0][0]):
        counts = long
    if not counts:
        raise NotAScanError(f"{path}: this XML file holds no list of counts or intensities", fix=_FIX)
    node, values = counts[0]
    notes = []
    if len(counts) > 1:
        notes.append(f"the file holds {len(counts)} lists of intensities, the first was read")
    angles, axis, more = _angles(node, long, values.size, path)
    items = _items(root)
    radiation, conflict = header_radiation(items)
    return RawScan(
        angles, values, None, _unit(node), counting_seconds(items), radiation, conflict, None, items, (*notes, *more), axis
    )


def _parsed(data: bytes, path: Path) -> _Node:
    """The tree of elements, built without ever expanding an entity."""
    from xml.parsers import expat

    parser = expat.ParserCreate()
    parser.buffer_text = True
    root = _Node("", {}, None)
    open_nodes = [root]
    number = 0

    def refuse(*_: object) -> int:
        raise ScanError(
            f"{path}: this XML file declares a document type or entities, and these are not expanded",
            fix="remove the <!DOCTYPE ...> part or export the scan as text",
        )

    def start(tag: str, attributes: dict[str, str]) -> None:
        nonlocal number
        number += 1
        if number > _ELEMENTS or len(open_nodes) > _DEPTH:
            raise ScanError(f"{path}: this XML file has too many or too deep elements for a scan", fix=_FIX)
        node = _Node(tag.rpartition(":")[2], attributes, open_nodes[-1])
        open_nodes[-1].children.append(node)
        open_nodes.append(node)

    def end(_: str) -> None:
        open_nodes.pop()

    parser.StartElementHandler, parser.EndElementHandler = start, end
    parser.CharacterDataHandler = lambda text: open_nodes[-1].parts.append(text)
    parser.StartDoctypeDeclHandler = parser.EntityDeclHandler = refuse
    parser.ExternalEntityRefHandler = refuse
    try:
        parser.Parse(data, True)
    except expat.ExpatError as problem:
        why = expat.ErrorString(problem.code)
        raise ScanError(f"{path}, line {problem.lineno}: this XML is damaged", why=why, fix="export the file again") from None
    except (LookupError, ValueError) as problem:
        raise ScanError(f"{path}: the encoding of this XML is not known", why=str(problem)[:80], fix="save it as UTF-8") from None
    return root


def _numbers(text: str) -> NDArray[np.float64] | None:
    """A list of numbers, None for other text."""
    if not _LIST.fullmatch(text):
        return None
    cells = re.split(r"[\s,;]+", text.strip(" ,;\t\r\n"))
    try:
        return np.array(cells, dtype=float)
    except ValueError:
        return None


def _is_intensity(node: _Node) -> bool:
    return any(word.startswith(("count", "intensit", "rawcount", "cps", "yobs", "detectorcount")) for word in node.said())


def _is_angle(node: _Node) -> bool:
    family = (node, node.parent) if node.parent is not None else (node,)
    return any(name_columns([word]).angle >= 0 for part in family for word in part.said() if word and len(word) < 40)


def _unit(node: _Node) -> IntensityUnit:
    words = " ".join([node.tag, *node.attributes.values()]).lower()
    if "cps" in words or "per second" in words or "counts/s" in words:
        return "counts per second"
    return "counts" if "count" in words else "unknown"


def _angles(
    node: _Node, lists: list[tuple[_Node, NDArray[np.float64]]], count: int, path: Path
) -> tuple[NDArray[np.float64], Axis, tuple[str, ...]]:
    """Angles from the nearest element around the counts that knows them."""
    around: _Node | None = node.parent
    while around is not None:
        inside = set(map(id, around.below()))
        for other, values in lists:
            if id(other) in inside and other is not node and values.size == count and _is_angle(other):
                return values, _axis(other), ()
        ends = _ends(around)
        if ends is not None:
            low, high, axis = ends
            return np.linspace(low, high, count), axis, ("angles were built from start, end and number of points in the file",)
        around = around.parent
    raise ScanError(f"{path}: this XML file holds counts but not from where to where in two-theta", fix=_FIX)


def _axis(node: _Node) -> Axis:
    units = " ".join(node.attributes.values()).lower() + " " + " ".join((node.parent or node).attributes.values()).lower()
    return "radians" if re.search(r"\brad(ian)?s?\b", units) else "two_theta"


def _ends(around: _Node) -> tuple[float, float, Axis] | None:
    """Start and end in two-theta that stand inside an element, None when there are none or several."""
    pairs: dict[int, tuple[_Node, dict[str, float], bool]] = {}
    for node in around.below():
        holder = node.parent or node
        single = _ONE.fullmatch(node.text) if len(node.text) < 40 else None
        said = [(node.tag, float(single[1]), holder)] if single else []
        said += [(key, float(one[1]), node) for key, text in node.attributes.items() if (one := _ONE.fullmatch(text))]
        for name, value, place in said:
            word = clean_name(name)
            kind = "low" if any(w in word for w in _START) else "high" if any(w in word for w in _END) else ""
            if kind:
                angular = _is_angle(place) or re.search(r"2theta|twotheta|tth", word) is not None
                known = pairs.setdefault(id(place), (place, {}, False))
                known[1].setdefault(kind, value)
                pairs[id(place)] = (place, known[1], known[2] or angular)
    whole = [(place, ends, angular) for place, ends, angular in pairs.values() if len(ends) == 2 and ends["low"] != ends["high"]]
    named = [entry for entry in whole if entry[2]]
    if not named:
        named = [entry for entry in whole if not entry[0].said() & set(_OTHER)]
        if len(named) != 1:
            return None
    place, ends, _ = named[0]
    return ends["low"], ends["high"], _axis(place)


def _items(root: _Node) -> dict[str, str]:
    """Short texts by the name of their element, and attributes."""
    items: dict[str, str] = {}
    for node in root.below():
        if len(items) >= 200:
            break
        text = node.text
        if text and len(text) < 200 and not node.children:
            items.setdefault(node.tag, text)
        for key, value in node.attributes.items():
            if len(value) < 100 and not key.startswith("xmlns"):
                items.setdefault(f"{node.tag}.{key}", value)
    return items
