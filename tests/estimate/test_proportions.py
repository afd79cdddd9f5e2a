"""Proportions of simulated samples: truth inside the intervals, sums, honesty at the edges."""

from __future__ import annotations

import pytest

from tests.simulated import make_sample
from xrdmica.estimate.proportions import estimate
from xrdmica.identify.decide import identify
from xrdmica.results import Proportions


@pytest.fixture(scope="module")
def three() -> Proportions:
    return estimate(make_sample({"illite": 45, "smectite": 30, "kaolinite": 25}, seed=21))


def test_truth_lies_in_nearly_all_intervals() -> None:
    # phases of one mount differ by 8 % in orientation spread here (common practice: about 10 %), optics differ as well
    truth = {"illite": 45.0, "smectite": 30.0, "kaolinite": 25.0}
    inside = []
    for seed in range(31, 37):
        rows = {p.phase: p for p in estimate(make_sample(truth, ("air_dried", "glycolated"), seed=seed)).phases}
        for phase, value in truth.items():
            low, high = rows[phase].low95, rows[phase].high95
            assert low is not None
            assert high is not None
            inside.append(low <= value <= high)
    # of 18 intervals that hold with 95 %, 15 or more do in 999 cases of 1000 (binomial)
    assert sum(inside) >= 15


def test_weights_sum_to_100_and_unknown_ones_are_empty(three: Proportions) -> None:
    assert sum(p.weight_percent or 0 for p in three.phases) == pytest.approx(100, abs=0.1)
    assert all(p.weight_percent is None for p in three.phases if p.status == "not_detected")


def test_group_totals_follow_from_members(three: Proportions) -> None:
    groups = {g.group: g for g in three.groups}
    rows = {p.phase: p for p in three.phases}
    assert groups["smectite"].weight_percent == pytest.approx(rows["smectite"].weight_percent, abs=0.05)
    assert groups["expandable layers"].weight_percent == pytest.approx(rows["smectite"].weight_percent, abs=0.05)
    assert groups["talc group"].status == "not_detected"


def test_detection_limits_of_what_was_not_found_are_given(three: Proportions) -> None:
    limits = {p.phase: p.detection_limit for p in three.phases}
    for phase in ("talc", "chlorite", "vermiculite"):
        limit = limits[phase]
        assert limit is not None
        assert 0 < limit < 5


def test_a_single_phase_is_all() -> None:
    found = estimate(make_sample({"talc": 100}, ("air_dried", "glycolated"), seed=5))
    row = next(p for p in found.phases if p.phase == "talc")
    assert row.weight_percent == pytest.approx(100.0)
    assert row.low95 is not None
    assert 90 < row.low95 <= 100


def test_nothing_to_fit_gives_no_numbers() -> None:
    found = estimate(make_sample({"quartz": 70, "calcite": 30}, ("air_dried",), seed=9))
    assert all(p.weight_percent is None for p in found.phases)
    assert found.basis == "sheet silicates of the oriented mount"


def test_fit_is_repeatable() -> None:
    sample = make_sample({"muscovite": 60, "kaolinite": 40}, ("air_dried",), seed=13)
    assert estimate(sample) == estimate(sample)


@pytest.mark.parametrize("phase", ["muscovite", "kaolinite", "chlorite", "smectite"])
def test_single_phases_come_out_as_nearly_all(phase: str) -> None:
    found = estimate(make_sample({phase: 100}, ("air_dried", "glycolated"), seed=5))
    row = next(p for p in found.phases if p.phase == phase)
    assert row.weight_percent is not None
    assert row.weight_percent >= 97.0


def test_estimate_goes_on_from_the_comparison_that_identify_made(monkeypatch: pytest.MonkeyPatch) -> None:
    sample = make_sample({"illite": 60, "kaolinite": 40}, ("air_dried",), seed=21)
    findings = identify(sample)
    at_once = estimate(sample)
    monkeypatch.setattr("xrdmica.identify.decide.examine", lambda *_: pytest.fail("the comparison was made again"))
    assert estimate(sample, findings) == at_once


def test_findings_of_an_earlier_session_are_taken_too() -> None:
    sample = make_sample({"illite": 60, "kaolinite": 40}, ("air_dried",), seed=21)
    kept = type(identify(sample)).model_validate_json(identify(sample).model_dump_json())
    rows = {p.phase: p.weight_percent for p in estimate(sample, kept).phases}
    assert rows["kaolinite"] == pytest.approx({p.phase: p.weight_percent for p in estimate(sample).phases}["kaolinite"], abs=2)
