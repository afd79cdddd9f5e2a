"""Indices of the trade, each with its definition, source, validity and weakness, or the reason why it was not computed."""

from __future__ import annotations

from dataclasses import dataclass

from xrdmica.interpret import index_readings as read
from xrdmica.interpret.index_readings import IndexInput
from xrdmica.results import IndexValue

__all__ = ["INDICES", "Definition", "trade_indices"]


@dataclass(frozen=True)
class Definition:
    """What an index is.

    Attributes
    ----------
    id, name, unit : str
    definition, source, validity, weakness : str
    compute : callable
        Input -> (value, standard error, label of the scan), or a text that says why not.
    """

    id: str
    name: str
    unit: str
    definition: str
    source: str
    validity: str
    weakness: str
    compute: read.Compute


_WIDTH = "air-dried oriented mount; degrees for Cu, other tubes converted by wavelength and angle"
_KUEBLER = Definition(
    "kuebler",
    "Kübler index (illite 001 width)",
    "degree 2theta Cu",
    "full width at half maximum of the 10 angstrom line, air-dried; 0.25 and 0.42 bound the anchizone once calibrated",
    "Kübler (1967); Kübler & Jaboyedoff (2000), Comptes Rendus 331, 75-89; from memory",
    _WIDTH,
    "depends on the instrument: without the laboratory's own calibration line it must not be held against published limits",
    read.kuebler,
)
_ARKAI = Definition(
    "arkai",
    "Árkai index (chlorite 002 width)",
    "degree 2theta Cu",
    "full width at half maximum of chlorite 002, air-dried",
    "Árkai (1991), Journal of Metamorphic Geology 9, 723-734; from memory",
    _WIDTH,
    "kaolinite or mixed layers in the line spoil it, and it needs the laboratory's own calibration line",
    read.arkai,
)
_ESQUEVIN = Definition(
    "esquevin",
    "Esquevin ratio I(5)/I(10)",
    "",
    "height of the 5 angstrom line over that of the 10 angstrom line; below 0.15 biotite, 0.15-0.3 biotite with muscovite, "
    "0.3-0.4 phengite, above 0.4 rich in Al",
    "Esquevin (1969), Bulletin du Centre de Recherches de Pau 3, 147-153; from memory",
    "glycolated or air-dried oriented mount",
    "stack height, orientation and smectite layers move it as well as composition",
    read.esquevin,
)
_BISCAYE = tuple(
    Definition(
        f"biscaye_{part}",
        f"Biscaye estimate, {part}",
        "%",
        "areas at 17, 10 and 7 angstrom of the glycolated scan, weighted 1, 4 and 2; the one at 7 split by the heights at 3.58 "
        "and 3.54",
        "Biscaye (1965), Geological Society of America Bulletin 76, 803-832; from memory",
        "glycolated oriented mount, any tube",
        "fixed factors ignore composition, order and orientation: good for comparing like samples only",
        read.biscaye(part),
    )
    for part in ("smectite", "illite", "kaolinite", "chlorite")
)
_SIZES = tuple(
    Definition(
        f"size_{name}",
        f"Scherrer size, {name}",
        "angstrom",
        "0.9 lambda / (beta cos theta), beta freed of the instrument's width",
        "Scherrer (1918); Klug & Alexander (1974), X-ray Diffraction Procedures; from memory",
        "oriented mount, line free of others",
        "strain and mixed layers broaden lines too: it is a smallest size",
        read.scherrer(low, high, phases, what),
    )
    for name, low, high, phases, what in (
        ("mica", 9.7, 10.4, read.MICAS, "mica or illite"),
        ("kaolinite", 7.05, 7.3, ("kaolinite", "dickite", "nacrite"), "kaolinite"),
        ("chlorite", 13.8, 14.5, ("chlorite",), "chlorite"),
    )
)
_ILLITE = Definition(
    "illite_percent",
    "Illite layers in illite-smectite",
    "%",
    "position of the 002/003 composite line, glycolated, by table",
    "Moore & Reynolds (1997), X-ray Diffraction and the Identification and Analysis of Clay Minerals, 2nd ed.; from memory",
    "glycolated oriented mount; table computed for Cu, spacings hold for any tube",
    "discrete illite at 5.0 draws the line to itself",
    read.percent_illite,
)
_B0 = Definition(
    "b0",
    "b0 of potassium white mica",
    "angstrom",
    "6 d(060), with 331 beside it",
    "Sassi & Scolari (1974), Contributions to Mineralogy and Petrology 45, 143-152; from memory",
    "random mount, 060 region",
    "331 and other phases lie under 060, and paragonite mixes in",
    read.b0,
)
_EXPANDABLE = Definition(
    "expandable",
    "Expandable layers",
    "% of the sheet silicates",
    "weight of swelling layers, mixed-layer phases by their share",
    "the joint fit of all scans; dry basis",
    "glycolated mount",
    "layers that glycol does not reach are not counted",
    read.expandable,
)
_EXPANDABLE_SOIL = Definition(
    "expandable_soil",
    "Expandable layers of the soil",
    "%",
    "expandable layers times the clay fraction's share of the soil",
    "arithmetic",
    "glycolated mount and clay_percent",
    "swelling layers coarser than the clay fraction are missed",
    read.expandable_of_soil,
)
INDICES = (_KUEBLER, _ARKAI, _ESQUEVIN, *_BISCAYE, *_SIZES, _ILLITE, _B0, _EXPANDABLE, _EXPANDABLE_SOIL)


def trade_indices(given: IndexInput) -> tuple[IndexValue, ...]:
    """All indices of a sample, computed where their conditions are met.

    Parameters
    ----------
    given : IndexInput

    Returns
    -------
    tuple of IndexValue
        One per definition; without a value, `reason` says why.
    """
    return tuple(_one(definition, given) for definition in INDICES)


def _one(definition: Definition, given: IndexInput) -> IndexValue:
    found = definition.compute(given)
    common = {
        "id": definition.id, "name": definition.name, "unit": definition.unit, "definition": definition.definition,
        "source": definition.source, "validity": definition.validity, "weakness": definition.weakness,
    }  # fmt: skip
    if isinstance(found, str):
        return IndexValue(**common, reason=f"not computed because {found}")
    value, error, label = found
    if definition.id in ("kuebler", "arkai"):
        line = given.calibration
        common["validity"] += f"; on the laboratory's line ({line.source})" if line is not None else "; not calibrated"
    return IndexValue(
        **common, value=round(value, 4), standard_error=None if error is None else round(error, 4), scan=label,
    )  # fmt: skip
