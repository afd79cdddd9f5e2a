"""Curves as compact data for a page."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from xrdmica.report.styles import LINES, PhaseStyle, angle_label, one_line, scan_words, tube_of
from xrdmica.results import Curve, SampleResult

__all__ = ["DARK_COLOURS", "DASHES", "dash_of", "plot_data"]

# the same hues for a dark ground
DARK_COLOURS = {
    "#1d4f91": "#7fb0f5",
    "#6f9fd8": "#a9cbf7",
    "#a88a00": "#dcc04a",
    "#8f2d1b": "#f08a72",
    "#6b7a2f": "#b5c76b",
    "#12827c": "#4fc4bb",
    "#5b3a86": "#b79ae6",
    "#e07b1a": "#f5a04e",
    "#b04a8f": "#e58cc8",
    "#7a5230": "#cfa27a",
    "#6a6f76": "#a6adb6",
    "#3c3c3c": "#c9ccd0",
}
DASHES = ("solid", "dash", "dot", "dashdot", "longdashdot")  # in the order of the lines of the figures
_MOST_POINTS = 6000


def dash_of(style: PhaseStyle) -> str:
    """The line of a phase as the plotting library calls it."""
    return DASHES[LINES.index(style.line) % len(DASHES)]


def _short(values: Sequence[float], every: int) -> list[float | int]:
    """Four digits, whole numbers without a point: a curve on a screen carries no more."""
    out: list[float | int] = []
    for value in values[::every]:
        rounded = float(f"{value:.4g}")
        out.append(int(rounded) if rounded == int(rounded) else round(rounded, 2))
    return out


def _trimmed(values: Sequence[float], every: int, floor: float) -> list[Any]:
    """Where a contribution starts to be seen, and its values up to where it ends."""
    thin = values[::every]
    seen = [k for k, value in enumerate(thin) if value > floor]
    if not seen:
        return [0, []]
    first, last = seen[0], seen[-1]
    return [first, [0 if value <= floor / 4 else v for value, v in
                    zip(thin[first : last + 1], _short(thin[first : last + 1], 1), strict=True)]]  # fmt: skip


def _one(curve: Curve, words: str, wavelength: float | None, axis: str, every: int) -> dict[str, Any]:
    noise = max(max(curve.observed, default=0.0), 1.0) * 2e-4
    angles = [round(v, 4) for v in curve.two_theta[::every]]
    return {
        "scan": one_line(curve.scan), "words": words, "wavelength": wavelength, "axis": axis,
        "x": angles, "observed": _short(curve.observed, every), "calculated": _short(curve.calculated, every),
        "background": _short(curve.background, every),
        "parts": {phase: _trimmed(v, every, noise) for phase, v in curve.contributions.items()},
        "marks": [[m.phase, one_line(m.label, 24), round(m.two_theta, 3), round(m.d_spacing, 4)] for m in curve.marks],
    }  # fmt: skip


def plot_data(result: SampleResult, styles: Mapping[str, PhaseStyle], *, every: int = 1) -> dict[str, Any]:
    """What the page's script draws from.

    Parameters
    ----------
    result : SampleResult
        Finished sample.
    styles : mapping
        Phase id -> style.
    every : int
        Each how many-th point is kept.

    Returns
    -------
    dict
        JSON-ready: phases with colours and lines, scans with their curves.
    """
    scans = {scan.label: scan for scan in result.scans}
    longest = max((len(c.two_theta) for c in result.curves), default=0)
    step = max(every, -(-longest // _MOST_POINTS))
    curves = []
    for curve in result.curves:
        tube = tube_of(scans.get(curve.scan))
        curves.append(
            _one(curve, " ".join(scan_words(curve, scans.get(curve.scan)).split()),
                 tube.mean_wavelength if tube else None, angle_label(tube), step)
        )  # fmt: skip
    return {
        "every": step,
        "phases": [
            {"id": s.phase, "name": one_line(s.name, 40), "symbol": s.symbol, "light": s.colour,
             "dark": DARK_COLOURS.get(s.colour, "#c9ccd0"), "dash": dash_of(s)}
            for s in styles.values()
        ],
        "scans": curves,
    }  # fmt: skip
