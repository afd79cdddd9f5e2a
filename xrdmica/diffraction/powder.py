"""Random-powder patterns of library structures: reflections by pymatgen, intensities with what its calculator leaves out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import Phase, load_phase
from xrdmica.crystals.polytype import cell_atoms, library_structure, structured_polytype
from xrdmica.diffraction.optics import Instrument, axial_nodes, displacement_shift, mount_factor, polarisation, tube_lines
from xrdmica.diffraction.peak_shape import draw_together, pseudo_voigt, scherrer_width
from xrdmica.diffraction.scattering import FormFactors, anomalous, form_factor
from xrdmica.radiation import Radiation

if TYPE_CHECKING:
    from pymatgen.core.lattice import Lattice
    from pymatgen.core.structure import Structure

__all__ = ["Reflections", "march_dollase", "powder_lines", "powder_pattern", "powder_profile", "reference_pattern"]

_SAME_D = 1e-7  # relative: reflections closer than this are one line
_CUT = 30.0  # widths on either side where a line is drawn
_MANY = 30  # lines, from which drawing all at once is faster


@dataclass(frozen=True, eq=False)
class Reflections:
    """Lines of a random powder.

    Attributes
    ----------
    hkl : ndarray of int, shape (n, 3)
        One member of each family.
    d_spacing : ndarray, shape (n,)
        Falling [angstrom].
    multiplicity : ndarray of int, shape (n,)
    structure_factor_squared : ndarray, shape (n,)
        Sum of |F|^2 over the members of the line [electron^2].
    tilt : ndarray, shape (n,)
        cos^2 of the angle between the reflection and c* (of the first member).
    cell_mass : float
        [g/mol]
    cell_volume : float
        [angstrom^3]
    """

    hkl: NDArray[np.int64]
    d_spacing: NDArray[np.float64]
    multiplicity: NDArray[np.int64]
    structure_factor_squared: NDArray[np.float64]
    tilt: NDArray[np.float64]
    cell_mass: float
    cell_volume: float


Amplitudes = Callable[[NDArray[np.float64], NDArray[np.float64]], NDArray[np.float64]]


def _points(lattice: Lattice, low_d: float, high_d: float) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Indices and 1/d of all reciprocal-lattice points between two spacings, longest spacing first."""
    found = lattice.reciprocal_lattice_crystallographic.get_points_in_sphere([[0, 0, 0]], [0, 0, 0], 1.0 / low_d)
    hkl = np.array([np.round(point[0]) for point in found], dtype=np.int64)
    length = np.array([point[1] for point in found], dtype=float)
    keep = length >= 1.0 / high_d
    hkl, length = hkl[keep], length[keep]
    order = np.lexsort((-hkl[:, 2], -hkl[:, 1], -hkl[:, 0], np.round(length, 9)))
    return hkl[order], length[order]


def collect_lines(lattice: Lattice, squared: Amplitudes, mass: float, low_d: float, high_d: float) -> Reflections:
    """Group all reflections between two spacings into lines, with |F|^2 from a function of (hkl, s).

    Parameters
    ----------
    lattice : pymatgen.core.Lattice
    squared : callable
        (hkl (m, 3), s (m,)) -> |F|^2 (m,).
    mass : float
        Of the cell [g/mol].
    low_d, high_d : float
        Limits of the spacing [angstrom].
    """
    hkl, length = _points(lattice, low_d, high_d)
    if not length.size:
        empty = np.zeros(0)
        return Reflections(np.zeros((0, 3), np.int64), empty, np.zeros(0, np.int64), empty, empty, mass, lattice.volume)
    values = squared(hkl.astype(float), length / 2)
    starts = np.flatnonzero(np.concatenate([[True], np.diff(length) > _SAME_D * length[1:]]))
    c_star = np.asarray(lattice.reciprocal_lattice_crystallographic.matrix)
    vectors = hkl[starts] @ c_star
    axis = c_star[2] / np.linalg.norm(c_star[2])
    return Reflections(
        hkl=hkl[starts],
        d_spacing=1.0 / length[starts],
        multiplicity=np.diff(np.concatenate([starts, [length.size]])),
        structure_factor_squared=np.add.reduceat(values, starts),
        tilt=(vectors @ axis / length[starts]) ** 2,
        cell_mass=mass,
        cell_volume=float(lattice.volume),
    )


@lru_cache(maxsize=256)
def powder_lines(
    phase: str, radiation: Radiation, low_d: float = 1.0, high_d: float = 40.0, model: FormFactors = "ionic"
) -> Reflections:
    """Lines of a library phase with ionic form factors, anomalous dispersion and displacement parameters.

    Parameters
    ----------
    phase : str
        Id of a phase with published atoms.
    radiation : Radiation
        Its strongest line sets the dispersion.
    low_d, high_d : float
        Limits of the spacing [angstrom].
    model : {"ionic", "neutral"}

    Returns
    -------
    Reflections

    Raises
    ------
    StructureError
        If the phase has no published atoms.
    """
    from pymatgen.core.lattice import Lattice

    loaded = load_phase(phase)
    polytype = structured_polytype(loaded)
    atoms = cell_atoms(polytype)
    names = np.array(atoms.ions)

    def squared(hkl: NDArray[np.float64], s: NDArray[np.float64]) -> NDArray[np.float64]:
        total = np.zeros(s.size, dtype=complex)
        for ion in dict.fromkeys(atoms.ions):
            here = names == ion
            waves = np.exp(2j * np.pi * (hkl @ atoms.fractional[here].T) - np.multiply.outer(s * s, atoms.b_iso[here]))
            factor = form_factor(ion, s, model) + anomalous(ion, radiation.energy_ev)
            total += factor * (waves @ atoms.occupancies[here])
        return np.asarray(np.abs(total) ** 2)

    lattice = Lattice.from_parameters(*polytype.cell)
    shortest = max(low_d, radiation.wavelength / 2 * 1.0001)
    return collect_lines(lattice, squared, loaded.molar_mass * polytype.formula_units, shortest, high_d)


def march_dollase(tilt: NDArray[np.float64], ratio: float) -> NDArray[np.float64]:
    """Orientation factor (r^2 cos^2 a + sin^2 a / r)^(-3/2); `tilt` is cos^2 a. r < 1 means plates lying flat.

    References
    ----------
    Dollase (1986) J. Appl. Cryst. 19, 267-272.
    """
    return np.asarray((ratio**2 * tilt + (1.0 - tilt) / ratio) ** -1.5)


def powder_profile(
    lines: Reflections,
    two_theta: NDArray[np.float64],
    radiation: Radiation,
    instrument: Instrument,
    *,
    size: float = 600.0,
    march: float = 1.0,
    displacement: float = 0.0,
    fwhm: float | None = None,
    mass_attenuation: float | None = None,
    mass_mg_cm2: float | None = None,
    basal_size: float | None = None,
) -> NDArray[np.float64]:
    """Random-powder pattern of unit mass, on the scale of `basal_intensity` seen through a random mount.

    Parameters
    ----------
    lines : Reflections
    two_theta : ndarray, shape (n,)
        [degree]
    size : float
        Crystallite size for the Scherrer width [angstrom].
    march : float
        March-Dollase ratio along c*.
    displacement : float
        [mm]
    fwhm : float, optional
        Instrument width [degree] in place of the instrument's own.
    mass_attenuation, mass_mg_cm2 : float, optional
        Of a film that does not stop the beam [cm^2/g, mg/cm^2]; thick without both.
    basal_size : float, optional
        Thickness of platy crystallites along c* [angstrom]; `size` is then their extent in the plane, and a line at an
        angle to c* is broadened as by an ellipsoid. The same as `size` when left out.

    Returns
    -------
    ndarray, shape (n,)
    """
    out = np.zeros(two_theta.size)
    if not lines.d_spacing.size:
        return out
    strength = lines.structure_factor_squared * march_dollase(lines.tilt, march) / (lines.cell_mass * lines.cell_volume)
    thick = size if basal_size is None else basal_size
    sizes = 1.0 / np.sqrt(lines.tilt / thick**2 + (1.0 - lines.tilt) / size**2)
    for wavelength, weight in tube_lines(radiation, instrument):
        sine = wavelength / (2 * lines.d_spacing)
        reached = sine < 0.999
        sine, power = sine[reached], strength[reached]
        angle = 2 * np.degrees(np.arcsin(sine))
        # same constants as the basal pattern: psi of a random mount is 1/(4 sin theta); area in degrees of two-theta
        lorentz = polarisation(angle, instrument.monochromator_two_theta) / (8 * sine**2 * np.sqrt(1 - sine**2))
        area = np.degrees(weight * wavelength * power * lorentz)
        area = area * mount_factor(angle, instrument, mass_attenuation, mass_mg_cm2)
        width = np.hypot(instrument.fwhm if fwhm is None else fwhm, scherrer_width(angle, wavelength, sizes[reached]))
        shift = displacement_shift(angle, displacement, instrument)
        for cosine, share in axial_nodes(instrument):
            seen = angle if cosine == 1 else np.degrees(np.arccos(np.clip(np.cos(np.radians(angle)) / cosine, -1, 1)))
            _draw(out, two_theta, seen + shift, share * area, width, instrument.lorentzian)
    return out


def _draw(
    out: NDArray[np.float64],
    two_theta: NDArray[np.float64],
    centres: NDArray[np.float64],
    areas: NDArray[np.float64],
    widths: NDArray[np.float64],
    lorentzian: float,
) -> None:
    """Add lines to `out`, an array of the caller's own making."""
    reach = _CUT * widths
    near = (areas >= 1e-7 * areas.sum()) & (centres > two_theta.min() - reach) & (centres < two_theta.max() + reach)
    centres, areas, widths = centres[near], areas[near], widths[near]
    if centres.size > _MANY:
        out += draw_together(two_theta, centres, areas, widths, lorentzian)
        return
    for centre, area, width in zip(centres, areas, widths, strict=True):
        low, high = np.searchsorted(two_theta, (centre - _CUT * width, centre + _CUT * width))
        if high > low:
            out[low:high] += area * pseudo_voigt(two_theta[low:high] - centre, width, lorentzian)


def powder_pattern(
    phase: str | Phase,
    two_theta: NDArray[np.float64],
    radiation: str | Radiation = "Cu",
    *,
    size: float = 600.0,
    march: float = 1.0,
    instrument: Instrument | None = None,
    model: FormFactors = "ionic",
) -> NDArray[np.float64]:
    """Calculated random-powder pattern of a library phase with published atoms.

    Parameters
    ----------
    phase : str or Phase
        Library phase.
    two_theta : ndarray, shape (n,)
        [degree]
    radiation : str or Radiation
    size : float
        Crystallite size [angstrom].
    march : float
        March-Dollase ratio, 1 for no preferred orientation.
    instrument : Instrument, optional

    Returns
    -------
    ndarray, shape (n,)
        Intensity per unit of dry mass, common scale with `basal_pattern`.

    Raises
    ------
    StructureError
        If the phase has no published atoms.
    """
    tube = Radiation.parse(radiation) if isinstance(radiation, str) else radiation
    angles = np.asarray(two_theta, dtype=float)
    low_d = float(tube.wavelength / (2 * np.sin(np.radians(min(angles.max() + 2.0, 178.0)) / 2)))
    name = phase if isinstance(phase, str) else phase.id
    lines = powder_lines(name, tube, round(low_d, 3), 60.0, model)
    return powder_profile(lines, angles, tube, instrument or Instrument(), size=size, march=march)


def reference_pattern(
    structure: Structure | Phase | str, radiation: str | Radiation = "Cu", two_theta_range: tuple[float, float] = (2.0, 70.0)
) -> tuple[NDArray[np.float64], NDArray[np.float64], list[str]]:
    """The powder lines of pymatgen's own calculator (neutral atoms, no dispersion), the reference for every structure.

    Parameters
    ----------
    structure : pymatgen.core.Structure, Phase or str
        A structure, or a library phase with published atoms.
    radiation : str or Radiation
        Its strongest line is used.
    two_theta_range : tuple of float
        [degree]

    Returns
    -------
    two_theta : ndarray, shape (n,)
        [degree]
    intensity : ndarray, shape (n,)
        Unscaled.
    labels : list of str
        hkl of the first family of each line.
    """
    from pymatgen.analysis.diffraction.xrd import XRDCalculator

    tube = Radiation.parse(radiation) if isinstance(radiation, str) else radiation
    if isinstance(structure, str):
        structure = load_phase(structure)
    if isinstance(structure, Phase):
        structure = library_structure(structure)
    pattern = XRDCalculator(wavelength=tube.wavelength).get_pattern(structure, scaled=False, two_theta_range=two_theta_range)
    labels = ["".join(str(i) for i in family[0]["hkl"]) for family in pattern.hkls]
    return np.asarray(pattern.x), np.asarray(pattern.y), labels
