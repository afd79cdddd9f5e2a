"""The verdict on swelling: a constructed case for every answer it can give."""

from __future__ import annotations

import numpy as np

from tests.simulated import make_sample
from xrdmica.interpret.swelling import screen_swelling
from xrdmica.results import Findings, GroupWeight, PhaseFinding, Proportions
from xrdmica.scans.scan import Sample, Scan
from xrdmica.scans.treatment import Treatment


def scan(treatment: str, low: float = 3.0, mount: str = "oriented") -> Scan:
    angles = np.arange(low, 35, 0.05)
    return Scan.from_arrays(angles, np.full(angles.size, 100.0), treatment=Treatment.parse(treatment), mount=mount)


def found(*phases: tuple[str, str, str], expandable: GroupWeight | None = None) -> tuple[Findings, Proportions]:
    listed = tuple(PhaseFinding(phase=p, name=p, group=g, status=s, reason="made up") for p, g, s in phases)  # type: ignore[arg-type]
    groups = (expandable,) if expandable else ()
    return (
        Findings(sample="s", phases=listed),
        Proportions(sample="s", basis="sheet silicates of the oriented mount", phases=(), groups=groups),
    )


def test_yes_with_amount() -> None:
    total = GroupWeight(group="expandable layers", status="present", weight_percent=30.0, low95=20.0, high95=40.0)
    verdict = screen_swelling(Sample("s", (scan("EG"),)), *found(("smectite", "smectite", "present"), expandable=total))
    assert verdict.verdict == "yes"
    assert (verdict.expandable_percent, verdict.low95, verdict.high95) == (30.0, 20.0, 40.0)


def test_no_after_glycol() -> None:
    verdict = screen_swelling(Sample("s", (scan("AD"), scan("EG"))), *found(("talc", "talc group", "present")))
    assert verdict.verdict == "no"
    assert "after glycol" in verdict.reason


def test_no_from_an_air_dried_mount_that_reaches_low_angles() -> None:
    verdict = screen_swelling(Sample("s", (scan("AD"),)), *found(("talc", "talc group", "present")))
    assert verdict.verdict == "no"
    assert "would make that certain" in verdict.reason


def test_cannot_tell_when_low_angles_are_not_reached() -> None:
    verdict = screen_swelling(Sample("s", (scan("AD", low=8.0),)), *found(("talc", "talc group", "present")))
    assert verdict.verdict == "cannot tell"
    assert "glycol" in verdict.measure_next


def test_cannot_tell_from_a_powder() -> None:
    verdict = screen_swelling(Sample("s", (scan("none", mount="random"),)), *found(("quartz", "companion", "present")))
    assert verdict.verdict == "cannot tell"


def test_cannot_tell_when_a_swelling_phase_is_possible() -> None:
    verdict = screen_swelling(Sample("s", (scan("AD"),)), *found(("smectite", "smectite", "possible")))
    assert verdict.verdict == "cannot tell"
    assert "smectite cannot be ruled out" in verdict.reason
    assert verdict.expandable_percent is None


def test_cannot_tell_when_nothing_was_recognised() -> None:
    verdict = screen_swelling(Sample("s", (scan("EG"),)), *found(("smectite", "smectite", "not_detected")))
    assert verdict.verdict == "cannot tell"


def test_vermiculite_is_not_called_swelling() -> None:
    sample = make_sample({"vermiculite": 100}, ("air_dried", "glycolated"), seed=3)
    verdict = screen_swelling(sample, *found(("vermiculite", "vermiculite", "present")))
    assert verdict.verdict == "no"
