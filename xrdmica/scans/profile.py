"""Pseudo-Voigt lines with the K-alpha doublet, and the least-squares fit of a group of them."""

from __future__ import annotations

import copy
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrdmica.radiation import Radiation

__all__ = ["GroupFit", "fit_group", "pseudo_voigt"]

_HALF_RADIAN = float(np.pi / 360)
_GAUSS = 4.0 * np.log(2.0)
_GAUSS_AREA = float(np.sqrt(np.pi / _GAUSS))  # area of a Gaussian of unit height and width
_LORENTZ_AREA = float(np.pi / 2)
_SHAPE_PRIOR = 1.2  # standard deviation of logit(eta): weak lines do not tell their shape
_PLACE_PRIOR = 1.5  # the same of the unbounded position and width, which the search gives: lets lines without counts rest
_WIDTH_RATIO = 4.0  # the fit may change the width found by the search by this factor
_EVALUATIONS = 20
_LONGEST_STEP = 1.5  # in the unbounded parameters of position, width and shape
_DAMPING, _LARGEST_DAMPING = 0.02, 1e4
_GAIN = 5e-4  # share of the misfit below which a further step is not worth its time
_BINS = 16  # points per full width that the fit needs
_RESTARTS = 3


def pseudo_voigt(
    x: NDArray[np.float64], centre: float, fwhm: float, eta: float, radiation: Radiation
) -> NDArray[np.float64]:
    """One reflection of unit single-line height, as the weighted sum over the lines of the tube.

    Parameters
    ----------
    x : ndarray, shape (n,)
        Scattering angle [degree].
    centre : float
        Position for the mean wavelength of the tube [degree].
    fwhm : float
        Full width at half maximum of each line [degree].
    eta : float
        Lorentzian fraction, 0 to 1.
    radiation : Radiation
        The tube.

    Returns
    -------
    ndarray, shape (n,)
        Profile.
    """
    out = np.zeros_like(x)
    half = np.radians(centre) / 2
    mean = radiation.mean_wavelength
    for wavelength, weight in zip(radiation.wavelengths, radiation.weights, strict=True):
        position = 2 * np.degrees(np.arcsin(min(np.sin(half) * wavelength / mean, 0.9999999)))
        u2 = ((x - position) / fwhm) ** 2
        out += weight * (eta / (1 + 4 * u2) + (1 - eta) * np.exp(-_GAUSS * u2))
    return out


@dataclass(frozen=True, eq=False)
class GroupFit:
    """Fitted lines of one group; every array has shape (k,).

    Attributes
    ----------
    centre, fwhm : ndarray
        [degree].
    eta : ndarray
        Lorentzian fraction.
    amplitude : ndarray
        Height of a single line [counts].
    area : ndarray
        [counts degree].
    centre_error, fwhm_error, height_error, area_error : ndarray
        Standard errors.
    significance : ndarray
        Amplitude over its standard error when position, width and shape are held.
    correlation : ndarray
        Largest correlation of the amplitude with that of another line of the group.
    """

    centre: NDArray[np.float64]
    fwhm: NDArray[np.float64]
    eta: NDArray[np.float64]
    amplitude: NDArray[np.float64]
    area: NDArray[np.float64]
    centre_error: NDArray[np.float64]
    fwhm_error: NDArray[np.float64]
    height_error: NDArray[np.float64]
    area_error: NDArray[np.float64]
    significance: NDArray[np.float64]
    correlation: NDArray[np.float64]


class _Group:
    """Model of one group in unbounded parameters: per line shift, width, shape, amplitude; then offset and tilt."""

    def __init__(
        self, x: NDArray[np.float64], y: NDArray[np.float64], sigma: NDArray[np.float64], background: NDArray[np.float64],
        centres: NDArray[np.float64], widths: NDArray[np.float64], radiation: Radiation, step: float,
    ) -> None:  # fmt: skip
        self.x, self.y, self.weight, self.radiation = x, y, 1 / sigma, radiation
        self.centres, self.widths, self.step = centres, widths, step
        self.count = len(centres)
        self.ratios = np.array(radiation.wavelengths)[:, None] / radiation.mean_wavelength
        stiff = np.tile([1 / _PLACE_PRIOR, 1 / _PLACE_PRIOR, 1 / _SHAPE_PRIOR, 0.0], self.count)
        self.prior = np.append(stiff, [1.0, 1.0])
        self.shares = np.array(radiation.weights)
        self.reach = np.maximum(0.6 * widths, 2 * step)
        self.least = np.maximum(widths / _WIDTH_RATIO, 1.2 * step)
        self.most = np.maximum(widths * _WIDTH_RATIO, 3 * step)
        self.u = (x - x.mean()) / max(float(np.ptp(x)) / 2, 1e-9)
        # the background is known to a few percent; its correction must not swallow broad lines
        self.loose = max(0.03 * float(np.median(background)), 0.5 * float(np.median(sigma)))

    def start(self) -> NDArray[np.float64]:
        """Parameters to begin with: heights from a linear fit at the given positions and widths."""
        eta = np.full(self.count, 0.5)
        basis = [pseudo_voigt(self.x, c, w, 0.5, self.radiation) for c, w in zip(self.centres, self.widths, strict=True)]
        matrix = np.vstack([*basis, self.loose * np.ones_like(self.x)]).T * self.weight[:, None]
        amplitude = np.linalg.lstsq(matrix, self.y * self.weight, rcond=None)[0][: self.count]
        floor = 0.5 * float(np.median(1 / self.weight))
        t = (self.widths - self.least) / (self.most - self.least)
        t = np.clip(t, 0.02, 0.98)
        per_line = [np.zeros(self.count), np.log(t / (1 - t)), np.log(eta / (1 - eta)), np.maximum(amplitude, floor)]
        return np.concatenate([np.array(per_line).T.ravel(), [0.0, 0.0]])

    def physical(self, p: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
        """Centre, width, shape and amplitude of every line."""
        lines = p[:-2].reshape(self.count, 4)
        logistic = 1 / (1 + np.exp(-np.minimum(np.maximum(lines[:, 1:3], -30.0), 30.0)))
        return (
            self.centres + self.reach * np.tanh(lines[:, 0]),
            self.least + (self.most - self.least) * logistic[:, 0],
            logistic[:, 1],
            lines[:, 3],
        )

    def at_bound(self, p: NDArray[np.float64]) -> NDArray[np.bool_]:
        """Which lines ran to the end of the range that is open to their position or width."""
        centre, fwhm, _, _ = self.physical(p)
        far = np.abs(centre - self.centres) > 0.97 * self.reach
        return np.asarray(far | (fwhm < 1.02 * self.least) & (fwhm > 2 * self.step) | (fwhm > 0.98 * self.most))

    def mixed(self, parts: NDArray[np.float64]) -> NDArray[np.float64]:
        """Sum over the lines of the tube by their shares."""
        return np.asarray((self.shares @ parts.reshape(len(self.shares), -1)).reshape(parts.shape[1:]))

    def evaluate(self, p: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Weighted residuals, shape (n,), and their derivatives."""
        centre, fwhm, eta, amplitude = self.physical(p)
        n = self.x.size
        jacobian = np.empty((n, p.size))
        shift_slope = self.reach - (centre - self.centres) ** 2 / self.reach
        width_slope = (fwhm - self.least) * (self.most - fwhm) / (self.most - self.least)
        sine = np.minimum(self.ratios * np.sin(centre * _HALF_RADIAN), 0.9999999)
        # axes: line of the tube, point, reflection; the lines move together within a percent when the centre moves
        u = (self.x[:, None] - (np.arcsin(sine) / _HALF_RADIAN)[:, None, :]) / fwhm
        square = u * u
        lorentz = 1 / (1 + 4 * square)
        gauss = np.exp(-_GAUSS * square)
        difference = lorentz - gauss
        by_u = u * (eta * lorentz * lorentz * -8 + gauss * ((eta - 1) * (2 * _GAUSS)))
        profile = self.mixed(gauss + eta * difference)
        by_centre = self.mixed(by_u) * (-amplitude * shift_slope / fwhm)
        by_width = self.mixed(by_u * u) * (-amplitude * width_slope / fwhm)
        by_eta = self.mixed(difference) * (amplitude * eta * (1 - eta))
        model = profile @ amplitude + self.loose * (p[-2] + p[-1] * self.u)
        jacobian[:, 0:-2:4] = by_centre
        jacobian[:, 1:-2:4] = by_width
        jacobian[:, 2:-2:4] = by_eta
        jacobian[:, 3:-2:4] = profile
        jacobian[:, -2] = self.loose
        jacobian[:, -1] = self.loose * self.u
        jacobian *= self.weight[:, None]
        return (model - self.y) * self.weight, jacobian


def fit_group(
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    sigma: NDArray[np.float64],
    background: NDArray[np.float64],
    centres: NDArray[np.float64],
    widths: NDArray[np.float64],
    radiation: Radiation,
) -> GroupFit:
    """Fit overlapping lines together.

    Parameters
    ----------
    x, y, sigma, background : ndarray, shape (n,)
        Angle [degree], counts above background, their standard errors, background.
    centres, widths : ndarray, shape (k,)
        Starting positions and full widths [degree].
    radiation : Radiation
        The tube.

    Returns
    -------
    GroupFit
        Errors are those of the covariance, scaled up by the reduced chi-square around each line when that is above 1,
        never down.
    """
    step = float(np.median(np.diff(x)))
    for _ in range(_RESTARTS):
        group = _Group(x, y, sigma, background, centres, widths, radiation, step)
        solution = _solve(_binned(group))
        if not group.at_bound(solution).any():
            break
        # a start that was too far off: go on from where the line has run to
        centres, widths, _, _ = group.physical(solution)
        centres = np.clip(centres, x[0], x[-1])
        widths = np.clip(widths, 1.5 * step, 0.5 * float(np.ptp(x)))
    return _summary(group, solution)


def _binned(group: _Group) -> _Group:
    """Mean points wherever all the lines are much wider than the step: the same fit with fewer points.

    A sixteenth of the full width changes heights by less than a thousandth.
    """
    x, waves = group.x, group.radiation.wavelengths
    split = np.degrees(np.tan(group.centres * _HALF_RADIAN)) * 2 * (max(waves) - min(waves)) / group.radiation.mean_wavelength
    away = np.abs(x[:, None] - group.centres) - group.widths - split
    needed = np.maximum(group.widths / _BINS, away / 10).min(axis=1)
    gaps = np.maximum(needed / group.step, 1.0).astype(int).tolist()
    if max(gaps) == 1:
        return group
    starts = []
    at, last = 0, len(gaps) - 1
    while at <= last:
        starts.append(at)
        at += min(gaps[at], gaps[min(at + gaps[at] - 1, last)])
    if len(starts) > 0.8 * x.size:
        return group
    first = np.array(starts)
    number = np.diff(starts, append=x.size)
    out = copy.copy(group)
    out.x, out.y, out.u = (np.add.reduceat(values, first) / number for values in (x, group.y, group.u))
    out.weight = number / np.sqrt(np.add.reduceat(group.weight**-2, first))
    return out


def _solve(group: _Group) -> NDArray[np.float64]:
    """Least-squares parameters of one group, by damped steps on the normal equations.

    The priors keep the equations regular, so that nothing dearer is needed for the few parameters of a group.
    """
    origin = group.start()
    p = origin
    stiff = group.prior**2
    residual, jacobian = group.evaluate(p)
    cost = float(residual @ residual)
    normal = jacobian.T @ jacobian + np.diag(stiff)
    slope = jacobian.T @ residual
    damping, raised = _DAMPING, 3.0
    for _ in range(_EVALUATIONS):
        step = np.linalg.solve(normal + np.diag(damping * np.diag(normal)), slope)
        lines = step[:-2].reshape(group.count, 4)
        lines[:, :3] = np.minimum(np.maximum(lines[:, :3], -_LONGEST_STEP), _LONGEST_STEP)
        trial = p - step
        residual, jacobian = group.evaluate(trial)
        new = float(residual @ residual + stiff @ (trial - origin) ** 2)
        if not new < cost:
            if damping > _LARGEST_DAMPING:
                break
            damping *= raised
            raised *= 2.0
            continue
        gained, cost, p = cost - new, new, trial
        if gained < _GAIN * cost:
            break
        agreement = min(1.0, gained / max(float(step @ (2 * slope - normal @ step)), gained))
        damping = max(damping * max(0.2, 1 - (2 * agreement - 1) ** 3), 1e-6)  # Nielsen's rule
        raised = 3.0
        normal = jacobian.T @ jacobian + np.diag(stiff)
        slope = jacobian.T @ residual + stiff * (p - origin)
    return p


def _summary(group: _Group, p: NDArray[np.float64]) -> GroupFit:
    residual, jacobian = group.evaluate(p)
    centre, fwhm, eta, amplitude = group.physical(p)
    freedom = max(group.x.size - 4 * group.count, 1)
    # misfit is judged beside each line, so that a badly described neighbour does not spoil the others
    squares = residual**2 * group.x.size / freedom
    near = np.abs(group.x[:, None] - centre) < 1.2 * fwhm
    inflation = np.maximum(1.0, squares @ near / np.maximum(near.sum(axis=0), 1))
    normal = jacobian.T @ jacobian + np.diag(group.prior**2)
    covariance = _inverse(normal)
    variances = np.maximum(np.diag(covariance), 0.0)[:-2].reshape(group.count, 4)
    errors = np.sqrt(variances * inflation[:, None])
    reach = group.reach * (1 - np.tanh(p[:-2:4]) ** 2)
    stretch = (fwhm - group.least) * (group.most - fwhm) / (group.most - group.least)
    per_height = fwhm * (eta * _LORENTZ_AREA + (1 - eta) * _GAUSS_AREA)
    area_error = np.empty(group.count)
    for i in range(group.count):
        factor = per_height[i] / fwhm[i]
        gradient = np.array([
            amplitude[i] * factor * stretch[i],
            amplitude[i] * fwhm[i] * (_LORENTZ_AREA - _GAUSS_AREA) * eta[i] * (1 - eta[i]),
            per_height[i],
        ])  # fmt: skip
        block = covariance[4 * i + 1 : 4 * i + 4, 4 * i + 1 : 4 * i + 4]
        area_error[i] = np.sqrt(max(float(gradient @ block @ gradient), 0.0) * inflation[i])
    linear = np.append(np.arange(3, 4 * group.count, 4), [p.size - 2, p.size - 1])
    held = _inverse(normal[np.ix_(linear, linear)])
    spread = np.sqrt(np.maximum(np.diag(held)[:-2], 1e-30))
    matrix = np.abs(held[:-2, :-2] / np.outer(spread, spread))
    np.fill_diagonal(matrix, 0.0)
    significance = amplitude / (spread * np.sqrt(inflation))
    # a position cannot be better known than that of a line free of neighbours; also holds at the end of an open range
    least = 0.25 * fwhm / np.maximum(np.abs(significance), 1e-6)
    return GroupFit(
        centre, fwhm, eta, amplitude, amplitude * per_height,
        np.maximum(errors[:, 0] * reach, least), np.maximum(errors[:, 1] * stretch, least),
        errors[:, 3], area_error, significance, matrix.max(axis=1, initial=0.0),
    )  # fmt: skip


def _inverse(normal: NDArray[np.float64]) -> NDArray[np.float64]:
    """Inverse of normal equations brought to unit diagonal; lines that cannot be told apart get large errors, not none."""
    scale = 1 / np.sqrt(np.maximum(np.diag(normal), 1e-30))
    unit = normal * np.outer(scale, scale) + 1e-10 * np.eye(scale.size)
    return np.asarray(np.linalg.inv(unit) * np.outer(scale, scale))
