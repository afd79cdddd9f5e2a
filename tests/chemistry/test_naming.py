"""Names after the published nomenclature.

Sources: Rieder et al. (1998) for micas, Guggenheim et al. (2006) for groups, Bayliss (1975) for chlorites; limits from memory.
"""

from __future__ import annotations

import pytest

from xrdmica.chemistry.end_members import END_MEMBERS, member_formula, mixture
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.chemistry.naming import classify

NAMES = [
    ("Mg3Si4O10(OH)2", "talc"),
    ("Al2Si4O10(OH)2", "pyrophyllite"),
    ("KMg3(AlSi3)O10(OH)2", "phlogopite"),
    ("K(Mg1.5Fe2+1.5)(AlSi3)O10(OH)2", "biotite"),
    ("K(Mg1.4Fe2+1.6)(AlSi3)O10(OH)2", "annite (biotite)"),
    ("K(Mg2.7Fe2+0.3)(AlSi3)O10(OH)2", "phlogopite"),
    ("KMg3(AlSi3)O10F2", "fluorophlogopite"),
    ("KAl2(AlSi3)O10(OH)2", "muscovite"),
    ("K0.9Na0.1(Al1.8Mg0.15Fe3+0.05)(Si3.15Al0.85)O10(OH)2", "muscovite (phengite)"),
    ("NaAl2(AlSi3)O10(OH)2", "paragonite"),
    ("CaMg2AlAl3SiO10(OH)2", "clintonite"),
    ("CaAl2(Al2Si2)O10(OH)2", "margarite"),
    ("K(Li2Al)Si4O10F2", "polylithionite (lepidolite)"),
    ("K(LiFe2+Al)(AlSi3)O10F2", "zinnwaldite"),
    ("K(MgFe3+)Si4O10(OH)2", "celadonite"),
    ("K0.65Al2(Si3.35Al0.65)O10(OH)2", "illite"),
    ("Na0.65Al2(Si3.35Al0.65)O10(OH)2", "brammallite"),
    ("K0.8(Fe3+0.9Al0.4Mg0.7)(Al0.1Si3.9)O10(OH)2", "glauconite"),
    ("Na0.33(Al1.67Mg0.33)Si4O10(OH)2·4H2O", "montmorillonite"),
    ("Na0.33Al2(Si3.67Al0.33)O10(OH)2·4H2O", "beidellite"),
    ("Na0.33Fe3+2(Si3.67Al0.33)O10(OH)2·4H2O", "nontronite"),
    ("Na0.33Mg3(Si3.67Al0.33)O10(OH)2·4H2O", "saponite"),
    ("Na0.33(Mg2.67Li0.33)Si4O10(OH)2·4H2O", "hectorite"),
    ("(Mg5Al)(AlSi3)O10(OH)8", "clinochlore"),
    ("(Fe2+5Al)(AlSi3)O10(OH)8", "chamosite"),
    ("(Mg3Fe2+2Al)(AlSi3)O10(OH)8", "ferroan clinochlore"),
    ("(LiAl4)(AlSi3)O10(OH)8", "cookeite"),
    ("Mg3Si2O5(OH)4", "lizardite, chrysotile or antigorite"),
    ("Al2Si2O5(OH)4", "kaolinite, dickite, nacrite or halloysite"),
]
# nothing that the composition does not support
UNNAMED = [
    ("K0.5Na0.5Al2(AlSi3)O10(OH)2", "equally near"),
    ("K0.7(Fe3+1.1Al0.9)(Si3.3Al0.7)O10(OH)2", "no name"),
    ("Rb(Mg2Al)(AlSi3)O10(OH)O", "far from all end members"),
]


@pytest.mark.parametrize(("text", "name"), NAMES, ids=[name for _, name in NAMES])
def test_names(text: str, name: str) -> None:
    assert classify(SiteFormula.parse(text)).name == name


@pytest.mark.parametrize(("text", "reason"), UNNAMED)
def test_no_name_that_the_composition_does_not_support(text: str, reason: str) -> None:
    found = classify(SiteFormula.parse(text, tolerance=1.0))
    assert found.species is None
    assert any(reason in line for line in found.reasons), found.reasons


@pytest.mark.parametrize("member", END_MEMBERS, ids=lambda member: f"{member.name}-{member.family}")
def test_every_end_member_is_pure_and_balanced(member: object) -> None:
    assert isinstance(member, type(END_MEMBERS[0]))
    formula = member_formula(member.formula)
    assert formula.imbalance == pytest.approx(0, abs=0.002)
    pure = mixture(formula, (member.family,))
    assert pure.shares[0][0] == member.name
    assert pure.shares[0][1] == pytest.approx(1.0, abs=0.006)


def test_shares_add_up_and_do_not_depend_on_the_order_of_ions() -> None:
    one = classify(SiteFormula.parse("K0.9Na0.1(Mg2Fe2+0.5Al0.5)(Al1.5Si2.5)O10(OH)2"))
    other = classify(SiteFormula.parse("Na0.1K0.9(Al0.5Fe2+0.5Mg2)(Al1.5Si2.5)O10(OH)2"))
    assert sum(share for _, share in one.shares) == pytest.approx(1.0, abs=0.02)
    assert dict(one.shares) == pytest.approx(dict(other.shares), abs=1e-6)
    assert one.name == other.name
    # half of the micas have a tetrahedral Al beyond 1: eastonite and siderophyllite carry it
    assert dict(one.shares)["eastonite"] + dict(one.shares)["siderophyllite"] == pytest.approx(0.5, abs=0.06)
