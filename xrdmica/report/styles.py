"""How phases, scans and tubes are named and drawn, the same in figures and on pages."""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Any

from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.results import Curve, SampleResult, ScanSummary

if TYPE_CHECKING:
    from xrdmica.crystals.library import Phase

__all__ = [
    "GROUP_COLOURS", "LINES", "OTHER_COLOUR", "PhaseStyle", "angle_label", "fonts", "one_line", "phase_styles", "scan_words",
    "tube_of", "tube_words",
]  # fmt: skip

# One colour per group of minerals, members of a group differ by the line; neighbours in hue differ in lightness so that
# the order survives grey printing and the common kinds of colour blindness.
GROUP_COLOURS = {
    "true mica": "#1d4f91",
    "brittle mica": "#6f9fd8",
    "talc group": "#a88a00",
    "kaolin": "#8f2d1b",
    "serpentine": "#6b7a2f",
    "chlorite": "#12827c",
    "vermiculite": "#5b3a86",
    "smectite": "#e07b1a",
    "interstratified": "#b04a8f",
    "palygorskite-sepiolite": "#7a5230",
    "companion": "#6a6f76",
}
OTHER_COLOUR = "#3c3c3c"
LINES: tuple[Any, ...] = ("-", (0, (5, 1.6)), (0, (1.2, 1.2)), (0, (6, 1.5, 1.2, 1.5)), (0, (3, 1, 1, 1, 1, 1)))
_FREE_FONTS = ("DejaVu Sans", "Noto Sans CJK SC", "Noto Sans CJK JP", "Noto Sans SC", "WenQuanYi Micro Hei",
               "Noto Sans Arabic", "Noto Sans Devanagari", "Noto Sans Hebrew", "Noto Sans Thai")  # fmt: skip


@dataclass(frozen=True)
class PhaseStyle:
    """How one phase is drawn throughout a figure."""

    phase: str
    name: str
    symbol: str
    colour: str
    line: Any
    legend: str


def one_line(text: str, longest: int = 80) -> str:
    """Text fit for one line of a figure."""
    flat = " ".join("".join(" " if unicodedata.category(c)[0] == "C" else c for c in text).split())
    return flat if len(flat) <= longest else flat[: longest - 1] + "…"


@lru_cache(maxsize=1)
def fonts() -> tuple[str, ...]:
    """Installed free fonts, so that names in many scripts show; each letter comes from the first font that has it."""
    from matplotlib.font_manager import fontManager

    there = {font.name for font in fontManager.ttflist}
    return tuple(name for name in _FREE_FONTS if name in there) or ("sans-serif",)


def _symbol(phase: str, name: str) -> str:
    """The mineral symbol of the library; the first letters of the name for phases that have none."""
    from xrdmica.crystals.library import load_phase

    try:
        record: Phase | None = load_phase(phase)
    except XrdmicaError:
        record = None  # a phase of an older library, or of a file of one's own
    if record is not None and record.symbol:
        return record.symbol
    if record is not None and record.stack is not None:
        return f"{_symbol(record.stack.first, record.stack.first)}-{_symbol(record.stack.second, record.stack.second)}"
    words = re.split(r"[\s_\-/]+", one_line(name, 40))
    return "-".join(word[:3].capitalize() for word in words[:2] if word) or phase[:6]


def phase_styles(result: SampleResult) -> dict[str, PhaseStyle]:
    """Colour, line and legend of every phase that the curves show, the heaviest first.

    Parameters
    ----------
    result : SampleResult
        Finished sample.

    Returns
    -------
    dict
        Phase id -> style.
    """
    shown = {phase for curve in result.curves for phase in (*curve.contributions, *(m.phase for m in curve.marks))}
    weights = {p.phase: p for p in result.proportions.phases}
    findings = {f.phase: f for f in result.findings.phases}
    used: dict[str, list[Any]] = {}
    out: dict[str, PhaseStyle] = {}
    heaviest = sorted(sorted(shown), key=lambda p: -(weights[p].weight_percent or 0.0) if p in weights else 0.0)
    # neighbours differ by colour and by line, so that neither is needed to tell them apart; so do members of a group
    for number, phase in enumerate(heaviest):
        record = weights.get(phase) or findings.get(phase)
        name, group = (record.name, record.group) if record else (phase, "")
        turned = [LINES[(number + k) % len(LINES)] for k in range(len(LINES))]
        taken = used.setdefault(group, [])
        line = next((choice for choice in turned if choice not in taken), turned[0])
        taken.append(line)
        symbol = _symbol(phase, name)
        if symbol in {style.symbol for style in out.values()}:
            symbol = one_line(name, 9)
        legend = f"{one_line(name, 28)} ({symbol})"
        weight = weights.get(phase)
        if weight is not None and weight.weight_percent is not None:
            legend += f"  {weight.weight_percent:.1f} %"
            if weight.low95 is not None and weight.high95 is not None:
                legend += f" [{weight.low95:.1f}–{weight.high95:.1f}]"
        if record is not None and record.status in ("possible", "trace"):
            legend += f", {record.status}"
        out[phase] = PhaseStyle(phase, name, symbol, GROUP_COLOURS.get(group, OTHER_COLOUR), line, legend)
    return out


def tube_of(scan: ScanSummary | None) -> Radiation | None:
    """The tube of a scan; None when it is not known."""
    try:
        return Radiation.parse(scan.radiation) if scan is not None else None
    except XrdmicaError:
        return None


def angle_label(tube: Radiation | None) -> str:
    """Title of an angle axis."""
    return "2θ (degree)" if tube is None else f"2θ (degree), {tube_words(tube)}"


def tube_words(tube: Radiation) -> str:
    """The tube as it is written on an axis."""
    metal = re.fullmatch(r"([A-Z][a-z])(Ka1)?", tube.name)
    return f"{tube.wavelength:.4f} Å" if metal is None else f"{metal.group(1)} Kα{'₁' if metal.group(2) else ''}"


def scan_words(curve: Curve, scan: ScanSummary | None) -> str:
    """A scan in words for people: treatment, mount and tube, and whether the tube was assumed."""
    from xrdmica.scans.treatment import Treatment

    words = curve.scan
    if scan is None:
        return one_line(words)
    try:
        words = Treatment.parse(scan.treatment).label
    except XrdmicaError:
        words = scan.treatment
    number = re.search(r"#\d+$", curve.scan)
    words += f" {number.group()}" if number else ""
    tube = tube_of(scan)
    if scan.mount == "oriented":
        words += "  ·  oriented mount"
    else:
        words = "random powder" if scan.treatment == "none" else f"{words}  ·  random powder"
    words += f"  ·  {tube_words(tube)}" if tube else ""
    words += " (assumed)" if scan.radiation_origin == "assumed" else ""
    return one_line(words)
