"""One phase as it looks in one scan: the columns from which identification and estimation build calculated scans."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property, lru_cache
from itertools import product

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.layer import Layer, build_layer
from xrdmica.crystals.library import Phase, State, load_phase
from xrdmica.crystals.polytype import structured_polytype
from xrdmica.diffraction.bands import band_intensity
from xrdmica.diffraction.basal import basal_intensity
from xrdmica.diffraction.grid import PatternGrid, Sampling, on_scan, sample_points
from xrdmica.diffraction.optics import RANDOM_SPREAD
from xrdmica.diffraction.peak_shape import convolve_profile
from xrdmica.diffraction.powder import Reflections, powder_lines, powder_profile
from xrdmica.diffraction.scattering import FormFactors
from xrdmica.diffraction.specimen import film_factor
from xrdmica.diffraction.stacking import stack_intensity, two_kind_junctions
from xrdmica.scans.scan import Mount
from xrdmica.scans.treatment import Treatment

__all__ = ["Component", "ExpectedLine", "View", "component_column", "component_columns", "components_for", "expected_lines"]

_TYPICAL_LAYERS = 20.0


_GRAIN = 600.0  # angstrom, size of companion crystals where nothing is known
_LATERAL = 500.0  # angstrom, extent of clay plates, common practice
_MOST_STRETCH = 0.03  # beyond this a state is another structure (hydrated, collapsed), not a stretched one


@dataclass(frozen=True)
class Component:
    """A phase in one state, with everything its column depends on but the instrument.

    Attributes
    ----------
    phase : str
        Library id.
    states : tuple of str
        State id; for interstratified phases one per kind of layer; empty for companions.
    spacings : tuple of float
        Basal spacing per kind of layer [angstrom].
    mean_layers : float
    disorder : float
        Spacing disorder [angstrom].
    exchanges : tuple of (str, float)
        Exchange variables that differ from the phase file.
    fraction : float or None
        Share of the first kind of layer in an interstratified phase.
    """

    phase: str
    states: tuple[str, ...] = ()
    spacings: tuple[float, ...] = ()
    mean_layers: float = _TYPICAL_LAYERS
    disorder: float = 0.0
    exchanges: tuple[tuple[str, float], ...] = ()
    fraction: float | None = None

    @property
    def label(self) -> str:
        """State(s) for people."""
        return " / ".join(self.states)


@dataclass(frozen=True, eq=False)
class View:
    """How a scan looks at its specimen.

    Attributes
    ----------
    grid : PatternGrid
    two_theta : ndarray, shape (n,)
        Angles of the scan [degree].
    mount : str
        ``"oriented"`` or ``"random"``.
    orientation_spread : float
        Of an oriented mount [degree].
    displacement : float
        [mm]
    fwhm : float or None
        Instrument width [degree] in place of the instrument's own.
    mass_attenuation, mass_mg_cm2 : float or None
        Of a film that does not stop the beam [cm^2/g, mg/cm^2]; thick without both.
    march : float
        March-Dollase ratio of the plates of a random mount; below 1 they lie flat more often than not.
    """

    grid: PatternGrid
    two_theta: NDArray[np.float64]
    mount: Mount
    orientation_spread: float = 12.0
    displacement: float = 0.0
    fwhm: float | None = None
    mass_attenuation: float | None = None
    mass_mg_cm2: float | None = None
    march: float = 1.0

    @property
    def spread(self) -> float:
        """Orientation spread that holds for this mount [degree]."""
        return RANDOM_SPREAD if self.mount == "random" else self.orientation_spread

    @property
    def width(self) -> float:
        """Instrument width that holds [degree]."""
        return self.grid.instrument.fwhm if self.fwhm is None else self.fwhm

    def seen(self, curve: NDArray[np.float64]) -> NDArray[np.float64]:
        """Basal scattering curves on the grid (..., g) as the scan shows them (..., n)."""
        return on_scan(
            curve,
            self.grid,
            self.two_theta,
            orientation_spread=self.spread,
            fwhm=self.width,
            displacement=self.displacement,
            sampling=self._sampling,
            mass_attenuation=self.mass_attenuation,
            mass_mg_cm2=self.mass_mg_cm2,
        )

    @cached_property
    def _sampling(self) -> Sampling:
        return sample_points(self.grid, self.two_theta, self.displacement)


@dataclass(frozen=True)
class ExpectedLine:
    """A basal line that a component should show.

    Attributes
    ----------
    order : int
        l of 00l; 0 for composite lines of interstratified phases.
    d_spacing : float
        [angstrom]
    two_theta : float
        [degree]
    share : float
        Area relative to the strongest line in the scan's range.
    """

    order: int
    d_spacing: float
    two_theta: float
    share: float


def _state_by_id(phase: Phase, state: str) -> State:
    return next(s for s in phase.states if s.id == state)


def _usual_exchanges(phase: Phase) -> dict[str, float]:
    """Exchange variables at their usual values: a phase file's formula is an end member, not what is usually met."""
    return {variable.id: variable.typical for variable in phase.variables if variable.kind == "exchange"}


def components_for(phase: Phase, treatment: Treatment) -> tuple[Component, ...]:
    """What a phase may look like after a treatment, with the usual values of its file.

    Parameters
    ----------
    phase : Phase
    treatment : Treatment

    Returns
    -------
    tuple of Component
        One per state (or pair of states) that shows basal lines; empty when the phase shows none; a companion always
        gives one.
    """
    if not phase.is_sheet_silicate:
        return (Component(phase.id),)
    variable = phase.variable("mean_layers")
    layers = variable.typical if variable else _TYPICAL_LAYERS
    if phase.stack is None:
        usual = tuple(_usual_exchanges(phase).items())
        return tuple(
            Component(phase.id, (state.id,), (state.spacing,), layers, state.spacing_disorder, usual)
            for state in phase.states_for(treatment)
            if not state.lost and state.spacing is not None
        )
    kinds = [load_phase(phase.stack.first), load_phase(phase.stack.second)]
    out = []
    for pair in product(*(kind.states_for(treatment) for kind in kinds)):
        if any(state.lost or state.spacing is None for state in pair):
            continue
        spacings = tuple(float(state.spacing or 0.0) for state in pair)
        disorder = max(state.spacing_disorder for state in pair)
        out.append(Component(phase.id, tuple(s.id for s in pair), spacings, layers, disorder, (), phase.stack.fraction[1]))
    return tuple(out)


def component_layers(component: Component) -> tuple[Layer, ...]:
    """The layer of a component; two one-sided layers for an interstratified one; none for a companion."""
    phase = load_phase(component.phase)
    if not component.states:
        return ()
    if phase.stack is None:
        return (_layer(phase.id, component.states[0], tuple(sorted(component.exchanges)), component.spacings[0]),)
    kinds = [load_phase(phase.stack.first), load_phase(phase.stack.second)]
    return tuple(
        _layer(kind.id, state, tuple(sorted(_usual_exchanges(kind).items())), spacing, one_sided=True)
        for kind, state, spacing in zip(kinds, component.states, component.spacings, strict=True)
    )


@lru_cache(maxsize=2048)
def _layer(name: str, state: str, exchanges: tuple[tuple[str, float], ...], spacing: float, *, one_sided: bool = False) -> Layer:
    """One object per layer, whatever its stacks are like, so that its amplitude is found again."""
    phase = load_phase(name)
    return build_layer(phase, _state_by_id(phase, state), exchanges=dict(exchanges), spacing=spacing, one_sided=one_sided)


@lru_cache(maxsize=1024)
def component_intensity(component: Component, grid: PatternGrid, model: FormFactors = "ionic") -> NDArray[np.float64]:
    """Basal scattering of unit mass on the grid, shape (g,), before Lorentz factor and profile.

    Parameters
    ----------
    component : Component
        Of a sheet silicate.
    grid : PatternGrid
    model : {"ionic", "neutral"}
    """
    layers = component_layers(component)
    mean, disorder = component.mean_layers, component.disorder
    if component.fraction is None:
        return basal_intensity(layers[0], grid, mean_layers=mean, spacing_disorder=disorder, model=model)
    stack = load_phase(component.phase).stack
    junctions = two_kind_junctions(component.fraction, stack.reichweite if stack else 0)
    return stack_intensity(layers, junctions, grid, mean_layers=mean, spacing_disorder=disorder, model=model)


@lru_cache(maxsize=256)
def _cross_lines(phase: str, view_key: tuple[object, ...], model: FormFactors) -> Reflections | None:
    """Lines of the published structure without 00l, which the basal model gives; None where no atoms are known."""
    radiation, low_d = view_key
    loaded = load_phase(phase)
    if not any(polytype.sites for polytype in loaded.polytypes):
        return None
    lines = powder_lines(phase, radiation, low_d, 60.0, model)
    if not loaded.is_sheet_silicate:
        return lines
    keep = (lines.hkl[:, 0] != 0) | (lines.hkl[:, 1] != 0)
    return replace(
        lines,
        hkl=lines.hkl[keep],
        d_spacing=lines.d_spacing[keep],
        multiplicity=lines.multiplicity[keep],
        structure_factor_squared=lines.structure_factor_squared[keep],
        tilt=lines.tilt[keep],
    )


def cross_lines(component: Component, view: View, model: FormFactors = "ionic") -> Reflections | None:
    """Lines that a random arrangement adds: all of a companion, all but 00l of a sheet silicate."""
    highest = float(view.two_theta.max()) + 1.0
    low_d = view.grid.radiation.wavelength / (2 * np.sin(np.radians(min(highest, 178.0)) / 2))
    return _cross_lines(component.phase, (view.grid.radiation, round(float(low_d), 2)), model)


def component_columns(
    components: Sequence[Component | None], view: View, model: FormFactors = "ionic"
) -> NDArray[np.float64]:
    """Calculated scans of unit mass of several components; the basal curves are smeared in one go.

    Companions lie at random in every mount; of sheet silicates in an oriented mount the basal lines alone are drawn.

    Parameters
    ----------
    components : sequence of Component or None, length j
        None gives a column of zeros.
    view : View
    model : {"ionic", "neutral"}

    Returns
    -------
    ndarray, shape (n, j)
        Intensity per unit of dry mass.
    """
    out = np.zeros((view.two_theta.size, len(components)))
    layered = [i for i, component in enumerate(components) if component is not None and component.states]
    if layered:
        curves = np.array([component_intensity(components[i], view.grid, model) for i in layered])
        # plates that lie flat bring their normals into reflection: r^-3 for lines along the normal (Dollase 1986)
        out[:, layered] = view.seen(curves).T * (view.march**-3.0 if view.mount == "random" else 1.0)
    for i, component in enumerate(components):
        if component is not None and (view.mount == "random" or not component.states):
            out[:, i] += _crossed(component, view, model)
    return out


def component_column(component: Component, view: View, model: FormFactors = "ionic") -> NDArray[np.float64]:
    """`component_columns` of a single component, shape (n,)."""
    return component_columns([component], view, model)[:, 0]


def _crossed(component: Component, view: View, model: FormFactors) -> NDArray[np.float64]:
    """Part of a column that is drawn line by line."""
    lines = cross_lines(component, view, model)
    if lines is None:
        return _banded(component, view, model)
    thick = _GRAIN if not component.states else component.mean_layers * component.spacings[0]
    plates = bool(component.states)
    return powder_profile(
        _stretched(component, lines) if plates else lines,
        view.two_theta,
        view.grid.radiation,
        view.grid.instrument,
        size=max(thick, _LATERAL) if plates else thick,
        basal_size=thick,
        march=view.march if plates else 1.0,
        displacement=view.displacement,
        fwhm=view.width,
        mass_attenuation=view.mass_attenuation,
        mass_mg_cm2=view.mass_mg_cm2,
    )


@lru_cache(maxsize=256)
def _published_spacing(name: str) -> float:
    """Thickness of one layer in the published cell that cross lines come from [angstrom]."""
    from pymatgen.core.lattice import Lattice

    polytype = structured_polytype(load_phase(name))
    return float(Lattice.from_parameters(*polytype.cell).d_hkl((0, 0, 1))) / polytype.layers_per_cell


def _stretched(component: Component, lines: Reflections) -> Reflections:
    """Lines of the published cell moved to the basal spacing of the component: 1/d along the normal scales with it."""
    if component.fraction is not None:
        return lines
    ratio = _published_spacing(component.phase) / component.spacings[0]
    if abs(ratio - 1) < 1e-5 or abs(ratio - 1) > _MOST_STRETCH:
        return lines
    scaled = lines.d_spacing / np.sqrt(1.0 - lines.tilt + lines.tilt * ratio**2)
    return replace(lines, d_spacing=scaled)


def turbostratic_kinds(component: Component) -> dict[str, float]:
    """Kinds of 2:1 layers of a component that lie on each other without lateral order -> share; empty for others."""
    phase = load_phase(component.phase)
    if phase.stack is not None and component.fraction is not None:
        kinds = {phase.stack.first: component.fraction, phase.stack.second: 1 - component.fraction}
        return kinds if all(load_phase(kind).layer_type == "2:1" for kind in kinds) else {}
    flat = phase.layer_type == "2:1" and any(polytype.name == "turbostratic" for polytype in phase.polytypes)
    return {phase.id: 1.0} if flat else {}


def _banded(component: Component, view: View, model: FormFactors) -> NDArray[np.float64]:
    """hk bands of a turbostratic component; nothing where neither atoms nor 2:1 layers are known."""
    kinds = turbostratic_kinds(component)
    if not kinds:
        return np.zeros(view.two_theta.size)
    # rods stand upright on the plates: the factor of lines at a right angle to the normal
    curve = band_intensity(kinds, view.grid, model=model) * view.march**1.5
    if view.mass_attenuation is not None and view.mass_mg_cm2 is not None:
        curve = curve * film_factor(view.grid.two_theta, view.mass_attenuation, view.mass_mg_cm2)
    smeared = convolve_profile(curve, view.grid.step, view.width, view.grid.instrument.lorentzian)
    return view._sampling.read(smeared)


def expected_lines(component: Component, view: View, least_share: float = 0.02) -> tuple[ExpectedLine, ...]:
    """Lines of a component inside the scan's range, from its own calculated scan.

    Parameters
    ----------
    component : Component
    view : View
    least_share : float
        Lines weaker than this share of the strongest are left out.

    Returns
    -------
    tuple of ExpectedLine
        By rising angle.
    """
    if not component.states:
        return _companion_lines(component, view, least_share)
    two_theta = view.grid.two_theta
    low, high = float(view.two_theta.min()), float(view.two_theta.max())
    curve = component_intensity(component, view.grid) * view.grid.factor(view.spread)
    tube = view.grid.radiation
    found: list[tuple[int, float, float, float]] = []
    if component.fraction is None:
        spacing = component.spacings[0]
        for order in range(1, int(2 * spacing / tube.wavelength) + 1):
            angle = float(tube.two_theta(spacing / order))
            if low <= angle <= high:
                half = 0.9 * tube.mean_wavelength / (2 * spacing * np.cos(np.radians(angle / 2)))
                near = np.abs(two_theta - angle) <= min(np.degrees(half) / 2, 1.0)
                found.append((order, spacing / order, angle, float(curve[near].max()) if near.any() else 0.0))
    else:
        from scipy.signal import find_peaks

        places, _ = find_peaks(curve, prominence=0.02 * float(curve.max()))
        for place in places:
            angle = float(two_theta[place])
            if low <= angle <= high:
                found.append((0, float(tube.d_spacing(angle)), angle, float(curve[place])))
    top = max((height for *_, height in found), default=0.0)
    return tuple(ExpectedLine(o, d, a, h / top) for o, d, a, h in found if top > 0 and h >= least_share * top)


def _companion_lines(component: Component, view: View, least_share: float) -> tuple[ExpectedLine, ...]:
    lines = cross_lines(component, view)
    if lines is None or not lines.d_spacing.size:
        return ()
    angle = view.grid.radiation.two_theta(lines.d_spacing)
    sine = np.sin(np.radians(angle) / 2)
    area = lines.structure_factor_squared * (1 + np.cos(np.radians(angle)) ** 2) / (sine**2 * np.sqrt(1 - sine**2))
    inside = (angle >= view.two_theta.min()) & (angle <= view.two_theta.max())
    top = float(area[inside].max()) if inside.any() else 0.0
    keep = np.flatnonzero(inside & (area >= least_share * top))
    return tuple(ExpectedLine(0, float(lines.d_spacing[i]), float(angle[i]), float(area[i]) / top) for i in keep)


