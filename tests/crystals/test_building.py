"""Ideal structures against published ones, handbook densities, symmetry by spglib, and the bonds they are built from.

Measured against the published coordinates (all atoms but H, best superposition; cell differences built minus published):

=====================  =========  =======  =======  =========  ========
structure              rms [A]    a [A]    b [A]    d001 [A]   d060 [A]
=====================  =========  =======  =======  =========  ========
phlogopite 1M          0.03       -0.003   -0.001   -0.01      0.000
muscovite 2M1          0.09        0.004   -0.014   -0.01     -0.002
muscovite 3T           0.11        0.007    0.012    0.01      0.002
paragonite 2M1         0.08       -0.014   -0.040   -0.02     -0.007
talc 1A                0.06        0.006   -0.001    0.01      0.000
pyrophyllite 1A        0.06        0.026    0.016    0.01      0.003
pyrophyllite 2M        0.24        0.026    0.082    0.08      0.014
kaolinite 1A           0.07        0.009    0.000    0.00      0.000
clinochlore IIb        0.11       -0.015   -0.014   -0.04     -0.002
=====================  =========  =======  =======  =========  ========

The published 2M pyrophyllite is itself an idealised model of 1934.
"""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.building import POLYTYPES, build_structure, ideal_layer, usual_polytype
from xrdmica.crystals.geometry import layer_geometry
from xrdmica.errors import StructureError

if TYPE_CHECKING:
    from pymatgen.core.structure import Structure

MUSCOVITE, PHLOGOPITE, PARAGONITE = "KAl2(Si3Al)O10(OH)2", "KMg3(Si3Al)O10(OH)2", "NaAl2(Si3Al)O10(OH)2"
MARGARITE, CLINTONITE = "CaAl2(Si2Al2)O10(OH)2", "Ca(Mg2Al)(SiAl3)O10(OH)2"
TALC, PYROPHYLLITE = "Mg3Si4O10(OH)2", "Al2Si4O10(OH)2"
KAOLINITE, LIZARDITE, CLINOCHLORE = "Al2Si2O5(OH)4", "Mg3Si2O5(OH)4", "(Mg5Al)(Si3Al)O10(OH)8"

# formula, polytype, space group, density [g/cm3] of handbooks (from memory)
BUILT = [
    (PHLOGOPITE, "1M", "C2/m", 2.79), (MUSCOVITE, "1M", "C2/m", 2.82), (MUSCOVITE, "2M1", "C2/c", 2.83),
    (MUSCOVITE, "3T", "P3_112", 2.83), (PARAGONITE, "2M1", "C2/c", 2.90), (MARGARITE, "2M1", "C2/c", 3.05),
    (CLINTONITE, "1M", "C2/m", 3.08), (TALC, "1A", "P-1", 2.78), (TALC, "2M", "C2/c", 2.78), (PYROPHYLLITE, "1A", "P-1", 2.81),
    (PYROPHYLLITE, "2M", "C2/c", 2.81), (KAOLINITE, "1A", "P1", 2.60), (LIZARDITE, "1T", "P31m", 2.57),
    (CLINOCHLORE, "IIb", "C2/m", 2.64),
]  # fmt: skip
# formula, polytype, file, largest rms [angstrom], largest differences of b and d(001) [angstrom]
PUBLISHED = [
    (PHLOGOPITE, "1M", "phlogopite-1M-redhammer2002", 0.06, 0.02, 0.03),
    (MUSCOVITE, "2M1", "muscovite-2M1-richardson1982", 0.13, 0.03, 0.03),
    (MUSCOVITE, "3T", "muscovite-3T-guven1967", 0.15, 0.03, 0.03),
    (PARAGONITE, "2M1", "paragonite-2M1-lin1984", 0.13, 0.06, 0.04),
    (TALC, "1A", "talc-1A-perdikatsis1981", 0.09, 0.02, 0.03),
    (PYROPHYLLITE, "1A", "pyrophyllite-1A-lee1981", 0.10, 0.03, 0.03),
    (PYROPHYLLITE, "2M", "pyrophyllite-2M-wyckoff1960", 0.35, 0.12, 0.12),
    (KAOLINITE, "1A", "kaolinite-1A-bish1989", 0.11, 0.02, 0.02),
    (CLINOCHLORE, "IIb", "clinochlore-IIb2-welch2001", 0.16, 0.03, 0.08),
]


@pytest.mark.parametrize(("formula", "polytype", "group", "density"), BUILT, ids=[f"{f} {p}" for f, p, *_ in BUILT])
def test_symmetry_density_and_charge(formula: str, polytype: str, group: str, density: float) -> None:
    from pymatgen.symmetry.analyzer import SpacegroupAnalyzer

    structure = build_structure(formula, polytype)
    assert SpacegroupAnalyzer(structure, symprec=1e-3).get_space_group_symbol() == group
    assert structure.density == pytest.approx(density, abs=0.04)
    assert structure.charge == pytest.approx(0.0, abs=1e-6)
    composition = structure.composition
    assert composition.reduced_formula  # every site holds something
    # the cell holds whole formula units of what was asked for
    asked = SiteFormula.parse(formula).element_counts()
    silicon = {str(el): n for el, n in composition.get_el_amt_dict().items()}
    units = silicon["Si"] / asked["Si"]
    assert units == pytest.approx(round(units), abs=1e-6)
    for element, count in asked.items():
        assert silicon[element] == pytest.approx(units * count, abs=1e-6)


def bonds(structure: Structure, elements: set[str], length: float) -> list[np.ndarray]:
    """Sorted distances from every cation site of given elements to its oxygens."""
    found = []
    for site in structure:
        if {e.symbol for e in site.species.elements} <= elements:
            near = structure.get_neighbors(site, length)
            found.append(np.sort([n.nn_distance for n in near if "O" in {e.symbol for e in n.species.elements}]))
    return found


@pytest.mark.parametrize("formula", [MUSCOVITE, PHLOGOPITE, TALC, PYROPHYLLITE, MARGARITE, CLINTONITE, KAOLINITE, CLINOCHLORE])
def test_tetrahedra_are_regular_and_of_the_right_size(formula: str) -> None:
    # <T-O> = 1.608 + 0.163 Al/(Al + Si), Hazen & Burnham (1973); published means agree within 0.02
    structure = build_structure(formula)
    site = SiteFormula.parse(formula)
    share = site.tetrahedral.get("Al3+", 0.0) / site.site_sum("tetrahedral")
    tetrahedra = [d for d in bonds(structure, {"Si", "Al"}, 1.80) if d.size == 4]
    assert tetrahedra
    for lengths in tetrahedra:
        assert np.mean(lengths) == pytest.approx(1.608 + 0.163 * share, abs=0.02)
        assert np.ptp(lengths) < 0.06


@pytest.mark.parametrize(("formula", "low", "high"), [(TALC, 2.06, 2.09), (PHLOGOPITE, 2.06, 2.09), (LIZARDITE, 2.06, 2.09)])
def test_octahedra_with_magnesium(formula: str, low: float, high: float) -> None:
    # Mg-O 2.06-2.08 in the published talc and phlogopite
    octahedra = bonds(build_structure(formula), {"Mg"}, 2.5)
    assert all(d.size == 6 for d in octahedra)
    assert all(low <= np.mean(d) <= high for d in octahedra)


@pytest.mark.parametrize("formula", [MUSCOVITE, PYROPHYLLITE, PARAGONITE])
def test_the_empty_octahedron_is_the_trans_one_and_larger(formula: str) -> None:
    structure = build_structure(formula)
    filled = [d for d in bonds(structure, {"Al"}, 2.1) if d.size == 6]
    # Al-O 1.91-1.94; shared edges 2.33-2.49; empty octahedron about 2.2 (published muscovite and pyrophyllite)
    assert all(np.mean(d) == pytest.approx(1.925, abs=0.015) for d in filled)
    g = layer_geometry(SiteFormula.parse(formula))
    edge = 2 * np.hypot(g.a / 6 - g.outward, g.half_octahedral)
    assert 2.33 < edge < 2.49
    assert np.hypot(g.a / 3 + g.outward, g.half_octahedral) == pytest.approx(2.22, abs=0.06)


@pytest.mark.parametrize(
    ("formula", "low", "high"),
    [(MUSCOVITE, 10, 16), (PHLOGOPITE, 6, 11), (MARGARITE, 19, 24), (TALC, 0, 5), (CLINTONITE, 21, 26)],
)
def test_tetrahedral_rotation(formula: str, low: float, high: float) -> None:
    # muscovite 11.4, phlogopite 7-9, margarite 21, talc 3.4, clintonite 23 degrees (handbook, from memory)
    assert low <= layer_geometry(SiteFormula.parse(formula)).rotation <= high


def oxygen_and_cations(structure: Structure) -> Structure:
    """The structure with two kinds of atoms, without H: what can be compared whatever the composition."""
    from pymatgen.core.structure import Structure

    species, places = [], []
    for site in structure:
        elements = {e.symbol for e in site.species.elements}
        if not elements <= {"H", "D"}:
            species.append("O" if elements & {"O", "F"} else "Mg")
            places.append(site.frac_coords)
    return Structure(structure.lattice, species, places)


def published(shared: Path, name: str) -> Any:
    import warnings

    from pymatgen.io.cif import CifParser

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return CifParser(str(shared / "structures" / f"{name}.cif"), occupancy_tolerance=100).parse_structures(primitive=False)[0]


@pytest.mark.parametrize(("formula", "polytype", "name", "rms", "b", "d"), PUBLISHED, ids=[row[2] for row in PUBLISHED])
def test_against_published_structures(
    shared: Path, formula: str, polytype: str, name: str, rms: float, b: float, d: float
) -> None:
    from pymatgen.analysis.structure_matcher import StructureMatcher

    built, real = build_structure(formula, polytype), published(shared, name)
    matcher = StructureMatcher(ltol=0.3, stol=0.6, angle_tol=8, primitive_cell=True, scale=True)
    one, two = oxygen_and_cations(built), oxygen_and_cations(real)
    assert len(one) == len(two)
    found = matcher.get_rms_dist(one, two)
    assert found is not None
    # the matcher divides by the cube root of the volume per atom
    assert found[0] * (two.volume / len(two)) ** (1 / 3) < rms
    across = real.lattice.b if polytype != "3T" else real.lattice.a * np.sqrt(3)
    ours = built.lattice.b if polytype != "3T" else built.lattice.a * np.sqrt(3)
    assert abs(ours - across) < b
    layers = {"2M1": 2, "2M": 2, "3T": 3}.get(polytype, 1)
    spacing = [lattice.d_hkl((0, 0, 1)) / layers for lattice in (built.lattice, real.lattice)]
    assert abs(spacing[0] - spacing[1]) < d
    assert abs(ours - across) / 6 < b / 6


def test_layer_and_structure_hold_the_same_atoms() -> None:
    for formula in (MUSCOVITE, TALC, CLINOCHLORE, KAOLINITE):
        layer = ideal_layer(SiteFormula.parse(formula))
        counts: dict[str, float] = {}
        for ion, n in zip(layer.ions, layer.counts, strict=True):
            counts[ion] = counts.get(ion, 0.0) + float(n)
        site = SiteFormula.parse(formula)
        for name in ("tetrahedral", "octahedral", "interlayer", "anions"):
            for ion, n in site.site(name).items():  # type: ignore[arg-type]
                if n and not (ion == "Al3+" and name != "octahedral"):
                    total = n + (site.tetrahedral.get("Al3+", 0.0) if ion == "Al3+" else 0.0)
                    assert counts[ion] == pytest.approx(total, abs=1e-6), (formula, ion)


def test_partial_occupancies_and_oxidation_states() -> None:
    structure = build_structure("K0.8Na0.2(Mg2Fe2+0.7Fe3+0.3)(Si2.7Al1.3)O10(OH)1.4F0.6", "1M")
    species = {str(s): n for site in structure for s, n in site.species.items()}
    assert {"K+", "Na+", "Fe2+", "Fe3+", "Mg2+", "Si4+", "Al3+", "O2-", "F-", "H+"} <= set(species)
    assert species["Fe2+"] == pytest.approx(0.7 / 3)
    assert species["Fe3+"] == pytest.approx(0.1)
    assert species["F-"] == pytest.approx(0.3)
    assert structure.charge == pytest.approx(0.0, abs=1e-6)


def test_lepidolite_and_other_usual_polytypes() -> None:
    assert usual_polytype(SiteFormula.parse(MUSCOVITE)) == "2M1"
    assert usual_polytype(SiteFormula.parse(PHLOGOPITE)) == "1M"
    assert all(POLYTYPES[kind] for kind in POLYTYPES)
    polylithionite = build_structure("K(Li2Al)Si4O10F2")
    # b 8.968, d(001) 9.86 (Takeda & Burnham 1969, from memory)
    assert polylithionite.lattice.b == pytest.approx(8.97, abs=0.06)


@pytest.mark.parametrize(
    ("formula", "polytype", "words"),
    [
        (MUSCOVITE, "4H", "polytype '4H' is none of those of micas: choose 1M or 2M1 or 3T"),
        (TALC, "2M1", "none of those of talc and pyrophyllite: choose 1A or 2M"),
        (KAOLINITE, "1T", "none of those of 1:1 dioctahedral layers: choose 1A"),
        ("Na0.33(Al1.67Mg0.33)Si4O10(OH)2", None, "water between them have no ideal structure"),
    ],
)
def test_refusals(formula: str, polytype: str | None, words: str) -> None:
    with pytest.raises(StructureError, match=words):
        build_structure(formula, polytype)


def test_unbalanced_formulas_are_refused() -> None:
    unbalanced = SiteFormula("2:1", {"K+": 1.0}, {"Mg2+": 3.0}, {"Si4+": 3.5, "Al3+": 0.5}, {"O2-": 10.0, "OH-": 2.0})
    with pytest.raises(StructureError, match="the charges of the formula sum to"):
        build_structure(unbalanced)


def test_a_cell_that_is_known_is_taken() -> None:
    structure = build_structure(MUSCOVITE, "1M", b=9.02, spacing=10.0)
    assert structure.lattice.b == pytest.approx(9.02)
    assert structure.lattice.d_hkl((0, 0, 1)) == pytest.approx(10.0)
    with pytest.raises(StructureError, match="more than flat tetrahedral sheets reach"):
        build_structure(MUSCOVITE, "1M", b=9.9)


def test_spacing_grows_with_iron() -> None:
    b = [build_structure(f"K(Mg{3 - x}Fe2+{x})(Si3Al)O10(OH)2").lattice.b for x in (0.0, 1.0, 2.0, 3.0)]
    assert all(one < two for one, two in pairwise(b))
