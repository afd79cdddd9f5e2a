"""Background of a scan: what is left when everything peak-like is clipped off."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xrdmica.scans.scan import Scan

__all__ = ["count_scale", "estimate_background"]

# Half widths of clipping [degree]. At low angles, where the background is convex, whatever bulges is a peak, and humps of
# swelling clays are up to 3 degrees wide. Beyond, the wide hump of glass is background, so bends are allowed.
_CLAY_HALF_WINDOW, _GLASS_HALF_WINDOW = 2.4, 3.2
_BLEND = (13.0, 18.0)
_BEAM_SPACING = 32.0  # angstrom
_SMOOTH = 0.20  # degree, half width of the smoothing against clipping the noise


def count_scale(scan: Scan) -> float:
    """Intensity that one count stands for, from ``sigma**2 / counts``; 1 for plain counts."""
    good = scan.counts > 0
    if not good.any():
        return 1.0
    return float(np.median(scan.sigma[good] ** 2 / scan.counts[good])) or 1.0


def _smoothed(values: NDArray[np.float64], half: int) -> NDArray[np.float64]:
    """Triangular running mean that mirrors the slope at the ends."""
    if half < 1:
        return values
    kernel = np.bartlett(2 * half + 3)[1:-1]
    kernel /= kernel.sum()
    padded = np.concatenate([_line(values, half, half), values, _line(values[::-1], half, half)[::-1]])
    return np.convolve(padded, kernel, mode="valid")


def _line(values: NDArray[np.float64], count: int, half: int) -> NDArray[np.float64]:
    """Continue values by `count` points to the left along the line through their first ``2 half + 1`` points."""
    first = values[: 2 * half + 1]
    at = np.arange(first.size) - (first.size - 1) / 2
    slope = float(at @ first / (at @ at))
    return np.asarray(first.mean() + slope * (np.arange(-count, 0) + at[0]))


def estimate_background(scan: Scan) -> NDArray[np.float64]:
    """Estimate the background below peaks and clay humps.

    The counts are brought to equal noise by the square root, smoothed and clipped by the statistics-sensitive
    iterative procedure in windows of 4.8 degrees and more, so that the steep rise to low angles (which is convex) stays
    background while humps up to about 3 degrees wide do not. The points that then lie within the noise of that
    floor set its level, since clipping alone settles at the bottom of the noise.

    Parameters
    ----------
    scan : Scan
        The scan.

    Returns
    -------
    ndarray, shape (n,)
        Background [counts]: never negative and never above the smoothed counts.

    References
    ----------
    C.G. Ryan et al., Nucl. Instrum. Methods B 34 (1988) 396.
    """
    scale = count_scale(scan)
    root = np.sqrt(np.maximum(scan.counts, 0.0) / scale + 0.375)  # noise 0.5 everywhere (Anscombe 1948)
    half = max(1, round(_SMOOTH / scan.step))
    smooth = _smoothed(root, half)
    floor = _clipped(smooth, scan, 2, _CLAY_HALF_WINDOW)
    share = np.clip((scan.two_theta - _BLEND[0]) / (_BLEND[1] - _BLEND[0]), 0.0, 1.0)
    if share.any():
        floor = (1 - share) * floor + share * _clipped(smooth, scan, 4, _GLASS_HALF_WINDOW)
    # points inside the noise of the floor tell how far clipping sank below the mean
    quiet = (np.abs(root - floor) < 1.5).astype(float)
    wide = min(max(2, round(1.5 / scan.step)), (root.size - 1) // 2)
    weight = np.maximum(_smoothed(quiet, wide), 0.05)
    lift = _smoothed(quiet * (root - floor), wide) / weight
    floor = _smoothed(floor + np.clip(lift, 0.0, 0.5), min(2 * half, (root.size - 1) // 2))
    beam = _beam_share(smooth, scan)
    floor = (1 - beam) * floor + beam * smooth
    ceiling = smooth + 0.5 / np.sqrt(1.3 * half)  # the noise that is left in the smoothed counts
    level = np.clip(floor, 0.0, np.maximum(ceiling, 0.0))
    return np.asarray(np.maximum(level**2 - 0.375 + 0.25, 0.0) * scale)  # the mean of squares is above the squared mean


def _beam_share(smooth: NDArray[np.float64], scan: Scan) -> NDArray[np.float64]:
    """Share, falling from 1 to 0, by which the counts at the start of a scan are the tail of the direct beam.

    The beam stop makes a maximum of its own below the angles of any basal spacing; nothing is told apart there.
    """
    share = np.zeros_like(smooth)
    far = int(np.count_nonzero(scan.d_spacing > _BEAM_SPACING))
    if far < 3:
        return share
    top = int(np.argmax(smooth[:far]))
    below = np.flatnonzero(smooth[top:] ** 2 < 0.3 * smooth[top] ** 2)
    if top < far - 1 and below.size and scan.two_theta[top + below[0]] < scan.two_theta[top] + 3.0:
        fall = int(below[0])
        share[:top] = 1.0
        share[top : top + fall] = np.linspace(1.0, 0.0, fall)
    return share


def _clipped(smooth: NDArray[np.float64], scan: Scan, order: int, half_window: float) -> NDArray[np.float64]:
    """Clip peaks off; the ends are continued so that a steep rise to low angles is not taken for a peak."""
    from pybaselines import Baseline

    window = min(max(3, round(half_window / scan.step)), (smooth.size - 1) // 2)
    left = _line(smooth, window, max(2, round(_SMOOTH / scan.step)))
    right = np.full(window, smooth[-1])
    padded = np.concatenate([np.maximum(left, smooth[0]), smooth, right])
    floor, _ = Baseline().snip(
        padded, max_half_window=window, decreasing=True, filter_order=order, pad_kwargs={"mode": "edge"}
    )
    return np.asarray(np.minimum(floor[window : window + smooth.size], smooth))
