"""Rows of the proportions: weights with intervals for phases and groups, ranges for what could stand in for them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import load_phase
from xrdmica.estimate.shares import TOTALS, Shares, membership
from xrdmica.results import Findings, GroupWeight, PhaseFinding, PhaseWeight, Status

__all__ = ["group_rows", "hidden_share", "interval", "percent", "phase_rows", "unaccounted_row"]

FloatArray = NDArray[np.float64]
_Z95, _ONE_SIDED = 1.959964, 1.644854  # standard errors of a two-sided and of a one-sided 95 % limit


def interval(value: float, error: float) -> tuple[float, float]:
    """95 % interval of a share; where it would run out of 0 to 1 it becomes a one-sided limit."""
    low, high = value - _Z95 * error, value + _Z95 * error
    if low < 0 and high <= 1:
        return 0.0, min(value + _ONE_SIDED * error, 1.0)
    if high > 1 and low >= 0:
        return max(value - _ONE_SIDED * error, 0.0), 1.0
    return max(low, 0.0), min(high, 1.0)


def percent(value: float | None) -> float | None:
    """Share as weight percent with two decimals; None when not known."""
    return None if value is None or not np.isfinite(value) else round(100 * float(value), 2)


def phase_rows(
    findings: Findings, shares: Shares, names: Sequence[str], errors: FloatArray, limits: dict[str, float], *, closed: bool = True
) -> tuple[PhaseWeight, ...]:
    """One row per phase considered: weights for the fitted ones, ranges from zero for what could stand in for them."""
    place = {names[p]: i for i, p in enumerate(shares.places)}
    highs = {name: interval(float(shares.weights[i]), float(errors[i]))[1] for name, i in place.items()}
    rows = []
    for finding in findings.phases:
        weight = low = high = error = None
        if finding.phase in place:
            i = place[finding.phase]
            weight, error = float(shares.weights[i]), float(errors[i])
            low, high = interval(weight, error)
            if finding.status == "possible":
                low = 0.0
            if closed and len(place) == 1 and weight == 1.0:
                # a single phase: what could hide below its detection limit is the uncertainty
                low = 1.0 - hidden_share(findings, limits)
        elif finding.status == "possible":
            low, high = 0.0, max((highs[a.phase] for a in finding.alternatives if a.phase in highs), default=None)
        rows.append(
            PhaseWeight(
                phase=finding.phase, name=finding.name, group=finding.group, status=finding.status,
                weight_percent=percent(weight), low95=percent(low), high95=percent(high), standard_error=percent(error),
                detection_limit=percent(limits.get(finding.phase)),
            )
        )
    return tuple(rows)


def hidden_share(findings: Findings, limits: dict[str, float]) -> float:
    """Largest detection limit of a common phase that was not found."""
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


def group_rows(
    findings: Findings, shares: Shares | None, names: Sequence[str], covariance: FloatArray, expandable: dict[str, float],
    hidden: float = 0.0,
) -> tuple[GroupWeight, ...]:
    """Totals per group with their own intervals."""
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
                weight, (low, high) = value, interval(value, error)
                if value == 1.0 and error == 0.0:
                    low = 1.0 - hidden
                low = 0.0 if status == "possible" else low
        rows.append(
            GroupWeight(group=total, status=status, weight_percent=percent(weight), low95=percent(low), high95=percent(high))
        )
    return tuple(rows)


def unaccounted_row(rest: float, error: float) -> PhaseWeight:
    """The part of a whole sample that no phase accounts for: amorphous matter, and crystals that are not in the library."""
    value = min(max(rest, 0.0), 1.0)
    low, high = interval(value, error)
    sure = rest > 3 * error
    return PhaseWeight(
        phase="unaccounted", name="unaccounted (amorphous, or not in the library)", group="unaccounted",
        status="present" if sure else "possible" if high > 0 else "not_detected", weight_percent=percent(value),
        low95=percent(low if sure else 0.0), high95=percent(high), standard_error=percent(error),
    )  # fmt: skip
