"""Invented scans as text, for the tests of reading."""

from __future__ import annotations

import numpy as np


def angles(points: int = 120, start: float = 3.0, step: float = 0.05) -> np.ndarray:
    return np.round(start + step * np.arange(points), 4)


def counts(points: int = 120) -> np.ndarray:
    x = np.arange(points)
    return np.round(200 + 900 * np.exp(-(((x - points / 2) / 6) ** 2)) + x % 7)


def table(separator: str = " ", *, points: int = 120, end: str = "\n", header: str = "") -> str:
    rows = [f"{a:.4f}{separator}{c:.0f}" for a, c in zip(angles(points), counts(points), strict=True)]
    return header + end.join(rows) + end
