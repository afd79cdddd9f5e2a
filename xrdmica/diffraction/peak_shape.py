"""Profile functions, and smearing a calculated pattern with the instrument's profile."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

__all__ = ["convolve_profile", "pseudo_voigt", "scherrer_width"]


def pseudo_voigt(x: NDArray[np.float64], fwhm: NDArray[np.float64] | float, lorentzian: float) -> NDArray[np.float64]:
    """Pseudo-Voigt of unit area at distance `x` from its centre.

    Parameters
    ----------
    x : ndarray
        Distance from the centre [degree].
    fwhm : float or ndarray broadcastable to `x`
        Full width at half maximum [degree].
    lorentzian : float
        Lorentzian share, 0 to 1.
    """
    scaled = (2.0 * x / fwhm) ** 2
    lorentz = 2.0 / (np.pi * fwhm * (1.0 + scaled))
    gauss = 2.0 / fwhm * np.sqrt(np.log(2) / np.pi) * np.exp(-np.log(2) * scaled)
    return np.asarray(lorentzian * lorentz + (1.0 - lorentzian) * gauss)


def scherrer_width(two_theta: NDArray[np.float64] | float, wavelength: float, size: float) -> NDArray[np.float64]:
    """Width of a line from crystallite size, 0.9 lambda / (size cos theta) [degree] with `size` in angstrom."""
    cosine = np.cos(np.radians(np.asarray(two_theta, dtype=float)) / 2)
    return np.asarray(np.degrees(0.9 * wavelength / (size * cosine)))


def convolve_profile(values: NDArray[np.float64], step: float, fwhm: float, lorentzian: float) -> NDArray[np.float64]:
    """Smear curves on an even grid with a pseudo-Voigt; the ends are continued by their last value.

    Parameters
    ----------
    values : ndarray, shape (..., n)
        Curves.
    step : float
        Grid step [degree].
    fwhm, lorentzian : float
        Of the profile [degree], 0 to 1.
    """
    from scipy.fft import irfft, next_fast_len, rfft

    count = values.shape[-1]
    reach = min(max(round(8.0 * fwhm / step), 2), count - 1)
    size = next_fast_len(count + 2 * reach, real=True)
    padded = np.empty((*values.shape[:-1], count + 2 * reach))
    padded[..., reach:-reach] = values
    padded[..., :reach] = values[..., :1]
    padded[..., -reach:] = values[..., -1:]
    smeared = irfft(rfft(padded, size) * _kernel_spectrum(step, fwhm, lorentzian, reach, size), size)
    return np.asarray(smeared[..., 2 * reach : 2 * reach + count])


@lru_cache(maxsize=64)
def _kernel_spectrum(step: float, fwhm: float, lorentzian: float, reach: int, size: int) -> NDArray[np.complex128]:
    """Transform of the profile of unit sum: the same for every curve of a scan."""
    from scipy.fft import rfft

    offsets = np.arange(-reach, reach + 1) * step
    # averaging over the cell keeps the area right when the profile is as narrow as the grid
    inner = (np.arange(5) - 2) / 5 * step
    kernel = pseudo_voigt(offsets[:, None] + inner, fwhm, lorentzian).mean(axis=1)
    return np.asarray(rfft(kernel / kernel.sum(), size))
