"""Lines that no phase of the library could own: fitted as what they are, so that no phase is bent to explain them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xrdmica.diffraction.columns import ExpectedLine, cross_lines
from xrdmica.diffraction.peak_shape import pseudo_voigt
from xrdmica.identify.candidates import BASE_TOLERANCE, Hopeful, line_tolerance
from xrdmica.matching.prepare import Prepared
from xrdmica.scans.peaks import Peak

__all__ = ["with_strangers"]

_CLAIM = 0.2  # share of its strongest line from which a sheet silicate may claim a peak
_COMPANION_CLAIM = 0.05  # the second line of quartz has a fifth of the first, and that one lies under mica's third order
_OUT_OF_PROPORTION = 3.0  # times what a companion's strongest line allows; grains are coarse and their heights uneven
_WIDEST = 1.2  # degree: broader humps are left to the phases and the background


def _claimed(peak: Peak, hopeful: Sequence[Hopeful], index: int, item: Prepared) -> bool:
    for one in hopeful:
        if not one.plausible:
            continue
        if one.phase.stack is not None and peak.fwhm > 0.25:
            return True
        for option, lines in zip(one.options[index], one.lines[index], strict=True):
            if not option.states:
                if _companion_claims(peak, lines, item):
                    return True
                continue
            for line in lines:
                if line.share >= _CLAIM and abs(line.two_theta - peak.two_theta) <= line_tolerance(option, line, item):
                    return True
            if item.scan.mount == "random":
                crossed = cross_lines(option, item.view)
                if crossed is not None and _near_strong(peak, crossed.d_spacing, crossed.structure_factor_squared, item):
                    return True
    return False


def _companion_claims(peak: Peak, lines: Sequence[ExpectedLine], item: Prepared) -> bool:
    """Whether a companion has a line there that may be as high, judged by what stands at its strongest line."""
    strongest = max(lines, key=lambda line: line.share, default=None)
    if strongest is None:
        return False
    top = sum(p.height for p in item.peaks if abs(p.two_theta - strongest.two_theta) <= BASE_TOLERANCE)
    return any(
        line.share >= _COMPANION_CLAIM
        and abs(line.two_theta - peak.two_theta) <= BASE_TOLERANCE
        and peak.height <= _OUT_OF_PROPORTION * line.share * top
        for line in lines
    )


def _near_strong(peak: Peak, d_spacing: NDArray[np.float64], squared: NDArray[np.float64], item: Prepared) -> bool:
    angle = item.scan.radiation.two_theta(d_spacing)
    sine = np.sin(np.radians(angle) / 2)
    area = squared / sine**2
    strong = area >= _CLAIM * area.max()
    return bool((np.abs(angle[strong] - peak.two_theta) <= 0.2).any())


def with_strangers(hopeful: Sequence[Hopeful], prepared: Sequence[Prepared]) -> tuple[Prepared, ...]:
    """Add the lines that no plausible phase can claim to the background terms of their scan.

    Parameters
    ----------
    hopeful : sequence of Hopeful
    prepared : sequence of Prepared, length k

    Returns
    -------
    tuple of Prepared, length k
    """
    out = []
    for k, item in enumerate(prepared):
        strange = [p for p in item.peaks if p.fwhm < _WIDEST and p.height_sigma > 5 and not _claimed(p, hopeful, k, item)]
        if not strange:
            out.append(item)
            continue
        terms = [
            pseudo_voigt(item.scan.two_theta - peak.two_theta, factor * peak.fwhm, 0.5)
            for peak in strange
            for factor in (0.8, 1.3)  # two widths leave the true width free
        ]
        out.append(item.with_terms(item.smooth, np.column_stack(terms)))
    return tuple(out)
