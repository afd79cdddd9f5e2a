"""How many layers scatter together, and the interference function of stacks of identical layers."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import StructureError

__all__ = ["StackHeights", "fixed_heights", "interference", "lognormal_heights"]

_PHASE_POINTS = 1 << 15


@dataclass(frozen=True, eq=False)
class StackHeights:
    """Distribution of the number of layers in a stack.

    Attributes
    ----------
    numbers : ndarray of int, shape (k,)
        Numbers of layers, from 1.
    shares : ndarray, shape (k,)
        Share of stacks with that number, summing to 1.
    """

    numbers: NDArray[np.int64]
    shares: NDArray[np.float64]

    @property
    def mean(self) -> float:
        """Mean number of layers."""
        return float(self.numbers @ self.shares)

    @cached_property
    def pair_counts(self) -> NDArray[np.float64]:
        """c_n = sum_{N>n} w(N) (N - n) for n = 0 .. max-1: pairs of layers n apart, per stack."""
        top = int(self.numbers[-1])
        w = np.zeros(top + 1)
        w[self.numbers] = self.shares
        stacks_above = np.concatenate([np.cumsum(w[::-1])[::-1][1:], [0.0]])  # sum over N > n of w(N)
        return np.cumsum(stacks_above[::-1])[::-1][:top]


@lru_cache(maxsize=512)
def lognormal_heights(mean_layers: float) -> StackHeights:
    """Lognormal stack heights around a mean.

    Parameters
    ----------
    mean_layers : float
        Mean T of the law, 1.5 or more [layers].

    Returns
    -------
    StackHeights
        alpha = 0.9485 ln T - 0.017 and beta^2 = 0.1032 ln T + 0.0034; cut where less than 1e-5 of the stacks is left.

    References
    ----------
    Drits, Eberl & Srodon (1998) Clays and Clay Minerals 46, 38-50 (coefficients from memory).
    """
    log_mean = np.log(mean_layers)
    alpha, beta = 0.9485 * log_mean - 0.017, np.sqrt(0.1032 * log_mean + 0.0034)
    top = max(int(np.ceil(np.exp(alpha + 4.3 * beta))), 3)
    numbers = np.arange(1, top + 1)
    density = np.exp(-((np.log(numbers) - alpha) ** 2) / (2 * beta**2)) / numbers
    return StackHeights(numbers, density / density.sum())


def fixed_heights(layers: int) -> StackHeights:
    """Stacks that all have the same number of layers.

    Parameters
    ----------
    layers : int
        1 or more.

    Raises
    ------
    StructureError
        If there is less than one layer.
    """
    if layers < 1:
        raise StructureError(f"a stack of {layers} layers", fix="give 1 or more")
    return StackHeights(np.array([layers], dtype=np.int64), np.array([1.0]))


@lru_cache(maxsize=64)
def _interference_table(mean_layers: float) -> NDArray[np.float64]:
    """The undisturbed interference function on an even grid of the phase from 0 to pi."""
    pairs = lognormal_heights(mean_layers).pair_counts
    spectrum = np.zeros(_PHASE_POINTS // 2 + 1)
    spectrum[: pairs.size] = pairs / pairs[0]
    # hermitian transform of c_n gives c_0 + 2 sum c_n cos(n phase)
    return np.asarray(np.fft.irfft(spectrum, _PHASE_POINTS) * _PHASE_POINTS)[: _PHASE_POINTS // 2 + 1]


def interference(
    s: NDArray[np.float64],
    spacing: float,
    mean_layers: float,
    spacing_disorder: float = 0.0,
    heights: StackHeights | None = None,
) -> NDArray[np.float64]:
    """Interference function of stacks of identical layers, per layer.

    Parameters
    ----------
    s : ndarray, shape (n,)
        sin(theta)/lambda [1/angstrom].
    spacing : float
        [angstrom]
    mean_layers : float
        Of the lognormal law.
    spacing_disorder : float
        Standard deviation of the spacing from layer to layer, accumulating along the stack (second kind) [angstrom].
    heights : StackHeights, optional
        In place of the lognormal law.

    Returns
    -------
    ndarray, shape (n,)
        Averages to 1 over a period; the mean number of layers (mass-weighted) at a Bragg position.
    """
    if spacing_disorder <= 0 and heights is None:
        table = _interference_table(round(float(mean_layers), 6))
        turns = (2 * spacing) * s
        turns -= np.rint(turns)
        place = np.abs(turns) * (2 * (table.size - 1))
        below = np.minimum(place.astype(np.int64), table.size - 2)
        return np.asarray(table[below] + (place - below) * (table[below + 1] - table[below]))
    chosen = lognormal_heights(round(float(mean_layers), 6)) if heights is None else heights
    pairs = chosen.pair_counts / chosen.pair_counts[0]
    step = np.exp(4j * np.pi * spacing * s - (4 * np.pi * s * spacing_disorder) ** 2 / 2)
    total = np.zeros(s.shape, dtype=complex)
    for weight in pairs[:0:-1]:  # Horner's rule in the phase step
        total = (total + weight) * step
    return np.asarray(1.0 + 2.0 * total.real)
