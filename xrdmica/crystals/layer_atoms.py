"""Atoms of one ideal layer, placed by its geometry: sheets, interlayer, hydroxide sheet."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from math import cos, pi, radians, sin

from xrdmica.crystals.geometry import LayerGeometry, turned

__all__ = ["PlacedAtom", "hydroxide_atoms", "interlayer_atoms", "one_to_one_atoms", "two_to_one_atoms"]

_TOWARDS_VACANCY = 15.0  # degree by which O-H of dioctahedral layers rises above the plane, 10-30 are found (from memory)


@dataclass(frozen=True)
class PlacedAtom:
    """One site of a layer.

    Attributes
    ----------
    kind : str
        ``T``, ``M1`` (the octahedron that dioctahedral layers leave empty), ``M2``, ``O``, ``OH``, ``H``, ``I``, ``Mh`` and
        ``OHh``, ``Hh`` of a hydroxide sheet.
    x, y, z : float
        [angstrom], from the middle of the layer; x along the stagger.
    """

    kind: str
    x: float
    y: float
    z: float

    def inverted(self) -> PlacedAtom:
        """The atom on the other side of the middle."""
        return PlacedAtom(self.kind, -self.x, -self.y, -self.z)

    def moved(self, x: float, y: float, z: float, angle: float = 0.0) -> PlacedAtom:
        """The atom turned by an angle [degree] about the normal, then shifted."""
        u, v = turned(self.x, self.y, angle)
        return PlacedAtom(self.kind, u + x, v + y, self.z + z)


def _octahedral_cations(g: LayerGeometry) -> list[PlacedAtom]:
    return [PlacedAtom("M1", 0.0, 0.0, 0.0), PlacedAtom("M2", 0.0, g.b / 3, 0.0), PlacedAtom("M2", 0.0, -g.b / 3, 0.0)]


def _ring_hydroxyl(g: LayerGeometry) -> list[PlacedAtom]:
    """The hydroxyl in the middle of a ring, on the upper side; its proton leans to the empty octahedron if there is one."""
    x, z = g.a / 3 + g.outward, g.half_octahedral
    if g.outward == 0:
        return [PlacedAtom("OH", x, 0.0, z), PlacedAtom("H", x, 0.0, z + g.proton)]
    rise = radians(_TOWARDS_VACANCY)
    return [PlacedAtom("OH", x, 0.0, z), PlacedAtom("H", x - g.proton * cos(rise), 0.0, z + g.proton * sin(rise))]


def _upper_tetrahedra(g: LayerGeometry) -> Iterator[PlacedAtom]:
    """Upper tetrahedral sheet with its apical oxygens: rotated by alpha towards the octahedral cations, leaning by the tilt."""
    alpha, tilt = radians(g.rotation), g.tilt
    slide = -g.outward / 2
    for side in (1, -1):
        x, y = g.a / 3, side * g.b / 3
        # the nearest empty octahedron lies across: the apex moves away from it, here by (-1, -side sqrt 3)/2 of `outward`
        apex_y = -side * g.outward * 3**0.5 / 2
        yield PlacedAtom("O", x + slide, y + apex_y, g.half_octahedral)
        base = g.half_octahedral + g.tetrahedral_height * cos(tilt)
        yield PlacedAtom("T", x + slide, y + apex_y / 4, base - g.tetrahedral / 3)
        for k in range(3):
            # neighbours of a tetrahedron stand at 90, 210 and 330 degrees on one side and at 270, 30 and 150 on the other
            direction = side * (pi / 2 + 2 * pi * k / 3) - side * alpha * 1.0
            reach_x, reach_y = g.edge_reach * cos(direction), g.edge_reach * sin(direction)
            if side == 1:
                yield PlacedAtom("O", x + slide + reach_x, y + reach_y, base + _corrugation(g, k))


def _corrugation(g: LayerGeometry, k: int) -> float:
    """Height of a basal oxygen above their mean: the one between two leaning tetrahedra sinks, the others rise by half."""
    return g.edge_reach * sin(g.tilt) * (-1.0 if k == 0 else 0.5)


def two_to_one_atoms(g: LayerGeometry) -> tuple[PlacedAtom, ...]:
    """A 2:1 layer per primitive mesh, inverted through its middle.

    Parameters
    ----------
    g : LayerGeometry
    """
    upper = [*_ring_hydroxyl(g), *_upper_tetrahedra(g)]
    return (*_octahedral_cations(g), *upper, *(atom.inverted() for atom in upper))


def one_to_one_atoms(g: LayerGeometry) -> tuple[PlacedAtom, ...]:
    """A 1:1 layer per primitive mesh: tetrahedra below, hydroxyls above.

    Parameters
    ----------
    g : LayerGeometry
    """
    below = [atom.inverted() for atom in (*_ring_hydroxyl(g), *_upper_tetrahedra(g))]
    shift = g.outward
    x, z = g.a / 3, g.half_octahedral
    above = [(x + shift, 0.0)]
    for side in (1, -1):
        above.append((x - shift / 2, side * (g.b / 3 - shift * 3**0.5 / 2)))
    surface = [PlacedAtom("OH", u, v, z) for u, v in above] + [PlacedAtom("H", u, v, z + g.proton) for u, v in above]
    return (*_octahedral_cations(g), *below, *surface)


def interlayer_atoms(g: LayerGeometry) -> tuple[PlacedAtom, ...]:
    """The interlayer cation above a 2:1 layer, over the middle of the ring."""
    return (PlacedAtom("I", g.ring, 0.0, g.spacing / 2),)


def hydroxide_atoms(g: LayerGeometry, half: float) -> tuple[PlacedAtom, ...]:
    """The hydroxide sheet above the 2:1 layer of a chlorite IIb: slanted the other way, its cations not above tetrahedra.

    Parameters
    ----------
    g : LayerGeometry
    half : float
        Half the thickness of the sheet [angstrom].
    """
    out = []
    for k in (-1, 0, 1):
        y, z = k * g.b / 3, g.spacing / 2
        out.append(PlacedAtom("Mh", -g.a / 3, y, z))
        for kind, reach in (("OHh", half), ("Hh", half + g.proton)):
            out.append(PlacedAtom(kind, 0.0, y, z - reach))
            out.append(PlacedAtom(kind, -2 * g.a / 3, y, z + reach))
    return tuple(out)
