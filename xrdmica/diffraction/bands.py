"""Two-dimensional hk bands: what layers show beside 00l when each is turned at random against the next (turbostratic)."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.ions import mass_of
from xrdmica.crystals.library import Phase, Polytype, load_phase
from xrdmica.crystals.polytype import cell_atoms, structured_polytype
from xrdmica.diffraction.grid import PatternGrid
from xrdmica.diffraction.optics import mount_factor, polarisation
from xrdmica.diffraction.scattering import FormFactors, anomalous, form_factor
from xrdmica.errors import StructureError

__all__ = ["FlatLayer", "band_intensity", "band_profile", "flat_layer", "rod_families", "rod_power"]

_MODELS = {"dioctahedral": "illite", "trioctahedral": "phlogopite"}  # where a turbostratic layer takes its coordinates from
_REACH = 2.2  # half-widths 1/L on either side of a rod: beyond it exp(-pi 2.2^2) is 2e-7
_NODES = 61
_SAME_ROD = 1e-4  # relative


@dataclass(frozen=True, eq=False)
class FlatLayer:
    """One layer with its coordinates in the plane: what hk rods see.

    Attributes
    ----------
    a, b : float
        Rectangular centred cell of the layer [angstrom].
    xy : ndarray, shape (m, 2)
        In units of a and b.
    z : ndarray, shape (m,)
        Heights [angstrom].
    ions : tuple of str, length m
    counts : ndarray, shape (m,)
        Occupancies.
    b_iso : ndarray, shape (m,)
        [angstrom^2]
    cell_mass : float
        Dry, of the whole cell with its interlayer [g/mol].
    """

    a: float
    b: float
    xy: NDArray[np.float64]
    z: NDArray[np.float64]
    ions: tuple[str, ...]
    counts: NDArray[np.float64]
    b_iso: NDArray[np.float64]
    cell_mass: float


@lru_cache(maxsize=64)
def flat_layer(phase: str) -> FlatLayer:
    """The 2:1 layer of a library phase, for its hk bands.

    Parameters
    ----------
    phase : str
        A 2:1 phase. Where its file has atoms of a one-layer polytype they are taken as they are, without the interlayer;
        otherwise the layer of illite (dioctahedral) or phlogopite (trioctahedral) is stretched to the phase's a and b and
        filled with the ions of its formula. Interlayer cations and molecules do not lie on the lattice of one layer and are
        left out.

    Raises
    ------
    StructureError
        If the phase is no 2:1 sheet silicate.
    """
    loaded = load_phase(phase)
    if loaded.layer_type != "2:1" or loaded.stack is not None:
        raise StructureError(f"{phase} has no 2:1 layer of its own", fix="give bands of its kinds of layers")
    own = [p for p in loaded.polytypes if p.sites and p.layers_per_cell == 1]
    if own:
        return _projected(own[0], loaded, own[0])
    octahedral = sum(loaded.formula.octahedral.values())
    model = load_phase(_MODELS["dioctahedral" if octahedral < 2.5 else "trioctahedral"])
    return _projected(structured_polytype(model), loaded, loaded.polytypes[0])


def _projected(polytype: Polytype, phase: Phase, cell_of: Polytype) -> FlatLayer:
    """Atoms of one layer about its octahedral sheet, heights along the normal, with the phase's own cations."""
    from pymatgen.core.lattice import Lattice

    atoms = cell_atoms(polytype)
    roles = {site.label: _role(site.ions) for site in polytype.sites}
    of_role = np.array([roles[label] for label in atoms.labels])
    third = atoms.fractional[:, 2]
    middle = third[of_role == "octahedral"][0]
    wrapped = atoms.fractional.copy()
    wrapped[:, 2] = np.mod(third - middle + 0.5, 1.0) - 0.5
    matrix = np.asarray(Lattice.from_parameters(*polytype.cell).matrix)
    # c = p a + q b + (height) normal: what c adds in the plane goes to x and y
    normal = np.cross(matrix[0], matrix[1]) / np.linalg.norm(np.cross(matrix[0], matrix[1]))
    lean = matrix[2] - (matrix[2] @ normal) * normal
    in_plane, *_ = np.linalg.lstsq(matrix[:2].T, lean, rcond=None)
    xy = wrapped[:, :2] + np.multiply.outer(wrapped[:, 2], in_plane)
    z = wrapped[:, 2] * float(matrix[2] @ normal)
    rows: list[tuple[int, str, float]] = []  # (which atom, ion, occupancy)
    units = polytype.formula_units
    for role, table in (("octahedral", phase.formula.octahedral), ("tetrahedral", phase.formula.tetrahedral)):
        places = _places(atoms.fractional, of_role == role)
        rows += [(i, ion, count * units / len(places)) for i in places for ion, count in table.items() if count > 0]
    rows += [(int(i), atoms.ions[i], float(atoms.occupancies[i])) for i in np.flatnonzero(of_role == "anion")]
    index = [i for i, _, _ in rows]
    return FlatLayer(
        a=cell_of.cell[0],
        b=cell_of.cell[1],
        xy=xy[index],
        z=z[index],
        ions=tuple(ion for _, ion, _ in rows),
        counts=np.array([count for _, _, count in rows]),
        b_iso=atoms.b_iso[index],
        cell_mass=phase.molar_mass * units,
    )


def _role(ions: dict[str, float]) -> str:
    if any(ion.startswith("Si") for ion in ions):
        return "tetrahedral"
    if any(ion in ("O2-", "OH-", "F-") for ion in ions):
        return "anion"
    if any(mass_of(ion) < 1.5 for ion in ions):
        return "hydrogen"
    return "interlayer" if any(ion in ("K+", "Na+", "Ca2+", "Ba2+") for ion in ions) else "octahedral"


def _places(fractional: NDArray[np.float64], chosen: NDArray[np.bool_]) -> list[int]:
    """One index per occupied place, where several ions share it."""
    seen: dict[tuple[float, ...], int] = {}
    for i in np.flatnonzero(chosen):
        seen.setdefault(tuple(np.round(fractional[i], 5)), int(i))
    return list(seen.values())


def rod_families(a: float, b: float, longest: float) -> list[tuple[float, NDArray[np.int64]]]:
    """Rods hk of a centred rectangular lattice, grouped by their distance from the axis.

    Parameters
    ----------
    a, b : float
        [angstrom]
    longest : float
        Largest distance [1/angstrom].

    Returns
    -------
    list of (float, ndarray of int, shape (m, 2))
        Distance [1/angstrom] and members, without the axis itself (00), nearest first.
    """
    h_max, k_max = int(longest * a) + 1, int(longest * b) + 1
    h, k = (grid.ravel() for grid in np.meshgrid(np.arange(-h_max, h_max + 1), np.arange(-k_max, k_max + 1), indexing="ij"))
    distance = np.hypot(h / a, k / b)
    keep = ((h + k) % 2 == 0) & (distance > 0) & (distance <= longest)
    hk, distance = np.column_stack([h, k])[keep], distance[keep]
    order = np.argsort(distance, kind="stable")
    hk, distance = hk[order], distance[order]
    starts = np.flatnonzero(np.concatenate([[True], np.diff(distance) > _SAME_ROD * distance[1:]]))
    groups = zip(np.split(distance, starts[1:]), np.split(hk, starts[1:]), strict=True)
    return [(float(group.mean()), members) for group, members in groups if group.size]


def band_profile(
    reciprocal: NDArray[np.float64], distance: float, size: float, along: NDArray[np.float64], power: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Average over all directions of one rod of finite thickness, per unit of layer area.

    (1/2S) int dz g(r - B) |F(z)|^2 / (2 pi r), r^2 = S^2 - z^2, g(x) = L exp(-pi L^2 x^2). With |F|^2 constant and B L large
    this is the band of Warren's theory, |F|^2 / (2 pi S) times his function of a = sqrt(pi) L (S - B), without its
    approximation that the rod is far from the axis.

    Parameters
    ----------
    reciprocal : ndarray, shape (n,)
        S = 2 sin(theta)/lambda [1/angstrom].
    distance : float
        B, of the rod from the axis [1/angstrom].
    size : float
        L, size of the layer in its plane [angstrom].
    along : ndarray, shape (q,)
        Rising heights from 0 along the rod where `power` is given [1/angstrom].
    power : ndarray, shape (q,)
        |F|^2 summed over the rods of the family and averaged over both directions [electron^2].

    Returns
    -------
    ndarray, shape (n,)

    References
    ----------
    Warren (1941) Phys. Rev. 59, 693-698; Brindley & Mering (1951) Acta Cryst. 4, 441-447, for |F|^2 that varies along the rod.
    """
    out = np.zeros(reciprocal.shape)
    reach = _REACH / size
    near = np.flatnonzero(reciprocal > max(distance - reach, 0.0))
    s = reciprocal[near, None]
    low = np.sqrt(np.maximum(s**2 - (distance + reach) ** 2, 0.0))
    high = np.sqrt(np.maximum(s**2 - max(distance - reach, 0.0) ** 2, 0.0))
    nodes, weights = np.polynomial.legendre.leggauss(_NODES)
    z = (high + low) / 2 + (high - low) / 2 * nodes
    radius = np.sqrt(np.maximum(s**2 - z**2, 1e-12))
    rod = size * np.exp(-np.pi * (size * (radius - distance)) ** 2)
    values = rod * np.interp(z, along, power) / (2 * np.pi * radius)
    # both halves of the rod, above and below the plane
    out[near] = ((values @ weights) * (high - low)[:, 0] / 2) * 2 / (2 * s[:, 0])
    return out


@lru_cache(maxsize=64)
def _layer_bands(phase: str, grid: PatternGrid, size: float, model: FormFactors) -> NDArray[np.float64]:
    """Directional average of all bands of one kind of layer per unit of mass [electron^2 mol/g angstrom], on the grid."""
    from scipy.interpolate import CubicSpline

    layer = flat_layer(phase)
    # a band is far smoother than a scan is fine: its head is about 0.6/L wide
    count = max(int(np.ceil(2 * float(grid.s[-1] - grid.s[0]) * size * 12)), 64)
    reciprocal = np.linspace(2 * grid.s[0], 2 * grid.s[-1], min(count, grid.s.size))
    total = np.zeros(reciprocal.size)
    for distance, hk in rod_families(layer.a, layer.b, float(reciprocal[-1]) + _REACH / size):
        highest = float(np.sqrt(max(reciprocal[-1] ** 2 - (distance - _REACH / size) ** 2, 1e-6)))
        along = np.linspace(0.0, highest, 20 + int(highest * 250))
        half = hk[(hk[:, 0] > 0) | ((hk[:, 0] == 0) & (hk[:, 1] > 0))]  # a 2:1 layer has a centre: hk is as -h-k
        power = 2 * rod_power(layer, half, along, grid.radiation.energy_ev, model)
        total += band_profile(reciprocal, distance, size, along, power)
    fine = np.maximum(CubicSpline(reciprocal, total)(2 * grid.s), 0.0)
    return np.asarray(fine) / (layer.a * layer.b) / layer.cell_mass


def rod_power(
    layer: FlatLayer, hk: NDArray[np.int64], along: NDArray[np.float64], energy_ev: float, model: FormFactors = "ionic"
) -> NDArray[np.float64]:
    """|F|^2 along a family of rods, summed over its members, mean of the two directions.

    Parameters
    ----------
    layer : FlatLayer
    hk : ndarray of int, shape (m, 2)
        All at nearly the same distance from the axis.
    along : ndarray, shape (q,)
        Height above the plane in reciprocal space [1/angstrom].
    energy_ev : float
        [eV]
    model : {"ionic", "neutral"}

    Returns
    -------
    ndarray, shape (q,)
        [electron^2]
    """
    total = np.zeros(along.size)
    names = np.array(layer.ions)
    distance = np.hypot(hk[:, 0] / layer.a, hk[:, 1] / layer.b).mean() if len(hk) else 0.0
    s = np.sqrt(distance**2 + along**2) / 2
    lateral = np.exp(2j * np.pi * (layer.xy @ hk.T)) * layer.counts[:, None]
    waves = np.exp(2j * np.pi * np.multiply.outer(along, layer.z))
    factors = np.exp(-np.multiply.outer(s * s, layer.b_iso)).astype(np.complex128)
    for ion in dict.fromkeys(layer.ions):
        factors[:, names == ion] *= (form_factor(ion, s, model) + anomalous(ion, energy_ev))[:, None]
    for one_way in (waves, waves.conj()):
        total += (np.abs((one_way * factors) @ lateral) ** 2).sum(axis=1) / 2
    return total


def band_intensity(
    kinds: dict[str, float], grid: PatternGrid, *, size: float = 150.0, model: FormFactors = "ionic"
) -> NDArray[np.float64]:
    """hk bands of unit mass of a turbostratic phase in a random mount, on the scale of `powder_profile`, before smearing.

    Parameters
    ----------
    kinds : dict
        Library id of each kind of 2:1 layer -> share of layers; one kind for a smectite, two for an illite-smectite.
    grid : PatternGrid
    size : float
        Of layers in their plane [angstrom].
    model : {"ionic", "neutral"}

    Returns
    -------
    ndarray, shape (g,)
        Polarisation and mount factor are in; the instrument's profile and the doublet are not. Every layer counts for itself:
        no order from layer to layer is left beside the distance.

    Raises
    ------
    StructureError
        If a kind has no 2:1 layer, or no share is above 0.
    """
    shares = {phase: share for phase, share in kinds.items() if share > 0}
    if not shares or not 10 <= size <= 1e5:
        raise StructureError(f"bands of {kinds} with a size of {size:g}", fix="give shares above 0 and 10 angstrom or more")
    masses = {phase: share * flat_layer(phase).cell_mass for phase, share in shares.items()}
    mean = sum(mass / sum(masses.values()) * _layer_bands(phase, grid, size, model) for phase, mass in masses.items())
    factor = polarisation(grid.two_theta, grid.instrument.monochromator_two_theta)
    factor = factor * mount_factor(grid.two_theta, grid.instrument) * 2 * np.pi / grid.radiation.wavelength**2
    return np.asarray(mean * factor)
