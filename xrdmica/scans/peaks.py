"""Find the peaks of a scan and measure them."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from xrdmica.scans.background import count_scale, estimate_background
from xrdmica.scans.profile import GroupFit, fit_group, pseudo_voigt
from xrdmica.scans.scan import Scan

__all__ = ["Peak", "find_peaks"]

# widths of the matched filters [degree]: instrument lines, clay lines, humps of swelling clays
_WIDTHS = (0.08, 0.13, 0.2, 0.32, 0.5, 0.8, 1.3, 2.1)
_WIDEST = 3.6
_REACH = 1.6  # a line is fitted over this many full widths to either side
_TOGETHER = 1.3  # lines closer than this many mean widths are fitted together
_LARGEST_GROUP = 6
_HOPELESS = 0.6  # share of the least significance below which a line may go together with others
_ROUNDS = 3
_MODEL_ERROR = 0.04  # share of a strong line that its true profile may differ from the pseudo-Voigt
_BACKGROUND_ERROR = 0.012  # share of the background by which its estimate may bulge
_BROAD = 0.7  # degree
_DOUBTFUL = 0.10  # share of the background below which a broad bulge is no peak
_LOST_TAILS = 0.1  # share of the area per degree of width that the background estimate takes from the tails
_FAR_SPACING = 20.0  # angstrom
_FREE_START = 0.3  # degree


@dataclass(frozen=True)
class Peak:
    """One fitted peak.

    Attributes
    ----------
    two_theta, two_theta_error : float
        Position for the area-weighted mean wavelength of the tube [degree], so that ``scan.radiation.d_spacing``
        applies to it; the K-alpha doublet is part of the fitted shape.
    d_spacing, d_error : float
        [angstrom].
    height : float
        Height of the whole peak above the background [counts].
    height_sigma : float
        Significance: height over its standard error.
    area, area_error : float
        Integrated intensity above the background [counts degree]. The tails of broad lines are partly taken for
        background (a tenth of the area at a width of 1 degree, a fifth at 1.5), and the error allows for that.
    fwhm, fwhm_error : float
        Full width at half maximum of a single line, without the splitting of the doublet [degree].
    shape : float
        Lorentzian fraction of the pseudo-Voigt, 0 to 1.
    overlapped : bool
        Whether a neighbour is so close that both were measured only together.
    """

    two_theta: float
    two_theta_error: float
    d_spacing: float
    d_error: float
    height: float
    height_sigma: float
    area: float
    area_error: float
    fwhm: float
    fwhm_error: float
    shape: float
    overlapped: bool


@dataclass(frozen=True, eq=False)
class _Fitted:
    """One group: positions and widths of its lines, the peaks they became, and their sum, shape (n,)."""

    lines: tuple[tuple[float, float], ...]
    peaks: tuple[Peak, ...]
    model: NDArray[np.float64]


def find_peaks(
    scan: Scan, *, minimum_sigma: float = 4.0, background: NDArray[np.float64] | None = None
) -> tuple[Peak, ...]:
    """Find and measure the peaks of a scan.

    Matched filters of eight widths search the counts above the background; what is found is fitted in groups of
    pseudo-Voigt lines, and what the fit leaves over is searched again, so that shoulders come out as well.

    Parameters
    ----------
    scan : Scan
        The scan.
    minimum_sigma : float
        Smallest significance of a peak, in standard errors of its height.
    background : ndarray, shape (n,), optional
        Background [counts]; estimated when not given.

    Returns
    -------
    tuple of Peak
        By rising angle. Errors hold counting statistics and the misfit of the profile, not the alignment of the
        diffractometer.

    References
    ----------
    M.A. Mariscotti, Nucl. Instrum. Methods 50 (1967) 309, for the search by smoothed second differences.
    """
    base = estimate_background(scan) if background is None else background
    noise = _noise(scan, base)
    net = scan.counts - base
    model = np.zeros_like(net)
    groups: list[_Fitted] = []
    for turn in range(_ROUNDS):
        allowed = np.hypot(noise, _MODEL_ERROR * model) if turn else noise
        lines = [(peak.two_theta, peak.fwhm) for group in groups for peak in group.peaks]
        found = _search(scan, net - model, allowed, base, minimum_sigma, lines)
        if not found:
            break
        groups = _fit(scan, net, noise, base, sorted(lines + found), groups, minimum_sigma)
        model = np.sum([group.model for group in groups], axis=0)
    peaks = sorted((peak for group in groups for peak in group.peaks), key=lambda peak: peak.two_theta)
    return tuple(peak for peak in peaks if _stands_free(scan, noise, peak.two_theta, peak.fwhm))


def _stands_free(scan: Scan, noise: NDArray[np.float64], centre: float, width: float) -> bool:
    """Whether a peak at very low angle rises out of the tail of the direct beam instead of being that tail.

    Beyond 20 angstrom the beam and its stop make humps of their own at the start of the scan: the counts have to fall
    to a valley between the start and the peak.
    """
    x = scan.two_theta
    if scan.radiation.d_spacing(centre) < _FAR_SPACING or centre - 1.5 * width > x[0] + _FREE_START:
        return True
    half = max(1, round(0.05 / scan.step))
    smooth = np.convolve(np.pad(scan.counts, half, mode="edge"), np.full(2 * half + 1, 1 / (2 * half + 1)), "valid")
    at = int(np.searchsorted(x, centre))
    valley = int(np.argmin(smooth[: at + 1]))
    rise = smooth[min(at, x.size - 1)] - smooth[valley]
    return valley > 2 * half and bool(rise > 3 * noise[min(at, x.size - 1)] / np.sqrt(2 * half + 1))


def _noise(scan: Scan, base: NDArray[np.float64]) -> NDArray[np.float64]:
    """Expected standard error of every point, from smoothed variance and raised when the scan is noisier than it says."""
    kernel = np.full(5, 0.2)
    variance = np.convolve(np.pad(scan.sigma**2, 2, mode="edge"), kernel, mode="valid")
    variance = np.maximum(variance, np.minimum(base * count_scale(scan), scan.sigma**2))
    sigma = np.sqrt(variance)
    second = (scan.counts[2:] - 2 * scan.counts[1:-1] + scan.counts[:-2]) / np.sqrt(6.0) / sigma[1:-1]
    # median absolute value of a normal deviate is 0.6745
    ratio = float(np.median(np.abs(second))) / 0.6745
    return np.asarray(sigma * max(1.0, ratio if ratio > 1.15 else 1.0))


def _search(
    scan: Scan, rest: NDArray[np.float64], noise: NDArray[np.float64], base: NDArray[np.float64], minimum: float,
    taken: list[tuple[float, float]],
) -> list[tuple[float, float]]:  # fmt: skip
    """Positions and widths [degree] where a matched filter stands out, strongest first and none beside a stronger one."""
    step = scan.step
    best: list[tuple[float, float, float]] = []
    for width in _WIDTHS:
        if width < 2.2 * step or 2.5 * width > np.ptp(scan.two_theta):
            continue
        score = _filtered(rest, noise, base, width, step)
        top = np.flatnonzero((score[1:-1] > minimum) & (score[1:-1] >= score[:-2]) & (score[1:-1] > score[2:])) + 1
        best += [(float(score[i]), float(scan.two_theta[i]), width) for i in top]
    found: list[tuple[float, float]] = []
    for _, at, width in sorted(best, reverse=True):
        clash = any(
            abs(at - other) < 0.55 * max(width, min(other_width, 2.5 * width)) for other, other_width in found
        ) or any(abs(at - other) < 0.4 * min(width, other_width) for other, other_width in taken)
        if not clash and _stands_free(scan, noise, at, width):
            found.append((at, width))
    return found


def _filtered(
    rest: NDArray[np.float64], noise: NDArray[np.float64], base: NDArray[np.float64], width: float, step: float
) -> NDArray[np.float64]:
    """Significance of a Gaussian of the given full width at every point, insensitive to offset and slope."""
    half = max(3, round(1.5 * width / step))
    u = np.arange(-half, half + 1) * step / width
    kernel = np.exp(-4 * np.log(2) * u**2)
    kernel -= kernel.mean()
    pad = ((half, half),)
    signal = np.convolve(np.pad(rest, pad, mode="edge"), kernel, mode="valid")
    variance = np.convolve(np.pad(noise**2, pad, mode="edge"), kernel**2, mode="valid")
    if width >= _BROAD:
        # a bulge of the background estimate is no peak, however many counts it has
        variance = variance + (_BACKGROUND_ERROR * base * np.sum(kernel * np.exp(-4 * np.log(2) * u**2))) ** 2
    score = signal / np.sqrt(np.maximum(variance, 1e-30))
    edge = max(2, round(0.4 * width / step))
    score[:edge] = score[-edge:] = 0.0
    return np.asarray(score)


def _groups(seeds: list[tuple[float, float]]) -> list[list[tuple[float, float]]]:
    """Cut the sorted seeds where neighbours are far apart, and long chains at their widest gaps."""
    pending = [seeds] if seeds else []
    done: list[list[tuple[float, float]]] = []
    while pending:
        chain = pending.pop()
        gaps = [(right[0] - left[0]) / (0.5 * (left[1] + right[1])) for left, right in pairwise(chain)]
        cut = int(np.argmax(gaps)) if gaps else 0
        if gaps and (gaps[cut] > 2 * _TOGETHER or len(chain) > _LARGEST_GROUP):
            pending += [chain[: cut + 1], chain[cut + 1 :]]
        else:
            done.append(chain)
    return sorted(done)


def _fit(
    scan: Scan, net: NDArray[np.float64], noise: NDArray[np.float64], base: NDArray[np.float64],
    seeds: list[tuple[float, float]], before: list[_Fitted], minimum: float,
) -> list[_Fitted]:  # fmt: skip
    """Fit the groups that are new, strongest first, each with the lines of the others taken off."""
    x = scan.two_theta
    known = {group.lines: group for group in before}
    groups = [known.get(tuple(lines)) or _guess(scan, net, lines) for lines in _groups(seeds)]
    fresh = [number for number, group in enumerate(groups) if group.lines not in known]
    # neighbours that share a hump would count it twice in the first estimate
    total = np.sum([group.model for group in groups], axis=0)
    share = np.minimum(1.0, np.maximum(net, 0.0) / np.maximum(total, 1e-9))
    for number in fresh:
        groups[number] = replace(groups[number], model=groups[number].model * share)
    total = np.sum([group.model for group in groups], axis=0)
    tops = [max(float(np.interp(at, x, net)) for at, _ in group.lines) for group in groups]
    for number in sorted(fresh, key=lambda i: -tops[i]):
        others = total - groups[number].model
        groups[number] = _fit_one(scan, net - others, others, noise, base, list(groups[number].lines), minimum, known)
        total = others + groups[number].model
    return [group for group in groups if group.peaks]


def _guess(scan: Scan, net: NDArray[np.float64], lines: list[tuple[float, float]]) -> _Fitted:
    """First estimate of a group from the heights at its lines."""
    x = scan.two_theta
    model = np.zeros_like(net)
    for at, width in lines:
        span = slice(*np.searchsorted(x, (at - 8 * width, at + 8 * width)))
        height = max(float(np.interp(at, x, net)), 0.0)
        model[span] += height * pseudo_voigt(x[span], at, width, 0.3, scan.radiation)
    return _Fitted(tuple(lines), (), model)


def _fit_one(
    scan: Scan, rest: NDArray[np.float64], others: NDArray[np.float64], noise: NDArray[np.float64], base: NDArray[np.float64],
    group: list[tuple[float, float]], minimum: float, known: dict[tuple[tuple[float, float], ...], _Fitted],
) -> _Fitted:  # fmt: skip
    """Fit one group to the net counts without the `others`, dropping its weakest line until all that are left are significant."""
    x = scan.two_theta
    model = np.zeros_like(rest)
    least = 3 * scan.step
    while group:
        low = min(at - _REACH * max(width, least) for at, width in group)
        high = max(at + _REACH * max(width, least) for at, width in group)
        span = slice(*np.searchsorted(x, (low, high)))
        if x[span].size < 4 * len(group) + 3:
            break
        centres, widths = np.array(group).T
        fit = fit_group(x[span], rest[span], noise[span], base[span], centres, widths, scan.radiation)
        doubtful = np.interp(fit.centre, x, _DOUBTFUL * base + 0.5 * others)
        strength = np.where((fit.fwhm >= _BROAD) & (fit.amplitude < doubtful), 0.0, fit.significance)
        inside = (fit.centre > x[0]) & (fit.centre < x[-1]) & (fit.fwhm <= _WIDEST)
        strength = np.where(inside & np.isfinite(strength), strength, 0.0)
        strength = np.where(_twins(fit), 0.0, strength)
        if float(strength.min()) < minimum:
            out = _dropped(group, strength, minimum)
            group = [line for number, line in enumerate(group) if number not in out]
            if tuple(group) in known:
                return known[tuple(group)]
            continue
        peaks = []
        for i in range(len(group)):
            single = pseudo_voigt(x, fit.centre[i], fit.fwhm[i], fit.eta[i], scan.radiation)
            model += fit.amplitude[i] * single
            peaks.append(_peak(scan, fit, i))
        lines = tuple(sorted((peak.two_theta, peak.fwhm) for peak in peaks))
        return _Fitted(lines, tuple(_mark_overlaps(peaks)), model)
    return _Fitted((), (), model)


def _dropped(group: list[tuple[float, float]], strength: NDArray[np.float64], minimum: float) -> set[int]:
    """The weakest line, and others far below the limit that do not share their counts with one already dropped."""
    out: set[int] = set()
    for number in np.argsort(strength).tolist():
        at, width = group[number]
        alone = all(abs(at - group[other][0]) > 2 * _TOGETHER * max(width, group[other][1]) for other in out)
        if not out or (strength[number] < _HOPELESS * minimum and alone):
            out.add(number)
    return out


def _twins(fit: GroupFit) -> NDArray[np.bool_]:
    """Which lines are the weaker of two of like width that stand closer than half a width: these cannot be resolved."""
    gap = np.abs(fit.centre[:, None] - fit.centre)
    mean = 0.5 * (fit.fwhm[:, None] + fit.fwhm)
    ratio = fit.fwhm[:, None] / fit.fwhm
    close = (gap < 0.5 * mean) & (np.maximum(ratio, 1 / ratio) < 2.5)
    weaker = fit.area[:, None] < fit.area
    return np.asarray(np.any(close & weaker, axis=1))


def _peak(scan: Scan, fit: GroupFit, i: int) -> Peak:
    centre, width = float(fit.centre[i]), float(fit.fwhm[i])
    around = centre + np.linspace(-1.0, 1.0, 41) * max(0.5 * width, 0.2)
    share = float(pseudo_voigt(around, centre, width, float(fit.eta[i]), scan.radiation).max())
    d = float(scan.radiation.d_spacing(centre))
    error = float(fit.centre_error[i])
    lost = _LOST_TAILS * min(width, 1.5) * float(fit.area[i])
    return Peak(
        centre, error, d, d * float(np.radians(error) / 2 / np.tan(np.radians(centre) / 2)),
        float(fit.amplitude[i]) * share, float(fit.significance[i]), float(fit.area[i]), float(np.hypot(fit.area_error[i], lost)),
        width, float(fit.fwhm_error[i]), float(fit.eta[i]), bool(fit.correlation[i] > 0.5),
    )  # fmt: skip


def _mark_overlaps(peaks: list[Peak]) -> list[Peak]:
    """Also call overlapped what stands closer to a neighbour than one and a half mean widths."""
    out = []
    for i, peak in enumerate(peaks):
        near = any(
            abs(peak.two_theta - other.two_theta) < 0.75 * (peak.fwhm + other.fwhm) and other.height > 0.05 * peak.height
            for j, other in enumerate(peaks)
            if j != i
        )
        out.append(replace(peak, overlapped=peak.overlapped or near))
    return out
