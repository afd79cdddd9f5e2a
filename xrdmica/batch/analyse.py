"""One sample, the whole way: examine, estimate, verdict."""

from __future__ import annotations

from dataclasses import dataclass

from xrdmica._version import __version__
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.optics import Instrument, load_instrument
from xrdmica.estimate.proportions import estimate_examined
from xrdmica.identify.decide import examine
from xrdmica.interpret.swelling import screen_swelling
from xrdmica.report.cautions import GENERAL_CAUTIONS
from xrdmica.report.scans import scan_summaries
from xrdmica.results import SampleResult
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
    """

    radiation: str | None = None
    phases: tuple[str, ...] = ()
    instrument: str | Instrument | None = None
    curves: bool = True


def analyse_sample(sample: Sample, settings: Settings | None = None) -> SampleResult:
    """Identify and estimate one sample, and give the verdict on swelling.

    Parameters
    ----------
    sample : Sample
    settings : Settings, optional

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
    estimate = estimate_examined(examination)
    findings = examination.findings
    summaries = tuple(
        summary if moved is None else summary.model_copy(update={"displacement_mm": round(moved, 3)})
        for summary, moved in zip(scan_summaries(sample), estimate.displacements, strict=True)
    )
    own = [c for f in findings.phases if f.status != "not_detected" for c in load_phase(f.phase).cautions]
    return SampleResult(
        sample=sample.name,
        version=__version__,
        scans=summaries,
        findings=findings,
        proportions=estimate.proportions,
        swelling=screen_swelling(sample, findings, estimate.proportions),
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
