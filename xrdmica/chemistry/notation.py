"""Formulas as text: reading what mineralogists write, and writing it so that it reads back the same."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import replace
from decimal import Decimal

from xrdmica.chemistry.assign import Block, Draft, blocks_of, drafts
from xrdmica.chemistry.brackets import normalised, read_tree
from xrdmica.chemistry.checks import TETRAHEDRAL_CATIONS
from xrdmica.chemistry.formula import SITES, LayerType, SiteFormula, SiteName
from xrdmica.chemistry.ions import ANION_SYMBOLS, DEFAULT_CHARGE, GROUP_IONS, charge_of, element_of, usual_ion
from xrdmica.errors import ChemistryError

__all__ = ["parse_formula", "write_formula"]

_LABELS: dict[str, SiteName | None] = {
    "i": "interlayer", "interlayer": "interlayer", "m": "octahedral", "octahedral": "octahedral", "t": "tetrahedral",
    "tetrahedral": "tetrahedral", "a": "anions", "anion": "anions", "anions": "anions", "w": None, "water": None,
}  # fmt: skip
_LABEL = re.compile(r"([A-Za-z]+)\s*:")
# anions as written -> (layer type, factor to one formula unit)
_UNITS: tuple[tuple[float, LayerType, float], ...] = (
    (12.0, "2:1", 1.0), (9.0, "1:1", 1.0), (18.0, "2:1:1", 1.0), (24.0, "2:1", 0.5), (6.0, "2:1", 2.0), (36.0, "2:1:1", 0.5),
    (48.0, "2:1", 0.25), (4.5, "1:1", 2.0),
)  # fmt: skip
_NAMES = {"2:1": "O10(OH)2", "1:1": "O5(OH)4", "2:1:1": "O10(OH)8"}


def parse_formula(text: str, tolerance: float = 0.05) -> SiteFormula:
    """Read a formula; see `SiteFormula.parse`.

    Parameters
    ----------
    text : str
        One formula, cations before anions in the usual order, or sites named ``I: ... | M: ... | T: ... | A: ...``.
    tolerance : float
        Misfit allowed by the checks [apfu or charges].

    Returns
    -------
    SiteFormula
        A formula that passes `SiteFormula.check`.

    Raises
    ------
    ChemistryError
        If the text is no formula, leaves something open, or the formula fails the checks.
    """
    notes: list[str] = []
    labelled = _labelled_parts(text)
    if labelled is not None:
        return _from_labels(labelled, notes, tolerance)
    blocks, anions, water = _sorted_out(blocks_of(read_tree(normalised(text)), notes), notes)
    layer_type, scale = _unit(anions)
    options = drafts(blocks, scale, TETRAHEDRAL_CATIONS[layer_type])
    return _best(options, layer_type, scale, anions, water, notes, tolerance)


def _sorted_out(blocks: Iterable[Block], notes: list[str]) -> tuple[list[Block], dict[str, float], float]:
    """Count anions and water; water goes, anions stay in the list to mark their place. H and O become OH."""
    kept: list[Block] = []
    anions: dict[str, float] = {}
    water = hydrogen = 0.0
    for block in blocks:
        water += sum(p.amount for p in block.parts if p.symbol == "H2O")
        parts = tuple(p for p in block.parts if p.symbol != "H2O")
        if not parts:
            continue
        if all(p.symbol in ANION_SYMBOLS for p in parts):
            for part in parts:
                anions[part.ion] = anions.get(part.ion, 0.0) + part.amount
        elif all(p.symbol == "H" for p in parts):
            hydrogen += sum(p.amount for p in parts)
        kept.append(Block(parts, block.bracketed))
    if hydrogen and "OH-" not in anions and anions.get("O2-", 0.0) > hydrogen:
        # H2KAl3Si3O12: the old way to write hydroxyl
        anions["O2-"] -= hydrogen
        anions["OH-"] = hydrogen
        notes.append("H was read as hydroxyl")
        kept = [b for b in kept if any(p.symbol != "H" for p in b.parts)]
    return kept, anions, water


def _unit(anions: Mapping[str, float]) -> tuple[LayerType, float]:
    total = sum(anions.values())
    for size, layer_type, scale in _UNITS:
        if abs(total - size) <= 0.05 * max(1.0, size / 12):
            return layer_type, scale
    listed = " ".join(f"{element_of(ion)} {n:g}" for ion, n in anions.items()) or "none"
    hint = " (hydroxyl missing?)" if not anions.get("OH-") and any(abs(total - n) < 0.1 for n in (10, 11, 7, 14)) else ""
    raise ChemistryError(
        f"anions sum to {total:.2f} ({listed}){hint}, which is no layer silicate unit", fix="write O10(OH)2, O5(OH)4 or O10(OH)8"
    )


def _best(
    options: list[Draft], layer_type: LayerType, scale: float, anions: Mapping[str, float], water: float, notes: list[str],
    tolerance: float,
) -> SiteFormula:  # fmt: skip
    """The first option that passes the checks; the complaint about the first one when none does."""
    complaint: ChemistryError | None = None
    for draft in options:
        formula = SiteFormula(
            layer_type, draft.interlayer, draft.octahedral, draft.tetrahedral,
            {ion: n * scale for ion, n in anions.items()}, water * scale, (*notes, *draft.notes),
        )  # fmt: skip
        formula, factor = _one_unit(formula)
        if scale * factor != 1:
            remark = f"written for {1 / (scale * factor):g} formula units, scaled to {_NAMES[formula.layer_type]}"
            formula = replace(formula, notes=(*formula.notes, remark))
        try:
            return _with_iron(formula, {site: n * factor for site, n in draft.bare_iron.items()}, tolerance)
        except ChemistryError as error:
            complaint = complaint or error
    assert complaint is not None
    raise complaint


def _one_unit(formula: SiteFormula) -> tuple[SiteFormula, float]:
    """A kaolin or serpentine written with O10(OH)8 has the anions of chlorite; its cations tell."""
    if formula.layer_type != "2:1:1":
        return formula, 1.0
    trivalent = sum(n for ion, n in formula.octahedral.items() if charge_of(ion) > 2)
    aluminium = formula.site_sum("tetrahedral") - formula.tetrahedral.get("Si4+", 0.0)
    octahedral = formula.site_sum("octahedral")
    kaolin = octahedral <= 4.2
    serpentine = octahedral > 5.5 and trivalent <= 0.05 and aluminium <= 0.05
    if not (kaolin or serpentine):
        return formula, 1.0
    inner, octa, tetra, anions = ({ion: n / 2 for ion, n in formula.site(site).items()} for site in SITES)
    return SiteFormula("1:1", inner, octa, tetra, anions, formula.water / 2, formula.notes), 0.5


def _with_iron(formula: SiteFormula, bare: Mapping[str, float], tolerance: float) -> SiteFormula:
    """Iron without a charge is Fe2+, but only where that balances."""
    total = sum(bare.values())
    if not total:
        formula.check(tolerance)
        return formula
    if bare.get("tetrahedral"):
        where = f"{bare['tetrahedral']:.2f} Fe without a charge on the tetrahedral site"
        raise ChemistryError(where, fix="write Fe3+ there if it is meant")
    try:
        formula.check(tolerance)
    except ChemistryError:
        ferric = min(-formula.imbalance, total)
        if ferric <= tolerance or not _passes(_oxidised(formula, bare, ferric / total), tolerance):
            raise
        if ferric >= total - tolerance:
            raise ChemistryError("Fe without a charge balances only as ferric iron", fix="write Fe3+ instead of Fe") from None
        fix = f"write the charges, such as Fe2+{total - ferric:.2f} Fe3+{ferric:.2f}"
        raise ChemistryError(f"charges sum to {formula.imbalance:+.2f} with all Fe as Fe2+", fix=fix) from None
    return replace(formula, notes=(*formula.notes, "Fe without a charge was read as Fe2+"))


def _oxidised(formula: SiteFormula, bare: Mapping[str, float], share: float) -> SiteFormula:
    for site in SITES:
        if bare.get(site):
            amount = min(bare[site], formula.site(site)["Fe2+"])
            formula = formula.exchanged(site, "Fe2+", "Fe3+", amount * share)
    return formula


def _passes(formula: SiteFormula, tolerance: float) -> bool:
    try:
        formula.check(tolerance)
    except ChemistryError:
        return False
    return True


def _labelled_parts(text: str) -> dict[str, str] | None:
    """Label -> text behind it, or None for a formula without site names."""
    found = list(_LABEL.finditer(text))
    if not found:
        return None
    parts: dict[str, str] = {}
    stray = text[: found[0].start()].strip(" \t\r\n|;")
    if stray:
        raise ChemistryError(f"{stray!r} stands before the first site name", fix="name its site: I, M, T or A")
    for match, following in zip(found, [*found[1:], None], strict=True):
        label = match.group(1).lower()
        if label not in _LABELS:
            choice = "use I, M, T, A or interlayer, octahedral, tetrahedral, anions"
            raise ChemistryError(f"{match.group(1)!r} is no site", fix=choice)
        site = _LABELS[label] or "water"
        if site in parts:
            raise ChemistryError(f"the site {site} is given twice", fix="give every site once")
        content = text[match.end() : following.start() if following else len(text)].strip(" \t\r\n|;")
        if re.search(r"[|;\n]", content):
            raise ChemistryError(f"a part of {content!r} has no site name", fix="name every site: I, M, T, A")
        parts[site] = "" if content.lower() in ("-", "none", "0") else content
    return parts


def _from_labels(labelled: Mapping[str, str], notes: list[str], tolerance: float) -> SiteFormula:
    draft = Draft()
    anions: dict[str, float] = {}
    water = 0.0
    for site, content in labelled.items():
        if not content:
            continue
        for block in blocks_of(read_tree(normalised(content)), notes):
            for part in block.parts:
                if part.symbol == "H2O":
                    water += part.amount
                elif site == "water":
                    raise ChemistryError(f"{part.symbol} is named as water", fix="write H2O there")
                elif site == "anions" and part.symbol not in ANION_SYMBOLS:
                    raise ChemistryError(f"{part.ion} cannot sit among the anions", fix="write O, OH, F, Cl or S there")
                elif site == "anions":
                    anions[part.ion] = anions.get(part.ion, 0.0) + part.amount
                else:
                    draft.add(site, part)
    for site, short in (("octahedral", "M"), ("tetrahedral", "T"), ("anions", "A")):
        if not labelled.get(site):
            raise ChemistryError(f"the site {site} is missing", fix=f"add {short}: and its ions")
    layer_type, scale = _unit(anions)
    for content_of in (draft.interlayer, draft.octahedral, draft.tetrahedral, draft.bare_iron):
        for key in content_of:
            content_of[key] *= scale
    return _best([draft], layer_type, scale, anions, water, notes, tolerance)


def _number(value: float) -> str:
    short = f"{value:.6g}"
    if "e" not in short and float(short) == value:
        return short
    return format(Decimal(repr(float(value))), "f")


def _ion_text(ion: str, amount: float) -> str:
    shown = ion
    symbol = element_of(ion) if ion in GROUP_IONS or ion[-1] in "+-" else ion
    if ion in GROUP_IONS:
        shown = symbol if ion in ("C2H6O2", "C3H8O3") else f"({symbol})"
    elif symbol == "S" or (symbol in DEFAULT_CHARGE and ion == usual_ion(symbol) and symbol != "Fe"):
        shown = symbol
    return shown if amount == 1 else f"{shown}{_number(amount)}"


def _site_text(content: Mapping[str, float], between: str = "") -> str:
    return between.join(_ion_text(ion, n) for ion, n in content.items() if n > 0)


def write_formula(formula: SiteFormula) -> str:
    """Canonical text; see `SiteFormula.text`."""
    water = f"·{_number(formula.water)}H2O" if formula.water > 0 else ""
    inner, octahedral, tetrahedral, anions = (_site_text(formula.site(site)) for site in SITES)
    compact = f"{f'({inner})' if inner else ''}({octahedral})({tetrahedral}){anions}{water}"
    if len([n for n in formula.interlayer.values() if n > 0]) == 1:
        compact = compact.replace(f"({inner})", inner, 1)
    named = " | ".join(
        f"{label}: {content}"
        for label, content in zip("IMTA", (_site_text(formula.site(site), " ") for site in SITES), strict=True)
        if content
    ) + (f" | W: {_number(formula.water)} H2O" if water else "")
    try:
        same = parse_formula(compact, tolerance=float("inf")) == formula
    except ChemistryError:
        same = False
    return compact if same else named
