"""The demonstration scans, the whole way, against the truth file that was written when they were made."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest

from tests.conftest import REPOSITORY
from xrdmica.batch.analyse import analyse_sample
from xrdmica.batch.sheet import entries_from
from xrdmica.results import SampleResult

TRUTH: dict[str, Any] = json.loads((REPOSITORY / "demo_patterns" / "truth.json").read_text(encoding="utf-8"))
# the one specimen that its single scan cannot decide
UNDECIDED = "GB3-02.0"


@pytest.fixture(scope="module")
def results() -> dict[str, SampleResult]:
    return {entry.name: analyse_sample(entry.load()) for entry in entries_from(REPOSITORY / "demo_patterns")}


def test_every_specimen_is_there(results: dict[str, SampleResult]) -> None:
    assert set(results) == set(TRUTH)
    assert len(results) >= 6


@pytest.mark.parametrize("name", list(TRUTH))
def test_verdict_on_swelling(results: dict[str, SampleResult], name: str) -> None:
    assert results[name].swelling.verdict == TRUTH[name]["swelling"]


@pytest.mark.parametrize("name", [name for name in TRUTH if name != UNDECIDED])
def test_phases_are_named_and_no_others(results: dict[str, SampleResult], name: str) -> None:
    present = {f.phase for f in results[name].findings.of_status("present", "trace")}
    assert present == set(TRUTH[name]["weight_percent"]) | set(TRUTH[name]["companions"])


def test_the_undecided_one_says_what_to_measure(results: dict[str, SampleResult]) -> None:
    findings = results[UNDECIDED].findings
    smectite = findings.get("smectite")
    assert smectite is not None
    assert smectite.status == "possible"
    assert any("glycolated" in text for text in findings.measure_next)


def test_truth_lies_in_the_intervals_and_errors_are_small(results: dict[str, SampleResult]) -> None:
    inside, errors = [], []
    for name, truth in TRUTH.items():
        rows = {p.phase: p for p in results[name].proportions.phases}
        for phase, weight in truth["weight_percent"].items():
            row = rows[phase]
            assert row.weight_percent is not None
            assert row.low95 is not None
            assert row.high95 is not None
            inside.append(row.low95 <= weight <= row.high95)
            errors.append(abs(row.weight_percent - weight))
    assert np.mean(inside) >= 0.9
    assert np.mean(errors) < 5.0


def test_displacements_are_found(results: dict[str, SampleResult]) -> None:
    for name, truth in TRUTH.items():
        for scan in results[name].scans:
            assert scan.displacement_mm == pytest.approx(truth["mounts"][scan.label]["displacement_mm"], abs=0.03)


def test_radiation_is_known_and_its_origin_told(results: dict[str, SampleResult]) -> None:
    origins = {scan.radiation_origin for result in results.values() for scan in result.scans}
    assert origins == {"sample sheet", "file header"}
    assert {scan.radiation for scan in results["GB4-09.1"].scans} == {"Co"}


def test_results_survive_json(results: dict[str, SampleResult]) -> None:
    for result in results.values():
        assert SampleResult.model_validate_json(result.model_dump_json()) == result
