"""The instrument and the mount: everything between a layer's scattering and the counts, as factors on the angle scale."""

from __future__ import annotations

import tomllib
from functools import lru_cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from xrdmica.diffraction.specimen import film_factor
from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation

__all__ = [
    "K_BETA",
    "RANDOM_SPREAD",
    "Instrument",
    "axial_nodes",
    "displacement_shift",
    "load_instrument",
    "lorentz_factor",
    "mount_factor",
    "polarisation",
    "powder_ring_factor",
    "tube_lines",
]  # fmt: skip

# K-beta1,3 [angstrom]: International Tables C (1992), table 4.2.2.1 (from memory)
K_BETA: dict[str, float] = {"Cu": 1.3922, "Co": 1.6208, "Fe": 1.7566, "Cr": 2.0849, "Mo": 0.6323}

# With the tilt spread in radian, psi for an oriented mount tends to 1/(4 sigma^2 sin theta); the density of normals of
# a random powder over the half-sphere is reached at sigma = 1 radian.
RANDOM_SPREAD = float(np.degrees(1.0))


class Instrument(BaseModel):
    """Settings of a diffractometer in reflection geometry, with the defaults of a common set-up.

    Attributes
    ----------
    goniometer_radius : float
        [mm]
    soller_incident, soller_diffracted : float
        Full axial openings [degree].
    divergence : float
        Opening of the fixed slit [degree]; ``automatic_slit`` makes the lit area constant instead.
    specimen_length : float
        Along the beam [mm].
    monochromator_two_theta : float
        Bragg angle of a diffracted-beam crystal [degree]; 0 for a filter.
    fwhm : float
        Width of the instrument's own profile at low angles [degree].
    lorentzian : float
        Lorentzian share of that profile, 0 to 1.
    k_beta : float
        Area of the K-beta line that filter or monochromator let through, relative to K-alpha; 0 for none. A nickel filter
        leaves about 0.01 with copper (common practice). Only for tubes named by their metal.
    axial_asymmetry : bool
        Whether lines at low angles get the tail towards lower angles that the axial openings cause.

    Notes
    -----
    An instrument file has any of these keys; what is left out keeps its default. For example::

        # theta-theta set-up of the clay laboratory
        name = "basement, copper, nickel filter"
        goniometer_radius = 240.0       # mm
        soller_incident = 2.3           # degree, full opening
        soller_diffracted = 2.3         # degree, full opening
        divergence = 0.25               # degree
        automatic_slit = false
        specimen_length = 20.0          # mm, along the beam
        monochromator_two_theta = 0.0   # degree; 26.6 for graphite with copper
        fwhm = 0.08                     # degree
        lorentzian = 0.5
        k_beta = 0.005
        axial_asymmetry = true
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    name: str = "default reflection set-up"
    goniometer_radius: float = Field(default=240.0, gt=10, lt=2000)
    soller_incident: float = Field(default=2.3, gt=0.1, le=30)
    soller_diffracted: float = Field(default=2.3, gt=0.1, le=30)
    divergence: float = Field(default=0.25, gt=0, le=5)
    automatic_slit: bool = False
    specimen_length: float = Field(default=40.0, gt=1, le=200)
    monochromator_two_theta: float = Field(default=0.0, ge=0, lt=90)
    fwhm: float = Field(default=0.10, gt=0.005, lt=2)
    lorentzian: float = Field(default=0.5, ge=0, le=1)
    k_beta: float = Field(default=0.0, ge=0, le=0.5)
    axial_asymmetry: bool = False


def load_instrument(path: str | Path) -> Instrument:
    """Read an instrument file (TOML, keys as the attributes of `Instrument`).

    Raises
    ------
    XrdmicaError
        If the file cannot be read or a key is unknown or out of range.
    """
    try:
        return Instrument.model_validate(tomllib.loads(Path(path).read_text(encoding="utf-8")))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise XrdmicaError(f"instrument file {path} cannot be read", why=str(error), fix="give a TOML file") from error
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        known = ", ".join(Instrument.model_fields)
        raise XrdmicaError(f"instrument file {path}: {key}: {first['msg']}", fix=f"known keys are {known}") from error


def polarisation(two_theta: NDArray[np.float64], monochromator_two_theta: float = 0.0) -> NDArray[np.float64]:
    """Polarisation 1 + K cos^2(2 theta), normalised to 2 at zero angle.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]
    monochromator_two_theta : float
        Diffracted-beam crystal, 0 for none [degree].
    """
    k = np.cos(np.radians(monochromator_two_theta)) ** 2
    return np.asarray(2.0 * (1.0 + k * np.cos(np.radians(two_theta)) ** 2) / (1.0 + k))


def powder_ring_factor(
    two_theta: NDArray[np.float64], orientation_spread: float, soller_incident: float, soller_diffracted: float
) -> NDArray[np.float64]:
    """Share psi of crystals that an oriented mount brings into reflection.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]
    orientation_spread : float
        Standard deviation of the tilt of layers from the mount's plane [degree]; `RANDOM_SPREAD` or more means a
        random powder.
    soller_incident, soller_diffracted : float
        Full axial openings [degree].

    Returns
    -------
    ndarray, shape (n,)
        With angles in radian: constant for a small spread, 1/(4 sigma^2 sin theta) for a large one.

    References
    ----------
    Reynolds (1986) Clays and Clay Minerals 34, 359-367.
    """
    from scipy.special import erf

    sine = np.sin(np.radians(two_theta) / 2)
    if orientation_spread >= RANDOM_SPREAD:
        return np.asarray(1.0 / (4.0 * sine))
    sigma = np.radians(orientation_spread)
    opening = np.radians(np.hypot(soller_incident / 2, soller_diffracted / 2))
    q = opening / (2.0 * np.sqrt(2.0) * sigma * sine)
    ring = np.sqrt(2 * np.pi) * erf(q) / (2.0 * sigma * opening)
    return np.asarray(ring - 2.0 * sine * -np.expm1(-q * q) / opening**2)


def lorentz_factor(two_theta: NDArray[np.float64], orientation_spread: float, instrument: Instrument) -> NDArray[np.float64]:
    """Lorentz-polarisation factor for basal intensity per unit of two-theta: polarisation * psi / sin theta."""
    ring = powder_ring_factor(two_theta, orientation_spread, instrument.soller_incident, instrument.soller_diffracted)
    return polarisation(two_theta, instrument.monochromator_two_theta) * ring / np.sin(np.radians(two_theta) / 2)


def mount_factor(
    two_theta: NDArray[np.float64],
    instrument: Instrument,
    mass_attenuation: float | None = None,
    mass_mg_cm2: float | None = None,
) -> NDArray[np.float64]:
    """Loss from over-spill of the beam and from a film too thin to stop it.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]
    instrument : Instrument
        Slit, specimen length, radius.
    mass_attenuation : float, optional
        Of the specimen [cm^2/g].
    mass_mg_cm2 : float, optional
        Mass per area of the film [mg/cm^2]; without both the film counts as thick.
    """
    sine = np.sin(np.radians(two_theta) / 2)
    if instrument.automatic_slit:
        factor = sine.copy()
    else:
        lit = instrument.goniometer_radius * np.radians(instrument.divergence)
        factor = np.minimum(1.0, instrument.specimen_length * sine / lit)
    if mass_attenuation is not None and mass_mg_cm2 is not None:
        factor = factor * film_factor(two_theta, mass_attenuation, mass_mg_cm2)
    return np.asarray(factor)


def displacement_shift(two_theta: NDArray[np.float64], displacement: float, instrument: Instrument) -> NDArray[np.float64]:
    """Shift of a line when the specimen surface lies `displacement` [mm] below the axis: -2 e cos(theta) / R.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]

    Returns
    -------
    ndarray, shape (n,)
        [degree]
    """
    cosine = np.cos(np.radians(two_theta) / 2)
    return np.asarray(np.degrees(-2.0 * displacement * cosine / instrument.goniometer_radius))


def tube_lines(radiation: Radiation, instrument: Instrument | None = None) -> tuple[tuple[float, float], ...]:
    """(wavelength [angstrom], weight) of every line that reaches the detector; K-alpha weights sum to 1."""
    lines = tuple(zip(radiation.wavelengths, radiation.weights, strict=True))
    if instrument is None or instrument.k_beta <= 0 or radiation.name not in K_BETA:
        return lines
    return (*lines, (K_BETA[radiation.name], instrument.k_beta))


def wavelength_ratios(radiation: Radiation, instrument: Instrument | None = None) -> tuple[tuple[float, float], ...]:
    """(wavelength relative to the strongest line, weight) for every line that reaches the detector."""
    return tuple((wavelength / radiation.wavelength, share) for wavelength, share in tube_lines(radiation, instrument))


@lru_cache(maxsize=32)
def axial_nodes(instrument: Instrument) -> tuple[tuple[float, float], ...]:
    """Cosines of the axial angle between incident and diffracted ray, with weights that sum to 1.

    A line at 2 theta is seen at phi with cos(phi) cos(angle) = cos(2 theta): below 90 degrees always at lower angles.

    Parameters
    ----------
    instrument : Instrument
        Either Soller slit passes a triangle of angles; the difference of two is close to normal, with the sum of their
        variances S^2/24, and is sampled at the nodes of Gauss-Hermite quadrature.

    Returns
    -------
    tuple of (float, float)
        ``((1.0, 1.0),)`` where the instrument leaves the asymmetry out.

    References
    ----------
    van Laar & Yelon (1984) J. Appl. Cryst. 17, 47-54, for the geometry; here without the finite length of the detector slit.
    """
    if not instrument.axial_asymmetry:
        return ((1.0, 1.0),)
    sigma = np.radians(np.sqrt((instrument.soller_incident**2 + instrument.soller_diffracted**2) / 24))
    places, weights = np.polynomial.hermite_e.hermegauss(10)
    half = places > 0
    return tuple(
        (float(np.cos(sigma * place)), float(weight))
        for place, weight in zip(places[half], weights[half] / weights[half].sum(), strict=True)
    )
