"""Picture of a calculated pattern."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from xrdmica.calculated.pattern import CalculatedPattern

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["pattern_figure"]

_CURVE, _STICK = "#1d4f91", "#b5651d"


def pattern_figure(pattern: CalculatedPattern, least: float = 2.0) -> Figure:
    """Draw the curve, a stick per reflection below it, and the indices of the stronger lines.

    Parameters
    ----------
    pattern : CalculatedPattern
    least : float
        Lines weaker than this share of the strongest [percent] get no name.

    Returns
    -------
    matplotlib.figure.Figure
    """
    from matplotlib.figure import Figure

    figure = Figure(figsize=(10.0, 4.6), layout="constrained")
    axes = figure.subplots()
    x, y = pattern.two_theta, pattern.intensity
    axes.plot(x, y, color=_CURVE, linewidth=0.9)
    axes.vlines([line.two_theta for line in pattern.reflections], -6.0, -1.5, color=_STICK, linewidth=0.7)
    width = 0.013 * float(x[-1] - x[0])
    placed: list[float] = []
    for line in sorted(pattern.reflections, key=lambda line: -line.intensity):
        if line.intensity < least or any(abs(line.two_theta - other) < width for other in placed):
            continue
        placed.append(line.two_theta)
        near = np.abs(x - line.two_theta) < 0.3
        height = float(y[near].max()) if near.any() else 0.0
        text = f"{line.label}  {line.d_spacing:.3f}".strip()
        axes.annotate(text, (line.two_theta, height + 1.5), rotation=90, ha="center", va="bottom", fontsize=7)
    axes.set_xlim(x[0], x[-1])
    axes.set_ylim(-8, 135)
    tube = pattern.radiation.name
    axes.set_xlabel(f"2θ [°], {tube} radiation" if tube[0].isalpha() else f"2θ [°], λ = {tube} Å")
    axes.set_ylabel("intensity, strongest = 100")
    axes.set_title(f"{pattern.name}, {pattern.mount} mount, {pattern.treatment.label}", loc="left", fontsize=10)
    return figure
