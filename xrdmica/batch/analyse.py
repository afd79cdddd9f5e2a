"""One sample, the whole way: examine, estimate, verdict."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from xrdmica._version import __version__
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.optics import Instrument, displacement_shift, load_instrument
from xrdmica.estimate.bootstrap import Bootstrap
from xrdmica.estimate.proportions import estimate_examined
from xrdmica.identify.decide import Examination, examine
from xrdmica.interpret.chemistry_check import check_chemistry, read_analysis
from xrdmica.interpret.index_readings import IndexInput, MeasuredScan
from xrdmica.interpret.indices import trade_indices
from xrdmica.interpret.swelling import screen_swelling
from xrdmica.interpret.width_calibration import load_width_calibration
from xrdmica.matching.prepare import Prepared
from xrdmica.report.cautions import GENERAL_CAUTIONS
from xrdmica.report.scans import scan_summaries
from xrdmica.results import ChemistryCheck, Findings, IndexValue, Proportions, SampleResult, Swelling
from xrdmica.scans.scan import Sample

__all__ = ["Settings", "analyse_sample"]

@dataclass(frozen=True)
class Settings:
    """What a user may set.

    Attributes
    ----------
    radiation : str or None
        Tube or wavelength for scans that do not say.
    phases : tuple of str
        Library ids to consider; empty for all.
    instrument : str, Instrument or None
        Path of an instrument file, or what it says.
    curves : bool
        Whether results carry the curves that figures need.
    width_calibration : str or None
        Path of the laboratory's calibration line for width indices.
    formulas : tuple of (str, str)
        Phase ids with their known mineral formulas, which the chemistry check and the fit then keep to.
    joint_chemistry : bool
        Whether the chemistry check gives weights that scans and analysis support together.
    bootstrap : int
        Draws of the parametric bootstrap behind the intervals; 0 for intervals from the covariance.
    seed : int
        Of the bootstrap.
    """

    radiation: str | None = None
    phases: tuple[str, ...] = ()
    instrument: str | Instrument | None = None
    curves: bool = True
    width_calibration: str | None = None
    formulas: tuple[tuple[str, str], ...] = ()
    joint_chemistry: bool = False
    bootstrap: int = 0
    seed: int = 0


def analyse_sample(
    sample: Sample, settings: Settings | None = None, *, on_draw: Callable[[int, int], None] | None = None
) -> SampleResult:
    """Identify and estimate one sample, and give the verdict on swelling.

    Parameters
    ----------
    sample : Sample
    settings : Settings, optional
    on_draw : callable, optional
        Called with (draws done, draws) of a bootstrap.

    Returns
    -------
    SampleResult

    Raises
    ------
    XrdmicaError
        If a phase id or the instrument file is not usable, or a scan holds too little of the useful range.
    """
    chosen = settings or Settings()
    given = chosen.instrument or Instrument()
    instrument = given if isinstance(given, Instrument) else load_instrument(given)
    phases: list[Phase] | None = [load_phase(name) for name in chosen.phases] or None
    examination = examine(sample, phases, instrument)
    known = {phase: SiteFormula.parse(text) for phase, text in chosen.formulas}
    draws = Bootstrap(chosen.bootstrap, chosen.seed, on_draw) if chosen.bootstrap > 0 else None
    estimate = estimate_examined(examination, known, draws)
    findings = examination.findings
    summaries = tuple(
        summary if moved is None else summary.model_copy(update={"displacement_mm": round(moved, 3)})
        for summary, moved in zip(scan_summaries(sample), estimate.displacements, strict=True)
    )
    swelling = screen_swelling(sample, findings, estimate.proportions)
    own = [c for f in findings.phases if f.status != "not_detected" for c in load_phase(f.phase).cautions]
    return SampleResult(
        sample=sample.name,
        version=__version__,
        scans=summaries,
        findings=findings,
        proportions=estimate.proportions,
        swelling=swelling,
        indices=_indices(sample, examination, swelling, chosen),
        chemistry=_chemistry(sample, findings, estimate.proportions, known, joint=chosen.joint_chemistry),
        curves=estimate.curves if chosen.curves else (),
        details=dict(sample.details),
        settings={
            "instrument": instrument.name,
            "instrument settings": instrument.model_dump_json(),
            "phases considered": ", ".join(chosen.phases) or "whole library",
            "form factors": "ionic, with anomalous dispersion",
        },
        notes=sample.notes,
        cautions=(*GENERAL_CAUTIONS, *dict.fromkeys(own)),
    )


def _indices(sample: Sample, examination: Examination, swelling: Swelling, chosen: Settings) -> tuple[IndexValue, ...]:
    scans = tuple(
        MeasuredScan(label, item.scan, item.peaks, item.view.width, _shift_of(item))
        for label, item in zip(sample.labels, examination.arena.prepared, strict=True)
    )
    clay = sample.details.get("clay_percent", "")
    line = load_width_calibration(chosen.width_calibration) if chosen.width_calibration else None
    return trade_indices(IndexInput(scans, examination.findings, swelling, float(clay) if clay else None, line))


def _shift_of(item: Prepared) -> Callable[[float], float]:
    def shift(two_theta: float) -> float:
        return float(displacement_shift(np.array(two_theta), item.view.displacement, item.view.grid.instrument))

    return shift


def _chemistry(
    sample: Sample, findings: Findings, proportions: Proportions, known: Mapping[str, SiteFormula], *, joint: bool
) -> ChemistryCheck | None:
    """The check against the analysis that the sheet names; None without one."""
    named = sample.details.get("chemistry", "").strip()
    if not named:
        return None
    path = Path(named)
    if not path.is_absolute():
        path = Path(sample.scans[0].source).parent / path
    weighed = {row.phase for row in proportions.phases if row.weight_percent}
    companions = [
        f.phase for f in findings.of_status("present", "trace")
        if f.phase not in weighed and not load_phase(f.phase).is_sheet_silicate
    ]  # fmt: skip
    return check_chemistry(
        proportions, read_analysis(path, sample.name), companions=companions,
        formulas=known, joint=joint,
    )  # fmt: skip
