"""What is no mineral is not called one, and poor scans lead to open answers rather than wrong ones."""

from __future__ import annotations

import numpy as np
import pytest

from tests.simulated import FULL, make_sample
from xrdmica.crystals.library import load_phase
from xrdmica.identify.decide import identify
from xrdmica.results import Findings
from xrdmica.scans.scan import Sample, Scan
from xrdmica.scans.treatment import Treatment

ANGLES = np.arange(3, 35, 0.02)


def sheets(findings: Findings, *status: str) -> set[str]:
    return {f.phase for f in findings.phases if f.status in status and load_phase(f.phase).is_sheet_silicate}


def scan_of(level: np.ndarray, text: str, seed: int) -> Scan:
    return Scan.from_arrays(ANGLES, np.random.default_rng(seed).poisson(level), treatment=Treatment.parse(text))


@pytest.mark.parametrize("centre", [5.6, 8.8, 12.3])
def test_a_broad_hump_of_window_or_holder_is_no_clay(centre: float) -> None:
    """A hump some degrees wide, the same after every treatment, near the first lines of smectite, mica and kaolinite."""
    level = 150 + 900 * np.exp(-(ANGLES - 3) / 1.2) + 250 * np.exp(-(((ANGLES - centre) / 1.6) ** 2))
    sample = Sample("hump", tuple(scan_of(level, text, k) for k, text in enumerate(("air_dried", "glycolated", "heated_550"))))
    assert not sheets(identify(sample), "present", "trace")


def test_glass_is_no_clay() -> None:
    level = 120 + 400 * np.exp(-(((ANGLES - 24) / 5) ** 2))
    sample = Sample("glass", tuple(scan_of(level, text, k) for k, text in enumerate(("air_dried", "glycolated"))))
    assert not sheets(identify(sample), "present", "trace", "possible")


def test_spikes_are_no_minerals() -> None:
    rng = np.random.default_rng(9)
    scans = []
    for k, text in enumerate(("air_dried", "glycolated")):
        counts = np.array(scan_of(np.full_like(ANGLES, 150.0), text, k).counts)
        counts[rng.integers(0, counts.size, 8)] += 4000
        scans.append(Scan.from_arrays(ANGLES, counts, treatment=Treatment.parse(text)))
    assert not sheets(identify(Sample("spikes", tuple(scans))), "present", "trace", "possible")


@pytest.mark.parametrize("radiation", ["Co", "Fe"])
def test_another_tube(radiation: str) -> None:
    sample = make_sample({"illite": 40, "kaolinite": 30, "chlorite": 30}, FULL, seed=15, radiation=radiation, high=42.0)
    assert sheets(identify(sample), "present", "trace") == {"illite", "kaolinite", "chlorite"}


def displaced(sample: Sample, degrees: float) -> Sample:
    """All scans moved as by a specimen that stands off the axis."""
    scans = tuple(
        Scan.from_arrays(
            s.two_theta + degrees * np.cos(np.radians(s.two_theta) / 2), s.counts, radiation=s.radiation, treatment=s.treatment
        )
        for s in sample.scans
    )
    return Sample(sample.name, scans)


@pytest.mark.parametrize("millimetres", [-0.3, 0.3])
def test_a_mount_displaced_by_a_third_of_a_millimetre(millimetres: float) -> None:
    sample = make_sample({"talc": 60, "chlorite": 40}, ("air_dried", "heated_550"), seed=8, displacement=0.0)
    # displacement s of a goniometer of radius R shifts by 2 s cos(theta) / R; 240 mm
    moved = displaced(sample, -float(np.degrees(2 * millimetres / 240.0)))
    assert sheets(identify(moved), "present", "trace") == {"talc", "chlorite"}


@pytest.mark.parametrize("spread", [3.0, 25.0])
def test_very_strong_and_very_poor_orientation(spread: float) -> None:
    sample = make_sample({"muscovite": 40, "kaolinite": 60}, ("air_dried", "heated_550"), seed=14, spread=spread)
    findings = identify(sample)
    assert sheets(findings, "present", "trace") <= {"muscovite", "kaolinite"}
    assert {"kaolinite"} <= sheets(findings, "present", "trace", "possible")


def test_a_few_hundred_counts() -> None:
    sample = make_sample({"illite": 50, "kaolinite": 50}, ("air_dried", "glycolated", "heated_550"), seed=5, peak_counts=250.0)
    findings = identify(sample)
    assert sheets(findings, "present", "trace") <= {"illite", "kaolinite"}
    assert "kaolinite" in sheets(findings, "present", "trace", "possible")
