"""The verdict on swelling layers: yes, no, or cannot tell."""

from __future__ import annotations

from xrdmica.results import Findings, GroupWeight, PhaseFinding, Proportions, Swelling
from xrdmica.scans.scan import Sample

__all__ = ["screen_swelling"]

_LOW_ANGLE_D = 18.0  # angstrom: an air-dried scan must reach this far to see every swelling layer
_GLYCOLATE = "a glycolated oriented mount: swelling layers go to 16.9 Å"
_EXPANDABLE = ("smectite", "interstratified")


def _reaches_low(sample: Sample, condition: str) -> bool:
    return any(
        scan.mount == "oriented" and float(scan.d_spacing[0]) >= _LOW_ANGLE_D for scan in sample.with_condition(condition)
    )


def _expandable(findings: Findings) -> list[PhaseFinding]:
    swelling = [f for f in findings.phases if f.group in _EXPANDABLE and "vermiculite" not in f.phase]
    return [f for f in swelling if f.status != "not_detected"]


def _named(findings: list[PhaseFinding]) -> str:
    return ", ".join(dict.fromkeys(f.name for f in findings))


def screen_swelling(sample: Sample, findings: Findings, proportions: Proportions) -> Swelling:
    """Whether a sample holds swelling layers.

    Parameters
    ----------
    sample : Sample
    findings : Findings
    proportions : Proportions

    Returns
    -------
    Swelling
        ``yes`` when a swelling phase (or one of several that all swell) is there; ``no`` when none is and the scans
        could have shown it; ``cannot tell`` otherwise, with the measurement that would tell.
    """
    shown = _expandable(findings)
    total: GroupWeight | None = next((g for g in proportions.groups if g.group == "expandable layers"), None)
    sure = [f for f in shown if f.status in ("present", "trace")]
    if sure or (total is not None and total.status in ("present", "trace")):
        names = _named(sure or shown)
        amount = None if total is None else total.weight_percent
        return Swelling(
            verdict="yes",
            reason=f"{names}: lines of expanded layers are there and behave as swelling layers do",
            expandable_percent=amount,
            low95=None if total is None else total.low95,
            high95=None if total is None else total.high95,
        )
    if shown:
        high = None if total is None else total.high95
        more = [text for text in findings.measure_next if "glycol" in text]
        return Swelling(
            verdict="cannot tell",
            reason=f"{_named(shown)} cannot be ruled out: the scans at hand allow other readings",
            low95=0.0,
            high95=high if high is not None else _widest(proportions),
            measure_next=more[0] if more else (findings.measure_next[0] if findings.measure_next else _GLYCOLATE),
        )
    if not any(f.status != "not_detected" for f in findings.phases):
        return Swelling(
            verdict="cannot tell", reason="no line of a sheet silicate or of a companion was recognised", measure_next=_GLYCOLATE
        )
    if _reaches_low(sample, "glycolated") or _reaches_low(sample, "glycerolated"):
        return Swelling(verdict="no", reason="no line of expanded layers after glycol or glycerol", expandable_percent=0.0,
                        low95=0.0, high95=_limit(proportions))  # fmt: skip
    if _reaches_low(sample, "air_dried"):
        return Swelling(
            verdict="no",
            reason="no line between 10.5 and 18 Å on the air-dried mount; a glycolated scan would make that certain",
            high95=_limit(proportions),
            low95=0.0,
            expandable_percent=0.0,
        )
    return Swelling(
        verdict="cannot tell", reason="no oriented mount reaches the angles where swelling layers show", measure_next=_GLYCOLATE
    )


def _limit(proportions: Proportions) -> float | None:
    """Detection limit of smectite: what may be there unseen."""
    return next((p.detection_limit for p in proportions.phases if p.phase == "smectite"), None)


def _widest(proportions: Proportions) -> float | None:
    highs = [p.high95 for p in proportions.phases if p.group in _EXPANDABLE and p.status == "possible" and p.high95 is not None]
    return max(highs, default=None)
