"""Proportions of a sample with intervals: the joint fit of all its scans, and what follows from it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.layer import exchanges_of
from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.columns import components_for
from xrdmica.diffraction.optics import Instrument
from xrdmica.estimate.curves import STRANGERS, bare_curves, fitted_curves
from xrdmica.estimate.shares import TOTALS, Shares, expandable_share, membership, normalise
from xrdmica.estimate.uncertainty import detection_limits, fit_covariance, model_shifts
from xrdmica.identify.decide import Examination, examine
from xrdmica.matching.model import Candidate, build_model, composition_shows
from xrdmica.matching.solve import Fitted, fit_model
from xrdmica.results import (
    Basis,
    Curve,
    Findings,
    FitQuality,
    FittedParameter,
    GroupWeight,
    PhaseFinding,
    PhaseWeight,
    Proportions,
    Status,
)
from xrdmica.scans.scan import Sample

__all__ = ["Estimate", "estimate", "estimate_examined"]

FloatArray = NDArray[np.float64]
_Z95 = 1.959964
_STRANGE_LIMIT = 0.15  # share of unassigned line intensity beyond which percentages of a powder would mean nothing
_POOR_FIT = 8.0  # reduced chi-square of a powder beyond which the same holds
_UNITS = {"spacing": "angstrom", "layers": "layers", "fraction": "share", "exchange": "apfu", "spread": "degree",
          "width": "factor", "displacement": "mm"}


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


def _fit(examination: Examination, known: Mapping[str, SiteFormula]) -> Fitted | None:
    arena, selection = examination.arena, examination.selection
    if not selection.active:
        return None
    start = [item.spread(item.view.orientation_spread * selection.factor) for item in arena.prepared]
    chosen = [arena.candidates[a] for a in selection.active]
    chosen = [_with_formula(one, known[one.phase]) if one.phase in known else one for one in chosen]
    return fit_model(build_model(start, chosen, exchanges=composition_shows(chosen), known=tuple(known)))


def _with_formula(candidate: Candidate, formula: SiteFormula) -> Candidate:
    """The candidate with the composition of a known mineral formula."""
    exchanges = tuple(exchanges_of(load_phase(candidate.phase), formula).items())
    components = tuple(
        one if one is None or not one.states or one.fraction is not None else replace(one, exchanges=exchanges)
        for one in candidate.components
    )
    return replace(candidate, components=components)


def _parameters(fitted: Fitted, errors: FloatArray) -> tuple[FittedParameter, ...]:
    out = []
    for knob, value, error in zip(fitted.model.knobs, fitted.evaluation.values, errors, strict=True):
        logarithmic = knob.kind in ("layers", "spread", "width")
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


def _interval(value: float, error: float) -> tuple[float, float]:
    return max(value - _Z95 * error, 0.0), min(value + _Z95 * error, 1.0)


def _percent(value: float | None) -> float | None:
    return None if value is None or not np.isfinite(value) else round(100 * float(value), 2)


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


def _rows(
    findings: Findings, shares: Shares, names: Sequence[str], errors: FloatArray, limits: dict[str, float]
) -> tuple[PhaseWeight, ...]:
    """One row per phase considered: weights for the fitted ones, ranges from zero for what could stand in for them."""
    place = {names[p]: i for i, p in enumerate(shares.places)}
    highs = {name: _interval(float(shares.weights[i]), float(errors[i]))[1] for name, i in place.items()}
    rows = []
    for finding in findings.phases:
        weight = low = high = error = None
        if finding.phase in place:
            i = place[finding.phase]
            weight, error = float(shares.weights[i]), float(errors[i])
            low, high = _interval(weight, error)
            if finding.status == "possible":
                low = 0.0
            if len(place) == 1 and weight == 1.0:
                # a single phase: what could hide below its detection limit is the uncertainty
                low = 1.0 - _hidden(findings, limits)
        elif finding.status == "possible":
            low, high = 0.0, max((highs[a.phase] for a in finding.alternatives if a.phase in highs), default=None)
        rows.append(
            PhaseWeight(
                phase=finding.phase, name=finding.name, group=finding.group, status=finding.status,
                weight_percent=_percent(weight), low95=_percent(low), high95=_percent(high), standard_error=_percent(error),
                detection_limit=_percent(limits.get(finding.phase)),
            )
        )
    return tuple(rows)


def _hidden(findings: Findings, limits: dict[str, float]) -> float:
    common = [
        limits.get(f.phase, float("nan"))
        for f in findings.phases
        if f.status == "not_detected" and load_phase(f.phase).occurrence == "common"
    ]
    return min(max((value for value in common if np.isfinite(value)), default=0.0), 1.0)


def _group_status(members: Sequence[PhaseFinding], groups: dict[str, str]) -> Status:
    statuses = {m.status for m in members}
    if "present" in statuses:
        return "present"
    if "trace" in statuses:
        return "trace"
    own = {m.group for m in members}
    for member in members:
        rivals = {groups.get(a.phase, "") for a in member.alternatives}
        if member.status == "possible" and member.convincing and rivals <= own:
            return "present"
    return "possible" if "possible" in statuses else "not_detected"


def _groups(
    findings: Findings, shares: Shares | None, names: Sequence[str], covariance: FloatArray, expandable: dict[str, float],
    hidden: float = 0.0,
) -> tuple[GroupWeight, ...]:
    groups = {f.phase: f.group for f in findings.phases}
    rows = []
    for total in TOTALS:
        members = [
            f for f in findings.phases
            if (expandable.get(f.phase, 0.0) > 0 if total == "expandable layers" else f.group == total)
        ]
        status = _group_status(members, groups) if members else "not_detected"
        weight = low = high = None
        if shares is not None and status != "not_detected":
            counted = membership(total, [names[p] for p in shares.places], expandable)
            value = float(counted @ shares.weights)
            if value > 0:
                error = float(np.sqrt(max(float(counted @ covariance @ counted), 0.0)))
                weight, (low, high) = value, _interval(value, error)
                if value == 1.0 and error == 0.0:
                    low = 1.0 - hidden
                low = 0.0 if status == "possible" else low
        rows.append(
            GroupWeight(group=total, status=status, weight_percent=_percent(weight), low95=_percent(low), high95=_percent(high))
        )
    return tuple(rows)


def _strange_share(curves: Sequence[Curve]) -> float:
    """Share of all line intensity that no phase of the library takes."""
    strange = sum(max(sum(curve.contributions.get(STRANGERS, ())), 0.0) for curve in curves)
    total = sum(max(sum(part), 0.0) for curve in curves for part in curve.contributions.values())
    return strange / total if total > 0 else 0.0


def _notes(sample: Sample, fitted: Fitted | None, basis: Basis, strange: float = 0.0) -> tuple[str, ...]:
    notes = [
        "weights are on a dry basis: structural OH counts, interlayer water and glycol do not",
        f"100 % is: {basis}; what gives no lines (amorphous matter) is not in it",
    ]
    if basis.startswith("sheet") and fitted is not None:
        others = [c.phase for c in fitted.model.candidates if not load_phase(c.phase).is_sheet_silicate]
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
        groups=_groups(findings, None, (), np.zeros((0, 0)), _expandable(examination, None)),
        quality=FitQuality(message="nothing to fit"), notes=_notes(examination.sample, None, basis),
    )
    prepared = examination.arena.prepared
    return Estimate(proportions, bare_curves(prepared), None, tuple(None for _ in prepared))


def estimate_examined(examination: Examination, known: Mapping[str, SiteFormula] | None = None) -> Estimate:
    """Fit all scans of an examined sample together and report proportions.

    Parameters
    ----------
    examination : Examination
        From `xrdmica.identify.decide.examine`.
    known : mapping, optional
        Phase id -> mineral formula known otherwise (microprobe); the fit keeps to it.

    Returns
    -------
    Estimate
    """
    basis = _basis(examination.sample)
    fitted = _fit(examination, known or {})
    if fitted is None:
        return _nothing(examination, basis)
    names = [c.phase for c in fitted.model.candidates]
    counted = [
        j for j, name in enumerate(names)
        if fitted.evaluation.amounts[j] > 0 and (load_phase(name).is_sheet_silicate or basis == "crystalline part")
    ]
    amount_covariance, knob_errors = fit_covariance(fitted)
    curves = fitted_curves(fitted)
    strange = _strange_share(curves)
    poor = strange > _STRANGE_LIMIT or fitted.reduced_chi_square > _POOR_FIT
    weighable = bool(counted) and not (basis == "crystalline part" and poor)
    shares = normalise(fitted.evaluation.amounts, amount_covariance, counted) if weighable else None
    covariance = np.zeros((0, 0))
    rows: tuple[PhaseWeight, ...]
    outside = _outsiders(examination)
    inside, extra = detection_limits(fitted, outside, counted) if counted else (np.zeros(0), np.zeros(0))
    limits = dict(zip([*names, *(c.phase for c in outside)], [*inside.tolist(), *extra.tolist()], strict=True)) if counted else {}
    if shares is None:
        rows = _nothing(examination, basis).proportions.phases
    else:
        shifts = model_shifts(fitted, counted)
        covariance = shares.covariance + shifts.T @ shifts
        errors = np.sqrt(np.maximum(np.diag(covariance), 0.0))
        rows = _rows(examination.findings, shares, names, errors, limits)
    hidden = _hidden(examination.findings, limits)
    groups = _groups(examination.findings, shares, names, covariance, _expandable(examination, fitted), hidden)
    proportions = Proportions(
        sample=examination.findings.sample, basis=basis, phases=rows, groups=groups,
        parameters=_parameters(fitted, knob_errors), quality=_quality(fitted),
        notes=_notes(examination.sample, fitted, basis, strange),
    )
    displacements = tuple(view.displacement for view in fitted.evaluation.views)
    return Estimate(proportions, curves, fitted, displacements)


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
    phases = None
    if findings is not None:
        phases = [load_phase(f.phase) for f in findings.phases if f.status != "not_detected"]
    return estimate_examined(examine(sample, phases, instrument)).proportions
