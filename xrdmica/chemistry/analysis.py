"""Oxide analyses -> site formulas: normalisation, site filling, iron, errors and what does not fit."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from math import isfinite
from types import MappingProxyType
from typing import Literal

from xrdmica.chemistry.checks import TETRAHEDRAL_CATIONS
from xrdmica.chemistry.formula import LayerType, SiteFormula
from xrdmica.chemistry.ions import INTERLAYER_ONLY, charge_of, element_of, mass_of
from xrdmica.chemistry.oxides import OXIDE_OF, oxide_percent
from xrdmica.errors import ChemistryError

__all__ = ["AnalysisFormula", "Basis", "Iron", "OxideAnalysis", "formula_from_oxides", "formulas_from_oxides"]

Iron = Literal["auto", "given", "ferrous", "ferric"]
Basis = Literal["auto", "2:1", "1:1", "2:1:1"]
# charges of the anions of one formula unit: O10(OH)2, O5(OH)4, O10(OH)8, counted without water as O11, O7, O14
_CHARGES: dict[LayerType, float] = {"2:1": 22.0, "1:1": 14.0, "2:1:1": 28.0}
_HYDROXYLS: dict[LayerType, float] = {"2:1": 2.0, "1:1": 4.0, "2:1:1": 8.0}
_OXYGENS: dict[LayerType, float] = {"2:1": 10.0, "1:1": 5.0, "2:1:1": 10.0}
# oxide -> (ion, cations in it, oxygens in it)
_ION_OF = {name: (ion, cations, oxygens) for ion, (name, cations, oxygens) in OXIDE_OF.items()}
_WATER = ("H2O", "H2O+", "H2O-", "LOI")
# not part of a sheet silicate: apatite, sulfides and sulfates, carbonates
_FOREIGN = ("P2O5", "SO3", "CO2", "S")
_HALOGENS = ("F", "Cl")
_TOTAL_IRON = {"FeOt": "FeO", "Fe2O3t": "Fe2O3"}
_LEAST_TOTAL, _MOST_TOTAL = 60.0, 110.0  # weight percent without water; outside, the unit or the table is wrong
_FLAG_TOTAL = 101.5
_NAMES = {"2:1": "11 oxygens", "1:1": "7 oxygens", "2:1:1": "14 oxygens"}


@dataclass(frozen=True)
class OxideAnalysis:
    """One analysis.

    Attributes
    ----------
    name : str
    percent : mapping
        Oxide, ``"F"`` or ``"Cl"`` -> weight percent. Total iron is ``"FeOt"`` or ``"Fe2O3t"``; water ``"H2O"``, ``"H2O+"``,
        ``"H2O-"`` or ``"LOI"``.
    sigma : mapping
        The same names -> one standard error [weight percent], where known.
    notes : tuple of str
        What reading it had to decide.
    """

    name: str
    percent: Mapping[str, float]
    sigma: Mapping[str, float] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "percent", MappingProxyType(dict(self.percent)))
        object.__setattr__(self, "sigma", MappingProxyType(dict(self.sigma)))

    def __reduce__(self) -> tuple[object, ...]:
        return (type(self), (self.name, dict(self.percent), dict(self.sigma), self.notes))

    @property
    def anhydrous_total(self) -> float:
        """Sum without water, with oxygen taken off for F and Cl [weight percent]."""
        oxygen = mass_of("O2-")
        total = sum(n for name, n in self.percent.items() if name not in _WATER)
        return total - sum(self.percent.get(x, 0.0) * oxygen / (2 * mass_of(x + "-")) for x in _HALOGENS)


@dataclass(frozen=True)
class AnalysisFormula:
    """The formula of an analysis under one assumption about iron.

    Attributes
    ----------
    analysis : OxideAnalysis
    iron : str
        ``"none"``, ``"given"``, ``"ferrous"`` or ``"ferric"``.
    formula : SiteFormula
        As normalised; misfits stand as they are.
    sigma : mapping
        ``"octahedral Fe2+"`` and the like, ``"layer charge"``, ``"octahedral sum"`` -> one standard error; empty when the
        analysis gives no errors.
    water_by_difference : float
        100 minus the anhydrous total [weight percent].
    water_of_formula : float
        Structural water of the formula, on the scale of the analysis [weight percent].
    flags : tuple of str
        Misfits, each a sentence.
    notes : tuple of str
        Choices made.
    """

    analysis: OxideAnalysis
    iron: str
    formula: SiteFormula
    sigma: Mapping[str, float]
    water_by_difference: float
    water_of_formula: float
    flags: tuple[str, ...]
    notes: tuple[str, ...]


@dataclass(frozen=True)
class _Rules:
    layer_type: LayerType
    tetrahedral_iron: bool
    interlayer_magnesium: float | Literal["excess"]


def _checked(analysis: OxideAnalysis) -> None:
    where = f"analysis {analysis.name}: " if analysis.name else ""
    known = {*_ION_OF, *_WATER, *_FOREIGN, *_HALOGENS, *_TOTAL_IRON}
    for name, value in analysis.percent.items():
        if name not in known:
            raise ChemistryError(f"{where}{name!r} is no oxide known here", fix="write oxides such as SiO2, Al2O3, FeO, F, H2O")
        if not isfinite(value) or value < 0:
            raise ChemistryError(f"{where}{name} is {value:g} %", fix="correct it; leave it out when it was not detected")
        if value > 100:
            raise ChemistryError(f"{where}{name} is {value:g}, more than 100 %", fix=f"if it is in ppm, head it '{name} (ppm)'")
    for name, error in analysis.sigma.items():
        if not isfinite(error) or error < 0:
            raise ChemistryError(f"{where}the standard error of {name} is {error:g}", fix="give a positive number or none")
    if not analysis.percent.get("SiO2"):
        raise ChemistryError(f"{where}there is no SiO2", fix="give the analysis of a sheet silicate in weight percent of oxides")
    total = analysis.anhydrous_total
    if total < _LEAST_TOTAL or total > _MOST_TOTAL:
        raise ChemistryError(
            f"{where}the oxides without water sum to {total:.1f} %, expected {_LEAST_TOTAL:g} to {_MOST_TOTAL:g}",
            fix="check units and columns (weight percent of oxides, not elements or atoms, and no column twice)",
        )
    if any(analysis.percent.get(t) for t in _TOTAL_IRON) and (analysis.percent.get("FeO") or analysis.percent.get("Fe2O3")):
        raise ChemistryError(f"{where}total iron stands beside FeO or Fe2O3", fix="give one or the other")


def _moles(percent: Mapping[str, float]) -> dict[str, float]:
    """Cations per 100 g, by ion."""
    oxygen = mass_of("O2-")
    out: dict[str, float] = {}
    for name, value in percent.items():
        if name in _ION_OF and value > 0:
            ion, cations, oxygens = _ION_OF[name]
            weight = mass_of(ion) + oxygen * oxygens / cations
            out[ion] = out.get(ion, 0.0) + value / weight
    return out


def _with_iron(percent: Mapping[str, float], iron: str) -> dict[str, float]:
    """Oxides with iron as assumed."""
    out = {name: value for name, value in percent.items() if name not in _TOTAL_IRON}
    if iron == "given":
        return out
    oxygen, weight = mass_of("O2-"), mass_of("Fe2+")
    ferrous, ferric = weight + oxygen, weight + 1.5 * oxygen
    moles = sum(percent.get(name, 0.0) / (ferrous if name.startswith("FeO") else ferric) for name in
                ("FeO", "FeOt", "Fe2O3", "Fe2O3t"))  # fmt: skip
    out.pop("FeO", None)
    out.pop("Fe2O3", None)
    if moles:
        out["FeO" if iron == "ferrous" else "Fe2O3"] = moles * (ferrous if iron == "ferrous" else ferric)
    return out


def _filled(percent: Mapping[str, float], rules: _Rules) -> SiteFormula:
    """Normalise and fill the sites; nothing is repaired."""
    moles = _moles(percent)
    charge = sum(n * charge_of(ion) for ion, n in moles.items())
    scale = _CHARGES[rules.layer_type] / charge
    left = {ion: n * scale for ion, n in moles.items()}
    room = TETRAHEDRAL_CATIONS[rules.layer_type]
    tetrahedral: dict[str, float] = {}
    entering = ["Si4+", "Ge4+", "B3+", "Be2+", "Al3+", *(["Fe3+"] if rules.tetrahedral_iron else [])]
    for ion in entering:
        # silicon has no other place, the rest fills up
        amount = left.get(ion, 0.0) if ion in entering[:4] else min(left.get(ion, 0.0), max(room, 0.0))
        if amount > 0:
            tetrahedral[ion] = amount
            left[ion] = left[ion] - amount
            room -= amount
    interlayer = {ion: n for ion, n in left.items() if element_of(ion) in INTERLAYER_ONLY and n > 0}
    octahedral = {ion: n for ion, n in left.items() if ion not in interlayer and n > 1e-12}
    moved = _magnesium_to_move(octahedral, rules)
    if moved > 0:
        octahedral["Mg2+"] -= moved
        interlayer["Mg2+"] = moved
    hydroxyl = _HYDROXYLS[rules.layer_type]
    anions = {"O2-": _OXYGENS[rules.layer_type]}
    halogens = {x + "-": percent.get(x, 0.0) / mass_of(x + "-") * scale for x in _HALOGENS if percent.get(x)}
    rest = hydroxyl - sum(halogens.values())
    if rest > 0:
        anions["OH-"] = rest
    return SiteFormula(rules.layer_type, interlayer, octahedral, tetrahedral, {**anions, **halogens})


def _magnesium_to_move(octahedral: Mapping[str, float], rules: _Rules) -> float:
    present = octahedral.get("Mg2+", 0.0)
    if rules.interlayer_magnesium == "excess":
        total = sum(octahedral.values())
        full = 2.0 if total < 2.5 else 3.0
        return min(max(total - full, 0.0), present)
    return min(rules.interlayer_magnesium, present)


def _numbers(formula: SiteFormula) -> dict[str, float]:
    """Everything that gets a standard error."""
    out = {f"{site} {ion}": n for site in ("interlayer", "octahedral", "tetrahedral", "anions")
           for ion, n in getattr(formula, site).items() if ion != "O2-"}  # fmt: skip
    out["layer charge"] = formula.layer_charge
    for site in ("interlayer", "octahedral", "tetrahedral"):
        out[f"{site} sum"] = sum(getattr(formula, site).values())
    return out


def _propagated(
    percent: Mapping[str, float], sigma: Mapping[str, float], convert: Callable[[Mapping[str, float]], SiteFormula]
) -> dict[str, float]:
    """Standard errors by central differences; site filling is linear between its corners."""
    if not any(sigma.values()):
        return {}
    variance: dict[str, float] = {}
    for name, error in sigma.items():
        if not error or name in _WATER or name in _FOREIGN or name not in percent:
            continue
        step = min(error, 0.5 * percent[name]) or error / 100
        up = _numbers(convert({**percent, name: percent[name] + step}))
        down = _numbers(convert({**percent, name: max(percent[name] - step, 0.0)}))
        width = step + min(step, percent[name])
        for key in {*up, *down}:
            slope = (up.get(key, 0.0) - down.get(key, 0.0)) / width
            variance[key] = variance.get(key, 0.0) + (slope * error) ** 2
    return {key: value**0.5 for key, value in variance.items()}


def _flags(analysis: OxideAnalysis, formula: SiteFormula, difference: float, structural: float) -> tuple[str, ...]:
    flags: list[str] = []
    total = analysis.anhydrous_total + sum(analysis.percent.get(w, 0.0) for w in _WATER)
    if total > _FLAG_TOTAL:
        flags.append(f"the total is {total:.2f} %, above {_FLAG_TOTAL:g}")
    # an analysis printed on the ignited basis sums to 100 without any water: nothing to be seen from the difference then
    if abs(difference) > 0.75 and difference < structural - 2.0:
        flags.append(f"only {difference:.2f} % is left for water, the formula needs {structural:.2f}: too high a total")
    if difference > structural + 3.0 and formula.layer_type != "2:1":
        flags.append(f"{difference:.2f} % is missing, the formula needs {structural:.2f} of water: too low a total")
    elif difference > structural + 3.0:
        flags.append(f"{difference:.2f} % is missing, {structural:.2f} of it structural water: interlayer water or a low total")
    expected = TETRAHEDRAL_CATIONS[formula.layer_type]
    sums = {site: sum(getattr(formula, site).values()) for site in ("interlayer", "octahedral", "tetrahedral")}
    if abs(sums["tetrahedral"] - expected) > 0.02:
        flags.append(f"the tetrahedral site holds {sums['tetrahedral']:.3f} cations, not {expected:g}")
    low, high = (4.0, 6.0) if formula.layer_type == "2:1:1" else (2.0, 3.0)
    if not low - 0.05 <= sums["octahedral"] <= high + 0.05:
        flags.append(f"the octahedral site holds {sums['octahedral']:.3f} cations, outside {low:g} to {high:g}")
    if formula.layer_type == "2:1" and sums["interlayer"] > 1.05:
        flags.append(f"the interlayer site holds {sums['interlayer']:.3f} cations, more than 1")
    if formula.layer_type != "2:1" and sums["interlayer"] > 0.1:
        flags.append(f"{sums['interlayer']:.3f} interlayer cations in a layer without charge: a mica or salt is mixed in")
    halogens = sum(formula.anions.get(x, 0.0) for x in ("F-", "Cl-"))
    if halogens > _HYDROXYLS[formula.layer_type] + 0.02:
        flags.append(f"F and Cl fill {halogens:.2f} sites, more than the {_HYDROXYLS[formula.layer_type]:g} of hydroxyl")
    if abs(formula.imbalance) > 0.05:
        flags.append(f"charges sum to {formula.imbalance:+.3f}")
    for name in _FOREIGN:
        if analysis.percent.get(name):
            flags.append(f"{analysis.percent[name]:g} % {name} was left out: it belongs to another mineral")
    return tuple(flags)


def _misfit(formula: SiteFormula, analysis: OxideAnalysis) -> float:
    """How far a formula is from what its layer type allows; only for choosing the basis."""
    octahedral = sum(formula.octahedral.values())
    interlayer = sum(formula.interlayer.values())
    misfit = 2.0 * abs(sum(formula.tetrahedral.values()) - TETRAHEDRAL_CATIONS[formula.layer_type])
    if formula.layer_type == "2:1":
        # with vacancies 2 to 2.1, trioctahedral micas 2.6 to 3
        misfit += max(2.0 - octahedral, 0.0) + max(octahedral - 3.0, 0.0) + max(interlayer - 1.0, 0.0)
        misfit += max(0.0, min(octahedral - 2.12, 2.6 - octahedral))
    elif formula.layer_type == "1:1":
        misfit += min(abs(octahedral - 2.0), abs(octahedral - 3.0)) + 4 * interlayer
        # aluminous serpentines have the compositions of chlorites and are rare: chlorite goes first
        misfit += 0.12 if octahedral > 2.5 and formula.tetrahedral.get("Al3+", 0.0) > 0.15 else 0.0
    else:
        misfit += min(max(4.3 - octahedral, 0.0), 9.0) + max(octahedral - 6.0, 0.0) + 4 * interlayer
        # a magnesian serpentine fits the unit of chlorite as well, but no chlorite is without trivalent cations
        trivalent = sum(n for ion, n in (*formula.octahedral.items(), *formula.tetrahedral.items()) if charge_of(ion) == 3)
        misfit += max(0.0, 0.6 - trivalent)
    difference = 100 - analysis.anhydrous_total
    if difference > 2.0:
        misfit += 0.02 * abs(difference - _structural_water(formula, analysis))
    return misfit


def _structural_water(formula: SiteFormula, analysis: OxideAnalysis) -> float:
    oxides = oxide_percent(formula)
    dry = sum(n for name, n in oxides.items() if name != "H2O")
    return oxides.get("H2O", 0.0) / dry * analysis.anhydrous_total if dry else 0.0


def _chosen_basis(analysis: OxideAnalysis, iron: str, tetrahedral_iron: bool) -> tuple[LayerType, str]:
    rated: list[tuple[float, LayerType]] = []
    for layer_type in _CHARGES:
        formula = _filled(_with_iron(analysis.percent, iron), _Rules(layer_type, tetrahedral_iron, 0.0))
        rated.append((_misfit(formula, analysis), layer_type))
    rated.sort(key=lambda pair: pair[0])
    (best, layer_type), (second, other) = rated[:2]
    note = f"normalised to {_NAMES[layer_type]} ({layer_type} layer): the site sums fit best"
    if second - best < 0.15:
        note += f"; {_NAMES[other]} ({other}) fit nearly as well: say which layer it is"
    return layer_type, note


def formulas_from_oxides(
    analysis: OxideAnalysis | Mapping[str, float],
    *,
    layer_type: Basis = "auto",
    iron: Iron = "auto",
    tetrahedral_iron: bool = False,
    interlayer_magnesium: float | Literal["excess"] = 0.0,
) -> tuple[AnalysisFormula, ...]:
    """Site formulas of an oxide analysis: one, or two that bracket the oxidation of iron.

    Cations are normalised to the charge of O10(OH)2 (22), O5(OH)4 (14) or O10(OH)8 (28). The tetrahedral site takes Si,
    then Al (then Fe3+ when asked); the rest of the small cations is octahedral; K, Na, Ca, Ba, Rb, Cs, Sr and NH4 are between the
    layers. F and Cl take the place of OH. Misfits are flagged, not repaired.

    Parameters
    ----------
    analysis : OxideAnalysis or mapping
        Weight percent by oxide.
    layer_type : {"auto", "2:1", "1:1", "2:1:1"}
        ``"auto"`` takes the basis whose site sums fit best, and says so.
    iron : {"auto", "given", "ferrous", "ferric"}
        ``"auto"``: as given when FeO and Fe2O3 are both there, else all ferrous and all ferric, two formulas.
    tetrahedral_iron : bool
        Fill a short tetrahedral site with Fe3+.
    interlayer_magnesium : float or "excess"
        Mg to put between the layers [apfu], or all above a full octahedral sheet (2 or 3); for smectite and vermiculite.

    Returns
    -------
    tuple of AnalysisFormula

    Raises
    ------
    ChemistryError
        For an unknown oxide, a negative value, a value above 100 %, no SiO2, or an impossible total.

    References
    ----------
    Normalisation bases are common practice; Rieder et al. (1998), Canadian Mineralogist 36, 905-912, for micas.
    """
    given = analysis if isinstance(analysis, OxideAnalysis) else OxideAnalysis("", analysis)
    _checked(given)
    if isinstance(interlayer_magnesium, float | int) and not 0 <= interlayer_magnesium <= 1:
        raise ChemistryError(f"interlayer magnesium is {interlayer_magnesium:g}", fix="give 0 to 1 atoms per formula unit")
    has_iron = any(given.percent.get(name) for name in ("FeO", "Fe2O3", *_TOTAL_IRON))
    both = bool(given.percent.get("FeO") and given.percent.get("Fe2O3"))
    if iron == "given" and any(given.percent.get(name) for name in _TOTAL_IRON):
        raise ChemistryError(
            f"analysis {given.name}: only total iron is given", fix="give FeO and Fe2O3, or take ferrous, ferric or auto"
        )
    if not has_iron:
        states = ["none"]
    elif iron == "auto":
        states = ["given"] if both else ["ferrous", "ferric"]
    else:
        states = [iron]
    out = []
    for state in states:
        assumed = "given" if state == "none" else state
        notes = list(given.notes)
        if layer_type == "auto":
            basis, note = _chosen_basis(given, assumed, tetrahedral_iron)
            notes.append(note)
        else:
            basis = layer_type
        rules = _Rules(basis, tetrahedral_iron, interlayer_magnesium)
        if state in ("ferrous", "ferric"):
            notes.append(f"all iron taken as {'Fe2+' if state == 'ferrous' else 'Fe3+'}")
        out.append(_one(given, assumed, state, rules, tuple(notes)))
    return tuple(out)


def _one(analysis: OxideAnalysis, assumed: str, label: str, rules: _Rules, notes: tuple[str, ...]) -> AnalysisFormula:
    formula = _filled(_with_iron(analysis.percent, assumed), rules)
    sigma = _propagated(analysis.percent, analysis.sigma, lambda percent: _filled(_with_iron(percent, assumed), rules))
    difference = 100.0 - analysis.anhydrous_total
    structural = _structural_water(formula, analysis)
    return AnalysisFormula(
        analysis, label, formula, sigma, difference, structural, _flags(analysis, formula, difference, structural), notes
    )


def formula_from_oxides(
    analysis: OxideAnalysis | Mapping[str, float],
    *,
    layer_type: Basis = "auto",
    iron: Literal["given", "ferrous", "ferric"] = "given",
    tetrahedral_iron: bool = False,
    interlayer_magnesium: float | Literal["excess"] = 0.0,
) -> SiteFormula:
    """The site formula of one analysis; see `formulas_from_oxides`, which also tells what does not fit.

    Raises
    ------
    ChemistryError
        As `formulas_from_oxides`.
    """
    return formulas_from_oxides(
        analysis, layer_type=layer_type, iron=iron, tetrahedral_iron=tetrahedral_iron, interlayer_magnesium=interlayer_magnesium
    )[0].formula
