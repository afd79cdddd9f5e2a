"""Ideal compositions of end members, and the group each formula belongs to.

Weight percents: computed by hand from standard atomic weights (IUPAC), as handbooks list them for the ideal formulas.
Groups: nomenclature of micas (Rieder et al. 1998) and of clay minerals (Guggenheim et al. 2006).
"""

from __future__ import annotations

import pytest

from xrdmica.chemistry.formula import SiteFormula

MUSCOVITE = "KAl2(AlSi3)O10(OH)2"
TALC = "Mg3Si4O10(OH)2"
PYROPHYLLITE = "Al2Si4O10(OH)2"
PARAGONITE = "NaAl2(AlSi3)O10(OH)2"
MARGARITE = "CaAl2(Al2Si2)O10(OH)2"
PHLOGOPITE = "KMg3(AlSi3)O10(OH)2"
ANNITE = "KFe2+3(AlSi3)O10(OH)2"

COMPOSITIONS = [
    (MUSCOVITE, {"K2O": 11.82, "Al2O3": 38.40, "SiO2": 45.25, "H2O": 4.52}),
    ("KAl3Si3O10(OH)2", {"K2O": 11.82, "Al2O3": 38.40, "SiO2": 45.25, "H2O": 4.52}),
    (TALC, {"MgO": 31.88, "SiO2": 63.37, "H2O": 4.75}),
    (PYROPHYLLITE, {"Al2O3": 28.30, "SiO2": 66.70, "H2O": 5.00}),
    (PARAGONITE, {"Na2O": 8.11, "Al2O3": 40.02, "SiO2": 47.16}),
    (MARGARITE, {"CaO": 14.08, "Al2O3": 51.21, "SiO2": 30.18}),
    (PHLOGOPITE, {"K2O": 11.29, "MgO": 28.98, "Al2O3": 12.22, "SiO2": 43.20}),
    (ANNITE, {"K2O": 9.20, "FeO": 42.11, "Al2O3": 9.96, "SiO2": 35.21}),
]

CLASSICAL = [
    ("talc", TALC, "talc group", "trioctahedral", 0),
    ("pyrophyllite", PYROPHYLLITE, "talc group", "dioctahedral", 0),
    ("phlogopite", PHLOGOPITE, "true mica", "trioctahedral", 1),
    ("biotite", "K(Mg1.5Fe2+1.5)(AlSi3)O10(OH)2", "true mica", "trioctahedral", 1),
    ("muscovite", MUSCOVITE, "true mica", "dioctahedral", 1),
    ("paragonite", PARAGONITE, "true mica", "dioctahedral", 1),
    ("clintonite", "CaMg2AlAl3SiO10(OH)2", "brittle mica", "trioctahedral", 2),
    ("margarite", MARGARITE, "brittle mica", "dioctahedral", 2),
]

# groups of further ideal formulas, common practice
OTHERS = [
    ("Al2Si2O5(OH)4", "kaolin", "dioctahedral"),
    ("Mg3Si2O5(OH)4", "serpentine", "trioctahedral"),
    ("(Mg5Al)(AlSi3)O10(OH)8", "chlorite", "trioctahedral"),
    ("(LiAl4)(AlSi3)O10(OH)8", "chlorite", "di,trioctahedral"),
    ("Na0.33(Al1.67Mg0.33)Si4O10(OH)2·4H2O", "smectite", "dioctahedral"),
    ("Na0.33Mg3(Si3.67Al0.33)O10(OH)2", "smectite", "trioctahedral"),
    ("Mg0.35Mg3(Si3.3Al0.7)O10(OH)2·4H2O", "vermiculite", "trioctahedral"),
    ("K0.65Al2(Si3.35Al0.65)O10(OH)2", "interlayer-deficient mica", "dioctahedral"),
    ("K(MgFe3+)Si4O10(OH)2", "true mica", "dioctahedral"),
    ("K(Li2Al)Si4O10F2", "true mica", "trioctahedral"),
]


@pytest.mark.parametrize(("text", "expected"), COMPOSITIONS)
def test_ideal_oxides(text: str, expected: dict[str, float]) -> None:
    oxides = SiteFormula.parse(text).oxides()
    for oxide, percent in expected.items():
        assert oxides[oxide] == pytest.approx(percent, abs=0.02), oxide
    assert sum(oxides.values()) == pytest.approx(100.0, abs=1e-6)


@pytest.mark.parametrize(("name", "text", "group", "character", "charge"), CLASSICAL)
def test_classical_formulas(name: str, text: str, group: str, character: str, charge: float) -> None:
    formula = SiteFormula.parse(text)
    assert formula.imbalance == pytest.approx(0, abs=1e-9), name
    assert formula.layer_charge == pytest.approx(charge, abs=1e-9)
    assert (formula.group, formula.octahedral_character) == (group, character)


@pytest.mark.parametrize(("text", "group", "character"), OTHERS)
def test_groups(text: str, group: str, character: str) -> None:
    formula = SiteFormula.parse(text)
    assert (formula.group, formula.octahedral_character) == (group, character)


def test_fluorine_replaces_oxygen() -> None:
    # fluorophlogopite KMg3(AlSi3)O10F2, by hand: M 421.24; F 9.02, O=F2 3.80 wt %
    oxides = SiteFormula.parse("KMg3(AlSi3)O10F2").oxides()
    assert oxides["F"] == pytest.approx(9.02, abs=0.02)
    assert oxides["O=F2"] == pytest.approx(-3.80, abs=0.02)
    assert "H2O" not in oxides
    assert sum(oxides.values()) == pytest.approx(100.0, abs=1e-6)


@pytest.mark.parametrize(
    "text", ["KFe3+2(Si3Al)O10(OH)2", "K(Mg2Ti0.5)(AlSi3)O10(OH)2", "Ba(Mg3)(Al2Si2)O10(OH)2", "(NH4)Al2(AlSi3)O10(OH)2"]
)
def test_mass_and_charge_against_a_general_library(text: str) -> None:
    pymatgen = pytest.importorskip("pymatgen.core")
    formula = SiteFormula.parse(text)
    composition = pymatgen.Composition(formula.element_counts())
    assert formula.molar_mass == pytest.approx(float(composition.weight), rel=2e-5)
    states = {"Fe": 3, "K": 1, "Al": 3, "Si": 4, "Ti": 4, "Mg": 2, "Ba": 2, "N": -3, "H": 1, "O": -2}
    assert sum(states[e] * n for e, n in formula.element_counts().items()) == pytest.approx(formula.imbalance, abs=1e-9)
