"""Proportions with intervals against depth or along a line."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from xrdmica.interpret.profile import ProfilePoint

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["profile_figure"]

_MOST = 7


def profile_figure(points: Sequence[ProfilePoint], along: str) -> Figure:
    """One panel per phase, weight percent across, the coordinate down where it is a depth.

    Parameters
    ----------
    points : sequence of ProfilePoint
    along : str
        Name of the coordinate, for the axis.

    Returns
    -------
    matplotlib.figure.Figure
    """
    from matplotlib.figure import Figure

    names = _largest(points)
    figure = Figure(figsize=(1.9 * max(len(names), 2) + 0.9, 6.2), layout="constrained")
    axes = figure.subplots(1, len(names), sharey=True, squeeze=False)[0]
    depth = "depth" in along.lower()
    for k, (panel, name) in enumerate(zip(axes, names, strict=True)):
        own = [p for p in points if p.name == name and p.weight is not None]
        y = [p.coordinate for p in own]
        x = [p.weight or 0.0 for p in own]
        left = [max((p.weight or 0.0) - (p.low if p.low is not None else p.weight or 0.0), 0.0) for p in own]
        right = [max((p.high if p.high is not None else p.weight or 0.0) - (p.weight or 0.0), 0.0) for p in own]
        # no line between the points: samples in which the phase was not found lie between them
        panel.errorbar(x, y, xerr=[left, right], fmt="o", color="#1f4e79", ecolor="#7a8a99", lw=1, ms=4, capsize=2)
        panel.set_title(_short(name), fontsize=8)
        panel.set_xlim(0, max([*(p.high or 0.0 for p in own), 10.0]) * 1.08)
        panel.grid(True, lw=0.3, color="#c8ccd0")
        panel.tick_params(labelsize=7)
        if k == 0:
            panel.set_ylabel(along.replace("_", " ").replace(" m", " (m)") if along.endswith("_m") else along, fontsize=9)
    if depth:
        axes[0].invert_yaxis()
    figure.supxlabel(f"wt % with 95 % interval ({points[0].basis})", fontsize=8)
    return figure


def _largest(points: Sequence[ProfilePoint]) -> list[str]:
    """Names of the phases with the largest weights, at most seven."""
    best: dict[str, float] = {}
    for point in points:
        best[point.name] = max(best.get(point.name, 0.0), point.weight or 0.0)
    return sorted(best, key=lambda name: -best[name])[:_MOST]


def _short(name: str) -> str:
    return name if len(name) <= 22 else f"{name[:20]}…"
