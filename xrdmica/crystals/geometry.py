"""Shape of an ideal layer from its bond lengths: tetrahedral rotation, octahedral flattening, the larger empty octahedron."""

from __future__ import annotations

from dataclasses import dataclass
from math import acos, asin, cos, degrees, pi, radians, sin, sqrt

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.spacing import octahedral_radius, predict_spacing
from xrdmica.errors import StructureError

__all__ = ["LayerGeometry", "layer_geometry", "octahedral_bond", "tetrahedral_bond"]

_OXYGEN = 1.36  # angstrom, O2- three-coordinated, Shannon (1976), Acta Crystallographica A32, 751-767
_DIOCTAHEDRAL_ANGLE = 57.1  # degree, flattening angle psi of filled octahedra in dioctahedral layers, handbook, from memory
_TRIOCTAHEDRAL_ANGLE = 58.7  # degree, the same where no better b is known, handbook, from memory
_PROTON = 0.95  # angstrom, O-H
# radii give somewhat short Al-O bonds in dioctahedral layers: 1.91-1.93 is found (handbook, from memory)
_STRETCH = 1.013


@dataclass(frozen=True)
class LayerGeometry:
    """Lengths of one ideal layer [angstrom] and its angles [degree].

    Attributes
    ----------
    a, b : float
        a = b / sqrt(3).
    spacing : float
        d(001) of one layer.
    tetrahedral, octahedral : float
        Bond lengths <T-O> and <M-O>.
    rotation : float
        Tetrahedral rotation alpha.
    flattening : float
        Octahedral angle psi between a bond and the normal of the layer.
    half_octahedral : float
        Half the thickness of the octahedral sheet.
    outward : float
        How far the anions around an empty octahedron move away from it; 0 in trioctahedral layers.
    """

    a: float
    b: float
    spacing: float
    tetrahedral: float
    octahedral: float
    rotation: float
    flattening: float
    half_octahedral: float
    outward: float

    @property
    def edge_reach(self) -> float:
        """Distance of a basal oxygen from the axis of its tetrahedron, in the plane."""
        return 2 * sqrt(2) / 3 * self.tetrahedral

    @property
    def tetrahedral_height(self) -> float:
        """From the apical to the basal oxygens of a regular tetrahedron."""
        return 4 / 3 * self.tetrahedral

    @property
    def tilt(self) -> float:
        """Angle by which tetrahedra lean because their apices move with the octahedral anions [radian]."""
        return asin(min(self.outward * sqrt(3) / 2 / self.tetrahedral_height, 1.0))

    @property
    def proton(self) -> float:
        """Length of O-H."""
        return _PROTON

    @property
    def ring(self) -> float:
        """Offset of the ring centre from the middle of the layer, along the stagger."""
        return self.a / 3 - self.outward / 2


def tetrahedral_bond(formula: SiteFormula) -> float:
    """Mean T-O bond [angstrom]: 1.608 + 0.163 Al/(Al + Si), Hazen & Burnham (1973), American Mineralogist 58, 889-900."""
    total = formula.site_sum("tetrahedral")
    if total <= 0:
        raise StructureError("the formula has no tetrahedral cations", fix="give a sheet silicate")
    return 1.608 + 0.163 * (1.0 - formula.tetrahedral.get("Si4+", 0.0) / total)


def octahedral_bond(formula: SiteFormula) -> float:
    """Mean M-O bond of the filled octahedra [angstrom] from radii (Shannon 1976)."""
    stretch = _STRETCH if formula.octahedral_character == "dioctahedral" else 1.0
    return stretch * (octahedral_radius(formula) + _OXYGEN)


def layer_geometry(
    formula: SiteFormula, *, b: float | None = None, spacing: float | None = None
) -> LayerGeometry:
    """Geometry of the layer of a composition.

    Parameters
    ----------
    formula : SiteFormula
    b, spacing : float, optional
        Cell length b and d(001) [angstrom] where they are known; predicted or usual ones otherwise.

    Raises
    ------
    StructureError
        If b is too short or too long for the bonds.
    """
    usual_b, usual_spacing = _usual_cell(formula)
    b, spacing = b or usual_b, spacing or usual_spacing
    bond_t, bond_m = tetrahedral_bond(formula), octahedral_bond(formula)
    a = b / sqrt(3)
    free = 4 * sqrt(2) * bond_t
    if b > free * 1.03:
        raise StructureError(
            f"b = {b:.3f} angstrom is more than flat tetrahedral sheets reach ({free:.3f})", fix="check the formula or give b"
        )
    # where octahedra are large for the tetrahedra (talc, lizardite), these lie flat and their bonds are stretched
    bond_t = max(bond_t, b / (4 * sqrt(2)))
    rotation = degrees(acos(min(b / (4 * sqrt(2) * bond_t), 1.0)))
    if formula.octahedral_character == "dioctahedral":
        psi = _DIOCTAHEDRAL_ANGLE
        reach = bond_m * sin(radians(psi))
        inside = (a / 3) ** 2 - 4 * ((a / 3) ** 2 - reach**2)
        outward = (a / 3 - sqrt(max(inside, 0.0))) / 2
    else:
        sine = b / (3 * sqrt(3) * bond_m)
        if sine >= 0.97:
            raise StructureError(
                f"b = {b:.3f} angstrom is too long for octahedra with bonds of {bond_m:.3f}", fix="check the formula or give b"
            )
        psi, outward = degrees(asin(sine)), 0.0
    half = bond_m * cos(radians(psi))
    return LayerGeometry(a, b, spacing, bond_t, bond_m, rotation, psi, half, outward)


def _usual_cell(formula: SiteFormula) -> tuple[float, float]:
    """b and d(001) [angstrom] of a composition: predicted for 2:1 layers without water, usual ones otherwise."""
    if formula.layer_type == "2:1":
        found = predict_spacing(formula)
        return found.b, found.d001
    radius = octahedral_radius(formula)
    if formula.octahedral_character == "dioctahedral":
        # kaolinite: b 8.945, d 7.154 (Bish & Von Dreele 1989, Clays and Clay Minerals 37, 289-296)
        b = 8.945 + 3 * sqrt(3) * sin(radians(_DIOCTAHEDRAL_ANGLE)) * (radius - 0.535) * 2 / 3
        return b, 7.154 if formula.layer_type == "1:1" else 14.15
    b = 3 * sqrt(3) * sin(radians(_TRIOCTAHEDRAL_ANGLE)) * (radius + _OXYGEN)
    if formula.layer_type == "1:1":
        return b, 7.233  # lizardite, Mellini (1982), American Mineralogist 67, 587-598, from memory
    aluminium = formula.tetrahedral.get("Al3+", 0.0)
    # d = 14.55 - 0.29 Al(IV) and b = 9.21 + 0.037 Fe per O10(OH)8, Brindley (1961) and Shirozu (1958), both from memory
    return 9.21 + 0.037 * (formula.octahedral.get("Fe2+", 0.0) + formula.octahedral.get("Mn2+", 0.0)), 14.55 - 0.29 * aluminium


def turned(x: float, y: float, angle: float) -> tuple[float, float]:
    """A point of the plane turned by an angle [degree]."""
    t = angle * pi / 180
    return x * cos(t) - y * sin(t), x * sin(t) + y * cos(t)
