"""Figures over all samples of a run: proportions as stacked bars, and three kinds of sheet silicates in a triangle."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from xrdmica.report.campaign import Campaign, CampaignRow
from xrdmica.report.figures import figure_bytes

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["FIGURE_FILES", "campaign_figures", "stacked_figure", "ternary_figure"]

FIGURE_FILES = ("proportions.svg", "ternary.svg")
_MOST_BARS = 300
_MOST_PHASES = 16  # the rest is drawn as one
_OTHERS = "others"
# Corners in use for clay fractions, common practice; totals that overlap with others are not in them.
CORNERS: tuple[tuple[str, frozenset[str]], ...] = (
    ("smectite, vermiculite,\nmixed layers", frozenset({"smectite", "vermiculite", "interstratified"})),
    ("mica and illite", frozenset({"true mica", "brittle mica"})),
    ("kaolin, serpentine, chlorite", frozenset({"kaolin", "serpentine", "chlorite"})),
)
_ALL_NAMED = 15  # points; among more only those that stand apart are named
_LEAST = 20.0  # wt % that the three corners must have together for a point to mean something
_COLOURS = (
    "#1d4f91", "#e07b1a", "#12827c", "#8f2d1b", "#5b3a86", "#a88a00", "#b04a8f", "#6a6f76", "#6f9fd8", "#f0b27a", "#7fc4bf",
    "#c98276", "#a48bc4", "#d8c766", "#dba3c6", "#b9bdc2",
)  # fmt: skip
_MARKERS = "osD^vPX*"
_INK, _FAINT, _OTHER = "#202326", "#8b9097", "#d9dbde"


def campaign_figures(campaign: Campaign) -> dict[str, tuple[str, bytes]]:
    """The figures that the samples allow.

    Parameters
    ----------
    campaign : Campaign
        Rows and groups.

    Returns
    -------
    dict
        File name -> caption and SVG; the same campaign gives the same bytes.
    """
    out: dict[str, tuple[str, bytes]] = {}
    bars = stacked_figure(campaign)
    if bars is not None:
        figure, caption = bars
        out["proportions.svg"] = (caption, figure_bytes(figure, "svg"))
    triangle = ternary_figure(campaign)
    if triangle is not None:
        figure, caption = triangle
        out["ternary.svg"] = (caption, figure_bytes(figure, "svg"))
    return out


def _new_figure(width: float, height: float) -> Figure:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def _short(text: str, longest: int = 24) -> str:
    flat = " ".join("".join(c if c.isprintable() else " " for c in text).split())
    return flat if len(flat) <= longest else flat[: longest - 1] + "…"


# ---------------------------------------------------------------- stacked bars


def stacked_figure(campaign: Campaign) -> tuple[Figure, str] | None:
    """One bar per sample with its proportions; beyond 300 samples one bar per group of similar samples, its mean.

    Returns
    -------
    tuple or None
        Figure and caption; None when no sample has proportions.
    """
    rows = [row for row in campaign.rows if row.phases]
    if not rows:
        return None
    if len(rows) <= _MOST_BARS:
        bars: list[tuple[str, Mapping[str, float]]] = [(_short(row.sample), row.phases) for row in rows]
        caption = "Proportions of the fitted phases, wt %, one bar per sample"
    else:
        bars = _means(rows)
        caption = f"Mean proportions, wt %, of the groups of similar samples among {len(rows)} samples"
    order = _by_weight([phases for _, phases in bars])
    named = order[:_MOST_PHASES]
    width = max(7.0, min(24.0, 3.8 + 0.26 * len(bars)))
    figure = _new_figure(width, 5.2)
    axes = figure.add_subplot()
    places = list(range(len(bars)))
    base = [0.0] * len(bars)
    for k, phase in enumerate([*named, _OTHERS]):
        heights = [_amount(phases, phase, named) for _, phases in bars]
        if phase == _OTHERS and not any(heights):
            continue
        colour = _OTHER if phase == _OTHERS else _COLOURS[k]
        axes.bar(places, heights, bottom=base, width=0.86, color=colour, edgecolor="white", linewidth=0.3, label=phase)
        base = [low + high for low, high in zip(base, heights, strict=True)]
    axes.set_ylabel("weight percent", color=_INK)
    axes.set_xlim(-0.6, len(bars) - 0.4)
    axes.set_ylim(0, max(100.0, *base))
    every = max(1, math.ceil(len(bars) / 80))
    axes.set_xticks(places[::every])
    axes.set_xticklabels([name for name, _ in bars[::every]], rotation=90, fontsize=7, parse_math=False)
    handles, labels = axes.get_legend_handles_labels()
    legend = axes.legend(handles[::-1], labels[::-1], loc="upper left", bbox_to_anchor=(1.0, 1.0), frameon=False, fontsize=8)
    for text in legend.get_texts():
        text.set_parse_math(False)
    _quiet(axes)
    figure.subplots_adjust(left=0.8 / width, right=1 - 2.7 / width, top=0.96, bottom=0.31)
    return figure, caption


def _means(rows: Sequence[CampaignRow]) -> list[tuple[str, Mapping[str, float]]]:
    groups: dict[int, list[CampaignRow]] = {}
    for row in rows:
        groups.setdefault(row.cluster or 0, []).append(row)
    out: list[tuple[str, Mapping[str, float]]] = []
    for number, members in sorted(groups.items()):
        phases = sorted({phase for row in members for phase in row.phases})
        mean = {phase: math.fsum(row.phases.get(phase, 0.0) for row in members) / len(members) for phase in phases}
        out.append((f"group {number}, n = {len(members)}" if number else f"no group, n = {len(members)}", mean))
    return out


def _by_weight(bars: Sequence[Mapping[str, float]]) -> list[str]:
    totals: dict[str, float] = {}
    for phases in bars:
        for phase, weight in phases.items():
            totals[phase] = totals.get(phase, 0.0) + weight
    return sorted((phase for phase in totals if totals[phase] > 0), key=lambda phase: (-totals[phase], phase))


def _amount(phases: Mapping[str, float], phase: str, named: Sequence[str]) -> float:
    if phase != _OTHERS:
        return max(phases.get(phase, 0.0), 0.0)
    return math.fsum(max(weight, 0.0) for name, weight in phases.items() if name not in named)


def _quiet(axes: Axes) -> None:
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set(linewidth=0.6, color=_INK)
    axes.tick_params(width=0.6, labelsize=8, colors=_INK)


# ---------------------------------------------------------------- triangle


def ternary_figure(campaign: Campaign) -> tuple[Figure, str] | None:
    """Samples in a triangle of swelling and mixed layers, mica with illite, and kaolin with serpentine and chlorite.

    Returns
    -------
    tuple or None
        Figure and caption; None when no sample has 20 wt % of the three together.
    """
    points = [(row, shares) for row in campaign.rows if (shares := _shares(row)) is not None]
    if not points:
        return None
    figure = _new_figure(6.6, 6.0)
    axes = figure.add_axes((0.08, 0.06, 0.84, 0.86))
    _triangle(axes)
    clusters = sorted({row.cluster or 0 for row, _ in points})
    for number in clusters:
        inside = [_place(shares) for row, shares in points if (row.cluster or 0) == number]
        axes.scatter(
            [x for x, _ in inside], [y for _, y in inside], s=22 if len(points) < 500 else 8, alpha=0.85,
            color=_COLOURS[(number - 1) % len(_COLOURS)] if number else _FAINT, marker=_MARKERS[(number - 1) % len(_MARKERS)],
            edgecolors="white", linewidths=0.4, zorder=3, label=f"group {number}, n = {len(inside)}",
        )  # fmt: skip
    few = len(points) <= _ALL_NAMED
    marked = [(row, shares) for row, shares in points if few or "unlike the others" in row.flags][:20]
    for row, shares in marked:
        axes.annotate(_short(row.sample), _place(shares), xytext=(4, 4), textcoords="offset points", fontsize=7, color=_INK,
                      parse_math=False)  # fmt: skip
    if len(clusters) > 1:
        axes.legend(loc="upper left", frameon=False, fontsize=8)
    without = sum(1 for row in campaign.rows if not row.failed) - len(points)
    caption = "Swelling and mixed layers, mica with illite, and kaolin with serpentine and chlorite, as parts of their sum"
    caption += "; groups of similar samples apart" if len(clusters) > 1 else ""
    caption += f"; {without} samples with less than {_LEAST:g} wt % of them left out" if without else ""
    return figure, caption


def _shares(row: CampaignRow) -> tuple[float, float, float] | None:
    """Parts of the three corners; None when the sample has too little of them."""
    sums = [math.fsum(max(row.groups.get(group, 0.0), 0.0) for group in sorted(groups)) for _, groups in CORNERS]
    total = math.fsum(sums)
    if total < _LEAST:
        return None
    return sums[0] / total, sums[1] / total, sums[2] / total


def _place(shares: tuple[float, float, float]) -> tuple[float, float]:
    """Where a point stands: the first corner is on top, the second left, the third right."""
    top, _, right = shares
    return right + top / 2, top * math.sqrt(3) / 2


def _triangle(axes: Axes) -> None:
    height = math.sqrt(3) / 2
    axes.plot([0, 1, 0.5, 0], [0, 0, height, 0], color=_INK, linewidth=0.9, zorder=2)
    for part in (0.2, 0.4, 0.6, 0.8):
        for ends in (
            ((part, 1 - part, 0.0), (part, 0.0, 1 - part)),
            ((1 - part, part, 0.0), (0.0, part, 1 - part)),
            ((1 - part, 0.0, part), (0.0, 1 - part, part)),
        ):
            (x0, y0), (x1, y1) = (_place(end) for end in ends)
            axes.plot([x0, x1], [y0, y1], color=_OTHER, linewidth=0.6, zorder=1)
    for (name, _), (x, y), vertical in zip(
        CORNERS, ((0.5, height + 0.015), (0.0, -0.02), (1.0, -0.02)), ("bottom", "top", "top"), strict=True
    ):
        axes.text(x, y, name, ha="center", va=vertical, fontsize=9, color=_INK)
    axes.set_xlim(-0.12, 1.12)
    axes.set_ylim(-0.1, height + 0.12)
    axes.set_aspect("equal")
    axes.axis("off")
