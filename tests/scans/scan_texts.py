"""Invented scans as text, for the tests of reading."""

from __future__ import annotations

import numpy as np

from xrdmica.radiation import Radiation
from xrdmica.scans.profile import pseudo_voigt
from xrdmica.scans.scan import Scan


def angles(points: int = 120, start: float = 3.0, step: float = 0.05) -> np.ndarray:
    return np.round(start + step * np.arange(points), 4)


def counts(points: int = 120) -> np.ndarray:
    x = np.arange(points)
    return np.round(200 + 900 * np.exp(-(((x - points / 2) / 6) ** 2)) + x % 7)


def table(separator: str = " ", *, points: int = 120, end: str = "\n", header: str = "", step: float = 0.05) -> str:
    rows = [f"{a:.4f}{separator}{c:.0f}" for a, c in zip(angles(points, step=step), counts(points), strict=True)]
    return header + end.join(rows) + end


def crowded_scan() -> Scan:
    """Twenty lines on 2500 points."""
    rng = np.random.default_rng(3)
    x = np.linspace(3, 53, 2500)
    radiation = Radiation.parse("Cu")
    model = 150 + 5000 / x**1.3
    for centre in np.linspace(5, 51, 20) + rng.uniform(-0.5, 0.5, 20):
        model = model + rng.uniform(200, 4000) * pseudo_voigt(x, float(centre), float(rng.uniform(0.12, 0.4)), 0.4, radiation)
    return Scan.from_arrays(x, rng.poisson(model), radiation=radiation)
