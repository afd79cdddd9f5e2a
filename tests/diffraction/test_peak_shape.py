"""Profiles."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from xrdmica.diffraction.peak_shape import convolve_profile, draw_together, pseudo_voigt, scherrer_width


@pytest.mark.parametrize("share", [0.0, 0.5, 1.0])
def test_pseudo_voigt_against_scipy(share: float) -> None:
    """Built here from scipy's normal and Cauchy distributions of the same width."""
    from scipy.stats import cauchy, norm

    x = np.linspace(-3, 3, 501)
    width = 0.3
    expected = share * cauchy.pdf(x, scale=width / 2) + (1 - share) * norm.pdf(x, scale=width / np.sqrt(8 * np.log(2)))
    np.testing.assert_allclose(pseudo_voigt(x, width, share), expected, rtol=1e-10)
    assert pseudo_voigt(np.array([width / 2]), width, share)[0] == pytest.approx(
        pseudo_voigt(np.zeros(1), width, share)[0] / 2, rel=1e-9
    )


def test_scherrer_width() -> None:
    """0.9 * 1.5406 / (100 * cos 15) rad = 0.822 degrees at 30 degrees for 100 angstrom."""
    assert float(scherrer_width(30.0, 1.5406, 100.0)) == pytest.approx(0.8225, abs=2e-4)


def test_convolution_of_a_single_point_is_the_profile() -> None:
    values = np.zeros(2001)
    values[1000] = 1 / 0.02
    x = (np.arange(2001) - 1000) * 0.02
    smeared = convolve_profile(values, 0.02, 0.2, 0.5)
    near = np.abs(x) < 1.0
    np.testing.assert_allclose(smeared[near], pseudo_voigt(x[near], 0.2, 0.5), rtol=0.06, atol=1e-3)


def test_convolution_of_a_gaussian_adds_widths() -> None:
    x = (np.arange(4001) - 2000) * 0.01
    wide = pseudo_voigt(x, 0.3, 0.0)
    smeared = convolve_profile(wide, 0.01, 0.4, 0.0)
    np.testing.assert_allclose(smeared, pseudo_voigt(x, 0.5, 0.0), atol=2e-3 * wide.max())


@given(st.floats(0.03, 0.5), st.floats(0, 1), st.integers(0, 2**32 - 1))
def test_convolution_keeps_area_constants_and_sign(fwhm: float, share: float, seed: int) -> None:
    rng = np.random.default_rng(seed)
    values = np.zeros((2, 3000))
    values[:, 1300:1700] = rng.uniform(0, 1, (2, 400))
    before = values.copy()
    smeared = convolve_profile(values, 0.02, fwhm, share)
    np.testing.assert_array_equal(values, before)
    np.testing.assert_allclose(smeared.sum(axis=1), values.sum(axis=1), rtol=1e-9)
    assert smeared.min() > -1e-9
    np.testing.assert_allclose(convolve_profile(np.full(500, 3.0), 0.02, fwhm, share), 3.0, rtol=1e-9)
    # stacked curves are the same as one by one
    np.testing.assert_allclose(smeared[0], convolve_profile(values[0], 0.02, fwhm, share), atol=1e-10)


@given(st.integers(0, 2**32 - 1), st.floats(0, 1), st.floats(0.04, 0.4))
def test_drawing_together_is_the_sum_of_lines(seed: int, share: float, narrowest: float) -> None:
    """Against the plain sum, also on an uneven scan in any order and with lines outside it."""
    rng = np.random.default_rng(seed)
    centres = rng.uniform(8.0, 62.0, 60)
    areas = rng.uniform(0, 5, 60)
    widths = narrowest * (1 + 0.6 * (centres / 60) ** 2)
    two_theta = rng.permutation(np.sort(rng.uniform(10.0, 60.0, 900)))
    plain = sum(a * pseudo_voigt(two_theta - c, w, share) for c, a, w in zip(centres, areas, widths, strict=True))
    found = draw_together(two_theta, centres, areas, widths, share)
    assert np.abs(found - plain).max() < 3e-3 * plain.max()
    assert found.min() >= 0
