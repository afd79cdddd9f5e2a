"""Composite peaks of glycolated illite-smectite, Cu K-alpha.

Source: Moore & Reynolds (1997), X-ray diffraction and the identification and analysis of clay minerals, 2nd ed., table of
positions of the 001/002 and 002/003 reflections (from memory; tolerance 0.12 angstrom for the first, 0.03 for the second,
as the project's science notes, section 4, give them). The published stacks are of 7-14 layers or so (from memory): mean 10 here.
"""

from __future__ import annotations

import numpy as np
import pytest

from xrdmica.crystals.layer import build_layer
from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.stacking import stack_intensity, two_kind_junctions
from xrdmica.radiation import Radiation

TABLE = [
    (10, 0, 8.58, 5.61),
    (20, 0, 8.67, 5.58),
    (30, 0, 8.77, 5.53),
    (40, 0, 8.89, 5.50),
    (50, 0, 9.05, 5.44),
    (60, 1, 9.22, 5.34),
    (70, 1, 9.40, 5.28),
    (80, 1, 9.64, 5.20),
    (90, 3, 9.82, 5.10),
]


def composite_peaks(illite: float, reichweite: int) -> tuple[float, float]:
    """d of the highest points between the end members' lines [angstrom]."""
    tube = Radiation.parse("Cu")
    grid = make_grid(np.arange(3.0, 35.0, 0.01), tube, Instrument())
    first, second = load_phase("illite"), load_phase("smectite")
    glycol = next(state for state in second.states if state.id == "glycol_2")
    layers = (
        build_layer(first, first.states[0], one_sided=True),
        build_layer(second, glycol, one_sided=True),
    )
    curve = stack_intensity(layers, two_kind_junctions(illite, reichweite), grid, mean_layers=10.0) * grid.factor(12.0)
    d = tube.wavelength / (2 * np.sin(np.radians(grid.two_theta) / 2))
    out = []
    for low, high in ((8.3, 10.2), (4.9, 5.75)):
        inside = np.flatnonzero((d > low) & (d < high))
        peak = inside[curve[inside].argmax()]
        assert inside[0] < peak < inside[-1], "the highest point has to be a peak, not the end of the window"
        out.append(float(d[peak]))
    return out[0], out[1]


@pytest.mark.parametrize(("percent", "reichweite", "first", "second"), TABLE)
def test_positions_of_composite_peaks(percent: int, reichweite: int, first: float, second: float) -> None:
    found_first, found_second = composite_peaks(percent / 100, reichweite)
    assert found_first == pytest.approx(first, abs=0.12)
    assert found_second == pytest.approx(second, abs=0.03)


def test_peaks_move_one_way_with_the_share_of_illite() -> None:
    found = np.array([composite_peaks(percent / 100, order) for percent, order, _, _ in TABLE if order < 2])
    assert np.all(np.diff(found[:, 0]) > 0)
    assert np.all(np.diff(found[:, 1]) < 0)
