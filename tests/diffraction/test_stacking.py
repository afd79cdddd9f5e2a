"""Interstratified stacks against enumeration of all short stacks, and in their limits."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise, product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.crystals.layer import Layer
from xrdmica.diffraction.basal import basal_intensity, layer_amplitude
from xrdmica.diffraction.grid import PatternGrid
from xrdmica.diffraction.stack_heights import StackHeights, interference, lognormal_heights
from xrdmica.diffraction.stacking import (
    Junctions,
    random_junctions,
    stack_intensity,
    stack_interference,
    two_kind_junctions,
)
from xrdmica.errors import StructureError
from xrdmica.radiation import Radiation

S = np.linspace(0.011, 0.31, 83)
HEIGHTS = StackHeights(np.array([1, 2, 3, 5]), np.array([0.1, 0.3, 0.4, 0.2]))


def made_up_amplitudes(kinds: int) -> np.ndarray:
    """Smooth complex amplitudes of no layer in particular."""
    return np.array([
        (20 + 7 * k) * np.exp(-((3 + k) * S**2)) * np.exp(1j * (1.3 * k + (9 + 4 * k) * S)) + 3 * k for k in range(kinds)
    ])


def enumerated(
    amplitudes: np.ndarray,
    spacings: np.ndarray,
    probability_of: Callable[[tuple[int, ...]], float],
    heights: StackHeights,
    sigma: float = 0.0,
) -> np.ndarray:
    """Every sequence of every height with its probability; a double sum over the layers of each."""
    kinds = len(spacings)
    total, layers = np.zeros(S.size), 0.0
    for number, share in zip(heights.numbers, heights.shares, strict=True):
        weight_sum = 0.0
        for sequence in product(range(kinds), repeat=int(number)):
            weight = probability_of(sequence)
            weight_sum += weight
            if weight == 0:
                continue
            places = np.concatenate([[0.0], np.cumsum(spacings[list(sequence)])])
            for a in range(number):
                for b in range(number):
                    wave = np.exp(4j * np.pi * S * (places[b] - places[a]))
                    damp = np.exp(-((4 * np.pi * S * sigma) ** 2) * abs(a - b) / 2)
                    total += share * weight * damp * (amplitudes[sequence[a]].conj() * amplitudes[sequence[b]] * wave).real
        assert weight_sum == pytest.approx(1.0, abs=1e-12)
        layers += share * number
    return total / layers


def first_order(junctions: Junctions) -> Callable[[tuple[int, ...]], float]:
    def probability(sequence: tuple[int, ...]) -> float:
        value = float(junctions.proportions[sequence[0]])
        for one, next_one in pairwise(sequence):
            value *= float(junctions.probabilities[one, next_one])
        return value

    return probability


@pytest.mark.parametrize("share", [0.1, 0.35, 0.5, 0.8])
@pytest.mark.parametrize("reichweite", [0, 1])
@pytest.mark.parametrize("sigma", [0.0, 0.2])
def test_two_kinds_against_enumeration(share: float, reichweite: int, sigma: float) -> None:
    amplitudes, spacings = made_up_amplitudes(2), np.array([10.0, 16.9])
    junctions = two_kind_junctions(share, reichweite)
    found = stack_interference(amplitudes, spacings, S, junctions, HEIGHTS, sigma)
    expected = enumerated(amplitudes, spacings, first_order(junctions), HEIGHTS, sigma)
    np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-9)


def test_three_kinds_at_random_against_enumeration() -> None:
    amplitudes, spacings = made_up_amplitudes(3), np.array([9.7, 12.4, 15.1])
    junctions = random_junctions([0.5, 0.2, 0.3])
    found = stack_interference(amplitudes, spacings, S, junctions, HEIGHTS)
    np.testing.assert_allclose(found, enumerated(amplitudes, spacings, first_order(junctions), HEIGHTS), rtol=1e-9, atol=1e-9)


def test_against_drawn_sequences() -> None:
    """Markov chains drawn layer by layer agree within sampling error."""
    rng = np.random.default_rng(5)
    amplitudes, spacings = made_up_amplitudes(2), np.array([10.0, 16.9])
    junctions = two_kind_junctions(0.7, 1)
    number, drawn = 9, 20000
    kinds = np.empty((drawn, number), dtype=int)
    kinds[:, 0] = rng.random(drawn) < junctions.proportions[1]
    for place in range(1, number):
        kinds[:, place] = rng.random(drawn) < junctions.probabilities[kinds[:, place - 1], 1]
    places = np.cumsum(spacings[kinds], axis=1) - spacings[kinds]
    power = np.array([
        np.abs((amplitudes[:, i][kinds] * np.exp(4j * np.pi * s * places)).sum(axis=1)) ** 2 for i, s in enumerate(S)
    ])
    heights = StackHeights(np.array([number]), np.array([1.0]))
    found = stack_interference(amplitudes, spacings, S, junctions, heights)
    difference = (found - power.mean(axis=1) / number) / (power.std(axis=1) / np.sqrt(drawn) / number)
    assert np.abs(difference).max() < 4.5


@pytest.mark.parametrize("reichweite", [0, 1])
@pytest.mark.parametrize("share", [0.0, 1.0])
def test_one_kind_only(reichweite: int, share: float) -> None:
    """W -> 0 or 1 leaves the plain interference function of the kind that is there."""
    amplitudes, spacings = made_up_amplitudes(2), np.array([10.0, 16.9])
    kind = 0 if share == 1.0 else 1
    found = stack_interference(amplitudes, spacings, S, two_kind_junctions(share, reichweite), lognormal_heights(6.0))
    expected = np.abs(amplitudes[kind]) ** 2 * interference(S, spacings[kind], 6.0)
    np.testing.assert_allclose(found, expected, rtol=1e-3, atol=1e-4 * expected.max())


def test_equal_layers_at_random_are_one_kind() -> None:
    amplitudes = np.repeat(made_up_amplitudes(1), 2, axis=0)
    found = stack_interference(amplitudes, np.array([10.0, 10.0]), S, two_kind_junctions(0.3, 0), lognormal_heights(6.0), 0.1)
    expected = np.abs(amplitudes[0]) ** 2 * interference(S, 10.0, 6.0, 0.1)
    np.testing.assert_allclose(found, expected, rtol=1e-9)


@pytest.mark.parametrize("reichweite", [0, 1])
def test_stack_of_one_mica_is_the_basal_pattern(
    layer_of: Callable[..., Layer], copper_grid: PatternGrid, reichweite: int
) -> None:
    """A layer with its interlayer on one side, stacked, gives the lines of the layer with half on either side."""
    one_sided = layer_of("illite", one_sided=True)
    stacked = stack_intensity((one_sided, one_sided), two_kind_junctions(1.0, reichweite), copper_grid, mean_layers=12.0)
    plain = basal_intensity(layer_of("illite"), copper_grid, mean_layers=12.0)
    for order in (1, 2, 3):
        angle = float(copper_grid.radiation.two_theta(layer_of("illite").spacing / order))
        near = np.abs(copper_grid.two_theta - angle) < 0.15
        assert stacked[near].max() == pytest.approx(plain[near].max(), rel=0.03)


def test_weights_of_mixed_stacks_lie_between_their_ends(layer_of: Callable[..., Layer], copper_grid: PatternGrid) -> None:
    """Continuity in the proportion: nearly pure stacks are nearly the pure ones."""
    layers = (layer_of("illite", one_sided=True), layer_of("smectite", "glycol_2", one_sided=True))
    pure = stack_intensity(layers, two_kind_junctions(1.0, 1), copper_grid, mean_layers=8.0)
    nearly = stack_intensity(layers, two_kind_junctions(0.9999, 1), copper_grid, mean_layers=8.0)
    assert np.abs(nearly - pure).max() < 2e-3 * pure.max()


def test_maximum_order_forbids_the_minority_pair() -> None:
    for share in (0.2, 0.5, 0.9):
        junctions = two_kind_junctions(share, 1)
        minority = int(share >= 0.5)
        assert junctions.probabilities[minority, minority] == 0.0


@given(st.floats(0, 1), st.integers(0, 1))
def test_junctions_keep_the_proportions(share: float, reichweite: int) -> None:
    junctions = two_kind_junctions(share, reichweite)
    np.testing.assert_allclose(junctions.probabilities.sum(axis=1), 1.0, atol=1e-12)
    np.testing.assert_allclose(junctions.proportions @ junctions.probabilities, junctions.proportions, atol=1e-12)
    assert junctions.probabilities.min() >= 0


@settings(max_examples=40, deadline=None)
@given(
    st.floats(0.01, 0.99),
    st.integers(0, 1),
    st.floats(2.0, 20.0),
    st.floats(0.0, 0.5),
    st.floats(9.0, 10.5),
    st.floats(12.0, 18.0),
)
def test_intensity_is_never_negative(
    share: float, reichweite: int, mean: float, sigma: float, first: float, second: float
) -> None:
    """A mean of squared moduli; and it scales with the square of the amplitudes."""
    amplitudes, spacings = made_up_amplitudes(2), np.array([first, second])
    before = amplitudes.copy()
    junctions = two_kind_junctions(share, reichweite)
    found = stack_interference(amplitudes, spacings, S, junctions, lognormal_heights(mean), sigma)
    np.testing.assert_array_equal(amplitudes, before)
    assert np.all(np.isfinite(found))
    assert found.min() > -1e-9 * found.max()
    doubled = stack_interference(2 * amplitudes, spacings, S, junctions, lognormal_heights(mean), sigma)
    np.testing.assert_allclose(doubled, 4 * found, rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("share", [-0.1, 1.1])
def test_shares_outside_the_limits_are_refused(share: float) -> None:
    with pytest.raises(StructureError):
        two_kind_junctions(share, 0)


@pytest.mark.parametrize("mean_layers", [3.0, 8.0, 14.0, 25.0])
def test_few_points_carry_a_stack_as_well_as_all(
    mean_layers: float, layer_of: Callable[..., Layer], copper_grid: PatternGrid, monkeypatch: pytest.MonkeyPatch
) -> None:
    layers = [layer_of("illite", one_sided=True), layer_of("smectite", "glycol_2", one_sided=True)]
    quick = stack_intensity(layers, two_kind_junctions(0.85, 1), copper_grid, mean_layers=mean_layers)
    monkeypatch.setattr("xrdmica.diffraction.stacking._COARSER", 1)
    every = stack_intensity(layers, two_kind_junctions(0.85, 1), copper_grid, mean_layers=mean_layers)
    assert np.abs(quick - every).max() < 2e-3 * every.max()


@pytest.mark.parametrize(("phase", "mirror"), [("illite", True), ("smectite", True), ("talc", True), ("kaolinite", False)])
@pytest.mark.parametrize("one_sided", [False, True])
def test_stacked_alone_2_1_layers_have_a_mirror_and_1_1_layers_have_none(
    phase: str, mirror: bool, one_sided: bool, layer_of: Callable[..., Layer]
) -> None:
    layer = layer_of(phase, one_sided=one_sided)
    assert layer.symmetric_when_stacked is mirror
    # the same from the amplitudes of a crystal, whose structure factors are then equal from both sides
    s = np.arange(1, 8) / (2 * layer.spacing)
    up, down = (np.abs(layer_amplitude(layer, side * s, Radiation.parse("Co"))) for side in (1, -1))
    assert bool(np.allclose(up, down, rtol=1e-9)) is mirror
