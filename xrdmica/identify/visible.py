"""What may be claimed: a phase kept by the fit must show something that nothing else kept explains."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations

from xrdmica.crystals.library import load_phase
from xrdmica.identify.evidence import ledger_for
from xrdmica.identify.search import Arena, Selection
from xrdmica.identify.sets import among, twins
from xrdmica.matching.model import build_model
from xrdmica.matching.solve import fit_model

__all__ = ["only_visible"]

# A look-alike of a kept phase that is needed for less than this share of its twin's lines only mends their heights.
_MEND, _MEND_RARE = 0.1, 0.25
_BADLY = 500.0  # rise of chi-square from which a phase without a line of its own stays
_DESPITE_MISSING = 10.0  # times that, from which one stays although as many of its lines are missing as are seen


def only_visible(arena: Arena, selection: Selection, labels: Sequence[str]) -> Selection:
    """Drop what only fills in under the lines of other phases: it cannot be claimed, and the rest must do without it."""
    powder = all(item.scan.mount == "random" for item in arena.prepared)
    mending = _mending(arena, selection)
    if mending:
        return only_visible(arena, among(arena, [a for a in selection.active if a not in mending]), labels)
    hidden = [a for a in selection.active if _unclaimable(arena, selection, a, labels, powder)]
    if not hidden:
        return selection
    weakest = min(hidden, key=lambda a: float(selection.need[a].sum()))
    return only_visible(arena, among(arena, [a for a in selection.active if a != weakest]), labels)


def _mending(arena: Arena, selection: Selection) -> set[int]:
    """Kept candidates that stand at the place of a look-alike and only mend its calculated heights."""
    out: set[int] = set()
    needed: set[int] = set()
    for one, two in combinations(selection.active, 2):
        weak, strong = sorted((one, two), key=lambda a: float(selection.need[a].sum()))
        if strong in out or weak in out or weak in needed or not twins(arena, weak, strong):
            continue
        rare = load_phase(arena.candidates[weak].phase).occurrence == "rare"
        if float(selection.need[weak].sum()) >= (_MEND_RARE if rare else _MEND) * float(selection.need[strong].sum()):
            continue
        kept = not rare and _needed_whatever_the_composition(arena, selection, weak)
        (needed if kept else out).add(weak)
    return out


def _needed_whatever_the_composition(arena: Arena, selection: Selection, place: int) -> bool:
    """Whether the other phases, with their composition free, still cannot do without a candidate.

    Iron in the octahedra changes the heights of basal lines of micas and chlorites: what that can mend is no second phase.
    """
    badly = _BADLY * selection.noise
    if float(selection.need[place].sum()) < badly:
        return False
    prepared = [item.spread(item.view.orientation_spread * selection.factor) for item in arena.prepared]
    rest = [arena.candidates[a] for a in selection.active if a != place]
    fitted = fit_model(build_model(prepared, rest, exchanges=True), rounds=8)
    return fitted.evaluation.chi_square - selection.fit.chi_square > badly


def _unclaimable(arena: Arena, selection: Selection, place: int, labels: Sequence[str], powder: bool) -> bool:
    """Whether a kept candidate has nothing to show: no line of its own, more missing than found, no first line in a powder.

    One that is needed badly stays all the same: two phases may share every line and still both be there, and what stands
    for a very strong line may lack others because its composition is not yet right.
    """
    ledger = ledger_for(arena, selection, place, labels)
    badly = float(selection.need[place].sum()) / (_BADLY * selection.noise)
    phase = load_phase(arena.candidates[place].phase)
    if ledger.clear_lines == 0:
        return powder or phase.occurrence == "rare" or badly < 1
    if not phase.is_sheet_silicate:
        return False
    if powder and not ledger.first_line:
        return True
    return ledger.missing_lines >= ledger.clear_lines and (powder or badly < _DESPITE_MISSING)
