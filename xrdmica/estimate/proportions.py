"""Proportions of a sample with intervals: the joint fit of all its scans, and what follows from it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.columns import components_for
from xrdmica.diffraction.optics import Instrument
from xrdmica.estimate.bootstrap import Bootstrap, drawn_amounts, shifted_limits
from xrdmica.estimate.crystal_chemistry import crystal_chemistry
from xrdmica.estimate.curves import STRANGERS, bare_curves, fitted_curves
from xrdmica.estimate.fitting import fit_examined
from xrdmica.estimate.quality import fit_warnings
from xrdmica.estimate.rows import group_rows, hidden_share, percent, phase_rows, unaccounted_row
from xrdmica.estimate.shares import Shares, expandable_share, normalise
from xrdmica.estimate.standard import added_standard, standard_place, whole_sample
from xrdmica.estimate.uncertainty import detection_limits, fit_covariance, model_shifts
from xrdmica.identify.decide import Examination, examination_of, examine
from xrdmica.matching.model import Candidate
from xrdmica.matching.solve import Fitted
from xrdmica.results import (
    Basis,
    Curve,
    Findings,
    FitQuality,
    FittedParameter,
    GroupWeight,
    PhaseWeight,
    Proportions,
)
from xrdmica.scans.scan import Sample

__all__ = ["Estimate", "estimate", "estimate_examined"]

FloatArray = NDArray[np.float64]
_STRANGE_LIMIT = 0.15  # share of unassigned line intensity beyond which percentages of a powder would mean nothing
_POOR_FIT = 8.0  # reduced chi-square of a powder beyond which the same holds
_UNITS = {"spacing": "angstrom", "layers": "layers", "fraction": "share", "exchange": "apfu", "spread": "degree",
          "width": "factor", "march": "ratio", "displacement": "mm"}


@dataclass(frozen=True, eq=False)
class Estimate:
    """Proportions with the fit behind them.

    Attributes
    ----------
    proportions : Proportions
    curves : tuple of Curve
    fitted : Fitted or None
        None when no phase was there to fit.
    displacements : tuple of float or None
        Per scan [mm].
    """

    proportions: Proportions
    curves: tuple[Curve, ...]
    fitted: Fitted | None
    displacements: tuple[float | None, ...]


def _basis(sample: Sample) -> Basis:
    oriented = any(scan.mount == "oriented" for scan in sample.scans)
    return "sheet silicates of the oriented mount" if oriented else "crystalline part"


def _parameters(fitted: Fitted, errors: FloatArray) -> tuple[FittedParameter, ...]:
    out = []
    for knob, value, error in zip(fitted.model.knobs, fitted.evaluation.values, errors, strict=True):
        logarithmic = knob.kind in ("layers", "spread", "width", "march")
        shown = float(np.exp(value)) if logarithmic else float(value)
        owner = "" if knob.phase < 0 else f"{fitted.model.candidates[knob.phase].phase} "
        where = f" {fitted.model.prepared[knob.scans[0]].label}" if knob.kind == "displacement" else ""
        detail = f" {knob.name.split('_p')[0].split('_', 1)[1]}" if knob.kind == "spacing" else ""
        if knob.kind == "exchange":
            detail = f" {knob.detail}"
        edge = 0.01 * (knob.high - knob.low)
        at_limit = not knob.low + edge < value < knob.high - edge
        error_shown = float(error * shown) if logarithmic else float(error)
        words = {"layers": "mean layers", "spread": "orientation spread", "width": "instrument width",
                 "march": "March-Dollase ratio of the powder",
                 "exchange": "content of", "fraction": "share of first layer"}.get(knob.kind, knob.kind)
        out.append(
            FittedParameter(
                name=f"{owner}{words}{detail}{where}", value=round(shown, 5), unit=_UNITS[knob.kind], at_limit=at_limit,
                standard_error=None if at_limit or not np.isfinite(error_shown) else round(error_shown, 5),
            )
        )
    return tuple(out)


def _quality(fitted: Fitted) -> FitQuality:
    left = weighted = 0.0
    for k, item in enumerate(fitted.model.prepared):
        parts = fitted.evaluation.columns[k] @ (fitted.evaluation.amounts * fitted.evaluation.scales[k])
        rest = (item.scan.counts - parts) * item.weight
        rest = rest - item.basis @ (item.basis.T @ rest)
        left += float(rest @ rest)
        weighted += float(((item.scan.counts * item.weight) ** 2).sum())
    return FitQuality(
        reduced_chi_square=round(fitted.reduced_chi_square, 3),
        profile_residual_percent=round(100 * float(np.sqrt(left / weighted)), 2),
        evaluations=fitted.evaluations,
        converged=fitted.converged,
        message=fitted.message,
    )


def _outsiders(examination: Examination) -> list[Candidate]:
    """Sheet silicates that the fit does not hold, as they would look, for their detection limits."""
    fitted = {examination.arena.candidates[a].phase for a in examination.selection.active}
    known = {c.phase: c for c in examination.arena.candidates}
    out = []
    for finding in examination.findings.phases:
        phase = load_phase(finding.phase)
        if finding.phase in fitted or not phase.is_sheet_silicate:
            continue
        usual = [components_for(phase, item.scan.treatment) for item in examination.arena.prepared]
        plain = Candidate(phase.id, tuple(options[0] if options else None for options in usual))
        out.append(known.get(finding.phase, plain))
    return out


def _strange_share(curves: Sequence[Curve]) -> float:
    """Share of all line intensity that no phase of the library takes."""
    strange = sum(max(sum(curve.contributions.get(STRANGERS, ())), 0.0) for curve in curves)
    total = sum(max(sum(part), 0.0) for curve in curves for part in curve.contributions.values())
    return strange / total if total > 0 else 0.0


def _notes(sample: Sample, fitted: Fitted | None, basis: Basis, strange: float = 0.0) -> tuple[str, ...]:
    notes = [
        "weights are on a dry basis: structural OH counts, interlayer water and glycol do not",
        f"100 % is: {basis}; "
        + ("what gives no lines is in the row unaccounted" if basis == "whole sample" else
           "what gives no lines (amorphous matter) is not in it"),
    ]
    if basis.startswith("sheet") and fitted is not None:
        others = {c.phase for c in fitted.model.candidates if not load_phase(c.phase).is_sheet_silicate}
        if others:
            notes.append(f"seen, but outside the 100 % of an oriented mount: {', '.join(sorted(others))}")
    if strange > 0.02:
        notes.append(f"unassigned lines take {100 * strange:.0f} % of the line intensity")
    if fitted is not None and basis == "crystalline part":
        if strange > _STRANGE_LIMIT:
            notes.append("no proportions: too much of the crystalline part is not in the library")
        elif fitted.reduced_chi_square > _POOR_FIT:
            notes.append("no proportions: the calculated powder does not match well enough to weigh its phases")
    if fitted is not None and not fitted.converged:
        notes.append(f"the fit {fitted.message}")
    return tuple(notes)


def _expandable(examination: Examination, fitted: Fitted | None) -> dict[str, float]:
    """Expandable share of every phase considered, fitted values where there are some."""
    out = {}
    for finding in examination.findings.phases:
        phase = load_phase(finding.phase)
        if phase.is_sheet_silicate:
            usual = [components_for(phase, scan.treatment) for scan in examination.sample.scans]
            out[finding.phase] = expandable_share([c for options in usual for c in options[:1]])
    if fitted is not None:
        scans = range(len(fitted.model.prepared))
        for j, candidate in enumerate(fitted.model.candidates):
            out[candidate.phase] = expandable_share([fitted.model.component(j, k, fitted.evaluation.values) for k in scans])
    return out


def _nothing(examination: Examination, basis: Basis) -> Estimate:
    findings = examination.findings
    rows = tuple(PhaseWeight(phase=f.phase, name=f.name, group=f.group, status=f.status) for f in findings.phases)
    proportions = Proportions(
        sample=findings.sample, basis=basis, phases=rows,
        groups=group_rows(findings, None, (), np.zeros((0, 0)), _expandable(examination, None)),
        quality=FitQuality(message="nothing to fit"), notes=_notes(examination.sample, None, basis),
    )
    prepared = examination.arena.prepared
    return Estimate(proportions, bare_curves(prepared), None, tuple(None for _ in prepared))


def estimate_examined(
    examination: Examination, known: Mapping[str, SiteFormula] | None = None, bootstrap: Bootstrap | None = None
) -> Estimate:
    """Fit all scans of an examined sample together and report proportions.

    Parameters
    ----------
    examination : Examination
        From `xrdmica.identify.decide.examine`.
    known : mapping, optional
        Phase id -> mineral formula known otherwise (microprobe); the fit keeps to it.
    bootstrap : Bootstrap, optional
        Intervals from scans drawn again, in place of those from the covariance.

    Returns
    -------
    Estimate

    Raises
    ------
    XrdmicaError
        If the sheet names a standard that cannot be used.
    """
    sample = examination.sample
    standard = added_standard(sample)
    basis = _basis(sample)
    fitted = fit_examined(examination, known or {})
    if fitted is None:
        return _nothing(examination, basis)
    names = [c.phase for c in fitted.model.candidates]
    curves = fitted_curves(fitted)
    strange = _strange_share(curves)
    amount_covariance, knob_errors = fit_covariance(fitted)
    weighed = _weigh(fitted, names, basis, standard, amount_covariance, strange)
    rows, groups = _tables(examination, fitted, names, weighed)
    if bootstrap is not None and weighed.shares is not None:
        rows = _redrawn(rows, fitted, names, weighed, bootstrap, standard, sample.name)
        drawn = f"intervals from {bootstrap.count} bootstrap draws, seed {bootstrap.seed}"
        weighed = replace(weighed, notes=(*weighed.notes, drawn))
    proportions = Proportions(
        sample=examination.findings.sample, basis=weighed.basis, phases=rows, groups=groups,
        parameters=(*_parameters(fitted, knob_errors), *crystal_chemistry(fitted, knob_errors)), quality=_quality(fitted),
        warnings=fit_warnings(fitted, examination.findings, sample.labels, strange),
        notes=(*_notes(sample, fitted, weighed.basis, strange), *weighed.notes),
    )
    displacements = tuple(view.displacement for view in fitted.evaluation.views)
    return Estimate(proportions, curves, fitted, displacements)


def _redrawn(
    rows: Sequence[PhaseWeight], fitted: Fitted, names: Sequence[str], weighed: _Weighed, bootstrap: Bootstrap,
    standard: tuple[str, float] | None, sample: str,
) -> tuple[PhaseWeight, ...]:
    """The rows with intervals by the bootstrap, combined with what drawing scans again does not vary."""
    assert weighed.shares is not None
    amounts = drawn_amounts(fitted, bootstrap, sample)
    places = list(weighed.shares.places)
    total = amounts[:, places].sum(axis=1)
    if weighed.basis == "whole sample" and standard is not None:
        own = [j for j in range(len(names)) if names[j] == standard[0] and fitted.evaluation.amounts[j] > 0]
        total = amounts[:, own[0]] * (1 - standard[1]) / standard[1]
    draws = amounts[:, places] / np.maximum(total, 1e-300)[:, None]
    other = np.sqrt(np.maximum(np.diag(weighed.covariance - weighed.counting), 0.0))
    found = {names[j]: i for i, j in enumerate(places)}
    out = []
    for row in rows:
        i = found.get(row.phase)
        if i is None or row.weight_percent is None:
            out.append(row)
            continue
        low, high = shifted_limits(float(weighed.shares.weights[i]), draws[:, i], float(other[i]))
        error = float(np.hypot(draws[:, i].std(ddof=1), other[i]))
        low = 0.0 if row.status == "possible" else low
        out.append(row.model_copy(update={
            "low95": percent(low), "high95": percent(high), "standard_error": percent(error),
        }))  # fmt: skip
    return tuple(out)


@dataclass(frozen=True, eq=False)
class _Weighed:
    """Weights with everything that is not sure about them.

    `counted` are the candidates in the 100 %; `shares` is None when they cannot be weighed; `unaccounted` is the rest of a
    whole sample with its error; `counting` is the part of the covariance that comes from the fit.
    """

    basis: Basis
    counted: list[int]
    shares: Shares | None
    covariance: FloatArray
    counting: FloatArray
    unaccounted: tuple[float, float] | None = None
    notes: tuple[str, ...] = ()


def _weigh(
    fitted: Fitted, names: Sequence[str], basis: Basis, standard: tuple[str, float] | None, amount_covariance: FloatArray,
    strange: float,
) -> _Weighed:
    """Normalise the fitted amounts: to the sheet silicates, to the crystalline part, or by a standard to the whole sample."""
    amounts = fitted.evaluation.amounts
    mounts = [item.scan.mount for item in fitted.model.prepared]
    powder = [
        j for j, one in enumerate(fitted.model.candidates)
        if amounts[j] > 0 and any(c is not None and m == "random" for c, m in zip(one.components, mounts, strict=True))
    ]
    plates = [j for j, name in enumerate(names) if amounts[j] > 0 and load_phase(name).is_sheet_silicate]
    by_standard = standard is not None and any(names[j] == standard[0] for j in powder)
    counted = powder if by_standard or basis == "crystalline part" else plates
    empty = np.zeros((0, 0))
    poor = strange > _STRANGE_LIMIT or fitted.reduced_chi_square > _POOR_FIT
    if not counted or (poor and (by_standard or basis == "crystalline part")):
        return _Weighed(basis, counted, None, empty, empty)
    shares = normalise(amounts, amount_covariance, counted)
    shifts = model_shifts(fitted, counted)
    covariance = shares.covariance + shifts.T @ shifts
    if standard is None:
        return _Weighed(basis, counted, shares, covariance, shares.covariance)
    place = standard_place(shares, names, standard[0]) if by_standard else None
    if place is None:
        return _Weighed(basis, counted, shares, covariance, shares.covariance, notes=(
            f"the added standard {standard[0]} was not found in a random mount: no scale for the whole sample",
        ))  # fmt: skip
    _, counting, _, _ = whole_sample(shares, shares.covariance, place, standard[1])
    whole, covariance, rest, error = whole_sample(shares, covariance, place, standard[1])
    notes = [f"scaled by {100 * standard[1]:g} % {load_phase(standard[0]).name} added; the standard itself is not in the 100 %"]
    if rest < -2 * error:
        notes.append("the phases come to more than 100 % of the sample: check standard_percent and the mixing")
    return _Weighed("whole sample", list(whole.places), whole, covariance, counting, (rest, error), tuple(notes))


def _tables(
    examination: Examination, fitted: Fitted, names: Sequence[str], weighed: _Weighed
) -> tuple[tuple[PhaseWeight, ...], tuple[GroupWeight, ...]]:
    """Rows per phase, the unaccounted part among them, and per group."""
    findings, counted = examination.findings, weighed.counted
    outside = _outsiders(examination)
    limits: dict[str, float] = {}
    if counted:
        inside, extra = detection_limits(fitted, outside, counted)
        limits = dict(zip([*names, *(c.phase for c in outside)], [*inside.tolist(), *extra.tolist()], strict=True))
    rows: tuple[PhaseWeight, ...]
    if weighed.shares is None:
        rows = _nothing(examination, weighed.basis).proportions.phases
    else:
        errors = np.sqrt(np.maximum(np.diag(weighed.covariance), 0.0))
        rows = phase_rows(findings, weighed.shares, names, errors, limits, closed=weighed.unaccounted is None)
    if weighed.unaccounted is not None:
        rows = (*rows, unaccounted_row(*weighed.unaccounted))
    hidden = hidden_share(findings, limits)
    expandable = _expandable(examination, fitted)
    return rows, group_rows(findings, weighed.shares, names, weighed.covariance, expandable, hidden)


def estimate(sample: Sample, findings: Findings | None = None, instrument: Instrument | None = None) -> Proportions:
    """Proportions of a sample with 95 % intervals.

    Parameters
    ----------
    sample : Sample
    findings : Findings, optional
        From `identify`; limits the fit to phases that were not ruled out. Made here when left out.
    instrument : Instrument, optional

    Returns
    -------
    Proportions
        Dry basis; intervals hold fit covariance and what the scans do not fix (orientation, composition, form factors,
        background).
    """
    examination = examine(sample, None, instrument) if findings is None else examination_of(sample, findings, instrument)
    return estimate_examined(examination).proportions
