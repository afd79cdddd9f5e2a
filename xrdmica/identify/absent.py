"""Why a phase is not there: what stands, or does not stand, where its strongest line should be."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from xrdmica.diffraction.columns import Component, ExpectedLine
from xrdmica.diffraction.optics import displacement_shift
from xrdmica.identify.candidates import Hopeful, line_tolerance, match_peak
from xrdmica.matching.prepare import Prepared
from xrdmica.results import Evidence

__all__ = ["absent_evidence"]

_AGAINST = -1.0


def absent_evidence(one: Hopeful, prepared: Sequence[Prepared], labels: Sequence[str]) -> tuple[Evidence, ...]:
    """One fact per scan about a phase that was not kept.

    Parameters
    ----------
    one : Hopeful
    prepared : sequence of Prepared, length k
        Scans with their displacement.
    labels : sequence of str, length k

    Returns
    -------
    tuple of Evidence
        Empty for interstratified phases, whose lines stand where their share puts them.
    """
    out = []
    for k, (options, lines) in enumerate(zip(one.options, one.lines, strict=True)):
        best = [
            (option, max(found, key=lambda line: line.share)) for option, found in zip(options, lines, strict=True) if found
        ]
        if best:
            out.append(_fact(one, best, prepared[k], labels[k]))
    return tuple(out)


def _fact(one: Hopeful, best: Sequence[tuple[Component, ExpectedLine]], item: Prepared, label: str) -> Evidence:
    """What is seen at the strongest line of the state that comes nearest to being there."""
    instrument = item.view.grid.instrument
    for option, line in best:
        place = line.two_theta + float(displacement_shift(np.array(line.two_theta), item.view.displacement, instrument))
        peak = match_peak(item.peaks, place, line_tolerance(option, line, item))
        if peak is None:
            continue
        shift = float(displacement_shift(np.array(peak.two_theta), item.view.displacement, instrument))
        spacing = float(item.scan.radiation.d_spacing(peak.two_theta - shift))
        return Evidence(
            kind="overlap", weight=0.0, scan=label, two_theta=round(peak.two_theta, 4), d_observed=round(spacing, 4),
            d_error=round(peak.d_error, 4), order=line.order or None, d_expected=round(line.d_spacing, 4),
            text=f"a line stands at {spacing:.3f} Å, near {line.d_spacing:.3f} Å for {_called(line)} of {one.phase.name}, "
            "but the phases kept explain it",
        )  # fmt: skip
    option, line = best[0]
    return Evidence(
        kind="missing line", weight=_AGAINST, scan=label, order=line.order or None, d_expected=round(line.d_spacing, 4),
        text=f"{_called(line)} of {one.phase.name}, its strongest line, would be at {line.d_spacing:.3f} Å: nothing stands there",
    )  # fmt: skip


def _called(line: ExpectedLine) -> str:
    return f"00{line.order}" if line.order else "a line"
