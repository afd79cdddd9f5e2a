"""Group and octahedral character of a site formula."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

from xrdmica.chemistry.checks import interlayer_cations
from xrdmica.chemistry.ions import charge_of

if TYPE_CHECKING:
    from xrdmica.chemistry.formula import SiteFormula

__all__ = ["Character", "Group", "group_of", "octahedral_character"]

Character = Literal["dioctahedral", "trioctahedral", "di,trioctahedral"]
Group = Literal[
    "true mica", "brittle mica", "interlayer-deficient mica", "vermiculite", "smectite", "talc group",
    "kaolin", "serpentine", "chlorite",
]  # fmt: skip
# layer charges per formula unit, from memory after the nomenclature reports named in group_of
_NO_CHARGE, _SMECTITE, _MICA, _VERMICULITE = 0.2, 0.6, 0.85, 1.2
# never the interlayer cation of a mica; between layers they are exchangeable and hydrated (common practice)
_HYDRATED = frozenset({"Mg2+", "Mn2+", "Ni2+", "Co2+", "Cu2+", "Zn2+", "Fe2+"})


def octahedral_character(formula: SiteFormula) -> Character:
    """Di- or trioctahedral: fewer than 2.5 octahedral cations of 3, or not.

    Chlorite is judged by the mean of its two sheets; with near to 5 cations for both (one sheet of each kind, as in sudoite
    and cookeite) it is ``"di,trioctahedral"``.

    References
    ----------
    .. [1] Rieder et al. (1998), Canadian Mineralogist 36, 905-912 (limit of 2.5) [limits from memory].
    .. [2] Guggenheim et al. (2006), Clays and Clay Minerals 54, 761-772.
    """
    cations = round(formula.site_sum("octahedral"), 6)
    if formula.layer_type != "2:1:1":
        return "dioctahedral" if cations < 2.5 else "trioctahedral"
    if 4.7 <= cations < 5.5:
        return "di,trioctahedral"
    return "dioctahedral" if cations / 2 < 2.5 else "trioctahedral"


def group_of(formula: SiteFormula) -> Group:
    """The group by layer type, layer charge and the share of divalent interlayer cations.

    Between 0.6 and 0.85 charges, water in the formula or mostly divalent interlayer cations mean vermiculite, else
    interlayer-deficient mica.

    References
    ----------
    .. [1] Rieder et al. (1998), Canadian Mineralogist 36, 905-912 [limits from memory].
    .. [2] Guggenheim et al. (2006), Clays and Clay Minerals 54, 761-772 [limits from memory].
    """
    if formula.layer_type == "2:1:1":
        return "chlorite"
    if formula.layer_type == "1:1":
        return "kaolin" if octahedral_character(formula) == "dioctahedral" else "serpentine"
    charge = round(formula.layer_charge, 6)
    cations = interlayer_cations(formula)
    total = sum(cations.values())
    divalent = sum(n for ion, n in cations.items() if charge_of(ion) >= 2)
    mostly_divalent = total > 0 and divalent > 0.5 * total
    hydrated = formula.water > 0 or (total > 0 and sum(n for ion, n in cations.items() if ion in _HYDRATED) > 0.5 * total)
    if charge < _NO_CHARGE:
        return "talc group"
    if charge < _SMECTITE:
        return "smectite"
    if charge < _MICA:
        return "vermiculite" if hydrated or mostly_divalent else "interlayer-deficient mica"
    if hydrated and mostly_divalent and charge <= _VERMICULITE:
        return "vermiculite"
    return "brittle mica" if mostly_divalent else "true mica"
