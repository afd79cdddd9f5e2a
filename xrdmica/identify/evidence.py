"""The evidence ledger: what each scan says for or against a phase, as facts in plain words."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.columns import ExpectedLine, expected_lines
from xrdmica.diffraction.optics import displacement_shift
from xrdmica.identify.candidates import match_peak
from xrdmica.identify.search import Arena, Selection
from xrdmica.matching.prepare import Prepared
from xrdmica.results import Evidence
from xrdmica.scans.peaks import Peak

__all__ = ["Ledger", "LineReading", "ledger_for"]

FloatArray = NDArray[np.float64]
_MEASURABLE = 4.0  # sigma: a line predicted below this proves nothing by being absent
_CLEAR = 0.5  # share of the calculated height from which a line belongs to one phase
_SHARED = 0.12
_SHARED_COMPANION = 0.04  # quartz lies under mica, and a few percent of that line are all of its strongest
_FULL_WEIGHT = 30.0  # sigma
_MOVED = 0.5  # angstrom
_LEAST_RATIO = 0.01
# logarithms of 1.3 and 1.8: what composition and orientation leave open, and what they do not (common practice)
_RATIO_AGREES, _RATIO_DISAGREES = 0.26, 0.59


@dataclass(frozen=True)
class LineReading:
    """One expected line of a phase held against a scan.

    Attributes
    ----------
    scan : int
    order : int
        l of 00l, or the number of the line for phases without orders.
    line : ExpectedLine
    significance : float
        Predicted height in standard errors.
    own : float
        Share of the calculated height at that place that is this phase's.
    seen : float
        Part of the predicted height found in the data, 1 when it fits.
    peak : Peak or None
    spacing : float or None
        Spacing of the peak with the mount's displacement taken off [angstrom].
    """

    scan: int
    order: int
    line: ExpectedLine
    significance: float
    own: float
    seen: float
    peak: Peak | None
    spacing: float | None

    @property
    def found(self) -> bool:
        """Whether the line is there: as a peak, or at least as much as predicted within a factor of two."""
        return self.seen > 0.5 or (self.peak is not None and self.seen > 0.2)

    @property
    def clear(self) -> bool:
        """Whether it is there and mostly this phase's."""
        return self.found and self.own >= _CLEAR

    @property
    def covered(self) -> bool:
        """Whether it lies under a line that is mostly another phase's, whose own misfit says nothing about this one."""
        return self.own < _CLEAR and self.peak is not None

    @property
    def missing(self) -> bool:
        """Whether it should be seen and is not."""
        if self.found or self.covered:
            return False
        return self.seen < 0.3 and self.significance * (1 - self.seen) > 2 * _MEASURABLE


@dataclass(frozen=True)
class Ledger:
    """Everything that speaks for or against one kept phase.

    Attributes
    ----------
    readings : tuple of LineReading
    evidence : tuple of Evidence
    clear_lines : int
        Distinct lines that are clearly this phase's in at least one scan.
    shared_lines : int
        Further distinct lines found, but mostly another phase's.
    missing_lines : int
    moved : bool
        Whether the first line was clearly seen at different spacings after different treatments.
    first_line : bool
        Whether the first line stands out as a peak of its own in some scan.
    """

    readings: tuple[LineReading, ...]
    evidence: tuple[Evidence, ...]
    clear_lines: int
    shared_lines: int
    missing_lines: int
    moved: bool
    first_line: bool


def _calculated(arena: Arena, selection: Selection, scan: int) -> FloatArray:
    """Contributions of the kept candidates in one scan, shape (n, a)."""
    columns = arena.columns[scan][:, list(selection.active)]
    return np.asarray(columns * selection.fit.amounts * selection.fit.scales[scan])


def _fitted_residual(item: Prepared, total: FloatArray) -> FloatArray:
    """Data minus calculated scan minus the best background."""
    rest = (item.scan.counts - total) * item.weight
    return np.asarray((rest - item.basis @ (item.basis.T @ rest)) / item.weight)


def _read_line(
    number: int,
    scan: int,
    line: ExpectedLine,
    item: Prepared,
    own: FloatArray,
    total: FloatArray,
    residual: FloatArray,
    noise: float,
) -> LineReading | None:
    view = item.view
    place = line.two_theta + float(displacement_shift(np.array(line.two_theta), view.displacement, view.grid.instrument))
    reach = max(1.2 * view.width, 0.08)
    window = np.abs(item.scan.two_theta - place) <= reach
    if window.sum() < 3:
        return None
    height = float(own[window].max())
    independent = max(window.sum() * item.scan.step / max(item.scan.step, view.width / 3), 1.0)
    significance = height * float(item.weight[window].mean()) * np.sqrt(min(independent, window.sum()) / noise)
    if significance < _MEASURABLE:
        return None
    w = item.weight[window] ** 2
    predicted = own[window]
    seen = 1.0 + float((w * predicted) @ residual[window]) / float((w * predicted) @ predicted)
    peak = match_peak(item.peaks, place, 0.12)
    share = height / max(float(total[window].max()), 1e-300)
    spacing = None
    if peak is not None:
        shift = float(displacement_shift(np.array(peak.two_theta), view.displacement, view.grid.instrument))
        spacing = float(item.scan.radiation.d_spacing(peak.two_theta - shift))
    return LineReading(scan, line.order or -number, line, float(significance), min(share, 1.0), seen, peak, spacing)


def _as_evidence(reading: LineReading, labels: Sequence[str], name: str) -> Evidence:
    peak, line = reading.peak, reading.line
    weight = min(reading.significance, _FULL_WEIGHT) / 10
    called = f"00{reading.order}" if reading.order > 0 else "a line"
    common = {
        "scan": labels[reading.scan],
        "order": reading.order if reading.order > 0 else None,
        "d_expected": round(line.d_spacing, 4),
        "two_theta": None if peak is None else round(peak.two_theta, 4),
        "d_observed": None if reading.spacing is None else round(reading.spacing, 4),
        "d_error": None if peak is None else round(peak.d_error, 4),
        "intensity_ratio": round(max(reading.seen, 0.0), 3),
    }
    if reading.missing:
        text = f"{called} of {name} expected at {line.d_spacing:.3f} Å with {reading.significance:.0f} sigma is not there"
        return Evidence(kind="missing line", text=text, weight=-round(weight, 2), **common)
    if reading.covered and not reading.found:
        text = f"{called} of {name} expected at {line.d_spacing:.3f} Å lies under a line of other phases and cannot be judged"
        return Evidence(kind="overlap", text=text, weight=0.0, **common)
    seen = f"found at {reading.spacing:.3f} Å" if reading.spacing is not None else "found as part of a wider line"
    text = f"{called} {seen}, expected {line.d_spacing:.3f} Å, height {100 * max(reading.seen, 0):.0f} % of the calculated"
    if reading.own >= _CLEAR:
        return Evidence(kind="line", text=text, weight=round(weight * reading.own, 2), **common)
    text += f"; {100 * (1 - reading.own):.0f} % of the line belongs to other phases"
    return Evidence(kind="overlap", text=text, weight=round(0.3 * weight * reading.own, 2), **common)


def _ratios(readings: Sequence[LineReading], labels: Sequence[str]) -> list[Evidence]:
    """Heights of the orders against the first one, where both belong to the phase alone: what composition shows in."""
    out = []
    for k in sorted({r.scan for r in readings}):
        clear = {r.order: r for r in readings if r.scan == k and r.order > 0 and r.clear}
        first = clear.get(1)
        if first is None:
            continue
        for order in (2, 3):
            other = clear.get(order)
            if other is None or other.line.share < _LEAST_RATIO * first.line.share:
                continue
            expected = other.line.share / first.line.share
            factor = max(other.seen, 0.0) / max(first.seen, 1e-6)
            off = abs(np.log(max(factor, 1e-3)))
            weight = 0.5 if off < _RATIO_AGREES else -1.0 if off > _RATIO_DISAGREES else 0.0
            text = f"I(00{order})/I(001) is {expected * factor:.2f}, calculated {expected:.2f}"
            out.append(
                Evidence(
                    kind="intensity", text=text, weight=weight, scan=labels[k], order=order, intensity_ratio=round(factor, 3)
                )
            )
    return out


def _behaviour(readings: Sequence[LineReading], arena: Arena, place: int, labels: Sequence[str]) -> tuple[list[Evidence], bool]:
    """What the first line does from treatment to treatment."""
    candidate = arena.candidates[place]
    first: dict[int, float] = {}
    for reading in readings:
        if reading.order in (1, -1) and reading.clear:
            first[reading.scan] = reading.line.d_spacing
    conditions = {arena.prepared[k].scan.treatment.name for k in first}
    out: list[Evidence] = []
    moved = False
    if len(conditions) > 1:
        spread = max(first.values()) - min(first.values())
        course = ", ".join(f"{d:.2f} Å ({labels[k]})" for k, d in first.items())
        moved = spread > _MOVED
        word = "moves with treatment as it should" if moved else "stays where it is, as it should"
        out.append(Evidence(kind="behaviour", text=f"the first line {word}: {course}", weight=2.0 if moved else 0.7))
    phase = load_phase(candidate.phase)
    for k, component in enumerate(candidate.components):
        treatment = arena.prepared[k].scan.treatment
        if component is None and phase.is_sheet_silicate and any(s.lost for s in phase.states_for(treatment)):
            text = f"its lines are gone after {treatment.label}, as they should be"
            out.append(Evidence(kind="behaviour", text=text, weight=1.0, scan=labels[k]))
    return out, moved


def ledger_for(arena: Arena, selection: Selection, place: int, labels: Sequence[str]) -> Ledger:
    """Read every expected line of a kept phase in every scan.

    Parameters
    ----------
    arena : Arena
    selection : Selection
    place : int
        Candidate kept in the selection.
    labels : sequence of str, length k
        Scan labels.

    Returns
    -------
    Ledger
    """
    candidate = arena.candidates[place]
    name = load_phase(candidate.phase).name
    position = selection.active.index(place)
    readings: list[LineReading] = []
    for k, item in enumerate(arena.prepared):
        component = candidate.components[k]
        if component is None:
            continue
        parts = _calculated(arena, selection, k)
        total = parts.sum(axis=1)
        residual = _fitted_residual(item, total)
        for number, line in enumerate(expected_lines(component, item.view), start=1):
            reading = _read_line(number, k, line, item, parts[:, position], total, residual, selection.noise)
            if reading is not None:
                readings.append(reading)
    behaviour, moved = _behaviour(readings, arena, place, labels)
    clear = {r.order for r in readings if r.clear}
    plates = load_phase(candidate.phase).is_sheet_silicate
    least = _SHARED if plates else _SHARED_COMPANION
    shared = {r.order for r in readings if (r.found or (r.covered and not plates)) and r.own >= least} - clear
    lines = [_as_evidence(r, labels, name) for r in readings if r.found or r.missing or r.covered]
    need = selection.need[place]
    rise = f"leaving it out raises chi-square by {need.sum():.0f}"
    fit = Evidence(kind="fit", text=rise, weight=round(float(np.clip(np.sqrt(max(need.sum(), 0)) / 10, 0, 3)), 2))
    return Ledger(
        tuple(readings),
        (*lines, *_ratios(readings, labels), *behaviour, fit),
        len(clear),
        len(shared),
        sum(r.missing for r in readings),
        moved,
        any(r.order in (1, -1) and r.clear and r.peak is not None for r in readings),
    )
