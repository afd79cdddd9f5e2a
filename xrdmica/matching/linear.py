"""The linear inside of every fit: non-negative amounts from small normal equations, one system per scan."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["ScanSystem", "TiedFit", "nonnegative", "project", "project_vector", "system", "tied_fit"]

FloatArray = NDArray[np.float64]
_SETTLED = 1e-4  # change relative to the largest scale at which the alternation ends; chi-square follows its square
_RIDGE = 1e-9  # keeps the factor of columns that are all but equal


@dataclass(frozen=True, eq=False)
class ScanSystem:
    """Normal equations of one scan after its background has been projected out.

    Attributes
    ----------
    gram : ndarray, shape (j, j)
    moment : ndarray, shape (j,)
    energy : float
        Squared norm of the projected data: chi-square with all amounts zero.
    points : int
        Points minus background terms.
    """

    gram: FloatArray
    moment: FloatArray
    energy: float
    points: int

    def chi_square(self, amounts: FloatArray) -> float:
        """Chi-square of given amounts (j,)."""
        value = self.energy - 2 * float(amounts @ self.moment) + float(amounts @ self.gram @ amounts)
        return max(value, 0.0)

    def subset(self, index: Sequence[int] | NDArray[np.int64]) -> ScanSystem:
        """The system of some of the columns."""
        chosen = np.asarray(index, dtype=np.int64)
        return ScanSystem(self.gram[np.ix_(chosen, chosen)], self.moment[chosen], self.energy, self.points)


def project(columns: FloatArray, weight: FloatArray, basis: FloatArray) -> FloatArray:
    """Weighted columns (n, j) freed of an orthonormal weighted background basis (n, b)."""
    weighted = columns * weight[:, None]
    return np.asarray(weighted - basis @ (basis.T @ weighted))


def project_vector(values: FloatArray, weight: FloatArray, basis: FloatArray) -> FloatArray:
    """Weighted data (n,) freed of an orthonormal weighted background basis (n, b)."""
    weighted = values * weight
    return np.asarray(weighted - basis @ (basis.T @ weighted))


def system(columns: FloatArray, counts: FloatArray, weight: FloatArray, basis: FloatArray) -> ScanSystem:
    """Set up the normal equations of one scan.

    Parameters
    ----------
    columns : ndarray, shape (n, j)
        Calculated scans of unit mass.
    counts : ndarray, shape (n,)
    weight : ndarray, shape (n,)
        1/sigma.
    basis : ndarray, shape (n, b)
        Orthonormal basis of the weighted background.
    """
    a = project(columns, weight, basis)
    y = project_vector(counts, weight, basis)
    return ScanSystem(a.T @ a, a.T @ y, float(y @ y), counts.size - basis.shape[1])


def nonnegative(gram: FloatArray, moment: FloatArray) -> FloatArray:
    """Non-negative least squares from normal equations.

    Parameters
    ----------
    gram : ndarray, shape (j, j)
    moment : ndarray, shape (j,)

    Returns
    -------
    ndarray, shape (j,)

    References
    ----------
    Lawson & Hanson (1974) Solving Least Squares Problems, through scipy.
    """
    if moment.size == 0:
        return np.zeros(0)
    diagonal = gram.diagonal()
    if not diagonal.min() > 0:
        # a phase that shows nothing here has no amount here
        alive = diagonal > 0
        shown = np.zeros(moment.size)
        if alive.any():
            shown[alive] = nonnegative(gram[np.ix_(alive, alive)], moment[alive])
        return shown
    size = np.sqrt(diagonal)
    scaled = gram / (size[:, None] * size)
    scaled.flat[:: moment.size + 1] += _RIDGE
    free = np.asarray(np.linalg.solve(scaled, moment / size))
    if free.min() >= 0:
        return np.asarray(free / size)
    from scipy.optimize import nnls

    root = np.linalg.cholesky(scaled)
    amounts, _ = nnls(root.T, np.linalg.solve(root, moment / size), maxiter=30 * moment.size)
    return np.asarray(amounts / size, dtype=float)


def _best_scales(grams: FloatArray, moments: FloatArray, amounts: FloatArray) -> FloatArray:
    """Scale of each scan for given amounts; a scan in which they show nothing gets a small one."""
    seen = grams @ amounts @ amounts
    best = moments @ amounts
    scales = np.divide(best, seen, out=np.zeros_like(best), where=seen > 0)
    return np.asarray(np.maximum(scales, 1e-3 * max(float(scales.max()), 1e-30)))


@dataclass(frozen=True, eq=False)
class TiedFit:
    """Amounts shared by all scans of a sample, times one scale per scan.

    Attributes
    ----------
    amounts : ndarray, shape (j,)
        Sum 1 unless all are zero.
    scales : ndarray, shape (k,)
    chi_squares : ndarray, shape (k,)
        Per scan.
    """

    amounts: FloatArray
    scales: FloatArray
    chi_squares: FloatArray

    @property
    def chi_square(self) -> float:
        """Total."""
        return float(self.chi_squares.sum())


def tied_fit(systems: Sequence[ScanSystem], scales: FloatArray | None = None, rounds: int = 6) -> TiedFit:
    """Fit shared amounts and scales of the scans in turn.

    Parameters
    ----------
    systems : sequence of ScanSystem, length k
        All with the same columns.
    scales : ndarray, shape (k,), optional
        Start values.
    rounds : int
        Alternations; each lowers chi-square.

    Returns
    -------
    TiedFit
    """
    size = systems[0].moment.size
    if size == 0:
        return TiedFit(np.zeros(0), np.ones(len(systems)), np.array([s.energy for s in systems]))
    if scales is None:
        scales = np.array([nonnegative(s.gram, s.moment).sum() for s in systems])
        scales = np.maximum(scales, 1e-3 * max(float(scales.max()), 1e-30))
    grams = np.array([s.gram for s in systems])
    moments = np.array([s.moment for s in systems])
    amounts = np.zeros(size)
    for _ in range(rounds if len(systems) > 1 else 1):
        amounts = nonnegative(np.tensordot(scales * scales, grams, 1), scales @ moments)
        if not amounts.any():
            break
        before, scales = scales, _best_scales(grams, moments, amounts)
        if np.abs(scales - before).max() < _SETTLED * scales.max():
            break
    total = float(amounts.sum())
    if total > 0:
        amounts, scales = amounts / total, scales * total
    chi = np.array([s.chi_square(k * amounts) for k, s in zip(scales, systems, strict=True)])
    return TiedFit(amounts, scales, chi)
