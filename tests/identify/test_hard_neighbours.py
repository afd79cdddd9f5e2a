"""Minerals that are taken for each other: told apart where the scans can, left open where they cannot, and the ledger says why.

Spacings and behaviours named here are handbook facts (common practice, or from memory where a number is given); samples are
simulated with optics, orientation and stack heights that the program does not know.
"""

from __future__ import annotations

import re

import pytest

from tests.simulated import FULL, make_sample
from xrdmica.crystals.library import load_phase
from xrdmica.identify.decide import identify
from xrdmica.results import Findings, PhaseFinding

AIR = ("air_dried",)


def sheets(findings: Findings, *status: str) -> set[str]:
    return {f.phase for f in findings.phases if f.status in status and load_phase(f.phase).is_sheet_silicate}


def finding(findings: Findings, phase: str) -> PhaseFinding:
    found = findings.get(phase)
    assert found is not None
    return found


def words(found: PhaseFinding) -> str:
    return " | ".join(e.text for e in found.evidence)


@pytest.mark.parametrize(
    "phase",
    [
        "talc", "pyrophyllite", "minnesotaite", "kerolite",  # 9.2 to 9.6
        "margarite", "paragonite", "clintonite",  # 9.5 to 9.7
        "illite", "biotite", "phlogopite",  # 10: I(002)/I(001), width
        "serpentine", "chlorite",  # 7.1 to 7.3
        "halloysite", "palygorskite",  # 10 to 10.5, and what treatments do
        "illite_smectite_r1", "chlorite_smectite",  # ordered, with superlattices
    ],
)  # fmt: skip
def test_alone_with_all_treatments(phase: str) -> None:
    findings = identify(make_sample({phase: 100}, FULL, seed=21))
    assert sheets(findings, "present", "trace") == {phase}


@pytest.mark.parametrize("phase", ["muscovite", "celadonite", "kaolinite"])
def test_what_a_basal_series_cannot_name_keeps_its_twins(phase: str) -> None:
    # 060 and hk lines tell these from phengite, glauconite, and dickite or nacrite; an oriented mount does not
    findings = identify(make_sample({phase: 100}, FULL, seed=21))
    assert phase in sheets(findings, "present")
    assert sheets(findings, "possible") <= {"phengite", "illite", "lepidolite", "glauconite", "dickite", "nacrite"}


def test_glauconite_is_left_open_against_its_series_and_is_no_other_mica() -> None:
    # illite to glauconite is one series in ferric iron; biotite and phlogopite have 060 at 1.54 (handbook, from memory)
    findings = identify(make_sample({"glauconite": 100}, FULL, seed=21))
    assert finding(findings, "glauconite").status in ("present", "possible")
    assert sheets(findings, "present", "trace", "possible") <= {"glauconite", "illite", "celadonite"}


@pytest.mark.parametrize(("iron", "expected"), [(0.2, {"phlogopite"}), (1.5, {"biotite"})])
def test_iron_names_the_dark_mica(iron: float, expected: set[str]) -> None:
    findings = identify(make_sample({"biotite": 60, "chlorite": 40}, FULL, seed=21, exchanges={"biotite": (("fe", iron),)}))
    assert sheets(findings, "present", "trace") - {"chlorite"} == expected


def test_dark_mica_at_the_boundary_is_left_open() -> None:
    # Mg:Fe about 2:1, the traditional boundary of the names phlogopite and biotite (handbook, from memory)
    findings = identify(make_sample({"biotite": 60, "chlorite": 40}, FULL, seed=21, exchanges={"biotite": (("fe", 1.1),)}))
    assert {"phlogopite", "biotite"} <= sheets(findings, "possible")


@pytest.mark.parametrize(
    "weights",
    [
        {"talc": 50, "pyrophyllite": 50},
        {"paragonite": 50, "muscovite": 50},
        {"margarite": 50, "chlorite": 50},
        {"serpentine": 50, "chlorite": 50},
        {"smectite": 50, "vermiculite": 50},
        {"illite_smectite": 60, "illite": 40},
        {"halloysite": 50, "illite": 50},
    ],
)
def test_pairs_with_all_treatments(weights: dict[str, float]) -> None:
    findings = identify(make_sample(weights, FULL, seed=21))
    assert sheets(findings, "present", "trace") == set(weights)


def test_kaolinite_and_chlorite_are_told_by_their_even_orders_and_by_heat() -> None:
    findings = identify(make_sample({"kaolinite": 50, "chlorite": 50}, FULL, seed=21))
    assert sheets(findings, "present") == {"kaolinite", "chlorite"}
    kaolinite, chlorite = finding(findings, "kaolinite"), finding(findings, "chlorite")
    # 3.575 against 3.535-3.55, and kaolinite is gone at 550 C while the 14 angstrom line of chlorite stays
    two = [e for e in kaolinite.evidence if e.order == 2 and e.d_observed is not None]
    four = [e for e in chlorite.evidence if e.order == 4 and e.d_observed is not None and "heated" not in e.scan]
    assert any(e.d_observed == pytest.approx(3.575, abs=0.01) for e in two)
    assert any(e.d_observed == pytest.approx(3.545, abs=0.012) for e in four)
    assert "gone after heated 550" in words(kaolinite)
    assert any(e.order == 1 and e.scan == "heated_550" and e.weight > 0 for e in chlorite.evidence)


def test_kaolinite_or_serpentine_beside_chlorite_needs_heat() -> None:
    findings = identify(make_sample({"kaolinite": 50, "chlorite": 50}, AIR, seed=21))
    assert finding(findings, "chlorite").status == "present"
    assert {"kaolinite", "serpentine"} <= sheets(findings, "possible")
    step = next(s for s in findings.next_measurements if "serpentine" in s.separates)
    assert "550" in step.measurement
    shown = {o.phase: o for o in step.outcomes}
    assert shown["kaolinite"].text == "its lines are gone"
    assert shown["serpentine"].d_spacing == pytest.approx(7.28, abs=0.1)


@pytest.mark.parametrize("phase", ["smectite", "vermiculite"])
def test_14_angstrom_layers_are_named_by_glycol_or_heat_only(phase: str) -> None:
    findings = identify(make_sample({phase: 100}, AIR, seed=21))
    assert not sheets(findings, "present", "trace") & {"smectite", "vermiculite"}
    assert phase in sheets(findings, "possible")
    steps = [s for s in findings.next_measurements if phase in s.separates]
    assert steps
    named = " ".join(s.measurement for s in steps)
    assert re.search("glycolate|heat", named)


def test_smectite_moves_with_glycol_and_chlorite_stays() -> None:
    findings = identify(make_sample({"smectite": 50, "chlorite": 50}, ("air_dried", "glycolated"), seed=21))
    assert sheets(findings, "present") == {"smectite", "chlorite"}
    assert "moves with treatment as it should" in words(finding(findings, "smectite"))
    assert "stays where it is" in words(finding(findings, "chlorite"))
    # 16.9 angstrom with two layers of ethylene glycol
    glycol = [e for e in finding(findings, "smectite").evidence if e.scan == "glycolated" and e.order == 1]
    assert any(e.d_expected == pytest.approx(16.9, abs=0.15) for e in glycol)


def test_vermiculite_and_smectite_are_told_by_magnesium_and_glycerol() -> None:
    # Mg and glycerol: smectite at 17.7, vermiculite at 14.3
    findings = identify(make_sample({"vermiculite": 100}, ("Mg_glycerolated", "air_dried"), seed=21))
    assert "smectite" not in sheets(findings, "present", "trace")
    findings = identify(make_sample({"smectite": 100}, ("Mg_glycerolated", "air_dried"), seed=21))
    assert sheets(findings, "present", "trace") & {"smectite", "saponite"}
    assert "vermiculite" not in sheets(findings, "present", "trace")


@pytest.mark.parametrize("weights", [{"smectite": 100}, {"smectite": 60, "illite": 40}])
def test_collapsed_smectite_is_not_called_mica_or_smectite_without_glycol(weights: dict[str, float]) -> None:
    findings = identify(make_sample(weights, ("heated_550",), seed=21))
    assert not sheets(findings, "present", "trace")
    assert sheets(findings, "possible") & {"smectite", "illite_smectite"}
    assert any("glycol" in text for text in findings.measure_next)


def test_mixed_layers_are_not_illite_and_smectite_side_by_side() -> None:
    mixed = identify(make_sample({"illite_smectite": 100}, FULL, seed=21))
    assert sheets(mixed, "present", "trace") == {"illite_smectite"}
    apart = identify(make_sample({"illite": 50, "smectite": 50}, FULL, seed=21))
    assert sheets(apart, "present", "trace") == {"illite", "smectite"}


@pytest.mark.parametrize(("phase", "low", "high"), [("biotite", 0.0, 0.12), ("muscovite", 0.3, 0.8)])
def test_second_order_of_micas_is_in_the_ledger(phase: str, low: float, high: float) -> None:
    # I(002)/I(001): weak in iron-bearing trioctahedral micas, 0.3-0.6 in muscovite (handbook, from memory)
    found = finding(identify(make_sample({phase: 100}, FULL, seed=21)), phase)
    seen = [e.text for e in found.evidence if e.kind == "intensity" and "I(002)/I(001)" in e.text]
    if phase == "biotite" and not seen:
        return  # too weak to be measured, as it should be
    assert seen
    values = [float(re.search(r"is ([\d.]+)", text)[1]) for text in seen]  # type: ignore[index]
    assert all(low <= value <= high for value in values)


def test_fibrous_minerals_bring_a_caution() -> None:
    for weights in ({"serpentine": 100}, {"talc": 70, "amphibole": 30}):
        findings = identify(make_sample(weights, ("air_dried",), seed=21))
        assert any("may be fibrous" in note and "microscopy" in note for note in findings.notes)
