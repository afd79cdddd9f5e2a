"""Ideal structures in three dimensions: layers of a composition stacked as a polytype prescribes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.checks import interlayer_cations
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.geometry import LayerGeometry, layer_geometry, turned
from xrdmica.crystals.layer import Layer
from xrdmica.crystals.layer_atoms import PlacedAtom, hydroxide_atoms, interlayer_atoms, one_to_one_atoms, two_to_one_atoms
from xrdmica.crystals.polytype import CellAtoms
from xrdmica.crystals.site_contents import B_ISO, scattering_contents, site_contents, species_of
from xrdmica.errors import StructureError

if TYPE_CHECKING:
    from pymatgen.core.structure import Structure

__all__ = ["POLYTYPES", "IdealCell", "build_structure", "ideal_atoms", "ideal_layer", "place_atoms", "usual_polytype"]

FloatArray = NDArray[np.float64]
_HYDROXIDE_BOND = 2.05  # angstrom, (Mg,Al)-OH of hydroxide sheets, handbook, from memory


# Horizontal part of c in parts of a and b, computed from published cells: talc 1A, Perdikatsis & Burzlaff (1981), Zeitschrift fur
# Kristallographie 156, 177-186; pyrophyllite 1A, Lee & Guggenheim (1981), American Mineralogist 66, 350-357; kaolinite 1A, Bish &
# Von Dreele (1989), Clays and Clay Minerals 37, 289-296. Lizardite 1T has none, chlorite IIb -a/3 (Bailey 1988, from memory).
_FREE_SHIFT = {"trioctahedral": (-0.2699, -0.0085), "dioctahedral": (-0.3289, -0.0203)}
_KAOLINITE_SHIFT = (-0.3684, -0.0239)
POLYTYPES: dict[str, tuple[str, ...]] = {
    "mica": ("1M", "2M1", "3T"),
    "talc-pyrophyllite": ("1A", "2M"),
    "1:1 dioctahedral": ("1A",),
    "1:1 trioctahedral": ("1T",),
    "chlorite": ("IIb",),
}
_MICA_ANGLES = {"1M": (0.0,), "2M1": (0.0, 120.0), "3T": (0.0, 120.0, 240.0)}


def _kind(formula: SiteFormula) -> str:
    if formula.layer_type == "1:1":
        return f"1:1 {formula.octahedral_character}"
    if formula.layer_type != "2:1":
        return "chlorite"
    return "mica" if sum(interlayer_cations(formula).values()) > 0.3 else "talc-pyrophyllite"


def usual_polytype(formula: SiteFormula) -> str:
    """The polytype taken when none is asked for: 2M1 for dioctahedral micas, else the first of its kind."""
    kind = _kind(formula)
    if kind == "mica" and formula.octahedral_character == "dioctahedral":
        return "2M1"
    return POLYTYPES[kind][0]


def build_structure(
    formula: SiteFormula | str, polytype: str | None = None, *, b: float | None = None, spacing: float | None = None
) -> Structure:
    """Build the ideal structure of a sheet silicate from its site formula.

    Bond lengths follow from the composition; tetrahedra rotate and octahedra flatten so that both sheets have the same b. In
    dioctahedral layers the trans octahedron M1 is empty and larger, its anions move away from it and the tetrahedra lean.

    Parameters
    ----------
    formula : SiteFormula or str
        Balanced formula; text is parsed. Interlayer water is refused.
    polytype : str, optional
        ``1M``, ``2M1`` or ``3T`` of a mica, ``1A`` or ``2M`` of talc and pyrophyllite, ``1A`` of kaolin, ``1T`` of serpentine
        (lizardite), ``IIb`` of chlorite; see `usual_polytype`.
    b, spacing : float, optional
        Cell length b and thickness of one layer [angstrom] where they are known.

    Returns
    -------
    pymatgen.core.Structure
        With oxidation states and partial occupancies, protons included; b is set along y.

    Raises
    ------
    StructureError
        If the formula is not balanced or holds water, or the polytype is none of its kind.

    References
    ----------
    Hazen & Burnham (1973) American Mineralogist 58, 889-900 (bond lengths); Shannon (1976) Acta Crystallographica A32, 751-767;
    Bailey (1984) Reviews in Mineralogy 13 (polytypes and geometry; from memory).
    """
    from pymatgen.core.lattice import Lattice
    from pymatgen.core.structure import Structure

    if isinstance(formula, str):
        formula = SiteFormula.parse(formula)
    ideal = place_atoms(formula, polytype, b=b, spacing=spacing)
    contents = site_contents(formula, _kind(formula))
    sites = [(species_of(contents.get(kind, {})), place) for kind, place in zip(ideal.kinds, ideal.fractional, strict=True)]
    filled = [(species, place) for species, place in sites if species]
    structure = Structure(Lattice.from_parameters(*ideal.cell), [s for s, _ in filled], [p for _, p in filled])
    return structure.get_sorted_structure()


@dataclass(frozen=True, eq=False)
class IdealCell:
    """Sites of an ideal structure before anything is put on them.

    Attributes
    ----------
    polytype : str
    geometry : LayerGeometry
    cell : tuple of float
        a b c [angstrom] alpha beta gamma [degree].
    layers : int
        In the cell.
    kinds : tuple of str, length n
        Kind of every site, as in `PlacedAtom`.
    fractional : ndarray, shape (n, 3)
    """

    polytype: str
    geometry: LayerGeometry
    cell: tuple[float, float, float, float, float, float]
    layers: int
    kinds: tuple[str, ...]
    fractional: FloatArray


def place_atoms(
    formula: SiteFormula, polytype: str | None = None, *, b: float | None = None, spacing: float | None = None
) -> IdealCell:
    """Sites of the ideal structure of a composition; parameters and errors as in `build_structure`."""
    from pymatgen.core.lattice import Lattice

    _check(formula)
    kind = _kind(formula)
    polytype = polytype or usual_polytype(formula)
    if polytype not in POLYTYPES[kind]:
        raise StructureError(
            f"polytype {polytype!r} is none of {_words(kind)}", fix=f"choose {' or '.join(POLYTYPES[kind])}, or leave it out"
        )
    g = layer_geometry(formula, b=b, spacing=spacing)
    atoms, horizontal = _stacked(kind, polytype, g, _layer(kind, g))
    layers = sum(atom.kind == "M1" for atom in atoms)
    rows, turn = _cell(polytype, g, horizontal, layers * g.spacing)
    images = [(0.0, 0.0)] if polytype in ("3T", "1T") else [(0.0, 0.0), turned(g.a / 2, g.b / 2, turn)]
    inverse = np.linalg.inv(rows)
    places = [np.array([atom.x + x, atom.y + y, atom.z]) @ inverse for atom in atoms for x, y in images]
    kinds = tuple(atom.kind for atom in atoms for _ in images)
    length = Lattice(rows).parameters
    return IdealCell(polytype, g, (*length[:3], *length[3:]), layers, kinds, np.mod(np.array(places), 1.0))


def ideal_atoms(formula: SiteFormula, polytype: str | None = None) -> tuple[CellAtoms, IdealCell]:
    """The ideal structure as atoms with displacement parameters, hydroxyl as one scatterer, for random patterns."""
    ideal = place_atoms(formula, polytype)
    contents = scattering_contents(formula, _kind(formula))
    rows = [
        (place, ion, amount, B_ISO[kind], kind)
        for kind, place in zip(ideal.kinds, ideal.fractional, strict=True)
        for ion, amount in contents.get(kind, {}).items()
    ]
    places, ions, amounts, b_iso, labels = zip(*rows, strict=True)
    return CellAtoms(np.array(places), tuple(ions), np.array(amounts), np.array(b_iso), tuple(labels)), ideal


def ideal_layer(formula: SiteFormula) -> Layer:
    """Atoms on a line of the ideal layer, for basal patterns.

    Raises
    ------
    StructureError
        As `build_structure`.
    """
    _check(formula)
    kind = _kind(formula)
    g = layer_geometry(formula)
    contents = scattering_contents(formula, kind)
    rows = []
    for atom in _layer(kind, g):
        # what lies between two layers belongs half to either
        heights = [(atom.z, 0.5), (-atom.z, 0.5)] if atom.kind in ("I", "Mh", "OHh") else [(atom.z, 1.0)]
        for height, share in heights:
            rows += [(round(height, 6), share * n, ion, B_ISO[atom.kind]) for ion, n in contents.get(atom.kind, {}).items()]
    z, counts, ions, b_iso = zip(*rows, strict=True)
    return Layer(np.array(z), np.array(counts), ions, np.array(b_iso), g.spacing, g.a * g.b / 2, formula.molar_mass)


def _words(kind: str) -> str:
    return {"mica": "those of micas", "talc-pyrophyllite": "those of talc and pyrophyllite", "chlorite": "those of chlorite"}.get(
        kind, f"those of {kind} layers"
    )


def _check(formula: SiteFormula) -> None:
    if abs(formula.imbalance) > 0.05:
        raise StructureError(
            f"the charges of the formula sum to {formula.imbalance:+.2f}", fix="balance it, or have it assigned from oxides"
        )
    if formula.water > 0 or formula.group in ("smectite", "vermiculite"):
        raise StructureError(
            "layers with water between them have no ideal structure here", fix="ask for the basal pattern of a library phase"
        )


def _layer(kind: str, g: LayerGeometry) -> tuple[PlacedAtom, ...]:
    """Atoms of one layer with what lies above it."""
    if kind.startswith("1:1"):
        return one_to_one_atoms(g)
    layer = two_to_one_atoms(g)
    if kind == "mica":
        return (*layer, *interlayer_atoms(g))
    if kind == "chlorite":
        half = sqrt(max(_HYDROXIDE_BOND**2 - (g.a / 3) ** 2, 0.64))
        return (*layer, *hydroxide_atoms(g, half))
    return layer


def _stacked(
    kind: str, polytype: str, g: LayerGeometry, layer: Sequence[PlacedAtom]
) -> tuple[list[PlacedAtom], tuple[float, float]]:
    """Atoms of all layers of the cell and the horizontal part of its c vector [angstrom]."""
    angles, steps = _steps(kind, polytype, g)
    atoms: list[PlacedAtom] = []
    x = y = 0.0
    for number, (angle, step) in enumerate(zip(angles, steps, strict=True)):
        atoms += [atom.moved(x, y, number * g.spacing, angle) for atom in layer]
        x, y = x + step[0], y + step[1]
    return atoms, (x, y)


def _steps(kind: str, polytype: str, g: LayerGeometry) -> tuple[tuple[float, ...], list[tuple[float, float]]]:
    """Stagger direction of each layer [degree] and the shift from it to the next [angstrom]."""
    if kind == "mica":
        angles = _MICA_ANGLES[polytype]
        steps = []
        for number, angle in enumerate(angles):
            # rings of adjoining layers face each other across the interlayer cation
            following = angles[(number + 1) % len(angles)]
            here, there = turned(g.ring, 0.0, angle), turned(g.ring, 0.0, following)
            steps.append((here[0] + there[0], here[1] + there[1]))
        return angles, steps
    if kind == "chlorite":
        return (180.0,), [(-g.a / 3, 0.0)]
    if kind == "1:1 trioctahedral":
        return (0.0,), [(0.0, 0.0)]
    if kind == "1:1 dioctahedral":
        return (60.0,), [(_KAOLINITE_SHIFT[0] * g.a, _KAOLINITE_SHIFT[1] * g.b)]
    part = _FREE_SHIFT["dioctahedral" if g.outward else "trioctahedral"]
    whole = (part[0] * g.a, part[1] * g.b)
    if polytype == "1A":
        return (60.0,), [whole]
    # a c glide makes every second layer the mirror image of the first; the rings are as far out of line as in the one-layer
    # form, along the mirror plane (Gruner 1934, after Wyckoff 1960, Crystal Structures 4)
    facing = turned(g.ring, 0.0, 60.0)
    return (-60.0, 60.0), [(2 * facing[0] + _out_of_line(g, whole), 0.0)] * 2


def _out_of_line(g: LayerGeometry, whole: tuple[float, float]) -> float:
    """By how much the rings of adjoining layers miss each other in the one-layer form of talc or pyrophyllite [angstrom]."""
    ring = turned(2 * g.ring, 0.0, 60.0)
    x, y = whole[0] - ring[0], whole[1] - ring[1]
    mesh = [(i * g.a + j * g.a / 2, j * g.b / 2) for i in range(-2, 3) for j in range(-2, 3)]
    return float(min(np.hypot(x + u, y + v) for u, v in mesh))


def _cell(polytype: str, g: LayerGeometry, horizontal: tuple[float, float], height: float) -> tuple[FloatArray, float]:
    """Cell vectors as rows [angstrom], and by what angle [degree] its a axis is turned from x.

    Hexagonal where layers turn by thirds; else C-centred, with an obtuse beta and c leaning as little as that allows.
    """
    if polytype in ("3T", "1T"):
        return np.array([[g.a, 0.0, 0.0], [-g.a / 2, g.b / 2, 0.0], [0.0, 0.0, height]]), 0.0
    # the two layers of 2M1 are turned by 120 degrees and lean along the bisector: make that the a axis
    turn = 60.0 if polytype == "2M1" else 0.0
    x, y = turned(*horizontal, -turn)
    mesh = [(i * g.a + j * g.a / 2, j * g.b / 2) for i in range(-4, 5) for j in range(-3, 4)]
    leans = [(x + u, y + v) for u, v in mesh if x + u <= 1e-6]
    lean = min(leans, key=lambda v: (round(abs(v[1]), 3), round(abs(v[0]), 3)))
    rows = [(g.a, 0.0, 0.0), (0.0, g.b, 0.0), (*lean, height)]
    return np.array([(*turned(u, v, turn), w) for u, v, w in rows]), turn
