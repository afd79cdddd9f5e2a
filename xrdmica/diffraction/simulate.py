"""Simulated scans: calculated columns with displacement, background and counting noise."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.columns import Component, View, component_column, components_for
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.radiation import Radiation
from xrdmica.scans.scan import Mount, Scan
from xrdmica.scans.treatment import Treatment

__all__ = ["MountSettings", "simulate_scan", "usual_component"]


@dataclass(frozen=True)
class MountSettings:
    """How a simulated scan is measured.

    Attributes
    ----------
    low, high, step : float
        Angle range [degree].
    peak_counts : float
        Height of the highest calculated line above background [counts].
    background_counts : float
        Level of the smooth background at mid-range [counts].
    low_angle_rise : float
        Rise of the background at 3 degrees, in units of the level.
    displacement : float
        [mm]
    orientation_spread : float
        [degree]
    spread_factors : mapping
        Phase id -> factor on the orientation spread of that phase.
    neutral_share : float
        Part of the scattering that is calculated with neutral atoms, where the program assumes ions.
    hump : tuple of float
        Centre [degree], width [degree] and height [counts] of a broad hump such as glass or organic matter gives.
    """

    low: float = 3.0
    high: float = 35.0
    step: float = 0.02
    peak_counts: float = 6000.0
    background_counts: float = 120.0
    low_angle_rise: float = 4.0
    displacement: float = 0.0
    orientation_spread: float = 12.0
    spread_factors: Mapping[str, float] = field(default_factory=dict)
    neutral_share: float = 0.0
    hump: tuple[float, float, float] = (25.0, 5.0, 0.0)


def usual_component(phase: str, treatment: Treatment, state: str | None = None) -> Component | None:
    """The first state of a phase after a treatment, or the named one; None when it gives no lines then."""
    found = components_for(load_phase(phase), treatment)
    if state is not None:
        found = tuple(component for component in found if state in component.states)
    return found[0] if found else None


def simulate_scan(
    weights: Mapping[str, float],
    components: Mapping[str, Component | None],
    treatment: Treatment,
    settings: MountSettings,
    rng: np.random.Generator,
    *,
    radiation: str = "Cu",
    mount: Mount = "oriented",
    instrument: Instrument | None = None,
) -> Scan:
    """One scan of a known mixture.

    Parameters
    ----------
    weights : mapping
        Phase id -> weight, any common unit of dry mass.
    components : mapping
        Phase id -> component in this scan; None or missing adds nothing.
    treatment : Treatment
    settings : MountSettings
    rng : numpy.random.Generator
        Source of the Poisson noise.
    radiation, mount, instrument
        As in the calculated patterns.

    Returns
    -------
    Scan
        With Poisson counts.
    """
    tube = Radiation.parse(radiation)
    angles = np.round(np.arange(settings.low, settings.high + settings.step / 2, settings.step), 5)
    grid = make_grid(angles, tube, instrument or Instrument())
    total = np.zeros(angles.size)
    for phase, weight in weights.items():
        component = components.get(phase)
        if component is None or weight <= 0:
            continue
        spread = settings.orientation_spread * settings.spread_factors.get(phase, 1.0)
        view = View(grid, angles, mount, spread, settings.displacement)
        column = component_column(component, view)
        if settings.neutral_share > 0:
            column = column + settings.neutral_share * (component_column(component, view, "neutral") - column)
        total += weight * column
    if total.max() > 0:
        total *= settings.peak_counts / total.max()
    x = (angles - angles[0]) / (angles[-1] - angles[0])
    smooth = settings.background_counts * (1 + 0.35 * np.sin(2.6 * x + 0.4) - 0.3 * x)
    rise = settings.background_counts * settings.low_angle_rise * np.exp(-(angles - 3.0) / 1.7)
    centre, width, height = settings.hump
    glass = height * np.exp(-((angles - centre) ** 2) / (2 * width**2))
    counts = rng.poisson(total + smooth + rise + glass).astype(float)
    return Scan.from_arrays(angles, counts, radiation=tube, mount=mount, treatment=treatment)
