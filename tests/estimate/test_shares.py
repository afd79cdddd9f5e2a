"""Normalisation to 100 % with its covariance, and group totals."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.diffraction.columns import Component
from xrdmica.estimate.shares import expandable_share, membership, normalise


@settings(max_examples=40, deadline=None)
@given(st.lists(st.floats(0.05, 10), min_size=2, max_size=6))
def test_weights_sum_to_one_and_so_their_covariance_sums_to_nothing(amounts: list[float]) -> None:
    values = np.array(amounts)
    shares = normalise(values, np.diag((0.05 * values) ** 2), range(values.size))
    assert shares.weights.sum() == pytest.approx(1.0)
    np.testing.assert_allclose(shares.covariance.sum(axis=0), 0.0, atol=1e-12)


def test_covariance_agrees_with_drawn_amounts() -> None:
    rng = np.random.default_rng(7)
    amounts = np.array([4.0, 2.0, 1.0])
    covariance = np.array([[0.010, 0.004, 0.0], [0.004, 0.010, -0.002], [0.0, -0.002, 0.006]])
    drawn = rng.multivariate_normal(amounts, covariance, 40_000)
    sampled = np.cov((drawn / drawn.sum(axis=1, keepdims=True)).T)
    np.testing.assert_allclose(normalise(amounts, covariance, range(3)).covariance, sampled, atol=6e-6)


def test_what_is_left_out_does_not_count() -> None:
    shares = normalise(np.array([3.0, 5.0, 1.0]), np.zeros((3, 3)), [0, 2])
    np.testing.assert_allclose(shares.weights, [0.75, 0.25])


def test_expandable_layers_of_pure_and_mixed_phases() -> None:
    mixed = Component("illite_smectite", ("anhydrous", "glycol_2"), (10.0, 16.9), fraction=0.7)
    assert expandable_share([None, mixed]) == pytest.approx(0.3)
    assert expandable_share([Component("smectite", ("glycol_2",), (16.9,))]) == 1.0
    assert expandable_share([Component("muscovite", ("anhydrous",), (10.0,))]) == 0.0


def test_membership_of_groups() -> None:
    phases = ["muscovite", "talc", "illite_smectite"]
    np.testing.assert_array_equal(membership("true mica", phases, {}), [1, 0, 0])
    np.testing.assert_array_equal(membership("expandable layers", phases, {"illite_smectite": 0.4}), [0, 0, 0.4])
