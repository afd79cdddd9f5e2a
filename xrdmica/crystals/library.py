"""Phase files: their schema, and loading them from the ``structures`` folder."""

from __future__ import annotations

import tomllib
from functools import lru_cache
from pathlib import Path
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from xrdmica.chemistry.formula import LayerType, SiteFormula, SiteName
from xrdmica.chemistry.ions import charge_of, mass_of
from xrdmica.errors import ChemistryError, StructureError
from xrdmica.paths import data_folder
from xrdmica.scans.treatment import Condition, Treatment

__all__ = [
    "GROUPS", "FormulaTable", "LayerTable", "LookAlike", "Phase", "Plane", "Polytype", "Stack", "State", "Variable",
    "all_phases", "load_phase", "phase_ids",
]  # fmt: skip

GROUPS = (
    "true mica", "brittle mica", "talc group", "kaolin", "serpentine", "chlorite", "vermiculite", "smectite",
    "interstratified", "palygorskite-sepiolite", "companion",
)  # fmt: skip
IonCounts = dict[str, Annotated[float, Field(ge=0)]]


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class FormulaTable(_Table):
    """Ions per formula unit, site by site; `framework` instead of sites for phases that are no sheet silicates."""

    interlayer: IonCounts = {}
    octahedral: IonCounts = {}
    tetrahedral: IonCounts = {}
    anions: IonCounts = {}
    framework: IonCounts = {}


class AtomSite(_Table):
    """One site of a three-dimensional structure."""

    label: str
    ions: IonCounts = Field(description="ion -> occupancy")
    xyz: tuple[float, float, float] = Field(description="fractional coordinates")
    b_iso: float = Field(default=1.0, ge=0, le=20, description="angstrom^2")


class Polytype(_Table):
    """A cell, and its atoms where a published structure gives them."""

    name: str
    cell: tuple[float, float, float, float, float, float] = Field(description="a b c [angstrom] alpha beta gamma [degree]")
    space_group: str
    symmetry: tuple[str, ...] = Field(default=(), description="all operations as x,y,z text, centring included")
    layers_per_cell: Annotated[int, Field(ge=1)] = 1
    formula_units: Annotated[float, Field(gt=0)] = Field(description="Z, formula units in the cell")
    sites: tuple[AtomSite, ...] = ()
    source: str


class Plane(_Table):
    """Atoms at one height. The height is `z` from the middle of the layer, or `below_middle` down from the middle of the
    interlayer space. In a mirrored layer a plane off the middle stands for itself and its twin, and counts are per side.

    Either `ions` names what sits there, or `role` takes the formula's ions of that site times `share`.
    """

    z: float | None = None
    below_middle: float | None = None
    role: SiteName | None = None
    share: Annotated[float, Field(gt=0, le=1)] = 1.0
    ions: IonCounts = {}
    b_iso: Annotated[float, Field(ge=0, le=30)] = 1.0

    @model_validator(mode="after")
    def _one_height_one_content(self) -> Plane:
        if (self.z is None) == (self.below_middle is None):
            raise ValueError("give exactly one of z and below_middle")
        if (self.role is None) == (not self.ions):
            raise ValueError("give exactly one of role and ions")
        return self


class LayerTable(_Table):
    """The part of the layer that no treatment changes."""

    mirrored: bool = Field(default=True, description="planes are listed for one half, the other is its mirror image")
    planes: tuple[Plane, ...]
    source: str


class State(_Table):
    """What the phase looks like under one condition."""

    id: str
    conditions: tuple[Condition, ...]
    temperature: tuple[float, float] | None = Field(default=None, description="heated: lowest and highest [C]")
    cations: tuple[str, ...] = Field(default=(), description="saturating cations this state needs; empty: any")
    spacing: Annotated[float, Field(gt=3, lt=60)] | None = None
    spacing_range: tuple[float, float] | None = None
    planes: tuple[Plane, ...] = Field(default=(), description="content of the interlayer space or hydroxide sheet")
    lost: bool = Field(default=False, description="the phase gives no basal lines in this state")
    spacing_disorder: Annotated[float, Field(ge=0, le=1)] = Field(default=0.0, description="standard deviation [angstrom]")
    source: str = ""

    @model_validator(mode="after")
    def _spacing_unless_lost(self) -> State:
        if not self.lost and (self.spacing is None or self.spacing_range is None):
            raise ValueError(f"state {self.id}: spacing and spacing_range are needed unless lost = true")
        if self.spacing and self.spacing_range and not self.spacing_range[0] <= self.spacing <= self.spacing_range[1]:
            raise ValueError(f"state {self.id}: spacing lies outside spacing_range")
        return self

    def fits(self, treatment: Treatment) -> bool:
        """Whether the state may be met after `treatment`."""
        if treatment.condition not in self.conditions:
            return False
        if self.cations and treatment.cation is not None and treatment.cation not in self.cations:
            return False
        if treatment.condition == "heated" and self.temperature is not None:
            return self.temperature[0] <= (treatment.temperature or 0.0) <= self.temperature[1]
        return True


class Stack(_Table):
    """Interstratification of two phases of the library."""

    first: str
    second: str
    reichweite: Annotated[int, Field(ge=0, le=3)]
    fraction: tuple[float, float, float] = Field(description="share of `first`: lowest, usual, highest")
    source: str


class Exchange(_Table):
    """A replacement that goes with another one, to keep charges balanced."""

    site: SiteName
    out: str
    into: str
    ratio: float = Field(default=1.0, gt=0, description="atoms per atom of the first replacement")


class Variable(_Table):
    """What composition or texture may vary in, and a fit may move."""

    id: str
    kind: Literal["exchange", "mean_layers"]
    minimum: float
    typical: float
    maximum: float
    unit: str
    site: SiteName | None = None
    out: str | None = None
    into: str | None = None
    also: tuple[Exchange, ...] = Field(default=(), description="replacements on other sites that go with it")
    fitted: bool = Field(default=True, description="whether basal intensities tell it, so that a fit may move it")

    @model_validator(mode="after")
    def _limits(self) -> Variable:
        if not self.minimum <= self.typical <= self.maximum:
            raise ValueError(f"variable {self.id}: needs minimum <= typical <= maximum")
        if self.kind == "exchange" and not (self.site and self.out and self.into):
            raise ValueError(f"variable {self.id}: an exchange needs site, out and into")
        return self


class LookAlike(_Table):
    """A phase with nearly the same basal lines, and what would tell."""

    id: str
    told_by: str


class Phase(_Table):
    """One phase of the library, as its file says."""

    id: Annotated[str, Field(pattern=r"^[a-z][a-z0-9_]*$")]
    name: str
    symbol: str = Field(default="", description="IMA-CNMNC mineral symbol, empty where there is none or it is unsure")
    group: str
    layer_type: LayerType | None = None
    formula: FormulaTable = FormulaTable()
    polytypes: tuple[Polytype, ...] = ()
    layer: LayerTable | None = None
    states: tuple[State, ...] = ()
    stack: Stack | None = None
    variables: tuple[Variable, ...] = ()
    look_alikes: tuple[LookAlike, ...] = ()
    occurrence: Literal["common", "rare"] = Field(
        default="common", description="in clay fractions and soils; a rare phase has to be better supported than a common one"
    )
    d060: float | None = Field(default=None, description="angstrom")
    cautions: tuple[str, ...] = ()
    sources: tuple[str, ...] = Field(min_length=1)
    transcribed_by: Annotated[str, Field(min_length=1)]
    checked_against: Annotated[str, Field(min_length=1)]

    @model_validator(mode="after")
    def _whole(self) -> Phase:
        if self.group not in GROUPS:
            raise ValueError(f"group {self.group!r} is none of {', '.join(GROUPS)}")
        if self.group == "companion":
            if not self.formula.framework or not any(p.sites for p in self.polytypes):
                raise ValueError("a companion needs formula.framework and a polytype with sites")
        elif self.stack is None and (self.layer is None or not self.states or not self.polytypes or self.layer_type is None):
            raise ValueError("a sheet silicate needs layer_type, layer, states and polytypes (or a stack)")
        return self

    @property
    def is_sheet_silicate(self) -> bool:
        """Whether basal reflections are modelled."""
        return self.group != "companion"

    @property
    def site_formula(self) -> SiteFormula:
        """The formula with its sites; raises StructureError for companions and interstratified phases."""
        if self.layer_type is None:
            raise StructureError(f"{self.id} has no site formula of its own", fix="ask for the phases it is made of")
        f = self.formula
        return SiteFormula(self.layer_type, f.interlayer, f.octahedral, f.tetrahedral, f.anions)

    @property
    def molar_mass(self) -> float:
        """Dry mass of a formula unit [g/mol]."""
        if self.formula.framework:
            return sum(n * mass_of(ion) for ion, n in self.formula.framework.items())
        return self.site_formula.molar_mass

    @property
    def area(self) -> float:
        """In-plane area per formula unit of a sheet silicate [angstrom^2]: a b sin(gamma) of the C-centred cell, halved."""
        from math import radians, sin

        a, b, _, _, _, gamma = self.polytypes[0].cell
        return a * b * sin(radians(gamma)) / 2

    def states_for(self, treatment: Treatment) -> tuple[State, ...]:
        """The states that may be met after a treatment; empty when the file says nothing about it."""
        return tuple(state for state in self.states if state.fits(treatment))

    def variable(self, name: str) -> Variable | None:
        """One of the variables by id."""
        return next((v for v in self.variables if v.id == name), None)


def _read(path: Path) -> Phase:
    try:
        phase = Phase.model_validate(tomllib.loads(path.read_text(encoding="utf-8")))
    except tomllib.TOMLDecodeError as error:
        raise StructureError(f"{path.name}: not valid TOML", why=str(error), fix="correct the file") from error
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"]) or "the file as a whole"
        raise StructureError(f"{path.name}: {key}: {first['msg']}", fix="correct that key; DEVELOPERS.md lists them") from error
    if phase.id != path.stem:
        raise StructureError(f"{path.name}: id is {phase.id!r}", fix="name the file after the id")
    _check_charges(path, phase)
    return phase


def _check_charges(path: Path, phase: Phase) -> None:
    try:
        if phase.formula.framework:
            balance = sum(n * charge_of(ion) for ion, n in phase.formula.framework.items())
        elif phase.layer_type is not None:
            balance = phase.site_formula.imbalance
        else:
            return
    except ChemistryError as error:
        raise StructureError(f"{path.name}: formula: {error.what}", fix=error.fix) from error
    if abs(balance) > 0.02:
        raise StructureError(f"{path.name}: formula: charges sum to {balance:+.3f}", fix="correct the formula")


@lru_cache(maxsize=1)
def _library() -> dict[str, Phase]:
    folder = data_folder("structures")
    return {path.stem: _read(path) for path in sorted(folder.glob("*.toml"))}


def phase_ids() -> tuple[str, ...]:
    """Ids of all phases in the library, sorted."""
    return tuple(_library())


def all_phases() -> tuple[Phase, ...]:
    """All phases of the library, sorted by id."""
    return tuple(_library().values())


def load_phase(phase: str | Path) -> Phase:
    """Load a phase by id, or from a phase file of one's own.

    Parameters
    ----------
    phase : str or pathlib.Path
        Id in the library, or the path of a ``.toml`` file.

    Returns
    -------
    Phase
        The validated phase.

    Raises
    ------
    StructureError
        If there is no such phase, or the file breaks the schema (the message names file and key).
    """
    if isinstance(phase, Path) or str(phase).endswith(".toml"):
        path = Path(phase)
        if not path.is_file():
            raise StructureError(f"{path}: no such phase file", fix="check the path")
        return _read(path)
    try:
        return _library()[phase]
    except KeyError:
        from difflib import get_close_matches

        close = get_close_matches(phase, _library(), n=3)
        hint = f"did you mean {' or '.join(close)}?" if close else "`xrdmica phases` lists what there is"
        raise StructureError(f"phase {phase!r} is not in the library", fix=hint) from None
