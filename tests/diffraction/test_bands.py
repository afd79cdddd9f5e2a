"""Two-dimensional hk bands against Warren's theory, a direct sum over directions, and the three-dimensional powder."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from xrdmica.diffraction.bands import band_intensity, band_profile, flat_layer, rod_families, rod_power
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.powder import powder_lines, powder_profile
from xrdmica.errors import StructureError
from xrdmica.radiation import Radiation

CU = Radiation.parse("Cu")
GRID = make_grid(np.arange(10.0, 68.0, 0.02), CU, Instrument())


def test_band_is_warrens_for_a_constant_structure_factor() -> None:
    """Warren (1941): F(a) = int_0^inf exp(-(x^2 - a)^2) dx with a = 2 sqrt(pi) L / lambda (sin theta - sin theta_0)."""
    distance, size = 1 / 4.49, 400.0
    s = distance + np.linspace(-2.0, 12.0, 57) / (np.sqrt(np.pi) * size)
    along = np.linspace(0, 0.4, 50)
    found = band_profile(s, distance, size, along, np.full(along.size, 7.0))
    x = np.linspace(0, 8, 20001)
    a = np.sqrt(np.pi) * size * (s - distance)
    warren = np.array([np.trapezoid(np.exp(-((x**2 - value) ** 2)), x) for value in a])
    # z = x sqrt(2 B / (sqrt(pi) L)) turns the rod's own integral into his
    scale = 7.0 * size * np.sqrt(2 * distance / (np.sqrt(np.pi) * size)) / (2 * np.pi * s * distance)
    np.testing.assert_allclose(found, scale * warren, atol=0.02 * found.max())


def test_head_of_a_band_lies_beyond_the_rod() -> None:
    """Warren (1941): the maximum is displaced by 0.16 lambda / L in sin theta, whatever the material."""
    distance, size = 1 / 4.49, 600.0  # large, so that the slow factors beside his function do not count
    s = np.linspace(0.215, 0.235, 6001)
    along = np.linspace(0, 0.3, 50)
    found = band_profile(s, distance, size, along, np.ones(along.size))
    # sin theta = lambda S / 2
    assert (s[found.argmax()] - distance) / 2 == pytest.approx(0.16 / size, rel=0.06)


def test_band_against_counting_directions() -> None:
    """Random directions of the scattering vector, the rod's own cross-section summed: within sampling error."""
    rng = np.random.default_rng(4)
    distance, size = 0.39, 60.0
    along = np.linspace(0, 0.6, 200)
    power = 5 + 30 * np.cos(8 * along) ** 2
    for s in (0.385, 0.41, 0.5):
        z = s * rng.uniform(-1, 1, 400_000)
        radius = np.sqrt(s * s - z * z)
        density = size * np.exp(-np.pi * (size * (radius - distance)) ** 2) / (2 * np.pi * radius)
        values = density * np.interp(np.abs(z), along, power)
        found = band_profile(np.array([s]), distance, size, along, power)[0]
        assert found == pytest.approx(values.mean(), abs=4.5 * values.std() / np.sqrt(z.size))


def test_rods_of_a_layer() -> None:
    """b = 9 angstrom: 02,11 at b/2; 13,20 at b/(2 sqrt 3); 06,33 at b/6 (handbook: 4.5, 2.6, 1.5)."""
    families = rod_families(9.0 / np.sqrt(3), 9.0, 0.7)
    assert [round(1 / distance, 3) for distance, _ in families] == [4.5, 2.598, 2.25, 1.701, 1.5]
    assert [len(members) for _, members in families] == [6, 6, 6, 12, 6]


@pytest.mark.parametrize("phase", ["smectite", "saponite", "illite"])
def test_flat_layer_has_the_formula(phase: str) -> None:
    """24 oxygens, 8 tetrahedral cations and the octahedral ones of two formula units; a centre of symmetry."""
    layer = flat_layer(phase)
    oxygen = sum(count for ion, count in zip(layer.ions, layer.counts, strict=True) if ion == "O2-")
    assert oxygen == pytest.approx(24.0)
    others = layer.counts.sum() - oxygen
    assert others == pytest.approx(14.0 if phase == "saponite" else 12.0, abs=0.3)
    assert layer.z.max() == pytest.approx(3.3, abs=0.15)
    assert layer.z.min() == pytest.approx(-layer.z.max(), abs=1e-6)


def test_rod_power_by_hand() -> None:
    """At integer l the rod of a one-layer structure is its structure factor without the interlayer."""
    layer = flat_layer("illite")
    from xrdmica.diffraction.scattering import anomalous, form_factor

    along = np.array([0.0, 0.07, 0.21])
    found = rod_power(layer, np.array([[1, 1]]), along, CU.energy_ev)
    for value, height in zip(found, along, strict=True):
        s = np.sqrt(1 / layer.a**2 + 1 / layer.b**2 + height**2) / 2
        both = 0.0
        for side in (1, -1):
            total = 0j
            for (x, y), z, ion, count, b in zip(layer.xy, layer.z, layer.ions, layer.counts, layer.b_iso, strict=True):
                f = form_factor(ion, np.array([s]))[0] + anomalous(ion, CU.energy_ev)
                total += count * f * np.exp(-b * s * s) * np.exp(2j * np.pi * (x + y + side * height * z))
            both += abs(total) ** 2 / 2
        assert value == pytest.approx(both, rel=1e-9)


def test_turbostratic_scatters_as_much_as_ordered() -> None:
    """The same layers with three-dimensional order: energy only moves along the rods. Compared over the range of several
    bands, on the absolute scale of `powder_profile` (the interlayer K of illite, left out of its bands, allows 15 %)."""
    bands = band_intensity({"illite": 1.0}, GRID, size=150.0)
    lines = powder_lines("illite", CU, 1.0, 40.0)
    keep = (lines.hkl[:, 0] != 0) | (lines.hkl[:, 1] != 0)
    crossed = replace(
        lines,
        hkl=lines.hkl[keep],
        d_spacing=lines.d_spacing[keep],
        multiplicity=lines.multiplicity[keep],
        structure_factor_squared=lines.structure_factor_squared[keep],
        tilt=lines.tilt[keep],
    )
    ordered = powder_profile(crossed, GRID.two_theta, CU, Instrument(lorentzian=0.0), size=150.0)
    inside = (GRID.two_theta > 17) & (GRID.two_theta < 66)
    assert bands[inside].sum() == pytest.approx(ordered[inside].sum(), rel=0.15)


def test_bands_of_smectite() -> None:
    """Heads near 4.48, 2.57 and 1.50 angstrom, steep below and slow above (handbook values for montmorillonite, from memory)."""
    curve = band_intensity({"smectite": 1.0}, GRID, size=150.0)
    assert curve.min() >= 0
    assert np.all(np.isfinite(curve))
    for low, high, d in ((18, 23, 4.48), (33, 38, 2.56), (60, 64, 1.498)):
        inside = (GRID.two_theta > low) & (GRID.two_theta < high)
        head = float(GRID.two_theta[inside][curve[inside].argmax()])
        assert CU.wavelength / (2 * np.sin(np.radians(head) / 2)) == pytest.approx(d, rel=0.012)
    head = GRID.two_theta[curve.argmax()]
    below, above = (np.interp(head + step, GRID.two_theta, curve) / curve.max() for step in (-0.8, 0.8))
    assert below < 0.3 * above


def test_trioctahedral_head_lies_lower() -> None:
    """060 of saponite near 1.53 angstrom against 1.498 (handbook)."""
    curve = band_intensity({"saponite": 1.0}, GRID, size=200.0)
    inside = (GRID.two_theta > 58) & (GRID.two_theta < 64)
    head = float(GRID.two_theta[inside][curve[inside].argmax()])
    assert head == pytest.approx(2 * np.degrees(np.arcsin(CU.wavelength / (2 * 1.53))), abs=0.5)


def test_kinds_add_by_mass() -> None:
    mixed = band_intensity({"illite": 0.4, "smectite": 0.6}, GRID)
    masses = 0.4 * flat_layer("illite").cell_mass, 0.6 * flat_layer("smectite").cell_mass
    ends = band_intensity({"illite": 1.0}, GRID), band_intensity({"smectite": 1.0}, GRID)
    np.testing.assert_allclose(mixed, (masses[0] * ends[0] + masses[1] * ends[1]) / sum(masses), rtol=1e-9)


def test_bands_need_two_to_one_layers() -> None:
    for kinds in ({"kaolinite": 1.0}, {"illite_smectite": 1.0}, {"smectite": 0.0}):
        with pytest.raises(StructureError):
            band_intensity(kinds, GRID)


@pytest.mark.parametrize(("phase", "state"), [("smectite", "air_2w"), ("illite_smectite", None), ("muscovite", None)])
def test_random_mounts_of_turbostratic_phases_show_bands(phase: str, state: str | None) -> None:
    """Smectite and illite-smectite in a random mount have the 4.5 angstrom band (handbook: as strong as any line beyond 001);
    oriented mounts do not, and phases with published atoms keep their lines."""
    from xrdmica.crystals.library import load_phase
    from xrdmica.diffraction.columns import View, component_column, components_for, turbostratic_kinds
    from xrdmica.scans.treatment import Treatment

    two_theta = np.arange(5.0, 40.0, 0.02)
    grid = make_grid(two_theta, CU, Instrument())
    component = components_for(load_phase(phase), Treatment.parse("air_dried"))[0]
    assert bool(turbostratic_kinds(component)) == (phase != "muscovite")
    random, oriented = (component_column(component, View(grid, two_theta, mount)) for mount in ("random", "oriented"))  # type: ignore[arg-type]
    band = (two_theta > 19.3) & (two_theta < 21.5)
    assert random.min() >= -1e-9 * random.max()
    above = np.abs(two_theta - 20.0).argmin()
    assert random[above] > 0.05 * random.max()
    if phase != "muscovite":
        curve = band_intensity(turbostratic_kinds(component), grid)
        inside = np.interp(two_theta[band], grid.two_theta, curve).mean()
        from xrdmica.diffraction.columns import component_intensity

        basal = View(grid, two_theta, "random").seen(component_intensity(component, grid))
        assert (random - basal)[band].mean() == pytest.approx(inside, rel=0.05)
    assert oriented.max() > 0
