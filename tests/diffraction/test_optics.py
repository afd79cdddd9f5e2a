"""Factors of instrument and mount."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from xrdmica.diffraction.optics import (
    RANDOM_SPREAD,
    Instrument,
    displacement_shift,
    load_instrument,
    lorentz_factor,
    mount_factor,
    polarisation,
    powder_ring_factor,
)
from xrdmica.errors import XrdmicaError

TWO_THETA = np.linspace(3.0, 80.0, 300)
SINE = np.sin(np.radians(TWO_THETA) / 2)


def test_ring_factor_of_a_perfect_mount_is_constant() -> None:
    """Reynolds (1986): a single crystal has no powder ring; psi tends to sqrt(2 pi) / (2 sigma S)."""
    psi = powder_ring_factor(TWO_THETA, 1e-3, 2.3, 2.3)
    np.testing.assert_allclose(psi / psi[0], 1.0, atol=1e-3)
    opening = np.radians(np.hypot(1.15, 1.15))
    assert psi[0] == pytest.approx(np.sqrt(2 * np.pi) / (2 * np.radians(1e-3) * opening), rel=1e-3)


@pytest.mark.parametrize("spread", [200.0, 2000.0])
def test_ring_factor_of_a_wide_spread_falls_as_one_over_sine(spread: float) -> None:
    """Series of the published expression for small Q: psi = 1 / (4 sigma^2 sin theta)."""
    opening = np.radians(np.hypot(1.15, 1.15))
    sigma = np.radians(spread)
    from scipy.special import erf

    q = opening / (2 * np.sqrt(2) * sigma * SINE)
    written_out = np.sqrt(2 * np.pi) * erf(q) / (2 * sigma * opening) - 2 * SINE * (1 - np.exp(-q * q)) / opening**2
    np.testing.assert_allclose(written_out, 1 / (4 * sigma**2 * SINE), rtol=0.02)


def test_ring_factor_runs_smoothly_into_a_random_powder() -> None:
    below = powder_ring_factor(TWO_THETA, RANDOM_SPREAD * 0.99999, 2.3, 2.3)
    np.testing.assert_allclose(below, powder_ring_factor(TWO_THETA, RANDOM_SPREAD, 2.3, 2.3), rtol=0.03)


def test_ring_factor_by_counting_crystals() -> None:
    """What psi stands for: crystals tilted by a Gaussian spread, seen through an axial opening of triangular acceptance.

    The tilt of a normal in the axial direction that still reflects into an axial angle gamma of the beam is
    gamma / (2 sin theta). Summing the density of tilts over the acceptance gives psi up to a constant factor.
    """
    sigma, opening = np.radians(12.0), np.radians(np.hypot(1.15, 1.15))
    gamma = np.linspace(-opening, opening, 4001)
    acceptance = 1 - np.abs(gamma) / opening
    tilt = gamma / (2 * SINE[:, None])
    density = np.exp(-(tilt**2) / (2 * sigma**2)) / SINE[:, None]
    counted = (density * acceptance).sum(axis=1)
    psi = powder_ring_factor(TWO_THETA, 12.0, 2.3, 2.3)
    np.testing.assert_allclose(psi / psi[100], counted / counted[100], rtol=2e-3)


@given(st.floats(0.5, 80.0), st.floats(0.5, 10.0), st.floats(0.5, 10.0))
def test_ring_factor_is_positive(spread: float, first: float, second: float) -> None:
    psi = powder_ring_factor(TWO_THETA, spread, first, second)
    assert np.all(np.isfinite(psi))
    assert np.all(psi > 0)


def test_polarisation_limits() -> None:
    assert polarisation(np.zeros(1))[0] == 2.0
    assert polarisation(np.array([90.0]))[0] == pytest.approx(1.0)
    # graphite 002 with Cu, 26.6 degrees: K = cos^2 26.6 = 0.80 (common practice)
    k = 0.7995
    np.testing.assert_allclose(
        polarisation(TWO_THETA, 26.6) / 2, (1 + k * np.cos(np.radians(TWO_THETA)) ** 2) / (1 + k), rtol=1e-4
    )


def test_lorentz_factor_of_a_random_powder_is_the_textbook_one() -> None:
    """(1 + cos^2 2 theta) / sin^2 theta up to a constant; the 1/cos theta belongs to the area in two-theta."""
    factor = lorentz_factor(TWO_THETA, RANDOM_SPREAD, Instrument())
    textbook = (1 + np.cos(np.radians(TWO_THETA)) ** 2) / SINE**2
    np.testing.assert_allclose(factor / textbook, 0.25, rtol=1e-12)


def test_overspill_of_a_fixed_slit() -> None:
    """Half a degree at 240 mm lights 2.094 mm / sin theta: a 40 mm specimen holds it above sin theta = 0.0524, 6.0 degrees."""
    instrument = Instrument(divergence=0.5, specimen_length=40.0, goniometer_radius=240.0)
    factor = mount_factor(np.array([3.0, 5.9, 6.1, 30.0]), instrument)
    assert factor[0] == pytest.approx(np.sin(np.radians(1.5)) * 40 / (240 * np.radians(0.5)))
    assert factor[1] < 1.0
    assert factor[2] == factor[3] == 1.0


def test_automatic_slit_and_thin_film() -> None:
    automatic = mount_factor(TWO_THETA, Instrument(automatic_slit=True))
    np.testing.assert_allclose(automatic / SINE, automatic[0] / SINE[0])
    # 5 mg/cm2 at 40 cm2/g and theta = 15 degrees: 1 - exp(-2 * 40 * 0.005 / sin 15) = 0.7867
    film = mount_factor(np.array([30.0]), Instrument(), 40.0, 5.0)
    assert film[0] == pytest.approx(0.7867, abs=1e-4)
    thick = mount_factor(TWO_THETA, Instrument(), 40.0, 1e5)
    np.testing.assert_allclose(thick, mount_factor(TWO_THETA, Instrument()))


def test_displacement_shift() -> None:
    """0.1 mm below the axis of a 240 mm goniometer: -2 * 0.1 / 240 rad = -0.0477 degrees at low angles (textbook formula)."""
    shift = displacement_shift(np.array([1e-6, 120.0]), 0.1, Instrument(goniometer_radius=240.0))
    np.testing.assert_allclose(shift, [-0.04775, -0.04775 / 2], atol=1e-5)


def test_instrument_file(tmp_path: Path) -> None:
    path = tmp_path / "own.toml"
    path.write_text('name = "upstairs"\ngoniometer_radius = 173\nautomatic_slit = true\nfwhm = 0.08\n', encoding="utf-8")
    instrument = load_instrument(path)
    assert instrument.name == "upstairs"
    assert instrument.goniometer_radius == 173
    assert instrument.automatic_slit
    assert instrument.soller_incident == Instrument().soller_incident


@pytest.mark.parametrize(
    ("text", "word"),
    [("radius = 3\n", "radius"), ("fwhm = -1\n", "fwhm"), ("fwhm = \n", "cannot be read"), ('fwhm = "wide"\n', "fwhm")],
)
def test_bad_instrument_file_is_refused_in_words(tmp_path: Path, text: str, word: str) -> None:
    path = tmp_path / "bad.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(XrdmicaError, match=word) as caught:
        load_instrument(path)
    assert "bad.toml" in str(caught.value)


def test_missing_instrument_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(XrdmicaError, match="none"):
        load_instrument(tmp_path / "none.toml")
