"""Checks that every scan has to pass, whatever file it came from, and the decisions that are told as notes."""

from __future__ import annotations

from dataclasses import replace
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import ScanError
from xrdmica.radiation import Radiation
from xrdmica.scans.read.raw import RawScan
from xrdmica.scans.scan import MINIMUM_POINTS, Mount, RadiationOrigin, Scan
from xrdmica.scans.treatment import Treatment

__all__ = ["finish"]

_AGAIN = "export the scan again as it was measured"
_LARGEST_COUNT = 1e12
_REPEAT_SHARE = 0.01  # of the points: more repeats come from angles with too few decimals
_REPEAT_SIGMA = 4.0


def finish(
    raw: RawScan,
    source: str,
    *,
    radiation: Radiation | None,
    radiation_origin: RadiationOrigin,
    mount: Mount,
    treatment: Treatment,
) -> Scan:
    """Check the columns of a file and turn them into a Scan.

    Parameters
    ----------
    raw : RawScan
        From a reader.
    source : str
        File, for messages and for the Scan.
    radiation : Radiation or None
        Tube from an option or the sheet; None to use the header.
    radiation_origin : str
        Where `radiation` comes from.
    mount, treatment
        State of the specimen.

    Raises
    ------
    ScanError
        If the columns are no scan.
    """
    raw = _finite(raw, source)
    if raw.two_theta.size < MINIMUM_POINTS:
        raise ScanError(
            f"{source}: only {raw.two_theta.size} points",
            fix=f"export the whole scan, at least {MINIMUM_POINTS} points",
        )
    raw = _rising(raw, source)
    raw = _inside(raw, source)
    _check_counts(raw, source)
    raw = _without_blind_ends(raw)
    if raw.two_theta.size < MINIMUM_POINTS:
        raise ScanError(f"{source}: only {raw.two_theta.size} points hold counts", fix=_AGAIN)
    if np.ptp(raw.intensity) == 0:
        raise ScanError(f"{source}: every point has the same intensity, {raw.intensity[0]:g}", fix=_AGAIN)
    counts, sigma, notes = _statistics(raw, source)
    tube, origin, tube_notes = _tube(raw, source, radiation, radiation_origin)
    return Scan(
        raw.two_theta.copy(), counts, sigma, tube, origin, source, mount, treatment,
        (*raw.notes, *notes, *tube_notes), MappingProxyType(dict(raw.metadata)),
    )  # fmt: skip


def _finite(raw: RawScan, source: str) -> RawScan:
    columns = [raw.two_theta, raw.intensity, *([] if raw.sigma is None else [raw.sigma])]
    bad = ~np.all(np.isfinite(columns), axis=0)
    if bad.any():
        raise ScanError(
            f"{source}, {raw.place(int(np.argmax(bad)))}: a value is not a finite number",
            fix="remove the points that were not measured or export the scan again",
        )
    return raw


def _rising(raw: RawScan, source: str) -> RawScan:
    """Sort a scan that was recorded downwards; refuse every other disorder."""
    steps = np.diff(raw.two_theta)
    if np.all(steps < 0):
        return raw.points(slice(None, None, -1)).noted("the angles fall in the file, the scan was turned round")
    bad = steps <= 0
    if not bad.any():
        return raw
    merged = _merged(raw, steps)
    if merged is not None:
        return merged
    at = int(np.argmax(bad)) + 1
    where = f"{source}, {raw.place(at)}"
    if steps[at - 1] == 0:
        raise ScanError(
            f"{where}: the angle {raw.two_theta[at]:g} stands twice",
            fix="export with more decimals or remove the repeat",
        )
    if bad.sum() <= 10:
        raise ScanError(
            f"{where}: the angle goes back from {raw.two_theta[at - 1]:g} to {raw.two_theta[at]:g}",
            why="the file seems to hold several scans or overlapping ranges one below the other",
            fix="write one file per scan",
        )
    raise ScanError(f"{where}: the angles do not rise", fix="export the scan sorted by two-theta")


def _merged(raw: RawScan, steps: NDArray[np.float64]) -> RawScan | None:
    """The scan with repeated angles merged, when that loses nothing; None when it would.

    Harmless are rows that stand twice word for word, and the few points at which two ranges of one scan meet, when their
    counts agree within chance.
    """
    again = np.flatnonzero(steps == 0) + 1
    if np.any(steps < 0) or (again.size > 1 and np.any(np.diff(again) == 1)):
        return None
    first, second = raw.intensity[again - 1], raw.intensity[again]
    same = bool(np.all(first == second))
    few = again.size <= max(1.0, _REPEAT_SHARE * steps.size)
    near = np.abs(first - second) <= _REPEAT_SIGMA * np.sqrt(np.maximum(first + second, 1.0))
    if not same and not (few and near.all()):
        return None
    intensity = raw.intensity.copy()
    intensity[again - 1] = (first + second) / 2
    keep = np.ones(intensity.size, dtype=bool)
    keep[again] = False
    how = "the same row" if same else "with counts that agree; their mean was taken"
    words = f"{again.size} angle(s) stood twice, {how}; the first is {raw.two_theta[again[0]]:g} ({raw.place(int(again[0]))})"
    return replace(raw, intensity=intensity).points(keep).noted(words)


def _inside(raw: RawScan, source: str) -> RawScan:
    """Angles between 0 and 180 degrees, in degrees."""
    angles = raw.two_theta
    span, step = float(np.ptp(angles)), float(np.median(np.diff(angles)))
    if angles[-1] >= 180 or angles[0] < -10:
        at = angles.size - 1 if angles[-1] >= 180 else 0
        raise ScanError(
            f"{source}, {raw.place(at)}: {angles[at]:g} is no two-theta in degrees",
            fix="the first column must be two-theta between 0 and 180 degrees",
        )
    if angles[-1] < 3.2 and step < 0.01:
        raise ScanError(
            f"{source}: the angles end at {angles[-1]:.4g} with steps of {step:.2g}, which looks like radians",
            fix="export two-theta in degrees or add the option --axis radians",
        )
    keep = angles > 0
    if not keep.all():
        raw = raw.points(keep).noted(f"{int((~keep).sum())} points at or below 0 degrees were left out")
    if span < 1.0:
        raise ScanError(f"{source}: the scan covers only {span:.3g} degrees", fix="export the whole scan")
    return raw


def _check_counts(raw: RawScan, source: str) -> None:
    for column, word in ((raw.intensity, "intensity"), (raw.sigma, "standard error")):
        if column is None:
            continue
        if np.any(column < 0):
            at = int(np.argmax(column < 0))
            raise ScanError(
                f"{source}, {raw.place(at)}: the {word} is negative, {column[at]:g}",
                fix="export raw counts, before any background was taken off",
            )
        if np.any(column > _LARGEST_COUNT):
            at = int(np.argmax(column > _LARGEST_COUNT))
            raise ScanError(f"{source}, {raw.place(at)}: the {word} {column[at]:.3g} is impossibly large", fix=_AGAIN)


def _without_blind_ends(raw: RawScan) -> RawScan:
    """Cut runs of zeros before and after the window that the detector saw.

    A run counts as blind only when the counts beside it are so high that zeros cannot be chance.
    """
    filled = np.flatnonzero(raw.intensity > 0)
    if filled.size == 0:
        return raw
    n = raw.intensity.size
    first, last = int(filled[0]), int(filled[-1]) + 1
    near = 20
    low = first if first >= 3 and np.mean(raw.intensity[first : first + near]) > 10 else 0
    high = last if n - last >= 3 and np.mean(raw.intensity[max(0, last - near) : last]) > 10 else n
    if low == 0 and high == n:
        return raw
    return raw.points(slice(low, high)).noted(
        f"{low + n - high} points with zero counts outside the measured window were cut, "
        f"{raw.two_theta[low]:.2f} to {raw.two_theta[high - 1]:.2f} degrees remain"
    )


def _statistics(raw: RawScan, source: str) -> tuple[NDArray[np.float64], NDArray[np.float64], list[str]]:
    """Counts and their standard errors."""
    counts = raw.intensity.astype(float).copy()
    notes = []
    factor = 1.0
    if raw.unit == "counts per second":
        if raw.seconds is None:
            notes.append(
                "intensities are counts per second and the counting time is not known, "
                "so they are treated as if each point had been counted for 1 s"
            )
        else:
            factor = raw.seconds
            notes.append(f"counts per second were multiplied by the counting time of {factor:g} s per step")
    elif raw.unit == "unknown" and raw.sigma is None and np.max(counts) < 30 and np.any(counts != np.round(counts)):
        notes.append("intensities are small and not whole numbers: they may be scaled, and errors are then too large")
    counts *= factor
    if raw.sigma is None:
        return counts, np.sqrt(np.maximum(counts, 1.0)), notes
    sigma = raw.sigma * factor
    empty = sigma <= 0
    if empty.all():
        raise ScanError(f"{source}: every standard error is zero", fix="leave out the column of errors")
    if empty.any():
        sigma = np.where(empty, float(np.min(sigma[~empty])), sigma)
        notes.append(f"{int(empty.sum())} standard errors of zero were replaced by the smallest one in the file")
    return counts, sigma, notes


def _tube(
    raw: RawScan, source: str, given: Radiation | None, origin: RadiationOrigin
) -> tuple[Radiation, RadiationOrigin, list[str]]:
    """Option or sheet before header before an assumption that is told."""
    if given is not None:
        said = raw.radiation
        if said is not None and abs(said.mean_wavelength - given.mean_wavelength) > 0.01:
            return given, origin, [f"radiation {given.name} was used as asked, although the file names {said.name}"]
        return given, origin, []
    if raw.radiation_conflict is not None:
        raise ScanError(
            f"{source}: {raw.radiation_conflict}",
            fix="say which is right with the option --radiation or in the sample sheet",
        )
    if raw.radiation is not None:
        return raw.radiation, "file header", []
    note = "the file does not name the radiation: Cu K-alpha was assumed, all spacings depend on it"
    return Radiation.tube("Cu"), "assumed", [note]
