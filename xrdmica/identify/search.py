"""Competing sets of phases compared by fit: the fewest that explain all scans of a sample together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.columns import Component, component_columns
from xrdmica.diffraction.optics import lorentz_factor
from xrdmica.identify.align import fitted_spacing
from xrdmica.identify.candidates import Hopeful
from xrdmica.matching.linear import ScanSystem, TiedFit, nonnegative, system, tied_fit
from xrdmica.matching.model import Candidate, build_model, spacing_limits
from xrdmica.matching.prepare import Prepared
from xrdmica.matching.solve import fit_model

__all__ = ["KEEP", "RARE_FACTOR", "Arena", "Selection", "build_arena", "inherited", "refined", "select", "settle", "swapped"]

_WIDTHS = (0.6, 1.6)  # factors on the usual stack height tried at first
_SPREAD_FACTORS = (0.7, 1.0, 1.4)
KEEP = 40.0  # fall of chi-square below which a phase is not needed
RARE_FACTOR = 1.6  # a rare phase has to be that much better supported
_COARSE = 6.0  # how much more is asked before the refinement, when nothing is well placed yet
_NEIGHBOUR = 0.3  # angstrom


@dataclass(frozen=True, eq=False)
class Arena:
    """Everything needed to compare any sets of candidates quickly.

    Attributes
    ----------
    prepared : tuple of Prepared, length k
    candidates : tuple of Candidate, length j
    columns : tuple of ndarray, length k, each (n_k, j)
        At the orientation spread of the views.
    systems : dict of float to tuple of ScanSystem
        Normal equations per factor on the orientation spread.
    """

    prepared: tuple[Prepared, ...]
    candidates: tuple[Candidate, ...]
    columns: tuple[NDArray[np.float64], ...]
    systems: dict[float, tuple[ScanSystem, ...]]

    @property
    def points(self) -> int:
        """Points minus background terms of all scans."""
        return sum(s.points for s in self.systems[1.0])


@dataclass(frozen=True, eq=False)
class Selection:
    """A set of candidates with its best fit.

    Attributes
    ----------
    active : tuple of int
        Places of the candidates kept.
    factor : float
        Factor on the orientation spread that fits best of those tried.
    fit : TiedFit
    need : dict of int to ndarray, shape (k,)
        For each kept candidate, the rise of chi-square per scan when it is left out.
    noise : float
        Reduced chi-square of the fit, at least 1: what a fall of chi-square is measured against.
    """

    active: tuple[int, ...]
    factor: float
    fit: TiedFit
    need: dict[int, NDArray[np.float64]]
    noise: float

    def amount(self, place: int) -> float:
        """Share of a kept candidate, 0 for others."""
        return float(self.fit.amounts[self.active.index(place)]) if place in self.active else 0.0


def _spread_ratio(item: Prepared, factor: float) -> NDArray[np.float64]:
    """Change of an oriented scan's columns with the orientation spread; smooth, so that it may follow the smearing."""
    if item.scan.mount == "random" or factor == 1.0:
        return np.ones(item.scan.two_theta.size)
    instrument, spread = item.view.grid.instrument, item.view.orientation_spread
    new = lorentz_factor(item.scan.two_theta, spread * factor, instrument)
    return np.asarray(new / lorentz_factor(item.scan.two_theta, spread, instrument))


def _widened(component: Component) -> tuple[Component, ...]:
    phase = load_phase(component.phase)
    variable = phase.variable("mean_layers")
    # a rare phase takes its stack height from the common one whose place it would take
    if variable is None or not component.states or component.fraction is not None or phase.occurrence == "rare":
        return (component,)
    layers = [min(max(component.mean_layers * w, variable.minimum), variable.maximum) for w in _WIDTHS]
    return tuple(replace(component, mean_layers=value) for value in dict.fromkeys(layers))


def _options(hopeful: Hopeful, prepared: Sequence[Prepared]) -> list[tuple[Component, ...]]:
    """Options per scan with spacings as the peaks show them, at several stack heights."""
    out = []
    for options, lines, item in zip(hopeful.options, hopeful.lines, prepared, strict=True):
        placed = [fitted_spacing(option, found, item) for option, found in zip(options, lines, strict=True)]
        out.append(tuple(wide for component in placed for wide in _widened(component)))
    return out


def _first_guess(options: Sequence[tuple[Component, ...]], stacks: Sequence[bool], item: Prepared) -> list[NDArray[np.float64]]:
    """Strength in one scan of every option of every phase, all competing.

    A stack with next to no second layer imitates a pure phase: pure phases compete once more without the stacks.
    """
    flat = [component for phase in options for component in phase]
    if not flat:
        return [np.zeros(0) for _ in options]
    equations = system(component_columns(flat, item.view), item.scan.counts, item.weight, item.basis)
    pure = [place for place, component in enumerate(flat) if component.fraction is None]
    among_all, alone = _strengths(equations), np.zeros(len(flat))
    alone[pure] = _strengths(equations.subset(pure))
    edges = pairwise(np.cumsum([0, *(len(phase) for phase in options)]))
    return [(among_all if stack else alone)[a:b] for stack, (a, b) in zip(stacks, edges, strict=True)]


def _strengths(equations: ScanSystem) -> NDArray[np.float64]:
    """Height of each column in the best fit; one that got nothing still ranks by how well it alone would do."""
    size = np.sqrt(np.maximum(np.diag(equations.gram), 1e-300))
    strength = nonnegative(equations.gram, equations.moment) * size
    return np.asarray(strength + 1e-6 * np.maximum(equations.moment, 0.0) / size)


def _mean(pairs: Sequence[tuple[float, float]]) -> float | None:
    if not pairs:
        return None
    values, weights = np.array(pairs).T
    return float(np.average(values, weights=weights)) if weights.sum() > 0 else float(values.mean())


def _choose(options: Sequence[Sequence[Component]], scores: Sequence[NDArray[np.float64]]) -> tuple[Component | None, ...]:
    """Pick a state per scan, and one stack height and one mixing fraction for all scans."""
    chosen: list[Component | None] = []
    layers: list[tuple[float, float]] = []
    fractions: list[tuple[float, float]] = []
    for components, score in zip(options, scores, strict=True):
        by_state: dict[tuple[str, ...], float] = {}
        for component, value in zip(components, score, strict=True):
            by_state[component.states] = by_state.get(component.states, 0.0) + float(value)
            layers.append((float(np.log(component.mean_layers)), float(value)))
            if component.fraction is not None:
                fractions.append((component.fraction, float(value)))
        state = max(by_state, key=lambda name: by_state[name], default=None)
        chosen.append(next((c for c in components if c.states == state), None))
    height, fraction = _mean(layers), _mean(fractions)
    return tuple(None if one is None else _textured(one, height, fraction) for one in chosen)


def _textured(component: Component, height: float | None, fraction: float | None) -> Component:
    if component.states and height is not None:
        component = replace(component, mean_layers=float(np.exp(height)))
    return component if fraction is None else replace(component, fraction=round(fraction, 4))


def settle(hopeful: Sequence[Hopeful], prepared: Sequence[Prepared]) -> tuple[Candidate, ...]:
    """Choose states, spacings and stack heights for every plausible phase by letting options compete, scan by scan.

    Parameters
    ----------
    hopeful : sequence of Hopeful
    prepared : sequence of Prepared
        Aligned scans.

    Returns
    -------
    tuple of Candidate
    """
    plausible = [one for one in hopeful if one.plausible]
    options = [_options(one, prepared) for one in plausible]
    stacks = [one.phase.stack is not None for one in plausible]
    scores = [_first_guess([one[k] for one in options], stacks, item) for k, item in enumerate(prepared)]
    return tuple(
        Candidate(one.phase.id, _choose(options[j], [scores[k][j] for k in range(len(prepared))]))
        for j, one in enumerate(plausible)
    )


def build_arena(candidates: Sequence[Candidate], prepared: Sequence[Prepared]) -> Arena:
    """Set up the equations of all scans for some candidates.

    Parameters
    ----------
    candidates : sequence of Candidate
    prepared : sequence of Prepared

    Returns
    -------
    Arena
    """
    columns = tuple(
        component_columns([candidate.components[k] for candidate in candidates], item.view) for k, item in enumerate(prepared)
    )
    plates = np.array([load_phase(candidate.phase).is_sheet_silicate for candidate in candidates], dtype=bool)
    systems = {}
    for factor in _SPREAD_FACTORS:
        ratios = [np.where(plates[None, :], _spread_ratio(item, factor)[:, None], 1.0) for item in prepared]
        systems[factor] = tuple(
            system(a * ratio, item.scan.counts, item.weight, item.basis)
            for a, ratio, item in zip(columns, ratios, prepared, strict=True)
        )
    return Arena(tuple(prepared), tuple(candidates), columns, systems)


def _best_fit(
    arena: Arena, active: Sequence[int], factors: Sequence[float] = _SPREAD_FACTORS, scales: NDArray[np.float64] | None = None
) -> tuple[float, TiedFit]:
    """Orientation spread and fit that suit a set best; `scales` are those of a set much like it."""
    fits = []
    for factor in factors:
        fits.append((factor, tied_fit([s.subset(active) for s in arena.systems[factor]], scales)))
        scales = fits[-1][1].scales
    return min(fits, key=lambda pair: pair[1].chi_square)


def _threshold(arena: Arena, place: int) -> float:
    rare = load_phase(arena.candidates[place].phase).occurrence == "rare"
    return KEEP * (RARE_FACTOR if rare else 1.0)


def select(arena: Arena, *, coarse: bool = False) -> Selection:
    """Drop candidates one by one, the least needed first, until every one left is needed.

    Parameters
    ----------
    arena : Arena
    coarse : bool
        Ask for more, as befits candidates that are not yet refined.

    Returns
    -------
    Selection
    """
    active = list(range(len(arena.candidates)))
    strictness = _COARSE if coarse else 1.0
    factors: Sequence[float] = _SPREAD_FACTORS
    while True:
        factor, fit = _best_fit(arena, active, factors)
        idle = [a for a, w in zip(active, fit.amounts, strict=True) if w <= 0]
        if idle:
            active = [a for a in active if a not in idle]
            factors = (factor,)
            continue
        noise = max(1.0, fit.chi_square / max(arena.points, 1))
        need = {}
        for place in active:
            rest = [a for a in active if a != place]
            without = tied_fit([s.subset(rest) for s in arena.systems[factor]], fit.scales)
            need[place] = without.chi_squares - fit.chi_squares
        weakest = min(active, key=lambda a: float(need[a].sum()) / _threshold(arena, a), default=None)
        if weakest is None or float(need[weakest].sum()) > _threshold(arena, weakest) * noise * strictness:
            return Selection(tuple(active), factor, fit, need, noise)
        active.remove(weakest)
        factors = _SPREAD_FACTORS if len(active) < 9 else (factor,)


def swapped(arena: Arena, selection: Selection, out: int, into: int, hopeless: float = float("inf")) -> float:
    """Rise of chi-square when one kept candidate is replaced by another, at its own best orientation spread.

    Parameters
    ----------
    arena, selection
        The comparison so far.
    out, into : int
        Places of the candidates.
    hopeless : float
        Rise at the present orientation spread from which others are not tried.
    """
    active = [*(a for a in selection.active if a not in (out, into)), into]
    _, here = _best_fit(arena, active, (selection.factor,), selection.fit.scales)
    rise = here.chi_square - selection.fit.chi_square
    if rise > hopeless:
        return rise
    others = [factor for factor in _SPREAD_FACTORS if factor != selection.factor]
    _, fit = _best_fit(arena, active, others, here.scales)
    return min(here, fit, key=lambda one: one.chi_square).chi_square - selection.fit.chi_square


def refined(arena: Arena, selection: Selection, rounds: int = 7) -> tuple[tuple[Prepared, ...], tuple[Candidate, ...]]:
    """Fit the kept candidates, and carry what was learnt over to the views and to the other candidates.

    Parameters
    ----------
    arena : Arena
    selection : Selection
    rounds : int
        Steps of the fit.

    Returns
    -------
    prepared : tuple of Prepared
        With fitted displacement, orientation spread and width.
    candidates : tuple of Candidate
        In the arena's order; those not kept take spacing and stack height of a kept one that stands at the same place.
    """
    if not selection.active:
        return arena.prepared, arena.candidates
    start = [item.spread(item.view.orientation_spread * selection.factor) for item in arena.prepared]
    # composition stays at its usual value here: freed this early it takes up what belongs to other phases
    model = build_model(start, [arena.candidates[a] for a in selection.active])
    fitted = fit_model(model, rounds=rounds)
    values = fitted.evaluation.values
    views = model.views(values)
    prepared = tuple(replace(item, view=view) for item, view in zip(arena.prepared, views, strict=True))
    scans = range(len(prepared))
    kept = {
        place: Candidate(arena.candidates[place].phase, tuple(model.component(j, k, values) for k in scans))
        for j, place in enumerate(selection.active)
    }
    candidates = tuple(kept.get(i) or inherited(one, tuple(kept.values())) for i, one in enumerate(arena.candidates))
    return prepared, candidates


def inherited(candidate: Candidate, kept: Sequence[Candidate]) -> Candidate:
    """Give a candidate the spacing and stack height of the kept one whose lines it would have to explain."""
    variable = load_phase(candidate.phase).variable("mean_layers")
    out = []
    for k, component in enumerate(candidate.components):
        if component is not None and component.states and component.fraction is None:
            for other in (one.components[k] for one in kept):
                if other is None or not other.states or other.fraction is not None:
                    continue
                if abs(other.spacings[0] - component.spacings[0]) < _NEIGHBOUR:
                    low, high = spacing_limits(component)[0]
                    spacing = min(max(other.spacings[0], low), high)
                    layers = other.mean_layers
                    if variable is not None:
                        layers = min(max(layers, variable.minimum), variable.maximum)
                    component = replace(component, spacings=(spacing,), mean_layers=layers)
        out.append(component)
    return replace(candidate, components=tuple(out))
