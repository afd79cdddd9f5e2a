"""Basal patterns: amplitudes and interference recomputed from first principles."""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable

import numpy as np
import pytest
import xraydb

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.basal import basal_intensity, basal_pattern, layer_amplitude, smooth_amplitude
from xrdmica.diffraction.grid import PatternGrid, make_grid, on_scan
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.stack_heights import StackHeights, interference, lognormal_heights
from xrdmica.radiation import Radiation

CU = Radiation.parse("Cu")
TABLE_NAMES = {"O2-": "O1-", "OH-": "O1-", "K+": "K1+", "Na+": "Na1+"}


def amplitude_by_hand(layer: Layer, s: float) -> complex:
    """Sum over atoms, written out with xraydb's own functions; H2O as 2 H + O."""
    total = 0j
    for z, count, ion, b in zip(layer.z, layer.counts, layer.ions, layer.b_iso, strict=True):
        if ion == "H2O":
            f = 2 * float(xraydb.f0("H", s)[0]) + float(xraydb.f0("O", s)[0])
            element = "O"
        else:
            f = float(xraydb.f0(TABLE_NAMES.get(ion, ion), s)[0])
            element = "O" if ion == "OH-" else ion.rstrip("+-0123456789")
        f1 = float(np.squeeze(xraydb.f1_chantler(element, CU.energy_ev)))
        f2 = float(np.squeeze(xraydb.f2_chantler(element, CU.energy_ev)))
        total += count * (f + f1 + 1j * f2) * math.exp(-b * s * s) * cmath.exp(4j * math.pi * z * s)
    return total


@pytest.mark.parametrize(
    ("phase", "state"),
    [("muscovite", None), ("biotite", None), ("kaolinite", None), ("chlorite", None), ("smectite", "glycol_2")],
)
def test_structure_factors_by_hand(layer_of: Callable[..., Layer], phase: str, state: str | None) -> None:
    layer = layer_of(phase, state)
    s = np.array([order / (2 * layer.spacing) for order in range(1, 7)])
    found = layer_amplitude(layer, s, CU)
    for value, at in zip(found, s, strict=True):
        assert value == pytest.approx(amplitude_by_hand(layer, float(at)), rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("model", ["ionic", "neutral"])
@pytest.mark.parametrize(
    ("phase", "state", "one_sided"), [("muscovite", None, False), ("chlorite", None, True), ("smectite", "glycol_2", True)]
)
def test_smooth_amplitude_is_the_amplitude(
    layer_of: Callable[..., Layer], copper_grid: PatternGrid, phase: str, state: str | None, one_sided: bool, model: str
) -> None:
    layer = layer_of(phase, state, one_sided)
    exact = layer_amplitude(layer, copper_grid.s, CU, model)
    smooth = smooth_amplitude(layer, copper_grid, model)
    assert np.abs(smooth - exact).max() < 2e-4 * np.abs(exact).max()


def test_neutral_against_ionic_moves_the_mica_002() -> None:
    """Science notes, section 3: the choice of form factors moves I002/I001 of micas by 20-67 %."""
    from xrdmica.crystals.layer import build_layer
    from xrdmica.crystals.library import load_phase

    phase = load_phase("muscovite")
    layer = build_layer(phase, phase.states[0])
    s = np.array([1, 2]) / (2 * layer.spacing)
    ratios = []
    for model in ("ionic", "neutral"):
        power = np.abs(layer_amplitude(layer, s, CU, model)) ** 2  # type: ignore[arg-type]
        ratios.append(power[1] / power[0])
    assert 0.2 <= abs(ratios[1] / ratios[0] - 1) <= 0.67


# --- stack heights ---


def test_pair_counts_by_counting() -> None:
    heights = StackHeights(np.array([1, 2, 4]), np.array([0.2, 0.5, 0.3]))
    by_hand = [sum(share * max(n - apart, 0) for n, share in ((1, 0.2), (2, 0.5), (4, 0.3))) for apart in range(4)]
    np.testing.assert_allclose(heights.pair_counts, by_hand, atol=1e-15)
    assert heights.mean == pytest.approx(by_hand[0])


@pytest.mark.parametrize("mean", [5.0, 10.0, 20.0, 50.0])
def test_lognormal_mean(mean: float) -> None:
    """Drits, Eberl & Srodon (1998): T is the mean of the distribution; alpha and beta come from regressions on T."""
    heights = lognormal_heights(mean)
    assert heights.shares.sum() == pytest.approx(1.0)
    assert heights.mean == pytest.approx(mean, rel=0.06)


# --- interference ---


def interference_by_layers(s: np.ndarray, spacing: float, heights: StackHeights, sigma: float = 0.0) -> np.ndarray:
    """Double sum over the layers of each stack, written out."""
    total, layers = np.zeros(s.shape), 0.0
    for number, share in zip(heights.numbers, heights.shares, strict=True):
        for a in range(number):
            for b in range(number):
                damp = np.exp(-((4 * np.pi * s) ** 2) * abs(a - b) * sigma**2 / 2)
                total += share * damp * np.cos(4 * np.pi * s * spacing * (a - b))
        layers += share * number
    return total / layers


@pytest.mark.parametrize("sigma", [0.0, 0.15])
def test_interference_against_the_double_sum(sigma: float) -> None:
    s = np.linspace(0.02, 0.25, 157)
    found = interference(s, 10.0, 3.0, sigma)
    np.testing.assert_allclose(found, interference_by_layers(s, 10.0, lognormal_heights(3.0), sigma), atol=2e-5)


def test_interference_against_drawn_stacks() -> None:
    """Spacings drawn one by one from a normal law; 1500 stacks per height, agreement within sampling error."""
    rng = np.random.default_rng(11)
    s = np.linspace(0.03, 0.2, 40)
    heights = lognormal_heights(5.0)
    drawn = 1500
    total, layers, spread = np.zeros(s.size), 0.0, np.zeros(s.size)
    for number, share in zip(heights.numbers, heights.shares, strict=True):
        steps = rng.normal(10.0, 0.4, (drawn, number))
        places = np.cumsum(steps, axis=1) - steps[:, :1]
        power = np.abs(np.exp(4j * np.pi * np.multiply.outer(s, places)).sum(axis=2)) ** 2
        total += share * power.mean(axis=1)
        spread += (share * power.std(axis=1)) ** 2 / drawn
        layers += share * number
    difference = (interference(s, 10.0, 5.0, 0.4) - total / layers) / (np.sqrt(spread) / layers)
    assert np.abs(difference).max() < 4.5
    assert np.sqrt((difference**2).mean()) < 1.6


@pytest.mark.parametrize("mean", [2.0, 8.0, 60.0])
def test_interference_averages_to_one(mean: float) -> None:
    """Energy is only moved about: over a period the mean is 1; at a line it is the mass-weighted mean number of layers."""
    period = 1 / (2 * 10.0)
    s = np.linspace(2 * period, 3 * period, 4000, endpoint=False)
    assert interference(s, 10.0, mean).mean() == pytest.approx(1.0, rel=1e-4)
    heights = lognormal_heights(mean)
    at_line = (heights.numbers**2 @ heights.shares) / heights.mean
    assert interference(np.array([2 * period]), 10.0, mean)[0] == pytest.approx(at_line, rel=1e-6)


def test_disorder_keeps_the_mean_and_lowers_lines() -> None:
    """A narrow period far out: damping varies little across it, so the energy is still conserved there to a percent."""
    s = np.linspace(3.5, 4.5, 6000, endpoint=False) / 20.0
    ordered, disordered = interference(s, 10.0, 12.0), interference(s, 10.0, 12.0, 0.2)
    assert disordered.max() < ordered.max()
    assert disordered.min() > 0
    assert disordered.mean() == pytest.approx(1.0, abs=0.02)


def test_disorder_tends_to_none() -> None:
    s = np.linspace(0.02, 0.3, 300)
    np.testing.assert_allclose(interference(s, 10.0, 12.0, 1e-4), interference(s, 10.0, 12.0), rtol=1e-2, atol=1e-3)


# --- from scattering to scan ---


def test_doublet_is_two_single_lines_added() -> None:
    """Bragg's law for both lines: the doublet's pattern is the weighted sum of two patterns with one wavelength each."""
    from xrdmica.crystals.layer import build_layer
    from xrdmica.crystals.library import load_phase

    phase = load_phase("muscovite")
    layer = build_layer(phase, phase.states[0])
    two_theta = np.arange(43.0, 48.0, 0.01)
    both = basal_pattern(layer, two_theta, CU, mean_layers=80)
    first, second = (basal_pattern(layer, two_theta, Radiation.from_wavelength(w), mean_layers=80) for w in CU.wavelengths)
    apart = (2 * first + second) / 3
    np.testing.assert_allclose(both, apart, atol=6e-3 * both.max())


def test_displacement_moves_lines_down() -> None:
    from xrdmica.crystals.layer import build_layer
    from xrdmica.crystals.library import load_phase

    phase = load_phase("muscovite")
    layer = build_layer(phase, phase.states[0])
    two_theta = np.arange(26.0, 27.6, 0.005)
    tube = Radiation.tube("Cu", doublet=False)
    instrument = Instrument(goniometer_radius=200.0)
    straight = basal_pattern(layer, two_theta, tube, mean_layers=100, instrument=instrument)
    moved = basal_pattern(layer, two_theta, tube, mean_layers=100, instrument=instrument, displacement=0.2)
    shift = two_theta[moved.argmax()] - two_theta[straight.argmax()]
    expected = np.degrees(-2 * 0.2 * np.cos(np.radians(26.75 / 2)) / 200.0)
    assert shift == pytest.approx(expected, abs=0.006)


def test_heavier_mass_per_area_scatters_less_per_gram(layer_of: Callable[..., Layer], copper_grid: PatternGrid) -> None:
    """Unit mass: intensity times molar mass times area is the layer's own scattering."""
    layer = layer_of("talc")
    found = basal_intensity(layer, copper_grid, mean_layers=20) * layer.molar_mass * layer.area
    expected = np.abs(layer_amplitude(layer, copper_grid.s, CU)) ** 2 * interference(copper_grid.s, layer.spacing, 20)
    np.testing.assert_allclose(found, expected, atol=1e-3 * expected.max())


def test_order_of_angles_is_irrelevant(layer_of: Callable[..., Layer]) -> None:
    layer = layer_of("illite")
    two_theta = np.arange(4.0, 30.0, 0.02)
    grid = make_grid(two_theta, CU, Instrument())
    curve = basal_intensity(layer, grid, mean_layers=12)
    mixed = np.random.default_rng(3).permutation(two_theta.size)
    straight = on_scan(curve, grid, two_theta, orientation_spread=12.0)
    np.testing.assert_allclose(on_scan(curve, grid, two_theta[mixed], orientation_spread=12.0), straight[mixed], rtol=1e-12)


def test_finer_scan_gives_the_same_values(layer_of: Callable[..., Layer]) -> None:
    layer = layer_of("muscovite")
    coarse = np.arange(5.0, 30.0, 0.05)
    fine = np.arange(5.0, 30.0, 0.01)
    low, high = basal_pattern(layer, coarse), basal_pattern(layer, fine)
    np.testing.assert_allclose(low, np.interp(coarse, fine, high), atol=1e-2 * high.max())
