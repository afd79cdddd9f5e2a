"""From diffractometer exports of clay fractions to named and weighed sheet silicates.

Everything the command line does is one of the functions here; each is loaded when it is first used, so that
``import xrdmica`` stays quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from xrdmica._version import __version__

if TYPE_CHECKING:
    from xrdmica.batch.analyse import Settings, analyse_sample
    from xrdmica.batch.run import run_batch
    from xrdmica.batch.samples import read_sample
    from xrdmica.chemistry.formula import SiteFormula
    from xrdmica.crystals.building import build_structure
    from xrdmica.crystals.layer import Layer, build_layer
    from xrdmica.crystals.library import Phase, all_phases, load_phase
    from xrdmica.crystals.polytype import library_structure
    from xrdmica.crystals.spacing import predict_spacing, predicted_b, predicted_spacing
    from xrdmica.diffraction.basal import basal_pattern
    from xrdmica.diffraction.optics import Instrument, load_instrument
    from xrdmica.diffraction.powder import powder_pattern
    from xrdmica.errors import XrdmicaError
    from xrdmica.estimate.proportions import estimate
    from xrdmica.identify.decide import identify
    from xrdmica.interpret.swelling import screen_swelling
    from xrdmica.radiation import Radiation
    from xrdmica.scans.peaks import find_peaks
    from xrdmica.scans.read import read_scan
    from xrdmica.scans.scan import Sample, Scan
    from xrdmica.scans.treatment import Treatment

_PLACES = {
    "Instrument": "xrdmica.diffraction.optics",
    "Layer": "xrdmica.crystals.layer",
    "Phase": "xrdmica.crystals.library",
    "Radiation": "xrdmica.radiation",
    "Sample": "xrdmica.scans.scan",
    "Scan": "xrdmica.scans.scan",
    "Settings": "xrdmica.batch.analyse",
    "SiteFormula": "xrdmica.chemistry.formula",
    "Treatment": "xrdmica.scans.treatment",
    "XrdmicaError": "xrdmica.errors",
    "all_phases": "xrdmica.crystals.library",
    "analyse_sample": "xrdmica.batch.analyse",
    "basal_pattern": "xrdmica.diffraction.basal",
    "build_layer": "xrdmica.crystals.layer",
    "build_structure": "xrdmica.crystals.building",
    "estimate": "xrdmica.estimate.proportions",
    "find_peaks": "xrdmica.scans.peaks",
    "formula_from_oxides": "xrdmica.chemistry.analysis",
    "identify": "xrdmica.identify.decide",
    "library_structure": "xrdmica.crystals.polytype",
    "load_instrument": "xrdmica.diffraction.optics",
    "load_phase": "xrdmica.crystals.library",
    "powder_pattern": "xrdmica.diffraction.powder",
    "predict_spacing": "xrdmica.crystals.spacing",
    "predicted_b": "xrdmica.crystals.spacing",
    "predicted_spacing": "xrdmica.crystals.spacing",
    "read_sample": "xrdmica.batch.samples",
    "read_scan": "xrdmica.scans.read",
    "run_batch": "xrdmica.batch.run",
    "screen_swelling": "xrdmica.interpret.swelling",
}

__all__ = [
    "Instrument", "Layer", "Phase", "Radiation", "Sample", "Scan", "Settings", "SiteFormula", "Treatment",
    "XrdmicaError", "__version__", "all_phases", "analyse_sample", "basal_pattern", "build_layer",
    "build_structure", "estimate", "find_peaks", "formula_from_oxides", "identify", "library_structure",
    "load_instrument", "load_phase", "powder_pattern", "predict_spacing", "predicted_b", "predicted_spacing",
    "read_sample", "read_scan", "run_batch", "screen_swelling",
]  # fmt: skip


def __getattr__(name: str) -> Any:
    if name not in _PLACES:
        raise AttributeError(f"module 'xrdmica' has no attribute {name!r}")
    return getattr(import_module(_PLACES[name]), name)


def __dir__() -> list[str]:
    return sorted(__all__)
