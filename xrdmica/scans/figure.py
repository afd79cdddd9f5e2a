"""Picture of scans with their background and peaks."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from xrdmica.scans.background import estimate_background
from xrdmica.scans.peaks import Peak
from xrdmica.scans.profile import pseudo_voigt
from xrdmica.scans.scan import Scan

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["peak_figure"]

_SCAN, _BACKGROUND, _FIT, _PEAK = "#4a4a4a", "#b5651d", "#1b6f8f", "#7fb3c4"


def peak_figure(found: Sequence[tuple[Scan, Sequence[Peak]]]) -> Figure:
    """Draw every scan with background, fitted peaks, and the spacing of each peak.

    Parameters
    ----------
    found : sequence of (Scan, peaks)
        From `find_peaks`.

    Returns
    -------
    matplotlib.figure.Figure
        One panel per scan.
    """
    from matplotlib.figure import Figure

    figure = Figure(figsize=(11.0, 0.6 + 3.9 * len(found)), layout="constrained")
    panels = figure.subplots(len(found), 1, squeeze=False)[:, 0]
    for axes, (scan, peaks) in zip(panels, found, strict=True):
        x = scan.two_theta
        base = estimate_background(scan)
        total = base.copy()
        axes.plot(x, scan.counts, color=_SCAN, linewidth=0.6, label="scan")
        for peak in peaks:
            shape = pseudo_voigt(x, peak.two_theta, peak.fwhm, peak.shape, scan.radiation)
            line = peak.height * shape / max(float(shape.max()), 1e-9)
            near = np.abs(x - peak.two_theta) < 4 * peak.fwhm
            axes.plot(x[near], (base + line)[near], color=_PEAK, linewidth=0.8)
            total += line
        axes.plot(x, base, color=_BACKGROUND, linewidth=1.0, label="background")
        if peaks:
            axes.plot(x, total, color=_FIT, linewidth=0.9, label="background + peaks")
        top = max([float(np.percentile(scan.counts, 99.0)), *(_top(peak, scan, total) for peak in peaks)])
        _label(axes, scan, peaks, total, top)
        axes.set_ylim(0, 1.22 * top)
        axes.set_xlim(x[0], x[-1])
        tube = f"{scan.radiation.name} radiation" if scan.radiation.name[0].isalpha() else f"λ = {scan.radiation.name} Å"
        axes.set_xlabel(f"2θ [°], {tube}")
        axes.set_ylabel("counts")
        axes.set_title(Path(scan.source).name or "scan", loc="left", fontsize=10)
        axes.legend(loc="upper right", fontsize=8, frameon=False)
    return figure


def _top(peak: Peak, scan: Scan, total: NDArray[np.float64]) -> float:
    return float(np.interp(peak.two_theta, scan.two_theta, total))


def _label(axes: Any, scan: Scan, peaks: Sequence[Peak], total: NDArray[np.float64], top: float) -> None:
    """Write spacings above the peaks, leaving out a label that would lie on that of a stronger peak."""
    width = 0.011 * float(np.ptp(scan.two_theta))
    placed: list[float] = []
    for peak in sorted(peaks, key=lambda peak: -peak.height):
        if all(abs(peak.two_theta - other) > width for other in placed):
            placed.append(peak.two_theta)
            height = _top(peak, scan, total) + 0.015 * top
            axes.annotate(
                f"{peak.d_spacing:.2f}", (peak.two_theta, height), rotation=90, ha="center", va="bottom", fontsize=7
            )
