"""The calculated scans of a whole sample as a function of few parameters; amounts and backgrounds stay linear and outside."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.columns import Component, View, component_column, component_columns, component_intensity
from xrdmica.diffraction.optics import displacement_shift, lorentz_factor
from xrdmica.matching.prepare import Prepared

__all__ = ["Candidate", "Evaluation", "Knob", "SampleModel", "build_model", "composition_shows", "spacing_limits"]

FloatArray = NDArray[np.float64]
SPREAD_LIMITS = (4.0, 40.0)  # degree
DISPLACEMENT_LIMIT = 0.6  # mm
_EXCHANGE_GROUPS = ("true mica", "chlorite")
_MARCH_LIMITS = (0.35, 1.5)  # ratios met in back-loaded and side-loaded powders, common practice
_WIDTH_LIMITS = (0.3, 1.8)  # factor on the instrument width seen by the peaks


@dataclass(frozen=True)
class Candidate:
    """A phase with the component chosen for each scan; None where it gives no lines.

    Attributes
    ----------
    phase : str
    components : tuple of Component or None, length k
    """

    phase: str
    components: tuple[Component | None, ...]


def spacing_limits(component: Component) -> tuple[tuple[float, float], ...]:
    """Lowest and highest basal spacing per kind of layer, from the phase file [angstrom]."""
    phase = load_phase(component.phase)
    kinds = [phase] if phase.stack is None else [load_phase(phase.stack.first), load_phase(phase.stack.second)]
    limits = []
    for position, (kind, name) in enumerate(zip(kinds, component.states, strict=False)):
        state = next(s for s in kind.states if s.id == name)
        here = component.spacings[position]
        limits.append(state.spacing_range or (here, here))
    return tuple(limits)


@dataclass(frozen=True)
class Knob:
    """One non-linear parameter.

    Attributes
    ----------
    name : str
        A valid identifier.
    kind : str
        ``spread``, ``march``, ``width``, ``displacement``, ``spacing``, ``layers``, ``fraction`` or ``exchange``.
    value, low, high : float
        Start and limits; layers, spread, March ratio and width as logarithms.
    prior : float or None
        Standard deviation of what is known beforehand around `centre`; None for nothing.
    centre : float
    phase : int
        Place of the candidate, -1 for the sample.
    scans : tuple of int
        Scans it touches.
    detail : int or str
        Kind of layer for a spacing; variable id for an exchange.
    """

    name: str
    kind: str
    value: float
    low: float
    high: float
    prior: float | None = None
    centre: float = 0.0
    phase: int = -1
    scans: tuple[int, ...] = ()
    detail: int | str = 0


@dataclass(frozen=True, eq=False)
class SampleModel:
    """Scans, candidates and the parameters that move their columns."""

    prepared: tuple[Prepared, ...]
    candidates: tuple[Candidate, ...]
    knobs: tuple[Knob, ...]

    @property
    def start(self) -> FloatArray:
        """Start values of the knobs."""
        return np.array([knob.value for knob in self.knobs])

    def views(self, values: FloatArray) -> tuple[View, ...]:
        """How each scan looks at its specimen for given parameter values."""
        spread = width = None
        march = 1.0
        moved = {}
        for knob, value in zip(self.knobs, values, strict=True):
            if knob.kind == "spread":
                spread = float(np.exp(value))
            elif knob.kind == "width":
                width = float(np.exp(value))
            elif knob.kind == "march":
                march = float(np.exp(value))
            elif knob.kind == "displacement":
                moved[knob.scans[0]] = float(value)
        out = []
        for k, item in enumerate(self.prepared):
            view = item.view
            out.append(
                replace(
                    view,
                    orientation_spread=view.orientation_spread if spread is None else spread,
                    fwhm=view.width if width is None else view.width * width,
                    displacement=moved.get(k, view.displacement),
                    march=march if view.mount == "random" else 1.0,
                )
            )
        return tuple(out)

    def component(self, place: int, scan: int, values: FloatArray) -> Component | None:
        """A candidate's component in one scan for given parameter values."""
        component = self.candidates[place].components[scan]
        if component is None:
            return None
        for knob, value in zip(self.knobs, values, strict=True):
            if knob.phase == place and scan in knob.scans:
                component = turned(component, knob, float(value))
        return component

    def columns(self, values: FloatArray, views: Sequence[View] | None = None) -> tuple[FloatArray, ...]:
        """Columns of all scans, each (n_k, j); `views` when they are known already."""
        views = self.views(values) if views is None else views
        return tuple(
            component_columns([self.component(j, k, values) for j in range(len(self.candidates))], view)
            for k, view in enumerate(views)
        )


def turned(component: Component, knob: Knob, value: float) -> Component:
    """The component with one parameter set."""
    if knob.kind == "spacing":
        place = int(knob.detail)
        spacings = tuple(round(value, 5) if i == place else d for i, d in enumerate(component.spacings))
        return replace(component, spacings=spacings)
    if knob.kind == "layers":
        return replace(component, mean_layers=round(float(np.exp(value)), 4))
    if knob.kind == "fraction":
        return replace(component, fraction=round(value, 5))
    others = tuple((name, amount) for name, amount in component.exchanges if name != knob.detail)
    return replace(component, exchanges=(*others, (str(knob.detail), round(value, 5))))


def _column(component: Component | None, view: View) -> FloatArray:
    return np.zeros(view.two_theta.size) if component is None else component_column(component, view)


def _phase_knobs(candidate: Candidate, place: int, exchanges: bool) -> list[Knob]:
    """Parameters of one phase: a spacing per state, stack height, mixing fraction, exchange variables."""
    shown = [(k, c) for k, c in enumerate(candidate.components) if c is not None and c.states]
    if not shown:
        return []
    phase = load_phase(candidate.phase)
    knobs: list[Knob] = []
    states: dict[tuple[int, str], list[int]] = {}
    for k, component in shown:
        for position, state in enumerate(component.states):
            states.setdefault((position, state), []).append(k)
    for (position, state), scans in states.items():
        component = next(c for k, c in shown if k == scans[0])
        low, high = spacing_limits(component)[position]
        if high - low > 0.005:
            value = float(np.clip(component.spacings[position], low + 1e-3, high - 1e-3))
            name, half, middle = f"d{position}_{state}_p{place}", (high - low) / 2, (high + low) / 2
            knobs.append(Knob(name, "spacing", value, low, high, half, middle, place, tuple(scans), position))
    every = tuple(k for k, _ in shown)
    knobs += _texture_knobs(phase, shown[0][1], place, every)
    if exchanges:
        knobs += _exchange_knobs(phase, dict(shown[0][1].exchanges), place, every)
    return knobs


def _texture_knobs(phase: Phase, component: Component, place: int, scans: tuple[int, ...]) -> list[Knob]:
    knobs = []
    variable = phase.variable("mean_layers")
    if variable is not None and variable.maximum > variable.minimum:
        low, high = np.log(variable.minimum), np.log(variable.maximum)
        value = float(np.clip(np.log(component.mean_layers), low + 1e-3, high - 1e-3))
        knobs.append(Knob(f"layers_p{place}", "layers", value, low, high, (high - low) / 2, value, place, scans))
    if component.fraction is not None and phase.stack is not None:
        low, _, high = phase.stack.fraction
        value = float(np.clip(component.fraction, low + 1e-3, high - 1e-3))
        knobs.append(Knob(f"fraction_p{place}", "fraction", value, low, high, None, 0.0, place, scans))
    return knobs


def _exchange_knobs(phase: Phase, start: dict[str, float], place: int, scans: tuple[int, ...]) -> list[Knob]:
    knobs = []
    for v in phase.variables:
        if v.kind != "exchange" or not v.fitted or v.maximum <= v.minimum:
            continue
        value = float(np.clip(start.get(v.id, v.typical), v.minimum + 1e-3, v.maximum - 1e-3))
        prior = (v.maximum - v.minimum) / 3
        knobs.append(
            Knob(f"{v.id}_p{place}", "exchange", value, v.minimum, v.maximum, prior, v.typical, place, scans, v.id)
        )
    return knobs


def composition_shows(candidates: Sequence[Candidate]) -> bool:
    """Whether some candidate's composition can be read from basal intensities: iron of micas and chlorites."""
    return any(load_phase(candidate.phase).group in _EXCHANGE_GROUPS for candidate in candidates)


def build_model(
    prepared: Sequence[Prepared],
    candidates: Sequence[Candidate],
    *,
    movable: Sequence[int] | None = None,
    exchanges: bool = False,
    known: Collection[str] = (),
) -> SampleModel:
    """Set up the parameters of a sample.

    Parameters
    ----------
    prepared : sequence of Prepared
        Scans with start values of displacement, orientation spread and width in their views.
    candidates : sequence of Candidate
    movable : sequence of int, optional
        Candidates whose own parameters may move; all when left out.
    exchanges : bool
        Whether exchange variables (iron content ...) move too.
    known : collection of str
        Phases whose composition is known and stays.

    Returns
    -------
    SampleModel
    """
    knobs: list[Knob] = []
    if any(item.scan.mount == "oriented" for item in prepared):
        low, high = np.log(SPREAD_LIMITS[0]), np.log(SPREAD_LIMITS[1])
        value = float(np.log(prepared[0].view.orientation_spread))
        oriented = tuple(k for k, item in enumerate(prepared) if item.scan.mount == "oriented")
        knobs.append(Knob("spread", "spread", value, low, high, 0.35, float(np.log(12.0)), -1, oriented))
    powders = tuple(k for k, item in enumerate(prepared) if item.scan.mount == "random")
    if powders and any(load_phase(candidate.phase).is_sheet_silicate for candidate in candidates):
        low, high = np.log(_MARCH_LIMITS[0]), np.log(_MARCH_LIMITS[1])
        knobs.append(Knob("march", "march", -0.02, low, high, 0.25, 0.0, -1, powders))
    everywhere = tuple(range(len(prepared)))
    knobs.append(Knob("width", "width", 0.0, np.log(_WIDTH_LIMITS[0]), np.log(_WIDTH_LIMITS[1]), 0.7, 0.0, -1, everywhere))
    for k, item in enumerate(prepared):
        value = float(np.clip(item.view.displacement, -DISPLACEMENT_LIMIT + 0.01, DISPLACEMENT_LIMIT - 0.01))
        knobs.append(
            Knob(f"displacement_s{k}", "displacement", value, -DISPLACEMENT_LIMIT, DISPLACEMENT_LIMIT, 0.15, 0.0, -1, (k,))
        )
    for place in range(len(candidates)) if movable is None else movable:
        knobs += _phase_knobs(candidates[place], place, exchanges and candidates[place].phase not in known)
    return SampleModel(tuple(prepared), tuple(candidates), tuple(knobs))


@dataclass(frozen=True, eq=False)
class Evaluation:
    """The model at one point.

    Attributes
    ----------
    values : ndarray, shape (p,)
    views : tuple of View
    columns : tuple of ndarray, each (n_k, j)
    amounts : ndarray, shape (j,)
    scales : ndarray, shape (k,)
    chi_square : float
        Without priors.
    """

    values: FloatArray
    views: tuple[View, ...]
    columns: tuple[FloatArray, ...]
    amounts: FloatArray
    scales: FloatArray
    chi_square: float


def knob_derivative(model: SampleModel, evaluation: Evaluation, number: int) -> dict[int, FloatArray]:
    """Derivative of the calculated scans with respect to one parameter, per scan it touches.

    What moves all columns alike (spread, width, displacement) acts on their sum; a phase's own parameter moves its own
    column only. That is what keeps a derivative as cheap as one column.

    Parameters
    ----------
    model : SampleModel
    evaluation : Evaluation
    number : int
        Place of the knob.

    Returns
    -------
    dict of int to ndarray, shape (n_k,)
    """
    knob, value = model.knobs[number], float(evaluation.values[number])
    views = evaluation.views
    out: dict[int, FloatArray] = {}
    if knob.phase < 0:
        for k in knob.scans:
            out[k] = _instrument_derivative(model, evaluation, knob, k, views[k])
        return out
    amount = evaluation.amounts[knob.phase]
    if amount <= 0:
        return {k: np.zeros(views[k].two_theta.size) for k in knob.scans}
    step = _difference(knob, value)
    changed = evaluation.values.copy()
    changed[number] = value + step
    for k in knob.scans:
        new = _column(model.component(knob.phase, k, changed), views[k])
        out[k] = amount * evaluation.scales[k] * (new - evaluation.columns[k][:, knob.phase]) / step
    return out


def _difference(knob: Knob, value: float) -> float:
    size = {"spacing": 2e-3, "layers": 0.02, "fraction": 5e-3, "exchange": 0.03}[knob.kind]
    return size if value + size <= knob.high else -size


def _instrument_derivative(model: SampleModel, evaluation: Evaluation, knob: Knob, k: int, view: View) -> FloatArray:
    total = evaluation.scales[k] * (evaluation.columns[k] @ evaluation.amounts)
    two_theta = view.two_theta
    if knob.kind == "displacement":
        slope = np.gradient(total, two_theta)
        return np.asarray(-slope * displacement_shift(two_theta, 1.0, view.grid.instrument))
    if knob.kind == "spread":
        if view.mount == "random":
            return np.zeros(two_theta.size)
        # companions lie at random whatever the spread of the plates is
        plates = np.array([bool(load_phase(c.phase).is_sheet_silicate) for c in model.candidates])
        moved = evaluation.scales[k] * (evaluation.columns[k] @ (evaluation.amounts * plates))
        spread, instrument = view.orientation_spread, view.grid.instrument
        step = 0.02
        new = lorentz_factor(two_theta, spread * np.exp(step), instrument)
        return np.asarray(moved * (new / lorentz_factor(two_theta, spread, instrument) - 1) / step)
    step = 0.02
    if knob.kind == "march":
        turned_view = replace(view, march=view.march * float(np.exp(step)))
        return np.asarray((_total(model, evaluation, k, turned_view) - total) / step)
    wider = replace(view, fwhm=view.width * float(np.exp(step)))
    return np.asarray((_total(model, evaluation, k, wider) - total) / step)


def _total(model: SampleModel, evaluation: Evaluation, k: int, view: View) -> FloatArray:
    """Calculated scan seen through another view: basal curves are added up first and smeared once."""
    curve = np.zeros(view.grid.two_theta.size)
    rest = np.zeros(view.two_theta.size)
    for j, amount in enumerate(evaluation.amounts):
        component = model.component(j, k, evaluation.values)
        if amount <= 0 or component is None:
            continue
        if view.mount == "random" or not component.states:
            rest += amount * component_column(component, view)
        else:
            curve += amount * component_intensity(component, view.grid)
    return np.asarray(evaluation.scales[k] * (view.seen(curve) + rest))
