"""Basal (00l) patterns of oriented mounts: one kind of layer, stacked."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.grid import PatternGrid, make_grid, on_scan
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.scattering import FormFactors, anomalous, form_factor
from xrdmica.diffraction.stack_heights import StackHeights, interference
from xrdmica.radiation import Radiation

__all__ = ["basal_intensity", "basal_pattern", "layer_amplitude", "smooth_amplitude"]

ComplexArray = NDArray[np.complex128]


def layer_amplitude(layer: Layer, s: NDArray[np.float64], radiation: Radiation, model: FormFactors = "ionic") -> ComplexArray:
    """Amplitude scattered by one layer along its normal.

    F(s) = sum_j n_j (f_j + f'_j + i f''_j) exp(-B_j s^2) exp(4 pi i z_j s)

    Parameters
    ----------
    layer : Layer
        Atoms on a line.
    s : ndarray, shape (n,)
        sin(theta)/lambda [1/angstrom].
    radiation : Radiation
        Its strongest line sets the anomalous dispersion.
    model : {"ionic", "neutral"}
        Form factors.

    Returns
    -------
    ndarray of complex, shape (n,)
        Electrons per formula unit.
    """
    waves = np.exp(4j * np.pi * np.multiply.outer(layer.z, s) - np.multiply.outer(layer.b_iso, s * s))
    total = np.zeros(s.shape, dtype=complex)
    ions = np.array(layer.ions)
    for ion in dict.fromkeys(layer.ions):
        here = ions == ion
        factor = form_factor(ion, s, model) + anomalous(ion, radiation.energy_ev)
        total += factor * (layer.counts[here] @ waves[here])
    return total


@lru_cache(maxsize=512)
def smooth_amplitude(layer: Layer, grid: PatternGrid, model: FormFactors = "ionic", *, upside_down: bool = False) -> ComplexArray:
    """`layer_amplitude` on a grid, by cubic interpolation from coarser knots: an amplitude is far smoother than a scan is fine.

    Parameters
    ----------
    layer : Layer
    grid : PatternGrid
    model : {"ionic", "neutral"}
    upside_down : bool
        The layer turned over.

    Returns
    -------
    ndarray of complex, shape (g,)
    """
    knots = grid.knots
    z = -layer.z if upside_down else layer.z
    waves = np.exp(4j * np.pi * np.multiply.outer(z, knots.s) - np.multiply.outer(layer.b_iso, knots.s**2))
    total = np.zeros(knots.s.shape, dtype=complex)
    ions = np.array(layer.ions)
    for ion in dict.fromkeys(layer.ions):
        here = ions == ion
        total += _ion_at_knots(ion, grid, model) * (layer.counts[here] @ waves[here])
    return knots.read(total)


@lru_cache(maxsize=1024)
def _ion_at_knots(ion: str, grid: PatternGrid, model: FormFactors) -> ComplexArray:
    return np.asarray(form_factor(ion, grid.knots.s, model) + anomalous(ion, grid.radiation.energy_ev), dtype=np.complex128)


def _squared(amplitude: ComplexArray) -> NDArray[np.float64]:
    return np.asarray(amplitude.real**2 + amplitude.imag**2)


def basal_intensity(
    layer: Layer,
    grid: PatternGrid,
    *,
    mean_layers: float,
    spacing_disorder: float = 0.0,
    heights: StackHeights | None = None,
    model: FormFactors = "ionic",
) -> NDArray[np.float64]:
    """Scattering of unit mass of a phase, before Lorentz factor and instrument profile: |F|^2 Phi / (M area).

    Parameters
    ----------
    layer : Layer
        From `build_layer`.
    grid : PatternGrid
    mean_layers : float
        Mean number of layers per stack.
    spacing_disorder : float
        [angstrom]
    heights : StackHeights, optional
        In place of the lognormal law around `mean_layers`.
    model : {"ionic", "neutral"}

    Returns
    -------
    ndarray, shape (g,)
        Proportional to intensity per unit of dry mass, so that fitted scales are weights
        (w_i ~ S_i M_i area_i; per whole reflection this is the ZMV rule).
    """
    amplitude = smooth_amplitude(layer, grid, model)
    squared = _squared(amplitude)
    if not layer.centrosymmetric:
        # layers lie either way up in a mount, and with absorption 00l and 00-l differ
        squared = (squared + _squared(smooth_amplitude(layer, grid, model, upside_down=True))) / 2
    phi = interference(grid.s, layer.spacing, mean_layers, spacing_disorder, heights)
    return squared * phi / (layer.molar_mass * layer.area)


def basal_pattern(
    layer: Layer,
    two_theta: NDArray[np.float64],
    radiation: str | Radiation = "Cu",
    *,
    mean_layers: float = 30.0,
    spacing_disorder: float = 0.0,
    orientation_spread: float = 12.0,
    instrument: Instrument | None = None,
    displacement: float = 0.0,
    model: FormFactors = "ionic",
) -> NDArray[np.float64]:
    """Calculated basal pattern of an oriented mount of one phase.

    Parameters
    ----------
    layer : Layer
        From `build_layer`.
    two_theta : ndarray, shape (n,)
        [degree]
    radiation : str or Radiation
        Tube or wavelength.
    mean_layers : float
        Mean of the lognormal distribution of stack heights.
    spacing_disorder : float
        [angstrom]
    orientation_spread : float
        Standard deviation of the tilt of layers [degree].
    instrument : Instrument, optional
        Default reflection set-up when left out.
    displacement : float
        Of the specimen [mm].
    model : {"ionic", "neutral"}
        Form factors.

    Returns
    -------
    ndarray, shape (n,)
        Intensity per unit of dry mass, arbitrary but common scale.

    References
    ----------
    Reynolds (1986) Clays Clay Miner. 34, 359-367; Drits, Eberl & Srodon (1998) Clays Clay Miner. 46, 38-50;
    Drits & Tchoubar (1990) X-ray Diffraction by Disordered Lamellar Structures, Springer.
    """
    tube = Radiation.parse(radiation) if isinstance(radiation, str) else radiation
    angles = np.asarray(two_theta, dtype=float)
    grid = make_grid(angles, tube, instrument or Instrument())
    intensity = basal_intensity(layer, grid, mean_layers=mean_layers, spacing_disorder=spacing_disorder, model=model)
    return on_scan(intensity, grid, angles, orientation_spread=orientation_spread, displacement=displacement)
