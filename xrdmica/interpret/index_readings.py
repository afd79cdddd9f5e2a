"""How each index of the trade is read from scans and findings, or why it cannot be."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from xrdmica.interpret.width_calibration import WidthCalibration
from xrdmica.radiation import Radiation
from xrdmica.results import Findings, Swelling
from xrdmica.scans.peaks import Peak
from xrdmica.scans.scan import Scan

__all__ = [
    "MICAS", "Compute", "Found", "IndexInput", "MeasuredScan", "arkai", "b0", "biscaye", "esquevin", "expandable",
    "expandable_of_soil", "kuebler", "percent_illite", "scherrer", "width_for_copper",
]  # fmt: skip

MICAS = (
    "illite", "muscovite", "phengite", "paragonite", "celadonite", "glauconite", "phlogopite", "biotite", "annite", "lepidolite",
)  # fmt: skip
_SEEN = ("present", "trace")
Found = tuple[float, float | None, str] | str  # value, standard error, scan; or why not


@dataclass(frozen=True)
class MeasuredScan:
    """A scan with its peaks.

    Attributes
    ----------
    label : str
    scan : Scan
    peaks : tuple of Peak
    width : float
        Of the instrument [degree].
    shift : callable
        Two-theta -> what the specimen's displacement adds to it [degree].
    """

    label: str
    scan: Scan
    peaks: tuple[Peak, ...]
    width: float
    shift: Callable[[float], float]

    def spacing(self, peak: Peak) -> float:
        """Spacing of a peak with the displacement taken off [angstrom]."""
        return float(self.scan.radiation.d_spacing(peak.two_theta - self.shift(peak.two_theta)))

    def line(self, low: float, high: float) -> Peak | None:
        """The strongest peak between two spacings [angstrom]."""
        inside = [peak for peak in self.peaks if low <= self.spacing(peak) <= high]
        return max(inside, key=lambda peak: peak.area, default=None)


@dataclass(frozen=True)
class IndexInput:
    """What the indices are read from.

    Attributes
    ----------
    scans : tuple of MeasuredScan
    findings : Findings
    swelling : Swelling
    clay_percent : float or None
        Share of the clay fraction in the soil [wt %].
    calibration : WidthCalibration or None
    """

    scans: tuple[MeasuredScan, ...]
    findings: Findings
    swelling: Swelling
    clay_percent: float | None = None
    calibration: WidthCalibration | None = None

    def oriented(self, condition: str) -> MeasuredScan | None:
        """The first oriented scan of a condition."""
        return next((s for s in self.scans if s.scan.mount == "oriented" and s.scan.treatment.condition == condition), None)

    def random(self) -> MeasuredScan | None:
        """The first random scan."""
        return next((s for s in self.scans if s.scan.mount == "random"), None)

    def seen(self, *phases: str) -> bool:
        """Whether one of some phases is present or a trace."""
        return any(f.phase in phases and f.status in _SEEN for f in self.findings.phases)

    def group_seen(self, *groups: str) -> bool:
        """Whether a phase of some groups is present, a trace or possible."""
        return any(f.group in groups and f.status != "not_detected" for f in self.findings.phases)


Compute = Callable[[IndexInput], Found]


def width_for_copper(width: float, two_theta: float, radiation: Radiation) -> float:
    """A width that comes from thin stacks, as a copper tube would show it [degree].

    Widths of small stacks are lambda / (L cos theta): they scale with the wavelength and 1/cos(theta).
    """
    copper = Radiation.tube("Cu")
    there = float(copper.two_theta(radiation.d_spacing(two_theta)))
    ratio = copper.mean_wavelength / radiation.mean_wavelength
    return float(width * ratio * np.cos(np.radians(two_theta / 2)) / np.cos(np.radians(there / 2)))


def _width_index(given: IndexInput, low: float, high: float, what: str) -> Found:
    found = given.oriented("air_dried")
    if found is None:
        return "there is no air-dried oriented scan"
    peak = found.line(low, high)
    if peak is None:
        return f"the air-dried scan has no line of {what}"
    if peak.overlapped:
        return f"the line of {what} overlaps another one"
    width = width_for_copper(peak.fwhm, peak.two_theta, found.scan.radiation)
    error = width * peak.fwhm_error / peak.fwhm
    if given.calibration is not None:
        width, error = given.calibration.apply(width, error)
    return width, error, found.label


def kuebler(given: IndexInput) -> Found:
    """Width of the 10 angstrom line of mica or illite, air-dried."""
    if not given.seen(*MICAS):
        return "no mica or illite was found"
    if given.group_seen("interstratified"):
        return "a mixed-layer phase broadens the 10 angstrom line"
    return _width_index(given, 9.7, 10.4, "mica or illite at 10 angstrom")


def arkai(given: IndexInput) -> Found:
    """Width of chlorite 002, air-dried."""
    if not given.seen("chlorite"):
        return "no chlorite was found"
    if given.group_seen("kaolin", "serpentine"):
        return "kaolinite or serpentine shares the 7 angstrom line"
    return _width_index(given, 6.95, 7.2, "chlorite 002")


def esquevin(given: IndexInput) -> Found:
    """Height at 5 angstrom over height at 10 angstrom."""
    if not given.seen(*MICAS):
        return "no mica or illite was found"
    found = given.oriented("glycolated") or given.oriented("air_dried")
    if found is None:
        return "there is no glycolated or air-dried oriented scan"
    ten, five = found.line(9.7, 10.4), found.line(4.9, 5.12)
    if ten is None:
        return "there is no line at 10 angstrom"
    if five is None:
        return "there is no line at 5 angstrom, so the ratio is below what can be seen"
    value = five.height / ten.height
    error = value * float(np.hypot(1 / max(five.height_sigma, 1e-6), 1 / max(ten.height_sigma, 1e-6)))
    return value, error, found.label


def biscaye(part: str) -> Compute:
    """A reading of one part of Biscaye's estimate: smectite, illite, kaolinite or chlorite."""
    def compute(given: IndexInput) -> Found:
        found = given.oriented("glycolated")
        if found is None:
            return "there is no glycolated oriented scan"
        lines = {"smectite": found.line(15.5, 18.5), "illite": found.line(9.7, 10.4), "seven": found.line(6.95, 7.3)}
        areas, variances = {}, {}
        for name, factor in (("smectite", 1.0), ("illite", 4.0), ("seven", 2.0)):
            peak = lines[name]
            areas[name] = 0.0 if peak is None else factor * peak.area
            variances[name] = 0.0 if peak is None else (factor * peak.area_error) ** 2
        total = sum(areas.values())
        if total <= 0:
            return "there is no line at 17, 10 or 7 angstrom"
        share = 1.0
        name = part
        if part in ("kaolinite", "chlorite"):
            name = "seven"
            split = _kaolinite_share(found)
            if areas["seven"] > 0 and split is None:
                return "the lines at 3.58 and 3.54 angstrom, which split the one at 7, are not resolved"
            share = (split or 0.0) if part == "kaolinite" else 1.0 - (split or 0.0)
        value = 100 * share * areas[name] / total
        relative = sum(variances.values()) / total**2 + (variances[name] / areas[name] ** 2 if areas[name] else 0.0)
        return value, value * float(np.sqrt(relative)), found.label

    return compute


def _kaolinite_share(found: MeasuredScan) -> float | None:
    """Kaolinite's part of the 7 angstrom line from the heights at 3.58 and 3.54 angstrom."""
    kaolinite, chlorite = found.line(3.56, 3.60), found.line(3.51, 3.555)
    if kaolinite is None and chlorite is None:
        return None
    one, two = (0.0 if peak is None else peak.height for peak in (kaolinite, chlorite))
    return one / (one + two)


def scherrer(low: float, high: float, phases: tuple[str, ...], what: str) -> Compute:
    """A reading of the stack size from the line of some phases between two spacings [angstrom]."""
    def compute(given: IndexInput) -> Found:
        if not given.seen(*phases):
            return f"no {what} was found"
        found = given.oriented("air_dried") or given.oriented("glycolated")
        if found is None:
            return "there is no air-dried or glycolated oriented scan"
        peak = found.line(low, high)
        if peak is None or peak.overlapped:
            return f"the line of {what} is not free"
        if peak.fwhm <= 1.05 * found.width:
            return f"the line of {what} is as narrow as the instrument's, which is a lower limit only"
        own = float(np.sqrt(peak.fwhm**2 - found.width**2))
        theta = np.radians(peak.two_theta / 2)
        size = 0.9 * found.scan.radiation.mean_wavelength / (np.radians(own) * np.cos(theta))
        return float(size), float(size * peak.fwhm * peak.fwhm_error / own**2), found.label

    return compute


# Moore & Reynolds (1997), glycolated illite-smectite, Cu: percent illite against d of 002/003 [angstrom], from memory
_ILLITE_TABLE = (
    (10, 5.61), (20, 5.58), (30, 5.53), (40, 5.50), (50, 5.44), (60, 5.34), (70, 5.28), (80, 5.20), (90, 5.10),
)  # fmt: skip


def percent_illite(given: IndexInput) -> Found:
    """Illite layers of illite-smectite by the position of the 002/003 line."""
    if not any(f.phase.startswith("illite_smectite") and f.status != "not_detected" for f in given.findings.phases):
        return "no illite-smectite was found"
    found = given.oriented("glycolated")
    if found is None:
        return "there is no glycolated oriented scan"
    peak = found.line(5.1, 5.61)
    if peak is None:
        return "the line between 5.1 and 5.6 angstrom (002/003) is not there"
    percent = np.array([row[0] for row in _ILLITE_TABLE], dtype=float)
    spacing = np.array([row[1] for row in _ILLITE_TABLE])
    d = found.spacing(peak)
    value = float(np.interp(d, spacing[::-1], percent[::-1]))
    slope = float(np.abs(np.gradient(percent, spacing)).mean())
    return value, float(np.hypot(5.0, slope * peak.d_error)), found.label


def b0(given: IndexInput) -> Found:
    """Six times d(060) of potassium white mica in a random mount."""
    if not given.seen("muscovite", "phengite", "illite", "celadonite"):
        return "no potassium white mica was found"
    found = given.random()
    if found is None:
        return "there is no random mount"
    if float(found.scan.d_spacing[-1]) > 1.49:
        return "the random mount does not reach the 060 region"
    peak = found.line(1.494, 1.513)
    if peak is None:
        return "there is no line between 1.494 and 1.513 angstrom"
    return 6 * found.spacing(peak), 6 * peak.d_error, found.label


def expandable(given: IndexInput) -> Found:
    """Expandable layers as the swelling verdict has them."""
    amount = given.swelling.expandable_percent
    if amount is None:
        return "the scans do not give the amount of expandable layers"
    error = None
    if given.swelling.low95 is not None and given.swelling.high95 is not None:
        error = (given.swelling.high95 - given.swelling.low95) / (2 * 1.96)
    return amount, error, ""


def expandable_of_soil(given: IndexInput) -> Found:
    """Expandable layers times the clay fraction's share of the soil."""
    if given.clay_percent is None:
        return "the share of the clay fraction in the soil (column clay_percent) is not given"
    inner = expandable(given)
    if isinstance(inner, str):
        return inner
    part = given.clay_percent / 100
    return inner[0] * part, None if inner[1] is None else inner[1] * part, ""
