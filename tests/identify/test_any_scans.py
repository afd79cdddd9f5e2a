"""Identification with whatever scans there are, and what the missing ones cost."""

from __future__ import annotations

import json

import pytest

from tests.simulated import FULL, make_sample
from xrdmica.crystals.library import load_phase
from xrdmica.identify.decide import identify
from xrdmica.results import Findings


def sheets(findings: Findings, *status: str) -> set[str]:
    return {f.phase for f in findings.phases if f.status in status and load_phase(f.phase).is_sheet_silicate}


def test_one_air_dried_scan_names_what_does_not_swell_and_says_what_is_missing() -> None:
    findings = identify(make_sample({"talc": 40, "pyrophyllite": 30, "muscovite": 30}, ("air_dried",), seed=3))
    assert sheets(findings, "present", "trace") == {"talc", "pyrophyllite", "muscovite"}
    assert any("no glycolated scan" in note for note in findings.notes)
    assert any("no heated scan" in note for note in findings.notes)


def test_without_heating() -> None:
    findings = identify(make_sample({"illite": 40, "smectite": 30, "kaolinite": 30}, ("air_dried", "glycolated"), seed=3))
    assert {"illite", "smectite"} <= sheets(findings, "present", "trace")
    assert "kaolinite" in sheets(findings, "present", "possible")
    assert any("no heated scan" in note for note in findings.notes)


def test_random_powder_alone() -> None:
    sample = make_sample({"muscovite": 40, "kaolinite": 60, "quartz": 30}, ("none",), seed=3, mount="random", high=65.0)
    findings = identify(sample)
    assert sheets(findings, "present", "trace") <= {"muscovite", "kaolinite"}
    assert "kaolinite" in sheets(findings, "present", "trace", "possible")
    assert "quartz" in {f.phase for f in findings.of_status("present", "trace")}
    assert any("oriented mount" in text for text in findings.measure_next)


@pytest.mark.parametrize("companion", ["quartz", "calcite", "gypsum", "albite", "goethite", "amphibole"])
def test_companions_have_no_basal_series_and_are_named_all_the_same(companion: str) -> None:
    findings = identify(make_sample({"illite": 60, companion: 40}, ("air_dried", "glycolated"), seed=3))
    assert companion in {f.phase for f in findings.of_status("present", "trace")}


def test_the_ledger_is_data_and_covers_what_was_not_kept() -> None:
    findings = identify(make_sample({"illite": 60, "kaolinite": 40}, FULL, seed=12))
    data = json.loads(findings.model_dump_json())
    illite = next(f for f in data["phases"] if f["phase"] == "illite")
    line = next(e for e in illite["evidence"] if e["kind"] == "line")
    assert {"scan", "d_observed", "d_error", "order", "d_expected", "intensity_ratio", "weight", "text"} <= set(line)
    assert line["intensity_ratio"] == pytest.approx(1.0, abs=0.3)
    pyrophyllite = findings.get("pyrophyllite")
    assert pyrophyllite is not None
    assert pyrophyllite.status == "not_detected"
    # 9.2 angstrom (handbook), nothing stands there
    against = [e for e in pyrophyllite.evidence if e.kind == "missing line" and e.weight < 0]
    assert len(against) >= len(FULL) - 1
    assert all(e.d_expected is not None for e in against)


def test_every_open_question_has_a_measurement_with_outcomes() -> None:
    findings = identify(make_sample({"illite": 50, "smectite": 50}, ("air_dried",), seed=3))
    open_ones = [f for f in findings.of_status("possible") if f.evidence]
    assert open_ones
    for finding in open_ones:
        steps = [step for step in findings.next_measurements if finding.phase in step.separates]
        assert steps, finding.phase
        for step in steps:
            assert len(step.outcomes) >= 2
            assert all(outcome.text for outcome in step.outcomes)
    glycol = next(s for s in findings.next_measurements if "glycolate" in s.measurement)
    smectite = next(o for o in glycol.outcomes if o.phase == "smectite")
    # two layers of ethylene glycol: 16.9 angstrom, 5.2 degrees with copper (common practice)
    assert smectite.d_spacing == pytest.approx(16.9, abs=0.15)
    assert smectite.two_theta == pytest.approx(5.22, abs=0.06)
