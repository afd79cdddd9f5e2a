"""Curves of a finished fit, for figures and pages."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from xrdmica.diffraction.columns import expected_lines
from xrdmica.diffraction.optics import displacement_shift
from xrdmica.matching.prepare import Prepared
from xrdmica.matching.solve import Fitted
from xrdmica.results import Curve, Mark

__all__ = ["STRANGERS", "bare_curves", "fitted_curves"]

STRANGERS = "unassigned lines"
_VISIBLE = 0.003  # share of the calculated intensity below which unclaimed lines are not drawn
_LEAST_MARK = {True: 0.03, False: 0.15}


def _rounded(values: np.ndarray[tuple[int], np.dtype[np.float64]], digits: int = 1) -> tuple[float, ...]:
    return tuple(np.round(values, digits).tolist())


def _marks(fitted: Fitted, k: int) -> tuple[Mark, ...]:
    view = fitted.evaluation.views[k]
    marks = []
    for j, candidate in enumerate(fitted.model.candidates):
        component = fitted.model.component(j, k, fitted.evaluation.values)
        if component is None or fitted.evaluation.amounts[j] <= 0:
            continue
        layered = bool(component.states)
        for line in expected_lines(component, view, _LEAST_MARK[layered]):
            shift = float(displacement_shift(np.array(line.two_theta), view.displacement, view.grid.instrument))
            label = f"00{line.order}" if line.order else f"{line.d_spacing:.2f}"
            place = round(line.two_theta + shift, 3)
            marks.append(Mark(phase=candidate.phase, label=label, two_theta=place, d_spacing=round(line.d_spacing, 4)))
    return tuple(marks)


def fitted_curves(fitted: Fitted) -> tuple[Curve, ...]:
    """Observed, calculated, background and the contribution of each phase, scan by scan."""
    evaluation = fitted.evaluation
    out = []
    for k, item in enumerate(fitted.model.prepared):
        parts = evaluation.columns[k] * evaluation.amounts * evaluation.scales[k]
        rest = item.scan.counts - parts.sum(axis=1)
        terms = np.hstack([item.smooth, item.strange]) * item.weight[:, None]
        size = np.sqrt((terms**2).sum(axis=0))
        found = np.linalg.lstsq(terms / size, rest * item.weight, rcond=1e-10)[0] / size
        smooth = item.smooth @ found[: item.smooth.shape[1]]
        strange = np.asarray(item.strange @ found[item.smooth.shape[1] :])
        summed: dict[str, np.ndarray[tuple[int], np.dtype[np.float64]]] = {}
        for j, one in enumerate(fitted.model.candidates):
            # a companion may be two candidates, one per kind of mount
            if evaluation.amounts[j] > 0 and one.components[k] is not None:
                summed[one.phase] = summed.get(one.phase, np.zeros(parts.shape[0])) + parts[:, j]
        shown = {phase: _rounded(values) for phase, values in summed.items()}
        if strange.size and float(np.abs(strange).sum()) > _VISIBLE * float(np.abs(parts).sum()):
            shown[STRANGERS] = _rounded(strange)
        out.append(
            Curve(
                scan=item.label,
                two_theta=_rounded(item.scan.two_theta, 4),
                observed=_rounded(item.scan.counts, 2),
                calculated=_rounded(smooth + strange + parts.sum(axis=1)),
                background=_rounded(smooth),
                contributions=shown,
                marks=_marks(fitted, k),
            )
        )
    return tuple(out)


def bare_curves(prepared: Sequence[Prepared]) -> tuple[Curve, ...]:
    """Curves of a sample in which nothing was fitted: observed and background only."""
    return tuple(
        Curve(
            scan=item.label,
            two_theta=_rounded(item.scan.two_theta, 4),
            observed=_rounded(item.scan.counts, 2),
            background=_rounded(item.background),
        )
        for item in prepared
    )
