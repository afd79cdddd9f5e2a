"""What single lines of a scan might be, before anything is decided: a help for the eye, no identification."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from xrdmica.crystals.library import all_phases
from xrdmica.diffraction.columns import Component, View, components_for, cross_lines, expected_lines
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.identify.unassigned import suggestions
from xrdmica.scans.peaks import Peak
from xrdmica.scans.scan import Scan

__all__ = ["likely_assignments"]

_REACH = 0.15  # degree: reading error and a displacement of about 0.2 mm
_LEAST_SHARE = 0.03
_CROSSED_SHARE = 0.3
_MOST = 4
_RARE = 0.4  # how much less a rare phase counts
_STACKED = 0.4  # composite lines of interstratified phases may stand nearly anywhere


def likely_assignments(scan: Scan, peaks: Sequence[Peak]) -> tuple[tuple[str, ...], ...]:
    """What each line of a scan might be, the likeliest first.

    The calculated lines of all library phases in the state of the mount are compared with each position; nearness,
    strength of the calculated line, and how common the phase is make the order. What no calculated line explains is
    looked up among usual lines of companions.

    Parameters
    ----------
    scan : Scan
        Its treatment and mount say which lines to expect.
    peaks : sequence of Peak, length n

    Returns
    -------
    tuple of tuple of str, length n
        Such as ``("chlorite 002", "serpentine 001")``.
    """
    view = View(make_grid(scan.two_theta, scan.radiation, Instrument()), scan.two_theta, scan.mount)
    table = _calculated_lines(scan, view)
    out = []
    for peak in peaks:
        reach = max(_REACH, 0.35 * peak.fwhm)
        scored: dict[str, float] = {}
        for two_theta, worth, words in table:
            off = (peak.two_theta - two_theta) / reach
            if abs(off) <= 1.0:
                scored[words] = max(scored.get(words, 0.0), worth * float(np.exp(-2 * off**2)))
        ranked = sorted(scored, key=lambda words: (-scored[words], words))[:_MOST]
        out.append(tuple(ranked) if ranked else suggestions(peak.d_spacing))
    return tuple(out)


def _calculated_lines(scan: Scan, view: View) -> list[tuple[float, float, str]]:
    """Angle [degree], worth and words of every line that some phase would give."""
    rows: list[tuple[float, float, str]] = []
    for phase in all_phases():
        rank = (1.0 if phase.occurrence == "common" else _RARE) * (1.0 if phase.stack is None else _STACKED)
        for component in components_for(phase, scan.treatment):
            for line in expected_lines(component, view, _LEAST_SHARE):
                name = phase.name.lower()
                label = f"{name} 00{line.order}" if line.order else name
                rows.append((line.two_theta, rank * float(np.sqrt(line.share)), label))
            if scan.mount == "random" and component.states:
                rows += _crossed(component, view, rank, phase.name.lower())
    return rows


def _crossed(component: Component, view: View, rank: float, name: str) -> list[tuple[float, float, str]]:
    """Strong lines of a layered phase that are not basal."""
    lines = cross_lines(component, view)
    if lines is None or not lines.d_spacing.size:
        return []
    angle = view.grid.radiation.two_theta(lines.d_spacing)
    area = lines.structure_factor_squared / np.sin(np.radians(angle) / 2) ** 2
    share = area / area.max()
    return [
        (float(a), rank * float(np.sqrt(s)), f"{name} hkl") for a, s in zip(angle, share, strict=True) if s >= _CROSSED_SHARE
    ]
