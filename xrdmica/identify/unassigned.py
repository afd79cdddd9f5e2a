"""Lines that the kept phases do not explain, and what they might be."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import all_phases
from xrdmica.diffraction.optics import displacement_shift
from xrdmica.identify.search import Arena, Selection
from xrdmica.matching.prepare import Prepared
from xrdmica.results import UnassignedLine

__all__ = ["suggestions", "unassigned_lines"]

_SIGNIFICANT = 6.0  # sigma
_EXPLAINED = 0.4

# Strongest or first lines of usual companions and of sheet silicates [angstrom]; common practice and handbook values from memory
_USUAL_LINES: tuple[tuple[float, float, str], ...] = (
    (15.2, 16.3, "window or holder feature, or smectite in moist air"),
    (14.6, 15.6, "smectite with Ca or Mg, air-dried"),
    (13.9, 14.6, "chlorite or vermiculite"),
    (12.0, 12.6, "smectite with Na, sepiolite"),
    (10.3, 10.6, "palygorskite"),
    (9.85, 10.2, "mica, illite, collapsed smectite, hydrated halloysite"),
    (9.50, 9.75, "paragonite, margarite, clintonite, minnesotaite"),
    (9.25, 9.42, "talc"),
    (9.10, 9.24, "pyrophyllite"),
    (8.90, 9.09, "zeolite of the heulandite group"),
    (8.30, 8.55, "amphibole"),
    (7.90, 8.02, "beryl"),
    (7.50, 7.65, "gypsum"),
    (7.05, 7.40, "kaolinite, serpentine or chlorite 002"),
    (6.35, 6.50, "feldspar"),
    (6.05, 6.18, "boehmite"),
    (5.95, 6.05, "bassanite"),
    (4.82, 4.87, "gibbsite"),
    (4.42, 4.52, "hk band of clay minerals"),
    (4.24, 4.28, "quartz, gypsum"),
    (4.15, 4.20, "goethite"),
    (4.00, 4.06, "feldspar, cristobalite"),
    (3.56, 3.60, "kaolinite 002"),
    (3.52, 3.55, "chlorite 004"),
    (3.48, 3.52, "anhydrite, anatase"),
    (3.33, 3.36, "quartz, mica 003"),
    (3.22, 3.26, "potassium feldspar, rutile"),
    (3.17, 3.21, "plagioclase"),
    (3.02, 3.05, "calcite"),
    (2.98, 3.01, "pyroxene, bassanite"),
    (2.87, 2.90, "dolomite"),
    (2.78, 2.80, "siderite"),
    (2.69, 2.71, "hematite, pyrite"),
    (2.51, 2.54, "magnetite, hematite"),
)


def suggestions(d_spacing: float) -> tuple[str, ...]:
    """What a line at a spacing [angstrom] might be, from usual companions and first lines of sheet silicates."""
    named = [name for low, high, name in _USUAL_LINES if low <= d_spacing <= high]
    near = [
        phase.name
        for phase in all_phases()
        for state in phase.states[:1]
        if state.spacing and abs(state.spacing - d_spacing) < 0.006 * d_spacing and phase.occurrence == "common"
    ]
    return tuple(dict.fromkeys([*named, *(n for n in near if not any(n.lower() in text for text in named))]))[:5]


def above_background(item: Prepared, total: NDArray[np.float64]) -> NDArray[np.float64]:
    """What stands above the calculated scan and the smooth background: unclaimed lines and noise, shape (n,)."""
    terms = np.hstack([item.smooth, item.strange]) * item.weight[:, None]
    size = np.sqrt((terms**2).sum(axis=0))
    found, *_ = np.linalg.lstsq(terms / size, (item.scan.counts - total) * item.weight, rcond=1e-10)
    smooth = item.smooth @ (found / size)[: item.smooth.shape[1]]
    return np.asarray(item.scan.counts - total - smooth)


def unassigned_lines(arena: Arena, selection: Selection, labels: Sequence[str]) -> tuple[UnassignedLine, ...]:
    """Observed lines of which the kept phases explain less than half.

    Parameters
    ----------
    arena : Arena
    selection : Selection
    labels : sequence of str

    Returns
    -------
    tuple of UnassignedLine
        By scan and rising angle.
    """
    out = []
    for k, item in enumerate(arena.prepared):
        total = arena.columns[k][:, list(selection.active)] @ (selection.fit.amounts * selection.fit.scales[k])
        shift = item.view.displacement
        rest = above_background(item, total)
        for peak in item.peaks:
            if peak.height_sigma < _SIGNIFICANT:
                continue
            near = np.abs(item.scan.two_theta - peak.two_theta) <= max(0.4 * peak.fwhm, 0.06)
            if not near.any() or float(total[near].max()) > _EXPLAINED * peak.height:
                continue
            left = float(rest[near].mean())
            error = float(np.sqrt((item.weight[near] ** -2).mean() / near.sum()))
            if left < (1 - _EXPLAINED) * 0.5 * peak.height or left < _SIGNIFICANT * error:
                continue
            true = peak.two_theta - float(displacement_shift(np.array(peak.two_theta), shift, item.view.grid.instrument))
            spacing = float(item.scan.radiation.d_spacing(true))
            out.append(
                UnassignedLine(
                    scan=labels[k],
                    two_theta=round(peak.two_theta, 3),
                    d_spacing=round(spacing, 4),
                    height_sigma=round(peak.height_sigma, 1),
                    suggestions=suggestions(spacing),
                )
            )
    return tuple(out)
