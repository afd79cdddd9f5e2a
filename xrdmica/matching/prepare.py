"""A sample made ready for comparison with calculated scans."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrdmica.diffraction.basal import make_grid
from xrdmica.diffraction.columns import View
from xrdmica.diffraction.optics import Instrument
from xrdmica.scans.background import estimate_background
from xrdmica.scans.peaks import Peak, find_peaks
from xrdmica.scans.scan import Sample, Scan

__all__ = ["Prepared", "background_basis", "prepare", "prepare_scan"]

_WINDOWS = {"oriented": (36.0, 2.30), "random": (36.0, 1.44)}  # angstrom: from the longest superlattice to the last line of use
_MODEL_ERROR = 0.04  # relative error of calculated intensities that no parameter here removes, common practice
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
    basis : ndarray, shape (n, b)
        Orthonormal basis of the weighted background.
    """

    label: str
    scan: Scan
    view: View
    peaks: tuple[Peak, ...]
    background: NDArray[np.float64]
    weight: NDArray[np.float64]
    basis: NDArray[np.float64]

    def moved(self, displacement: float) -> Prepared:
        """The same with another specimen displacement [mm]."""
        return replace(self, view=replace(self.view, displacement=displacement))

    def spread(self, orientation_spread: float) -> Prepared:
        """The same with another orientation spread [degree]."""
        return replace(self, view=replace(self.view, orientation_spread=orientation_spread))


def background_basis(two_theta: NDArray[np.float64], weight: NDArray[np.float64], stiffness: int = 4) -> NDArray[np.float64]:
    """Smooth terms for what lies under the lines: a polynomial and the rise to low angles.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]
    weight : ndarray, shape (n,)
        1/sigma.
    stiffness : int
        Number of polynomial terms; fewer are stiffer.

    Returns
    -------
    ndarray, shape (n, stiffness + 2)
        Orthonormal after weighting.
    """
    x = 2 * (two_theta - two_theta[0]) / (two_theta[-1] - two_theta[0]) - 1
    low = two_theta[0] / two_theta
    terms = [np.polynomial.chebyshev.chebval(x, np.eye(stiffness)[k]) for k in range(stiffness)]
    terms += [low, low**2] if two_theta[0] < 12 else []
    q, _ = np.linalg.qr(np.column_stack(terms) * weight[:, None])
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
    return Prepared(label, cut, view, peaks, background, weight, background_basis(cut.two_theta, weight))


def prepare(sample: Sample, instrument: Instrument | None = None) -> tuple[Prepared, ...]:
    """All scans of a sample made ready, in order."""
    chosen = instrument or Instrument()
    return tuple(prepare_scan(label, scan, chosen) for label, scan in zip(sample.labels, sample.scans, strict=True))
