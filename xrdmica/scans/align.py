"""The angle scale of a scan against lines of known spacing: zero error or displacement of the specimen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import ScanError
from xrdmica.scans.peaks import Peak, find_peaks
from xrdmica.scans.scan import Scan

__all__ = [
    "ANGLE_SCALES", "STANDARDS", "AngleShift", "ShiftKind", "aligned", "aligned_by", "shift_from_lines", "shift_from_orders",
]  # fmt: skip

ShiftKind = Literal["zero", "displacement"]

# spacings [angstrom] of lines that stand free of others; all from memory of handbook tables.
# Quartz 100, 101, 110, 112; silicon 111, 220, 311 (a = 5.4312); corundum 012, 104, 113, 116 (SRM 676);
# zincite 100, 002, 101, 110; fluorite 111, 220, 311 (a = 5.463); fluorophlogopite 001 to 005 (SRM 675, d = 9.98104).
STANDARDS: dict[str, tuple[float, ...]] = {
    "quartz": (4.2550, 3.3435, 2.4569, 1.8179),
    "silicon": (3.1357, 1.9202, 1.6376),
    "corundum": (3.4797, 2.5508, 2.0853, 1.6014),
    "zincite": (2.8143, 2.6033, 2.4759, 1.6247),
    "fluorite": (3.1541, 1.9315, 1.6472),
    "fluorophlogopite": (9.98104, 4.99052, 3.32701, 2.49526, 1.99621),
}
# about the basal spacing [angstrom] of minerals whose orders are checked among themselves
_SERIES = {"mica": 10.0, "kaolinite": 7.15, "talc": 9.35, "pyrophyllite": 9.2}
ANGLE_SCALES = (*STANDARDS, *_SERIES)
_WINDOW = 0.35  # degree, farther off a line is something else
_LEAST_SIGMA = 8.0
_WIDEST = 0.6  # degree
_SYSTEMATIC = 0.010  # degree: asymmetry and mixed lines spoil positions by this much, common practice
_LIMIT = 3.0  # standard errors by which a line may disagree


@dataclass(frozen=True)
class AngleShift:
    """Error of the angle scale, as it has to be taken off.

    Attributes
    ----------
    kind : str
        ``"zero"``: the same everywhere; ``"displacement"``: in proportion to cos(theta), from a specimen above
        (positive) or below the axis.
    shift, error : float
        Observed minus true angle at theta = 0, and its standard error [degree].
    lines : tuple of (float, float)
        True spacing [angstrom] of every line used, and by how much it still disagrees [degree].
    checked : bool
        Whether there were more lines than unknowns, so that they could disagree.
    basis : str
        What the lines are.
    """

    kind: ShiftKind
    shift: float
    error: float
    lines: tuple[tuple[float, float], ...]
    checked: bool
    basis: str

    def displacement(self, radius: float) -> float | None:
        """Height of the specimen above the axis [same unit as `radius` of the goniometer]; None for a zero error."""
        return float(np.radians(self.shift)) * radius / 2 if self.kind == "displacement" else None


def _factor(kind: ShiftKind, two_theta: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.cos(np.radians(two_theta) / 2) if kind == "displacement" else np.ones_like(two_theta)


def _nearest(peaks: Sequence[Peak], angle: float) -> Peak | None:
    """The strongest sharp peak near an angle."""
    sharp = [peak for peak in peaks if peak.height_sigma > _LEAST_SIGMA and peak.fwhm < _WIDEST]
    near = [peak for peak in sharp if abs(peak.two_theta - angle) < _WINDOW]
    return max(near, key=lambda peak: peak.area, default=None)


def _agreeing(
    scan: Scan, spacings: NDArray[np.float64], rest: NDArray[np.float64], error: NDArray[np.float64], basis: str
) -> None:
    worst = int(np.argmax(np.abs(rest) / error))
    if abs(rest[worst]) > _LIMIT * error[worst]:
        listed = ", ".join(f"{d:.4g} A by {r:+.3f}" for d, r in zip(spacings, rest, strict=True))
        raise ScanError(
            f"{scan.source or 'scan'}: the lines of {basis} disagree about the angle scale",
            why=f"after the best shift they are off, in degrees: {listed}",
            fix="check which lines belong to the standard, or leave the scale as it is",
        )


def shift_from_lines(
    scan: Scan, standard: str | Sequence[float], *, kind: ShiftKind = "displacement", peaks: Sequence[Peak] | None = None
) -> AngleShift:
    """Shift of the angle scale from lines of known spacing.

    Parameters
    ----------
    scan : Scan
        The scan.
    standard : str or sequence of float
        A key of `STANDARDS`, or spacings [angstrom].
    kind : str
        ``"displacement"`` (the usual error of mounts) or ``"zero"``; few lines cannot tell the two apart.
    peaks : sequence of Peak, optional
        Found peaks; searched when not given.

    Returns
    -------
    AngleShift
        With `checked` False when only one line was there.

    Raises
    ------
    ScanError
        If no line is found, or the lines disagree by more than three standard errors.
    """
    basis, known = _lines(standard)
    angles = scan.radiation.two_theta(known)
    inside = np.isfinite(angles) & (angles > scan.two_theta[0]) & (angles < scan.two_theta[-1])
    found = find_peaks(scan) if peaks is None else peaks
    pairs = [(d, angle, peak) for d, angle in zip(known[inside], angles[inside], strict=True) if (peak := _nearest(found, angle))]
    if not pairs:
        raise ScanError(
            f"{scan.source or 'scan'}: no line of {basis} was found within {_WINDOW} degrees of its place",
            fix="leave the scale as it is, or name lines that are in the scan",
        )
    d, true, off, error = (
        np.array([pair[0] for pair in pairs]), np.array([pair[1] for pair in pairs]),
        np.array([pair[2].two_theta - pair[1] for pair in pairs]),
        np.array([np.hypot(pair[2].two_theta_error, _SYSTEMATIC) for pair in pairs]),
    )  # fmt: skip
    factor = _factor(kind, true)
    weight = 1 / error**2
    strength = float(np.sum(weight * factor**2))
    shift = float(np.sum(weight * factor * off)) / strength
    rest = off - shift * factor
    _agreeing(scan, d, rest, error, basis)
    lines = tuple((float(a), float(b)) for a, b in zip(d, rest, strict=True))
    return AngleShift(kind, shift, strength**-0.5, lines, len(pairs) > 1, basis)


def _lines(standard: str | Sequence[float]) -> tuple[str, NDArray[np.float64]]:
    if not isinstance(standard, str):
        return "the given spacings", np.array(sorted(standard, reverse=True), dtype=float)
    if standard not in STANDARDS:
        raise ScanError(f"standard {standard!r} is not known", fix=f"choose one of {', '.join(STANDARDS)} or give spacings")
    return standard, np.array(STANDARDS[standard])


def shift_from_orders(
    scan: Scan, spacing: float, orders: Sequence[int] = (1, 2, 3, 5), *, kind: ShiftKind = "displacement",
    peaks: Sequence[Peak] | None = None,
) -> tuple[AngleShift, float]:  # fmt: skip
    """Shift from the orders of one basal series among themselves, whose spacing is found at the same time.

    Parameters
    ----------
    scan : Scan
        The scan.
    spacing : float
        About the basal spacing of the series [angstrom], such as 10.0 for mica.
    orders : sequence of int
        Orders to look for.
    kind : str
        As in `shift_from_lines`.
    peaks : sequence of Peak, optional
        Found peaks; searched when not given.

    Returns
    -------
    AngleShift
        The shift.
    float
        Basal spacing on the corrected scale [angstrom].

    Raises
    ------
    ScanError
        If fewer than three orders are found, so that nothing would be checked, or they disagree.
    """
    found = find_peaks(scan) if peaks is None else peaks
    half = scan.radiation.mean_wavelength / 2
    seen = []
    for order in sorted(set(orders)):
        angle = float(scan.radiation.two_theta(spacing / order))
        peak = _nearest(found, angle) if np.isfinite(angle) else None
        if peak is not None:
            seen.append((order, peak))
    if len(seen) < 3:
        raise ScanError(
            f"{scan.source or 'scan'}: only {len(seen)} orders of {spacing:g} A were found",
            why="two unknowns need at least three to be checked",
            fix="use lines of quartz or of an added standard",
        )
    number = np.array([order for order, _ in seen], dtype=float)
    observed = np.array([peak.two_theta for _, peak in seen])
    error = np.array([np.hypot(peak.two_theta_error, _SYSTEMATIC) for _, peak in seen])
    d, shift = spacing, 0.0
    covariance = np.eye(2)
    for _ in range(8):
        sine = np.minimum(number * half / d, 0.999999)
        true = 2 * np.degrees(np.arcsin(sine))
        slopes = np.column_stack([-2 * np.degrees(sine / np.sqrt(1 - sine**2)) / d, _factor(kind, true)]) / error[:, None]
        covariance = np.linalg.inv(slopes.T @ slopes)
        step = covariance @ slopes.T @ ((observed - true - shift * _factor(kind, true)) / error)
        d, shift = d + float(step[0]), shift + float(step[1])
    true = 2 * np.degrees(np.arcsin(np.minimum(number * half / d, 0.999999)))
    rest = observed - true - shift * _factor(kind, true)
    basis = f"the {spacing:g} A series"
    _agreeing(scan, d / number, rest, error, basis)
    lines = tuple((float(a), float(b)) for a, b in zip(d / number, rest, strict=True))
    return AngleShift(kind, shift, float(np.sqrt(covariance[1, 1])), lines, True, basis), d


def aligned(scan: Scan, shift: AngleShift) -> Scan:
    """The scan on the corrected scale, with a note that tells the shift and its error."""
    true = scan.two_theta - shift.shift * _factor(shift.kind, scan.two_theta)
    unchecked = "" if shift.checked else ", one line only and so not checked"
    size = f"{shift.shift:+.3f} ± {shift.error:.3f} degrees"
    note = f"angles were corrected for a {shift.kind} of {size} ({shift.basis}{unchecked})"
    return replace(scan, two_theta=true, notes=(*scan.notes, note))


def aligned_by(scan: Scan, name: str, *, kind: ShiftKind = "displacement") -> Scan:
    """The scan on the scale that a mineral in it gives.

    Parameters
    ----------
    scan : Scan
        The scan.
    name : str
        One of `ANGLE_SCALES`: a standard with lines of known spacing, or a mineral whose basal orders must agree.
    kind : str
        As in `shift_from_lines`.

    Raises
    ------
    ScanError
        If the name is not known, the lines are not there, or they disagree.
    """
    if name in _SERIES:
        return aligned(scan, shift_from_orders(scan, _SERIES[name], kind=kind)[0])
    if name not in STANDARDS:
        raise ScanError(f"angle scale {name!r} is not known", fix=f"choose one of {', '.join(ANGLE_SCALES)}")
    return aligned(scan, shift_from_lines(scan, name, kind=kind))
