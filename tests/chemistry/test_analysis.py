"""Oxide analyses to formulas.

Expected formulas: ideal compositions whose weight percents follow from atomic weights, as in handbooks (see also
tests/published/test_ideal_compositions.py); errors against a Monte Carlo of the same analysis.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.chemistry.analysis import OxideAnalysis, formula_from_oxides, formulas_from_oxides
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.errors import ChemistryError

# dry weight percents without water
IDEAL = [
    ({"K2O": 11.82, "Al2O3": 38.40, "SiO2": 45.25}, "KAl2(AlSi3)O10(OH)2"),
    ({"MgO": 31.88, "SiO2": 63.37}, "Mg3Si4O10(OH)2"),
    ({"Al2O3": 28.30, "SiO2": 66.70}, "Al2Si4O10(OH)2"),
    ({"Na2O": 8.11, "Al2O3": 40.02, "SiO2": 47.16}, "NaAl2(AlSi3)O10(OH)2"),
    ({"CaO": 14.08, "Al2O3": 51.21, "SiO2": 30.18}, "CaAl2(Al2Si2)O10(OH)2"),
    ({"K2O": 11.29, "MgO": 28.98, "Al2O3": 12.22, "SiO2": 43.20}, "KMg3(AlSi3)O10(OH)2"),
    # kaolinite and clinochlore: handbook values, from memory
    ({"Al2O3": 39.50, "SiO2": 46.55}, "Al2Si2O5(OH)4"),
    ({"MgO": 36.27, "Al2O3": 18.35, "SiO2": 32.43}, "(Mg5Al)(AlSi3)O10(OH)8"),
    ({"MgO": 43.63, "SiO2": 43.36}, "Mg3Si2O5(OH)4"),
]


def close(found: SiteFormula, wanted: SiteFormula, within: float = 0.005) -> bool:
    if found.layer_type != wanted.layer_type:
        return False
    return all(
        abs(found.site(site).get(ion, 0.0) - wanted.site(site).get(ion, 0.0)) < within
        for site in ("interlayer", "octahedral", "tetrahedral", "anions")
        for ion in {*found.site(site), *wanted.site(site)}
    )


@pytest.mark.parametrize(("oxides", "text"), IDEAL, ids=[text for _, text in IDEAL])
def test_ideal_compositions_give_ideal_formulas(oxides: dict[str, float], text: str) -> None:
    found = formulas_from_oxides(oxides)
    assert len(found) == 1
    assert close(found[0].formula, SiteFormula.parse(text)), found[0].formula.text()
    assert found[0].flags == ()
    assert found[0].water_by_difference == pytest.approx(found[0].water_of_formula, abs=0.05)


def test_iron_is_bracketed_unless_given() -> None:
    # annite KFe3(AlSi3)O10(OH)2, by hand; the same iron as Fe2O3 is 42.11 x 1.11134
    base = {"K2O": 9.20, "Al2O3": 9.96, "SiO2": 35.21}
    annite = SiteFormula.parse("K(Fe2+3)(AlSi3)O10(OH)2")
    for oxides in ({**base, "FeO": 42.11}, {**base, "Fe2O3": 46.80}, {**base, "FeOt": 42.11}, {**base, "Fe2O3t": 46.80}):
        ferrous, ferric = formulas_from_oxides(oxides)
        assert (ferrous.iron, ferric.iron) == ("ferrous", "ferric")
        assert close(ferrous.formula, annite)
        assert "Fe2+" not in ferric.formula.octahedral
        assert any("tetrahedral site holds" in flag for flag in ferric.flags)
    both = formulas_from_oxides({**base, "FeO": 28.07, "Fe2O3": 15.60})
    assert [one.iron for one in both] == ["given"]
    assert both[0].formula.octahedral["Fe3+"] / both[0].formula.octahedral["Fe2+"] == pytest.approx(0.5, abs=0.01)
    with pytest.raises(ChemistryError, match="only total iron"):
        formulas_from_oxides({**base, "FeOt": 42.11}, iron="given")


def test_tetrahedral_iron_and_interlayer_magnesium_on_request() -> None:
    tetraferri = SiteFormula.parse("KMg3(Fe3+Si3)O10(OH)2")
    oxides = {name: n for name, n in tetraferri.oxides().items() if name != "H2O"}
    assert close(formula_from_oxides(oxides, tetrahedral_iron=True), tetraferri)
    plain = formula_from_oxides(oxides, layer_type="2:1")
    assert plain.octahedral["Fe3+"] == pytest.approx(1.0, abs=0.01)
    vermiculite = SiteFormula.parse("Mg0.35Mg3(Si3.3Al0.7)O10(OH)2·4H2O")
    oxides = {name: n for name, n in vermiculite.oxides().items() if name != "H2O"}
    for moved in (0.35, "excess"):
        found = formula_from_oxides(oxides, layer_type="2:1", interlayer_magnesium=moved)  # type: ignore[arg-type]
        assert found.interlayer["Mg2+"] == pytest.approx(0.35, abs=0.005)
        assert found.octahedral["Mg2+"] == pytest.approx(3.0, abs=0.005)
    with pytest.raises(ChemistryError, match="interlayer magnesium"):
        formulas_from_oxides(oxides, interlayer_magnesium=3.0)


def test_fluorine_takes_the_place_of_hydroxyl_and_of_oxygen_in_the_total() -> None:
    # fluorophlogopite, by hand: F 9.02, O = F2 3.80 wt %
    wanted = SiteFormula.parse("KMg3(AlSi3)O10F2")
    oxides = {name: n for name, n in wanted.oxides().items() if not name.startswith("O=")}
    found = formulas_from_oxides(oxides)[0]
    assert close(found.formula, wanted)
    assert found.analysis.anhydrous_total == pytest.approx(100.0, abs=0.01)
    assert found.water_of_formula == pytest.approx(0.0, abs=0.01)
    assert sum(oxides.values()) == pytest.approx(103.80, abs=0.02)
    too_much = formulas_from_oxides({**oxides, "F": 12.0})[0]
    assert any("F and Cl fill" in flag for flag in too_much.flags)


def test_errors_are_those_of_a_monte_carlo() -> None:
    percent = {"SiO2": 36.5, "TiO2": 3.1, "Al2O3": 14.5, "FeO": 18.2, "MgO": 12.9, "K2O": 9.4, "Na2O": 0.2, "F": 1.0}
    sigma = {"SiO2": 0.3, "TiO2": 0.06, "Al2O3": 0.15, "FeO": 0.2, "MgO": 0.15, "K2O": 0.1, "Na2O": 0.02, "F": 0.1}
    found = formulas_from_oxides(OxideAnalysis("x", percent, sigma), iron="ferrous", layer_type="2:1")[0]
    generator = np.random.default_rng(7)
    draws = []
    for _ in range(600):
        drawn = {name: max(n + sigma[name] * generator.standard_normal(), 0.0) for name, n in percent.items()}
        draws.append(formula_from_oxides(drawn, iron="ferrous", layer_type="2:1"))
    for key, values in {
        "interlayer K+": [f.interlayer["K+"] for f in draws],
        "octahedral Al3+": [f.octahedral.get("Al3+", 0.0) for f in draws],
        "octahedral Fe2+": [f.octahedral["Fe2+"] for f in draws],
        "tetrahedral Si4+": [f.tetrahedral["Si4+"] for f in draws],
        "anions F-": [f.anions["F-"] for f in draws],
        "layer charge": [f.layer_charge for f in draws],
    }.items():
        assert found.sigma[key] == pytest.approx(float(np.std(values)), rel=0.12), key
    assert formulas_from_oxides(percent, iron="ferrous")[0].sigma == {}


@pytest.mark.parametrize(
    ("oxides", "sentence"),
    [
        ({"SiO2": 46.0, "Al2O3": 38.0, "XyO2": 3.0}, "'XyO2' is no oxide known here"),
        ({"SiO2": 46.0, "Al2O3": -1.0}, "Al2O3 is -1 %"),
        ({"SiO2": 46.0, "Al2O3": float("nan")}, "Al2O3 is nan %"),
        ({"SiO2": 46.0, "Al2O3": 38.0, "BaO": 1500.0}, "if it is in ppm, head it 'BaO (ppm)'"),
        ({"SiO2": 20.0, "Al2O3": 20.0}, "sum to 40.0 %"),
        ({"SiO2": 80.0, "Al2O3": 80.0}, "sum to 160.0 %"),
        ({"Al2O3": 98.0}, "there is no SiO2"),
        ({"SiO2": 40.0, "FeOt": 20.0, "FeO": 20.0}, "total iron stands beside"),
    ],
)
def test_unusable_analyses_are_one_sentence(oxides: dict[str, float], sentence: str) -> None:
    with pytest.raises(ChemistryError) as caught:
        formulas_from_oxides(oxides)
    assert sentence in str(caught.value)
    assert "\n" not in str(caught.value)


def test_misfits_are_flagged_and_not_repaired() -> None:
    muscovite = {"K2O": 11.82, "Al2O3": 38.40, "SiO2": 45.25}
    salty = formulas_from_oxides({**muscovite, "Na2O": 3.0}, layer_type="2:1")[0]
    assert any("interlayer site holds" in flag for flag in salty.flags)
    assert salty.formula.site_sum("interlayer") > 1.05
    dirty = formulas_from_oxides({**muscovite, "P2O5": 1.0})[0]
    assert any("1 % P2O5 was left out" in flag for flag in dirty.flags)
    high = formulas_from_oxides({name: n * 1.03 for name, n in muscovite.items()})[0]
    assert any("too high a total" in flag for flag in high.flags)
    low = formulas_from_oxides({name: n * 0.9 for name, n in muscovite.items()})[0]
    assert any("is missing" in flag for flag in low.flags)
    quartzy = formulas_from_oxides({**muscovite, "SiO2": 60.0, "Al2O3": 24.0}, layer_type="2:1")[0]
    assert any("octahedral site holds" in flag for flag in quartzy.flags)


@settings(max_examples=60, deadline=None)
@given(
    st.floats(0, 1), st.floats(0, 0.9), st.floats(0.0, 1.0), st.floats(0, 1.5)
)
def test_formula_to_oxides_and_back(iron: float, tschermak: float, sodium: float, fluorine: float) -> None:
    text_free = SiteFormula(
        "2:1",
        {"K+": 1 - sodium, "Na+": sodium},
        {"Mg2+": (3 - tschermak) * (1 - iron), "Fe2+": (3 - tschermak) * iron, "Al3+": tschermak},
        {"Si4+": 3 - tschermak, "Al3+": 1 + tschermak},
        {"O2-": 10.0, "OH-": 2 - fluorine, "F-": fluorine},
    )
    oxides = {name: max(n, 0.0) for name, n in text_free.oxides().items() if not name.startswith("O=") and name != "H2O"}
    assert close(formula_from_oxides(oxides, layer_type="2:1", iron="given"), text_free, 1e-6)
