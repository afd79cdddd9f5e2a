"""Fitting a sample: lmfit moves the few non-linear parameters, amounts and backgrounds are solved linearly inside."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import FitError
from xrdmica.matching.linear import project, project_vector, system, tied_fit
from xrdmica.matching.model import Evaluation, SampleModel, knob_derivative

__all__ = ["Fitted", "Jacobian", "evaluate", "fit_model", "jacobian", "residual"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Jacobian:
    """Derivatives of the weighted, background-free residual.

    Attributes
    ----------
    linear : ndarray, shape (n, a)
        With respect to the amounts that are not zero.
    scales : ndarray, shape (n, k - 1)
        With respect to the logarithms of the scales, all but the first.
    knobs : ndarray, shape (n, p)
        With respect to the non-linear parameters.
    active : ndarray of int, shape (a,)
        Which amounts.
    """

    linear: FloatArray
    scales: FloatArray
    knobs: FloatArray
    active: NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Fitted:
    """A finished fit.

    Attributes
    ----------
    model : SampleModel
    evaluation : Evaluation
        At the best point.
    points : int
        Points minus background terms, all scans.
    evaluations : int
        Full evaluations of the forward model, derivatives counted by their cost.
    converged : bool
    message : str
    """

    model: SampleModel
    evaluation: Evaluation
    points: int
    evaluations: int
    converged: bool
    message: str

    @property
    def reduced_chi_square(self) -> float:
        """Chi-square per degree of freedom."""
        freedom = self.points - len(self.model.knobs) - int((self.evaluation.amounts > 0).sum())
        return self.evaluation.chi_square / max(freedom, 1)


def evaluate(model: SampleModel, values: FloatArray, scales: FloatArray | None = None) -> Evaluation:
    """Columns at given parameter values, with the best amounts and scales.

    Parameters
    ----------
    model : SampleModel
    values : ndarray, shape (p,)
    scales : ndarray, shape (k,), optional
        Start values for the alternation, from an evaluation nearby.
    """
    views = model.views(values)
    columns = model.columns(values, views)
    systems = [
        system(a, item.scan.counts, item.weight, item.basis) for a, item in zip(columns, model.prepared, strict=True)
    ]
    fit = tied_fit(systems, scales, rounds=8 if scales is None else 4)
    return Evaluation(values.copy(), views, columns, fit.amounts, fit.scales, fit.chi_square)


def residual(model: SampleModel, evaluation: Evaluation) -> FloatArray:
    """Weighted, background-free residual of all scans with the prior terms appended, shape (n + p,)."""
    parts = [
        project_vector(item.scan.counts - scale * (a @ evaluation.amounts), item.weight, item.basis)
        for a, scale, item in zip(evaluation.columns, evaluation.scales, model.prepared, strict=True)
    ]
    priors = [
        0.0 if knob.prior is None else -(value - knob.centre) / knob.prior
        for knob, value in zip(model.knobs, evaluation.values, strict=True)
    ]
    return np.concatenate([*parts, np.array(priors)])


def jacobian(model: SampleModel, evaluation: Evaluation) -> Jacobian:
    """All derivatives of the calculated scans, weighted and freed of the background, with rows for the priors."""
    sizes = [item.scan.counts.size for item in model.prepared]
    edges = np.cumsum([0, *sizes])
    total = int(edges[-1]) + len(model.knobs)
    active = np.flatnonzero(evaluation.amounts > 0)
    linear = np.zeros((total, active.size))
    scales = np.zeros((total, len(sizes)))
    knobs = np.zeros((total, len(model.knobs)))
    for k, item in enumerate(model.prepared):
        rows = slice(edges[k], edges[k + 1])
        a = project(evaluation.columns[k][:, active], item.weight, item.basis) * evaluation.scales[k]
        linear[rows] = a
        scales[rows, k] = a @ evaluation.amounts[active]
    for number, knob in enumerate(model.knobs):
        for k, slope in knob_derivative(model, evaluation, number).items():
            item = model.prepared[k]
            knobs[edges[k] : edges[k + 1], number] = project_vector(slope, item.weight, item.basis)
        if knob.prior is not None:
            knobs[edges[-1] + number, number] = 1.0 / knob.prior
    return Jacobian(linear, scales[:, 1:], knobs, active)


class _Problem:
    """What lmfit calls: remembers the last point, so that residual and derivative share one evaluation."""

    def __init__(self, model: SampleModel) -> None:
        self.model = model
        self.last: Evaluation | None = None
        self.best: tuple[float, Evaluation] | None = None
        self.cost = 0.0

    def at(self, values: FloatArray) -> Evaluation:
        if self.last is None or not np.array_equal(values, self.last.values):
            start = None if self.last is None else self.last.scales
            self.last = evaluate(self.model, values, start)
            self.cost += 1.0
        return self.last

    def values(self, params: object) -> FloatArray:
        return np.array([params[knob.name].value for knob in self.model.knobs])  # type: ignore[index]

    def residual(self, params: object) -> FloatArray:
        evaluation = self.at(self.values(params))
        out = residual(self.model, evaluation)
        squared = float(out @ out)
        if self.best is None or squared < self.best[0]:
            self.best = (squared, evaluation)
        return out

    def derivative(self, params: object) -> FloatArray:
        """Kaufman's form: the part of the change that no amount, scale or background can take up."""
        evaluation = self.at(self.values(params))
        found = jacobian(self.model, evaluation)
        touched = sum(len(knob.scans) for knob in self.model.knobs)
        self.cost += touched / max(len(self.model.prepared) * len(self.model.candidates), 1)
        basis, _ = np.linalg.qr(np.column_stack([found.linear, found.scales]))
        return np.asarray(-(found.knobs - basis @ (basis.T @ found.knobs)))


def fit_model(model: SampleModel, *, rounds: int = 12, tolerance: float = 1e-4) -> Fitted:
    """Fit the non-linear parameters by variable projection.

    Parameters
    ----------
    model : SampleModel
    rounds : int
        Largest number of accepted or tried steps.
    tolerance : float
        Relative change of chi-square and parameters at which the fit stops.

    Returns
    -------
    Fitted

    Raises
    ------
    FitError
        If there is nothing to fit.

    References
    ----------
    Golub & Pereyra (1973) SIAM J. Numer. Anal. 10, 413; Kaufman (1975) BIT 15, 49; Levenberg-Marquardt through lmfit.
    """
    import lmfit

    if not model.candidates:
        raise FitError("no phase to fit", fix="give scans with basal lines or allow more phases")
    params = lmfit.Parameters()
    for knob in model.knobs:
        params.add(knob.name, value=knob.value, min=knob.low, max=knob.high)
    problem = _Problem(model)
    fitter = lmfit.Minimizer(problem.residual, params, scale_covar=False, calc_covar=False, nan_policy="raise")
    outcome = fitter.leastsq(
        params, Dfun=problem.derivative, col_deriv=False, max_nfev=rounds, ftol=tolerance, xtol=tolerance, gtol=0.0
    )
    assert problem.best is not None
    points = sum(item.scan.counts.size - item.basis.shape[1] for item in model.prepared)
    converged = bool(outcome.success) and not outcome.aborted
    message = "converged" if converged else "stopped at the limit of steps; the best point found is reported"
    return Fitted(model, problem.best[1], points, int(np.ceil(problem.cost)), converged, message)
