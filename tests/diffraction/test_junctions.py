"""Stacks with a memory of up to three layers, of two and three kinds, against enumeration and drawn sequences."""

from __future__ import annotations

from collections.abc import Callable
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.grid import PatternGrid
from xrdmica.diffraction.junctions import (
    Junctions,
    markov_junctions,
    ordered_junctions,
    random_junctions,
    two_kind_junctions,
)
from xrdmica.diffraction.stack_heights import StackHeights, lognormal_heights
from xrdmica.diffraction.stacking import stack_intensity, stack_interference
from xrdmica.errors import StructureError

S = np.linspace(0.011, 0.31, 61)
HEIGHTS = StackHeights(np.array([1, 2, 3, 4, 6]), np.array([0.1, 0.2, 0.3, 0.3, 0.1]))
SPACINGS = np.array([10.0, 16.9, 12.5])
AMPLITUDES = np.array([
    (20 + 7 * k) * np.exp(-((3 + k) * S**2)) * np.exp(1j * (1.3 * k + (9 + 4 * k) * S)) + 3 * k for k in range(3)
])


def layer_probability(table: np.ndarray) -> Callable[[tuple[int, ...]], float]:
    """Probability of a sequence straight from a table over kinds, the first layers from its stationary blocks.

    The blocks come from running the chain for long, not from the code under test.
    """
    memory, kinds = table.ndim - 1, table.shape[0]
    blocks = np.full((kinds,) * memory, 1 / kinds**memory)
    for _ in range(20000):
        joint = blocks[..., None] * table
        # a lazy chain has the same stationary law and no period
        blocks = 0.5 * blocks + 0.5 * joint.sum(axis=0)

    def probability(sequence: tuple[int, ...]) -> float:
        if len(sequence) <= memory:
            return float(blocks[sequence].sum())
        value = float(blocks[sequence[:memory]])
        for at in range(memory, len(sequence)):
            value *= float(table[sequence[at - memory : at + 1]])
        return value

    return probability


def enumerated(probability: Callable[[tuple[int, ...]], float], kinds: int) -> np.ndarray:
    total, layers = np.zeros(S.size), 0.0
    for number, share in zip(HEIGHTS.numbers, HEIGHTS.shares, strict=True):
        for sequence in product(range(kinds), repeat=int(number)):
            weight = probability(sequence)
            if weight:
                places = np.concatenate([[0.0], np.cumsum(SPACINGS[list(sequence)])[:-1]])
                waves = (AMPLITUDES[list(sequence)] * np.exp(4j * np.pi * np.multiply.outer(places, S))).sum(axis=0)
                total += share * weight * np.abs(waves) ** 2
        layers += share * number
    return total / layers


def ordered_table(share: float, memory: int) -> np.ndarray:
    """Maximum order of two kinds, kind 1 the minority with more than `memory` others between: written from its definition.

    After a 1 come `memory` zeros; after `memory` zeros a 1 comes with the probability that gives its share.
    """
    table = np.zeros((2,) * (memory + 1))
    chance = share / (1 - memory * share)
    for before in product(range(2), repeat=memory):
        table[(*before, 1)] = chance if sum(before) == 0 else 0.0
        table[(*before, 0)] = 1 - table[(*before, 1)]
    return table


@pytest.mark.parametrize(("share", "memory"), [(0.3, 1), (0.45, 1), (0.2, 2), (0.3, 2), (0.1, 3), (0.22, 3)])
def test_maximum_order_against_enumeration(share: float, memory: int) -> None:
    table = ordered_table(share, memory)
    expected = enumerated(layer_probability(table), 2)
    for junctions in (two_kind_junctions(1 - share, memory), markov_junctions(table)):
        np.testing.assert_allclose(junctions.layer_shares, [1 - share, share], atol=1e-12)
        found = stack_interference(AMPLITUDES[:2], SPACINGS[:2], S, junctions, HEIGHTS)
        np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-9)


def test_the_other_kind_may_be_the_minority() -> None:
    expected = stack_interference(AMPLITUDES[[1, 0]], SPACINGS[[1, 0]], S, two_kind_junctions(0.8, 3), HEIGHTS)
    found = stack_interference(AMPLITUDES[:2], SPACINGS[:2], S, two_kind_junctions(0.2, 3), HEIGHTS)
    np.testing.assert_allclose(found, expected, rtol=1e-12)


@pytest.mark.parametrize(("kinds", "memory"), [(2, 1), (2, 2), (2, 3), (3, 1), (3, 2), (3, 3)])
def test_free_probabilities_against_enumeration(kinds: int, memory: int) -> None:
    table = np.random.default_rng(7).dirichlet(np.ones(kinds), size=(kinds,) * memory)
    junctions = markov_junctions(table)
    found = stack_interference(AMPLITUDES[:kinds], SPACINGS[:kinds], S, junctions, HEIGHTS)
    np.testing.assert_allclose(found, enumerated(layer_probability(table), kinds), rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("pair", [0.0, 0.1, 0.3, 0.7])
def test_pair_probability(pair: float) -> None:
    """Reichweite 1 with a free junction probability; the share itself gives random order."""
    junctions = two_kind_junctions(0.7, 1, pair)
    assert junctions.probabilities[1, 1] == pair
    np.testing.assert_allclose(junctions.proportions @ junctions.probabilities, [0.7, 0.3], atol=1e-12)
    found = stack_interference(AMPLITUDES[:2], SPACINGS[:2], S, junctions, HEIGHTS)
    np.testing.assert_allclose(found, enumerated(layer_probability(junctions.probabilities), 2), rtol=1e-9, atol=1e-9)
    if pair == 0.3:
        random = stack_interference(AMPLITUDES[:2], SPACINGS[:2], S, two_kind_junctions(0.7, 0), HEIGHTS)
        np.testing.assert_allclose(found, random, rtol=1e-9)


@pytest.mark.parametrize("memory", [1, 2, 3])
def test_three_kinds_with_one_ordered_against_the_rest(memory: int) -> None:
    """Which of the two minor kinds stands in a place is chance: written out as a table over three kinds."""
    shares = np.array([0.8, 0.15, 0.05])
    two = ordered_table(0.2, memory)
    table = np.zeros((3,) * (memory + 1))
    for sequence in product(range(3), repeat=memory + 1):
        folded = tuple(int(kind > 0) for kind in sequence)
        choice = shares[sequence[-1]] / 0.2 if sequence[-1] else 1.0
        table[sequence] = two[folded] * choice
    junctions = ordered_junctions(shares, memory)
    np.testing.assert_allclose(junctions.layer_shares, shares, atol=1e-12)
    found = stack_interference(AMPLITUDES, SPACINGS, S, junctions, HEIGHTS)
    np.testing.assert_allclose(found, enumerated(layer_probability(table), 3), rtol=1e-9, atol=1e-9)


def test_crowded_minority_keeps_gaps_even() -> None:
    """30 % with a memory of 3: gaps of 2.33 layers on average, so always 2 or 3, checked on a drawn sequence."""
    junctions = two_kind_junctions(0.7, 3)
    rng = np.random.default_rng(2)
    state, kinds = 0, []
    for _ in range(6000):
        kinds.append(int(junctions.kinds[state]))
        state = int(rng.choice(junctions.proportions.size, p=junctions.probabilities[state]))
    gaps = np.diff(np.flatnonzero(np.array(kinds) == 1)) - 1
    assert set(gaps) == {2, 3}
    assert gaps.mean() == pytest.approx(7 / 3, abs=0.05)


def test_long_memory_with_short_memory_inside() -> None:
    """A table of R3 that looks at the last layer only is the R1 stack."""
    one = np.array([[0.7, 0.3], [0.6, 0.4]])
    three = np.broadcast_to(one, (2, 2, 2, 2))
    heights = lognormal_heights(9.0)
    np.testing.assert_allclose(
        stack_interference(AMPLITUDES[:2], SPACINGS[:2], S, markov_junctions(three), heights),
        stack_interference(AMPLITUDES[:2], SPACINGS[:2], S, markov_junctions(one), heights),
        rtol=1e-9,
    )


@given(st.floats(0, 1), st.floats(0, 1), st.integers(0, 3))
def test_ordered_chains_are_chains(first: float, part: float, memory: int) -> None:
    shares = np.array([first, (1 - first) * part, (1 - first) * (1 - part)])
    shares /= shares.sum()
    junctions = ordered_junctions(shares, memory)
    found = np.zeros(3)
    found[: junctions.layer_shares.size] = junctions.layer_shares
    np.testing.assert_allclose(found, shares, atol=1e-9)
    np.testing.assert_allclose(junctions.probabilities.sum(axis=1), 1.0, atol=1e-9)
    np.testing.assert_allclose(junctions.proportions @ junctions.probabilities, junctions.proportions, atol=1e-9)


@settings(max_examples=30, deadline=None)
@given(st.floats(0.02, 0.98), st.integers(0, 3), st.floats(2.0, 15.0))
def test_power_of_long_memories_is_positive(first: float, memory: int, mean: float) -> None:
    found = stack_interference(
        AMPLITUDES[:2], SPACINGS[:2], S, two_kind_junctions(first, memory), lognormal_heights(mean)
    )
    assert found.min() > -1e-9 * found.max()


# --- one-to-one order: superlattices ---


def maxima(layers: tuple[Layer, Layer], junctions: Junctions, grid: PatternGrid, disorder: float = 0.0) -> np.ndarray:
    """Spacings of the maxima of |F|^2 Phi Lp [angstrom]."""
    from scipy.signal import find_peaks

    curve = stack_intensity(layers, junctions, grid, mean_layers=16.0, spacing_disorder=disorder) * grid.factor(12.0)
    places, _ = find_peaks(curve, prominence=1e-3 * curve.max())
    return grid.radiation.wavelength / (2 * np.sin(np.radians(grid.two_theta[places]) / 2))


@pytest.mark.parametrize(
    ("first", "second", "state", "name"),
    [("illite", "smectite", "glycol_2", "rectorite type"), ("chlorite", "saponite", "glycol_2", "corrensite type")],
)
def test_one_to_one_order_is_a_superlattice(
    layer_of: Callable[..., Layer], copper_grid: PatternGrid, first: str, second: str, state: str, name: str
) -> None:
    """Maxima lie at (d1 + d2)/l only, as for a crystal of double layers; 26.9 and about 31 angstrom with glycol
    (handbook values 26-27 and 31, common practice)."""
    layers = (layer_of(first, one_sided=True), layer_of(second, state, one_sided=True))
    double = layers[0].spacing + layers[1].spacing
    assert double == pytest.approx(26.9 if name.startswith("rectorite") else 31.0, abs=0.4)
    found = maxima(layers, two_kind_junctions(0.5, 1), copper_grid)
    # the first order is drawn outwards by the Lorentz factor; the tails of few layers allow 1.5 %
    orders = double / found[found < 17.0]
    strong = np.abs(orders - np.round(orders)) < 0.15
    assert strong.sum() >= 5
    assert {2, 3, 5} <= {int(order) for order in np.round(orders[strong])}
    assert found.max() == pytest.approx(double, rel=0.06)


def test_random_one_to_one_has_no_superlattice(layer_of: Callable[..., Layer], copper_grid: PatternGrid) -> None:
    layers = (layer_of("illite", one_sided=True), layer_of("smectite", "glycol_2", one_sided=True))
    assert maxima(layers, random_junctions([0.5, 0.5]), copper_grid).max() < 20.0


def test_kaolinite_layers_count_with_either_side_up(layer_of: Callable[..., Layer], copper_grid: PatternGrid) -> None:
    """A stack of kaolinite alone has to give what the basal pattern, which averages both sides, gives."""
    from xrdmica.diffraction.basal import basal_intensity

    layer = layer_of("kaolinite", one_sided=True)
    stacked = stack_intensity((layer, layer), two_kind_junctions(1.0, 0), copper_grid, mean_layers=20.0)
    plain = basal_intensity(layer_of("kaolinite"), copper_grid, mean_layers=20.0)
    for order in (1, 2):
        angle = float(copper_grid.radiation.two_theta(layer.spacing / order))
        near = np.abs(copper_grid.two_theta - angle) < 0.2
        assert stacked[near].max() == pytest.approx(plain[near].max(), rel=2e-3)


@pytest.mark.parametrize(
    "call",
    [
        lambda: two_kind_junctions(0.5, 4),
        lambda: two_kind_junctions(0.5, -1),
        lambda: two_kind_junctions(0.5, 0, 0.2),
        lambda: two_kind_junctions(0.5, 1, 1.0),
        lambda: random_junctions([0.5, 0.6]),
        lambda: markov_junctions(np.eye(2)),
        lambda: markov_junctions(np.full((2, 2), 0.4)),
        lambda: markov_junctions(np.ones((2, 3))),
        lambda: stack_interference(AMPLITUDES[:1], SPACINGS[:1], S, random_junctions([0.5, 0.5]), HEIGHTS),
    ],
)
def test_impossible_statistics_are_refused(call: Callable[[], object]) -> None:
    with pytest.raises(StructureError):
        call()
