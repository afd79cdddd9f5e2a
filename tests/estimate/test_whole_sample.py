"""Added standards, textured powders, mounts fitted together, bootstrap intervals, and warnings in words."""

from __future__ import annotations

from dataclasses import replace
from types import MappingProxyType

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.simulated import make_sample
from xrdmica.diffraction.columns import View, component_column
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.simulate import usual_component
from xrdmica.errors import XrdmicaError
from xrdmica.estimate.bootstrap import Bootstrap, shifted_limits
from xrdmica.estimate.proportions import estimate, estimate_examined
from xrdmica.estimate.rows import interval
from xrdmica.estimate.shares import Shares
from xrdmica.estimate.standard import added_standard, whole_sample
from xrdmica.identify.decide import examine
from xrdmica.radiation import Radiation
from xrdmica.results import Proportions
from xrdmica.scans.scan import Sample, Scan
from xrdmica.scans.treatment import Treatment


def spiked(sample: Sample, standard: str = "corundum", percent: str = "20") -> Sample:
    return replace(sample, details=MappingProxyType({"standard": standard, "standard_percent": percent}))


@pytest.fixture(scope="module")
def powder() -> Sample:
    """35 % kaolinite, 20 % muscovite, 15 % quartz and 30 % glass, with 20 % corundum added to the specimen."""
    crystals = {"kaolinite": 28, "muscovite": 16, "quartz": 12, "corundum": 20}
    return make_sample(crystals, ("none",), seed=1, mount="random", high=65.0, hump=(24.0, 6.0, 300.0))


def weights(found: Proportions) -> dict[str, tuple[float, float, float]]:
    return {
        p.phase: (p.weight_percent, p.low95 or 0.0, p.high95 or 100.0) for p in found.phases if p.weight_percent is not None
    }


def test_whole_sample_with_an_added_standard(powder: Sample) -> None:
    found = estimate(spiked(powder))
    assert found.basis == "whole sample"
    rows = weights(found)
    assert "corundum" not in rows
    for phase, truth in {"kaolinite": 35.0, "muscovite": 20.0, "quartz": 15.0, "unaccounted": 30.0}.items():
        assert rows[phase][1] <= truth <= rows[phase][2], phase
        assert rows[phase][0] == pytest.approx(truth, abs=4.0)
    assert sum(row[0] for row in rows.values()) == pytest.approx(100.0, abs=0.1)
    assert any("20 % corundum added" in note for note in found.notes)


def test_without_the_standard_it_is_the_crystalline_part(powder: Sample) -> None:
    found = estimate(powder)
    assert found.basis == "crystalline part"
    assert weights(found)["corundum"][0] == pytest.approx(100 * 20 / 76, abs=4.0)
    assert any(w.kind == "amorphous hump" for w in found.warnings)


def test_a_standard_that_is_not_there_is_told(powder: Sample) -> None:
    found = estimate(spiked(powder, "zincite"))
    assert found.basis == "crystalline part"
    assert any("zincite was not found" in note for note in found.notes)


@pytest.mark.parametrize(
    ("details", "words"),
    [
        ({"standard": "corundum"}, "standard_percent is missing"), ({"standard_percent": "20"}, "standard is missing"),
        ({"standard": "corundum", "standard_percent": "0"}, "standard_percent is 0"),
        ({"standard": "ruby", "standard_percent": "10"}, "'ruby' is not in the library"),
    ],
)  # fmt: skip
def test_standards_that_cannot_be_used(powder: Sample, details: dict[str, str], words: str) -> None:
    with pytest.raises(XrdmicaError, match=words):
        added_standard(replace(powder, details=MappingProxyType(details)))


@settings(max_examples=60, deadline=None)
@given(st.floats(0.02, 0.6), st.lists(st.floats(0.05, 1.0), min_size=2, max_size=5), st.floats(0.0, 0.8))
def test_the_arithmetic_of_the_standard(added: float, parts: list[float], glass: float) -> None:
    """Any mixture: unaccounted is (1 - x/y)/(1 - x) of the original sample (internal standard, any textbook)."""
    original = np.array(parts) / sum(parts) * (1 - glass)
    specimen = np.append(original * (1 - added), added)
    shares = specimen / specimen.sum()
    whole, _, rest, _ = whole_sample(
        Shares(tuple(range(shares.size)), shares, np.eye(shares.size) * 1e-6), np.eye(shares.size) * 1e-6, shares.size - 1, added
    )
    np.testing.assert_allclose(whole.weights, original, rtol=1e-9)
    assert rest == pytest.approx((1 - added / shares[-1]) / (1 - added), abs=1e-9)
    assert rest == pytest.approx(glass, abs=1e-9)


def test_texture_of_a_powder_is_found() -> None:
    """A powder whose plates lie flat, drawn with a March-Dollase ratio of 0.75."""
    angles, tube, rng = np.arange(5.0, 65.0, 0.02), Radiation.parse("Cu"), np.random.default_rng(4)
    view = View(make_grid(angles, tube, Instrument(fwhm=0.09)), angles, "random", march=0.75)
    total = np.zeros_like(angles)
    for phase, share in {"muscovite": 0.5, "quartz": 0.5}.items():
        component = usual_component(phase, Treatment("none"))
        assert component is not None
        total += share * component_column(component, view)
    counts = rng.poisson(100 + 6000 * total / total.max())
    scan = Scan.from_arrays(angles, counts, radiation="Cu", mount="random", treatment=Treatment("none"))
    found = estimate(Sample("textured", (scan,)))
    march = next(p for p in found.parameters if "March-Dollase" in p.name)
    assert march.value == pytest.approx(0.75, abs=0.06)
    assert weights(found)["quartz"][1] <= 50.0 <= weights(found)["quartz"][2]


def test_oriented_and_random_mounts_are_fitted_together() -> None:
    plates = {"kaolinite": 50, "muscovite": 30}
    oriented = make_sample({**plates, "quartz": 5}, ("air_dried", "heated_550"), seed=3)
    random = make_sample({**plates, "quartz": 20, "corundum": 20}, ("none",), seed=4, mount="random", high=65.0)
    found = estimate(spiked(Sample("both", (*oriented.scans, *random.scans)), percent=str(100 * 20 / 120)))
    assert found.basis == "whole sample"
    rows = weights(found)
    for phase, truth in {"kaolinite": 50.0, "muscovite": 30.0, "quartz": 20.0}.items():
        assert rows[phase][1] - 1.0 <= truth <= rows[phase][2] + 1.0, phase
    # quartz settles otherwise in the oriented mount and is free there
    assert rows["quartz"][0] == pytest.approx(20.0, abs=4.0)


def test_bootstrap_agrees_with_the_covariance() -> None:
    sample = make_sample({"talc": 60, "chlorite": 40}, ("air_dried", "glycolated"), seed=2, peak_counts=1500.0)
    examined = examine(sample)
    told: list[int] = []
    drawn = estimate_examined(examined, None, Bootstrap(20, 7, lambda done, total: told.append(done))).proportions
    plain = estimate_examined(examined).proportions
    again = estimate_examined(examined, None, Bootstrap(20, 7)).proportions
    assert told == list(range(1, 21))
    assert drawn == again
    for phase in ("talc", "chlorite"):
        one = next(p for p in drawn.phases if p.phase == phase)
        two = next(p for p in plain.phases if p.phase == phase)
        assert one.weight_percent == two.weight_percent
        assert one.standard_error == pytest.approx(two.standard_error, rel=0.35)
    assert any("20 bootstrap draws, seed 7" in note for note in drawn.notes)


def test_limits_of_skewed_draws_are_skewed() -> None:
    draws = np.random.default_rng(1).lognormal(np.log(0.1), 0.5, 4000)
    low, high = shifted_limits(0.1, draws, 0.0)
    assert high - 0.1 > 1.5 * (0.1 - low)
    wider = shifted_limits(0.1, draws, 0.05)
    assert wider[0] < low
    assert wider[1] > high


@settings(max_examples=100, deadline=None)
@given(st.floats(0, 1), st.floats(1e-4, 0.5))
def test_intervals_stay_inside_and_hold_their_value(value: float, error: float) -> None:
    low, high = interval(value, error)
    assert 0 <= low <= value <= high <= 1
    # where nothing is cut the interval is the usual one; where it is, the other side is a one-sided limit
    if low > 0 and high < 1:
        assert high - low == pytest.approx(2 * 1.959964 * error, rel=1e-6) or high - value == pytest.approx(1.644854 * error)


def test_warnings_are_in_words() -> None:
    good = estimate(make_sample({"illite": 50, "kaolinite": 50}, ("air_dried", "glycolated"), seed=21))
    drivers = [w for w in good.warnings if w.kind == "driver"]
    assert {w.phase for w in drivers} == {"illite", "kaolinite"}
    assert all("is determined most by" in w.text for w in drivers)
    assert not [w for w in good.warnings if w.kind in ("unassigned", "residual", "orientation")]


def test_a_mount_with_another_orientation_is_told() -> None:
    well = make_sample({"muscovite": 60, "chlorite": 40}, ("air_dried",), seed=6, spread=8.0)
    badly = make_sample({"muscovite": 60, "chlorite": 40}, ("glycolated",), seed=7, spread=24.0)
    found = estimate(Sample("uneven", (*well.scans, *badly.scans)))
    assert any(w.kind == "orientation" for w in found.warnings)


def test_lines_that_nobody_owns_are_told() -> None:
    sample = make_sample({"kaolinite": 100}, ("air_dried", "glycolated"), seed=6)
    scans = []
    for scan in sample.scans:
        extra = 4000 * np.exp(-4 * np.log(2) * ((scan.two_theta - 11.1) / 0.15) ** 2)
        scans.append(replace(scan, counts=scan.counts + np.round(extra), sigma=np.sqrt(scan.counts + extra)))
    found = estimate(Sample("stranger", tuple(scans)))
    warning = next(w for w in found.warnings if w.kind == "unassigned")
    assert "% of the line intensity" in warning.text


def test_a_region_that_is_not_explained_is_told() -> None:
    sample = make_sample({"kaolinite": 60, "muscovite": 40}, ("air_dried",), seed=6)
    scan = sample.scans[0]
    # the line of kaolinite twice as wide as any stack height allows beside a narrow one
    wrong = scan.counts + np.round(3000 * np.exp(-(((scan.two_theta - 12.36) / 0.8) ** 2)))
    found = estimate(Sample("bent", (replace(scan, counts=wrong, sigma=np.sqrt(np.maximum(wrong, 1))),)))
    assert any(w.kind in ("residual", "unassigned") for w in found.warnings)


def test_crystal_chemistry_comes_out() -> None:
    found = estimate(make_sample({"biotite": 60, "chlorite": 40}, ("air_dried", "glycolated"), seed=21))
    iron = next(p for p in found.parameters if p.name == "biotite: iron on octahedral sites")
    # the sample has 1.5 Fe of 3
    assert iron.value == pytest.approx(50.0, abs=8.0)
    assert iron.standard_error is not None
    mixed = estimate(make_sample({"illite_smectite": 100}, ("air_dried", "glycolated", "heated_550"), seed=21))
    layers = next(p for p in mixed.parameters if "illite layers" in p.name)
    assert layers.value == pytest.approx(100 * 0.4, abs=12.0) or 10 < layers.value < 60
    assert "R0" in layers.name
