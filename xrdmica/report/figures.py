"""The figure of a sample: every scan with its calculated curve, the phases under it and the reflections named."""

from __future__ import annotations

import io
import re
import unicodedata
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.report.files import write_bytes
from xrdmica.report.labels import MarkLabel, place_labels
from xrdmica.results import Curve, SampleResult, ScanSummary

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from xrdmica.crystals.library import Phase

__all__ = ["GROUP_COLOURS", "PhaseStyle", "figure_bytes", "phase_styles", "sample_figure", "save_figure"]

Array = NDArray[np.float64]

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
_OTHER_COLOUR = "#3c3c3c"
_LINES: tuple[Any, ...] = ("-", (0, (5, 1.6)), (0, (1.2, 1.2)), (0, (6, 1.5, 1.2, 1.5)), (0, (3, 1, 1, 1, 1, 1)))
_INK, _FAINT, _CALCULATED = "#202326", "#8b9097", "#e0218a"
_SPACINGS = (
    30, 20, 15, 12, 10, 8, 7, 6, 5, 4.5, 4, 3.5, 3.2, 3, 2.8, 2.6, 2.5, 2.4, 2.3, 2.2, 2.1, 2, 1.8, 1.7, 1.6, 1.5, 1.4,
)  # fmt: skip
_FREE_FONTS = ("DejaVu Sans", "Noto Sans CJK SC", "Noto Sans CJK JP", "Noto Sans SC", "WenQuanYi Micro Hei",
               "Noto Sans Arabic", "Noto Sans Devanagari", "Noto Sans Hebrew", "Noto Sans Thai")  # fmt: skip
_WIDTH, _LEFT, _RIGHT = 11.0, 0.85, 0.2  # inches
_RESIDUAL, _GAP = 0.38, 0.14  # inches


@dataclass(frozen=True)
class PhaseStyle:
    """How one phase is drawn throughout a figure."""

    phase: str
    name: str
    symbol: str
    colour: str
    line: Any
    legend: str


def _plain(text: str, longest: int = 80) -> str:
    """Text fit for one line of a figure."""
    flat = " ".join("".join(" " if unicodedata.category(c)[0] == "C" else c for c in text).split())
    return flat if len(flat) <= longest else flat[: longest - 1] + "…"


@lru_cache(maxsize=1)
def _fonts() -> tuple[str, ...]:
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
    words = re.split(r"[\s_\-/]+", _plain(name, 40))
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
    used: dict[str, int] = {}
    out: dict[str, PhaseStyle] = {}
    for phase in sorted(shown):
        record = weights.get(phase) or findings.get(phase)
        name, group = (record.name, record.group) if record else (phase, "")
        line = _LINES[used.get(group, 0) % len(_LINES)]
        used[group] = used.get(group, 0) + 1
        symbol = _symbol(phase, name)
        if symbol in {style.symbol for style in out.values()}:
            symbol = _plain(name, 9)
        legend = f"{_plain(name, 28)} ({symbol})"
        weight = weights.get(phase)
        if weight is not None and weight.weight_percent is not None:
            legend += f"  {weight.weight_percent:.1f} %"
            if weight.low95 is not None and weight.high95 is not None:
                legend += f" [{weight.low95:.1f}–{weight.high95:.1f}]"
        if record is not None and record.status in ("possible", "trace"):
            legend += f", {record.status}"
        out[phase] = PhaseStyle(phase, name, symbol, GROUP_COLOURS.get(group, _OTHER_COLOUR), line, legend)
    heaviest = sorted(out, key=lambda p: -(weights[p].weight_percent or 0.0) if p in weights else 0.0)
    return {phase: out[phase] for phase in heaviest}


def sample_figure(result: SampleResult) -> Figure:
    """Draw all scans of a sample.

    One panel per scan with the observed points, the calculated curve, the background, each phase on top of the
    background, the reflections named, and a strip with the difference. Intensity is on a square-root scale, where
    counting noise is equally wide everywhere; the difference strip uses the same scale.

    Parameters
    ----------
    result : SampleResult
        Finished sample with curves.

    Returns
    -------
    matplotlib.figure.Figure
        A figure that belongs to no window, so that it may be made in a worker process.

    Raises
    ------
    XrdmicaError
        If the result carries no curves.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    if not result.curves:
        raise XrdmicaError(f"sample {result.sample}: the result carries no curves", fix="run it again with curves on")
    scans = {scan.label: scan for scan in result.scans}
    styles = phase_styles(result)
    tubes = [_tube(scans.get(curve.scan)) for curve in result.curves]
    shared = len({tube.mean_wavelength if tube else None for tube in tubes}) == 1
    legend_rows = -(-(len(styles) + 3) // 3)
    top = 0.42 + 0.16 * legend_rows + 0.55
    tall = {1: 3.6, 2: 2.8}.get(len(result.curves), 2.15)
    each = tall + _RESIDUAL + _GAP + (0.0 if shared else 0.72)
    height = top + each * len(result.curves) + (0.36 if shared else -0.1)
    figure = Figure(figsize=(_WIDTH, height), facecolor="white")
    FigureCanvasAgg(figure)
    width = (_WIDTH - _LEFT - _RIGHT) / _WIDTH
    limits = (min(c.two_theta[0] for c in result.curves), max(c.two_theta[-1] for c in result.curves))
    panels: list[Axes] = []
    for k, (curve, tube) in enumerate(zip(result.curves, tubes, strict=True)):
        upper = height - top - k * each
        panel = figure.add_axes((_LEFT / _WIDTH, (upper - tall) / height, width, tall / height))
        strip = figure.add_axes((_LEFT / _WIDTH, (upper - tall - _RESIDUAL) / height, width, _RESIDUAL / height))
        for axes in (panel, strip):
            for spine in axes.spines.values():
                spine.set(linewidth=0.6, color=_INK)
            axes.set_xlim(*(limits if shared else (curve.two_theta[0], curve.two_theta[-1])))
        _draw_scan(panel, strip, curve, scans.get(curve.scan), styles)
        last = k == len(result.curves) - 1
        if last or not shared:
            strip.set_xlabel(_angle_label(tube), fontsize=9, parse_math=False)
        strip.tick_params(labelbottom=last or not shared)
        if tube is not None and (k == 0 or not shared):
            _spacing_axis(panel, tube)
        panels.append(panel)
    figure.text(_LEFT / _WIDTH, 1 - 0.28 / height, _plain(result.sample), fontsize=13, weight="bold", va="center",
                parse_math=False, family=list(_fonts()), gid="title")  # fmt: skip
    figure.text(1 - _RIGHT / _WIDTH, 1 - 0.28 / height, f"100 % = {result.proportions.basis}", fontsize=8, ha="right",
                va="center", color=_FAINT, parse_math=False)  # fmt: skip
    _legend(figure, panels[0], list(styles.values()), 1 - 0.42 / height)
    return figure


def _tube(scan: ScanSummary | None) -> Radiation | None:
    try:
        return Radiation.parse(scan.radiation) if scan is not None else None
    except XrdmicaError:
        return None


def _angle_label(tube: Radiation | None) -> str:
    return "2θ (degree)" if tube is None else f"2θ (degree), {_tube_words(tube)}"


def _tube_words(tube: Radiation) -> str:
    metal = re.fullmatch(r"([A-Z][a-z])(Ka1)?", tube.name)
    return f"{tube.wavelength:.4f} Å" if metal is None else f"{metal.group(1)} Kα{'₁' if metal.group(2) else ''}"


def _draw_scan(panel: Axes, strip: Axes, curve: Curve, scan: ScanSummary | None, styles: dict[str, PhaseStyle]) -> None:
    angle, observed = np.array(curve.two_theta), np.array(curve.observed)
    calculated = np.array(curve.calculated) if curve.calculated else None
    background = np.array(curve.background) if curve.background else np.zeros_like(angle)
    panel.set_yscale("function", functions=(_signed_root, _signed_square))
    for phase, style in styles.items():
        if phase not in curve.contributions:
            continue
        part = np.array(curve.contributions[phase])
        if not np.nanmax(part, initial=0.0) > 0:
            continue
        # the far tails of all phases would lie on each other along the background
        noticed = max(0.004 * part.max(), 0.3 * np.sqrt(max(np.median(background), 1.0)))
        above = np.where(part > noticed, background + part, np.nan)
        panel.fill_between(angle, background, above, color=style.colour, alpha=0.16, lw=0, zorder=1)
        panel.plot(angle, above, color=style.colour, ls=style.line, lw=0.9, zorder=2, gid=f"phase:{phase}")
    panel.plot(angle, observed, color=_INK, lw=0.5, zorder=4, gid="observed")
    if curve.background:
        panel.plot(angle, background, color=_FAINT, lw=0.8, ls=(0, (4, 2)), zorder=2.5, gid="background")
    if calculated is not None:
        panel.plot(angle, calculated, color=_CALCULATED, lw=1.6, alpha=0.6, zorder=3, gid="calculated")
    low, high = _heights(observed, calculated, background if curve.background else observed, angle)
    panel.set_ylim(_signed_square(low), _signed_square(high))
    _count_ticks(panel, low, high)
    panel.tick_params(labelsize=7.5, labelbottom=False, direction="in", colors=_INK, bottom=False)
    panel.set_ylabel("intensity", fontsize=8.5)
    _name_scan(panel, curve, scan)
    _marks(panel, curve, styles, low, high)
    _difference(strip, angle, observed, calculated)


def _signed_root(values: Array) -> Array:
    return np.sign(values) * np.sqrt(np.abs(values))


def _signed_square(values: Any) -> Any:
    return np.sign(values) * np.square(values)


def _heights(observed: Array, calculated: Array | None, background: Array, angle: Array) -> tuple[float, float]:
    """Lower and upper limit in square-root units: room below for the ticks and above for the names."""
    everything = np.maximum(observed, calculated) if calculated is not None else observed
    # a beam that spills over the mount at the lowest angles must not flatten the rest
    inner = everything[angle >= angle[0] + 0.06 * (angle[-1] - angle[0])]
    top = float(everything.max())
    if inner.size and top > 2.5 * inner.max():
        top = 2.5 * float(inner.max())
    bottom = max(float(np.percentile(np.minimum(observed, background), 1)), 0.0)
    low, high = np.sqrt(bottom), np.sqrt(max(top, 1.0))
    reach = max(high - low, 1.0)
    return float(low - 0.22 * reach), float(high + 0.43 * reach)


def _count_ticks(panel: Axes, low: float, high: float) -> None:
    from matplotlib.ticker import FixedFormatter, FixedLocator

    nice = [m * 10.0**k for k in range(9) for m in (1, 2, 5)]
    kept: list[float] = []
    for value in [0.0, *nice]:
        root = np.sqrt(value)
        if low <= root <= high - 0.04 * (high - low) and (not kept or root - np.sqrt(kept[-1]) > 0.11 * (high - low)):
            kept.append(value)
    panel.yaxis.set_major_locator(FixedLocator(kept))
    panel.yaxis.set_major_formatter(FixedFormatter([f"{v:,.0f}".replace(",", "\u2009") for v in kept]))
    panel.yaxis.set_minor_locator(FixedLocator([]))


def _name_scan(panel: Axes, curve: Curve, scan: ScanSummary | None) -> None:
    from xrdmica.scans.treatment import Treatment

    words = curve.scan
    if scan is not None:
        try:
            words = Treatment.parse(scan.treatment).label
        except XrdmicaError:
            words = scan.treatment
        number = re.search(r"#\d+$", curve.scan)
        words += f" {number.group()}" if number else ""
        tube = _tube(scan)
        if scan.mount == "oriented":
            words += "  ·  oriented mount"
        else:
            words = "random powder" if scan.treatment == "none" else f"{words}  ·  random powder"
        words += f"  ·  {_tube_words(tube)}" if tube else ""
        words += " (assumed)" if scan.radiation_origin == "assumed" else ""
    panel.text(0.992, 0.955, _plain(words), transform=panel.transAxes, ha="right", va="top", fontsize=9, weight="bold",
               color=_INK, parse_math=False, zorder=8, gid="scan",
               bbox={"facecolor": "white", "alpha": 0.85, "edgecolor": "none", "pad": 1.5})  # fmt: skip


def _marks(panel: Axes, curve: Curve, styles: dict[str, PhaseStyle], low: float, high: float) -> None:
    """A row of ticks per phase at the foot of the panel, and the names of the strongest reflections."""
    rows = {phase: k for k, phase in enumerate(p for p in styles if any(m.phase == p for m in curve.marks))}
    step = min(0.03, 0.13 / max(len(rows), 1))
    for phase, row in rows.items():
        at = [m.two_theta for m in curve.marks if m.phase == phase]
        foot = 0.012 + step * row
        panel.vlines(at, foot, foot + 0.85 * step, transform=panel.get_xaxis_transform(), color=styles[phase].colour,
                     lw=1.2, zorder=5, gid=f"ticks:{phase}")  # fmt: skip
    left, right = panel.get_xlim()
    extent, dpi = panel.get_window_extent(), panel.figure.dpi
    symbols = {phase: style.symbol for phase, style in styles.items()}
    labels = place_labels(
        curve, symbols, x_limits=(left, right), root_limits=(low, high),
        size_inches=(extent.width / dpi, extent.height / dpi),
    )  # fmt: skip
    for label in labels:
        _draw_label(panel, label, styles[label.phase].colour)


def _draw_label(panel: Axes, label: MarkLabel, colour: str) -> None:
    if abs(label.x - label.two_theta) > 1e-9 or label.y_root > label.peak_root:
        ends = [_signed_square(label.peak_root), _signed_square(label.y_root)]
        panel.plot([label.two_theta, label.x], ends, color=colour, lw=0.4, alpha=0.7, zorder=3.5, gid="leader")
    panel.text(label.x, _signed_square(label.y_root), label.text, rotation=90, ha="center", va="bottom", fontsize=7,
               color=colour, parse_math=False, zorder=7, gid="mark", family=list(_fonts()))  # fmt: skip


def _difference(strip: Axes, angle: Array, observed: Array, calculated: Array | None) -> None:
    from matplotlib.ticker import AutoMinorLocator

    strip.axhline(0, color=_FAINT, lw=0.6)
    if calculated is not None:
        difference = _signed_root(observed) - _signed_root(calculated)
        reach = max(float(np.percentile(np.abs(difference), 99.5)) * 1.3, 1e-6)
        strip.plot(angle, difference, color=_INK, lw=0.5, gid="difference")
        strip.set_ylim(-reach, reach)
    strip.set_yticks([])
    strip.set_ylabel("diff.", fontsize=7.5, labelpad=16)
    strip.xaxis.set_minor_locator(AutoMinorLocator(5))
    strip.tick_params(which="both", direction="in", labelsize=8, top=False, colors=_INK)


def _spacing_axis(panel: Axes, tube: Radiation) -> None:
    """Bragg spacings along the top; only those that have room."""
    from matplotlib.ticker import FixedFormatter, FixedLocator

    left, right = panel.get_xlim()
    kept: list[tuple[float, str]] = []
    for spacing in _SPACINGS:
        at = float(tube.two_theta(spacing))
        if left <= at <= right and (not kept or at - kept[-1][0] > 0.024 * (right - left)):
            kept.append((at, f"{spacing:g}"))
    axis = panel.secondary_xaxis("top")
    axis.xaxis.set_major_locator(FixedLocator([at for at, _ in kept]))
    axis.xaxis.set_major_formatter(FixedFormatter([text for _, text in kept]))
    axis.tick_params(labelsize=8, direction="out", length=3, colors=_INK, pad=1.5)
    axis.set_xlabel("d (Å)", fontsize=8.5, labelpad=2)
    axis.set_gid("spacing")
    axis.spines["top"].set_linewidth(0.6)


def _legend(figure: Figure, panel: Axes, styles: Sequence[PhaseStyle], top: float) -> None:
    from matplotlib.lines import Line2D

    handles = [
        Line2D([], [], color=_INK, lw=0.8, label="observed"),
        Line2D([], [], color=_CALCULATED, lw=1.8, label="calculated", alpha=0.7),
        Line2D([], [], color=_FAINT, lw=1, ls=(0, (4, 2)), label="background"),
    ]
    handles += [Line2D([], [], color=s.colour, ls=s.line, lw=1.8, label=s.legend) for s in styles]
    legend = figure.legend(
        handles=handles, loc="upper left", bbox_to_anchor=(_LEFT / _WIDTH - 0.005, top), ncol=3, frameon=False,
        handlelength=2.6, columnspacing=2.2, borderaxespad=0.2, labelspacing=0.35,
        prop={"family": list(_fonts()), "size": 8},
    )  # fmt: skip
    for text in legend.get_texts():
        text.set_parse_math(False)


def figure_bytes(figure: Figure, kind: str, *, dpi: int = 140) -> bytes:
    """The figure as a file of the given kind (``png``, ``svg`` or ``pdf``); the same figure gives the same bytes."""
    import matplotlib as mpl

    undated: dict[str, dict[str, Any]] = {"png": {"Software": None}, "svg": {"Date": None}, "pdf": {"CreationDate": None}}
    buffer = io.BytesIO()
    with warnings.catch_warnings(), mpl.rc_context({"svg.hashsalt": "xrdmica"}):
        # a script that no installed font has is drawn as boxes; the name stands in full in the result file
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        figure.savefig(buffer, format=kind, dpi=dpi, metadata=undated[kind])
    return buffer.getvalue()


def save_figure(figure: Figure, path: Path) -> Path:
    """Write a figure, whole or not at all; the suffix says how.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        From `sample_figure`.
    path : pathlib.Path
        Target ending in ``.png``, ``.svg`` or ``.pdf``.

    Returns
    -------
    pathlib.Path
        The target.

    Raises
    ------
    XrdmicaError
        If the suffix is another one or the file cannot be written.
    """
    path = Path(path)
    kind = path.suffix.lower().removeprefix(".")
    if kind not in ("png", "svg", "pdf"):
        raise XrdmicaError(f"{path}: figures cannot be written as {path.suffix or 'a file without suffix'}",
                           fix="end the name in .png, .svg or .pdf")  # fmt: skip
    return write_bytes(path, figure_bytes(figure, kind))
