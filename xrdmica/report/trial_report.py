"""What a trial tells: recovery, bias, coverage of the intervals, and a picture of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["PhaseRecovery", "Recovery", "TrialOutcome", "TrialPhase", "recovery", "trial_figure"]

_ONE_SIGMA = 1.0
_CONFIDENT = ("present", "trace")


@dataclass(frozen=True)
class TrialPhase:
    """One phase of one simulated sample, as it was and as it was found.

    Attributes
    ----------
    phase : str
    true_percent : float
        Dry weight percent of the sheet silicates; 0 when it was not in the sample, nan for companions that were.
    status : str
    weight_percent, low95, high95, standard_error : float or None
        As reported.
    """

    phase: str
    true_percent: float
    status: str
    weight_percent: float | None
    low95: float | None
    high95: float | None
    standard_error: float | None


@dataclass(frozen=True)
class TrialOutcome:
    """One simulated sample.

    Attributes
    ----------
    number : int
    phases : tuple of TrialPhase
        Every phase that was in it or was not ruled out.
    treatments : tuple of str
        Scans it had.
    reduced_chi_square : float or None
    seconds : float
        Processor time of the analysis.
    """

    number: int
    phases: tuple[TrialPhase, ...]
    treatments: tuple[str, ...]
    reduced_chi_square: float | None
    seconds: float


@dataclass(frozen=True)
class PhaseRecovery:
    """How one phase came out over a trial.

    Attributes
    ----------
    phase : str
    times : int
        Samples that held it.
    called : int
        Times it was there and called present or trace.
    possible : int
        Times it was there and called possible.
    wrong : int
        Times it was not there and called present or trace.
    mean_error, bias : float or None
        Mean absolute and mean signed error [wt %], missed ones as zero weight; None for companions.
    cover68, cover95 : float or None
        Share of intervals that held the truth.
    """

    phase: str
    times: int
    called: int
    possible: int
    wrong: int
    mean_error: float | None
    bias: float | None
    cover68: float | None
    cover95: float | None


@dataclass(frozen=True)
class Recovery:
    """A trial in numbers.

    Attributes
    ----------
    samples : int
    phases : tuple of PhaseRecovery
    precision : float or None
        Share of calls present or trace that were right.
    recall : float or None
        Share of phases there that were called present or trace.
    median_error_per_phase : float or None
        Median over samples of the mean absolute error per phase [wt %].
    median_error_sum : float or None
        Median over samples of the sum of absolute errors [wt %].
    cover68, cover95 : float or None
    median_seconds : float
    """

    samples: int
    phases: tuple[PhaseRecovery, ...]
    precision: float | None
    recall: float | None
    median_error_per_phase: float | None
    median_error_sum: float | None
    cover68: float | None
    cover95: float | None
    median_seconds: float


def _there(found: TrialPhase) -> bool:
    return np.isnan(found.true_percent) or found.true_percent > 0


def _error(found: TrialPhase) -> float:
    return (found.weight_percent or 0.0) - found.true_percent


def _weighed(rows: Sequence[TrialPhase]) -> list[TrialPhase]:
    return [r for r in rows if _there(r) and not np.isnan(r.true_percent)]


def _coverage(rows: Sequence[TrialPhase]) -> tuple[float | None, float | None]:
    """Share of intervals that hold the truth, for one standard error and for 95 %."""
    known = [r for r in _weighed(rows) if r.weight_percent is not None and r.low95 is not None and r.high95 is not None]
    if not known:
        return None, None
    inside68 = [abs(_error(r)) <= _ONE_SIGMA * (r.standard_error or 0.0) + 1e-9 for r in known]
    inside95 = [(r.low95 or 0.0) <= r.true_percent <= (r.high95 or 0.0) for r in known]
    return float(np.mean(inside68)), float(np.mean(inside95))


def _mean(values: Sequence[float]) -> float | None:
    return float(np.mean(values)) if len(values) else None


def _ratio(part: int, whole: int) -> float | None:
    return part / whole if whole else None


def recovery(outcomes: Sequence[TrialOutcome]) -> Recovery:
    """Sum up a trial.

    Parameters
    ----------
    outcomes : sequence of TrialOutcome

    Returns
    -------
    Recovery
    """
    rows = [found for outcome in outcomes for found in outcome.phases]
    phases = []
    for name in sorted({r.phase for r in rows}):
        mine = [r for r in rows if r.phase == name]
        held = [r for r in mine if _there(r)]
        cover68, cover95 = _coverage(mine)
        errors = [_error(r) for r in _weighed(mine)]
        phases.append(
            PhaseRecovery(
                phase=name,
                times=len(held),
                called=sum(r.status in _CONFIDENT for r in held),
                possible=sum(r.status == "possible" for r in held),
                wrong=sum(r.status in _CONFIDENT for r in mine if not _there(r)),
                mean_error=_mean([abs(e) for e in errors]),
                bias=_mean(errors),
                cover68=cover68,
                cover95=cover95,
            )
        )
    called = [r for r in rows if r.status in _CONFIDENT]
    per_sample = [[abs(_error(r)) for r in _weighed(o.phases)] for o in outcomes]
    per_sample = [errors for errors in per_sample if errors]
    cover68, cover95 = _coverage(rows)
    return Recovery(
        samples=len(outcomes),
        phases=tuple(phases),
        precision=_ratio(sum(_there(r) for r in called), len(called)),
        recall=_ratio(sum(_there(r) for r in called), sum(_there(r) for r in rows)),
        median_error_per_phase=float(np.median([np.mean(e) for e in per_sample])) if per_sample else None,
        median_error_sum=float(np.median([np.sum(e) for e in per_sample])) if per_sample else None,
        cover68=cover68,
        cover95=cover95,
        median_seconds=float(np.median([o.seconds for o in outcomes])) if outcomes else 0.0,
    )


def trial_figure(outcomes: Sequence[TrialOutcome]) -> Figure:
    """Found against true weight with intervals, and how often a phase is named at a given weight.

    Parameters
    ----------
    outcomes : sequence of TrialOutcome

    Returns
    -------
    matplotlib.figure.Figure
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(11, 5.2), layout="constrained")
    FigureCanvasAgg(figure)
    left, right = figure.subplots(1, 2)
    rows = [found for outcome in outcomes for found in _weighed(outcome.phases)]
    names = sorted({r.phase for r in rows})
    colours = ("#1b4f8a", "#c8641e", "#5a8f3c", "#8a3a6a", "#3a8f8a", "#8f7a1e", "#5a4fb0", "#a02c2c", "#4a4a4a", "#2f7fb8")
    for place, name in enumerate(names):
        mine = [r for r in rows if r.phase == name and r.weight_percent is not None]
        if not mine:
            continue
        true = np.array([r.true_percent for r in mine])
        found = np.array([r.weight_percent or 0.0 for r in mine])
        low = np.array([r.low95 or 0.0 for r in mine])
        high = np.array([r.high95 or 0.0 for r in mine])
        reach = np.maximum(np.array([found - low, high - found]), 0)
        marker = "osD^vP*X"[place // len(colours) % 8]
        left.errorbar(
            true, found, yerr=reach, fmt=marker, ms=4, lw=0.6, alpha=0.75, color=colours[place % len(colours)], label=name
        )
    left.plot([0, 100], [0, 100], color="0.4", lw=0.8, ls="--")
    left.set(xlabel="true weight (%)", ylabel="found weight with 95 % interval (%)", xlim=(0, 100), ylim=(0, 100))
    left.legend(fontsize=7, ncols=2, loc="upper left")
    edges = np.array([0, 2, 5, 10, 20, 30, 50, 100])
    true = np.array([r.true_percent for r in rows])
    for status, style, label in ((_CONFIDENT, "-o", "present or trace"), ((*_CONFIDENT, "possible"), "--s", "or possible")):
        said = np.array([r.status in status for r in rows], dtype=float)
        place_of = np.digitize(true, edges) - 1
        shown = [k for k in range(edges.size - 1) if (place_of == k).sum() > 0]
        right.plot([(edges[k] + edges[k + 1]) / 2 for k in shown], [100 * said[place_of == k].mean() for k in shown], style,
                   color="#1b4f8a" if label.startswith("present") else "#c8641e", label=label)  # fmt: skip
    right.set(xlabel="true weight (%)", ylabel="named (% of samples that hold the phase)", ylim=(0, 102), xlim=(0, 100))
    right.legend()
    figure.suptitle(f"trial of {len(outcomes)} simulated samples", fontsize=11)
    return figure
