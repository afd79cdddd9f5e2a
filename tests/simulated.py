"""Simulated samples for tests: known mixtures whose optics, orientation and compositions differ from the program's start."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.simulate import MountSettings, simulate_scan, usual_component
from xrdmica.scans.scan import Mount, Sample
from xrdmica.scans.treatment import Treatment

FULL = ("air_dried", "glycolated", "heated_400", "heated_550")


def make_sample(
    weights: Mapping[str, float],
    treatments: Sequence[str] = FULL,
    *,
    seed: int = 1,
    displacement: float = 0.07,
    peak_counts: float = 8000.0,
    high: float = 35.0,
    mount: Mount = "oriented",
    phase_spread: float = 0.08,
    name: str = "simulated",
    radiation: str = "Cu",
    spread: float | None = None,
    hump: tuple[float, float, float] | None = None,
    exchanges: Mapping[str, tuple[tuple[str, float], ...]] | None = None,
) -> Sample:
    """A sample of known weights, scanned after each treatment."""
    rng = np.random.default_rng(seed)
    instrument = Instrument(soller_incident=4.0, soller_diffracted=4.0, fwhm=0.085, lorentzian=0.6)
    usual = float(rng.uniform(9, 16))
    spread = usual if spread is None else spread
    factors = {phase: float(rng.normal(1.0, phase_spread)) for phase in weights}
    stretch = {phase: float(np.exp(rng.normal(0, 0.2))) for phase in weights}
    scans = []
    for text in treatments:
        treatment = Treatment.parse(text)
        parts = {}
        for phase in weights:
            component = usual_component(phase, treatment)
            if component is not None and component.states:
                component = replace(component, mean_layers=component.mean_layers * stretch[phase])
                if exchanges and phase in exchanges:
                    component = replace(component, exchanges=exchanges[phase])
            parts[phase] = component
        settings = MountSettings(
            high=high, peak_counts=peak_counts, displacement=float(rng.normal(0, displacement)), orientation_spread=spread,
            spread_factors=factors, **({} if hump is None else {"hump": hump}),
        )  # fmt: skip
        scans.append(
            simulate_scan(weights, parts, treatment, settings, rng, radiation=radiation, mount=mount, instrument=instrument)
        )
    return Sample(name, tuple(scans))
