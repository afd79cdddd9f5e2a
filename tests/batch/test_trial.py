"""Trials on simulated samples: repeatable, resumable, and summed up right."""

from __future__ import annotations

from pathlib import Path

import pytest

from xrdmica.batch.trial import TrialSpecification, load_specification, run_trial, trial_sample
from xrdmica.errors import XrdmicaError
from xrdmica.report.trial_report import TrialOutcome, TrialPhase, recovery, trial_figure

SMALL = TrialSpecification(
    phases={"kaolinite": (20, 60), "illite": (20, 60)}, phases_per_sample=(2, 2), treatments=("air_dried", "glycolated")
)


def row(phase: str, true: float, status: str, found: float | None, error: float = 2.0) -> TrialPhase:
    low = None if found is None else found - 2 * error
    high = None if found is None else found + 2 * error
    return TrialPhase(phase, true, status, found, low, high, error if found is not None else None)


def test_a_sample_is_fixed_by_seed_and_number() -> None:
    one, weights = trial_sample(SMALL, 3, 0)
    two, again = trial_sample(SMALL, 3, 0)
    other, _ = trial_sample(SMALL, 3, 1)
    assert weights == again
    assert (one.scans[0].counts == two.scans[0].counts).all()
    assert (one.scans[0].counts != other.scans[0].counts).any()


def test_missing_scans_are_dropped_but_never_the_first() -> None:
    sample, _ = trial_sample(SMALL.model_copy(update={"missing": 1.0}), 3, 0)
    assert [scan.treatment.name for scan in sample.scans] == ["air_dried"]


def test_a_trial_goes_on_where_it_was(tmp_path: Path) -> None:
    first = run_trial(SMALL, tmp_path, samples=1, seed=5)
    told: list[tuple[int, int]] = []
    both = run_trial(SMALL, tmp_path, samples=2, seed=5, on_progress=lambda done, total: told.append((done, total)))
    assert both[0] == first[0]
    assert told == [(2, 2)]
    assert {p.phase for p in both[1].phases if p.true_percent > 0} == {"kaolinite", "illite"}


def test_summary_of_made_up_outcomes() -> None:
    outcomes = [
        TrialOutcome(0, (row("illite", 40, "present", 43), row("kaolinite", 60, "present", 57)), ("air_dried",), 1.0, 0.5),
        TrialOutcome(
            1,
            (row("illite", 30, "not_detected", None), row("kaolinite", 70, "present", 100, 1.0), row("talc", 0, "present", 5)),
            ("air_dried",), 1.0, 1.5,
        ),
    ]  # fmt: skip
    found = recovery(outcomes)
    assert found.precision == pytest.approx(3 / 4)
    assert found.recall == pytest.approx(3 / 4)
    assert found.median_error_sum == pytest.approx((6 + 60) / 2)
    assert found.cover95 == pytest.approx(2 / 3)
    assert found.cover68 == pytest.approx(0.0)
    talc = next(p for p in found.phases if p.phase == "talc")
    assert (talc.times, talc.wrong) == (0, 1)
    figure = trial_figure(outcomes)
    assert len(figure.axes) == 2
    assert figure.axes[0].get_ylabel() == "found weight with 95 % interval (%)"


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("phases = 3", "phases"),
        ("unknown = 1", "unknown"),
        ("[phases]\nnosuch = [1, 2]", "nosuch"),
        ("treatments = ['wet']", "wet"),
        ("phases_per_sample = [3, 2]", "fewest"),
        ("missing = 2", "missing"),
        ("= =", "cannot be read"),
    ],
)
def test_wrong_specifications_are_refused(tmp_path: Path, text: str, said: str) -> None:
    file = tmp_path / "trial.toml"
    file.write_text(text)
    with pytest.raises(XrdmicaError, match=said):
        load_specification(file)
