"""The contest between sets of phases: from the coarse choice to one that no exchange of look-alikes would better."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations

from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.optics import Instrument
from xrdmica.identify.align import align
from xrdmica.identify.candidates import Hopeful, hopefuls
from xrdmica.identify.evidence import ledger_for
from xrdmica.identify.search import KEEP, RARE_FACTOR, Arena, Selection, build_arena, inherited, refined, select, settle, swapped
from xrdmica.identify.series import SERIES_SAME, blended, siblings
from xrdmica.identify.sets import among, chi_square_of, held_as_is, neighbours, part
from xrdmica.identify.strangers import with_strangers
from xrdmica.identify.visible import only_visible
from xrdmica.matching.linear import tied_fit
from xrdmica.matching.model import Candidate
from xrdmica.matching.prepare import Prepared, prepare
from xrdmica.scans.scan import Sample

__all__ = ["compare", "rivals"]

SWAP = 100.0  # rise of chi-square below which another phase would do as well
_TRIALS = 3
_GOOD = 1.1  # reduced chi-square below which nothing is left to explain
# Composition and form factors change calculated heights by some percent, which no count cures: a rival that explains all
# but this share of what a phase explains is not told from it.
_SAME = 0.025
_FAR = 0.1  # mm of displacement by which a first choice of phases may have bent the scans
_HOPEFUL = 0.4  # share of what several phases explain that one may miss before it is refined


def compare(sample: Sample, phases: Sequence[Phase], instrument: Instrument) -> tuple[tuple[Hopeful, ...], Arena, Selection]:
    """Candidates, coarse choice among common phases, refinement, then the choice among all."""
    prepared = prepare(sample, instrument)
    considered = hopefuls(phases, prepared)
    prepared = with_strangers(considered, align(considered, prepared))
    prepared_first, candidates = prepared, settle(considered, prepared)
    arena = build_arena(candidates, prepared)
    usual = _without_rare(arena)
    selection = select(usual, coarse=True)
    prepared, changed = refined(usual, selection)
    usual, kept = _better_neighbours(build_arena(changed, prepared), selection.active)
    placed = {c.phase: c for c in usual.candidates}
    held = [usual.candidates[a] for a in kept]
    rest = [placed.get(c.phase) or inherited(c, held) for c in candidates]
    arena = build_arena(rest, usual.prepared)
    chosen = select(arena)
    if {arena.candidates[a].phase for a in chosen.active} != {c.phase for c in held}:
        arena, chosen = _placed_again(arena, chosen, candidates, prepared_first)
    labels = sample.labels
    arena, chosen = _one_for_several(arena, chosen)
    chosen = only_visible(arena, _usual_first(arena, _simplified(arena, chosen), labels), labels)
    return considered, *_fair_contest(*_completed(arena, chosen, labels), labels)


def _placed_again(
    arena: Arena, chosen: Selection, candidates: Sequence[Candidate], prepared: Sequence[Prepared]
) -> tuple[Arena, Selection]:
    """Refine a set that differs from the one the scans were placed by, from there and from the start, and take the better."""
    moved = max(abs(a.view.displacement - b.view.displacement) for a, b in zip(arena.prepared, prepared, strict=True))
    starts = [(arena, 5)]
    if moved > _FAR:
        starts.append((build_arena(candidates, prepared), 10))
    found = []
    for start, rounds in starts:
        views, changed = refined(start, held_as_is(start, chosen.active), rounds=rounds)
        again = build_arena(changed, views)
        found.append((again, select(again)))
    return min(found, key=lambda pair: pair[1].fit.chi_square + KEEP * len(pair[1].active) * pair[1].noise)


def _without_rare(arena: Arena) -> Arena:
    """The arena without rare phases: what is usual has the first say in placing the scans."""
    keep = [i for i, c in enumerate(arena.candidates) if load_phase(c.phase).occurrence == "common"]
    return part(arena, keep)


def _better_neighbours(arena: Arena, active: tuple[int, ...]) -> tuple[Arena, tuple[int, ...]]:
    """Exchange kept phases for neighbours that fit better once refined: the coarse choice may have taken the wrong one.

    Parameters
    ----------
    arena : Arena
        Refined for the kept phases.
    active : tuple of int
        Their places.

    Returns
    -------
    arena : Arena
    active : tuple of int
    """
    held = held_as_is(arena, active)
    trials = []
    for place in active:
        for other in range(len(arena.candidates)):
            if other not in active and neighbours(arena, place, other):
                swap = tuple(other if a == place else a for a in active)
                trials.append((held_as_is(arena, swap).fit.chi_square, swap))
    for _, swap in sorted(trials)[:_TRIALS]:
        if held.noise < _GOOD:
            break
        prepared, candidates = refined(arena, held_as_is(arena, swap), rounds=5)
        trial = build_arena(candidates, prepared)
        result = held_as_is(trial, swap)
        if result.fit.chi_square < held.fit.chi_square:
            return _better_neighbours(trial, swap)
    return arena, active


def _simplified(arena: Arena, selection: Selection) -> Selection:
    """Put one phase in place of two neighbours where that costs next to nothing."""
    others = [i for i in range(len(arena.candidates)) if i not in selection.active]
    for one, two in combinations(selection.active, 2):
        if not neighbours(arena, one, two):
            continue
        for place in others:
            if not neighbours(arena, one, place):
                continue
            active = [a for a in selection.active if a not in (one, two)] + [place]
            fit = tied_fit([s.subset(active) for s in arena.systems[selection.factor]])
            if fit.chi_square - selection.fit.chi_square < KEEP * selection.noise:
                return _simplified(arena, among(arena, active))
    return selection


def _one_for_several(arena: Arena, selection: Selection, tries: int = 3) -> tuple[Arena, Selection]:
    """Put one phase, refined, in place of all kept neighbours: usual phases mixed can imitate one that is less usual.

    Parameters
    ----------
    arena, selection
        As compared so far.
    tries : int
        Refinements allowed.

    Returns
    -------
    Arena, Selection
    """
    single = {a for a in range(len(arena.candidates)) if _single_lines(arena, a)}
    trials = []
    for place in single:
        near = [a for a in selection.active if a in single and (a == place or neighbours(arena, a, place))]
        name = arena.candidates[place].phase
        family = any(siblings(name, arena.candidates[a].phase) for a in near)
        if len(near) < 2 or (place in near and not family and load_phase(name).occurrence == "common"):
            continue
        rest = [a for a in selection.active if a not in near]
        lost = chi_square_of(arena, selection, rest)
        active = (*rest, place)
        start = arena if not family else _with_candidate(arena, place, blended(arena, selection, place, near))
        rise = held_as_is(start, active).fit.chi_square - selection.fit.chi_square
        if rise < _HOPEFUL * (lost - selection.fit.chi_square):
            # two members of a series can always do a little better than one whose composition is only about right
            allowed = max(KEEP * selection.noise, SERIES_SAME * (lost - selection.fit.chi_square) if family else 0.0)
            trials.append((rise, active, start, allowed))
    for _, active, start, allowed in sorted(trials, key=lambda trial: trial[0])[:tries]:
        prepared, candidates = refined(start, held_as_is(start, active), rounds=6)
        fresh = build_arena(candidates, prepared)
        held = held_as_is(fresh, active)
        if held.fit.chi_square < selection.fit.chi_square + allowed:
            return _one_for_several(fresh, among(fresh, active), tries)
    return arena, selection


def _with_candidate(arena: Arena, place: int, candidate: Candidate) -> Arena:
    """The arena with one candidate changed."""
    if candidate == arena.candidates[place]:
        return arena
    return build_arena([candidate if i == place else c for i, c in enumerate(arena.candidates)], arena.prepared)


def _single_lines(arena: Arena, place: int) -> bool:
    """Whether a candidate is one kind of layer, with lines that can be neighbours of others."""
    return all(c is None or (bool(c.spacings) and c.fraction is None) for c in arena.candidates[place].components)


def _usual_first(arena: Arena, selection: Selection, labels: Sequence[str]) -> Selection:
    """Put a common phase in place of a rare one wherever it does nearly as well."""
    for place in selection.active:
        if load_phase(arena.candidates[place].phase).occurrence == "common":
            continue
        poor = ledger_for(arena, selection, place, labels).clear_lines < 2
        common, _ = rivals(arena, selection, place, anywhere=poor)
        costs = {i: swapped(arena, selection, place, i) for i, c in enumerate(arena.candidates) if c.phase in common}
        if costs:
            best = min(costs, key=lambda i: costs[i])
            return _usual_first(arena, among(arena, [*(a for a in selection.active if a != place), best]), labels)
    return selection


def _completed(arena: Arena, selection: Selection, labels: Sequence[str], tries: int = 2) -> tuple[Arena, Selection]:
    """Take in what was dropped too early: once the rest is well placed, a phase may be needed after all."""
    if not selection.active or tries <= 0:
        return arena, selection
    gains = {}
    for place in range(len(arena.candidates)):
        if place not in selection.active:
            fit = tied_fit([s.subset([*selection.active, place]) for s in arena.systems[selection.factor]])
            weight = RARE_FACTOR if load_phase(arena.candidates[place].phase).occurrence == "rare" else 1.0
            gains[place] = (selection.fit.chi_square - fit.chi_square) / weight
    best = max(gains, key=lambda a: gains[a], default=None)
    if best is None or gains[best] < 2 * KEEP * selection.noise:
        return arena, selection
    prepared, candidates = refined(arena, among(arena, [*selection.active, best]), rounds=5)
    fuller = build_arena(candidates, prepared)
    chosen = only_visible(fuller, _simplified(fuller, select(fuller)), labels)
    if chosen.fit.chi_square < selection.fit.chi_square - KEEP * selection.noise:
        return _completed(fuller, chosen, labels, tries - 1)
    return arena, selection


def _fair_contest(arena: Arena, selection: Selection, labels: Sequence[str], tries: int = 4) -> tuple[Arena, Selection]:
    """Refine close rivals too before one is preferred: a kept phase had the fit's attention, its rivals had not.

    Parameters
    ----------
    arena, selection
        As compared so far.
    labels : sequence of str
        Scan labels.
    tries : int
        Refinements allowed.

    Returns
    -------
    Arena, Selection
        With whatever did better in place.
    """
    for place in selection.active:
        common, _ = rivals(arena, selection, place, anywhere=False)
        for name in common:
            if tries <= 0:
                return arena, selection
            tries -= 1
            rival = next(i for i, c in enumerate(arena.candidates) if c.phase == name)
            trial = among(arena, [*(a for a in selection.active if a != place), rival])
            if rival not in trial.active:
                continue
            prepared, candidates = refined(arena, trial, rounds=5)
            better = build_arena(candidates, prepared)
            chosen = select(better)
            if chosen.fit.chi_square < selection.fit.chi_square - 1.0 and len(chosen.active) <= len(selection.active):
                return _fair_contest(better, only_visible(better, chosen, labels), labels, tries)
    return arena, selection


def rivals(
    arena: Arena, selection: Selection, place: int, *, anywhere: bool = False
) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Phases that would do nearly as well as a kept one: (common, rare); look-alikes and neighbours, or `anywhere`."""
    common: list[str] = []
    rare: list[str] = []
    look_alikes = {x.id for x in load_phase(arena.candidates[place].phase).look_alikes}
    for other in range(len(arena.candidates)):
        if other in selection.active:
            continue
        name = arena.candidates[other].phase
        if not anywhere and name not in look_alikes and not neighbours(arena, place, other):
            continue
        # a rival must also do most of what the kept one does, or everything would be one on a poor fit
        need = float(selection.need[place].sum())
        limit = max(min(SWAP * selection.noise, 0.5 * need), _SAME * need)
        if anywhere and neighbours(arena, place, other):
            # with so little of its own to show, whatever explains a fair part of the same line will do as well
            limit = 0.7 * need
        if swapped(arena, selection, place, other, hopeless=10 * limit) < limit:
            (common if load_phase(name).occurrence == "common" else rare).append(name)
    return tuple(common), tuple(rare)
