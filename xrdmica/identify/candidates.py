"""Which phases could be in the sample at all: their strongest lines stand where the scans have something."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.columns import Component, ExpectedLine, components_for, expected_lines
from xrdmica.matching.model import spacing_limits
from xrdmica.matching.prepare import Prepared
from xrdmica.scans.peaks import Peak

__all__ = ["BASE_TOLERANCE", "Hopeful", "hopefuls", "line_tolerance", "match_peak"]

_STRONG = 0.6  # share of the strongest line from which a line must not be missing
BASE_TOLERANCE = 0.16  # degree: 0.3 mm of displacement and reading error
_COMPANION_STRONG = 0.35
_FRACTIONS = 4
_MOST = 0.6
_STACK_RANGES = {"kaolin": (6.9, 9.5)}  # angstrom: where broad composite lines of a stack stand; others from 9.3 to 20
_STACK_USUAL = (9.3, 20.0)
_BROAD = 0.28  # degree


@dataclass(frozen=True)
class Hopeful:
    """A phase considered, with all its options per scan.

    Attributes
    ----------
    phase : Phase
    options : tuple, length k
        Per scan, the components it may have there.
    lines : tuple, length k
        Per scan and option, the lines to expect.
    met : tuple of bool, length k
        Per scan, whether a strong line of some option meets a peak.
    """

    phase: Phase
    options: tuple[tuple[Component, ...], ...]
    lines: tuple[tuple[tuple[ExpectedLine, ...], ...], ...]
    met: tuple[bool, ...]

    @property
    def plausible(self) -> bool:
        """Whether it goes on to the comparison by fit: met in most of the scans that could show it."""
        able = [met for met, options in zip(self.met, self.options, strict=True) if options]
        return bool(able) and sum(able) >= max(1.0, _MOST * len(able))


def line_tolerance(component: Component, line: ExpectedLine, item: Prepared) -> float:
    """How far from `line` a peak may stand and still be that line [degree]: displacement plus the range of the spacing."""
    if not component.states:
        return BASE_TOLERANCE
    if component.fraction is not None:
        return 0.6
    low, high = spacing_limits(component)[0]
    tube = item.scan.radiation
    middle = component.spacings[0]
    reach = max(high - middle, middle - low) / middle
    theta = np.radians(line.two_theta / 2)
    slack = float(np.degrees(2 * np.tan(theta) * reach)) if tube else 0.0
    return BASE_TOLERANCE + slack


def match_peak(peaks: Sequence[Peak], two_theta: float, tolerance: float) -> Peak | None:
    """The peak nearest to an angle, if one lies within the tolerance or the angle lies in its upper half."""
    best: Peak | None = None
    for peak in peaks:
        reach = max(tolerance, 0.35 * peak.fwhm)
        distance = abs(peak.two_theta - two_theta)
        if distance <= reach and (best is None or distance < abs(best.two_theta - two_theta)):
            best = peak
    return best


def _options(phase: Phase, item: Prepared) -> tuple[Component, ...]:
    plain = components_for(phase, item.scan.treatment)
    if phase.stack is None:
        return plain
    low, _, high = phase.stack.fraction
    shares = np.linspace(low, high, _FRACTIONS + 2)[1:-1]
    return tuple(replace(option, fraction=round(float(share), 3)) for option in plain for share in shares)


def _meets(component: Component, lines: Sequence[ExpectedLine], item: Prepared) -> bool:
    strong = [line for line in lines if line.share >= _STRONG]
    return any(match_peak(item.peaks, line.two_theta, line_tolerance(component, line, item)) is not None for line in strong)


def _broad_composite(phase: Phase, item: Prepared) -> bool:
    """Whether the scan has a line broad enough and at a spacing where an interstratified phase could put one."""
    first = load_phase(phase.stack.first).group if phase.stack else ""
    low, high = _STACK_RANGES.get(first, _STACK_USUAL)
    return any(low <= peak.d_spacing <= high and peak.fwhm >= max(_BROAD, 1.5 * item.view.width) for peak in item.peaks)


def _consider(phase: Phase, item: Prepared) -> tuple[tuple[Component, ...], tuple[tuple[ExpectedLine, ...], ...], bool]:
    """Options of a phase in one scan, their lines, and whether the scan has something where they are strongest."""
    options = _options(phase, item)
    if phase.stack is not None:
        return options, tuple(() for _ in options), bool(options) and _broad_composite(phase, item)
    lines = tuple(expected_lines(option, item.view) for option in options)
    if not phase.is_sheet_silicate:
        return options, lines, any(_companion_meets(found, item) for found in lines)
    return options, lines, any(_meets(option, found, item) for option, found in zip(options, lines, strict=True))


def _companion_meets(lines: Sequence[ExpectedLine], item: Prepared) -> bool:
    """A companion needs its strongest line, and half of its strong ones."""
    strong = sorted((line for line in lines if line.share >= _COMPANION_STRONG), key=lambda line: -line.share)
    found = [match_peak(item.peaks, line.two_theta, BASE_TOLERANCE) is not None for line in strong]
    return bool(found) and found[0] and sum(found) >= len(found) / 2


def hopefuls(phases: Sequence[Phase], prepared: Sequence[Prepared]) -> tuple[Hopeful, ...]:
    """Consider every phase against the peaks of every scan.

    Parameters
    ----------
    phases : sequence of Phase
    prepared : sequence of Prepared, length k

    Returns
    -------
    tuple of Hopeful
        One per phase, in the same order.
    """
    out = []
    for phase in phases:
        considered = [_consider(phase, item) for item in prepared]
        if not phase.is_sheet_silicate and any(item.scan.mount == "random" for item in prepared):
            # coarse companions may stay out of an oriented clay mount: not being there says nothing
            considered = [
                one if one[2] or item.scan.mount == "random" else ((), (), False)
                for one, item in zip(considered, prepared, strict=True)
            ]
        options, lines, met = zip(*considered, strict=True)
        out.append(Hopeful(phase, options, lines, met))
    return tuple(out)
