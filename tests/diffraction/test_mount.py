"""Options of the mount and the tube: film, attenuation, transparency, residual K-beta, axial asymmetry, instrument example."""

from __future__ import annotations

import tomllib
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.basal import basal_intensity, basal_pattern
from xrdmica.diffraction.columns import Component, View, component_column
from xrdmica.diffraction.grid import make_grid, on_scan
from xrdmica.diffraction.optics import K_BETA, Instrument, axial_nodes, displacement_shift, tube_lines
from xrdmica.diffraction.powder import powder_lines, powder_profile
from xrdmica.diffraction.specimen import film_factor, mixture_attenuation, phase_attenuation, transparency_shift
from xrdmica.errors import StructureError
from xrdmica.radiation import Radiation

CU = Radiation.parse("Cu")


@pytest.mark.parametrize(("phase", "radiation", "coefficient"), [
    ("quartz", "Cu", 35.0), ("calcite", "Cu", 72.0), ("hematite", "Cu", 220.0), ("corundum", "Cu", 31.0), ("halite", "Cu", 75.0),
])  # fmt: skip
def test_mass_attenuation_against_handbooks(phase: str, radiation: str, coefficient: float) -> None:
    """Handbook values for Cu K-alpha [cm2/g] (Klug & Alexander 1974, from memory; 6 %)."""
    assert phase_attenuation(phase, Radiation.parse(radiation)) == pytest.approx(coefficient, rel=0.06)


@pytest.mark.parametrize("phase", ["quartz", "muscovite", "kaolinite", "talc"])
def test_mass_attenuation_by_xraydb(phase: str) -> None:
    """xraydb's own sum over a formula written by hand."""
    import xraydb

    formulas = {
        "quartz": {"Si": 1, "O": 2},
        "muscovite": {"K": 0.92, "Na": 0.06, "Al": 2.98, "Si": 3.02, "O": 12, "H": 2},
        "kaolinite": {"Al": 2, "Si": 2, "O": 9, "H": 4},
        "talc": {"Mg": 3, "Si": 4, "O": 12, "H": 2},
    }
    mass = {symbol: count * xraydb.atomic_mass(symbol) for symbol, count in formulas[phase].items()}
    total = sum(m * float(xraydb.mu_elam(symbol, CU.energy_ev)) for symbol, m in mass.items()) / sum(mass.values())
    assert phase_attenuation(phase, CU) == pytest.approx(total, rel=1e-3)


def test_attenuation_of_mixtures_adds_by_weight() -> None:
    quartz, hematite = phase_attenuation("quartz", CU), phase_attenuation("hematite", CU)
    assert mixture_attenuation({"quartz": 3, "hematite": 1}, CU) == pytest.approx(0.75 * quartz + 0.25 * hematite)
    between = phase_attenuation("illite_smectite", CU)
    ends = sorted((phase_attenuation("illite", CU), phase_attenuation("smectite", CU)))
    assert ends[0] <= between <= ends[1]
    with pytest.raises(StructureError):
        mixture_attenuation({}, CU)


def test_film_is_the_absorbed_path_summed_over_depth() -> None:
    """Direct sum of exp(-2 mu m / sin theta) over the mass above each slice."""
    two_theta = np.array([5.0, 20.0, 60.0])
    sine = np.sin(np.radians(two_theta) / 2)
    edges = np.linspace(0, 4e-3, 200001)
    middle = (edges[1:] + edges[:-1]) / 2
    for mu in (30.0, 60.0):
        step = edges[1] - edges[0]
        summed = np.array([np.exp(-2 * mu * middle / s).sum() * step * 2 * mu / s for s in sine])
        np.testing.assert_allclose(film_factor(two_theta, mu, 4.0), summed, rtol=1e-6)


def test_thin_film_lowers_high_angles_in_columns() -> None:
    two_theta = np.arange(5.0, 35.0, 0.02)
    grid = make_grid(two_theta, CU, Instrument())
    for component in (Component("muscovite", ("anhydrous",), (9.99,), 30.0), Component("quartz")):
        thick = View(grid, two_theta, "oriented")
        thin = replace(thick, mass_attenuation=45.0, mass_mg_cm2=3.0)
        place = np.abs(two_theta - 26.7).argmin()
        ratio = component_column(component, thin)[place] / component_column(component, thick)[place]
        assert ratio == pytest.approx(film_factor(two_theta[place : place + 1], 45.0, 3.0)[0], rel=5e-3)


def test_transparency_of_a_thick_specimen() -> None:
    """-sin(2 theta) / (2 mu R): mu 1 /mm, R 200 mm, 90 degrees -> -0.1432 degrees (textbook formula)."""
    shift = transparency_shift(np.array([90.0, 30.0]), 1.0, 200.0)
    np.testing.assert_allclose(shift, np.degrees([-1 / 400, -0.5 / 400]), rtol=1e-12)


def test_transparency_of_a_film_is_displacement_by_its_mean_depth() -> None:
    two_theta = np.array([20.0, 40.0])
    depth = np.linspace(0, 0.05, 100001)
    for angle, found in zip(two_theta, transparency_shift(two_theta, 8.0, 240.0, 0.05), strict=True):
        seen = np.exp(-2 * 8.0 * depth / np.sin(np.radians(angle / 2)))
        mean = float((depth * seen).sum() / seen.sum())
        expected = displacement_shift(np.array([angle]), mean, Instrument(goniometer_radius=240.0))[0]
        assert found == pytest.approx(expected, rel=1e-3)
    # so thin that nothing is absorbed: the middle of the film
    middle = displacement_shift(two_theta, 0.5e-4, Instrument(goniometer_radius=240.0))
    np.testing.assert_allclose(transparency_shift(two_theta, 0.01, 240.0, 1e-4), middle, rtol=1e-3)


def test_transparency_moves_a_calculated_line(layer_of: Callable[..., Layer]) -> None:
    two_theta = np.arange(26.0, 27.6, 0.005)
    tube = Radiation.tube("Cu", doublet=False)
    grid = make_grid(two_theta, tube, Instrument(goniometer_radius=100.0))
    curve = basal_intensity(layer_of("muscovite"), grid, mean_layers=100)
    plain = on_scan(curve, grid, two_theta, orientation_spread=12.0)
    moved = on_scan(curve, grid, two_theta, orientation_spread=12.0, linear_attenuation=1.0)
    expected = np.degrees(-np.sin(np.radians(26.75)) / (2 * 1.0 * 100.0))
    assert two_theta[moved.argmax()] - two_theta[plain.argmax()] == pytest.approx(expected, abs=0.02)


# --- K-beta ---


@pytest.mark.parametrize("metal", sorted(K_BETA))
def test_k_beta_wavelengths(metal: str) -> None:
    """Elam's table in xraydb (rounded to an electronvolt or so): K-beta1."""
    import xraydb

    assert K_BETA[metal] == pytest.approx(12398.419843 / xraydb.xray_lines(metal)["Kb1"].energy, rel=3e-4)


def test_residual_k_beta_is_a_third_pattern(layer_of: Callable[..., Layer]) -> None:
    """Mica 003 at 26.7 has its K-beta image near 24.1 degrees: same area times the residual share and wavelength factors."""
    layer = layer_of("muscovite")
    two_theta = np.arange(20.0, 30.0, 0.01)
    tube = Radiation.parse("Cu")
    clean = basal_pattern(layer, two_theta, tube, mean_layers=60)
    leaking = basal_pattern(layer, two_theta, tube, mean_layers=60, instrument=Instrument(k_beta=0.05))
    extra = leaking - clean
    beta = float(np.degrees(2 * np.arcsin(K_BETA["Cu"] / (2 * layer.spacing / 3))))
    assert two_theta[extra.argmax()] == pytest.approx(beta, abs=0.05)
    near = np.abs(two_theta - beta) < 1.0
    alpha = np.abs(two_theta - 26.75) < 1.1
    assert extra[near].sum() / clean[alpha].sum() == pytest.approx(0.05, rel=0.25)
    # a single line and a wavelength given as a number have no K-beta
    for other in (Radiation.tube("Cu", doublet=False), Radiation.from_wavelength(1.54)):
        assert tube_lines(other, Instrument(k_beta=0.05)) == tube_lines(other)


def test_k_beta_at_the_end_of_a_scan(layer_of: Callable[..., Layer]) -> None:
    """A K-beta line inside the scan whose K-alpha position lies outside it is still there."""
    two_theta = np.arange(20.0, 25.0, 0.01)
    leaking = basal_pattern(layer_of("muscovite"), two_theta, CU, mean_layers=60, instrument=Instrument(k_beta=0.5))
    beta = 2 * np.degrees(np.arcsin(K_BETA["Cu"] / (2 * 9.99 / 3)))
    inside = np.abs(two_theta - beta) < 0.5
    assert two_theta[inside][leaking[inside].argmax()] == pytest.approx(beta, abs=0.05)


def test_k_beta_in_powders() -> None:
    lines = powder_lines("quartz", CU, 3.2, 3.5)
    two_theta = np.arange(20.0, 30.0, 0.01)
    extra = powder_profile(lines, two_theta, CU, Instrument(k_beta=0.02)) - powder_profile(lines, two_theta, CU, Instrument())
    beta = 2 * np.degrees(np.arcsin(K_BETA["Cu"] / (2 * lines.d_spacing[0])))
    assert two_theta[extra.argmax()] == pytest.approx(beta, abs=0.02)


# --- axial asymmetry ---


def test_axial_nodes_average_a_normal_law() -> None:
    instrument = Instrument(axial_asymmetry=True, soller_incident=4.0, soller_diffracted=4.0)
    cosines, weights = np.array(axial_nodes(instrument)).T
    assert weights.sum() == pytest.approx(1.0)
    # triangles of full opening S have the variance S^2/24 each
    variance = 2 * np.radians(4.0) ** 2 / 24
    assert (weights * np.arccos(cosines) ** 2).sum() == pytest.approx(variance, rel=1e-6)
    assert axial_nodes(Instrument()) == ((1.0, 1.0),)


@pytest.mark.parametrize("order", [1, 3])
def test_axial_divergence_draws_lines_down(layer_of: Callable[..., Layer], order: int) -> None:
    """Mean shift -1/2 <angle^2> cot(2 theta), as in the literature on axial divergence (Klug & Alexander 1974, from memory)."""
    layer = layer_of("talc")
    tube = Radiation.tube("Cu", doublet=False)
    angle = float(tube.two_theta(layer.spacing / order))
    two_theta = np.arange(angle - 2.5, angle + 2.5, 0.005)
    skewed = Instrument(axial_asymmetry=True, soller_incident=5.0, soller_diffracted=5.0, lorentzian=0.0)
    plain = Instrument(soller_incident=5.0, soller_diffracted=5.0, lorentzian=0.0)
    grid = make_grid(two_theta, tube, skewed)
    # a made-up narrow line, so that only the asymmetry counts
    curve = np.exp(-(((grid.two_theta - angle) / 0.05) ** 2)) / grid.factor(12.0)
    mean = []
    for instrument in (plain, skewed):
        chosen = replace(grid, instrument=instrument)
        seen = on_scan(curve, chosen, two_theta, orientation_spread=12.0)
        mean.append(float((seen * two_theta).sum() / seen.sum()))
    expected = -np.degrees(0.5 * 2 * np.radians(5.0) ** 2 / 24 / np.tan(np.radians(angle)))
    assert mean[1] - mean[0] == pytest.approx(expected, rel=0.08)


def test_axial_asymmetry_agrees_between_basal_and_powder(layer_of: Callable[..., Layer]) -> None:
    lines = powder_lines("muscovite", CU, 9.0, 12.0)
    two_theta = np.arange(6.5, 11.0, 0.01)
    instrument = Instrument(axial_asymmetry=True, soller_incident=5.0, soller_diffracted=5.0)
    skewed = powder_profile(lines, two_theta, CU, instrument, size=2000.0)
    plain = powder_profile(lines, two_theta, CU, instrument.model_copy(update={"axial_asymmetry": False}), size=2000.0)
    assert skewed.sum() == pytest.approx(plain.sum(), rel=0.01)
    below = two_theta < two_theta[plain.argmax()] - 0.15
    assert skewed[below].sum() > 1.1 * plain[below].sum()


def test_instrument_example_in_the_docstring_is_valid() -> None:
    """What the documentation shows has to load, and to name every key."""
    text = (Instrument.__doc__ or "").split("example::")[1]
    keys = tomllib.loads("\n".join(line.strip() for line in text.splitlines()))
    assert Instrument.model_validate(keys).k_beta == 0.005
    assert set(keys) == set(Instrument.model_fields)
