"""One scan drawn on matplotlib axes: curves, phases, reflections, spacings and the difference."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from xrdmica.radiation import Radiation
from xrdmica.report.labels import MarkLabel, place_labels
from xrdmica.report.styles import PhaseStyle, fonts, scan_words
from xrdmica.results import Curve, ScanSummary

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["CALCULATED", "FAINT", "INK", "draw_difference", "draw_scan", "draw_spacings"]

Array = NDArray[np.float64]

INK, FAINT, CALCULATED = "#202326", "#8b9097", "#e0218a"
_SPACINGS = (
    30, 20, 15, 12, 10, 8, 7, 6, 5, 4.5, 4, 3.5, 3.2, 3, 2.8, 2.6, 2.5, 2.4, 2.3, 2.2, 2.1, 2, 1.8, 1.7, 1.6, 1.5, 1.4,
)  # fmt: skip


def draw_scan(axes: Axes, curve: Curve, styles: Mapping[str, PhaseStyle], *, scan: ScanSummary | None = None) -> Axes:
    """Draw one scan: observed, calculated, background, each phase on the background, and the reflections named.

    Intensity is on a square-root scale, where counting noise is equally wide everywhere.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Where to; its angle limits [degree] should be set before, the names of reflections are placed within them.
    curve : Curve
        The scan.
    styles : mapping
        Phase id -> style, from `xrdmica.report.styles.phase_styles`.
    scan : ScanSummary, optional
        Its mount, treatment and tube, written into the corner.

    Returns
    -------
    matplotlib.axes.Axes
        The same axes.
    """
    panel = axes
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
    panel.plot(angle, observed, color=INK, lw=0.5, zorder=4, gid="observed")
    if curve.background:
        panel.plot(angle, background, color=FAINT, lw=0.8, ls=(0, (4, 2)), zorder=2.5, gid="background")
    if calculated is not None:
        panel.plot(angle, calculated, color=CALCULATED, lw=1.6, alpha=0.6, zorder=3, gid="calculated")
    low, high = _heights(observed, calculated, background if curve.background else observed, angle)
    panel.set_ylim(_signed_square(low), _signed_square(high))
    _count_ticks(panel, low, high)
    panel.tick_params(labelsize=7.5, labelbottom=False, direction="in", colors=INK, bottom=False)
    panel.set_ylabel("intensity", fontsize=8.5)
    _name_scan(panel, curve, scan)
    _marks(panel, curve, styles, low, high)
    return panel


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
    panel.text(0.992, 0.955, scan_words(curve, scan), transform=panel.transAxes, ha="right", va="top", fontsize=9, weight="bold",
               color=INK, parse_math=False, zorder=8, gid="scan",
               bbox={"facecolor": "white", "alpha": 0.85, "edgecolor": "none", "pad": 1.5})  # fmt: skip


def _marks(panel: Axes, curve: Curve, styles: Mapping[str, PhaseStyle], low: float, high: float) -> None:
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
               color=colour, parse_math=False, zorder=7, gid="mark", family=list(fonts()))  # fmt: skip


def draw_difference(axes: Axes, curve: Curve) -> Axes:
    """Draw the difference of the square roots of observed and calculated intensity, where noise is equally wide everywhere.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Where to.
    curve : Curve
        The scan; without a calculated curve only the zero line is drawn.

    Returns
    -------
    matplotlib.axes.Axes
        The same axes.
    """
    from matplotlib.ticker import AutoMinorLocator

    strip, angle, observed = axes, np.array(curve.two_theta), np.array(curve.observed)
    calculated = np.array(curve.calculated) if curve.calculated else None
    strip.axhline(0, color=FAINT, lw=0.6)
    if calculated is not None:
        difference = _signed_root(observed) - _signed_root(calculated)
        reach = max(float(np.percentile(np.abs(difference), 99.5)) * 1.3, 1e-6)
        strip.plot(angle, difference, color=INK, lw=0.5, gid="difference")
        strip.set_ylim(-reach, reach)
    strip.set_yticks([])
    strip.set_ylabel("diff.", fontsize=7.5, labelpad=16)
    strip.xaxis.set_minor_locator(AutoMinorLocator(5))
    strip.tick_params(which="both", direction="in", labelsize=8, top=False, colors=INK)
    return strip


def draw_spacings(axes: Axes, tube: Radiation) -> Axes:
    """Write Bragg spacings [angstrom] along the top; only those that have room within the angle limits of the axes.

    Parameters
    ----------
    axes : matplotlib.axes.Axes
        Axes whose horizontal coordinate is 2 theta [degree].
    tube : Radiation
        Gives the wavelength.

    Returns
    -------
    matplotlib.axes.Axes
        The same axes.
    """
    panel = axes
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
    axis.tick_params(labelsize=8, direction="out", length=3, colors=INK, pad=1.5)
    axis.set_xlabel("d (Å)", fontsize=8.5, labelpad=2)
    axis.set_gid("spacing")
    axis.spines["top"].set_linewidth(0.6)
    return panel
