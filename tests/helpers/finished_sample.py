"""An invented finished sample: four scans, five phases present or possible, as the rest of the program delivers it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xrdmica.radiation import Radiation
from xrdmica.results import (
    Alternative,
    Curve,
    Evidence,
    Findings,
    FitQuality,
    FittedParameter,
    GroupWeight,
    Mark,
    PhaseFinding,
    PhaseWeight,
    Proportions,
    SampleResult,
    ScanSummary,
    Swelling,
    UnassignedLine,
)

BASIS = "sheet silicates of the oriented mount"
# phase -> name, group, weight, and per scan (spacing, relative intensities by order); spacings are common practice
PHASES: dict[str, tuple[str, str, float | None]] = {
    "illite": ("Illite", "true mica", 41.3),
    "kaolinite": ("Kaolinite", "kaolin", 24.6),
    "smectite": ("Smectite", "smectite", 18.2),
    "chlorite": ("Chlorite", "chlorite", 14.1),
    "talc": ("Talc", "talc group", 1.8),
}
LINES = {
    "illite": [100, 35, 70, 6, 18],
    "kaolinite": [100, 85, 6],
    "smectite": [300, 12, 25, 4, 12],
    "chlorite": [40, 90, 45, 70, 14],
    "talc": [30, 2, 25],
}
SPACINGS = {
    "air_dried": {"illite": 10.02, "kaolinite": 7.15, "smectite": 14.9, "chlorite": 14.2, "talc": 9.35},
    "glycolated": {"illite": 10.02, "kaolinite": 7.15, "smectite": 16.9, "chlorite": 14.2, "talc": 9.35},
    "heated_400": {"illite": 10.0, "kaolinite": 7.15, "smectite": 9.8, "chlorite": 14.2, "talc": 9.35},
    "heated_550": {"illite": 10.0, "smectite": 9.7, "chlorite": 13.8, "talc": 9.35},
}


def curve_of(scan: str, radiation: str, rng: np.random.Generator, points: int = 1900) -> Curve:
    tube = Radiation.parse(radiation)
    two_theta = np.linspace(2.5, 40.0, points)
    background: NDArray[np.float64] = 120 + 1500 * np.exp(-(two_theta - 2.5) / 1.6) + 60 * np.exp(-(((two_theta - 24) / 7) ** 2))
    contributions, marks = {}, []
    for phase, spacing in SPACINGS[scan].items():
        weight = PHASES[phase][2] or 0
        curve = np.zeros_like(two_theta)
        for order, intensity in enumerate(LINES[phase], start=1):
            at = float(tube.two_theta(spacing / order))
            if not two_theta[0] < at < two_theta[-1]:
                continue
            width = {"smectite": 0.55, "illite": 0.22}.get(phase, 0.14)
            curve += weight * intensity * 1.1 / (1 + ((two_theta - at) / width) ** 2) ** 1.5 * (9 / (at + 3))
            marks.append(Mark(phase=phase, label=f"00{order}", two_theta=at, d_spacing=spacing / order))
        contributions[phase] = tuple(curve.tolist())
    calculated = background + sum(np.array(c) for c in contributions.values())
    observed = rng.poisson(calculated)
    return Curve(
        scan=scan, two_theta=tuple(two_theta.tolist()), observed=tuple(float(v) for v in observed),
        calculated=tuple(calculated.tolist()), background=tuple(background.tolist()), contributions=contributions,
        marks=tuple(marks),
    )  # fmt: skip


def findings_of(sample: str) -> Findings:
    def finding(phase: str, status: str, reason: str, **more: object) -> PhaseFinding:
        name, group, _ = PHASES[phase]
        return PhaseFinding.model_validate(
            {"phase": phase, "name": name, "group": group, "status": status, "reason": reason, **more}
        )

    lines = (
        Evidence(kind="line", text="001 where it belongs", weight=3.1, scan="air_dried", two_theta=8.82, d_observed=10.02,
                 d_error=0.02, order=1, d_expected=10.0),
        Evidence(kind="behaviour", text="does not move with glycol", weight=2.0, scan="glycolated"),
        Evidence(kind="missing line", text="003 is weaker than it should be", weight=-0.6, scan="heated_550", d_expected=3.33),
    )  # fmt: skip
    return Findings(
        sample=sample,
        phases=(
            finding("illite", "present", "10 angstrom lines that no treatment moves", evidence=lines, basal_spacing=10.02,
                    alternatives=(Alternative(phase="muscovite", name="Muscovite", told_by="a random powder, 20-35 degrees"),)),
            finding("kaolinite", "present", "7.15 angstrom, lost at 550 C", evidence=lines[:1]),
            finding("smectite", "present", "moves to 16.9 angstrom with glycol", evidence=lines[1:2]),
            finding("chlorite", "present", "14.2 angstrom stays after 550 C"),
            finding("talc", "possible", "9.35 angstrom shoulder",
                    alternatives=(Alternative(phase="pyrophyllite", name="Pyrophyllite", told_by="d(060) of a random powder"),)),
            PhaseFinding(phase="vermiculite", name="Vermiculite", group="vermiculite", status="not_detected",
                         reason="nothing at 14.3 angstrom collapses to 10"),
        ),
        unassigned=(
            UnassignedLine(scan="air_dried", two_theta=26.64, d_spacing=3.343, height_sigma=7.2, suggestions=("quartz",)),
        ),
        measure_next=("random powder from 58 to 64 degrees: d(060)",),
    )  # fmt: skip


def build_result(sample: str = "S12", *, verdict: str = "yes", origin: str = "file header", curves: bool = True,
                 radiations: tuple[str, ...] = ("Cu", "Cu", "Cu", "Cu"), points: int = 1900) -> SampleResult:  # fmt: skip
    rng = np.random.default_rng(7)
    weights = [
        PhaseWeight(phase=p, name=n, group=g, status="possible" if p == "talc" else "present", weight_percent=w,
                    low95=w - 3 if w and w > 3 else 0.0, high95=w + 3.2 if w else None, standard_error=1.5, detection_limit=1.2)
        for p, (n, g, w) in PHASES.items()
    ]  # fmt: skip
    weights.append(
        PhaseWeight(phase="vermiculite", name="Vermiculite", group="vermiculite", status="not_detected", detection_limit=2.04)
    )
    swelling = Swelling(
        verdict=verdict, reason="a line moves from 14.9 to 16.9 angstrom with glycol", expandable_percent=18.2, low95=15.2,
        high95=21.4, measure_next="a free swell test",
    )  # fmt: skip
    return SampleResult(
        sample=sample,
        version="0.1.0",
        scans=tuple(
            ScanSummary(label=label, file=f"{label}.xy", mount="oriented", treatment=label, radiation=tube,
                        radiation_origin=origin, two_theta_range=(2.5, 40.0), points=points,
                        notes=("two columns",) if label == "air_dried" else ())
            for label, tube in zip(SPACINGS, radiations, strict=True)
        ),
        findings=findings_of(sample),
        proportions=Proportions(
            sample=sample, basis=BASIS, phases=tuple(weights),
            groups=(GroupWeight(group="true mica", status="present", weight_percent=41.3, low95=38.3, high95=44.5),
                    GroupWeight(group="expandable layers", status="present", weight_percent=18.2, low95=15.2, high95=21.4)),
            parameters=(FittedParameter(name="displacement", value=0.05, standard_error=0.01, unit="mm"),),
            quality=FitQuality(reduced_chi_square=1.43, profile_residual_percent=6.2, evaluations=80, converged=True),
        ),
        swelling=swelling,
        curves=tuple(curve_of(label, tube, rng, points) for label, tube in zip(SPACINGS, radiations, strict=True))
        if curves else (),
        details={"depth_m": "3.5"},
        cautions=("The swelling verdict is a screening result.",),
    )  # fmt: skip
