"""End members of the sheet silicates, and the share of each in a composition."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from xrdmica.chemistry.checks import TETRAHEDRAL_CATIONS, interlayer_cations
from xrdmica.chemistry.formula import SiteFormula

__all__ = ["END_MEMBERS", "Member", "Mixture", "member_formula", "mixture"]

_RIDGE = 1e-3  # decides between equal solutions: shares as even as the composition allows
_LEAST_SHARE = 0.005
_LEAST_AMOUNT = 0.01  # apfu: below, an ion counts as absent


@dataclass(frozen=True)
class Member:
    """One end member: name, formula, and its octahedral character."""

    name: str
    formula: str
    family: str


# Rieder et al. (1998) for micas, Guggenheim et al. (2006) and Bayliss (1975) for the rest; formulas from memory
END_MEMBERS: tuple[Member, ...] = (
    Member("muscovite", "KAl2(AlSi3)O10(OH)2", "dioctahedral mica"),
    Member("paragonite", "NaAl2(AlSi3)O10(OH)2", "dioctahedral mica"),
    Member("aluminoceladonite", "K(AlMg)Si4O10(OH)2", "dioctahedral mica"),
    Member("ferroaluminoceladonite", "K(AlFe2+)Si4O10(OH)2", "dioctahedral mica"),
    Member("celadonite", "K(Fe3+Mg)Si4O10(OH)2", "dioctahedral mica"),
    Member("ferroceladonite", "K(Fe3+Fe2+)Si4O10(OH)2", "dioctahedral mica"),
    Member("roscoelite", "K(V2)(AlSi3)O10(OH)2", "dioctahedral mica"),
    Member("chromphyllite", "K(Cr2)(AlSi3)O10(OH)2", "dioctahedral mica"),
    Member("tobelite", "(NH4)Al2(AlSi3)O10(OH)2", "dioctahedral mica"),
    Member("nanpingite", "CsAl2(AlSi3)O10(OH)2", "dioctahedral mica"),
    Member("margarite", "CaAl2(Al2Si2)O10(OH)2", "dioctahedral mica"),
    Member("pyrophyllite", "Al2Si4O10(OH)2", "dioctahedral mica"),
    Member("phlogopite", "KMg3(AlSi3)O10(OH)2", "trioctahedral mica"),
    Member("annite", "K(Fe2+3)(AlSi3)O10(OH)2", "trioctahedral mica"),
    Member("eastonite", "K(Mg2Al)(Al2Si2)O10(OH)2", "trioctahedral mica"),
    Member("siderophyllite", "K(Fe2+2Al)(Al2Si2)O10(OH)2", "trioctahedral mica"),
    Member("tetraferriphlogopite", "K(Mg3)(Fe3+Si3)O10(OH)2", "trioctahedral mica"),
    Member("tetraferriannite", "K(Fe2+3)(Fe3+Si3)O10(OH)2", "trioctahedral mica"),
    Member("shirozulite", "K(Mn3)(AlSi3)O10(OH)2", "trioctahedral mica"),
    Member("hendricksite", "K(Zn3)(AlSi3)O10(OH)2", "trioctahedral mica"),
    Member("polylithionite", "K(Li2Al)Si4O10F2", "trioctahedral mica"),
    Member("trilithionite", "K(Li1.5Al1.5)(AlSi3)O10F2", "trioctahedral mica"),
    Member("tainiolite", "K(LiMg2)Si4O10F2", "trioctahedral mica"),
    Member("aspidolite", "NaMg3(AlSi3)O10(OH)2", "trioctahedral mica"),
    Member("preiswerkite", "Na(Mg2Al)(Al2Si2)O10(OH)2", "trioctahedral mica"),
    Member("ephesite", "Na(LiAl2)(Al2Si2)O10(OH)2", "trioctahedral mica"),
    Member("clintonite", "Ca(Mg2Al)(Al3Si)O10(OH)2", "trioctahedral mica"),
    Member("bityite", "Ca(LiAl2)(BeAlSi2)O10(OH)2", "trioctahedral mica"),
    Member("kinoshitalite", "BaMg3(Al2Si2)O10(OH)2", "trioctahedral mica"),
    Member("ferrokinoshitalite", "Ba(Fe2+3)(Al2Si2)O10(OH)2", "trioctahedral mica"),
    Member("talc", "Mg3Si4O10(OH)2", "trioctahedral mica"),
    Member("pyrophyllite", "Al2Si4O10(OH)2", "dioctahedral talc group"),
    Member("ferripyrophyllite", "(Fe3+2)Si4O10(OH)2", "dioctahedral talc group"),
    Member("talc", "Mg3Si4O10(OH)2", "trioctahedral talc group"),
    Member("minnesotaite", "(Fe2+3)Si4O10(OH)2", "trioctahedral talc group"),
    Member("willemseite", "Ni3Si4O10(OH)2", "trioctahedral talc group"),
    Member("lizardite", "Mg3Si2O5(OH)4", "serpentine"),
    Member("amesite", "(Mg2Al)(AlSi)O5(OH)4", "serpentine"),
    Member("greenalite", "(Fe2+3)Si2O5(OH)4", "serpentine"),
    Member("berthierine", "(Fe2+2Al)(AlSi)O5(OH)4", "serpentine"),
    Member("cronstedtite", "(Fe2+2Fe3+)(Fe3+Si)O5(OH)4", "serpentine"),
    Member("nepouite", "Ni3Si2O5(OH)4", "serpentine"),
    Member("caryopilite", "Mn3Si2O5(OH)4", "serpentine"),
    Member("clinochlore", "(Mg5Al)(AlSi3)O10(OH)8", "trioctahedral chlorite"),
    Member("chamosite", "(Fe2+5Al)(AlSi3)O10(OH)8", "trioctahedral chlorite"),
    Member("pennantite", "(Mn5Al)(AlSi3)O10(OH)8", "trioctahedral chlorite"),
    Member("nimite", "(Ni5Al)(AlSi3)O10(OH)8", "trioctahedral chlorite"),
    Member("amesite-like", "(Mg4Al2)(Al2Si2)O10(OH)8", "trioctahedral chlorite"),
    Member("daphnite-like, Al-rich", "(Fe2+4Al2)(Al2Si2)O10(OH)8", "trioctahedral chlorite"),
    Member("sudoite", "(Mg2Al3)(AlSi3)O10(OH)8", "di,trioctahedral chlorite"),
    Member("cookeite", "(LiAl4)(AlSi3)O10(OH)8", "di,trioctahedral chlorite"),
    Member("donbassite", "(Al4.333)(AlSi3)O10(OH)8", "dioctahedral chlorite"),
)  # fmt: skip


@dataclass(frozen=True)
class Mixture:
    """Shares of end members in a composition.

    Attributes
    ----------
    shares : tuple of (str, float)
        Largest first, those below 0.5 % left out.
    residual : float
        What the mixture leaves unexplained: root mean square over sites and ions [apfu].
    """

    shares: tuple[tuple[str, float], ...]
    residual: float

    def share(self, name: str) -> float:
        """Share of one end member, 0 when it is not there."""
        return dict(self.shares).get(name, 0.0)


@lru_cache(maxsize=128)
def member_formula(text: str) -> SiteFormula:
    """The formula of an end member."""
    return SiteFormula.parse(text, tolerance=0.1)


def _content(formula: SiteFormula) -> dict[str, float]:
    """Sites as a vector; vacancies count, anions do not."""
    inner = interlayer_cations(formula)
    room = {"2:1": 3.0, "1:1": 3.0, "2:1:1": 6.0}[formula.layer_type]
    out = {f"I {ion}": n for ion, n in inner.items()}
    out["I vacancy"] = 1.0 - sum(inner.values()) if formula.layer_type == "2:1" else 0.0
    out.update({f"M {ion}": n for ion, n in formula.octahedral.items()})
    out["M vacancy"] = room - sum(formula.octahedral.values())
    out.update({f"T {ion}": n for ion, n in formula.tetrahedral.items()})
    out["T vacancy"] = TETRAHEDRAL_CATIONS[formula.layer_type] - sum(formula.tetrahedral.values())
    return out


def _all_there(member: Member, target: Mapping[str, float]) -> bool:
    """An end member takes part when all of its cations are on their sites in the composition."""
    content = _content(member_formula(member.formula))
    return all(target.get(key, 0.0) >= _LEAST_AMOUNT for key, n in content.items() if n > 0 and not key.endswith("vacancy"))


def mixture(formula: SiteFormula, families: Sequence[str]) -> Mixture:
    """Non-negative shares of the end members of some families that come nearest to a composition.

    The shares sum to 1. Where a composition can be mixed in several ways (the reciprocal system of phlogopite, annite,
    eastonite and siderophyllite), the shares are as even as it allows.

    Parameters
    ----------
    formula : SiteFormula
    families : sequence of str
        Such as ``"trioctahedral mica"``.

    Returns
    -------
    Mixture
        Empty, with a residual of nan, when no end member of the families has all of its cations in the composition.
    """
    from scipy.optimize import nnls

    target = _content(formula)
    members = [m for m in END_MEMBERS if m.family in families and _all_there(m, target)]
    if not members:
        return Mixture((), float("nan"))
    contents = [_content(member_formula(m.formula)) for m in members]
    keys = sorted({key for content in (target, *contents) for key in content})
    matrix = np.array([[content.get(key, 0.0) for content in contents] for key in keys])
    wanted = np.array([target.get(key, 0.0) for key in keys])
    heavy = 100.0 * np.ones((1, len(members)))
    system = np.vstack([matrix, heavy, np.sqrt(_RIDGE) * np.eye(len(members))])
    shares, _ = nnls(system, np.concatenate([wanted, [100.0], np.zeros(len(members))]))
    shares = shares / shares.sum()
    residual = float(np.sqrt(np.mean((matrix @ shares - wanted) ** 2)))
    ranked = sorted(zip((m.name for m in members), shares.tolist(), strict=True), key=lambda pair: -pair[1])
    return Mixture(tuple((name, share) for name, share in ranked if share >= _LEAST_SHARE), residual)
