"""Ions of sheet silicates: charge, mass, and the site each may take."""

from __future__ import annotations

import re
from functools import lru_cache

from xrdmica.errors import ChemistryError

__all__ = [
    "ANION_SYMBOLS", "DEFAULT_CHARGE", "GROUP_IONS", "INTERLAYER_ONLY", "OTHER_CHARGES", "charge_of", "element_of", "ion_name",
    "is_neutral", "mass_of", "may_sit", "usual_ion",
]  # fmt: skip

# the charge meant when none is written; iron is the one that mineralogists must watch
DEFAULT_CHARGE = {
    "H": 1, "Li": 1, "Na": 1, "K": 1, "Rb": 1, "Cs": 1, "Be": 2, "Mg": 2, "Ca": 2, "Sr": 2, "Ba": 2, "Mn": 2, "Fe": 2, "Co": 2,
    "Ni": 2, "Cu": 2, "Zn": 2, "Al": 3, "Cr": 3, "V": 3, "Ga": 3, "Sc": 3, "B": 3, "Si": 4, "Ti": 4, "Zr": 4, "C": 4, "Ge": 4,
    "P": 5, "S": 6, "O": -2, "F": -1, "Cl": -1,
}  # fmt: skip
# ions made of several atoms -> (charge, atoms)
GROUP_IONS: dict[str, tuple[int, dict[str, int]]] = {
    "OH-": (-1, {"O": 1, "H": 1}),
    "H2O": (0, {"H": 2, "O": 1}),
    "NH4+": (1, {"N": 1, "H": 4}),
    "H3O+": (1, {"H": 3, "O": 1}),
    "C2H6O2": (0, {"C": 2, "H": 6, "O": 2}),
    "C3H8O3": (0, {"C": 3, "H": 8, "O": 3}),
}
# charges that are met in sheet silicates beside the default one
OTHER_CHARGES: dict[str, tuple[int, ...]] = {
    "Fe": (3,), "Mn": (3, 4), "Ti": (3,), "V": (4, 5), "Co": (3,), "Ni": (3,), "Cu": (1,), "S": (-2,),
}  # fmt: skip
ANION_SYMBOLS = frozenset({"O", "OH", "F", "Cl", "S"})
# too large for the octahedra of a sheet silicate: found nowhere but between the layers
INTERLAYER_ONLY = frozenset({"K", "Na", "Ca", "Ba", "Rb", "Cs", "Sr", "NH4", "H3O"})
# which ions may take which site: Rieder et al. (1998) for micas [from memory], wider by the exchangeable cations of
# swelling layers and by rare substitutions of smectites, serpentines and synthetic products (common practice)
_MAY_SIT: dict[str, frozenset[str]] = {
    "interlayer": frozenset(
        {"K+", "Na+", "Ca2+", "Ba2+", "Rb+", "Cs+", "Sr2+", "NH4+", "H3O+", "H+", "Li+", "Mg2+", "Al3+", "Fe2+", "Fe3+", "Mn2+",
         "Ni2+", "Co2+", "Cu2+", "Zn2+", "H2O", "C2H6O2", "C3H8O3"}
    ),
    "octahedral": frozenset(
        {"Al3+", "Mg2+", "Fe2+", "Fe3+", "Li+", "Mn2+", "Mn3+", "Mn4+", "Ti3+", "Ti4+", "Cr3+", "V3+", "V4+", "V5+", "Zn2+",
         "Ni2+", "Ni3+", "Co2+", "Co3+", "Cu2+", "Sc3+", "Ga3+", "Zr4+"}
    ),
    "tetrahedral": frozenset({"Si4+", "Al3+", "Fe3+", "B3+", "Be2+", "Ge4+", "Ga3+", "Ti4+"}),
    "anions": frozenset({"O2-", "OH-", "F-", "Cl-", "S2-"}),
}  # fmt: skip
_ION = re.compile(r"([A-Z][a-z]?)(\d*)([+-]?)")


def usual_ion(element: str) -> str:
    """The ion meant by a bare element symbol: ``Al`` -> ``Al3+``.

    Raises
    ------
    ChemistryError
        If the element has no usual charge in sheet silicates.
    """
    if element not in DEFAULT_CHARGE:
        raise ChemistryError(f"element {element!r} is not expected in a sheet silicate", fix="check the formula's spelling")
    charge = DEFAULT_CHARGE[element]
    size = "" if abs(charge) == 1 else str(abs(charge))
    return f"{element}{size}{'+' if charge > 0 else '-'}"


def ion_name(symbol: str, charge: int | None = None) -> str:
    """The ion of an element or group with a charge, the usual one when none is given: ``("Fe", 3)`` -> ``Fe3+``.

    Raises
    ------
    ChemistryError
        If the element is unknown here or does not take that charge in sheet silicates.
    """
    group = next((ion for ion in GROUP_IONS if ion.rstrip("+-") == symbol), None)
    usual = charge_of(group) if group else charge_of(usual_ion(symbol))
    if charge is None or charge == usual:
        return group or usual_ion(symbol)
    others = OTHER_CHARGES.get(symbol, ())
    if charge not in others:
        known = " or ".join(f"{abs(c)}{'+' if c > 0 else '-'}" for c in (usual, *others))
        sign = "+" if charge > 0 else "-"
        raise ChemistryError(
            f"{symbol} with the charge {abs(charge)}{sign} is not expected in a sheet silicate", fix=f"{symbol} takes {known}"
        )
    size = "" if abs(charge) == 1 else str(abs(charge))
    return f"{symbol}{size}{'+' if charge > 0 else '-'}"


def is_neutral(ion: str) -> bool:
    """Whether it is a molecule without charge (water, glycol, glycerol), which the dry mass leaves out."""
    return ion in GROUP_IONS and GROUP_IONS[ion][0] == 0


def may_sit(ion: str, site: str) -> bool:
    """Whether an ion is known to take a site (``interlayer``, ``octahedral``, ``tetrahedral``, ``anions``)."""
    return ion in _MAY_SIT[site]


def charge_of(ion: str) -> int:
    """Charge of an ion written as ``Fe3+``, ``K+``, ``O2-``, ``OH-``, ``H2O``.

    Raises
    ------
    ChemistryError
        If the text is not an ion.
    """
    if ion in GROUP_IONS:
        return GROUP_IONS[ion][0]
    match = _ION.fullmatch(ion)
    if match is None:
        raise ChemistryError(f"{ion!r} is not an ion", fix="write the element and its charge, such as Fe3+ or O2-")
    if not match.group(3):
        return 0
    size = int(match.group(2) or 1)
    return size if match.group(3) == "+" else -size


def element_of(ion: str) -> str:
    """Element of a simple ion: ``Fe3+`` -> ``Fe``; groups such as ``OH-`` return themselves without charge."""
    if ion in GROUP_IONS:
        return ion.rstrip("+-")
    match = _ION.fullmatch(ion)
    if match is None:
        raise ChemistryError(f"{ion!r} is not an ion", fix="write the element and its charge, such as Fe3+ or O2-")
    return match.group(1)


@lru_cache(maxsize=256)
def mass_of(ion: str) -> float:
    """Molar mass of an ion or molecule [g/mol], standard atomic weights as tabulated by gemmi."""
    import gemmi

    atoms = GROUP_IONS[ion][1] if ion in GROUP_IONS else {element_of(ion): 1}
    return float(sum(n * gemmi.Element(symbol).weight for symbol, n in atoms.items()))
