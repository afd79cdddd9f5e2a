"""Interstratified stacks: kinds of layers that follow each other by junction probabilities."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.basal import PatternGrid, StackHeights, lognormal_heights, smooth_amplitude
from xrdmica.diffraction.scattering import FormFactors
from xrdmica.errors import StructureError

__all__ = ["Junctions", "random_junctions", "stack_intensity", "stack_interference", "two_kind_junctions"]

_COARSER = 3


@dataclass(frozen=True, eq=False)
class Junctions:
    """Proportions of layer kinds and the probability that kind j follows kind i.

    Attributes
    ----------
    proportions : ndarray, shape (k,)
        Sum 1.
    probabilities : ndarray, shape (k, k)
        Rows sum to 1, and proportions @ probabilities gives proportions again.
    """

    proportions: NDArray[np.float64]
    probabilities: NDArray[np.float64]


def random_junctions(proportions: Sequence[float] | NDArray[np.float64]) -> Junctions:
    """R0: what follows does not depend on what was before."""
    shares = np.asarray(proportions, dtype=float)
    return Junctions(shares, np.tile(shares, (shares.size, 1)))


def two_kind_junctions(first_fraction: float, reichweite: int) -> Junctions:
    """Two kinds of layers, random (R0) or with the highest possible order between nearest neighbours (R1).

    Parameters
    ----------
    first_fraction : float
        Share of the first kind, 0 to 1.
    reichweite : int
        0 or 1. With 1 the minority layer is never next to itself.

    Raises
    ------
    StructureError
        For another Reichweite or a share outside 0 to 1.

    References
    ----------
    Reynolds (1980) in Brindley & Brown, Crystal Structures of Clay Minerals, ch. 4 (from memory).
    """
    if not 0 <= first_fraction <= 1:
        raise StructureError(f"share of layers {first_fraction:g}", fix="give a share from 0 to 1")
    shares = np.array([first_fraction, 1 - first_fraction])
    if reichweite == 0 or first_fraction in (0.0, 1.0):
        return random_junctions(shares)
    if reichweite != 1:
        raise StructureError(f"Reichweite {reichweite} of two kinds", fix="use 0 or 1")
    if first_fraction >= 0.5:
        back = shares[1] / shares[0]
        return Junctions(shares, np.array([[1 - back, back], [1.0, 0.0]]))
    back = shares[0] / shares[1]
    return Junctions(shares, np.array([[0.0, 1.0], [back, 1 - back]]))


def stack_interference(
    amplitudes: NDArray[np.complex128],
    spacings: NDArray[np.float64],
    s: NDArray[np.float64],
    junctions: Junctions,
    heights: StackHeights,
    spacing_disorder: float = 0.0,
) -> NDArray[np.float64]:
    """Mean intensity per layer of interstratified stacks.

    I(s) = sum_i W_i |F_i|^2 + (2/<N>) Re sum_n c_n F^H diag(W) Q^n F, Q_ij = P_ij exp(4 pi i d_i s)

    Parameters
    ----------
    amplitudes : ndarray of complex, shape (k, n)
        Of one-sided layers: the interlayer above belongs to the layer.
    spacings : ndarray, shape (k,)
        From each kind to whatever follows [angstrom].
    s : ndarray, shape (n,)
        sin(theta)/lambda [1/angstrom].
    junctions : Junctions
    heights : StackHeights
    spacing_disorder : float
        Standard deviation per layer, accumulating [angstrom].

    Returns
    -------
    ndarray, shape (n,)

    References
    ----------
    Hendricks & Teller (1942) J. Chem. Phys. 10, 147; Kakinoki & Komura (1952) J. Phys. Soc. Japan 7, 30;
    Drits & Tchoubar (1990).
    """
    weights, p = junctions.proportions, junctions.probabilities
    pairs = heights.pair_counts
    damping = np.exp(-((4 * np.pi * s * spacing_disorder) ** 2) / 2) if spacing_disorder > 0 else 1.0
    step = np.exp(4j * np.pi * np.multiply.outer(spacings, s)) * damping
    # Horner's rule from the far end: v <- Q (c_n F + v), so that each step costs one small matrix product
    v = np.zeros_like(amplitudes)
    for pair_count in pairs[:0:-1]:
        v = step * (p @ (pair_count * amplitudes + v))
    cross = np.einsum("kn,k,kn->n", amplitudes.conj(), weights, v).real
    return np.asarray(weights @ np.abs(amplitudes) ** 2 + 2.0 / pairs[0] * cross)


def stack_intensity(
    layers: Sequence[Layer],
    junctions: Junctions,
    grid: PatternGrid,
    *,
    mean_layers: float,
    spacing_disorder: float = 0.0,
    model: FormFactors = "ionic",
) -> NDArray[np.float64]:
    """Scattering of unit mass of an interstratified phase, comparable with `basal_intensity`.

    Parameters
    ----------
    layers : sequence of Layer
        One-sided layers, one per kind.
    junctions : Junctions
    grid : PatternGrid
    mean_layers : float
        Mean of the lognormal law.
    spacing_disorder : float
        [angstrom]

    Returns
    -------
    ndarray, shape (g,)
    """
    from scipy.interpolate import CubicSpline

    # stacks of two kinds have no sharp lines: a third of the points carries them
    chosen = np.unique(np.append(np.arange(0, grid.s.size, _COARSER), grid.s.size - 1))
    s = grid.s[chosen]
    amplitudes = np.array([smooth_amplitude(layer, grid, model)[chosen] for layer in layers])
    spacings = np.array([layer.spacing for layer in layers])
    heights = lognormal_heights(round(float(mean_layers), 6))
    squared = CubicSpline(s, stack_interference(amplitudes, spacings, s, junctions, heights, spacing_disorder))(grid.s)
    mass = float(junctions.proportions @ np.array([layer.molar_mass for layer in layers]))
    area = float(junctions.proportions @ np.array([layer.area for layer in layers]))
    return np.asarray(squared / (mass * area))
