"""What a pattern is calculated from: a library phase in one state, or a formula with its ideal structure."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.building import build_structure, ideal_atoms, ideal_layer, place_atoms
from xrdmica.crystals.layer import Layer
from xrdmica.crystals.library import Phase, load_phase, phase_ids
from xrdmica.crystals.polytype import CellAtoms, library_structure, structured_polytype
from xrdmica.diffraction.columns import Component, component_layers, components_for
from xrdmica.diffraction.powder import Reflections, collect_lines, powder_lines
from xrdmica.diffraction.scattering import FormFactors, anomalous, form_factor
from xrdmica.errors import ChemistryError, StructureError
from xrdmica.radiation import Radiation
from xrdmica.scans.scan import Mount
from xrdmica.scans.treatment import Treatment

if TYPE_CHECKING:
    from pymatgen.core.structure import Structure

__all__ = ["Subject", "cif_of", "lines_of_atoms", "read_subject", "structure_of", "subject_of"]

_LONGEST_D = 60.0  # angstrom
_SAME_SPACING = 0.12  # angstrom: the published cell and the usual spacing of a phase differ by less


@dataclass(frozen=True, eq=False)
class Subject:
    """Everything a pattern of one mount needs.

    Attributes
    ----------
    name : str
    layer : Layer or None
        Gives the basal lines, where all layers are alike.
    lines : Reflections or None
        Further lines: those of a random mount, without 00l when `layer` gives them.
    component : Component or None
        The library's own record; alone (no layer, no lines) for interstratified phases.
    mean_layers : float
    disorder : float
        [angstrom]
    layers_per_cell : int
        Of the polytype whose indices are used.
    notes : tuple of str
    """

    name: str
    layer: Layer | None = None
    lines: Reflections | None = None
    component: Component | None = None
    mean_layers: float = 30.0
    disorder: float = 0.0
    layers_per_cell: int = 1
    notes: tuple[str, ...] = ()


def read_subject(text: str) -> Phase | SiteFormula:
    """A phase by id or file, or a formula.

    Raises
    ------
    XrdmicaError
        If it is neither; a single word in small letters is taken for an id.
    """
    cleaned = text.strip()
    if cleaned in phase_ids() or cleaned.endswith(".toml"):
        return load_phase(cleaned)
    lowered = cleaned.lower().replace("-", "_").replace(" ", "_")
    if lowered in phase_ids():
        return load_phase(lowered)
    if cleaned.isidentifier() and not any(c.isdigit() for c in cleaned):
        return load_phase(lowered)  # raises with the ids that come near
    try:
        return SiteFormula.parse(text)
    except ChemistryError as error:
        raise ChemistryError(f"{text!r}: {error.what}", why=error.why, fix=error.fix) from error


def structure_of(subject: str | Phase | SiteFormula, polytype: str | None = None) -> Structure:
    """The published structure of a library phase, or the ideal one of a formula."""
    if isinstance(subject, str):
        subject = read_subject(subject)
    if isinstance(subject, Phase):
        return library_structure(subject, polytype)
    return build_structure(subject, polytype)


def cif_of(subject: str | Phase | SiteFormula, polytype: str | None = None) -> str:
    """The structure behind a pattern as the text of a CIF, with its source in front.

    Raises
    ------
    StructureError
        If a library phase has no published atoms, or a formula cannot be built.
    """
    from pymatgen.io.cif import CifWriter

    if isinstance(subject, str):
        subject = read_subject(subject)
    structure = structure_of(subject, polytype)
    if isinstance(subject, Phase):
        chosen = structured_polytype(subject, polytype)
        heading = [f"{subject.name}, polytype {chosen.name}", f"coordinates: {chosen.source}"]
    else:
        heading = [f"{subject.text()}, ideal structure from bond lengths, not a refinement"]
    return "".join(f"# {line}\n" for line in heading) + str(CifWriter(structure, symprec=1e-3))


def lines_of_atoms(
    atoms: CellAtoms,
    cell: tuple[float, float, float, float, float, float],
    cell_mass: float,
    radiation: Radiation,
    low_d: float,
    *,
    model: FormFactors = "ionic",
    dispersion: bool = True,
    displacement: bool = True,
) -> Reflections:
    """Lines of any atoms in a cell.

    Parameters
    ----------
    atoms : CellAtoms
    cell : tuple of float
        a b c [angstrom] alpha beta gamma [degree].
    cell_mass : float
        [g/mol]
    radiation : Radiation
    low_d : float
        Shortest spacing [angstrom].
    model : {"ionic", "neutral"}
    dispersion, displacement : bool
        Whether anomalous dispersion and thermal displacement count; without either, and with neutral atoms, the
        intensities are those of pymatgen's calculator.

    Returns
    -------
    Reflections
    """
    from pymatgen.core.lattice import Lattice

    names = np.array(atoms.ions)

    def squared(hkl: NDArray[np.float64], s: NDArray[np.float64]) -> NDArray[np.float64]:
        total = np.zeros(s.size, dtype=complex)
        for ion in dict.fromkeys(atoms.ions):
            here = names == ion
            exponent = 2j * np.pi * (hkl @ atoms.fractional[here].T)
            if displacement:
                exponent = exponent - np.multiply.outer(s * s, atoms.b_iso[here])
            factor = form_factor(ion, s, model) + (anomalous(ion, radiation.energy_ev) if dispersion else 0j)
            total += factor * (np.exp(exponent) @ atoms.occupancies[here])
        return np.asarray(np.abs(total) ** 2)

    shortest = max(low_d, radiation.wavelength / 2 * 1.0001)
    return collect_lines(Lattice.from_parameters(*cell), squared, cell_mass, shortest, _LONGEST_D)


def without_basal(lines: Reflections) -> Reflections:
    """The lines that are not 00l."""
    keep = (lines.hkl[:, 0] != 0) | (lines.hkl[:, 1] != 0)
    return replace(
        lines,
        hkl=lines.hkl[keep],
        d_spacing=lines.d_spacing[keep],
        multiplicity=lines.multiplicity[keep],
        structure_factor_squared=lines.structure_factor_squared[keep],
        tilt=lines.tilt[keep],
    )


def subject_of(
    subject: str | Phase | SiteFormula,
    treatment: Treatment,
    mount: Mount,
    radiation: Radiation,
    low_d: float,
    polytype: str | None,
    model: FormFactors,
) -> Subject:
    """Gather what the pattern of one mount needs; see `xrdmica.calculated.pattern.calculate_pattern`."""
    if isinstance(subject, str):
        subject = read_subject(subject)
    if isinstance(subject, Phase):
        return _of_phase(subject, treatment, mount, radiation, low_d, polytype, model)
    return _of_formula(subject, mount, radiation, low_d, polytype, model)


def _of_formula(
    formula: SiteFormula, mount: Mount, radiation: Radiation, low_d: float, polytype: str | None, model: FormFactors
) -> Subject:
    layer = ideal_layer(formula)
    notes = [f"ideal structure from bond lengths: b {layer.area**0.5 * (2 * 3**0.5) ** 0.5:.3f}, d(001) {layer.spacing:.3f} Å"]
    if mount == "oriented":
        if polytype is not None:
            place_atoms(formula, polytype)  # refuses a polytype that there is not
            notes.append("the polytype makes no difference to the basal lines of an oriented mount")
        return Subject(formula.text(), layer=layer, notes=tuple(notes))
    atoms, ideal = ideal_atoms(formula, polytype)
    units = ideal.layers * (1 if ideal.polytype in ("3T", "1T") else 2)
    lines = lines_of_atoms(atoms, ideal.cell, units * formula.molar_mass, radiation, low_d, model=model)
    notes.append(f"polytype {ideal.polytype}")
    return Subject(
        formula.text(), layer=layer, lines=without_basal(lines), layers_per_cell=ideal.layers, notes=tuple(notes)
    )


def _of_phase(
    phase: Phase, treatment: Treatment, mount: Mount, radiation: Radiation, low_d: float, polytype: str | None, model: FormFactors
) -> Subject:
    own = phase.id not in phase_ids() or load_phase(phase.id) != phase
    if own:
        raise StructureError(
            f"{phase.id} is not the phase of that id in the library", fix="put its file into the folder of phase files"
        )
    components = components_for(phase, treatment)
    if not components:
        raise StructureError(f"{phase.id} shows no basal lines after: {treatment.label}", fix="choose another treatment")
    component = components[0]
    notes: list[str] = []
    if len(components) > 1:
        others = ", ".join(dict.fromkeys(f"{c.label} ({'/'.join(f'{d:g}' for d in c.spacings)})" for c in components[1:]))
        notes.append(f"state {component.label} ({'/'.join(f'{d:g}' for d in component.spacings)}); it may also be {others}")
    if polytype is not None:
        structured_polytype(phase, polytype)  # refuses a polytype without atoms
        if polytype != structured_polytype(phase).name:
            raise StructureError(
                f"patterns of {phase.id} are calculated from its polytype {structured_polytype(phase).name}",
                fix="leave the polytype out, or give a formula with a polytype",
            )
    base = Subject(phase.name, component=component, mean_layers=component.mean_layers, disorder=component.disorder)
    if phase.stack is not None:
        return replace(base, notes=tuple(notes))
    layers = component_layers(component)
    layer = layers[0] if layers else None
    lines = None
    per_cell = 1
    if mount == "random" or layer is None:
        try:
            chosen = structured_polytype(phase, polytype)
        except StructureError:
            notes.append("no published atoms in the library: basal lines only")
        else:
            lines = powder_lines(phase.id, radiation, round(low_d, 3), _LONGEST_D, model)
            per_cell = chosen.layers_per_cell if layer is not None else 1
            if layer is not None:
                lines = without_basal(lines)
                notes += _cell_notes(phase, component, chosen.name)
    elif polytype is not None:
        notes.append("the polytype makes no difference to the basal lines of an oriented mount")
    return replace(base, layer=layer, lines=lines, layers_per_cell=per_cell, notes=tuple(notes))


def _cell_notes(phase: Phase, component: Component, polytype: str) -> list[str]:
    from pymatgen.core.lattice import Lattice

    chosen = structured_polytype(phase, polytype)
    height = Lattice.from_parameters(*chosen.cell).d_hkl((0, 0, 1)) / chosen.layers_per_cell
    notes = [f"lines other than 00l from polytype {chosen.name}: {chosen.source}"]
    if abs(height - component.spacings[0]) > _SAME_SPACING:
        notes.append(
            f"that cell has a layer of {height:.2f} angstrom, the state one of {component.spacings[0]:.2f}: "
            "hkl lines with l are only approximate"
        )
    return notes
