"""Lines that lie under those of other phases: quartz under mica, mica beside mica, and what may be concluded from them.

Quartz: d(100) 4.257 and d(101) 3.343 angstrom, relative heights near 20 and 100 in powders (handbook, from memory); the
second lies under the third order of every mica near 3.33, so that in a clay mount the first one decides (common practice).
"""

from __future__ import annotations

import pytest

from tests.simulated import FULL, make_sample
from xrdmica.crystals.library import all_phases, load_phase
from xrdmica.diffraction.columns import ExpectedLine
from xrdmica.diffraction.optics import Instrument
from xrdmica.identify.align import align
from xrdmica.identify.candidates import hopefuls
from xrdmica.identify.decide import identify
from xrdmica.identify.evidence import LineReading, _as_evidence
from xrdmica.identify.strangers import with_strangers
from xrdmica.matching.prepare import prepare

QUARTZ_AND_MICAS = {"biotite": 45, "muscovite": 15, "quartz": 30, "talc": 10}


def test_second_line_of_quartz_is_not_taken_for_one_that_nothing_can_own() -> None:
    prepared = prepare(make_sample(QUARTZ_AND_MICAS, FULL, seed=5), Instrument())
    assert all(any(abs(p.d_spacing - 4.257) < 0.03 for p in item.peaks) for item in prepared)
    considered = hopefuls(tuple(all_phases()), prepared)
    for item in with_strangers(considered, align(considered, prepared)):
        at = int(abs(item.scan.two_theta - 20.88).argmin())
        nearby = abs(item.strange[at - 5 : at + 6]).max() if item.strange.shape[1] else 0.0
        assert nearby < 0.2


def test_a_strong_line_is_not_explained_by_the_weak_line_of_a_companion() -> None:
    # gypsum alone gives 7.6, 4.28 and 3.06; without quartz's strongest line its second cannot own the 4.28
    findings = identify(make_sample({"kaolinite": 70, "gypsum": 30}, FULL[:1], seed=5))
    quartz = findings.get("quartz")
    assert quartz is None or quartz.status == "not_detected"


@pytest.mark.parametrize("weights", [QUARTZ_AND_MICAS, {"biotite": 40, "chlorite": 45, "quartz": 15}])
def test_quartz_under_mica_is_present(weights: dict[str, float]) -> None:
    findings = identify(make_sample(weights, FULL, seed=5))
    quartz = findings.get("quartz")
    assert quartz is not None
    assert quartz.status == "present"
    assert not any(abs(line.d_spacing - 4.257) < 0.02 for line in findings.unassigned)


def test_muscovite_beside_much_biotite_is_kept_for_its_second_order() -> None:
    # I(002)/I(001) is near zero for iron micas and near a half for muscovite (handbook, from memory)
    findings = identify(make_sample({"biotite": 60, "muscovite": 20, "talc": 20}, FULL, seed=5))
    muscovite = findings.get("muscovite")
    assert muscovite is not None
    assert muscovite.status != "not_detected"


@pytest.mark.parametrize("iron", [1.2, 1.5, 2.0])
def test_biotite_of_any_iron_content_needs_no_white_mica(iron: float) -> None:
    sample = make_sample({"biotite": 80, "talc": 20}, FULL, seed=5, exchanges={"biotite": (("fe", iron),)})
    kept = {f.phase for f in identify(sample).of_status("present", "trace")}
    assert {name for name in kept if load_phase(name).group == "true mica"} <= {"biotite", "annite", "phlogopite"}


@pytest.mark.parametrize(("own", "covered"), [(0.12, True), (0.9, False)])
def test_the_misfit_of_a_line_is_held_against_the_phase_it_belongs_to(own: float, covered: bool) -> None:
    # three times as much is lacking at this place as the phase should give: only its own line can lack what it gives
    peak = max(prepare(make_sample({"talc": 100}, FULL[:1]), Instrument())[0].peaks, key=lambda one: one.height)
    line = ExpectedLine(1, 9.35, peak.two_theta, 1.0)
    reading = LineReading(0, 1, line, 30.0, own, -2.0, peak, 9.35)
    assert reading.covered is covered
    assert reading.missing is not covered
    assert not reading.found
    evidence = _as_evidence(reading, ["air_dried"], "talc")
    assert ("cannot be judged" in evidence.text) is covered
    assert (evidence.weight == 0) is covered
    assert evidence.kind == ("overlap" if covered else "missing line")
