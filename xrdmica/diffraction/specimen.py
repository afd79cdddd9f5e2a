"""The specimen in the beam: how much it absorbs, how much of a thin film is seen, how deep the beam goes."""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.ions import GROUP_IONS, element_of, is_neutral, mass_of
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.errors import StructureError
from xrdmica.radiation import Radiation

__all__ = ["film_factor", "mixture_attenuation", "phase_attenuation", "transparency_shift"]


def film_factor(two_theta: NDArray[np.float64], mass_attenuation: float, mass_mg_cm2: float) -> NDArray[np.float64]:
    """Share of the intensity of a thick specimen that a film gives, 1 - exp(-2 mu* m / sin theta).

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]
    mass_attenuation : float
        Of the specimen [cm^2/g].
    mass_mg_cm2 : float
        Mass per area of the film [mg/cm^2].
    """
    sine = np.sin(np.radians(two_theta) / 2)
    return np.asarray(-np.expm1(-2e-3 * mass_attenuation * mass_mg_cm2 / sine))


def transparency_shift(
    two_theta: NDArray[np.float64],
    linear_attenuation: float,
    goniometer_radius: float,
    thickness: float | None = None,
) -> NDArray[np.float64]:
    """Mean shift of a line because the beam is reflected below the surface.

    Parameters
    ----------
    two_theta : ndarray, shape (n,)
        [degree]
    linear_attenuation : float
        Of the packed specimen [1/mm].
    goniometer_radius : float
        [mm]
    thickness : float, optional
        Of a film [mm]; thick when left out.

    Returns
    -------
    ndarray, shape (n,)
        [degree]; -sin(2 theta) / (2 mu R) for a thick specimen, as a displacement by the mean depth of reflection.

    References
    ----------
    Klug & Alexander (1974) X-ray Diffraction Procedures, 2nd ed., ch. 5 (from memory).
    """
    theta = np.radians(two_theta) / 2
    depth = np.sin(theta) / (2 * linear_attenuation)
    if thickness is not None:
        passed = thickness / depth
        depth = depth - thickness * np.exp(-passed) / -np.expm1(-passed)
    return np.asarray(np.degrees(-2.0 * depth * np.cos(theta) / goniometer_radius))


def phase_attenuation(phase: str | Phase, radiation: Radiation) -> float:
    """Mass attenuation coefficient of a library phase by its dry formula [cm^2/g].

    Parameters
    ----------
    phase : str or Phase
        Of an interstratified phase: the mean of both kinds at the usual share, by mass of a formula unit.
    radiation : Radiation
        Its strongest line counts.

    References
    ----------
    Elam, Ravel & Sieber (2002) Radiat. Phys. Chem. 63, 121-128, as tabulated by xraydb.
    """
    return _attenuation(phase if isinstance(phase, str) else phase.id, radiation.energy_ev)


@lru_cache(maxsize=512)
def _attenuation(phase: str, energy_ev: float) -> float:
    import xraydb

    loaded = load_phase(phase)
    if loaded.stack is not None:
        share = loaded.stack.fraction[1]
        kinds = ((load_phase(loaded.stack.first), share), (load_phase(loaded.stack.second), 1 - share))
        masses = [part * kind.molar_mass for kind, part in kinds]
        parts = [mass * _attenuation(kind.id, energy_ev) for mass, (kind, _) in zip(masses, kinds, strict=True)]
        return sum(parts) / sum(masses)
    total, mass = 0.0, 0.0
    for element, count in _elements(loaded).items():
        part = count * mass_of(element)
        total += part * float(np.squeeze(xraydb.mu_elam(element, energy_ev)))
        mass += part
    return total / mass


def _elements(phase: Phase) -> Mapping[str, float]:
    """Atoms per formula unit, without interlayer molecules."""
    formula = phase.formula
    tables = (formula.framework, formula.interlayer, formula.octahedral, formula.tetrahedral, formula.anions)
    out: dict[str, float] = {}
    for ion, count in (item for table in tables for item in table.items()):
        if not is_neutral(ion):
            atoms = GROUP_IONS[ion][1] if ion in GROUP_IONS else {element_of(ion): 1}
            for element, number in atoms.items():
                out[element] = out.get(element, 0.0) + count * number
    return out


def mixture_attenuation(weights: Mapping[str, float], radiation: Radiation) -> float:
    """Mass attenuation coefficient of a mixture [cm^2/g]: coefficients add by weight.

    Parameters
    ----------
    weights : mapping
        Phase id -> weight, any common unit, not all zero.
    radiation : Radiation

    Raises
    ------
    StructureError
        If there is no weight, or a phase is not in the library.
    """
    total = sum(weights.values())
    if total <= 0 or min(weights.values()) < 0:
        raise StructureError("attenuation of a mixture without weights", fix="give weights of at least one phase")
    return sum(weight * phase_attenuation(phase, radiation) for phase, weight in weights.items()) / total
