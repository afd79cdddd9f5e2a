"""The soil screen: a case for each sentence it can print, published relations, and properties that must hold."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.interpret.screening import IndexTests, Screening, activity, screen_soil, swelling_potential
from xrdmica.results import Findings, GroupWeight, PhaseFinding, PhaseWeight, Proportions, Swelling


def phase(name: str, group: str, status: str = "present", spacing: float | None = None) -> PhaseFinding:
    return PhaseFinding(phase=name, name=name, group=group, status=status, reason="as set", basal_spacing=spacing)  # type: ignore[arg-type]


def soil(
    smectite: float, *, half: float = 3.0, spacing: float = 15.0, others: tuple[PhaseFinding, ...] = (), verdict: str = "yes",
    high: float | None = None, tests: IndexTests | None = None,
) -> Screening:  # fmt: skip
    """A clay fraction of smectite and kaolinite."""
    rest = 100 - smectite
    low95, high95 = max(smectite - half, 0.0), min(smectite + half, 100.0)
    weights = (
        PhaseWeight(phase="smectite", name="smectite", group="smectite", status="present", weight_percent=smectite, low95=low95,
                    high95=high95),
        PhaseWeight(phase="kaolinite", name="kaolinite", group="kaolin", status="present", weight_percent=rest,
                    low95=max(rest - half, 0), high95=min(rest + half, 100)),
    )  # fmt: skip
    proportions = Proportions(
        sample="s", basis="sheet silicates of the oriented mount", phases=weights,
        groups=(GroupWeight(group="expandable layers", status="present", weight_percent=smectite, low95=low95, high95=high95),),
    )  # fmt: skip
    swelling = Swelling(
        verdict=verdict, reason="as set", expandable_percent=smectite if verdict != "cannot tell" else None, low95=low95,  # type: ignore[arg-type]
        high95=high95 if high is None else high, measure_next="a glycolated oriented mount" if verdict == "cannot tell" else "",
    )  # fmt: skip
    usual = (phase("smectite", "smectite", spacing=spacing), phase("kaolinite", "kaolin"))
    findings = Findings(sample="s", phases=(*usual, *others))
    return screen_soil(findings, proportions, swelling, tests, cautions=("the local code goes before this",))


def test_classes_of_a_soil() -> None:
    part = IndexTests(clay_percent=50)
    assert soil(40, tests=part).verdict == "swelling"
    assert soil(10, tests=part).verdict == "weakly swelling"
    assert soil(1, half=0.5, tests=part).verdict == "non-swelling"
    assert "too little to matter" in soil(1, half=0.5, tests=part).reason
    assert soil(15, half=18, tests=part).verdict == "cannot tell"
    assert "spans all classes" in soil(15, half=18, tests=part).reason
    assert "reaches into weakly swelling" in soil(22, half=6, tests=part).reason
    assert "reaches into swelling" in soil(18, half=6, tests=part).reason


def test_verdicts_of_the_scans_go_through() -> None:
    open_one = soil(20, verdict="cannot tell")
    assert open_one.verdict == "cannot tell"
    assert "a glycolated oriented mount" in open_one.measure_next
    clean = soil(0, half=0, verdict="no", high=1.0)
    assert clean.verdict == "non-swelling"
    assert "up to 6 % of smectite could be there unseen" in soil(0, half=0, verdict="no", high=6.0).reason


def test_basis_and_what_is_missing_are_said() -> None:
    assert "of the sheet silicates" in soil(30).basis
    assert any("sedimentation" in text for text in soil(30).measure_next)
    assert "of the soil" in soil(30, tests=IndexTests(clay_percent=40)).basis
    assert soil(30).cautions == ("the local code goes before this",)


@pytest.mark.parametrize(("spacing", "words"), [(12.5, "usual for sodium"), (15.0, "calcium or magnesium"), (13.7, "neither")])
def test_interlayer_cation(spacing: float, words: str) -> None:
    assert words in soil(30, spacing=spacing).interlayer


@pytest.mark.parametrize(
    ("name", "group", "words"),
    [
        ("chlorite", "chlorite", "does not swell"), ("vermiculite", "vermiculite", "not counted as expandable"),
        ("halloysite", "kaolin", "does not swell again"), ("palygorskite", "palygorskite-sepiolite", "water in channels"),
        ("sepiolite", "palygorskite-sepiolite", "does not swell in the lattice"),
    ],
)  # fmt: skip
def test_look_alikes_are_named(name: str, group: str, words: str) -> None:
    found = soil(30, others=(phase(name, group),)).look_alikes
    assert any(text.startswith((name, f"hydrated {name}")) and words in text for text in found)


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("pyrite", "attacks concrete"), ("gypsum", "sulfate attack"), ("anhydrite", "swells strongly"), ("halite", "dissolves"),
        ("talc", "low residual strength"), ("halloysite", "tests on dried soil mislead"), ("serpentine", "asbestos"),
        ("amphibole", "asbestos"), ("palygorskite", "thixotropic"), ("sepiolite", "thixotropic"),
    ],
)  # fmt: skip
def test_other_hazards_are_named(name: str, words: str) -> None:
    assert any(words in text for text in soil(30, others=(phase(name, "companion"),)).hazards)
    assert not soil(30, others=(phase(name, "companion", "not_detected"),)).hazards


@pytest.mark.parametrize(("plasticity", "clay", "expected"), [(40, 100, 0.40), (35, 39, 0.90), (50, 20, 2.5)])
def test_activity_of_skempton(plasticity: float, clay: float, expected: float) -> None:
    # kaolinite about 0.4, illite about 0.9 (Skempton 1953, from memory)
    assert activity(plasticity, clay) == pytest.approx(expected, abs=0.01)


@pytest.mark.parametrize(("a", "clay", "expected"), [(1.0, 30.0, 4.34), (1.0, 60.0, 47.1), (0.5, 40.0, 2.15)])
def test_potential_of_seed_woodward_and_lundgren(a: float, clay: float, expected: float) -> None:
    # 3.6e-5 A^2.44 C^3.44 (1962), worked by hand: ln S = ln 3.6e-5 + 2.44 ln A + 3.44 ln C
    assert swelling_potential(a, clay) == pytest.approx(expected, rel=0.01)


def test_index_tests_in_words() -> None:
    text = " ".join(soil(30, tests=IndexTests(40, 80, 25)).consistency)
    assert "activity 1.38, active (Skempton 1953)" in text
    assert "Seed, Woodward & Lundgren 1962" in text
    assert "do not contradict" in text
    for limits, word in (((40, 20, 16), "inactive"), ((40, 60, 22), "normal")):
        assert any(word in line for line in soil(30, tests=IndexTests(*limits)).consistency)
    grades = {"low": 10.0, "medium": 25.0, "high": 45.0, "very high": 80.0}
    for grade, clay in grades.items():
        lines = soil(30, tests=IndexTests(clay, clay + 20, 20)).consistency
        assert any(f"{grade} (Seed" in line for line in lines), grade


def test_contradictions_are_said() -> None:
    quiet = soil(0, half=0, verdict="no", high=0.5, tests=IndexTests(20, 60, 20)).consistency
    assert any("an active clay without swelling layers" in text for text in quiet)
    lazy = soil(60, tests=IndexTests(60, 45, 25)).consistency
    assert any("swelling layers in a clay of low activity" in text for text in lazy)
    rich = soil(20, tests=IndexTests(clay_percent=20, cec=60)).consistency
    assert any("measured CEC 60" in text and "above" in text for text in rich)
    poor = soil(60, tests=IndexTests(clay_percent=60, methylene_blue=5)).consistency
    assert any("specific surface" in text and "below" in text for text in poor)


def test_methylene_blue_gives_a_surface() -> None:
    # 130 square angstrom a molecule of 319.9 g/mol: 2.44 m2 per mg (Hang & Brindley 1970, from memory)
    expected = 6.022e23 * 130e-20 / 319.87 / 1000
    assert expected == pytest.approx(2.44, abs=0.01)
    assert any("244 m2/g" in text for text in soil(30, tests=IndexTests(clay_percent=50, methylene_blue=100)).consistency)


@pytest.mark.parametrize(
    ("smectite", "clay", "uptake"), [(0.5, 10, "low"), (30, 35, "medium"), (60, 50, "high"), (95, 90, "very high")]
)
def test_water_uptake_classes(smectite: float, clay: float, uptake: str) -> None:
    assert soil(smectite, tests=IndexTests(clay_percent=clay)).uptake == uptake


ORDER = {"non-swelling": 0, "weakly swelling": 1, "swelling": 2}


@settings(max_examples=60, deadline=None)
@given(st.floats(0, 95), st.floats(0, 95), st.floats(5, 95))
def test_more_swelling_layers_never_lower_the_class(one: float, two: float, clay: float) -> None:
    low, high = sorted((one, two))
    first, second = (soil(x, half=1.0, tests=IndexTests(clay_percent=clay)) for x in (low, high))
    if "cannot tell" not in (first.verdict, second.verdict):
        assert ORDER[first.verdict] <= ORDER[second.verdict]
    for a, b in zip(first.properties, second.properties, strict=True):
        assert a.typical <= b.typical + 0.11


@settings(max_examples=60, deadline=None)
@given(st.floats(0, 100), st.floats(0, 20), st.one_of(st.none(), st.floats(1, 100)))
def test_ranges_hold_their_value(smectite: float, half: float, clay: float | None) -> None:
    found = soil(smectite, half=half, tests=IndexTests(clay_percent=clay))
    for item in found.properties:
        assert item.low <= item.typical + 0.11
        assert item.typical <= item.high
        assert item.unit.startswith(("cmol(+)/kg of", "m2/g of"))
    if found.expandable_percent is not None:
        assert (found.low95 or 0) - 0.02 <= found.expandable_percent <= (found.high95 or 100) + 0.02
