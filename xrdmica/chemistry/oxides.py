"""Oxide weight percent of a site formula."""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING

from xrdmica.chemistry.ions import charge_of, element_of, is_neutral
from xrdmica.errors import ChemistryError

if TYPE_CHECKING:
    from xrdmica.chemistry.formula import SiteFormula

__all__ = ["OXIDE_OF", "OXIDE_ORDER", "oxide_percent"]

# ion -> (oxide, cations in it, oxygen atoms in it), in the order of an analysis
OXIDE_OF: dict[str, tuple[str, int, int]] = {
    "Si4+": ("SiO2", 1, 2), "Ti4+": ("TiO2", 1, 2), "Ti3+": ("Ti2O3", 2, 3), "Zr4+": ("ZrO2", 1, 2), "Ge4+": ("GeO2", 1, 2),
    "Al3+": ("Al2O3", 2, 3), "B3+": ("B2O3", 2, 3), "Ga3+": ("Ga2O3", 2, 3), "Sc3+": ("Sc2O3", 2, 3), "Cr3+": ("Cr2O3", 2, 3),
    "V3+": ("V2O3", 2, 3), "V4+": ("VO2", 1, 2), "V5+": ("V2O5", 2, 5), "Fe3+": ("Fe2O3", 2, 3), "Fe2+": ("FeO", 1, 1),
    "Mn4+": ("MnO2", 1, 2), "Mn3+": ("Mn2O3", 2, 3), "Mn2+": ("MnO", 1, 1), "Ni3+": ("Ni2O3", 2, 3), "Ni2+": ("NiO", 1, 1),
    "Co3+": ("Co2O3", 2, 3), "Co2+": ("CoO", 1, 1), "Cu2+": ("CuO", 1, 1), "Cu+": ("Cu2O", 2, 1), "Zn2+": ("ZnO", 1, 1),
    "Be2+": ("BeO", 1, 1), "Mg2+": ("MgO", 1, 1), "Ca2+": ("CaO", 1, 1), "Sr2+": ("SrO", 1, 1), "Ba2+": ("BaO", 1, 1),
    "Li+": ("Li2O", 2, 1), "Na+": ("Na2O", 2, 1), "K+": ("K2O", 2, 1), "Rb+": ("Rb2O", 2, 1), "Cs+": ("Cs2O", 2, 1),
    "NH4+": ("(NH4)2O", 2, 1),
}  # fmt: skip
# anion -> (its column, what is taken off because the analysis counts its charge as oxygen, oxygen atoms per anion)
_FOR_OXYGEN = {"F-": ("F", "O=F2", 0.5), "Cl-": ("Cl", "O=Cl2", 0.5), "S2-": ("S", "O=S", 1.0)}
# order of a table
OXIDE_ORDER = (*(name for name, _, _ in OXIDE_OF.values()), "F", "Cl", "S", "H2O", "O=F2", "O=Cl2", "O=S")


@lru_cache(maxsize=128)
def _weight(element: str) -> float:
    import gemmi

    return float(gemmi.Element(element).weight)


def oxide_percent(formula: SiteFormula) -> dict[str, float]:
    """Weight percent of oxides in the dry formula; structural hydroxyl counts as H2O, interlayer water and glycol do not.

    Parameters
    ----------
    formula : SiteFormula
        Any site formula.

    Returns
    -------
    dict
        Oxide or element -> weight percent of the dry mass. ``"O=F2"``, ``"O=Cl2"`` and ``"O=S"`` are negative: oxygen that
        the oxides count though another anion stands for it. For a balanced formula the values sum to 100.

    Raises
    ------
    ChemistryError
        If an ion has no oxide here, or the formula is empty.
    """
    mass = formula.molar_mass
    if mass <= 0:
        raise ChemistryError("the formula holds no atoms", fix="give a formula with amounts")
    oxygen = _weight("O")
    amounts: dict[str, float] = {}
    hydrogen = 0.0
    for site in ("tetrahedral", "octahedral", "interlayer", "anions"):
        for ion, n in getattr(formula, site).items():
            if is_neutral(ion) or ion == "O2-" or n == 0:
                continue
            if ion in ("OH-", "H+", "H3O+"):
                hydrogen += 3 * n if ion == "H3O+" else n
            elif ion in _FOR_OXYGEN:
                column, correction, share = _FOR_OXYGEN[ion]
                amounts[column] = amounts.get(column, 0.0) + n * _weight(element_of(ion))
                amounts[correction] = amounts.get(correction, 0.0) - n * share * oxygen
            elif ion in OXIDE_OF:
                name, cations, oxygens = OXIDE_OF[ion]
                own = _weight("N") + 4 * _weight("H") if ion == "NH4+" else _weight(element_of(ion))
                amounts[name] = amounts.get(name, 0.0) + n * (own + oxygen * oxygens / cations)
            else:
                raise ChemistryError(f"no oxide is known for {ion} ({charge_of(ion):+d})", fix="check the charge of the ion")
    if hydrogen:
        amounts["H2O"] = hydrogen * (_weight("H") + oxygen / 2)
    return {name: 100 * amounts[name] / mass for name in OXIDE_ORDER if name in amounts}
