"""Basal (00l) patterns of oriented mounts: one kind of layer, stacked."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.optics import (
    Instrument,
    axial_nodes,
    displacement_shift,
    lorentz_factor,
    mount_factor,
    wavelength_ratios,
)
from xrdmica.diffraction.peak_shape import convolve_profile
from xrdmica.diffraction.scattering import FormFactors, anomalous, form_factor
from xrdmica.diffraction.specimen import film_factor, transparency_shift
from xrdmica.radiation import Radiation

__all__ = [
    "PatternGrid", "Sampling", "StackHeights", "basal_intensity", "basal_pattern", "interference", "layer_amplitude",
    "lognormal_heights", "make_grid", "on_scan", "sample_points", "smooth_amplitude",
]  # fmt: skip

ComplexArray = NDArray[np.complex128]
_GRID_STEP = 0.02  # degree: fine enough for the sharpest basal line of a laboratory instrument
_MARGIN = 1.2  # degree beyond the scan, so that tails and shifts at its ends are there
_PHASE_POINTS = 1 << 15
_SMOOTH_STEP = 0.0015  # 1/angstrom: 40 points to the fastest wave of a 17 angstrom layer, spline error below 1e-5


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


@dataclass(frozen=True, eq=False)
class Knots:
    """Coarse points that carry smooth functions of s, and how to read them on a fine grid by four-point interpolation.

    Attributes
    ----------
    s : ndarray, shape (q,)
        [1/angstrom]
    index : ndarray of int, shape (4, g)
    weight : ndarray, shape (4, g)
    """

    s: NDArray[np.float64]
    index: NDArray[np.int64]
    weight: NDArray[np.float64]

    def read(self, values: ComplexArray) -> ComplexArray:
        """Values at the knots (q,) on the fine grid (g,)."""
        return np.asarray((values[self.index] * self.weight).sum(axis=0))

    @classmethod
    def below(cls, s: NDArray[np.float64]) -> Knots:
        """Knots for a rising fine grid."""
        count = max(int(np.ceil((s[-1] - s[0]) / _SMOOTH_STEP)) + 4, 6)
        knots = np.linspace(s[0], s[-1], count)
        position = (s - s[0]) / (knots[1] - knots[0])
        start = np.clip(position.astype(np.int64) - 1, 0, count - 4)
        x = position - start
        weight = np.array([
            -(x - 1) * (x - 2) * (x - 3) / 6, x * (x - 2) * (x - 3) / 2, -x * (x - 1) * (x - 3) / 2, x * (x - 1) * (x - 2) / 6,
        ])  # fmt: skip
        return cls(knots, start + np.arange(4)[:, None], weight)


@lru_cache(maxsize=64)
def _interference_table(mean_layers: float) -> NDArray[np.float64]:
    """The undisturbed interference function on an even grid of the phase from 0 to pi."""
    pairs = lognormal_heights(mean_layers).pair_counts
    spectrum = np.zeros(_PHASE_POINTS // 2 + 1)
    spectrum[: pairs.size] = pairs / pairs[0]
    # hermitian transform of c_n gives c_0 + 2 sum c_n cos(n phase)
    return np.asarray(np.fft.irfft(spectrum, _PHASE_POINTS) * _PHASE_POINTS)[: _PHASE_POINTS // 2 + 1]


def interference(
    s: NDArray[np.float64], spacing: float, mean_layers: float, spacing_disorder: float = 0.0
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

    Returns
    -------
    ndarray, shape (n,)
        Averages to 1 over a period; the mean number of layers (mass-weighted) at a Bragg position.
    """
    phase = 4 * np.pi * spacing * s
    if spacing_disorder <= 0:
        table = _interference_table(round(float(mean_layers), 6))
        place = np.abs(np.remainder(phase + np.pi, 2 * np.pi) - np.pi) * ((table.size - 1) / np.pi)
        below = np.minimum(place.astype(np.int64), table.size - 2)
        return np.asarray(table[below] + (place - below) * (table[below + 1] - table[below]))
    pairs = lognormal_heights(round(float(mean_layers), 6)).pair_counts
    pairs = pairs / pairs[0]
    step = np.exp(1j * phase - (4 * np.pi * s * spacing_disorder) ** 2 / 2)
    total = np.zeros(s.shape, dtype=complex)
    for weight in pairs[:0:-1]:  # Horner's rule in the phase step
        total = (total + weight) * step
    return np.asarray(1.0 + 2.0 * total.real)


@dataclass(frozen=True, eq=False)
class PatternGrid:
    """An even angle grid with everything on it that does not depend on the phase.

    Attributes
    ----------
    two_theta : ndarray, shape (g,)
        Grid of the strongest line [degree].
    s : ndarray, shape (g,)
        sin(theta)/lambda [1/angstrom].
    radiation : Radiation
    instrument : Instrument
    """

    two_theta: NDArray[np.float64]
    s: NDArray[np.float64]
    radiation: Radiation
    instrument: Instrument

    @property
    def step(self) -> float:
        """Grid step [degree]."""
        return float(self.two_theta[1] - self.two_theta[0])

    @cached_property
    def knots(self) -> Knots:
        """Coarse points for amplitudes."""
        return Knots.below(self.s)

    def factor(self, orientation_spread: float) -> NDArray[np.float64]:
        """Lorentz-polarisation and mount factor on the grid, shape (g,)."""
        return _factor(self, orientation_spread)


@lru_cache(maxsize=128)
def _factor(grid: PatternGrid, orientation_spread: float) -> NDArray[np.float64]:
    return lorentz_factor(grid.two_theta, orientation_spread, grid.instrument) * mount_factor(grid.two_theta, grid.instrument)


@dataclass(frozen=True, eq=False)
class Sampling:
    """Where the points of a scan lie on a grid, for each line of the tube (and each axial angle).

    Attributes
    ----------
    weights : tuple of float
        Share of each.
    index : tuple of ndarray of int, each (n,)
        Grid point below.
    part : tuple of ndarray, each (n,)
        Fraction of the way to the next one.
    """

    weights: tuple[float, ...]
    index: tuple[NDArray[np.int64], ...]
    part: tuple[NDArray[np.float64], ...]

    def read(self, curves: NDArray[np.float64]) -> NDArray[np.float64]:
        """Curves on the grid (..., g) at the points of the scan (..., n), all lines added."""
        total = np.zeros((*curves.shape[:-1], self.part[0].size))
        for weight, index, part in zip(self.weights, self.index, self.part, strict=True):
            total += curves[..., index] * (weight * (1 - part)) + curves[..., index + 1] * (weight * part)
        return total


def sample_points(
    grid: PatternGrid,
    two_theta: NDArray[np.float64],
    displacement: float = 0.0,
    zero_shift: float = 0.0,
    linear_attenuation: float | None = None,
) -> Sampling:
    """Place the points of a scan on a grid.

    Parameters
    ----------
    grid : PatternGrid
    two_theta : ndarray, shape (n,)
        Angles of the scan [degree].
    displacement : float
        [mm]
    zero_shift : float
        Added to every calculated angle [degree].
    linear_attenuation : float, optional
        Of a thick packed specimen, for its transparency shift [1/mm]; left out when None.
    """
    true_angle = two_theta - displacement_shift(two_theta, displacement, grid.instrument) - zero_shift
    if linear_attenuation is not None:
        true_angle = true_angle - transparency_shift(two_theta, linear_attenuation, grid.instrument.goniometer_radius)
    weights, indices, parts = [], [], []
    for cosine, share in axial_nodes(grid.instrument):
        angle = true_angle if cosine == 1 else np.degrees(np.arccos(np.cos(np.radians(true_angle)) * cosine))
        sine = np.sin(np.radians(angle) / 2)
        for ratio, weight in wavelength_ratios(grid.radiation, grid.instrument):
            position = (2 * np.degrees(np.arcsin(np.clip(sine / ratio, -1, 1))) - grid.two_theta[0]) / grid.step
            position = np.clip(position, 0, grid.two_theta.size - 1.000001)
            index = position.astype(np.int64)
            weights.append(share * weight)
            indices.append(index)
            parts.append(position - index)
    return Sampling(tuple(weights), tuple(indices), tuple(parts))


def make_grid(two_theta: NDArray[np.float64], radiation: Radiation, instrument: Instrument) -> PatternGrid:
    """Grid that covers a scan with a margin, with a step of 0.02 degree or finer when the scan is finer.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        Angles of the scan [degree].
    """
    step = min(_GRID_STEP, float(np.median(np.diff(two_theta)))) if two_theta.size > 1 else _GRID_STEP
    low = max(float(two_theta.min()) - _MARGIN, 0.3)
    shortest = min(ratio for ratio, _ in wavelength_ratios(radiation, instrument))
    highest = float(np.degrees(2 * np.arcsin(min(np.sin(np.radians(two_theta.max()) / 2) / shortest, 1.0))))
    high = min(highest + _MARGIN, 175.0)
    return _grid(round(low, 2), round(high, 2), max(round(step, 3), 0.005), radiation, instrument)


@lru_cache(maxsize=64)
def _grid(low: float, high: float, step: float, radiation: Radiation, instrument: Instrument) -> PatternGrid:
    """One grid object per range, so that curves calculated on it are found again."""
    grid = np.arange(low, high, step)
    return PatternGrid(grid, np.sin(np.radians(grid) / 2) / radiation.wavelength, radiation, instrument)


def basal_intensity(
    layer: Layer,
    grid: PatternGrid,
    *,
    mean_layers: float,
    spacing_disorder: float = 0.0,
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
    model : {"ionic", "neutral"}

    Returns
    -------
    ndarray, shape (g,)
        Proportional to intensity per unit of dry mass, so that fitted scales are weights
        (w_i ~ S_i M_i area_i; per whole reflection this is the ZMV rule).
    """
    amplitude = smooth_amplitude(layer, grid, model)
    squared = np.abs(amplitude) ** 2
    if not layer.centrosymmetric:
        # layers lie either way up in a mount, and with absorption 00l and 00-l differ
        squared = (squared + np.abs(smooth_amplitude(layer, grid, model, upside_down=True)) ** 2) / 2
    phi = interference(grid.s, layer.spacing, mean_layers, spacing_disorder)
    return squared * phi / (layer.molar_mass * layer.area)


def on_scan(
    intensity: NDArray[np.float64],
    grid: PatternGrid,
    two_theta: NDArray[np.float64],
    *,
    orientation_spread: float,
    fwhm: float | None = None,
    displacement: float = 0.0,
    zero_shift: float = 0.0,
    sampling: Sampling | None = None,
    mass_attenuation: float | None = None,
    mass_mg_cm2: float | None = None,
    linear_attenuation: float | None = None,
) -> NDArray[np.float64]:
    """What the instrument makes of a scattering curve: Lorentz factor, doublet, profile, displacement.

    Parameters
    ----------
    intensity : ndarray, shape (..., g)
        Curves on the grid, from `basal_intensity` or `stack_intensity`.
    grid : PatternGrid
    two_theta : ndarray, shape (n,)
        Angles of the scan [degree].
    orientation_spread : float
        [degree]
    fwhm : float, optional
        Instrument width [degree] in place of the instrument's own.
    displacement : float
        [mm]
    zero_shift : float
        Added to every calculated angle [degree].
    sampling : Sampling, optional
        From `sample_points` with the same angles and shifts, when many curves are read.
    mass_attenuation, mass_mg_cm2 : float, optional
        Of a film that does not stop the beam [cm^2/g, mg/cm^2]; thick without both.
    linear_attenuation : float, optional
        For the transparency shift [1/mm]; no shift when left out.

    Returns
    -------
    ndarray, shape (..., n)
    """
    instrument = grid.instrument
    curve = intensity * grid.factor(orientation_spread)
    if mass_attenuation is not None and mass_mg_cm2 is not None:
        curve = curve * film_factor(grid.two_theta, mass_attenuation, mass_mg_cm2)
    smeared = convolve_profile(curve, grid.step, instrument.fwhm if fwhm is None else fwhm, instrument.lorentzian)
    return (sampling or sample_points(grid, two_theta, displacement, zero_shift, linear_attenuation)).read(smeared)


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
