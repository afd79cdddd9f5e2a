"""Site-assigned formulas: which ion sits on which site, and what follows from it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Literal

from xrdmica.chemistry.ions import charge_of, mass_of
from xrdmica.errors import ChemistryError

__all__ = ["SITES", "LayerType", "SiteFormula", "SiteName"]

LayerType = Literal["2:1", "1:1", "2:1:1"]
SiteName = Literal["interlayer", "octahedral", "tetrahedral", "anions"]
SITES: tuple[SiteName, ...] = ("interlayer", "octahedral", "tetrahedral", "anions")


@dataclass(frozen=True)
class SiteFormula:
    """One formula unit of a sheet silicate, ion by ion on its sites.

    Attributes
    ----------
    layer_type : str
        ``"2:1"`` (O10(OH)2), ``"1:1"`` (O5(OH)4) or ``"2:1:1"`` (chlorite, O10(OH)8; both octahedral sheets are one site).
    interlayer, octahedral, tetrahedral, anions : mapping
        Ion -> atoms per formula unit.
    water : float
        Molecules of water per formula unit, not part of the dry mass.
    notes : tuple of str
        What reading the formula had to decide.
    """

    layer_type: LayerType
    interlayer: Mapping[str, float]
    octahedral: Mapping[str, float]
    tetrahedral: Mapping[str, float]
    anions: Mapping[str, float]
    water: float = 0.0
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for site in SITES:
            object.__setattr__(self, site, MappingProxyType(dict(getattr(self, site))))

    def __reduce__(self) -> tuple[object, ...]:
        return (type(self), (self.layer_type, *(dict(self.site(s)) for s in SITES), self.water, self.notes))

    def site(self, name: SiteName) -> Mapping[str, float]:
        """The content of one site."""
        content: Mapping[str, float] = getattr(self, name)
        return content

    def site_sum(self, name: SiteName) -> float:
        """Atoms on a site per formula unit."""
        return sum(self.site(name).values())

    def site_charge(self, name: SiteName) -> float:
        """Charge on a site per formula unit."""
        return sum(n * charge_of(ion) for ion, n in self.site(name).items())

    @property
    def layer_charge(self) -> float:
        """Negative charge of the layer per formula unit, as a positive number: anions minus T and M cations."""
        return -(self.site_charge("anions") + self.site_charge("octahedral") + self.site_charge("tetrahedral"))

    @property
    def imbalance(self) -> float:
        """Sum of all charges; 0 for a balanced formula."""
        return self.site_charge("interlayer") - self.layer_charge

    @property
    def molar_mass(self) -> float:
        """Dry mass per formula unit [g/mol]; interlayer water is left out."""
        return sum(n * mass_of(ion) for site in SITES for ion, n in self.site(site).items() if ion != "H2O")

    def exchanged(self, site: SiteName, out: str, into: str, amount: float) -> SiteFormula:
        """The formula with `amount` atoms of `out` on a site replaced by `into`.

        Raises
        ------
        ChemistryError
            If there is not enough of `out` on the site.
        """
        content = dict(self.site(site))
        if content.get(out, 0.0) < amount - 1e-9:
            raise ChemistryError(
                f"only {content.get(out, 0.0):g} {out} on the {site} site, {amount:g} to be replaced",
                fix="replace less or start from another formula",
            )
        content[out] = max(content.get(out, 0.0) - amount, 0.0)
        content[into] = content.get(into, 0.0) + amount
        if site == "interlayer":
            return replace(self, interlayer=content)
        if site == "octahedral":
            return replace(self, octahedral=content)
        if site == "tetrahedral":
            return replace(self, tetrahedral=content)
        return replace(self, anions=content)
