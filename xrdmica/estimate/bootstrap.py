"""Parametric bootstrap: scans drawn again from the fitted curves, fitted again, and what that does to the weights."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrdmica.matching.solve import Fitted, fit_model

__all__ = ["Bootstrap", "drawn_amounts", "shifted_limits"]

FloatArray = NDArray[np.float64]
_ROUNDS = 6  # steps of each refit, which starts at the best point


@dataclass(frozen=True)
class Bootstrap:
    """How often to draw.

    Attributes
    ----------
    count : int
        Draws, 20 or more to say anything about a 95 % interval.
    seed : int
    on_draw : callable or None
        Called with (draws done, draws) after each.
    """

    count: int
    seed: int = 0
    on_draw: Callable[[int, int], None] | None = None


def drawn_amounts(fitted: Fitted, bootstrap: Bootstrap, name: str) -> FloatArray:
    """Amounts of all candidates in refits of drawn scans.

    Parameters
    ----------
    fitted : Fitted
    bootstrap : Bootstrap
    name : str
        Of the sample, so that each sample draws numbers of its own.

    Returns
    -------
    ndarray, shape (n, j)
        One row per draw.

    References
    ----------
    Efron & Tibshirani (1993), An Introduction to the Bootstrap, chapter 6.
    """
    rng = np.random.default_rng([bootstrap.seed, *name.encode()])
    evaluation = fitted.evaluation
    values = evaluation.values
    # start every refit at the best point
    knobs = tuple(
        replace(knob, value=float(np.clip(value, knob.low + 1e-6, knob.high - 1e-6)))
        for knob, value in zip(fitted.model.knobs, values, strict=True)
    )
    means = _means(fitted)
    out = np.zeros((bootstrap.count, evaluation.amounts.size))
    for draw in range(bootstrap.count):
        prepared = []
        for item, mean in zip(fitted.model.prepared, means, strict=True):
            # counts may be scaled (counts per second): the drawn noise has the scan's own errors
            scale = np.maximum(item.scan.sigma, 1e-9) ** 2 / np.maximum(item.scan.counts, 1.0)
            factor = float(np.median(scale))
            counts = factor * rng.poisson(np.maximum(mean, 0.0) / factor)
            prepared.append(replace(item, scan=replace(item.scan, counts=counts.astype(float))))
        model = replace(fitted.model, prepared=tuple(prepared), knobs=knobs)
        out[draw] = fit_model(model, rounds=_ROUNDS).evaluation.amounts
        if bootstrap.on_draw is not None:
            bootstrap.on_draw(draw + 1, bootstrap.count)
    return out


def _means(fitted: Fitted) -> list[FloatArray]:
    """Calculated scans with their background; each (n_k,)."""
    evaluation = fitted.evaluation
    out = []
    for k, item in enumerate(fitted.model.prepared):
        parts = evaluation.columns[k] @ (evaluation.amounts * evaluation.scales[k])
        rest = (item.scan.counts - parts) * item.weight
        out.append(parts + item.basis @ (item.basis.T @ rest) / item.weight)
    return out


def shifted_limits(value: float, draws: FloatArray, other: float) -> tuple[float, float]:
    """95 % limits of a share from its draws, widened by the standard error of what drawing does not vary.

    Parameters
    ----------
    value : float
    draws : ndarray, shape (n,)
        Shares in the refits.
    other : float
        Standard error by orientation, composition, form factors and background.

    Returns
    -------
    tuple of float
        Inside 0 to 1, and not symmetric where the draws are not.
    """
    below, above = np.percentile(draws, [2.5, 97.5])
    low = value - np.hypot(max(value - float(below), 0.0), 1.959964 * other)
    high = value + np.hypot(max(float(above) - value, 0.0), 1.959964 * other)
    return max(float(low), 0.0), min(float(high), 1.0)
