"""From fitted amounts to weight percent: normalisation, covariance, group totals."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import GROUPS, load_phase
from xrdmica.diffraction.columns import Component

__all__ = ["TOTALS", "Shares", "expandable_share", "membership", "normalise"]

FloatArray = NDArray[np.float64]
TOTALS = (*(group for group in GROUPS if group != "companion"), "expandable layers")


@dataclass(frozen=True, eq=False)
class Shares:
    """Normalised weights of the phases that make up 100 %.

    Attributes
    ----------
    places : tuple of int
        Candidates that count.
    weights : ndarray, shape (m,)
        Sum 1.
    covariance : ndarray, shape (m, m)
        From the fit, carried through the normalisation.
    """

    places: tuple[int, ...]
    weights: FloatArray
    covariance: FloatArray


def normalise(amounts: FloatArray, covariance: FloatArray, places: Sequence[int]) -> Shares:
    """Weights and their covariance when some candidates are set to 100 %.

    Parameters
    ----------
    amounts : ndarray, shape (j,)
    covariance : ndarray, shape (j, j)
        Of the amounts.
    places : sequence of int
        Candidates that count.

    Returns
    -------
    Shares
        With G = (1 - w 1^T)/S, cov(w) = G cov G^T: the correlations keep the sum at 100 %.
    """
    chosen = list(places)
    part = amounts[chosen]
    total = float(part.sum())
    weights = part / total
    gradient = (np.eye(len(chosen)) - np.outer(weights, np.ones(len(chosen)))) / total
    return Shares(tuple(chosen), weights, gradient @ covariance[np.ix_(chosen, chosen)] @ gradient.T)


def expandable_share(components: Sequence[Component | None]) -> float:
    """Share of a phase's layers that swell: 1 for smectites, the smectite layers of an interstratified phase, else 0."""
    component = next((c for c in components if c is not None), None)
    if component is None:
        return 0.0
    phase = load_phase(component.phase)
    if phase.stack is None:
        return 1.0 if phase.group == "smectite" else 0.0
    share = 0.0
    fraction = component.fraction if component.fraction is not None else phase.stack.fraction[1]
    for kind, part in ((phase.stack.first, fraction), (phase.stack.second, 1.0 - fraction)):
        if load_phase(kind).group == "smectite":
            share += part
    return share


def membership(group: str, phases: Sequence[str], expandable: Mapping[str, float]) -> FloatArray:
    """How much of each phase counts to a group total, shape (m,)."""
    if group == "expandable layers":
        return np.array([expandable.get(phase, 0.0) for phase in phases])
    return np.array([1.0 if load_phase(phase).group == group else 0.0 for phase in phases])
