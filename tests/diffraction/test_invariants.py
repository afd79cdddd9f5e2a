"""What must hold whatever the numbers are: sign, energy, scale, weights, and the limits of the Lorentz factor."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.crystals.layer import Layer, build_layer
from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.basal import basal_intensity
from xrdmica.diffraction.grid import make_grid, on_scan
from xrdmica.diffraction.optics import RANDOM_SPREAD, Instrument, powder_ring_factor
from xrdmica.diffraction.stack_heights import StackHeights, fixed_heights, interference, lognormal_heights
from xrdmica.diffraction.stacking import stack_intensity, two_kind_junctions
from xrdmica.errors import StructureError
from xrdmica.radiation import Radiation

PHASES = ("muscovite", "phlogopite", "talc", "kaolinite", "chlorite", "smectite", "vermiculite", "margarite")
COPPER = make_grid(np.arange(3.0, 40.0, 0.05), Radiation.parse("Cu"), Instrument())


def layer(phase: str, *, spacing: float | None = None, one_sided: bool = False) -> Layer:
    loaded = load_phase(phase)
    return build_layer(loaded, loaded.states[0], spacing=spacing, one_sided=one_sided)


@settings(max_examples=40, deadline=None)
@given(st.sampled_from(PHASES), st.floats(2.0, 60.0), st.floats(0.0, 0.6), st.sampled_from(["ionic", "neutral"]))
def test_intensity_is_positive(phase: str, mean: float, disorder: float, model: str) -> None:
    curve = basal_intensity(layer(phase), COPPER, mean_layers=mean, spacing_disorder=disorder, model=model)  # type: ignore[arg-type]
    assert np.all(curve >= -1e-9 * curve.max())


@settings(max_examples=40, deadline=None)
@given(st.floats(2.0, 30.0), st.floats(0.0, 0.8), st.floats(8.0, 18.0))
def test_disorder_moves_energy_and_does_not_make_it(mean: float, disorder: float, spacing: float) -> None:
    # over one period of the phase the interference function of ordered stacks averages to 1; disorder leaves the mean
    # over many periods where it was
    s = np.linspace(0.0, 20.0 / (2 * spacing), 40001)[:-1]
    found = float(interference(s, spacing, mean, disorder).mean())
    # at s = 0 disorder has no effect: the zero order stays sharp and holds half a line's energy above the mean
    assert found == pytest.approx(1.0, abs=0.06 if disorder else 2e-3)


@settings(max_examples=25, deadline=None)
@given(st.sampled_from(PHASES), st.floats(0.1, 50.0))
def test_scale_of_the_counts_of_atoms_is_the_scale_squared(phase: str, factor: float) -> None:
    plain = layer(phase)
    scaled = Layer(
        plain.z, plain.counts * factor, plain.ions, plain.b_iso, plain.spacing, plain.area * factor, plain.molar_mass * factor
    )
    # the same matter written per larger formula unit scatters the same per unit of mass
    one = basal_intensity(plain, COPPER, mean_layers=12.0)
    two = basal_intensity(scaled, COPPER, mean_layers=12.0)
    np.testing.assert_allclose(two, one, rtol=1e-9)


@settings(max_examples=15, deadline=None)
@given(st.sampled_from(["muscovite", "talc", "kaolinite"]), st.floats(8.0, 40.0))
def test_weights_of_layers_and_of_the_zmv_rule_agree(phase: str, mean: float) -> None:
    """Area of 001 per unit of mass is |F|^2 / (M A d) times geometry, which is S of the ZMV rule: w ~ S Z M V."""
    plain = layer(phase)
    wide = layer(phase, spacing=plain.spacing)
    grid = COPPER
    one = basal_intensity(plain, grid, mean_layers=mean)
    # Z formula units of mass M in volume V = Z A d: the scale of a whole cell is Z^2 |F|^2 / V^2 per volume
    z_units = 4.0
    cell = Layer(
        wide.z, wide.counts * z_units, wide.ions, wide.b_iso, wide.spacing, wide.area * z_units, wide.molar_mass * z_units
    )
    volume, mass = cell.area * cell.spacing, cell.molar_mass
    by_cell = basal_intensity(cell, grid, mean_layers=mean) * (mass * volume)
    by_layer = one * (plain.molar_mass * plain.area * plain.spacing) * z_units**2
    np.testing.assert_allclose(by_cell, by_layer, rtol=1e-9)


@settings(max_examples=40, deadline=None)
@given(st.floats(0.5, 8.0), st.floats(0.5, 8.0), st.floats(4.0, 60.0))
def test_limits_of_the_share_of_crystals(first: float, second: float, angle: float) -> None:
    angles = np.array([angle, angle + 5.0])
    # sigma -> 0: every crystal reflects, whatever the angle (Reynolds 1986): psi is constant
    perfect = powder_ring_factor(angles, 1e-3, first, second)
    assert perfect[0] == pytest.approx(perfect[1], rel=1e-3)
    # sigma -> infinity: psi -> 1/(4 sigma^2 sin theta), a random powder
    wide = powder_ring_factor(angles, 3000.0, first, second)
    sine = np.sin(np.radians(angles) / 2)
    assert wide[0] / wide[1] == pytest.approx(sine[1] / sine[0], rel=0.02)
    assert powder_ring_factor(angles, RANDOM_SPREAD, first, second)[0] > 0


@settings(max_examples=25, deadline=None)
@given(st.integers(1, 30))
def test_fixed_heights_give_the_textbook_function(layers: int) -> None:
    # sin^2(N x / 2) / (N sin^2(x / 2)) for N layers, any textbook of diffraction
    s = np.linspace(0.011, 0.31, 500)
    phase = 4 * np.pi * 10.0 * s
    expected = np.sin(layers * phase / 2) ** 2 / (layers * np.sin(phase / 2) ** 2)
    np.testing.assert_allclose(interference(s, 10.0, 1.0, 0.0, fixed_heights(layers)), expected, atol=1e-6, rtol=1e-6)


def test_no_stack_of_no_layers() -> None:
    with pytest.raises(StructureError, match="give 1 or more"):
        fixed_heights(0)


def test_given_heights_are_those_of_the_law() -> None:
    law: StackHeights = lognormal_heights(9.0)
    one = basal_intensity(layer("talc"), COPPER, mean_layers=9.0)
    two = basal_intensity(layer("talc"), COPPER, mean_layers=9.0, heights=law)
    np.testing.assert_allclose(two, one, rtol=2e-3, atol=1e-6 * float(one.max()))


# the mixtures of the trade: two kinds of layers, how they alternate, and where the first line stands [angstrom].
# Superlattices: rectorite 26.6 with glycol, corrensite 31 with glycol and 29 air-dried (handbook, common practice)
MIXTURES = [
    ("illite", "anhydrous", "smectite", "glycol_2", 0.5, 1, 26.9),
    ("chlorite", "air", "smectite", "glycol_2", 0.5, 1, 31.1),
    ("chlorite", "air", "smectite", "air_2w", 0.5, 1, 29.2),
    ("chlorite", "air", "vermiculite", "air_2w", 0.5, 1, 28.6),
    ("phlogopite", "anhydrous", "vermiculite", "air_2w", 0.5, 1, 24.5),
    ("kaolinite", "kept", "smectite", "glycol_2", 0.6, 0, None),
    ("illite", "anhydrous", "smectite", "glycol_2", 0.7, 3, None),
    ("illite", "anhydrous", "smectite", "glycol_2", 0.6, 2, None),
    ("smectite", "air_1w", "smectite", "air_2w", 0.4, 0, None),
    ("smectite", "air_0w", "smectite", "air_1w", 0.5, 0, None),
]


@pytest.mark.parametrize(("first", "one", "second", "two", "share", "memory", "line"), MIXTURES)
def test_mixtures_of_the_trade(
    first: str, one: str, second: str, two: str, share: float, memory: int, line: float | None
) -> None:
    layers = [
        build_layer(phase, next(s for s in phase.states if s.id == state), one_sided=True)
        for phase, state in ((load_phase(first), one), (load_phase(second), two))
    ]
    curve = stack_intensity(layers, two_kind_junctions(share, memory), GRID, mean_layers=14.0) * GRID.factor(12.0)
    assert np.all(curve >= 0)
    spacing = GRID.radiation.d_spacing(GRID.two_theta)
    if line is None:
        return
    inside = np.flatnonzero((spacing > 0.85 * line) & (spacing < 1.15 * line))
    peak = inside[curve[inside].argmax()]
    assert inside[0] < peak < inside[-1]
    assert float(spacing[peak]) == pytest.approx(line, rel=0.04)


GRID = make_grid(np.arange(2.0, 35.0, 0.02), Radiation.parse("Cu"), Instrument())


def test_three_water_states_of_one_smectite() -> None:
    from xrdmica.diffraction.junctions import random_junctions

    smectite = load_phase("smectite")
    states = [next(s for s in smectite.states if s.id == name) for name in ("air_0w", "air_1w", "air_2w")]
    layers = [build_layer(smectite, state, one_sided=True) for state in states]
    curve = stack_intensity(layers, random_junctions([0.2, 0.3, 0.5]), GRID, mean_layers=8.0) * GRID.factor(12.0)
    spacing = GRID.radiation.d_spacing(GRID.two_theta)
    inside = (spacing > 9.0) & (spacing < 17.0)
    first = float(spacing[inside][curve[inside].argmax()])
    # the first line of a mixture stands between those of its kinds (Hendricks & Teller 1942)
    assert 10.0 < first < 15.4


@pytest.mark.parametrize("tube", ["Cu", "Co", "Fe", "Cr", "Mo", "1.2"])
def test_any_tube_puts_a_line_where_bragg_has_it(tube: str) -> None:
    radiation = Radiation.parse(tube)
    angle = float(radiation.two_theta(9.35))
    grid = make_grid(np.arange(angle - 2, angle + 2, 0.01), radiation, Instrument())
    fine = np.arange(angle - 1.5, angle + 1.5, 0.005)
    curve = on_scan(basal_intensity(layer("talc"), grid, mean_layers=30.0), grid, fine, orientation_spread=12.0)
    found = float(fine[curve.argmax()])
    assert found == pytest.approx(float(radiation.two_theta(9.35)), abs=0.04)
