"""Members of one solid solution: a kept phase is named only if its neighbours in the series cannot be bent to fit as well."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from xrdmica.crystals.library import Phase, Variable, load_phase
from xrdmica.identify.search import KEEP, Arena, Selection, build_arena
from xrdmica.matching.linear import tied_fit
from xrdmica.matching.model import Candidate

__all__ = ["SERIES_SAME", "blended", "series_rivals", "siblings"]

SERIES_SAME = 0.007  # share of what a phase explains that a neighbour in its series may miss and still do as well


def series_rivals(arena: Arena, selection: Selection, place: int) -> tuple[str, ...]:
    """Members of the series of a kept phase that explain its lines as well at some composition of their own range.

    Parameters
    ----------
    arena, selection
        The finished comparison.
    place : int
        Kept candidate.

    Returns
    -------
    tuple of str
        Phase ids, common ones only.
    """
    own = load_phase(arena.candidates[place].phase)
    variable = _solution(own)
    if variable is None:
        return ()
    kept = {arena.candidates[a].phase for a in selection.active}
    found = []
    for other, candidate in enumerate(arena.candidates):
        phase = load_phase(candidate.phase)
        twin = _solution(phase)
        listed = any(look.id == phase.id for look in own.look_alikes)
        if candidate.phase in kept or not listed or twin is None or (twin.out, twin.into) != (variable.out, variable.into):
            continue
        if phase.occurrence == "common" and _fits_as_well(arena, selection, place, other, twin):
            found.append(phase.id)
    return tuple(found)


def siblings(one: str, two: str) -> bool:
    """Whether two phases are neighbours in one solid solution, look-alikes that differ by the same exchange."""
    first, second = load_phase(one), load_phase(two)
    a, b = _solution(first), _solution(second)
    listed = any(look.id == two for look in first.look_alikes) or any(look.id == one for look in second.look_alikes)
    return one != two and listed and a is not None and b is not None and (a.out, a.into) == (b.out, b.into)


def blended(arena: Arena, selection: Selection, place: int, near: Sequence[int]) -> Candidate:
    """A candidate with the mean composition of itself and its kept siblings, as far as its own range goes.

    Parameters
    ----------
    arena, selection
        The comparison so far.
    place : int
        Candidate.
    near : sequence of int
        Kept candidates it would stand for.
    """
    candidate = arena.candidates[place]
    variable = _solution(load_phase(candidate.phase))
    family = [a for a in near if a == place or siblings(candidate.phase, arena.candidates[a].phase)]
    amount = sum(selection.amount(a) for a in family)
    if variable is None or len(family) < 2 or amount <= 0:
        return candidate
    mean = sum(selection.amount(a) * _iron(arena.candidates[a]) for a in family) / amount
    return _at(candidate, candidate, variable, min(max(mean, variable.minimum), variable.maximum))


def _iron(candidate: Candidate) -> float:
    """Present value of a candidate's solid solution, in atoms per formula unit."""
    variable = _solution(load_phase(candidate.phase))
    if variable is None:
        return 0.0
    values = [dict(c.exchanges).get(variable.id) for c in candidate.components if c is not None and c.states]
    return next((v for v in values if v is not None), variable.typical)


def _solution(phase: Phase) -> Variable | None:
    return next((v for v in phase.variables if v.kind == "exchange" and v.fitted and v.site == "octahedral"), None)


def _fits_as_well(arena: Arena, selection: Selection, place: int, other: int, variable: Variable) -> bool:
    rest = [arena.candidates[a] for a in selection.active if a != place]
    trials = [_at(arena.candidates[other], arena.candidates[place], variable, v) for v in (variable.minimum, variable.maximum)]
    small = build_arena([*rest, *trials], arena.prepared)
    limit = max(KEEP * selection.noise, SERIES_SAME * float(selection.need[place].sum()))
    for k in range(len(trials)):
        active = [*range(len(rest)), len(rest) + k]
        best = min(tied_fit([s.subset(active) for s in systems]).chi_square for systems in small.systems.values())
        if best - selection.fit.chi_square < limit:
            return True
    return False


def _at(candidate: Candidate, kept: Candidate, variable: Variable, value: float) -> Candidate:
    """The candidate at a composition, where and as thick as the kept one stands."""
    components = []
    for one, like in zip(candidate.components, kept.components, strict=True):
        if one is None or not one.states:
            components.append(one)
            continue
        exchanges = tuple((name, value if name == variable.id else amount) for name, amount in one.exchanges)
        thick = one.mean_layers if like is None else like.mean_layers
        components.append(replace(one, exchanges=exchanges, mean_layers=thick))
    return replace(candidate, components=tuple(components))


