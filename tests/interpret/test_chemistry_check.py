"""Analyses against phases: mixtures whose oxides are known by arithmetic, and what is found missing."""

from __future__ import annotations

from pathlib import Path

import pytest

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.chemistry.oxides import oxide_percent
from xrdmica.errors import XrdmicaError
from xrdmica.interpret.chemistry_check import check_chemistry, read_analysis
from xrdmica.results import PhaseWeight, Proportions

# ideal oxides from atomic weights (science of the formulas themselves): muscovite, kaolinite
MUSCOVITE = {"K2O": 11.82, "Al2O3": 38.40, "SiO2": 45.25}
KAOLINITE = {"Al2O3": 39.50, "SiO2": 46.55}
TALC = {"MgO": 31.88, "SiO2": 63.37}


def weight(phase: str, percent: float, error: float = 2.0) -> PhaseWeight:
    return PhaseWeight(
        phase=phase, name=phase, group="true mica", status="present", weight_percent=percent, low95=percent - 2 * error,
        high95=percent + 2 * error, standard_error=error,
    )  # fmt: skip


def proportions(*rows: PhaseWeight) -> Proportions:
    return Proportions(sample="s", basis="sheet silicates of the oriented mount", phases=rows)


def mixture(**parts: tuple[dict[str, float], float]) -> dict[str, tuple[float, float | None]]:
    out: dict[str, float] = {}
    for oxides, share in parts.values():
        for name, value in oxides.items():
            out[name] = out.get(name, 0.0) + value * share
    for name in ("Na2O", "CaO", "Fe2O3", "MgO"):
        out.setdefault(name, 0.0)
    return {name: (value, None) for name, value in out.items()}


def test_an_analysis_of_the_same_mixture_agrees() -> None:
    found = check_chemistry(
        proportions(weight("talc", 60), weight("kaolinite", 40)), mixture(a=(TALC, 0.6), b=(KAOLINITE, 0.4))
    )
    assert found.agrees
    assert "agrees" in found.text
    silica = next(row for row in found.oxides if row.oxide == "SiO2")
    # water-free: 0.6 x 63.37 + 0.4 x 46.55 of 57.15 + 34.42
    assert silica.measured == pytest.approx(100 * (0.6 * 63.37 + 0.4 * 46.55) / (0.6 * 95.25 + 0.4 * 86.05), abs=0.05)
    assert silica.implied == pytest.approx(silica.measured, abs=1.5)
    assert silica.implied_low is not None
    assert silica.implied_low < silica.implied < (silica.implied_high or 0)


def test_a_missing_potassium_phase_is_named() -> None:
    analysis = mixture(a=(TALC, 0.6), b=(KAOLINITE, 0.2), c=({"K2O": 16.92, "Al2O3": 18.32, "SiO2": 64.76}, 0.2))
    found = check_chemistry(proportions(weight("talc", 75), weight("kaolinite", 25)), analysis)
    assert found.agrees is False
    assert "K2O" in found.text
    assert any("microcline" in text for text in found.reconcile)


def test_carbonate_is_named() -> None:
    analysis = mixture(a=(TALC, 0.5), b=(KAOLINITE, 0.4), c=({"CaO": 56.03}, 0.1))
    found = check_chemistry(proportions(weight("talc", 56), weight("kaolinite", 44)), analysis)
    assert found.agrees is False
    assert any("calcite" in text for text in found.reconcile)


def test_more_iron_in_the_mica_is_named() -> None:
    iron = SiteFormula.parse("K(Mg0.9Fe2+2.1)(Si3Al)O10(OH)2")
    oxides = dict(oxide_percent(iron).items())
    analysis = {name: (value, 0.3) for name, value in oxides.items() if name not in ("H2O",)}
    given = {**analysis, "CaO": (0.0, 0.05), "Na2O": (0.0, 0.05)}
    poor = SiteFormula.parse("K(Mg2.2Fe2+0.8)(Si3Al)O10(OH)2")
    fixed = check_chemistry(proportions(weight("biotite", 100, 0.5)), given, formulas={"biotite": poor})
    assert fixed.agrees is False
    # with the range of the file the iron may rise, and with the right formula it does
    assert check_chemistry(proportions(weight("biotite", 100, 0.5)), given, formulas={"biotite": iron}).agrees


def test_companions_outside_the_hundred_percent_are_left_free() -> None:
    analysis = mixture(a=(TALC, 0.4), b=(KAOLINITE, 0.3), q=({"SiO2": 100.0}, 0.3))
    weights = proportions(weight("talc", 57), weight("kaolinite", 43))
    assert check_chemistry(weights, analysis, companions=("quartz",)).agrees
    assert check_chemistry(weights, analysis).agrees is False


def test_joint_estimate_moves_towards_the_analysis() -> None:
    analysis = {k: (v, 0.2) for k, (v, _) in mixture(a=(TALC, 0.6), b=(KAOLINITE, 0.4)).items()}
    found = check_chemistry(proportions(weight("talc", 52, 6.0), weight("kaolinite", 48, 6.0)), analysis, joint=True)
    talc = next(row for row in found.joint if row.phase == "talc")
    assert talc.weight_percent == pytest.approx(60, abs=1.5)
    assert (talc.standard_error or 9) < 2.0
    assert sum(row.weight_percent or 0 for row in found.joint) == pytest.approx(100, abs=0.05)
    assert "no joint estimate" in " ".join(
        check_chemistry(proportions(weight("talc", 100, 1.0)), analysis, joint=True).notes
    )


def test_no_proportions_and_too_few_oxides() -> None:
    assert check_chemistry(proportions(), mixture(a=(TALC, 1.0))).agrees is None
    with pytest.raises(XrdmicaError, match="fewer than four oxides"):
        check_chemistry(proportions(weight("talc", 100)), {"SiO2": (60.0, None), "MgO": (30.0, None)})


def test_analysis_is_found_by_the_name_of_the_sample(tmp_path: Path) -> None:
    path = tmp_path / "ox.csv"
    path.write_text("sample,SiO2,Al2O3,K2O,MgO,SiO2 sigma\nA,50,20,5,2,0.4\nB,60,10,3,1,0.5\n")
    assert read_analysis(path, "b")["SiO2"] == (60.0, 0.5)
    with pytest.raises(XrdmicaError, match=r"no analysis called 'C'.*there are A, B"):
        read_analysis(path, "C")
