"""Layer heights and coordinates of the phase files against the published structures they were taken from.

Source: CIF files of open structure data, each with its reference inside, in the folder `shared` beside the repository.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from xrdmica.chemistry.ions import element_of
from xrdmica.crystals.layer import build_layer
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.crystals.polytype import library_structure

TOLERANCE = 0.02  # angstrom
MUSCOVITE, PHLOGOPITE = "muscovite-2M1-richardson1982", "phlogopite-1M-redhammer2002"
TALC, ILLITE, CELADONITE = "talc-1A-perdikatsis1981", "illite-1Mtv-drits2010", "celadonite-1M-drits2010"
KAOLINITE = "kaolinite-1A-bish1989"
# phase -> (file, layers in its cell); phases without a structure of their own stand with the one they borrow
TWO_TO_ONE = {
    "muscovite": (MUSCOVITE, 2), "phlogopite": (PHLOGOPITE, 1), "biotite": (PHLOGOPITE, 1), "annite": (PHLOGOPITE, 1),
    "vermiculite": (PHLOGOPITE, 1), "saponite": (PHLOGOPITE, 1), "paragonite": ("paragonite-2M1-lin1984", 2),
    "margarite": ("margarite-2M1-joswig1983", 2), "talc": (TALC, 1), "kerolite": (TALC, 1), "minnesotaite": (TALC, 1),
    "pyrophyllite": ("pyrophyllite-1A-lee1981", 1), "illite": (ILLITE, 1), "smectite": (ILLITE, 1),
    "celadonite": (CELADONITE, 1), "glauconite": (CELADONITE, 1), "phengite": ("phengite-2M1-pavese1999", 2),
    "lepidolite": ("lepidolite-1M-sartori1976", 1), "chlorite": ("clinochlore-IIb4-phillips1980", 1),
}  # fmt: skip
ONE_TO_ONE = {
    "kaolinite": (KAOLINITE, 1), "halloysite": (KAOLINITE, 1), "dickite": ("dickite-2M1-bailey1963", 2),
    "nacrite": ("nacrite-2M2-zhukhlistov2008", 2),
}  # fmt: skip
FIBROUS = {"palygorskite": "palygorskite-Pbmn-giustetto2006", "sepiolite": "sepiolite-giustetto2011"}
COMPANIONS = {
    "quartz": "quartz-will1988", "calcite": "calcite-sitepu2005", "dolomite": "dolomite-reeder1986",
    "siderite": "siderite-effenberger1981", "albite": "albite-low-downs1994", "microcline": "orthoclase-ordered-prince1973",
    "gypsum": "gypsum-henry2009", "pyrite": "pyrite-brostigen1969", "goethite": "goethite-nagai2003",
    "hematite": "hematite-maslen1994", "gibbsite": "gibbsite-minff", "anatase": "anatase-wyckoff1963",
    "rutile": "rutile-wyckoff1963", "corundum": "corundum-aflow2017", "zincite": "zincite-wyckoff1963",
    "fluorite": "fluorite-wyckoff1963",
}  # fmt: skip
BORROWERS = {
    "biotite", "annite", "vermiculite", "saponite", "kerolite", "minnesotaite", "smectite", "glauconite", "halloysite",
}  # fmt: skip
OWN_ATOMS = {name: file for name, (file, _) in {**TWO_TO_ONE, **ONE_TO_ONE}.items() if name not in BORROWERS}


@dataclass(frozen=True)
class Published:
    """A published cell with all of its atoms."""

    cell: tuple[float, ...]
    d001: float
    sites: tuple[tuple[str, tuple[float, ...]], ...]  # element, coordinates as printed
    elements: tuple[str, ...]
    fractional: np.ndarray
    occupancies: np.ndarray


def _read(shared: Path, name: str) -> Published:
    import gemmi

    block = gemmi.cif.read(str(shared / "structures" / f"{name}.cif")).sole_block()
    small = gemmi.make_small_structure_from_block(block)
    column = block.find_values("_space_group_symop_operation_xyz") or block.find_values("_symmetry_equiv_pos_as_xyz")
    operations = [gemmi.Op(gemmi.cif.as_string(text).replace(" ", "").replace(",+", ",").lstrip("+")) for text in column]
    elements, places, occupancies = [], [], []
    for site in small.sites:
        images: list[np.ndarray] = []
        for operation in operations:
            image = np.array(operation.apply_to_xyz(site.fract.tolist()))
            if all(np.abs(image - other - np.round(image - other)).max() > 2e-3 for other in images):
                images.append(image)
        elements += [site.element.name] * len(images)
        occupancies += [site.occ] * len(images)
        places += images
    cell = small.cell
    printed = tuple((site.element.name, tuple(site.fract.tolist())) for site in small.sites)
    lengths = (cell.a, cell.b, cell.c, cell.alpha, cell.beta, cell.gamma)
    d001 = cell.volume / (cell.a * cell.b * math.sin(math.radians(cell.gamma)))
    return Published(lengths, d001, printed, tuple(elements), np.array(places), np.array(occupancies))


def _layer_heights(published: Published, layers: int, *, signed: bool) -> list[tuple[str, float, float]]:
    """(element, height from the octahedral plane, atoms per formula unit) without hydrogen, the layers laid on each other."""
    spacing = published.d001 / layers
    z = published.fractional[:, 2] * layers
    # the octahedral plane is the one height, 0 or 1/2 of the layer or free, with cations and oxygens about 1.05 on either side
    oxygens = np.array([e in ("O", "F") for e in published.elements])
    hydrogen = np.array([e == "H" for e in published.elements])
    cations = ~oxygens & ~hydrogen
    best = max(z[cations], key=lambda middle: _sheet_score((z - middle) - np.round(z - middle), oxygens, cations, spacing))
    offset = (z - best) - np.round(z - best)
    near = cations & (np.abs(offset) * spacing < 0.3)
    offset = offset - np.average(offset[near], weights=published.occupancies[near])
    height = (offset - np.round(offset)) * spacing
    tetrahedral = cations & (np.abs(height) > 2.2) & (np.abs(height) < 3.0)
    if signed and height[tetrahedral].mean() > 0:
        height = -height
    counts = published.occupancies / (2 * layers)
    rows = zip(published.elements, height, counts, strict=True)
    return [(e, float(h if signed else abs(h)), float(n)) for e, h, n in rows if e != "H"]


def _sheet_score(offset: np.ndarray, oxygens: np.ndarray, cations: np.ndarray, spacing: float) -> float:
    """Tetrahedral cations 2.7 angstrom away and oxygens between: the mark of an octahedral plane within a layer."""
    away = np.abs(offset) * spacing
    return float((cations & (np.abs(away - 2.7) < 0.15)).sum() + (oxygens & (np.abs(away - 1.05) < 0.2)).sum())


def _kind(element: str, height: float, spacing: float) -> str:
    if element in ("O", "F"):
        return "anion"
    if abs(height) < 0.3:
        return "octahedral"
    return "tetrahedral" if abs(height) < 3.2 else "interlayer"


def check_planes(mine: list[tuple[str, float, float]], theirs: list[tuple[str, float, float]]) -> None:
    """Every published atom belongs to the nearest plane of its kind; planes agree in mean height, and anions in number."""
    assigned: dict[int, list[tuple[float, float]]] = {i: [] for i in range(len(mine))}
    for kind, height, count in theirs:
        candidates = [i for i, plane in enumerate(mine) if plane[0] == kind]
        assert candidates, f"no {kind} plane for the atom at {height:.3f}"
        nearest = min(candidates, key=lambda i: abs(mine[i][1] - height))
        assigned[nearest].append((height, count))
    for (kind, height, count), atoms in zip(mine, assigned.values(), strict=True):
        assert atoms, f"no published atom on the {kind} plane at {height:.3f}"
        heights, counts = np.array(atoms).T
        assert np.average(heights, weights=counts) == pytest.approx(height, abs=TOLERANCE)
        # merged planes lie close together
        assert np.ptp(heights) < 0.07
        if kind == "anion":
            assert counts.sum() == pytest.approx(count, abs=1e-6)


def _own_heights(phase: Phase, spacing: float, *, signed: bool) -> list[tuple[str, float, float]]:
    layer = build_layer(phase, phase.states[0], spacing=spacing)
    middle = 0.0
    if signed:
        middle = next(plane.z for plane in (phase.layer.planes if phase.layer else ()) if plane.role == "octahedral") or 0.0
    planes: dict[tuple[str, float], float] = {}
    for z, n, ion in zip(layer.z, layer.counts, layer.ions, strict=True):
        if ion in ("H2O", "H+"):
            continue
        height = round(float(z - middle if signed else abs(z)), 6)
        element = "O" if ion in ("OH-", "O2-") else element_of(ion)
        key = (_kind(element, height, spacing), height)
        planes[key] = planes.get(key, 0.0) + float(n)
    return [(kind, height, n) for (kind, height), n in planes.items()]


@pytest.mark.parametrize(("name", "source"), TWO_TO_ONE.items(), ids=TWO_TO_ONE)
def test_two_to_one_layers(shared: Path, name: str, source: tuple[str, int]) -> None:
    published = _read(shared, source[0])
    spacing = published.d001 / source[1]
    theirs = [(_kind(e, h, spacing), h, n) for e, h, n in _layer_heights(published, source[1], signed=False)]
    mine = _own_heights(load_phase(name), spacing, signed=False)
    if name in BORROWERS:
        # only the layer is borrowed; what stands between layers is the phase's own
        theirs, mine = ([row for row in rows if row[1] < 3.6] for rows in (theirs, mine))
    check_planes(mine, theirs)


@pytest.mark.parametrize(("name", "source"), ONE_TO_ONE.items(), ids=ONE_TO_ONE)
def test_one_to_one_layers(shared: Path, name: str, source: tuple[str, int]) -> None:
    published = _read(shared, source[0])
    spacing = published.d001 / source[1]
    theirs = [(_kind(e, h, spacing), h, n) for e, h, n in _layer_heights(published, source[1], signed=True)]
    check_planes(_own_heights(load_phase(name), 10.05 if name == "halloysite" else spacing, signed=True), theirs)


@pytest.mark.parametrize(("name", "file"), FIBROUS.items(), ids=FIBROUS)
def test_effective_profiles_of_ribbon_structures(shared: Path, name: str, file: str) -> None:
    published = _read(shared, file)
    phase = load_phase(name)
    dried = next(state for state in phase.states if state.id == "dried")
    assert dried.spacing is not None
    # projected on the normal of (110), stretched to the usual spacing
    x = published.fractional[:, 0] + published.fractional[:, 1]
    heights = np.abs(x - np.round(x)) * dried.spacing
    layer = build_layer(phase, dried)
    atoms = list(zip(heights, published.elements, published.occupancies, strict=True))
    for role, elements in {"tetrahedral": {"Si"}, "octahedral": {"Mg", "Al", "Fe"}}.items():
        theirs = [h for h, e, _ in atoms if e in elements]
        own = [abs(z) for z, ion in zip(layer.z, layer.ions, strict=True) if element_of(ion) in elements]
        assert own, role
        for height in theirs:
            assert min(abs(height - z) for z in own) < TOLERANCE
        for z in own:
            assert min(abs(height - z) for height in theirs) < TOLERANCE
    # framework oxygens are fully occupied; the disordered water of the channels is not
    oxygens = [h for h, e, n in atoms if e == "O" and n > 0.95]
    own = [abs(z) for z, ion in zip(layer.z, layer.ions, strict=True) if ion in ("O2-", "OH-")]
    for height in own:
        assert min(abs(height - z) for z in oxygens) < TOLERANCE


@pytest.mark.parametrize(("name", "file"), {**OWN_ATOMS, **COMPANIONS}.items(), ids=[*OWN_ATOMS, *COMPANIONS])
def test_cell_and_coordinates_as_printed(shared: Path, name: str, file: str) -> None:
    published = _read(shared, file)
    polytype = next(p for p in load_phase(name).polytypes if p.sites)
    assert polytype.cell == pytest.approx(published.cell, abs=1e-4)
    for element, place in published.sites:
        found = [site for site in polytype.sites if np.abs(np.array(site.xyz) - place).max() < 2e-5]
        assert len(found) == 1, f"{element} at {place}"
        if element in ("O", "H", "Si", "K", "S", "C", "F", "Ti", "Zn"):
            elements = {"O" if ion == "OH-" else element_of(ion) for ion in found[0].ions}
            assert element in elements


# d [angstrom] of a line every handbook lists among the three strongest of a random powder, from memory
STRONG_LINES = {
    "quartz": 3.343, "calcite": 3.035, "dolomite": 2.886, "siderite": 2.793, "albite": 3.196, "microcline": 3.25, "gypsum": 7.61,
    "anhydrite": 3.50, "pyrite": 1.633, "goethite": 4.18, "hematite": 2.700, "gibbsite": 4.85, "boehmite": 6.11, "anatase": 3.52,
    "rutile": 3.247, "corundum": 2.085, "zincite": 2.476, "fluorite": 1.931, "halite": 2.821, "magnetite": 2.532, "augite": 2.99,
    "amphibole": 2.705,
}  # fmt: skip


@pytest.mark.parametrize(("name", "line"), STRONG_LINES.items(), ids=STRONG_LINES)
def test_strong_lines_of_companions(name: str, line: float) -> None:
    from pymatgen.analysis.diffraction.xrd import XRDCalculator

    pattern = XRDCalculator("CuKa1").get_pattern(library_structure(load_phase(name)), two_theta_range=(5, 70))
    strongest = np.array(pattern.d_hkls)[np.argsort(pattern.y)[::-1][:3]]
    assert np.abs(strongest / line - 1).min() < 0.006
