"""From scans to findings: which phases are present, which the scans cannot tell, and what would tell."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import combinations

from xrdmica.crystals.library import Phase, all_phases, load_phase
from xrdmica.diffraction.optics import Instrument
from xrdmica.identify.align import align
from xrdmica.identify.candidates import Hopeful, hopefuls
from xrdmica.identify.evidence import Ledger, ledger_for
from xrdmica.identify.search import KEEP, RARE_FACTOR, Arena, Selection, build_arena, refined, select, settle, swapped
from xrdmica.identify.strangers import with_strangers
from xrdmica.identify.unassigned import unassigned_lines
from xrdmica.identify.words import absent_reason, kept_reason, next_measurements, sample_notes
from xrdmica.matching.linear import tied_fit
from xrdmica.matching.prepare import prepare
from xrdmica.results import Alternative, Findings, PhaseFinding, Status
from xrdmica.scans.scan import Sample

__all__ = ["Examination", "examine", "identify"]

SWAP = 100.0  # rise of chi-square below which another phase would do as well
_TRACE = 0.025  # share of the sheet silicates below which a phase is called a trace
_NEIGHBOUR = 0.45  # angstrom
# layers whose spacing depends on what is between them are named only by what a treatment does to them (common practice)
_NEED_TREATMENT = ("smectite", "interstratified", "vermiculite")
_TRIALS = 3
_GOOD = 1.1  # reduced chi-square below which nothing is left to explain
_BADLY = 500.0  # rise of chi-square
_POOR = 4.0  # reduced chi-square
_TELLING = ("glycolated", "glycerolated", "heated")


@dataclass(frozen=True, eq=False)
class Examination:
    """Everything that came out of the comparison, for the estimate that follows.

    Attributes
    ----------
    sample : Sample
    arena : Arena
        Scans and candidates as refined.
    selection : Selection
    findings : Findings
    """

    sample: Sample
    arena: Arena
    selection: Selection
    findings: Findings


def _without_rare(arena: Arena) -> Arena:
    """The arena without rare phases: what is usual has the first say in placing the scans."""
    keep = [i for i, c in enumerate(arena.candidates) if load_phase(c.phase).occurrence == "common"]
    return _part(arena, keep)


def _part(arena: Arena, keep: Sequence[int]) -> Arena:
    return Arena(
        arena.prepared,
        tuple(arena.candidates[i] for i in keep),
        tuple(a[:, list(keep)] for a in arena.columns),
        {f: tuple(s.subset(keep) for s in systems) for f, systems in arena.systems.items()},
    )


def _compare(sample: Sample, phases: Sequence[Phase], instrument: Instrument) -> tuple[tuple[Hopeful, ...], Arena, Selection]:
    """Candidates, coarse choice among common phases, refinement, then the choice among all."""
    prepared = prepare(sample, instrument)
    considered = hopefuls(phases, prepared)
    prepared = with_strangers(considered, align(considered, prepared))
    candidates = settle(considered, prepared)
    arena = build_arena(candidates, prepared)
    usual = _without_rare(arena)
    selection = select(usual, coarse=True)
    prepared, changed = refined(usual, selection)
    usual, kept = _better_neighbours(build_arena(changed, prepared), selection.active)
    placed = {c.phase: c for c in usual.candidates}
    rest = [placed.get(c.phase, c) for c in candidates]
    arena = build_arena(rest, usual.prepared)
    chosen = select(arena)
    first = {usual.candidates[a].phase for a in kept}
    if {arena.candidates[a].phase for a in chosen.active} != first:
        prepared, rest_again = refined(arena, chosen, rounds=5)
        arena = build_arena(rest_again, prepared)
        chosen = select(arena)
    labels = sample.labels
    chosen = _only_visible(arena, _usual_first(arena, _simplified(arena, chosen), labels), labels)
    return considered, *_fair_contest(*_completed(arena, chosen, labels), labels)


def _usual_first(arena: Arena, selection: Selection, labels: Sequence[str]) -> Selection:
    """Put a common phase in place of a rare one wherever it does nearly as well."""
    for place in selection.active:
        if load_phase(arena.candidates[place].phase).occurrence == "common":
            continue
        poor = ledger_for(arena, selection, place, labels).clear_lines < 2
        common, _ = _rivals(arena, selection, place, anywhere=poor)
        costs = {i: swapped(arena, selection, place, i) for i, c in enumerate(arena.candidates) if c.phase in common}
        if costs:
            best = min(costs, key=lambda i: costs[i])
            return _usual_first(arena, _among(arena, [*(a for a in selection.active if a != place), best]), labels)
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
    prepared, candidates = refined(arena, _among(arena, [*selection.active, best]), rounds=5)
    fuller = build_arena(candidates, prepared)
    chosen = _only_visible(fuller, _simplified(fuller, select(fuller)), labels)
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
        common, _ = _rivals(arena, selection, place, anywhere=False)
        for name in common:
            if tries <= 0:
                return arena, selection
            tries -= 1
            rival = next(i for i, c in enumerate(arena.candidates) if c.phase == name)
            trial = _among(arena, [*(a for a in selection.active if a != place), rival])
            if rival not in trial.active:
                continue
            prepared, candidates = refined(arena, trial, rounds=5)
            better = build_arena(candidates, prepared)
            chosen = select(better)
            if chosen.fit.chi_square < selection.fit.chi_square - 1.0 and len(chosen.active) <= len(selection.active):
                return _fair_contest(better, _only_visible(better, chosen, labels), labels, tries)
    return arena, selection


def _only_visible(arena: Arena, selection: Selection, labels: Sequence[str]) -> Selection:
    """Drop what only fills in under the lines of other phases: it cannot be claimed, and the rest must do without it."""
    powder = all(item.scan.mount == "random" for item in arena.prepared)
    hidden = [a for a in selection.active if _unclaimable(arena, selection, a, labels, powder)]
    if not hidden:
        return selection
    weakest = min(hidden, key=lambda a: float(selection.need[a].sum()))
    return _only_visible(arena, _among(arena, [a for a in selection.active if a != weakest]), labels)


def _held(arena: Arena, active: Sequence[int]) -> Selection:
    """A fixed set of candidates with its fit, nothing tested."""
    fit = tied_fit([s.subset(active) for s in arena.systems[1.0]])
    noise = max(1.0, fit.chi_square / max(arena.points, 1))
    return Selection(tuple(active), 1.0, fit, {}, noise)


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
    held = _held(arena, active)
    trials = []
    for place in active:
        for other in range(len(arena.candidates)):
            if other not in active and _neighbours(arena, place, other):
                swap = tuple(other if a == place else a for a in active)
                trials.append((_held(arena, swap).fit.chi_square, swap))
    for _, swap in sorted(trials)[:_TRIALS]:
        if held.noise < _GOOD:
            break
        prepared, candidates = refined(arena, _held(arena, swap), rounds=5)
        trial = build_arena(candidates, prepared)
        result = _held(trial, swap)
        if result.fit.chi_square < held.fit.chi_square:
            return _better_neighbours(trial, swap)
    return arena, active


def _simplified(arena: Arena, selection: Selection) -> Selection:
    """Put one phase in place of two neighbours where that costs next to nothing."""
    others = [i for i in range(len(arena.candidates)) if i not in selection.active]
    for one, two in combinations(selection.active, 2):
        if not _neighbours(arena, one, two):
            continue
        for place in others:
            if not _neighbours(arena, one, place):
                continue
            active = [a for a in selection.active if a not in (one, two)] + [place]
            fit = tied_fit([s.subset(active) for s in arena.systems[selection.factor]])
            if fit.chi_square - selection.fit.chi_square < KEEP * selection.noise:
                return _simplified(arena, _among(arena, active))
    return selection


def _among(arena: Arena, places: Sequence[int]) -> Selection:
    """The selection from some candidates only, with places of the whole arena."""
    part = select(_part(arena, places))
    return replace(
        part,
        active=tuple(places[a] for a in part.active),
        need={places[a]: need for a, need in part.need.items()},
    )


def _neighbours(arena: Arena, one: int, two: int) -> bool:
    """Whether two candidates have their first lines at nearly the same place in some scan."""
    pairs = zip(arena.candidates[one].components, arena.candidates[two].components, strict=True)
    return any(
        a is not None and b is not None and bool(a.spacings and b.spacings) and abs(a.spacings[0] - b.spacings[0]) < _NEIGHBOUR
        for a, b in pairs
    )


def _unclaimable(arena: Arena, selection: Selection, place: int, labels: Sequence[str], powder: bool) -> bool:
    """Whether a kept candidate has nothing to show: no line of its own, more missing than found, no first line in a powder.

    One that is needed badly stays all the same: two phases may share every line and still both be there.
    """
    ledger = ledger_for(arena, selection, place, labels)
    if ledger.clear_lines == 0:
        rare = load_phase(arena.candidates[place].phase).occurrence == "rare"
        return powder or rare or float(selection.need[place].sum()) < _BADLY * selection.noise
    if not load_phase(arena.candidates[place].phase).is_sheet_silicate:
        return False
    return ledger.missing_lines >= ledger.clear_lines or (powder and not ledger.first_line)


def _rivals(
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
        if not anywhere and name not in look_alikes and not _neighbours(arena, place, other):
            continue
        # a rival must also do most of what the kept one does, or everything would be one on a poor fit
        need = float(selection.need[place].sum())
        limit = min(SWAP * selection.noise, 0.5 * need)
        if anywhere and _neighbours(arena, place, other):
            # with so little of its own to show, whatever explains a fair part of the same line will do as well
            limit = 0.7 * need
        if swapped(arena, selection, place, other, hopeless=10 * limit) < limit:
            (common if load_phase(name).occurrence == "common" else rare).append(name)
    return tuple(common), tuple(rare)


def _convincing(ledger: Ledger, conditions: int, doubtful: bool) -> bool:
    """Whether the lines suffice: two of its own, or one that moves with treatment or has a companion under other lines.

    A sheet silicate in a `doubtful` comparison (a powder of which much is not explained) never convinces: lines of
    unknown phases fall on its own by chance.
    """
    if doubtful:
        return False
    enough = ledger.clear_lines >= 2 or (
        ledger.clear_lines == 1 and (ledger.moved or (ledger.shared_lines >= 1 and conditions > 1))
    )
    return enough and ledger.missing_lines <= max(1, ledger.clear_lines // 2)


def _status(phase: Phase, convincing: bool, rivals: Sequence[str], share: float) -> Status:
    if not convincing or rivals:
        return "possible"
    return "trace" if phase.is_sheet_silicate and share < _TRACE else "present"


def _told_by(phase: str, other: str) -> str:
    for a, b in ((phase, other), (other, phase)):
        for look in load_phase(a).look_alikes:
            if look.id == b:
                return look.told_by
    return "a random powder with the 060 region, and a chemical analysis"


def _kept_finding(arena: Arena, selection: Selection, place: int, labels: Sequence[str], share: float) -> PhaseFinding:
    candidate = arena.candidates[place]
    phase = load_phase(candidate.phase)
    ledger = ledger_for(arena, selection, place, labels)
    common, rare = _rivals(arena, selection, place)
    conditions = len({item.scan.treatment.name for item in arena.prepared})
    treated = ledger.moved or any(s.scan.treatment.condition in _TELLING for s in arena.prepared)
    powder = all(item.scan.mount == "random" for item in arena.prepared)
    convincing = _convincing(ledger, conditions, powder and phase.is_sheet_silicate and selection.noise > _POOR)
    if not convincing:
        common, rare = _rivals(arena, selection, place, anywhere=True)
    convincing = convincing and (treated or phase.group not in _NEED_TREATMENT)
    status = _status(phase, convincing, common, share)
    alternatives = tuple(
        Alternative(phase=name, name=load_phase(name).name, told_by=_told_by(phase.id, name)) for name in (*common, *rare)
    )
    states = {labels[k]: c.label for k, c in enumerate(candidate.components) if c is not None and c.states}
    spacing = next((c.spacings[0] for c in candidate.components if c is not None and c.spacings and c.fraction is None), None)
    rivals = [load_phase(name).name for name in common]
    reason = kept_reason(phase, status, ledger, rivals, treated=treated or phase.group not in _NEED_TREATMENT)
    return PhaseFinding(
        phase=phase.id, name=phase.name, group=phase.group, status=status, reason=reason, convincing=convincing,
        evidence=ledger.evidence,
        alternatives=alternatives, states=states, basal_spacing=None if spacing is None else round(spacing, 4),
    )  # fmt: skip


def _other_finding(one: Hopeful, kept: Sequence[PhaseFinding], labels: Sequence[str]) -> PhaseFinding:
    """The finding on a phase that was not kept: an alternative of a kept one, or not detected."""
    phase = one.phase
    stands_for = [f for f in kept if any(a.phase == phase.id for a in f.alternatives)]
    if stands_for:
        status: Status = "possible"
        reason = f"would explain the scans nearly as well as {stands_for[0].name}"
        told = next(a.told_by for a in stands_for[0].alternatives if a.phase == phase.id)
        alternatives: tuple[Alternative, ...] = (Alternative(phase=stands_for[0].phase, name=stands_for[0].name, told_by=told),)
    else:
        status, reason, alternatives = "not_detected", absent_reason(one, labels), ()
    return PhaseFinding(
        phase=phase.id, name=phase.name, group=phase.group, status=status, reason=reason, alternatives=alternatives
    )


def examine(sample: Sample, phases: Sequence[Phase] | None = None, instrument: Instrument | None = None) -> Examination:
    """Compare a sample with the library and decide, keeping what the estimate needs.

    Parameters
    ----------
    sample : Sample
    phases : sequence of Phase, optional
        Phases to consider; the whole library when left out.
    instrument : Instrument, optional

    Returns
    -------
    Examination
    """
    chosen = tuple(all_phases() if phases is None else phases)
    considered, arena, selection = _compare(sample, chosen, instrument or Instrument())
    labels = sample.labels
    plates = {a for a in selection.active if load_phase(arena.candidates[a].phase).is_sheet_silicate}
    total = sum(selection.amount(a) for a in plates)
    shares = {a: selection.amount(a) / total if a in plates and total > 0 else 1.0 for a in selection.active}
    kept = [_kept_finding(arena, selection, a, labels, shares[a]) for a in selection.active]
    names = {finding.phase for finding in kept}
    others = [_other_finding(one, kept, labels) for one in considered if one.phase.id not in names]
    kept.sort(key=lambda f: -next(shares[a] for a in selection.active if arena.candidates[a].phase == f.phase))
    others.sort(key=lambda f: (f.status != "possible", f.phase))
    findings = Findings(
        sample=sample.name,
        phases=(*kept, *others),
        unassigned=unassigned_lines(arena, selection, labels),
        measure_next=next_measurements(sample, kept),
        notes=sample_notes(sample, arena),
    )
    return Examination(sample, arena, selection, findings)


def identify(sample: Sample, phases: Sequence[Phase] | None = None, instrument: Instrument | None = None) -> Findings:
    """Which sheet silicates are in a sample, with the evidence for and against each.

    All scans are compared together: candidates from the observed lines, then competing sets of phases by fit, and the
    fewest phases that explain every scan are kept. A rare phase has to be better supported than a common one.

    Parameters
    ----------
    sample : Sample
        Its scans, one per mount and treatment.
    phases : sequence of Phase, optional
        Phases to consider; the whole library when left out.
    instrument : Instrument, optional
        Settings of the diffractometer; usual ones when left out.

    Returns
    -------
    Findings
        Every phase considered, with status, reason, evidence, alternatives, and what to measure next.
    """
    return examine(sample, phases, instrument).findings
