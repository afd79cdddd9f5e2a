"""Ions of sheet silicates: charge, mass, and the site each may take."""

from __future__ import annotations

import re
from functools import lru_cache

from xrdmica.errors import ChemistryError

__all__ = ["DEFAULT_CHARGE", "GROUP_IONS", "charge_of", "element_of", "mass_of", "usual_ion"]

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
    "C2H6O2": (0, {"C": 2, "H": 6, "O": 2}),
    "C3H8O3": (0, {"C": 3, "H": 8, "O": 3}),
}
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
