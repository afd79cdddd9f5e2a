"""A sample made ready for comparison with calculated scans."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrdmica.diffraction.columns import View
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.scans.background import estimate_background
from xrdmica.scans.peaks import Peak, find_peaks
from xrdmica.scans.scan import Sample, Scan

__all__ = ["Prepared", "background_terms", "orthonormal", "prepare", "prepare_scan"]

_WINDOWS = {"oriented": (36.0, 1.80), "random": (36.0, 1.44)}  # angstrom: from the longest superlattice to the last line of use
_MODEL_ERROR = 0.04  # relative error of calculated intensities that no parameter here removes, common practice
_TERM_REACH = 8.0  # degree of the scan per polynomial term of the background
_BACKGROUND_ERROR = 0.004


@dataclass(frozen=True, eq=False)
class Prepared:
    """One scan with what comparing it needs.

    Attributes
    ----------
    label : str
        Distinct within the sample.
    scan : Scan
        Cut to the window used.
    view : View
        How it looks at its specimen.
    peaks : tuple of Peak
    background : ndarray, shape (n,)
        Smooth estimate, for noise levels and pictures.
    weight : ndarray, shape (n,)
        1/sigma, with counting and model error.
    smooth : ndarray, shape (n, b)
        Background terms.
    strange : ndarray, shape (n, c)
        Terms of lines that no phase can claim.
    basis : ndarray, shape (n, b + c)
        Orthonormal basis of both, weighted.
    """

    label: str
    scan: Scan
    view: View
    peaks: tuple[Peak, ...]
    background: NDArray[np.float64]
    weight: NDArray[np.float64]
    smooth: NDArray[np.float64]
    strange: NDArray[np.float64]
    basis: NDArray[np.float64]

    def moved(self, displacement: float) -> Prepared:
        """The same with another specimen displacement [mm]."""
        return replace(self, view=replace(self.view, displacement=displacement))

    def spread(self, orientation_spread: float) -> Prepared:
        """The same with another orientation spread [degree]."""
        return replace(self, view=replace(self.view, orientation_spread=orientation_spread))

    def with_terms(self, smooth: NDArray[np.float64], strange: NDArray[np.float64]) -> Prepared:
        """The same with other terms for background and unclaimed lines."""
        basis = orthonormal(np.hstack([smooth, strange]), self.weight)
        return replace(self, smooth=smooth, strange=strange, basis=basis)


def background_terms(two_theta: NDArray[np.float64], terms: int = 4) -> NDArray[np.float64]:
    """Smooth terms for what lies under the lines: a polynomial and the rise to low angles.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]
    terms : int
        Number of polynomial terms; fewer are stiffer.

    Returns
    -------
    ndarray, shape (n, terms + 3), or (n, terms) for a scan that starts above 12 degrees
    """
    x = 2 * (two_theta - two_theta[0]) / (two_theta[-1] - two_theta[0]) - 1
    low = two_theta[0] / two_theta
    columns = [np.polynomial.chebyshev.chebval(x, np.eye(terms)[k]) for k in range(terms)]
    columns += [low, low**2, low**4] if two_theta[0] < 12 else []
    return np.column_stack(columns)


def orthonormal(terms: NDArray[np.float64], weight: NDArray[np.float64]) -> NDArray[np.float64]:
    """Orthonormal basis of weighted terms (n, b)."""
    q, _ = np.linalg.qr(terms * weight[:, None])
    return np.asarray(q)


def _instrument_width(peaks: tuple[Peak, ...], usual: float) -> float:
    """Instrument width as the narrowest strong lines show it; the usual one when there are too few to tell."""
    widths = np.sort([p.fwhm for p in peaks if p.height_sigma > 20])
    if widths.size < 3:
        return usual
    return float(np.clip(0.8 * widths[:2].mean(), 0.6 * usual, 4 * usual))


def prepare_scan(label: str, scan: Scan, instrument: Instrument) -> Prepared:
    """Cut a scan to its useful window, find its peaks, and set its weights.

    Parameters
    ----------
    label : str
    scan : Scan
    instrument : Instrument
        Its width is replaced by what the narrow lines of the scan show.

    Raises
    ------
    ScanError
        If too few points lie in the window of sheet-silicate lines.
    """
    longest, shortest = _WINDOWS[scan.mount]
    low, high = scan.radiation.two_theta(longest), scan.radiation.two_theta(shortest)
    cut = scan.restricted(float(low), float(high) if np.isfinite(high) else 180.0)
    peaks = find_peaks(cut)
    background = estimate_background(cut)
    above = np.maximum(cut.counts - background, 0.0)
    smooth = np.convolve(above, np.ones(5) / 5, mode="same")
    sigma = np.sqrt(cut.sigma**2 + (_MODEL_ERROR * smooth) ** 2 + (_BACKGROUND_ERROR * background) ** 2)
    weight = 1.0 / sigma
    width = _instrument_width(peaks, instrument.fwhm)
    view = View(make_grid(cut.two_theta, cut.radiation, instrument), cut.two_theta, cut.mount, fwhm=width)
    smooth = background_terms(cut.two_theta, max(4, round(float(np.ptp(cut.two_theta)) / _TERM_REACH)))
    none = np.zeros((cut.two_theta.size, 0))
    return Prepared(label, cut, view, peaks, background, weight, smooth, none, orthonormal(smooth, weight))


def prepare(sample: Sample, instrument: Instrument | None = None) -> tuple[Prepared, ...]:
    """All scans of a sample made ready, in order."""
    chosen = instrument or Instrument()
    return tuple(prepare_scan(label, scan, chosen) for label, scan in zip(sample.labels, sample.scans, strict=True))
