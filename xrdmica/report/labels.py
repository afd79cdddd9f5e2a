"""Where the names of reflections go so that none covers another."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrdmica.results import Curve, Mark

__all__ = ["MarkLabel", "place_labels"]

_MOST = 26  # names per panel: more is not read
_LETTER, _LINE = 0.062, 0.125  # length per letter and height of a line of 7 point text [inch]
_ANGLE_WINDOW = 0.12  # a line is looked for this far around its calculated place [degree]


@dataclass(frozen=True)
class MarkLabel:
    """One upright name over a line.

    Attributes
    ----------
    phase, text : str
        Phase id, and what is written.
    two_theta : float
        Place of the line [degree].
    x : float
        Place of the name, moved aside where it was crowded [degree].
    peak_root, y_root : float
        Top of the line (of its own phase when it is buried) and foot of the name, square root of the intensity.
    """

    phase: str
    text: str
    two_theta: float
    x: float
    peak_root: float
    y_root: float


def _strength(mark: Mark, curve: Curve, angle: NDArray[np.float64], above: NDArray[np.float64]) -> float:
    """Height of the line over the background: of its phase where known, else of what was observed."""
    near = np.abs(angle - mark.two_theta) <= _ANGLE_WINDOW
    part = curve.contributions.get(mark.phase)
    values = np.array(part) if part is not None else above
    return float(values[near].max()) if near.any() else 0.0


def _same_line(mark: Mark, other: Mark) -> bool:
    """Whether two reflections of a phase cannot be seen apart."""
    return mark.phase == other.phase and abs(mark.two_theta - other.two_theta) < 2 * _ANGLE_WINDOW


def _text(mark: Mark, symbols: Mapping[str, str]) -> str:
    return f"{symbols.get(mark.phase, mark.phase)} {mark.label}"


def place_labels(
    curve: Curve,
    symbols: Mapping[str, str],
    *,
    x_limits: tuple[float, float],
    root_limits: tuple[float, float],
    size_inches: tuple[float, float],
) -> list[MarkLabel]:
    """Place names upright above their lines, the strongest lines first; a name that finds no room is left out.

    Parameters
    ----------
    curve : Curve
        Scan with its marks.
    symbols : mapping
        Phase id -> how it is written.
    x_limits : tuple of float
        Limits of the angle axis [degree].
    root_limits : tuple of float
        Limits of the intensity axis, square root of the intensity.
    size_inches : tuple of float
        Width and height of the panel.

    Returns
    -------
    list of MarkLabel
        The strongest line of each phase first, then the others by strength.
    """
    angle, observed = np.array(curve.two_theta), np.array(curve.observed)
    background = np.array(curve.background) if curve.background else np.zeros_like(angle)
    above = observed - background
    # what the eye sees as the top of a line: the higher of both curves, without the noise
    seen = np.convolve(np.pad(observed, 2, mode="edge"), np.full(5, 0.2), mode="valid")
    profile = np.sqrt(np.maximum(np.maximum(seen, np.array(curve.calculated)) if curve.calculated else seen, 0.0))
    strengths = {id(m): _strength(m, curve, angle, above) for m in curve.marks}
    noise = float(np.sqrt(np.median(np.maximum(background, 1.0))))
    floor = max(0.002 * max(strengths.values(), default=0.0), 1.5 * noise)
    marks = sorted((m for m in curve.marks if strengths[id(m)] > floor), key=lambda m: -strengths[id(m)])
    marks = [m for k, m in enumerate(marks) if not any(_same_line(m, stronger) for stronger in marks[:k])]
    # the strongest line of every phase is named before any second line
    firsts = {id(m) for m in {m.phase: m for m in reversed(marks)}.values()}
    marks = [*(m for m in marks if id(m) in firsts), *(m for m in marks if id(m) not in firsts)][:_MOST]
    per_degree = size_inches[0] / (x_limits[1] - x_limits[0])
    per_root = size_inches[1] / (root_limits[1] - root_limits[0])
    wide = _LINE / per_degree
    # left, right and foot of what is taken, first the corner where the scan is named
    boxes = [(x_limits[1] - 3.3 / per_degree, x_limits[1], root_limits[1] - 0.24 / per_root)]
    out: list[MarkLabel] = []
    for mark in marks:
        text = _text(mark, symbols)
        long = (_LETTER * len(text) + 0.04) / per_root
        near = np.abs(angle - mark.two_theta) <= _ANGLE_WINDOW
        if not near.any() or not x_limits[0] < mark.two_theta < x_limits[1]:
            continue
        peak = float(profile[near].max())
        for shift in (0.0, 1.0, -1.0, 2.0, -2.0):
            x = mark.two_theta + shift * wide
            under = np.abs(angle - x) <= wide / 2
            if not under.any():
                continue
            foot = max(float(profile[under].max()), peak if shift == 0 else 0.0) + 0.05 / per_root
            if foot + long > root_limits[1] or any(
                abs(x - (a + b) / 2) < (b - a) / 2 + wide / 2 and foot + long > bottom for a, b, bottom in boxes
            ):
                continue
            boxes.append((x - wide / 2, x + wide / 2, foot))
            own = float(np.sqrt(max(float(background[near].mean()) + strengths[id(mark)], 0.0)))
            out.append(MarkLabel(mark.phase, text, mark.two_theta, x, peak if shift == 0 else min(own, peak), foot))
            break
    return out
