"""Groups of samples with similar proportions, and samples that stand apart."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Grouping", "group_similar"]

Array = NDArray[np.float64]

LARGEST = 1000  # samples whose distances to each other are all held in memory
_MOST_GROUPS = 8
_STRUCTURE = 0.51  # average silhouette from which Kaufman and Rousseeuw speak of a reasonable structure
_MODIFIED_Z = 3.5  # limit that Iglewicz and Hoaglin give
_NOTABLE = 0.1  # Hellinger distance; smaller ones are within what proportions are uncertain by, common practice


@dataclass(frozen=True)
class Grouping:
    """Which samples are alike.

    Attributes
    ----------
    groups : tuple of int or None
        Number of the group of each sample, from 1 for the largest; None for samples without proportions.
    apart : tuple of bool
        Whether a sample stands apart from all groups or from its own.
    silhouette : float or None
        Average silhouette of the groups, None for a single group.
    """

    groups: tuple[int | None, ...]
    apart: tuple[bool, ...]
    silhouette: float | None = None


def group_similar(proportions: Sequence[Mapping[str, float]]) -> Grouping:
    """Group samples by their proportions.

    Proportions are turned into square roots of fractions, so that distances are Hellinger distances, for which absent
    phases need no invented value; the tree is Ward's, cut where the average silhouette is largest, or not at all when no
    cut is convincing. A sample stands apart when it is a group by itself, or when its distance from the middle of its
    group is extreme by the modified z-score. Beyond 1000 samples the tree is that of evenly spaced samples, and each
    other sample joins the nearest group.

    Parameters
    ----------
    proportions : sequence of mapping
        Phase -> weight percent of each sample; an empty one for a sample without.

    Returns
    -------
    Grouping

    References
    ----------
    P. Legendre and E. D. Gallagher, Oecologia 129 (2001) 271-280 (Hellinger distance before Euclidean methods).
    J. H. Ward, Journal of the American Statistical Association 58 (1963) 236-244.
    P. J. Rousseeuw, Journal of Computational and Applied Mathematics 20 (1987) 53-65 (silhouette); limit 0.51 from
    L. Kaufman and P. J. Rousseeuw, Finding Groups in Data (1990), from memory.
    B. Iglewicz and D. C. Hoaglin, How to Detect and Handle Outliers (1993), from memory.
    """
    used = [k for k, weights in enumerate(proportions) if sum(max(w, 0.0) for w in weights.values()) > 0]
    groups: list[int | None] = [None] * len(proportions)
    apart = [False] * len(proportions)
    if len(used) < 3:
        for k in used:
            groups[k] = 1
        return Grouping(tuple(groups), tuple(apart))
    points = _points([proportions[k] for k in used])
    labels, silhouette = _labels(points)
    far = _far(points, labels)
    for place, k in enumerate(used):
        groups[k] = int(labels[place])
        apart[k] = bool(far[place])
    return Grouping(tuple(groups), tuple(apart), silhouette)


def _points(proportions: Sequence[Mapping[str, float]]) -> Array:
    """One row per sample; Euclidean distance of rows is the Hellinger distance of the samples, 0 to 1."""
    phases = sorted({phase for weights in proportions for phase in weights})
    table = np.array([[max(weights.get(phase, 0.0), 0.0) for phase in phases] for weights in proportions])
    return np.asarray(np.sqrt(table / table.sum(axis=1, keepdims=True) / 2.0), dtype=np.float64)


def _labels(points: Array) -> tuple[NDArray[np.int64], float | None]:
    from scipy.cluster.hierarchy import fcluster, linkage
    from scipy.spatial.distance import cdist, squareform

    chosen = np.unique(np.linspace(0, len(points) - 1, min(len(points), LARGEST)).round().astype(int))
    part = points[chosen]
    square = cdist(part, part)
    np.fill_diagonal(square, 0.0)
    tree = linkage(squareform(square, checks=False), method="ward")
    best, score = np.ones(len(part), dtype=np.int64), _STRUCTURE
    found: float | None = None
    for count in range(2, min(_MOST_GROUPS, len(part) - 1) + 1):
        labels = fcluster(tree, count, criterion="maxclust").astype(np.int64)
        value = _silhouette(square, labels)
        if value >= score + 1e-9:
            best, score, found = labels, value, value
    if len(chosen) < len(points):
        names = np.unique(best)
        middles = np.array([part[best == name].mean(axis=0) for name in names])
        best = names[cdist(points, middles).argmin(axis=1)]
    return _by_size(best), found


def _silhouette(square: Array, labels: NDArray[np.int64]) -> float:
    """Average silhouette; members of groups of one count 0, as Rousseeuw defines it."""
    names, member = np.unique(labels, return_inverse=True)
    if len(names) < 2:
        return 0.0
    sums = np.stack([square[:, member == k].sum(axis=1) for k in range(len(names))], axis=1)
    sizes = np.bincount(member)
    rows = np.arange(len(labels))
    own = sums[rows, member] / np.maximum(sizes[member] - 1, 1)
    means = sums / sizes
    means[rows, member] = np.inf
    other = means.min(axis=1)
    widest = np.maximum(own, other)
    value = np.where((sizes[member] > 1) & (widest > 0), (other - own) / np.where(widest > 0, widest, 1.0), 0.0)
    return float(value.mean())


def _by_size(labels: NDArray[np.int64]) -> NDArray[np.int64]:
    """Number the groups from the largest to the smallest; of equal ones the first in the sheet goes first."""
    names, first, sizes = np.unique(labels, return_index=True, return_counts=True)
    order = sorted(range(len(names)), key=lambda k: (-sizes[k], first[k]))
    number = {int(names[k]): place for place, k in enumerate(order, start=1)}
    return np.array([number[int(label)] for label in labels], dtype=np.int64)


def _far(points: Array, labels: NDArray[np.int64]) -> NDArray[np.bool_]:
    distance = np.zeros(len(points))
    single = np.zeros(len(points), dtype=bool)
    for name in np.unique(labels):
        inside = labels == name
        # the median of each coordinate is not pulled away by the sample that is looked for
        distance[inside] = np.linalg.norm(points[inside] - np.median(points[inside], axis=0), axis=1)
        single[inside] = inside.sum() == 1
    others = distance[~single]
    if others.size < 5:
        return single
    middle = float(np.median(others))
    spread = float(np.median(np.abs(others - middle)))
    extreme = 0.6745 * (distance - middle) > _MODIFIED_Z * spread
    return np.asarray(single | (extreme & (distance > _NOTABLE)), dtype=np.bool_)
