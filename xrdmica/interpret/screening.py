"""The swelling screen of a soil for a geotechnical laboratory: a class with its reasons, never a design value."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from pydantic import Field

from xrdmica.results import Findings, Proportions, Record, Swelling

__all__ = ["IndexTests", "PropertyRange", "Screening", "activity", "screen_soil", "swelling_potential"]

Class = Literal["swelling", "weakly swelling", "non-swelling", "cannot tell"]
# expandable layers of the whole soil [wt %]: below the first nothing to speak of, above the second swelling (common practice)
_WEAK, _STRONG = 2.0, 10.0
# typical ranges per group: CEC [cmol(+)/kg], specific surface [m2/g]; handbook, from memory
_CEC: dict[str, tuple[float, float]] = {
    "smectite": (80, 120), "vermiculite": (100, 150), "true mica": (10, 40), "kaolin": (2, 15), "chlorite": (10, 40),
    "talc group": (0, 5), "brittle mica": (0, 10), "serpentine": (1, 10), "palygorskite-sepiolite": (5, 30),
}  # fmt: skip
_SURFACE: dict[str, tuple[float, float]] = {
    "smectite": (600, 800), "vermiculite": (500, 700), "true mica": (50, 110), "kaolin": (10, 30), "chlorite": (10, 55),
    "talc group": (1, 10), "brittle mica": (1, 10), "serpentine": (5, 50), "palygorskite-sepiolite": (100, 300),
}  # fmt: skip
# specific surface [m2/g of soil] against uptake of water at high humidity (common practice)
_UPTAKE = ((300.0, "very high"), (150.0, "high"), (50.0, "medium"), (0.0, "low"))
_METHYLENE = 2.44  # m2/g per mg/g of methylene blue at 130 square angstrom a molecule (Hang & Brindley 1970), from memory
_HAZARDS: dict[str, str] = {
    "pyrite": "pyrite: oxidises to sulfate and acid, heaves, and attacks concrete",
    "gypsum": "gypsum: dissolves, and feeds sulfate attack on concrete and stabilised soil",
    "anhydrite": "anhydrite: turns to gypsum with water and swells strongly",
    "halite": "halite: dissolves",
    "talc": "talc: layers slide easily, low residual strength",
    "halloysite": "halloysite: loses water for good when dried, so that tests on dried soil mislead",
    "serpentine": "serpentine: may be fibrous; microscopy and the local rules on asbestos",
    "amphibole": "amphibole: may be fibrous; microscopy and the local rules on asbestos",
    "palygorskite": "palygorskite: takes up much water without swelling in the lattice, thixotropic",
    "sepiolite": "sepiolite: takes up much water without swelling in the lattice, thixotropic",
}


class PropertyRange(Record):
    """An expected range by mixing rule."""

    name: str
    low: float
    typical: float
    high: float
    unit: str
    source: str


class Screening(Record):
    """What the screen says about a soil."""

    sample: str
    verdict: Class
    reason: str
    expandable_percent: float | None = Field(default=None, description="see `basis`")
    low95: float | None = None
    high95: float | None = None
    basis: str = ""
    interlayer: str = Field(default="", description="what the air-dried spacing says of the cation")
    properties: tuple[PropertyRange, ...] = ()
    uptake: str = Field(default="", description="water-uptake class")
    look_alikes: tuple[str, ...] = ()
    hazards: tuple[str, ...] = ()
    consistency: tuple[str, ...] = Field(default=(), description="what index tests say beside the diffraction")
    measure_next: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()


@dataclass(frozen=True)
class IndexTests:
    """The laboratory's own index tests; None where not made.

    Attributes
    ----------
    clay_percent : float or None
        Finer than 2 micrometres [wt %].
    liquid_limit, plastic_limit : float or None
        Water content [%].
    methylene_blue : float or None
        Taken up by the soil [mg/g].
    cec : float or None
        Of the soil [cmol(+)/kg].
    """

    clay_percent: float | None = None
    liquid_limit: float | None = None
    plastic_limit: float | None = None
    methylene_blue: float | None = None
    cec: float | None = None

    @property
    def plasticity(self) -> float | None:
        """Plasticity index [%]."""
        if self.liquid_limit is None or self.plastic_limit is None:
            return None
        return self.liquid_limit - self.plastic_limit


def activity(plasticity: float, clay_percent: float) -> float:
    """Activity, plasticity index over clay percent.

    References
    ----------
    Skempton (1953), Proceedings of the 3rd International Conference on Soil Mechanics 1, 57-61: below 0.75 inactive, above 1.25
    active; kaolinite 0.4, illite 0.9, sodium smectite several.
    """
    return plasticity / clay_percent


def swelling_potential(activity_value: float, clay_percent: float) -> float:
    """Swelling potential of a compacted soil under 7 kPa [%].

    References
    ----------
    Seed, Woodward & Lundgren (1962), Journal of the Soil Mechanics and Foundations Division 88(3), 53-87:
    S = 3.6e-5 A^2.44 C^3.44; low below 1.5, medium to 5, high to 25, very high above (from memory). A here is the corrected
    activity of artificial mixtures; for natural soils the relation is a rough guide.
    """
    return float(3.6e-5 * activity_value**2.44 * clay_percent**3.44)


def screen_soil(
    findings: Findings,
    proportions: Proportions,
    swelling: Swelling,
    tests: IndexTests | None = None,
    *,
    cautions: Sequence[str] = (),
) -> Screening:
    """Class a soil by its expandable layers, and hold the laboratory's index tests against it.

    Parameters
    ----------
    findings : Findings
    proportions : Proportions
    swelling : Swelling
        From `xrdmica.interpret.swelling.screen_swelling`.
    tests : IndexTests, optional
    cautions : sequence of str
        Printed with every screening.

    Returns
    -------
    Screening
        ``cannot tell`` wherever the interval spans a class boundary or the scans leave the question open.
    """
    given = tests or IndexTests()
    part = None if given.clay_percent is None else given.clay_percent / 100
    scale = 1.0 if part is None else part
    value, low, high = (_scaled(v, scale) for v in (swelling.expandable_percent, swelling.low95, swelling.high95))
    verdict, reason = _verdict(swelling, value, low, high)
    properties = _properties(proportions, part)
    surface = next((p for p in properties if p.name == "specific surface"), None)
    basis = "of the soil: expandable layers of the clay fraction times its share" if part is not None else (
        "of the sheet silicates of the clay fraction; give the clay fraction's share of the soil for a value of the soil"
    )  # fmt: skip
    next_steps = [swelling.measure_next] if swelling.measure_next else []
    if part is None:
        next_steps.append("the clay fraction's share of the soil (sedimentation, local standard)")
    return Screening(
        sample=findings.sample, verdict=verdict, reason=reason, expandable_percent=value, low95=low, high95=high, basis=basis,
        interlayer=_interlayer(findings), properties=properties, uptake="" if surface is None else _uptake(surface),
        look_alikes=_look_alikes(findings), hazards=_hazards(findings),
        consistency=(*_tests_in_words(given), *_contradictions(verdict, given, properties)),
        measure_next=tuple(next_steps), cautions=tuple(cautions),
    )  # fmt: skip


def _scaled(value: float | None, factor: float) -> float | None:
    return None if value is None else round(value * factor, 2)


def _verdict(swelling: Swelling, value: float | None, low: float | None, high: float | None) -> tuple[Class, str]:
    if swelling.verdict == "cannot tell":
        return "cannot tell", swelling.reason
    if swelling.verdict == "no":
        if high is not None and high > _WEAK:
            return "non-swelling", f"{swelling.reason}; up to {high:.0f} % of smectite could be there unseen"
        return "non-swelling", swelling.reason
    if value is None or low is None or high is None:
        return "cannot tell", "swelling layers are there, but the scans do not give their amount"
    names = [cls for limit, cls in ((_WEAK, "non-swelling"), (_STRONG, "weakly swelling")) if low < limit <= high]
    span = f"{low:.0f} to {high:.0f} % expandable layers"
    if low < _WEAK and high >= _STRONG:
        return "cannot tell", f"{span}: the interval spans all classes"
    if value >= _STRONG:
        return "swelling", span + (f"; the interval reaches into {names[-1]}" if names else "")
    if value >= _WEAK:
        return "weakly swelling", span + ("; the interval reaches into swelling" if high >= _STRONG else "")
    return "non-swelling", f"{span}: too little to matter, unless it lies in seams or joints"


def _interlayer(findings: Findings) -> str:
    """What the air-dried spacing of smectite says: 12.4 with sodium, 15 with calcium or magnesium (common practice)."""
    for finding in findings.phases:
        if finding.group == "smectite" and finding.status in ("present", "trace") and finding.basal_spacing is not None:
            d = finding.basal_spacing
            if 12.0 <= d <= 13.2:
                return f"{d:.1f} Å air-dried: one water layer, usual for sodium (or a dry room): the more dangerous case"
            if 14.4 <= d <= 15.8:
                return f"{d:.1f} Å air-dried: two water layers, usual for calcium or magnesium"
            return f"{d:.1f} Å air-dried: neither the usual one nor two water layers"
    return ""


def _mixture(proportions: Proportions, table: Mapping[str, tuple[float, float]]) -> tuple[float, float, float] | None:
    """Low, typical and high of a property by weight: ranges of the groups and intervals of the proportions."""
    rows = [p for p in proportions.phases if p.weight_percent is not None and p.weight_percent > 0]
    groups = {g.group: g.weight_percent for g in proportions.groups if g.weight_percent is not None}
    expandable = groups.get("expandable layers")
    if not rows:
        return None
    low = typical = high = 0.0
    for row in rows:
        share = (row.weight_percent or 0.0) / 100
        least, most = (row.low95 or 0.0) / 100, (row.high95 if row.high95 is not None else 100 * share) / 100
        one, two = _range_of(row.group, row.phase, table, expandable, row.weight_percent or 0.0)
        typical += share * (one + two) / 2
        low += least * one
        high += most * two
    return low, typical, max(high, typical)


def _range_of(
    group: str, phase: str, table: Mapping[str, tuple[float, float]], expandable: float | None, weight: float
) -> tuple[float, float]:
    if group != "interstratified":
        return table.get(group, (0.0, 10.0))
    swelling = table["smectite"]
    partners = {"kaolinite": "kaolin", "chlorite": "chlorite"}
    partner = next((group for start, group in partners.items() if phase.startswith(start)), "true mica")
    other = table[partner]
    share = min((expandable or 0.0) / weight, 1.0) if weight > 0 else 0.5
    share = share if 0 < share <= 1 else 0.5
    return tuple(share * s + (1 - share) * o for s, o in zip(swelling, other, strict=True))  # type: ignore[return-value]


def _properties(proportions: Proportions, part: float | None) -> tuple[PropertyRange, ...]:
    where = "soil" if part is not None else "clay fraction"
    out = []
    for name, table, unit in (("CEC", _CEC, "cmol(+)/kg"), ("specific surface", _SURFACE, "m2/g")):
        mixed = _mixture(proportions, table)
        if mixed is None:
            continue
        low, typical, high = (round(value * (1.0 if part is None else part), 1) for value in mixed)
        out.append(
            PropertyRange(
                name=name, low=low, typical=typical, high=max(high, typical), unit=f"{unit} of {where}",
                source="mixing rule over typical ranges of the groups, handbook, from memory",
            )
        )  # fmt: skip
    return tuple(out)


def _uptake(surface: PropertyRange) -> str:
    return next(name for limit, name in _UPTAKE if surface.typical >= limit)


def _look_alikes(findings: Findings) -> tuple[str, ...]:
    """Layers that stand where swelling ones do and do not swell, treated by name."""
    words = {
        "chlorite": "chlorite stands at 14 Å like an air-dried smectite and does not swell; it was told by glycol or heating",
        "vermiculite": "vermiculite stands at 14 Å, takes up water, and swells little in the field: not counted as expandable",
        "halloysite": "hydrated halloysite stands at 10 Å like mica, loses its water on drying, and does not swell again",
        "palygorskite": "palygorskite stands at 10.4 Å; it holds water in channels and does not swell in the lattice",
        "sepiolite": "sepiolite stands at 12 Å like a sodium smectite and does not swell in the lattice",
    }
    seen = {f.phase for f in findings.phases if f.status != "not_detected"}
    return tuple(text for phase, text in words.items() if phase in seen)


def _hazards(findings: Findings) -> tuple[str, ...]:
    seen = {f.phase for f in findings.phases if f.status != "not_detected"}
    return tuple(text for phase, text in _HAZARDS.items() if phase in seen)


def _tests_in_words(tests: IndexTests) -> tuple[str, ...]:
    out = []
    index, clay = tests.plasticity, tests.clay_percent
    if index is not None and clay:
        value = activity(index, clay)
        name = "inactive" if value < 0.75 else "normal" if value <= 1.25 else "active"
        out.append(f"activity {value:.2f}, {name} (Skempton 1953)")
        potential = swelling_potential(value, clay)
        grade = "low" if potential < 1.5 else "medium" if potential < 5 else "high" if potential < 25 else "very high"
        shown = f"{potential:.1f} %" if potential < 100 else "above 100 %, outside the relation"
        out.append(f"swelling potential by index tests {shown}, {grade} (Seed, Woodward & Lundgren 1962; a rough guide)")
    if tests.methylene_blue is not None:
        out.append(f"surface by methylene blue {_METHYLENE * tests.methylene_blue:.0f} m2/g of soil (130 square Å a molecule)")
    return tuple(out)


def _contradictions(verdict: Class, tests: IndexTests, properties: Sequence[PropertyRange]) -> tuple[str, ...]:
    out = []
    index, clay = tests.plasticity, tests.clay_percent
    if index is not None and clay:
        value = activity(index, clay)
        if verdict == "non-swelling" and value > 1.25:
            out.append(
                "the index tests contradict the diffraction: an active clay without swelling layers; organic matter, salts, "
                "amorphous matter or swelling layers below the detection limit could explain it: repeat both"
            )
        if verdict == "swelling" and value < 0.5:
            out.append(
                "the index tests contradict the diffraction: swelling layers in a clay of low activity; cemented or saturated "
                "with potassium, or the clay percent is too high: repeat both"
            )
    known = {p.name: p for p in properties}
    for name, value_of, unit in (
        ("CEC", tests.cec, "cmol(+)/kg"),
        ("specific surface", None if tests.methylene_blue is None else _METHYLENE * tests.methylene_blue, "m2/g"),
    ):
        expected = known.get(name)
        if value_of is None or expected is None or not expected.unit.endswith("soil"):
            continue
        if not 0.6 * expected.low <= value_of <= 1.4 * expected.high:
            side = "above" if value_of > expected.high else "below"
            out.append(
                f"measured {name} {value_of:.0f} {unit} lies {side} the {expected.low:.0f} to {expected.high:.0f} that the "
                "minerals imply: organic matter, fineness or the proportions differ from what was supposed"
            )
    if not out and (index is not None or tests.cec is not None or tests.methylene_blue is not None):
        out.append("index tests and diffraction do not contradict each other")
    return tuple(out)
