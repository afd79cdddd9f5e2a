"""Three-dimensional structures of library phases, as published."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.ions import charge_of, element_of
from xrdmica.crystals.library import Phase, Polytype
from xrdmica.errors import StructureError

if TYPE_CHECKING:
    from pymatgen.core.structure import Structure

__all__ = ["CellAtoms", "cell_atoms", "library_structure", "structured_polytype"]

_SAME_PLACE = 0.12  # angstrom: images of a site closer than this are one atom on a special position


@dataclass(frozen=True, eq=False)
class CellAtoms:
    """All atoms of a cell.

    Attributes
    ----------
    fractional : ndarray, shape (n, 3)
        Fractional coordinates in [0, 1).
    ions : tuple of str, length n
    occupancies : ndarray, shape (n,)
    b_iso : ndarray, shape (n,)
        [angstrom^2]
    labels : tuple of str, length n
        Site each atom comes from.
    """

    fractional: NDArray[np.float64]
    ions: tuple[str, ...]
    occupancies: NDArray[np.float64]
    b_iso: NDArray[np.float64]
    labels: tuple[str, ...]


def structured_polytype(phase: Phase, name: str | None = None) -> Polytype:
    """The polytype of a phase that has published atoms.

    Parameters
    ----------
    phase : Phase
    name : str, optional
        Polytype asked for; the first one with atoms when left out.

    Raises
    ------
    StructureError
        If there is none.
    """
    for polytype in phase.polytypes:
        if polytype.sites and (name is None or polytype.name == name):
            return polytype
    wanted = f" of polytype {name}" if name else ""
    raise StructureError(f"{phase.id} has no published atoms{wanted} in the library", fix="use its basal pattern")


def _matrix(polytype: Polytype) -> NDArray[np.float64]:
    from pymatgen.core.lattice import Lattice

    return np.asarray(Lattice.from_parameters(*polytype.cell).matrix)


def cell_atoms(polytype: Polytype) -> CellAtoms:
    """Expand the sites of a polytype by its symmetry operations.

    Raises
    ------
    StructureError
        If an operation cannot be read.
    """
    import gemmi

    matrix = _matrix(polytype)
    try:
        operations = [gemmi.Op(text) for text in polytype.symmetry or ("x,y,z",)]
    except (ValueError, RuntimeError) as error:
        raise StructureError(f"{polytype.name}: symmetry operation", why=str(error), fix="write it as x,y,z text") from error
    fractional, ions, occupancies, b_iso, labels = [], [], [], [], []
    for site in polytype.sites:
        images: list[NDArray[np.float64]] = []
        for operation in operations:
            image = np.mod(np.array(operation.apply_to_xyz(list(site.xyz))), 1.0)
            apart = [(image - other + 0.5) % 1.0 - 0.5 for other in images]
            if all(np.linalg.norm(vector @ matrix) > _SAME_PLACE for vector in apart):
                images.append(image)
        for image in images:
            for ion, occupancy in site.ions.items():
                fractional.append(image)
                ions.append(ion)
                occupancies.append(occupancy)
                b_iso.append(site.b_iso)
                labels.append(site.label)
    return CellAtoms(np.array(fractional), tuple(ions), np.array(occupancies), np.array(b_iso), tuple(labels))


def library_structure(phase: Phase, polytype: str | None = None) -> Structure:
    """The published structure of a library phase as a pymatgen `Structure` with oxidation states.

    Parameters
    ----------
    phase : Phase
        A phase with published atoms.
    polytype : str, optional
        Name of the polytype; the first with atoms when left out.

    Returns
    -------
    pymatgen.core.Structure
        Ordered by site; partial occupancies kept. OH is an oxygen, its proton only where the refinement placed it.

    Raises
    ------
    StructureError
        If the phase has no published atoms.
    """
    from pymatgen.core.lattice import Lattice
    from pymatgen.core.periodic_table import Species
    from pymatgen.core.structure import Structure

    chosen = structured_polytype(phase, polytype)
    atoms = cell_atoms(chosen)
    places: dict[tuple[float, ...], dict[Species, float]] = {}
    for position, ion, occupancy in zip(atoms.fractional, atoms.ions, atoms.occupancies, strict=True):
        content = places.setdefault(tuple(np.round(position, 6)), {})
        if ion == "H2O":
            species = Species("O", -2)
        else:
            species = Species("O", -2) if ion == "OH-" else Species(element_of(ion), charge_of(ion))
        content[species] = content.get(species, 0.0) + float(occupancy)
    return Structure(Lattice.from_parameters(*chosen.cell), list(places.values()), [list(p) for p in places])
