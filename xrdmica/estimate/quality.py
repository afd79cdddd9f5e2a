"""What a reader must know about a fit, in words: where it fails, what drives each phase, what the mounts do not share."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import load_phase
from xrdmica.matching.linear import project_vector
from xrdmica.matching.model import knob_derivative
from xrdmica.matching.solve import Fitted
from xrdmica.results import Findings, FitWarning

__all__ = ["fit_warnings"]

FloatArray = NDArray[np.float64]
_WINDOW = 1.0  # degree: regions that are looked at one by one
_FAR = 5.0  # times the mean square residual of the sample
_SIGNIFICANT = 4.0  # mean square residual in standard errors that no chance makes over a window
_MOST = 4
_TURN = 0.35  # logarithm of the ratio of orientation spreads
_STRANGE = 0.03
_HUMP = 0.06  # of the intensity of all lines
_HUMP_D = (5.6, 2.9)  # angstrom, where glass and other disordered silicates scatter (common practice)
_WEAK = 0.10  # share of the calculated intensity of a scan


def fit_warnings(fitted: Fitted, findings: Findings, labels: Sequence[str], strange: float) -> tuple[FitWarning, ...]:
    """Everything about a fit that a reader must know.

    Parameters
    ----------
    fitted : Fitted
    findings : Findings
    labels : sequence of str, length k
    strange : float
        Share of the line intensity that no phase takes.

    Returns
    -------
    tuple of FitWarning
        Warnings first, then the region that drives each phase.
    """
    residuals = _residuals(fitted)
    out = [
        *_orientation(fitted, residuals, labels), *_humps(fitted, labels), *_strangers(strange), *_single_lines(findings),
        *_regions(fitted, residuals, labels), *_drivers(fitted, labels),
    ]  # fmt: skip
    if not fitted.converged:
        out.insert(0, FitWarning(kind="convergence", text=f"the fit {fitted.message}"))
    return tuple(out)


def _residuals(fitted: Fitted) -> list[FloatArray]:
    """Weighted residual of every scan, freed of the background; each (n_k,)."""
    evaluation = fitted.evaluation
    return [
        project_vector(
            item.scan.counts - scale * (columns @ evaluation.amounts), item.weight, item.basis
        )
        for item, columns, scale in zip(fitted.model.prepared, evaluation.columns, evaluation.scales, strict=True)
    ]  # fmt: skip


def _orientation(fitted: Fitted, residuals: Sequence[FloatArray], labels: Sequence[str]) -> list[FitWarning]:
    """Mounts whose plates lie differently from what the common orientation spread says."""
    places = [n for n, knob in enumerate(fitted.model.knobs) if knob.kind == "spread"]
    if not places:
        return []
    out = []
    noise = np.sqrt(max(1.0, fitted.reduced_chi_square))
    for k, slope in knob_derivative(fitted.model, fitted.evaluation, places[0]).items():
        item = fitted.model.prepared[k]
        own = project_vector(slope, item.weight, item.basis)
        scale = project_vector(fitted.evaluation.columns[k] @ fitted.evaluation.amounts, item.weight, item.basis)
        size = float(scale @ scale)
        if size <= 0:
            continue
        # the scale of the scan takes up what is the same for all angles
        own = own - scale * float(scale @ own) / size
        power = float(own @ own)
        if power <= 0:
            continue
        step = float(own @ residuals[k]) / power
        if abs(step) > _TURN and abs(step) * np.sqrt(power) > 3 * noise:
            word = "worse" if step > 0 else "better"
            text = (
                f"{labels[k]}: plates lie {word} here than in the other mounts (spread about {np.exp(step):.1f} times): weights "
                "lean on the other mounts; prepare it again"
            )
            out.append(FitWarning(kind="orientation", scan=labels[k], text=text, value=round(float(np.exp(step)), 2)))
    return out


def _humps(fitted: Fitted, labels: Sequence[str]) -> list[FitWarning]:
    """A broad hump of the background where disordered silicates scatter."""
    out = []
    for k, item in enumerate(fitted.model.prepared):
        tube = item.scan.radiation
        low, high = (float(tube.two_theta(d)) for d in _HUMP_D)
        angle = item.scan.two_theta
        inside = (angle >= low) & (angle <= high)
        if inside.sum() < 30 or angle[-1] < high - 1 or angle[0] > low + 1:
            continue
        x, y = angle[inside], item.background[inside]
        line = np.interp(x, [x[0], x[-1]], [y[:5].mean(), y[-5:].mean()])
        hump = float(np.maximum(y - line, 0.0).sum())
        lines = float(fitted.evaluation.scales[k] * (fitted.evaluation.columns[k] @ fitted.evaluation.amounts).sum())
        if lines > 0 and hump > _HUMP * lines and hump > 6 * float(np.sqrt(np.maximum(y, 1.0).sum())):
            part = 100 * hump / (hump + lines)
            text = f"{labels[k]}: a broad hump holds {part:.0f} % of the intensity: glass, gels or organic matter"
            out.append(FitWarning(kind="amorphous hump", scan=labels[k], text=text, value=round(part, 1)))
    return out


def _strangers(strange: float) -> list[FitWarning]:
    if strange <= _STRANGE:
        return []
    text = f"unassigned lines take {100 * strange:.0f} % of the line intensity: what they belong to is not in the 100 %"
    return [FitWarning(kind="unassigned", text=text, value=round(100 * strange, 1))]


def _single_lines(findings: Findings) -> list[FitWarning]:
    """Phases that rest on one line of their own."""
    out = []
    for finding in findings.of_status("present", "trace", "possible"):
        own = {e.order if e.order is not None else e.d_expected for e in finding.evidence if e.kind == "line" and e.weight > 0}
        if len(own) == 1 and load_phase(finding.phase).is_sheet_silicate:
            text = f"{finding.name} is estimated from one line of its own"
            out.append(FitWarning(kind="weak line", phase=finding.phase, text=text))
    return out


def _windows(two_theta: FloatArray) -> list[tuple[float, float, NDArray[np.bool_]]]:
    edges = np.arange(two_theta[0], two_theta[-1], _WINDOW)
    return [(float(a), float(a + _WINDOW), (two_theta >= a) & (two_theta < a + _WINDOW)) for a in edges]


def _regions(fitted: Fitted, residuals: Sequence[FloatArray], labels: Sequence[str]) -> list[FitWarning]:
    """Regions in which the calculated scan is off by more than the noise of the whole fit allows."""
    usual = max(1.0, fitted.reduced_chi_square)
    found: list[tuple[float, FitWarning]] = []
    for k, item in enumerate(fitted.model.prepared):
        parts = fitted.evaluation.columns[k] * fitted.evaluation.amounts * fitted.evaluation.scales[k]
        for low, high, inside in _windows(item.scan.two_theta):
            count = int(inside.sum())
            if count < 10:
                continue
            mean = float((residuals[k][inside] ** 2).mean())
            # the mean of n squared standard normal numbers scatters by sqrt(2/n)
            if mean < _FAR * usual or (mean / usual - 1) < _SIGNIFICANT * np.sqrt(2 / count):
                continue
            share = parts[inside].sum(axis=0)
            lead = load_phase(fitted.model.candidates[int(share.argmax())].phase).name if share.max() > 0 else "no phase"
            side = "more" if float((residuals[k][inside] * item.weight[inside]).sum()) > 0 else "less"
            text = (
                f"{labels[k]}, {low:.1f} to {high:.1f} degrees: {side} is measured than calculated "
                f"(mean square residual {mean:.0f}); {lead} leads there"
            )
            found.append((mean, FitWarning(kind="residual", scan=labels[k], text=text, value=round(mean, 1))))
    return [warning for _, warning in sorted(found, key=lambda pair: -pair[0])[:_MOST]]


def _drivers(fitted: Fitted, labels: Sequence[str]) -> list[FitWarning]:
    """For each phase the region that determines its amount most."""
    out = []
    for j, candidate in enumerate(fitted.model.candidates):
        if fitted.evaluation.amounts[j] <= 0:
            continue
        best: tuple[float, str, float, float] | None = None
        total = 0.0
        for k, item in enumerate(fitted.model.prepared):
            others = [i for i in np.flatnonzero(fitted.evaluation.amounts > 0) if i != j]
            column = fitted.evaluation.columns[k][:, j] * item.weight
            if others:
                # what other phases could take up determines nothing
                rest = fitted.evaluation.columns[k][:, others] * item.weight[:, None]
                column = column - rest @ np.linalg.lstsq(rest, column, rcond=1e-8)[0]
            power = (column * fitted.evaluation.scales[k]) ** 2
            total += float(power.sum())
            for low, high, inside in _windows(item.scan.two_theta):
                value = float(power[inside].sum())
                if best is None or value > best[0]:
                    best = (value, labels[k], low, high)
        if best is not None and total > 0:
            name = load_phase(candidate.phase).name
            part = 100 * best[0] / total
            text = f"{name} is determined most by {best[1]}, {best[2]:.1f} to {best[3]:.1f} degrees ({part:.0f} %)"
            out.append(FitWarning(kind="driver", scan=best[1], phase=candidate.phase, text=text, value=round(part, 1)))
    return out
