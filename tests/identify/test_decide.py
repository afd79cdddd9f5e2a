"""Identification of simulated mixtures: what is there is found, what cannot be told is said, nothing else is claimed."""

from __future__ import annotations

import numpy as np
import pytest

from tests.simulated import FULL, make_sample
from xrdmica.crystals.library import load_phase
from xrdmica.identify.decide import identify
from xrdmica.results import Findings
from xrdmica.scans.scan import Sample, Scan
from xrdmica.scans.treatment import Treatment


def sheet_silicates(findings: Findings, *status: str) -> set[str]:
    """Ids of the sheet silicates with one of the statuses."""
    return {f.phase for f in findings.phases if f.status in status and load_phase(f.phase).is_sheet_silicate}


@pytest.mark.parametrize(
    "weights",
    [
        {"illite": 40, "smectite": 35, "kaolinite": 25},
        {"muscovite": 35, "chlorite": 40, "kaolinite": 25},
        {"biotite": 35, "vermiculite": 35, "chlorite": 30},
        {"talc": 60, "chlorite": 40},
        {"pyrophyllite": 50, "muscovite": 50},
    ],
)
def test_mixtures_with_all_treatments(weights: dict[str, float]) -> None:
    findings = identify(make_sample(weights, FULL, seed=11))
    assert sheet_silicates(findings, "present", "trace") == set(weights)


def test_smectite_without_glycol_or_heating_is_only_possible() -> None:
    findings = identify(make_sample({"illite": 50, "smectite": 50}, ("air_dried",), seed=3))
    assert "smectite" in sheet_silicates(findings, "possible")
    assert any("glycol" in text for text in findings.measure_next)


def test_quartz_and_calcite_alone_give_no_sheet_silicate() -> None:
    findings = identify(make_sample({"quartz": 60, "calcite": 40}, ("air_dried", "glycolated"), seed=4))
    assert not sheet_silicates(findings, "present", "trace", "possible")
    assert {"quartz", "calcite"} <= {f.phase for f in findings.phases if f.status == "present"}


@pytest.mark.parametrize("counts", [30.0, 300.0, 5000.0])
def test_pure_background_gives_nothing(counts: float) -> None:
    rng = np.random.default_rng(int(counts))
    angles = np.arange(3, 35, 0.02)
    scans = []
    for text in ("air_dried", "glycolated"):
        level = counts * (1 + 5 * np.exp(-(angles - 3) / 1.5))
        scans.append(Scan.from_arrays(angles, rng.poisson(level), treatment=Treatment.parse(text)))
    findings = identify(Sample("blank", tuple(scans)))
    assert not sheet_silicates(findings, "present", "trace", "possible")


def test_a_spike_is_no_mineral() -> None:
    sample = make_sample({"kaolinite": 100}, ("air_dried",), seed=6)
    counts = sample.scans[0].counts.copy()
    counts[np.searchsorted(sample.scans[0].two_theta, 8.85)] += 20000
    spiked = Scan.from_arrays(sample.scans[0].two_theta, counts, treatment=Treatment("air_dried"))
    findings = identify(Sample("spike", (spiked,)))
    assert sheet_silicates(findings, "present", "trace") <= {"kaolinite"}


def test_a_displaced_mount_is_recognised() -> None:
    sample = make_sample({"muscovite": 50, "chlorite": 50}, ("air_dried", "heated_550"), seed=8, displacement=0.25)
    findings = identify(sample)
    assert sheet_silicates(findings, "present", "trace") == {"muscovite", "chlorite"}


def test_every_decision_has_a_reason_and_every_kept_phase_has_evidence() -> None:
    findings = identify(make_sample({"illite": 60, "kaolinite": 40}, FULL, seed=12))
    assert all(f.reason for f in findings.phases)
    for finding in findings.of_status("present", "trace"):
        assert any(e.kind == "line" and e.weight > 0 for e in finding.evidence)
    kaolinite = findings.get("kaolinite")
    assert kaolinite is not None
    assert any("gone after" in e.text for e in kaolinite.evidence)


def test_assumed_radiation_is_said() -> None:
    scan = make_sample({"kaolinite": 100}, ("air_dried",), seed=2).scans[0]
    assumed = Scan(scan.two_theta, scan.counts, scan.sigma, scan.radiation, "assumed", treatment=scan.treatment)
    assert any("was assumed" in note for note in identify(Sample("s", (assumed,))).notes)
