"""Which ions stand on the sites of an ideal structure."""

from __future__ import annotations

from collections.abc import Mapping

from xrdmica.chemistry.checks import interlayer_cations
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.chemistry.ions import charge_of, element_of

__all__ = ["B_ISO", "scattering_contents", "site_contents", "species_of"]

_VACANT = 0.02  # atoms below which a site is left out
# isotropic displacement parameters [angstrom^2] of phlogopite (Redhammer & Roth 2002, American Mineralogist 87, 1464-1476),
# taken for all layers; hydroxide sheets as in chlorite, from memory
B_ISO = {"T": 0.74, "M1": 0.88, "M2": 0.88, "O": 1.0, "OH": 0.8, "H": 1.5, "I": 1.77, "Mh": 1.0, "OHh": 1.2, "Hh": 1.8}


def species_of(content: Mapping[str, float]) -> dict[object, float]:
    """The ions as pymatgen species with their occupancies."""
    from pymatgen.core.periodic_table import Species

    return {Species(element_of(ion), charge_of(ion)): amount for ion, amount in content.items()}


def site_contents(formula: SiteFormula, kind: str) -> dict[str, dict[str, float]]:
    """Ion -> occupancy for every kind of site; a hydroxyl is an oxygen with a proton beside it.

    Parameters
    ----------
    formula : SiteFormula
    kind : str
        As `xrdmica.crystals.building.POLYTYPES` names it.
    """
    tetrahedral = _shares(formula.tetrahedral, formula.site_sum("tetrahedral"))
    anions = dict(formula.anions)
    fluorine, chlorine, hydroxyl = (anions.get(ion, 0.0) for ion in ("F-", "Cl-", "OH-"))
    places = _anion_places(kind)
    site = {"O2-": max(places - fluorine - chlorine, 0.0) / places, "F-": fluorine / places, "Cl-": chlorine / places}
    proton = {"H+": min(hydroxyl / places, 1.0)}
    out = {
        "T": tetrahedral, "O": {"O2-": 1.0}, "OH": _present(site), "H": _present(proton),
        "OHh": _present(site), "Hh": _present(proton), "I": _present(interlayer_cations(formula)),
    }  # fmt: skip
    out |= _octahedra(formula, kind)
    return out


def scattering_contents(formula: SiteFormula, kind: str) -> dict[str, dict[str, float]]:
    """The same with a hydroxyl as one scatterer and without protons."""
    out = {name: content for name, content in site_contents(formula, kind).items() if name not in ("H", "Hh")}
    hydroxyl = formula.anions.get("OH-", 0.0) / _anion_places(kind)
    for name in ("OH", "OHh"):
        content = dict(out[name])
        taken = min(hydroxyl, content.get("O2-", 0.0))
        content["O2-"] = content.get("O2-", 0.0) - taken
        out[name] = _present({**content, "OH-": taken})
    return out


def _anion_places(kind: str) -> float:
    """Places per formula unit that hold hydroxyl, fluorine or chlorine."""
    return {"mica": 2.0, "talc-pyrophyllite": 2.0, "chlorite": 8.0}.get(kind, 4.0)


def _octahedra(formula: SiteFormula, kind: str) -> dict[str, dict[str, float]]:
    """Cations of M1, M2 and the hydroxide sheet: in dioctahedral layers M2 is filled first, else all are alike."""
    total = formula.site_sum("octahedral")
    if kind == "chlorite":
        # what the sites are cannot be read from a bulk formula: both sheets get the mean, vacancies on M1
        mixed = _shares(formula.octahedral, total)
        vacant = max(6.0 - total, 0.0)
        first = {ion: n * max(1.0 - vacant, 0.0) for ion, n in mixed.items()}
        return {"M1": _present(first), "M2": mixed, "Mh": mixed}
    if formula.octahedral_character == "dioctahedral":
        mixed = _shares(formula.octahedral, total)
        second = min(total / 2, 1.0)
        first_sum = max(total - 2.0, 0.0)
        return {
            "M1": _present({ion: n * first_sum for ion, n in mixed.items()}),
            "M2": _present({ion: n * second for ion, n in mixed.items()}),
        }
    mixed = {ion: n / 3 for ion, n in formula.octahedral.items()}
    return {"M1": _present(mixed), "M2": _present(mixed)}


def _shares(site: Mapping[str, float], total: float) -> dict[str, float]:
    return {ion: n / total for ion, n in site.items() if n / total > 1e-6}


def _present(content: Mapping[str, float]) -> dict[str, float]:
    kept = {ion: min(n, 1.0) for ion, n in content.items() if n > 1e-6}
    return kept if sum(kept.values()) > _VACANT else {}
