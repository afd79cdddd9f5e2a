"""How sure the proportions are: fit covariance, and what the scans do not fix."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.columns import View, component_columns
from xrdmica.diffraction.optics import lorentz_factor
from xrdmica.matching.linear import system, tied_fit
from xrdmica.matching.model import Candidate
from xrdmica.matching.prepare import Prepared, background_terms
from xrdmica.matching.solve import Fitted, jacobian

__all__ = ["detection_limits", "fit_covariance", "model_shifts"]

FloatArray = NDArray[np.float64]
# Relative difference of orientation between the phases of one mount: about 10 % is common practice; a little more, because
# the Soller openings of the user's instrument are rarely known either.
_PHASE_SPREAD = 0.12
_COMPOSITION = 0.05  # relative error of |F|^2 from composition and displacement parameters, common practice
_STANDING = 0.5  # part of the neutral/ionic difference that counts as one standard error
_STIFFNESS = (3, 6)
_DETECTION = 3.0  # sigma


def fit_covariance(fitted: Fitted) -> tuple[FloatArray, FloatArray]:
    """Covariance of amounts and knobs from the full linearised problem.

    Parameters
    ----------
    fitted : Fitted

    Returns
    -------
    amounts : ndarray, shape (j, j)
        Zero rows for amounts at zero.
    knobs : ndarray, shape (p,)
        Standard errors.

    Notes
    -----
    Scaled up by the reduced chi-square when that is above 1, never down.
    """
    found = jacobian(fitted.model, fitted.evaluation)
    full = np.column_stack([found.linear, found.scales, found.knobs])
    size = np.sqrt((full**2).sum(axis=0))
    size[size == 0] = 1.0
    normal = (full / size).T @ (full / size)
    inverse = np.linalg.pinv(normal, rcond=1e-11, hermitian=True) / np.outer(size, size)
    inverse *= max(1.0, fitted.reduced_chi_square)
    a = found.active.size
    amounts = np.zeros((fitted.evaluation.amounts.size,) * 2)
    amounts[np.ix_(found.active, found.active)] = inverse[:a, :a]
    errors = np.sqrt(np.maximum(np.diag(inverse)[a + found.scales.shape[1] :], 0.0))
    return amounts, errors


def _refit(columns: Sequence[FloatArray], prepared: Sequence[Prepared], scales: FloatArray) -> FloatArray:
    """Amounts when only the linear part is solved again."""
    systems = [system(a, item.scan.counts, item.weight, item.basis) for a, item in zip(columns, prepared, strict=True)]
    return tied_fit(systems, scales, rounds=5).amounts


def _share(amounts: FloatArray, places: Sequence[int]) -> FloatArray:
    part = amounts[list(places)]
    total = part.sum()
    return np.asarray(part / total) if total > 0 else part


def _one_phase_tilted(views: Sequence[View], columns: Sequence[FloatArray], place: int) -> list[FloatArray]:
    """Columns with the orientation spread of one phase made wider."""
    out = []
    for view, column in zip(views, columns, strict=True):
        changed = column
        if view.mount == "oriented":
            instrument, spread = view.grid.instrument, view.orientation_spread
            new = lorentz_factor(view.two_theta, spread * (1 + _PHASE_SPREAD), instrument)
            changed = column.copy()
            changed[:, place] *= new / lorentz_factor(view.two_theta, spread, instrument)
        out.append(changed)
    return out


def model_shifts(fitted: Fitted, places: Sequence[int]) -> FloatArray:
    """Changes of the weights under assumptions that the scans do not fix, each taken as one standard error.

    Parameters
    ----------
    fitted : Fitted
    places : sequence of int, length m
        Candidates that make up 100 %.

    Returns
    -------
    ndarray, shape (v, m)
        One row per assumption: the orientation spread and the composition of each phase, form factors, background.
    """
    model, evaluation = fitted.model, fitted.evaluation
    values, scales, columns = evaluation.values, evaluation.scales, evaluation.columns
    usual = _share(evaluation.amounts, places)
    shifts = []
    for place in places:
        if not load_phase(model.candidates[place].phase).is_sheet_silicate:
            continue
        tilted = _one_phase_tilted(evaluation.views, columns, place)
        shifts.append(_share(_refit(tilted, model.prepared, scales), places) - usual)
        scaled = evaluation.amounts.copy()
        scaled[place] *= 1 + _COMPOSITION
        shifts.append(_share(scaled, places) - usual)
    everything = range(len(model.candidates))
    neutral = [
        component_columns([model.component(j, k, values) for j in everything], view, "neutral")
        for k, view in enumerate(evaluation.views)
    ]
    shifts.append(_STANDING * (_share(_refit(neutral, model.prepared, scales), places) - usual))
    for terms in _STIFFNESS:
        other = [item.with_terms(background_terms(item.scan.two_theta, terms), item.strange) for item in model.prepared]
        shifts.append(_STANDING * (_share(_refit(columns, other, scales), places) - usual))
    return np.array(shifts)


def detection_limits(fitted: Fitted, extra: Sequence[Candidate], places: Sequence[int]) -> tuple[FloatArray, FloatArray]:
    """Smallest weights that would be told from none at 3 sigma.

    Parameters
    ----------
    fitted : Fitted
    extra : sequence of Candidate, length e
        Phases outside the fit.
    places : sequence of int
        Fitted candidates that make up 100 %.

    Returns
    -------
    fitted_limits : ndarray, shape (j,)
        For the candidates in the fit [fraction]; nan where the scans show nothing of a phase.
    extra_limits : ndarray, shape (e,)
        For the others [fraction].
    """
    model, evaluation = fitted.model, fitted.evaluation
    size = len(model.candidates)
    gram = np.zeros((size + len(extra),) * 2)
    for k, (item, view, scale) in enumerate(zip(model.prepared, evaluation.views, evaluation.scales, strict=True)):
        more = component_columns([one.components[k] for one in extra], view)
        columns = np.hstack([evaluation.columns[k], more])
        gram += scale**2 * system(columns, item.scan.counts, item.weight, item.basis).gram
    active = np.flatnonzero(evaluation.amounts > 0)
    total = max(float(evaluation.amounts[list(places)].sum()), 1e-300)
    noise = np.sqrt(max(1.0, fitted.reduced_chi_square))
    limits = np.full(size + len(extra), np.nan)
    for j in range(size + len(extra)):
        others = active[active != j]
        free = gram[j, j]
        if others.size:
            taken = np.linalg.lstsq(gram[np.ix_(others, others)], gram[others, j], rcond=1e-10)[0]
            free = gram[j, j] - float(gram[j, others] @ taken)
        if free > 1e-9 * gram[j, j] > 0:
            limits[j] = _DETECTION * noise / np.sqrt(free) / total
    return limits[:size], limits[size:]

