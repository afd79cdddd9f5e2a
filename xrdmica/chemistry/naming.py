"""A name for a composition, as far as the composition supports one, with the reasons."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from xrdmica.chemistry.checks import interlayer_cations
from xrdmica.chemistry.end_members import END_MEMBERS, Mixture, member_formula, mixture
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.chemistry.ions import charge_of, element_of

__all__ = ["Classification", "classify"]

_TIE = 0.02  # two shares nearer than this are not told apart
_FAR = 0.12  # residual of the end-member mixture beyond which no name is given [apfu, rms]
_HALF_SHARE = 0.5
# rock-forming names for what sits between the end members; Rieder et al. (1998), from memory
_DARK = ("annite", "phlogopite", "siderophyllite", "eastonite")
_CELADONITES = ("aluminoceladonite", "ferroaluminoceladonite", "celadonite", "ferroceladonite")
_LITHIUM = ("trilithionite", "polylithionite")
_DIVALENT_ADJECTIVE = {"Mg2+": "magnesian", "Fe2+": "ferroan", "Mn2+": "manganoan", "Ni2+": "nickeloan"}


@dataclass(frozen=True)
class Classification:
    """What a composition is called.

    Attributes
    ----------
    group : str
    character : str
        ``"dioctahedral"``, ``"trioctahedral"`` or ``"di,trioctahedral"``.
    species : str or None
        None where the composition supports no species name.
    series : str or None
        Wider name: biotite, phengite, illite, lepidolite ...
    shares : tuple of (str, float)
        End members, largest first, summing to 1.
    residual : float or None
        What they leave unexplained [apfu, rms]; None when none apply.
    reasons : tuple of str
        Each step, with the numbers.
    """

    group: str
    character: str
    species: str | None
    series: str | None
    shares: tuple[tuple[str, float], ...]
    residual: float | None
    reasons: tuple[str, ...]

    @property
    def name(self) -> str:
        """The best name: species, with the series where both hold; else series; else group."""
        if self.species and self.series:
            return f"{self.species} ({self.series})"
        return self.species or self.series or f"{self.character} {self.group}"


def classify(formula: SiteFormula) -> Classification:
    """Name a composition after the published nomenclature; what it does not support stays unnamed.

    Parameters
    ----------
    formula : SiteFormula

    Returns
    -------
    Classification

    References
    ----------
    .. [1] Rieder et al. (1998), Canadian Mineralogist 36, 905-912: micas [limits from memory].
    .. [2] Guggenheim et al. (2006), Clays and Clay Minerals 54, 761-772: groups and smectites [limits from memory].
    .. [3] Bayliss (1975), Canadian Mineralogist 13, 178-180: chlorites by the dominant divalent cation [from memory].
    """
    group, character = formula.group, formula.octahedral_character
    reasons = [_group_reason(formula), _character_reason(formula)]
    if group in ("true mica", "brittle mica"):
        species, series, mixed = _mica(formula, reasons)
    elif group == "interlayer-deficient mica":
        species, series, mixed = _deficient(formula, reasons)
    elif group == "smectite":
        species, series = _smectite(formula, reasons)
        mixed = None
    elif group == "vermiculite":
        species, series, mixed = None, f"{character} vermiculite", None
    elif group == "talc group":
        species, series, mixed = _by_share(formula, (f"{character} talc group",), reasons)
    elif group == "chlorite":
        species, series, mixed = _chlorite(formula, reasons)
    elif group == "kaolin":
        species, series, mixed = *_kaolin(formula, reasons), None
    else:
        species, series, mixed = _serpentine(formula, reasons)
    shares = mixed.shares if mixed else ()
    residual = mixed.residual if mixed and mixed.shares else None
    return Classification(group, character, species, series, shares, residual, tuple(reasons))


def _dominant(content: Mapping[str, float]) -> str | None:
    """Ion with the largest amount, None for a tie or nothing."""
    ranked = sorted(((n, ion) for ion, n in content.items() if n > 0), reverse=True)
    if not ranked or (len(ranked) > 1 and ranked[0][0] - ranked[1][0] < 0.01):
        return None
    return ranked[0][1]


def _group_reason(formula: SiteFormula) -> str:
    cations = interlayer_cations(formula)
    total = sum(cations.values())
    monovalent = sum(n for ion, n in cations.items() if charge_of(ion) == 1)
    text = f"{formula.group}: {formula.layer_type} layer"
    if formula.layer_type == "2:1":
        text += f", layer charge {formula.layer_charge + 0.0:.2f}"
        if total > 0.01:
            text += f", {100 * monovalent / total:.0f} % of the interlayer cations monovalent"
    return text


def _character_reason(formula: SiteFormula) -> str:
    octahedral = formula.site_sum("octahedral")
    sites = 6 if formula.layer_type == "2:1:1" else 3
    return f"{formula.octahedral_character}: {octahedral:.2f} octahedral cations of {sites} (the limit is 2.5 of 3)"


def _ranked(mixed: Mixture, reasons: list[str], leave: tuple[str, ...] = ()) -> str | None:
    """The end member that is clearly nearest, or None."""
    shares = [(name, share) for name, share in mixed.shares if name not in leave]
    reasons.append(_listed(mixed))
    if not mixed.residual <= _FAR:
        reasons.append("no species name: the composition is far from all end members known here")
        return None
    if not shares:
        return None
    if len(shares) > 1 and shares[0][1] - shares[1][1] < _TIE:
        reasons.append(f"no species name: {shares[0][0]} and {shares[1][0]} are equally near")
        return None
    return shares[0][0]


def _listed(mixed: Mixture) -> str:
    if not mixed.shares:
        return "no end member known here has all of its cations in this composition"
    listed = ", ".join(f"{name} {100 * share:.0f} %" for name, share in mixed.shares[:5])
    return f"end members: {listed}; {mixed.residual:.3f} atoms left unexplained"


def _supported(formula: SiteFormula, name: str, family: str, reasons: list[str]) -> bool:
    """A species name needs its own dominant interlayer cation, and its main octahedral cations to be there."""
    text = next(m.formula for m in END_MEMBERS if m.name == name and m.family == family)
    ideal = member_formula(text)
    own, wanted = _dominant(interlayer_cations(formula)), _dominant(interlayer_cations(ideal))
    if wanted is not None and own != wanted:
        reasons.append(f"not {name}: its interlayer cation {wanted} is not the most frequent one here")
        return False
    # of ions of one charge the end member's own must be the most frequent
    for charge in (1, 2, 3):
        want = _dominant({i: n for i, n in ideal.octahedral.items() if charge_of(i) == charge})
        have = {i: n for i, n in formula.octahedral.items() if charge_of(i) == charge}
        if want is not None and have and _dominant(have) != want:
            reasons.append(f"not {name}: {want} is not the most frequent octahedral cation of its charge")
            return False
    return True


def _by_share(
    formula: SiteFormula, families: tuple[str, ...], reasons: list[str], leave: tuple[str, ...] = ()
) -> tuple[str | None, str | None, Mixture]:
    mixed = mixture(formula, families)
    name = _ranked(mixed, reasons, leave)
    if name is not None and not _supported(formula, name, families[0], reasons):
        name = None
    if name is not None:
        reasons.append(f"{name}: the nearest end member")
    return name, None, mixed


def _mica(formula: SiteFormula, reasons: list[str]) -> tuple[str | None, str | None, Mixture]:
    family = f"{formula.octahedral_character} mica"
    species, _, mixed = _by_share(formula, (family,), reasons, leave=("talc", "pyrophyllite"))
    series = None
    if formula.group == "true mica":
        if formula.octahedral_character == "trioctahedral":
            series = _dark_or_lithium(formula, mixed, reasons)
            if series == "zinnwaldite" and species in _LITHIUM:
                species = None  # midway on the join to siderophyllite: no end member of the lithium micas
        else:
            series = _phengite(formula, mixed, reasons)
    fluorine = formula.anions.get("F-", 0.0)
    if species in ("phlogopite", "annite") and fluorine > formula.anions.get("OH-", 0.0):
        species = {"phlogopite": "fluorophlogopite", "annite": "fluorannite"}[species]
        reasons.append(f"{species}: {fluorine:.2f} F, more than OH")
    return species, series, mixed


def _dark_or_lithium(formula: SiteFormula, mixed: Mixture, reasons: list[str]) -> str | None:
    dark = sum(mixed.share(name) for name in _DARK)
    lithium = sum(mixed.share(name) for name in _LITHIUM)
    if lithium > 0.6:
        reasons.append(f"lepidolite: trilithionite and polylithionite make {100 * lithium:.0f} %")
        return "lepidolite"
    iron_dark = mixed.share("siderophyllite") + mixed.share("annite")
    if lithium > 0.15 and iron_dark > 0.15 and lithium + iron_dark > 0.7:
        reasons.append("zinnwaldite: between the lithium micas and siderophyllite")
        return "zinnwaldite"
    magnesium = formula.octahedral.get("Mg2+", 0.0)
    iron = formula.octahedral.get("Fe2+", 0.0) + formula.octahedral.get("Mn2+", 0.0)
    if dark > 0.7 and magnesium + iron > 0 and iron / (magnesium + iron) > 1 / 3 - 1e-9:
        share = 100 * iron / (magnesium + iron)
        reasons.append(f"biotite: between annite, phlogopite, siderophyllite and eastonite, with Fe {share:.0f} % of Fe + Mg")
        return "biotite"
    return None


def _phengite(formula: SiteFormula, mixed: Mixture, reasons: list[str]) -> str | None:
    celadonites = sum(mixed.share(name) for name in _CELADONITES)
    potassic = _dominant(interlayer_cations(formula)) == "K+"
    if potassic and 0.1 <= celadonites < _HALF_SHARE and mixed.share("muscovite") > celadonites:
        reasons.append(f"phengite: {100 * celadonites:.0f} % of celadonite end members beside muscovite")
        return "phengite"
    return None


def _deficient(formula: SiteFormula, reasons: list[str]) -> tuple[str | None, str | None, Mixture]:
    """Series of the interlayer-deficient micas; the limits of illite and glauconite from memory."""
    family = f"{formula.octahedral_character} mica"
    mixed = mixture(formula, (family,))
    reasons.append(_listed(mixed))
    cation = _dominant(interlayer_cations(formula))
    if formula.octahedral_character == "trioctahedral":
        sodic = cation == "Na+" and _dominant(formula.octahedral) == "Mg2+"
        return None, "wonesite" if sodic else None, mixed
    octahedral = formula.octahedral
    divalent = sum(n for ion, n in octahedral.items() if charge_of(ion) == 2)
    trivalent = sum(n for ion, n in octahedral.items() if charge_of(ion) == 3)
    aluminium, ferric = octahedral.get("Al3+", 0.0), octahedral.get("Fe3+", 0.0)
    low = divalent / (divalent + trivalent) if divalent + trivalent else 0.0
    rich = aluminium / (aluminium + ferric) if aluminium + ferric else 0.0
    numbers = f"R2+/(R2+ + R3+) = {low:.2f}, octahedral Al/(Al + Fe3+) = {rich:.2f}"
    if rich >= 0.6 and low <= 0.25 and cation in ("K+", "Na+", "NH4+"):
        series = {"K+": "illite", "Na+": "brammallite", "NH4+": "tobelite-like illite"}[cation]
        reasons.append(f"{series}: {numbers}")
        return None, series, mixed
    if rich <= 0.5 and low >= 0.15 and cation == "K+":
        reasons.append(f"glauconite: {numbers}")
        return None, "glauconite", mixed
    reasons.append(f"between illite and glauconite: {numbers}; no name")
    return None, None, mixed


def _smectite(formula: SiteFormula, reasons: list[str]) -> tuple[str | None, str | None]:
    octahedral = formula.octahedral
    main = _dominant(octahedral)
    tetrahedral = 4 * formula.site_sum("tetrahedral") - formula.site_charge("tetrahedral")
    inside = formula.layer_charge - tetrahedral
    where = f"tetrahedral charge {tetrahedral:.2f}, octahedral charge {inside:.2f}"
    if formula.octahedral_character == "dioctahedral":
        names = {"Fe3+": "nontronite", "Cr3+": "volkonskoite"}
        if main in names:
            name: str | None = names[main]
        elif main == "Al3+" and abs(tetrahedral - inside) > 0.02:
            name = "beidellite" if tetrahedral > inside else "montmorillonite"
        else:
            name = None
    elif octahedral.get("Li+", 0.0) > 0.1 and main == "Mg2+" and inside > tetrahedral:
        name = "hectorite"
    elif main == "Mg2+":
        vacant = 3 - formula.site_sum("octahedral")
        name = "saponite" if tetrahedral > inside else "stevensite" if vacant > 0.05 else None
    else:
        name = "sauconite" if main == "Zn2+" else None
    reasons.append(f"{name or 'no species name'}: most frequent octahedral cation {main or 'not clear'}, {where}")
    return name, None


def _chlorite(formula: SiteFormula, reasons: list[str]) -> tuple[str | None, str | None, Mixture]:
    mixed = mixture(formula, (f"{formula.octahedral_character} chlorite",))
    reasons.append(_listed(mixed))
    if formula.octahedral_character == "dioctahedral":
        return "donbassite", None, mixed
    if formula.octahedral_character == "di,trioctahedral":
        lithium, magnesium = formula.octahedral.get("Li+", 0.0), formula.octahedral.get("Mg2+", 0.0)
        return ("cookeite" if lithium > magnesium else "sudoite" if magnesium > lithium else None), None, mixed
    divalent = {ion: n for ion, n in formula.octahedral.items() if charge_of(ion) == 2}
    main = _dominant(divalent)
    names = {"Mg2+": "clinochlore", "Fe2+": "chamosite", "Mn2+": "pennantite", "Ni2+": "nimite"}
    if main not in names:
        reasons.append("no species name: no divalent cation is the most frequent one")
        return None, None, mixed
    total = sum(divalent.values())
    second = max((n for ion, n in divalent.items() if ion != main), default=0.0)
    other = next((ion for ion, n in divalent.items() if ion != main and n == second), None)
    adjective = ""
    if other in _DIVALENT_ADJECTIVE and second / total > 0.1:
        adjective = _DIVALENT_ADJECTIVE[other] + " "
    reasons.append(f"{names[main]}: {element_of(main)} is {100 * divalent[main] / total:.0f} % of the divalent cations")
    return adjective + names[main], None, mixed


def _kaolin(formula: SiteFormula, reasons: list[str]) -> tuple[str | None, str | None]:
    if _dominant(formula.octahedral) == "Al3+":
        reasons.append("kaolinite, dickite, nacrite and halloysite have one composition: diffraction tells them apart")
        return None, "kaolinite, dickite, nacrite or halloysite"
    reasons.append("no species name: Al is not the most frequent octahedral cation")
    return None, None


def _serpentine(formula: SiteFormula, reasons: list[str]) -> tuple[str | None, str | None, Mixture]:
    name, _, mixed = _by_share(formula, ("serpentine",), reasons)
    if name == "lizardite":
        reasons.append("lizardite, chrysotile and antigorite have nearly one composition: it cannot tell them apart")
        return None, "lizardite, chrysotile or antigorite", mixed
    return name, None, mixed
