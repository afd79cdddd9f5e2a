"""Form factors and dispersion against tables that other libraries carry."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest

from xrdmica.diffraction.scattering import anomalous, form_factor
from xrdmica.errors import StructureError
from xrdmica.radiation import Radiation

S = np.array([0.0, 0.05, 0.1, 0.2, 0.3, 0.45, 0.6])
ELEMENTS = ["C", "O", "F", "Na", "Mg", "Al", "Si", "K", "Ca", "Ti", "Cr", "Mn", "Fe", "Zn"]
IONS = ["Na+", "Mg2+", "Al3+", "Si4+", "K+", "Ca2+", "Fe2+", "Fe3+", "F-", "Ti4+", "Mn2+", "Li+"]
FREE_IONS = ["Na+", "Mg2+", "Al3+", "K+", "Ca2+", "Fe2+", "Fe3+"]


@pytest.mark.parametrize("element", ELEMENTS)
def test_neutral_atoms_against_international_tables(element: str) -> None:
    """International Tables C (1992), table 6.1.1.4, as carried by gemmi: 1.5 % of the value."""
    import gemmi

    coefficients = gemmi.Element(element).it92
    expected = np.array([coefficients.calculate_sf(float(s * s)) for s in S])
    np.testing.assert_allclose(form_factor(element, S, "neutral"), expected, rtol=0.015)


@pytest.fixture
def charged_table() -> Iterator[None]:
    """gemmi leaves charges out unless told not to."""
    import gemmi

    before = gemmi.IT92_get_ignore_charge()
    gemmi.IT92_set_ignore_charge(False)
    yield
    gemmi.IT92_set_ignore_charge(before)


@pytest.mark.usefixtures("charged_table")
@pytest.mark.parametrize("ion", FREE_IONS)
def test_ions_against_international_tables(ion: str) -> None:
    """Same table, its rows for ions."""
    import gemmi

    charge = int(ion[-2]) if ion[-2].isdigit() else 1
    coefficients = gemmi.IT92_get_exact(gemmi.Element(ion.rstrip("+-0123456789")), charge)
    expected = np.array([coefficients.calculate_sf(float(s * s)) for s in S])
    np.testing.assert_allclose(form_factor(ion, S), expected, rtol=0.015)


@pytest.mark.parametrize("ion", IONS)
def test_ions_against_xraydb(ion: str) -> None:
    """Waasmaier & Kirfel (1995) through xraydb's own function; it writes the charge as 'Na1+'."""
    import xraydb

    digits = ion.rstrip("+-")
    charge = digits[-1] if digits[-1].isdigit() else "1"
    name = digits.rstrip("0123456789") + charge + ion[-1]
    np.testing.assert_allclose(form_factor(ion, S), xraydb.f0(name, S), rtol=1e-12)


def test_oxygen_stands_as_a_single_charge() -> None:
    import xraydb

    for name in ("O2-", "OH-"):
        np.testing.assert_allclose(form_factor(name, S), xraydb.f0("O1-", S), rtol=1e-12)
        np.testing.assert_allclose(form_factor(name, S, "neutral"), xraydb.f0("O", S), rtol=1e-12)


@pytest.mark.parametrize(("ion", "electrons"), [("Na+", 10), ("Mg2+", 10), ("Al3+", 10), ("Si4+", 10), ("K+", 18), ("Fe2+", 24)])
def test_forward_scattering_counts_electrons(ion: str, electrons: int) -> None:
    assert form_factor(ion, np.zeros(1))[0] == pytest.approx(electrons, abs=0.05)


def test_water_is_the_sum_of_its_atoms() -> None:
    expected = 2 * form_factor("H", S, "neutral") + form_factor("O", S, "neutral")
    np.testing.assert_allclose(form_factor("H2O", S), expected, rtol=1e-12)
    assert form_factor("H2O", np.zeros(1))[0] == pytest.approx(10, abs=0.05)


def test_unknown_ion_is_refused() -> None:
    with pytest.raises(StructureError):
        form_factor("Xx", S)


def test_dispersion_of_iron_with_copper_and_cobalt() -> None:
    """International Tables C, section 4.2.6 (from memory): Fe, Cu K-alpha f' -1.1, f'' 3.2; Co K-alpha f' near -3.3, f'' 0.5."""
    copper = anomalous("Fe3+", Radiation.parse("Cu").energy_ev)
    assert copper.real == pytest.approx(-1.1, abs=0.15)
    assert copper.imag == pytest.approx(3.2, abs=0.1)
    cobalt = anomalous("Fe2+", Radiation.parse("Co").energy_ev)
    assert cobalt.real == pytest.approx(-3.3, abs=0.4)
    assert cobalt.imag == pytest.approx(0.5, abs=0.1)


@pytest.mark.parametrize("ion", ["O2-", "Al3+", "Si4+", "K+", "Ca2+", "H2O"])
def test_dispersion_of_light_ions_is_absorption(ion: str) -> None:
    value = anomalous(ion, Radiation.parse("Cu").energy_ev)
    assert 0 < value.imag < 1.5
    assert abs(value.real) < 0.6
