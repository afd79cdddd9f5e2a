"""Sets of candidates: part of an arena, a fit of a chosen set, and which candidates stand at the same place."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from xrdmica.crystals.library import load_phase
from xrdmica.identify.search import Arena, Selection, select
from xrdmica.matching.linear import tied_fit

__all__ = ["among", "chi_square_of", "held_as_is", "neighbours", "part", "twins"]

_NEIGHBOUR = 0.45  # angstrom


def part(arena: Arena, keep: Sequence[int]) -> Arena:
    """The arena with some of its candidates only."""
    return Arena(
        arena.prepared,
        tuple(arena.candidates[i] for i in keep),
        tuple(a[:, list(keep)] for a in arena.columns),
        {f: tuple(s.subset(keep) for s in systems) for f, systems in arena.systems.items()},
    )


def among(arena: Arena, places: Sequence[int]) -> Selection:
    """The selection from some candidates only, with places of the whole arena."""
    found = select(part(arena, places))
    return replace(
        found,
        active=tuple(places[a] for a in found.active),
        need={places[a]: need for a, need in found.need.items()},
    )


def held_as_is(arena: Arena, active: Sequence[int]) -> Selection:
    """A fixed set of candidates with its fit, nothing tested."""
    fit = tied_fit([s.subset(active) for s in arena.systems[1.0]])
    noise = max(1.0, fit.chi_square / max(arena.points, 1))
    return Selection(tuple(active), 1.0, fit, {}, noise)


def neighbours(arena: Arena, one: int, two: int) -> bool:
    """Whether two candidates have their first lines at nearly the same place in some scan."""
    pairs = zip(arena.candidates[one].components, arena.candidates[two].components, strict=True)
    return any(
        a is not None and b is not None and bool(a.spacings and b.spacings) and abs(a.spacings[0] - b.spacings[0]) < _NEIGHBOUR
        for a, b in pairs
    )


def twins(arena: Arena, one: int, two: int) -> bool:
    """Whether two candidates are look-alikes by their files, or stand at the same place and one of them is rare."""
    first, second = load_phase(arena.candidates[one].phase), load_phase(arena.candidates[two].phase)
    listed = any(x.id == second.id for x in first.look_alikes) or any(x.id == first.id for x in second.look_alikes)
    rare = "rare" in (first.occurrence, second.occurrence)
    return (listed or rare) and neighbours(arena, one, two)


def chi_square_of(arena: Arena, selection: Selection, active: Sequence[int]) -> float:
    """Chi-square of some candidates alone; of the background alone without any."""
    systems = arena.systems[selection.factor]
    return tied_fit([s.subset(active) for s in systems]).chi_square if active else sum(s.energy for s in systems)
