"""Specimen displacement and basal spacings from the peaks, before any pattern is compared."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from xrdmica.diffraction.columns import Component, ExpectedLine
from xrdmica.diffraction.optics import displacement_shift
from xrdmica.identify.candidates import Hopeful
from xrdmica.matching.model import spacing_limits
from xrdmica.matching.prepare import Prepared

__all__ = ["align", "fitted_spacing"]

_LARGEST = 0.35  # mm
_USUAL = 0.12  # mm, spread of displacements met in practice (common practice)
_SHARP = 0.035  # degree


def _expected_table(hopeful: Sequence[Hopeful], index: int, item: Prepared) -> np.ndarray[tuple[int, int], np.dtype[np.float64]]:
    """Rows (angle, share, slack) of the lines that plausible, undisturbed phases would give in one scan."""
    rows = []
    for one in hopeful:
        if not one.plausible or one.phase.stack is not None:
            continue
        for option, lines in zip(one.options[index], one.lines[index], strict=True):
            slack = 0.0
            if option.states:
                low, high = spacing_limits(option)[0]
                slack = (high - low) / option.spacings[0] / 4
            rows += [(x.two_theta, x.share, float(np.degrees(2 * np.tan(np.radians(x.two_theta / 2)) * slack))) for x in lines]
    return np.array(rows, dtype=float).reshape(-1, 3)


def _displacement(item: Prepared, table: np.ndarray[tuple[int, int], np.dtype[np.float64]]) -> float:
    """Displacement at which most of what is seen falls on expected lines, weighed against its usual size [mm]."""
    peaks = [p for p in item.peaks if p.fwhm < 0.8]
    if not peaks or not len(table):
        return 0.0
    seen = np.array([p.two_theta for p in peaks])
    worth = np.log1p(np.array([p.height_sigma for p in peaks]))
    error = np.array([min(p.two_theta_error, 0.1) for p in peaks])
    best, best_score = 0.0, -np.inf
    for trial in np.linspace(-_LARGEST, _LARGEST, 57):
        true = seen - displacement_shift(seen, float(trial), item.view.grid.instrument)
        width = _SHARP**2 + error[:, None] ** 2 + table[None, :, 2] ** 2
        nearness = np.exp(-((true[:, None] - table[None, :, 0]) ** 2) / (2 * width))
        near = np.sqrt(table[None, :, 1]) * _SHARP / np.sqrt(width) * nearness
        score = float(worth @ near.max(axis=1)) - 0.5 * (trial / _USUAL) ** 2
        if score > best_score + 1e-9:
            best, best_score = float(trial), score
    return best


def align(hopeful: Sequence[Hopeful], prepared: Sequence[Prepared]) -> tuple[Prepared, ...]:
    """Find each scan's displacement from how its peaks fall on expected lines.

    Parameters
    ----------
    hopeful : sequence of Hopeful
    prepared : sequence of Prepared, length k

    Returns
    -------
    tuple of Prepared, length k
        With the displacement set in their views.
    """
    return tuple(item.moved(_displacement(item, _expected_table(hopeful, k, item))) for k, item in enumerate(prepared))


def fitted_spacing(component: Component, lines: Sequence[ExpectedLine], item: Prepared) -> Component:
    """The component with the basal spacing that its matching peaks show, kept inside the limits of its file.

    Parameters
    ----------
    component : Component
    lines : sequence of ExpectedLine
        Of that component.
    item : Prepared
        Scan with its displacement set.
    """
    if not component.states or component.fraction is not None:
        return component
    low, high = spacing_limits(component)[0]
    tube, instrument = item.scan.radiation, item.view.grid.instrument
    found, weights = [], []
    for line in lines:
        if line.share < 0.08:
            continue
        for peak in item.peaks:
            true = peak.two_theta - float(displacement_shift(np.array(peak.two_theta), item.view.displacement, instrument))
            spacing = line.order * float(tube.d_spacing(true))
            if low - 0.03 <= spacing <= high + 0.03:
                error = spacing * np.radians(np.hypot(peak.two_theta_error, 0.02)) / (2 * np.tan(np.radians(true / 2)))
                found.append(spacing)
                weights.append(1.0 / error**2)
    if not found:
        return component
    mean = float(np.clip(np.average(found, weights=weights), low, high))
    return replace(component, spacings=(mean,))
