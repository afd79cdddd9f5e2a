"""The calculated pattern of one phase or formula: a curve, and the table of reflections behind it."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrdmica.calculated.subject import Subject, subject_of
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.layer import Layer
from xrdmica.crystals.library import Phase
from xrdmica.diffraction.basal import basal_intensity, layer_amplitude
from xrdmica.diffraction.columns import View, component_column
from xrdmica.diffraction.grid import PatternGrid, make_grid, on_scan
from xrdmica.diffraction.optics import RANDOM_SPREAD, Instrument, lorentz_factor, mount_factor, polarisation
from xrdmica.diffraction.powder import Reflections, powder_profile
from xrdmica.diffraction.scattering import FormFactors
from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.scans.scan import Mount
from xrdmica.scans.treatment import Treatment

__all__ = ["CalculatedPattern", "Reflection", "basal_areas", "calculate_pattern", "powder_areas"]

Array = NDArray[np.float64]
_MOST_POINTS = 200_000
_LEAST_PROMINENCE = 0.001  # of composite lines, relative to the highest point


@dataclass(frozen=True)
class Reflection:
    """One line of a calculated pattern.

    Attributes
    ----------
    hkl : tuple of int or None
        None for the composite lines of interstratified phases, which have no indices.
    d_spacing : float
        [angstrom]
    two_theta : float
        For the mean wavelength of the tube [degree].
    intensity : float
        Area relative to the strongest line in the range, which is 100 (height for composite lines).
    multiplicity : int
        Reflections in the line; 1 for basal lines of an oriented mount.
    """

    hkl: tuple[int, int, int] | None
    d_spacing: float
    two_theta: float
    intensity: float
    multiplicity: int

    @property
    def label(self) -> str:
        """Indices as text, empty for composite lines; commas where one has two digits."""
        if self.hkl is None:
            return ""
        parts = [str(i) for i in self.hkl]
        return (" " if any(len(p.lstrip("-")) > 1 for p in parts) else "").join(parts)


@dataclass(frozen=True, eq=False)
class CalculatedPattern:
    """A calculated pattern.

    Attributes
    ----------
    name : str
        Phase or formula.
    mount : str
    treatment : Treatment
    radiation : Radiation
    two_theta : ndarray, shape (n,)
        [degree]
    intensity : ndarray, shape (n,)
        The strongest point is 100.
    reflections : tuple of Reflection
        By rising angle.
    notes : tuple of str
        What had to be assumed.
    """

    name: str
    mount: Mount
    treatment: Treatment
    radiation: Radiation
    two_theta: Array
    intensity: Array
    reflections: tuple[Reflection, ...]
    notes: tuple[str, ...] = ()


def basal_areas(layer: Layer, orders: NDArray[np.int64], grid: PatternGrid, spread: float, model: FormFactors) -> Array:
    """Areas of basal lines of unit mass [intensity x degree]: |F|^2 Lp lambda / (d cos theta M A).

    Parameters
    ----------
    layer : Layer
    orders : ndarray of int, shape (n,)
    grid : PatternGrid
        For tube and instrument.
    spread : float
        Orientation spread [degree].
    model : {"ionic", "neutral"}

    Returns
    -------
    ndarray, shape (n,)
        On the scale of `powder_areas` when `spread` is that of a random powder.
    """
    tube, instrument = grid.radiation, grid.instrument
    s = orders / (2.0 * layer.spacing)
    squared = np.abs(layer_amplitude(layer, s, tube, model)) ** 2
    if not layer.centrosymmetric:
        squared = (squared + np.abs(layer_amplitude(layer, -s, tube, model)) ** 2) / 2
    sine = s * tube.wavelength
    angle = 2 * np.degrees(np.arcsin(sine))
    factor = lorentz_factor(angle, spread, instrument) * mount_factor(angle, instrument)
    jacobian = np.degrees(tube.wavelength / (layer.spacing * np.sqrt(1 - sine**2)))
    return np.asarray(squared * factor * jacobian / (layer.molar_mass * layer.area))


def powder_areas(lines: Reflections, radiation: Radiation, instrument: Instrument) -> Array:
    """Areas of the lines of a random powder of unit mass [intensity x degree], shape (n,)."""
    sine = radiation.wavelength / (2 * lines.d_spacing)
    angle = 2 * np.degrees(np.arcsin(sine))
    lorentz = polarisation(angle, instrument.monochromator_two_theta) / (8 * sine**2 * np.sqrt(1 - sine**2))
    power = lines.structure_factor_squared / (lines.cell_mass * lines.cell_volume)
    return np.asarray(np.degrees(radiation.wavelength * power * lorentz) * mount_factor(angle, instrument))


def calculate_pattern(
    subject: str | Phase | SiteFormula,
    *,
    mount: Mount = "oriented",
    treatment: str | Treatment = "air_dried",
    radiation: str | Radiation = "Cu",
    two_theta_range: tuple[float, float] = (2.0, 70.0),
    step: float = 0.02,
    mean_layers: float | None = None,
    orientation_spread: float = 12.0,
    polytype: str | None = None,
    instrument: Instrument | None = None,
    model: FormFactors = "ionic",
) -> CalculatedPattern:
    """Calculate the pattern of a library phase, or of a formula through its ideal structure.

    Parameters
    ----------
    subject : str, Phase or SiteFormula
        Id in the library, path of a phase file, formula as text, or a record of either.
    mount : {"oriented", "random"}
    treatment : str or Treatment
        Chooses the state of a library phase.
    radiation : str or Radiation
    two_theta_range : tuple of float
        [degree]
    step : float
        [degree]
    mean_layers : float, optional
        Mean number of layers per stack; the usual value of the phase when left out.
    orientation_spread : float
        Of an oriented mount [degree].
    polytype : str, optional
        Of a random mount; of a library phase one with published atoms, of a formula one that `build_structure` knows.
    instrument : Instrument, optional
    model : {"ionic", "neutral"}
        Form factors.

    Returns
    -------
    CalculatedPattern

    Raises
    ------
    XrdmicaError
        If the range or step makes no sense, the phase shows no lines after the treatment, or the formula cannot be built.
    """
    tube = Radiation.parse(radiation) if isinstance(radiation, str) else radiation
    state = Treatment.parse(treatment) if isinstance(treatment, str) else treatment
    angles = _angles(two_theta_range, step)
    if mean_layers is not None and mean_layers < 1.5:
        raise XrdmicaError(f"a mean of {mean_layers:g} layers per stack is too few", fix="give 1.5 or more")
    if not 0.5 <= orientation_spread <= 60:
        raise XrdmicaError(f"a spread of {orientation_spread:g} degrees is out of range", fix="give 0.5 to 60, usual is 12")
    grid = make_grid(angles, tube, instrument or Instrument())
    low_d = tube.wavelength / (2 * np.sin(np.radians(angles[-1]) / 2))
    chosen = subject_of(subject, state, mount, tube, float(low_d), polytype, model)
    if mean_layers is not None:
        chosen = replace(
            chosen,
            mean_layers=mean_layers,
            component=None if chosen.component is None else replace(chosen.component, mean_layers=mean_layers),
        )
    view = View(grid, angles, mount, orientation_spread)
    curve = _curve(chosen, view, model)
    reflections = _reflections(chosen, view, curve, model)
    top = float(curve.max())
    if top <= 0 or not reflections:
        raise XrdmicaError(
            f"{chosen.name} has no lines between {angles[0]:g} and {angles[-1]:g} degrees", fix="give a wider range"
        )
    return CalculatedPattern(chosen.name, mount, state, tube, angles, 100 * curve / top, reflections, chosen.notes)


def _angles(limits: tuple[float, float], step: float) -> Array:
    low, high = limits
    if not 0.5 <= low < high <= 160:
        raise XrdmicaError(f"the range {low:g} to {high:g} degrees cannot be used", fix="give two rising angles from 0.5 to 160")
    if not 0.001 <= step <= (high - low) / 2:
        raise XrdmicaError(f"a step of {step:g} degrees does not suit the range", fix="give 0.01 or 0.02")
    if (high - low) / step > _MOST_POINTS:
        raise XrdmicaError("range and step make too many points", fix="give a larger step")
    return np.asarray(low + step * np.arange(round((high - low) / step) + 1), dtype=float)


def _curve(chosen: Subject, view: View, model: FormFactors) -> Array:
    """Intensity on the angles of the view, shape (n,)."""
    if chosen.component is not None and chosen.layer is None and chosen.lines is None:
        return component_column(chosen.component, view, model)
    total = np.zeros(view.two_theta.size)
    if chosen.layer is not None:
        inside = basal_intensity(
            chosen.layer, view.grid, mean_layers=chosen.mean_layers, spacing_disorder=chosen.disorder, model=model
        )
        total = on_scan(inside, view.grid, view.two_theta, orientation_spread=view.spread)
    if chosen.lines is not None:
        size = 600.0 if chosen.layer is None else chosen.mean_layers * chosen.layer.spacing
        total = total + powder_profile(chosen.lines, view.two_theta, view.grid.radiation, view.grid.instrument, size=size)
    return total


def _reflections(chosen: Subject, view: View, curve: Array, model: FormFactors) -> tuple[Reflection, ...]:
    low, high = float(view.two_theta[0]), float(view.two_theta[-1])
    tube, instrument = view.grid.radiation, view.grid.instrument
    rows: list[tuple[tuple[int, int, int] | None, float, float, int]] = []
    if chosen.component is not None and chosen.layer is None and chosen.lines is None:
        from scipy.signal import find_peaks

        # composite lines have no indices: they are read off the curve
        places, _ = find_peaks(curve, prominence=_LEAST_PROMINENCE * float(curve.max()))
        rows = [(None, float(tube.d_spacing(view.two_theta[i])), float(curve[i]), 1) for i in places]
    if chosen.layer is not None:
        orders = np.arange(1, int(2 * chosen.layer.spacing / tube.wavelength * 0.999) + 1)
        areas = basal_areas(chosen.layer, orders, view.grid, view.spread, model)
        several = 2 if view.spread >= RANDOM_SPREAD else 1
        # the cell of a polytype may hold several layers; its 00l indices count whole cells
        rows += [
            ((0, 0, int(order) * chosen.layers_per_cell), chosen.layer.spacing / order, float(area), several)
            for order, area in zip(orders, areas, strict=True)
        ]
    if chosen.lines is not None:
        areas = powder_areas(chosen.lines, tube, instrument)
        rows += [
            ((int(hkl[0]), int(hkl[1]), int(hkl[2])), float(d), float(area), int(many))
            for hkl, d, area, many in zip(
                chosen.lines.hkl, chosen.lines.d_spacing, areas, chosen.lines.multiplicity, strict=True
            )
        ]
    seen = [(hkl, d, float(tube.two_theta(d)), area, many) for hkl, d, area, many in rows]
    seen = sorted((row for row in seen if low <= row[2] <= high), key=lambda row: row[2])
    top = max((row[3] for row in seen), default=0.0)
    return tuple(Reflection(hkl, d, angle, 100 * area / top, many) for hkl, d, angle, area, many in seen if top > 0)
