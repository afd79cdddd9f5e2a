"""Form factors and structure factors against gemmi, a general crystallographic library with its own tables."""

from __future__ import annotations

import numpy as np
import pytest

from xrdmica.crystals.library import load_phase
from xrdmica.crystals.polytype import cell_atoms, structured_polytype
from xrdmica.diffraction.scattering import form_factor

gemmi = pytest.importorskip("gemmi")

S = np.linspace(0.0, 0.6, 13)  # sin(theta)/lambda [1/angstrom]


@pytest.mark.parametrize("element", ["O", "Si", "Al", "Mg", "K", "Na", "Ca", "Fe"])
def test_neutral_form_factors(element: str) -> None:
    """Waasmaier & Kirfel (1995) here, International Tables C (Cromer & Mann) there: two fits to nearly the same calculations."""
    coefficients = gemmi.Element(element).it92
    theirs = np.array([coefficients.calculate_sf(float(s * s)) for s in S])
    ours = form_factor(element, S, "neutral")
    np.testing.assert_allclose(ours, theirs, rtol=0.01, atol=0.03)


@pytest.mark.parametrize(
    ("ion", "electrons"), [("Si4+", 10), ("Al3+", 10), ("Mg2+", 10), ("K+", 18), ("Na+", 10), ("Ca2+", 18), ("Fe2+", 24)]
)
def test_ions_hold_their_electrons_and_join_the_neutral_atom_at_high_angles(ion: str, electrons: int) -> None:
    element = ion.rstrip("+1234567890")
    ours = form_factor(ion, S, "ionic")
    assert float(ours[0]) == pytest.approx(electrons, abs=0.12)
    neutral = np.array([gemmi.Element(element).it92.calculate_sf(float(s * s)) for s in S])
    # outer electrons scatter at low angles only
    np.testing.assert_allclose(ours[S > 0.45], neutral[S > 0.45], rtol=0.06)


@pytest.mark.parametrize("name", ["muscovite", "talc", "quartz", "calcite", "kaolinite"])
def test_structure_factors(name: str) -> None:
    """|F|^2 of all reflections to 1.5 A with neutral atoms and displacement, from the same sites given to gemmi in P1."""
    polytype = structured_polytype(load_phase(name))
    atoms = cell_atoms(polytype)
    small = gemmi.SmallStructure()
    small.cell = gemmi.UnitCell(*polytype.cell)
    small.spacegroup_hm = "P 1"
    elements = {"OH-": "O", "H2O": "O"}
    for number, (place, ion, share, b_iso) in enumerate(
        zip(atoms.fractional, atoms.ions, atoms.occupancies, atoms.b_iso, strict=True)
    ):
        site = gemmi.SmallStructure.Site()
        site.label = f"A{number}"
        element = elements.get(ion, ion.rstrip("+-1234567890"))
        site.element = gemmi.Element(element)
        site.fract = gemmi.Fractional(*place)
        site.occ, site.u_iso = float(share), float(b_iso) / (8 * np.pi**2)
        small.add_site(site)
    calculator = gemmi.StructureFactorCalculatorX(small.cell)
    from xrdmica.calculated.subject import lines_of_atoms
    from xrdmica.radiation import Radiation

    if any(ion in ("OH-", "H2O") for ion in atoms.ions):
        # hydroxyl counts as one scatterer here; as a bare oxygen it must be what gemmi computes
        from dataclasses import replace

        atoms = replace(atoms, ions=tuple("O2-" if ion in ("OH-", "H2O") else ion for ion in atoms.ions))
    lines = lines_of_atoms(atoms, polytype.cell, 1.0, Radiation.parse("Cu"), 1.5, model="neutral", dispersion=False)
    # lines of one spacing may hold reflections that symmetry does not relate: all of them are summed
    reach = [int(length / 1.5) + 1 for length in polytype.cell[:3]]
    sums: dict[float, float] = {}
    for h in range(-reach[0], reach[0] + 1):
        for k in range(-reach[1], reach[1] + 1):
            for n in range(-reach[2], reach[2] + 1):
                if (h, k, n) != (0, 0, 0) and small.cell.calculate_d([h, k, n]) >= 1.5:
                    key = round(small.cell.calculate_d([h, k, n]), 5)
                    sums[key] = sums.get(key, 0.0) + abs(calculator.calculate_sf_from_small_structure(small, [h, k, n])) ** 2
    ours = np.array(lines.structure_factor_squared, dtype=float)
    theirs = np.array([sum(value for key, value in sums.items() if abs(key - d) < 2e-5) for d in lines.d_spacing])
    # lines nearer to each other than the sums can tell are left out
    alone = np.array([np.sum(np.abs(lines.d_spacing - d) < 1e-4) == 1 for d in lines.d_spacing])
    assert alone.sum() > 0.9 * alone.size
    ours, theirs = ours[alone], theirs[alone]
    scale = theirs.max()
    np.testing.assert_allclose(np.sqrt(ours / scale), np.sqrt(theirs / scale), atol=0.01)
