"""Non-negative amounts from normal equations, against scipy and against known mixtures."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.optimize
from hypothesis import given, settings
from hypothesis import strategies as st

from xrdmica.matching.linear import nonnegative, project, project_vector, system, tied_fit
from xrdmica.matching.prepare import background_terms, orthonormal


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10_000), st.integers(1, 7))
def test_same_as_scipy_on_the_full_problem(seed: int, size: int) -> None:
    rng = np.random.default_rng(seed)
    matrix = rng.random((60, size))
    target = matrix @ rng.normal(size=size) + rng.normal(scale=0.1, size=60)
    reference, _ = scipy.optimize.nnls(matrix, target)
    np.testing.assert_allclose(nonnegative(matrix.T @ matrix, matrix.T @ target), reference, atol=1e-5)


def test_a_column_of_zeros_gets_nothing() -> None:
    matrix = np.column_stack([np.ones(5), np.zeros(5)])
    np.testing.assert_allclose(nonnegative(matrix.T @ matrix, matrix.T @ np.full(5, 3.0)), [3.0, 0.0], atol=1e-6)


def test_background_is_projected_out_exactly() -> None:
    rng = np.random.default_rng(1)
    angles = np.linspace(3, 35, 400)
    weight = rng.uniform(0.5, 2, 400)
    terms = background_terms(angles)
    basis = orthonormal(terms, weight)
    background = terms @ rng.normal(size=terms.shape[1])
    np.testing.assert_allclose(project_vector(background, weight, basis), 0.0, atol=1e-8)
    column = rng.random((400, 2))
    projected = project(column, weight, basis)
    np.testing.assert_allclose(basis.T @ projected, 0.0, atol=1e-10)


def test_shared_amounts_and_scales_are_recovered() -> None:
    rng = np.random.default_rng(2)
    angles = np.linspace(3, 35, 500)
    weight = np.ones(500)
    basis = orthonormal(background_terms(angles), weight)
    amounts, scales = np.array([0.5, 0.3, 0.2]), np.array([3.0, 0.7])
    systems = []
    for scale in scales:
        columns = np.exp(-((angles[:, None] - rng.uniform(8, 30, 3)) ** 2) / 0.1)
        systems.append(system(columns, scale * columns @ amounts + 5.0 / angles, weight, basis))
    fit = tied_fit(systems, rounds=30)
    np.testing.assert_allclose(fit.amounts, amounts, atol=1e-4)
    np.testing.assert_allclose(fit.scales, scales, rtol=1e-3)
    assert fit.chi_square == pytest.approx(0.0, abs=1e-3)


def test_chi_square_from_normal_equations_is_that_of_the_residual() -> None:
    rng = np.random.default_rng(3)
    columns, counts, weight = rng.random((80, 3)), rng.random(80), rng.uniform(1, 2, 80)
    basis = orthonormal(np.ones((80, 1)), weight)
    equations = system(columns, counts, weight, basis)
    amounts = np.array([0.2, 0.5, 0.1])
    residual = project_vector(counts - columns @ amounts, weight, basis)
    assert equations.chi_square(amounts) == pytest.approx(float(residual @ residual), rel=1e-9)


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10_000), st.integers(2, 5))
def test_alternation_that_stops_early_is_as_good_as_a_long_one(seed: int, scans: int) -> None:
    rng = np.random.default_rng(seed)
    truth = rng.uniform(0.1, 1, 3)
    systems = []
    for scale in rng.uniform(0.2, 3, scans):
        columns = rng.random((200, 3))
        counts = 100 * scale * columns @ truth + rng.normal(size=200)
        systems.append(system(columns, counts, np.ones(200), np.zeros((200, 0))))
    settled = tied_fit(systems, rounds=50)
    again = tied_fit(systems, settled.scales, rounds=200)
    assert settled.chi_square - again.chi_square < 1e-3 * again.chi_square + 0.1
