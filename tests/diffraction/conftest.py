"""Layers, grids and draws that several tests of the calculated patterns share."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from xrdmica.crystals.layer import Layer, build_layer
from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.grid import PatternGrid, make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.radiation import Radiation

LayerOf = Callable[..., Layer]


@pytest.fixture(scope="session")
def layer_of() -> LayerOf:
    """`layer_of(phase, state=None, one_sided=False)`: a layer of the library."""

    def build(phase: str, state: str | None = None, one_sided: bool = False) -> Layer:
        loaded = load_phase(phase)
        chosen = loaded.states[0] if state is None else next(s for s in loaded.states if s.id == state)
        return build_layer(loaded, chosen, one_sided=one_sided)

    return build


@pytest.fixture(scope="session")
def copper_grid() -> PatternGrid:
    """3-40 degrees, Cu doublet, default set-up."""
    return make_grid(np.arange(3.0, 40.0, 0.02), Radiation.parse("Cu"), Instrument())
