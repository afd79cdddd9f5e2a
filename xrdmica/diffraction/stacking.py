"""Interstratified stacks: kinds of layers that follow each other by junction probabilities."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.basal import layer_amplitude, smooth_amplitude
from xrdmica.diffraction.grid import PatternGrid
from xrdmica.diffraction.junctions import (
    Junctions,
    markov_junctions,
    ordered_junctions,
    random_junctions,
    two_kind_junctions,
)
from xrdmica.diffraction.scattering import FormFactors
from xrdmica.diffraction.stack_heights import StackHeights, lognormal_heights
from xrdmica.errors import StructureError
from xrdmica.radiation import Radiation

__all__ = [
    "Junctions", "markov_junctions", "ordered_junctions", "random_junctions", "stack_intensity", "stack_interference",
    "two_kind_junctions",
]  # fmt: skip

ComplexArray = NDArray[np.complex128]
RealArray = NDArray[np.float64]
_COARSER = 3
_SHARP = 30.0  # mean layers times coarsening: beyond this interpolation would cut the tops of lines
_SAME_EITHER_WAY = 1e-6


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
        Of one-sided layers, one per kind: the interlayer above belongs to the layer.
    spacings : ndarray, shape (k,)
        From each kind to whatever follows [angstrom].
    s : ndarray, shape (n,)
        sin(theta)/lambda [1/angstrom].
    junctions : Junctions
        i and j above are its states, with the amplitude and spacing of the kind each ends in.
    heights : StackHeights
    spacing_disorder : float
        Standard deviation per layer, accumulating [angstrom].

    Returns
    -------
    ndarray, shape (n,)

    Raises
    ------
    StructureError
        If the junctions speak of more kinds than there are amplitudes.

    References
    ----------
    Hendricks & Teller (1942) J. Chem. Phys. 10, 147; Kakinoki & Komura (1952) J. Phys. Soc. Japan 7, 30;
    Drits & Tchoubar (1990).
    """
    kinds = junctions.kinds
    if int(kinds.max()) >= len(amplitudes) or len(amplitudes) != len(spacings):
        raise StructureError(
            f"junctions of {int(kinds.max()) + 1} kinds, {len(amplitudes)} amplitudes, {len(spacings)} spacings",
            fix="give one amplitude and one spacing per kind of layer",
        )
    weights = junctions.proportions
    damping = np.exp(-((4 * np.pi * s * spacing_disorder) ** 2) / 2) if spacing_disorder > 0 else 1.0
    waves: ComplexArray = np.exp(1j * (4 * np.pi * np.multiply.outer(spacings, s)))
    step = (waves * damping)[kinds]
    of_state: ComplexArray = np.asarray(amplitudes, dtype=np.complex128)[kinds]
    pairs = heights.pair_counts
    if junctions.at_random:
        cross = _at_random(of_state, step, weights, pairs)
    else:
        cross = weights @ (of_state.conj() * _by_horner(of_state, step, junctions.probabilities, pairs))
    return np.asarray(weights @ (of_state.real**2 + of_state.imag**2) + 2.0 / pairs[0] * cross.real)


def _at_random(of_state: ComplexArray, step: ComplexArray, weights: RealArray, pairs: RealArray) -> ComplexArray:
    """F^H W sum c_n Q^n F where all rows of P are the same: Q has rank one, and its powers are powers of one number."""
    mean_step, total = weights @ step, np.zeros(step.shape[1:], dtype=complex)
    for pair_count in pairs[:0:-1]:
        total *= mean_step
        total += pair_count
    return np.asarray((weights @ (of_state.conj() * step)) * (weights @ of_state) * total)


def _by_horner(of_state: ComplexArray, step: ComplexArray, p: RealArray, pairs: RealArray) -> ComplexArray:
    """sum c_n Q^n F by Horner's rule from the far end, v <- Q (c_n F + v): each step costs one small matrix product."""
    v, inner = np.zeros_like(of_state), np.empty_like(of_state)
    # P is real: real and imaginary parts side by side make it one real product
    flat_v, flat_inner = v.view(np.float64), inner.view(np.float64)
    for pair_count in pairs[:0:-1]:
        np.multiply(of_state, pair_count, out=inner)
        inner += v
        np.matmul(p, flat_inner, out=flat_v)
        v *= step
    return v


@lru_cache(maxsize=512)
def _differs_upside_down(layer: Layer, radiation: Radiation, model: FormFactors) -> bool:
    """Whether a crystal of this layer alone scatters differently from its two sides, which only absorption brings about."""
    if layer.symmetric_when_stacked:
        return False
    s = np.arange(1, 5) / (2 * layer.spacing)
    up, down = (np.abs(layer_amplitude(layer, side * s, radiation, model)) ** 2 for side in (1, -1))
    return bool(np.abs(up - down).max() > _SAME_EITHER_WAY * up.max())


def stack_intensity(
    layers: Sequence[Layer],
    junctions: Junctions,
    grid: PatternGrid,
    *,
    mean_layers: float,
    spacing_disorder: float = 0.0,
    heights: StackHeights | None = None,
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
    heights : StackHeights, optional
        In place of the lognormal law.
    model : {"ionic", "neutral"}

    Returns
    -------
    ndarray, shape (g,)
        Stacks of kinds without a centre of symmetry (1:1 layers) count half with either side up.
    """
    # short stacks of two kinds have no sharp lines: a third of the points carries them
    coarser = min(_COARSER, max(int(_SHARP / mean_layers), 1))
    s = grid.s[::coarser]
    spacings = np.array([layer.spacing for layer in layers])
    areas = np.array([layer.area for layer in layers])
    heights = lognormal_heights(round(float(mean_layers), 6)) if heights is None else heights
    sides = (False, True) if any(_differs_upside_down(layer, grid.radiation, model) for layer in layers) else (False,)
    total = np.zeros(s.size)
    for upside_down in sides:
        # per unit area: kinds that lie on each other have the same lateral extent, not the same number of formula units
        found = [smooth_amplitude(layer, grid, model, upside_down=upside_down)[::coarser] for layer in layers]
        if upside_down:
            # the stack turned over is the stack at -s; conjugated, the phases of the spacings stay as they are
            found = [amplitude.conj() for amplitude in found]
        amplitudes = np.array(found) / areas[:, None]
        total += stack_interference(amplitudes, spacings, s, junctions, heights, spacing_disorder) / len(sides)
    mass_per_area = float(junctions.layer_shares @ (np.array([layer.molar_mass for layer in layers]) / areas))
    fine = total if coarser == 1 else grid.every(coarser).read(total)
    return np.asarray(fine / mass_per_area)
