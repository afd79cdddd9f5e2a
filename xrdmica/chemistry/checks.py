"""Whether a site formula can be that of a sheet silicate; one sentence when it cannot."""

from __future__ import annotations

from math import isfinite
from typing import TYPE_CHECKING

from xrdmica.chemistry.ions import is_neutral, may_sit
from xrdmica.errors import ChemistryError

if TYPE_CHECKING:
    from xrdmica.chemistry.formula import SiteFormula

__all__ = ["TETRAHEDRAL_CATIONS", "check_formula", "interlayer_cations"]

TETRAHEDRAL_CATIONS = {"2:1": 4.0, "1:1": 2.0, "2:1:1": 4.0}
_ANIONS = {"2:1": (12.0, 10.0, "O10(OH)2"), "1:1": (9.0, 5.0, "O5(OH)4"), "2:1:1": (18.0, 10.0, "O10(OH)8")}
# octahedral cations per formula unit, lowest and highest: two of three sites filled, or all (common practice);
# chlorite from donbassite, ideally 4.33 (from memory), to six
_OCTAHEDRAL = {"2:1": (1.9, 3.0), "1:1": (1.9, 3.0), "2:1:1": (4.25, 6.0)}
# a 1:1 layer or a chlorite has no charge left for interlayer cations; analyses show traces from other phases
_STRAY_INTERLAYER = 0.2
_SLACK = 1e-9  # amounts with two decimals are compared with limits of two decimals
_SITE_HINT = {
    "interlayer": "write octahedral cations behind it",
    "octahedral": "use brackets or I: M: T: A: to say which ions are on which site",
    "tetrahedral": "use brackets or I: M: T: A: to say which ions are on which site",
    "anions": "write O, OH, F, Cl or S there",
}


def interlayer_cations(formula: SiteFormula) -> dict[str, float]:
    """Charged ions between the layers; water, glycol and glycerol are left out."""
    return {ion: n for ion, n in formula.interlayer.items() if not is_neutral(ion) and n > 0}


def check_formula(formula: SiteFormula, tolerance: float = 0.05) -> None:
    """Refuse a formula that cannot be that of a sheet silicate.

    Parameters
    ----------
    formula : SiteFormula
        The formula, one formula unit.
    tolerance : float
        Misfit allowed in cation sums [apfu] and in the charge balance [charges per formula unit].

    Raises
    ------
    ChemistryError
        The first misfit: an ion on a site where it cannot sit, the tetrahedral, octahedral, anion or interlayer sum, the charges.
    """
    _check_ions(formula)
    _check_sums(formula, tolerance)
    if abs(formula.imbalance) > tolerance + _SLACK:
        several = any(ion.startswith(("Fe", "Mn", "Ti")) for site in (formula.interlayer, formula.octahedral) for ion in site)
        fix = "correct the amounts" + (", or the charge of Fe, Mn or Ti (Fe2+ and Fe3+ may be mixed)" if several else "")
        raise ChemistryError(f"charges sum to {formula.imbalance:+.2f}", fix=fix)


def _check_ions(formula: SiteFormula) -> None:
    for site in ("interlayer", "octahedral", "tetrahedral", "anions"):
        for ion, amount in getattr(formula, site).items():
            if not isfinite(amount) or amount < 0:
                raise ChemistryError(f"the amount of {ion} on the {site} site is {amount:g}", fix="give a positive number or 0")
            if amount and not may_sit(ion, site):
                place = "among the anions" if site == "anions" else f"on the {site} site"
                raise ChemistryError(f"{ion} cannot sit {place} ({amount:.2f} there)", fix=_SITE_HINT[site])
    if not isfinite(formula.water) or formula.water < 0:
        raise ChemistryError(f"the amount of water is {formula.water:g}", fix="give a number that is not negative")


def _check_sums(formula: SiteFormula, tolerance: float) -> None:
    anions, oxygen, ideal = _ANIONS[formula.layer_type]
    found = formula.site_sum("anions")
    if abs(found - anions) > tolerance + _SLACK or formula.anions.get("O2-", 0.0) < oxygen - tolerance - _SLACK:
        listed = " ".join(f"{ion.rstrip('2-').rstrip('-')} {n:.2f}" for ion, n in formula.anions.items())
        raise ChemistryError(f"anions sum to {found:.2f} ({listed}), not to {ideal}", fix=f"write anions that add up to {ideal}")
    tetrahedral = formula.site_sum("tetrahedral")
    expected = TETRAHEDRAL_CATIONS[formula.layer_type]
    if abs(tetrahedral - expected) > tolerance + _SLACK:
        raise ChemistryError(
            f"tetrahedral site holds {tetrahedral:.2f} cations, {expected:g} expected",
            fix="correct Si and the tetrahedral Al (or Fe3+)",
        )
    octahedral = formula.site_sum("octahedral")
    low, high = _OCTAHEDRAL[formula.layer_type]
    if not low - _SLACK <= octahedral <= high + tolerance + _SLACK:
        raise ChemistryError(
            f"octahedral site holds {octahedral:.2f} cations, {low:g} to {high:g} expected",
            fix="correct the amounts, or write exchangeable cations in front of a bracket with the octahedral ones",
        )
    interlayer = sum(interlayer_cations(formula).values())
    if formula.layer_type == "2:1":
        if interlayer > 1 + tolerance + _SLACK and formula.water == 0:
            raise ChemistryError(f"interlayer site holds {interlayer:.2f} cations, at most 1 expected", fix="correct the amounts")
    elif interlayer > _STRAY_INTERLAYER:
        raise ChemistryError(
            f"interlayer site holds {interlayer:.2f} cations, none expected in a {formula.layer_type} layer silicate",
            fix="correct the amounts or the anions",
        )
