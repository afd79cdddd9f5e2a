"""Site-assigned formulas: which ion sits on which site, and what follows from it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import TYPE_CHECKING, Literal

from xrdmica.chemistry.ions import GROUP_IONS, charge_of, element_of, is_neutral, mass_of
from xrdmica.errors import ChemistryError

if TYPE_CHECKING:
    from xrdmica.chemistry.classify import Character, Group

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
        What reading the formula had to decide; they do not count when formulas are compared.
    """

    layer_type: LayerType
    interlayer: Mapping[str, float]
    octahedral: Mapping[str, float]
    tetrahedral: Mapping[str, float]
    anions: Mapping[str, float]
    water: float = 0.0
    notes: tuple[str, ...] = field(default=(), compare=False)

    def __post_init__(self) -> None:
        for site in SITES:
            object.__setattr__(self, site, MappingProxyType(dict(getattr(self, site))))

    def __reduce__(self) -> tuple[object, ...]:
        return (type(self), (self.layer_type, *(dict(self.site(s)) for s in SITES), self.water, self.notes))

    @classmethod
    def parse(cls, text: str, tolerance: float = 0.05) -> SiteFormula:
        """Read a formula as mineralogists write it, and check it.

        Brackets, commas, spaces, raised and lowered digits, charges (``Fe3+0.5``, ``Fe(III)``), vacancies, hydrate water and
        named sites (``I: K | M: Al2 | T: Si3 Al | A: O10 (OH)2``) are understood. Without brackets the tetrahedral site is
        filled with Si, then Al. Fe without a charge is Fe2+ where that balances. What had to be decided is in `notes`.

        Parameters
        ----------
        text : str
            One formula, such as ``K0.85Na0.10(Al1.90Mg0.10)(Si3.2Al0.8)O10(OH)2``.
        tolerance : float
            Misfit allowed by `check`.

        Returns
        -------
        SiteFormula
            One formula unit on O10(OH)2, O5(OH)4 or O10(OH)8, whatever cell the text was written for.

        Raises
        ------
        ChemistryError
            If the text is no formula, leaves amounts or charges open, or fails `check`.
        """
        from xrdmica.chemistry.notation import parse_formula

        return parse_formula(text, tolerance)

    def check(self, tolerance: float = 0.05) -> None:
        """Refuse a formula that cannot be that of a sheet silicate.

        Parameters
        ----------
        tolerance : float
            Misfit allowed in cation sums [apfu] and in the charge balance [charges per formula unit].

        Raises
        ------
        ChemistryError
            One sentence that says by how much it misses and where.
        """
        from xrdmica.chemistry.checks import check_formula

        check_formula(self, tolerance)

    def text(self) -> str:
        """Canonical text, which `parse` reads back to an equal formula; zero amounts are left out."""
        from xrdmica.chemistry.notation import write_formula

        return write_formula(self)

    def __str__(self) -> str:
        return self.text()

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
        return 0.0 - (self.site_charge("anions") + self.site_charge("octahedral") + self.site_charge("tetrahedral"))

    @property
    def imbalance(self) -> float:
        """Sum of all charges; 0 for a balanced formula."""
        return self.site_charge("interlayer") - self.layer_charge

    @property
    def molar_mass(self) -> float:
        """Dry mass per formula unit [g/mol]; interlayer water, glycol and glycerol are left out."""
        return sum(n * mass_of(ion) for site in SITES for ion, n in self.site(site).items() if not is_neutral(ion))

    @property
    def octahedral_character(self) -> Character:
        """``"dioctahedral"``, ``"trioctahedral"`` or, for chlorites with one sheet of each kind, ``"di,trioctahedral"``."""
        from xrdmica.chemistry.classify import octahedral_character

        return octahedral_character(self)

    @property
    def group(self) -> Group:
        """Group of sheet silicates, by layer type, layer charge and interlayer cations."""
        from xrdmica.chemistry.classify import group_of

        return group_of(self)

    def oxides(self) -> dict[str, float]:
        """Weight percent of oxides in the dry formula, see `xrdmica.chemistry.oxides.oxide_percent`."""
        from xrdmica.chemistry.oxides import oxide_percent

        return oxide_percent(self)

    def rounded(self, digits: int = 3) -> SiteFormula:
        """The formula with amounts rounded, and without those that become 0; for showing only."""
        sites = ({ion: round(n, digits) for ion, n in self.site(site).items() if round(n, digits)} for site in SITES)
        inner, octahedral, tetrahedral, anions = sites
        return SiteFormula(self.layer_type, inner, octahedral, tetrahedral, anions, round(self.water, digits), self.notes)

    def element_counts(self, with_water: bool = False) -> dict[str, float]:
        """Atoms of every element per formula unit; interlayer molecules only `with_water`."""
        counts: dict[str, float] = {}
        everything = [(ion, n) for site in SITES for ion, n in self.site(site).items() if with_water or not is_neutral(ion)]
        if with_water and self.water:
            everything.append(("H2O", self.water))
        for ion, n in everything:
            atoms = GROUP_IONS[ion][1] if ion in GROUP_IONS else {element_of(ion): 1}
            for element, each in atoms.items():
                counts[element] = counts.get(element, 0.0) + n * each
        return {element: n for element, n in counts.items() if n}

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
