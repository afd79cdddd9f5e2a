"""What one atom scatters: ionic form factors and anomalous dispersion."""

from __future__ import annotations

import json
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.ions import GROUP_IONS, charge_of, element_of
from xrdmica.errors import StructureError

__all__ = ["FormFactors", "anomalous", "form_factor"]

FormFactors = Literal["ionic", "neutral"]
# Scattering stand-ins where a free ion does not exist. O2- is not bound in vacuum, so tables carry O1-, the usual
# choice for silicates (common practice); the proton of OH is left out, as in the published layer models.
_STAND_IN = {"O2-": "O1-", "OH-": "O1-", "Fe": "Fe", "Mn3+": "Mn3+", "V3+": "V3+"}


@lru_cache(maxsize=128)
def _table_row(symbol: str) -> tuple[float, NDArray[np.float64], NDArray[np.float64]]:
    import xraydb

    rows = [row for row in xraydb.get_xraydb().get_cache("Waasmaier") if row.ion == symbol]
    if not rows:
        raise StructureError(f"no form factor for {symbol!r}", fix="use an ion of the Waasmaier-Kirfel table, such as Mg2+")
    row = rows[0]
    return float(row.offset), np.array(json.loads(row.scale)), np.array(json.loads(row.exponents))


@lru_cache(maxsize=256)
def _table_symbol(ion: str, model: FormFactors) -> str:
    """Name of `ion` in the Waasmaier-Kirfel table, falling back on the neutral atom where the ion is not tabulated."""
    element = element_of(ion)
    if ion == "OH-":
        element = "O"
    if model == "neutral" or charge_of(ion) == 0:
        return element
    import xraydb

    charge = charge_of(ion)
    wanted = _STAND_IN.get(ion, f"{element}{abs(charge)}{'+' if charge > 0 else '-'}")
    return wanted if wanted in xraydb.f0_ions(element) else element


def form_factor(ion: str, s: NDArray[np.float64], model: FormFactors = "ionic") -> NDArray[np.float64]:
    """Form factor f0 of an ion, or of a small molecule as the sum of its atoms.

    Parameters
    ----------
    ion : str
        Such as ``"Mg2+"``, ``"O2-"``, ``"OH-"``, ``"H2O"`` or a neutral element.
    s : ndarray, shape (n,)
        sin(theta)/lambda [1/angstrom].
    model : {"ionic", "neutral"}
        Charged ions (oxygen as O1-) or neutral atoms.

    Returns
    -------
    ndarray, shape (n,)
        Electrons.

    References
    ----------
    Waasmaier & Kirfel (1995) Acta Cryst. A51, 416-431, as tabulated by xraydb.
    """
    if ion in GROUP_IONS and ion != "OH-":
        parts = [count * form_factor(element, s, "neutral") for element, count in GROUP_IONS[ion][1].items()]
        return np.asarray(sum(parts))
    offset, scale, exponents = _table_row(_table_symbol(ion, model))
    return np.asarray(offset + np.exp(-np.multiply.outer(s * s, exponents)) @ scale)


@lru_cache(maxsize=512)
def anomalous(ion: str, energy_ev: float) -> complex:
    """Anomalous dispersion f' + i f'' at one photon energy.

    Parameters
    ----------
    ion : str
        Ion or molecule; light molecules sum over their atoms.
    energy_ev : float
        Photon energy [eV].

    Returns
    -------
    complex
        Electrons; zero for hydrogen and helium, which scatter without dispersion here.

    References
    ----------
    Chantler (2000) J. Phys. Chem. Ref. Data 29, 597-1048, as tabulated by xraydb.
    """
    import xraydb

    atoms = GROUP_IONS[ion][1] if ion in GROUP_IONS else {element_of(ion): 1}
    total = 0j
    for element, count in atoms.items():
        if element in ("H", "He"):
            continue
        first = float(np.squeeze(xraydb.f1_chantler(element, energy_ev)))
        second = float(np.squeeze(xraydb.f2_chantler(element, energy_ev)))
        total += count * complex(first, second)
    return total
