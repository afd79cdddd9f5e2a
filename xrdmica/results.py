"""The result records: what the program promises to write. The JSON Schema is made from these classes."""

from __future__ import annotations

from importlib import import_module
from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field

__all__ = [
    "Alternative", "ChemistryCheck", "Curve", "Evidence", "Findings", "FitQuality", "FitWarning", "FittedParameter",
    "GroupWeight", "IndexValue", "Mark", "NextMeasurement", "Outcome", "OxideMisfit", "PhaseFinding", "PhaseWeight",
    "Proportions", "SampleResult", "ScanSummary", "Status", "Swelling", "UnassignedLine",
]  # fmt: skip

Status = Literal["present", "trace", "possible", "not_detected"]
Basis = Literal["sheet silicates of the oriented mount", "crystalline part", "whole sample"]


class Record(BaseModel):
    """Frozen record; unknown keys are an error so that a typing mistake is not lost."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class Shown(Record):
    """A record that a notebook shows and that turns into a table; the rendering is loaded when it is asked for."""

    def _repr_html_(self) -> str:
        return str(import_module("xrdmica.report.notebook").html_of(self))

    def to_dataframe(self) -> Any:
        """The record as a table (pandas): one row per phase; unknown numbers are missing."""
        return import_module("xrdmica.report.notebook").dataframe_of(self)


class ScanSummary(Record):
    """One scan as it was used."""

    label: str = Field(description="treatment, distinct within the sample")
    file: str
    mount: Literal["oriented", "random"]
    treatment: str
    radiation: str
    radiation_origin: str
    two_theta_range: tuple[float, float] = Field(description="degree")
    points: int
    displacement_mm: float | None = Field(default=None, description="specimen displacement found by the fit")
    shift_degree: float | None = Field(default=None, description="angle shift found, at low angles")
    notes: tuple[str, ...] = ()


class Evidence(Record):
    """One fact for or against a phase."""

    kind: Literal["line", "missing line", "behaviour", "intensity", "fit", "overlap", "not measured"]
    text: str = Field(description="the fact in plain words")
    weight: float = Field(description="positive speaks for the phase, negative against it")
    scan: str = Field(default="", description="label of the scan, empty when it concerns the sample")
    two_theta: float | None = Field(default=None, description="observed position, degree")
    d_observed: float | None = Field(default=None, description="angstrom, the mount's displacement taken off")
    d_error: float | None = Field(default=None, description="standard error, angstrom")
    order: int | None = Field(default=None, description="basal order l of 00l")
    d_expected: float | None = Field(default=None, description="angstrom")
    intensity_ratio: float | None = Field(default=None, description="observed over calculated height, or ratio of heights")


class Alternative(Record):
    """Another phase that the scans cannot tell from this one."""

    phase: str
    name: str
    told_by: str = Field(description="the measurement that would tell")


class PhaseFinding(Record):
    """The decision on one phase."""

    phase: str
    name: str
    group: str
    status: Status
    reason: str = Field(description="the decision in one sentence")
    convincing: bool = Field(default=False, description="its lines suffice for something of its kind, whatever its name")
    evidence: tuple[Evidence, ...] = ()
    alternatives: tuple[Alternative, ...] = ()
    states: dict[str, str] = Field(default_factory=dict, description="scan label -> state of the phase in that scan")
    basal_spacing: float | None = Field(default=None, description="air-dried or untreated, angstrom")


class UnassignedLine(Record):
    """An observed line that no accepted phase explains."""

    scan: str
    two_theta: float
    d_spacing: float
    height_sigma: float = Field(description="height above background in standard errors")
    suggestions: tuple[str, ...] = ()


class Swelling(Record):
    """The verdict on swelling layers."""

    verdict: Literal["yes", "no", "cannot tell"]
    reason: str
    expandable_percent: float | None = Field(default=None, description="expandable layers, wt % of the sheet silicates")
    low95: float | None = None
    high95: float | None = None
    measure_next: str = ""


class Outcome(Record):
    """What one of the phases in question would show in a measurement that is still to be made."""

    phase: str
    name: str
    text: str = Field(description="what would be seen, in plain words")
    d_spacing: float | None = Field(default=None, description="strongest line to look at, angstrom")
    two_theta: float | None = Field(default=None, description="degree, with the tube of the scans at hand")
    relative_intensity: float | None = Field(default=None, description="against the strongest line of the phase, percent")


class NextMeasurement(Record):
    """A measurement that would settle what is open, with what each candidate would then show."""

    measurement: str
    separates: tuple[str, ...] = Field(description="phase ids")
    outcomes: tuple[Outcome, ...] = ()


class Findings(Shown):
    """What is in the sample, with the evidence."""

    sample: str
    phases: tuple[PhaseFinding, ...]
    unassigned: tuple[UnassignedLine, ...] = ()
    measure_next: tuple[str, ...] = Field(default=(), description="measurements that would settle what is open")
    next_measurements: tuple[NextMeasurement, ...] = Field(default=(), description="the same with the expected outcomes")
    notes: tuple[str, ...] = ()

    def of_status(self, *status: Status) -> tuple[PhaseFinding, ...]:
        """The findings with one of the given statuses."""
        return tuple(f for f in self.phases if f.status in status)

    def get(self, phase: str) -> PhaseFinding | None:
        """The finding on one phase id, if it was considered."""
        return next((f for f in self.phases if f.phase == phase), None)


class PhaseWeight(Record):
    """One row of the proportions: a phase that was considered."""

    phase: str
    name: str
    group: str
    status: Status
    weight_percent: float | None = None
    low95: float | None = None
    high95: float | None = None
    standard_error: float | None = None
    detection_limit: float | None = None


class GroupWeight(Record):
    """Total of a group of phases."""

    group: str
    status: Status
    weight_percent: float | None = None
    low95: float | None = None
    high95: float | None = None


class FittedParameter(Record):
    """A parameter that the fit moved."""

    name: str
    value: float
    standard_error: float | None = None
    unit: str = ""
    at_limit: bool = False


class FitQuality(Record):
    """How well the calculated scans match."""

    reduced_chi_square: float | None = None
    profile_residual_percent: float | None = Field(default=None, description="weighted profile residual")
    evaluations: int = 0
    converged: bool = False
    message: str = ""


class FitWarning(Record):
    """Something about the fit that a reader must know, in words."""

    kind: str = Field(description="short id such as orientation, amorphous hump, unassigned, weak line, residual")
    text: str
    scan: str = ""
    phase: str = ""
    value: float | None = None


class Proportions(Shown):
    """Weight percent with intervals, dry basis (structural OH counts, interlayer water and glycol do not)."""

    sample: str
    basis: Basis
    phases: tuple[PhaseWeight, ...]
    groups: tuple[GroupWeight, ...] = ()
    parameters: tuple[FittedParameter, ...] = ()
    quality: FitQuality = FitQuality()
    warnings: tuple[FitWarning, ...] = ()
    notes: tuple[str, ...] = ()


class IndexValue(Record):
    """An index of the trade, or why it was not computed."""

    id: str
    name: str
    value: float | None = None
    standard_error: float | None = None
    unit: str = ""
    scan: str = Field(default="", description="label of the scan it was read from")
    definition: str = ""
    source: str = ""
    validity: str = Field(default="", description="treatment and radiation it is defined for")
    weakness: str = Field(default="", description="its known weakness in one sentence")
    reason: str = Field(default="", description="why it was not computed; empty when it was")


class OxideMisfit(Record):
    """One oxide of the analysis against what the phases imply, wt %."""

    oxide: str
    measured: float
    measured_error: float | None = None
    implied: float
    implied_low: float | None = None
    implied_high: float | None = None
    misfit_sigma: float | None = None


class ChemistryCheck(Record):
    """Whether the analysis of the sample agrees with its phases and proportions."""

    agrees: bool | None = Field(default=None, description="None when it cannot be said")
    text: str
    oxides: tuple[OxideMisfit, ...] = ()
    reconcile: tuple[str, ...] = Field(default=(), description="what would bring the two together")
    joint: tuple[PhaseWeight, ...] = Field(default=(), description="joint estimate of scans and analysis, when asked for")
    notes: tuple[str, ...] = ()


class Mark(Record):
    """A calculated reflection for the figures."""

    phase: str
    label: str = Field(description="order or hkl, such as 001")
    two_theta: float
    d_spacing: float


class Curve(Record):
    """Curves of one scan, for figures and pages."""

    scan: str
    two_theta: tuple[float, ...]
    observed: tuple[float, ...]
    calculated: tuple[float, ...] = ()
    background: tuple[float, ...] = ()
    contributions: dict[str, tuple[float, ...]] = Field(default_factory=dict)
    marks: tuple[Mark, ...] = ()


class SampleResult(Shown):
    """Everything known about one sample: the content of ``<sample>.json``."""

    sample: str
    version: str
    scans: tuple[ScanSummary, ...]
    findings: Findings
    proportions: Proportions
    swelling: Swelling
    indices: tuple[IndexValue, ...] = ()
    chemistry: ChemistryCheck | None = None
    curves: tuple[Curve, ...] = ()
    details: dict[str, str] = Field(default_factory=dict, description="further columns of the sample sheet")
    settings: dict[str, str] = Field(default_factory=dict, description="settings that took effect")
    notes: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
