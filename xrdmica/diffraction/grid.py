"""The even angle grid on which patterns are calculated, and how a scan reads it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from xrdmica.diffraction.optics import (
    Instrument,
    axial_nodes,
    displacement_shift,
    lorentz_factor,
    mount_factor,
    wavelength_ratios,
)
from xrdmica.diffraction.peak_shape import convolve_profile
from xrdmica.diffraction.specimen import film_factor, transparency_shift
from xrdmica.radiation import Radiation

__all__ = ["Knots", "PatternGrid", "Sampling", "make_grid", "on_scan", "sample_points"]

Curve = TypeVar("Curve", NDArray[np.float64], NDArray[np.complex128])
_GRID_STEP = 0.02  # degree: fine enough for the sharpest basal line of a laboratory instrument
_MARGIN = 1.2  # degree beyond the scan, so that tails and shifts at its ends are there
_SMOOTH_STEP = 0.0015  # 1/angstrom: 40 points to the fastest wave of a 17 angstrom layer, spline error below 1e-5


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

    def read(self, values: Curve) -> Curve:
        """Values at the knots (q,) on the fine grid (g,)."""
        return np.asarray((values[self.index] * self.weight).sum(axis=0))

    @classmethod
    def below(cls, s: NDArray[np.float64]) -> Knots:
        """Knots for a rising fine grid."""
        count = max(int(np.ceil((s[-1] - s[0]) / _SMOOTH_STEP)) + 4, 6)
        knots = np.linspace(s[0], s[-1], count)
        return cls._at(knots, (s - s[0]) / (knots[1] - knots[0]))

    @classmethod
    def every(cls, step: int, s: NDArray[np.float64]) -> Knots:
        """Knots at every so manieth point of a fine grid that is even in angle."""
        return cls._at(s[::step], np.arange(s.size) / step)

    @classmethod
    def _at(cls, knots: NDArray[np.float64], position: NDArray[np.float64]) -> Knots:
        start = np.clip(position.astype(np.int64) - 1, 0, knots.size - 4)
        x = position - start
        weight = np.array([
            -(x - 1) * (x - 2) * (x - 3) / 6, x * (x - 2) * (x - 3) / 2, -x * (x - 1) * (x - 3) / 2, x * (x - 1) * (x - 2) / 6,
        ])  # fmt: skip
        return cls(knots, start + np.arange(4)[:, None], weight)


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

    def every(self, step: int) -> Knots:
        """Every so manieth point, for curves without sharp lines."""
        return _every(self, step)

    def factor(self, orientation_spread: float) -> NDArray[np.float64]:
        """Lorentz-polarisation and mount factor on the grid, shape (g,)."""
        return _factor(self, orientation_spread)


@lru_cache(maxsize=64)
def _every(grid: PatternGrid, step: int) -> Knots:
    return Knots.every(step, grid.s)


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
