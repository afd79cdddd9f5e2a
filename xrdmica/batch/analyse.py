"""One sample, the whole way: examine, estimate, verdict."""

from __future__ import annotations

from dataclasses import dataclass

from xrdmica._version import __version__
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.optics import Instrument, load_instrument
from xrdmica.estimate.proportions import estimate_examined
from xrdmica.identify.decide import examine
from xrdmica.interpret.swelling import screen_swelling
from xrdmica.results import SampleResult, ScanSummary
from xrdmica.scans.scan import Sample

__all__ = ["CAUTIONS", "Settings", "analyse_sample"]

CAUTIONS = (
    "X-rays, ethylene glycol and glycerol, furnaces and fine dust (respirable silica) are hazards: follow the local rules.",
    "The swelling verdict is a screening result, no design value: it defers to index and swell tests under the local code "
    "and to a licensed engineer.",
)


@dataclass(frozen=True)
class Settings:
    """What a user may set.

    Attributes
    ----------
    radiation : str or None
        Tube or wavelength for scans that do not say.
    phases : tuple of str
        Library ids to consider; empty for all.
    instrument : str or None
        Path of an instrument file.
    curves : bool
        Whether results carry the curves that figures need.
    """

    radiation: str | None = None
    phases: tuple[str, ...] = ()
    instrument: str | None = None
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
    instrument = load_instrument(chosen.instrument) if chosen.instrument else Instrument()
    phases: list[Phase] | None = [load_phase(name) for name in chosen.phases] or None
    examination = examine(sample, phases, instrument)
    estimate = estimate_examined(examination)
    findings = examination.findings
    summaries = tuple(
        ScanSummary(
            label=label, file=scan.source, mount=scan.mount, treatment=scan.treatment.name, radiation=scan.radiation.name,
            radiation_origin=scan.radiation_origin, points=scan.two_theta.size,
            two_theta_range=(round(float(scan.two_theta[0]), 4), round(float(scan.two_theta[-1]), 4)),
            displacement_mm=None if moved is None else round(moved, 3), notes=scan.notes,
        )
        for label, scan, moved in zip(sample.labels, sample.scans, estimate.displacements, strict=True)
    )  # fmt: skip
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
        cautions=(*CAUTIONS, *dict.fromkeys(own)),
    )
