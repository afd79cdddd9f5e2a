"""From scans to findings: which phases are present, which the scans cannot tell, and what would tell."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

from xrdmica.crystals.library import Phase, all_phases, load_phase
from xrdmica.diffraction.optics import Instrument
from xrdmica.identify.absent import absent_evidence
from xrdmica.identify.candidates import Hopeful
from xrdmica.identify.contest import compare, rivals
from xrdmica.identify.evidence import Ledger, ledger_for
from xrdmica.identify.next_steps import next_steps
from xrdmica.identify.search import Arena, Selection
from xrdmica.identify.series import series_rivals
from xrdmica.identify.unassigned import unassigned_lines
from xrdmica.identify.words import absent_reason, fibre_notes, kept_reason, next_measurements, sample_notes
from xrdmica.matching.prepare import Prepared
from xrdmica.results import Alternative, Findings, PhaseFinding, Status
from xrdmica.scans.scan import Sample

__all__ = ["Examination", "examination_of", "examine", "identify"]

_TRACE = 0.025  # share of the sheet silicates below which a phase is called a trace
# layers whose spacing depends on what is between them are named only by what a treatment does to them (common practice)
_NEED_TREATMENT = ("smectite", "interstratified", "vermiculite")
_ORGANIC = ("glycolated", "glycerolated")
_POOR = 4.0  # reduced chi-square


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


# identify and estimate are called one after the other on the same sample: the comparison need not be made twice
_recent: deque[Examination] = deque(maxlen=4)


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


def _status(phase: Phase, convincing: bool, common: Sequence[str], share: float) -> Status:
    if not convincing or common:
        return "possible"
    return "trace" if phase.is_sheet_silicate and share < _TRACE else "present"


def _told_by(phase: str, other: str) -> str:
    for a, b in ((phase, other), (other, phase)):
        for look in load_phase(a).look_alikes:
            if look.id == b:
                return look.told_by
    return "a random powder with the 060 region, and a chemical analysis"


def _treatments_tell(arena: Arena) -> bool:
    """Whether the mounts can show what is between the layers: glycol, or heating beside a mount that was not heated.

    A heated mount alone cannot: collapsed smectite stands where mica does.
    """
    conditions = {item.scan.treatment.condition for item in arena.prepared}
    return bool(conditions & set(_ORGANIC)) or ("heated" in conditions and len(conditions) > 1)


def _kept_finding(arena: Arena, selection: Selection, place: int, labels: Sequence[str], share: float) -> PhaseFinding:
    candidate = arena.candidates[place]
    phase = load_phase(candidate.phase)
    ledger = ledger_for(arena, selection, place, labels)
    common, rare = rivals(arena, selection, place)
    conditions = len({item.scan.treatment.name for item in arena.prepared})
    treated = ledger.moved or _treatments_tell(arena)
    powder = all(item.scan.mount == "random" for item in arena.prepared)
    convincing = _convincing(ledger, conditions, powder and phase.is_sheet_silicate and selection.noise > _POOR)
    if not convincing:
        common, rare = rivals(arena, selection, place, anywhere=True)
    common = (*common, *(name for name in series_rivals(arena, selection, place) if name not in common))
    convincing = convincing and (treated or phase.group not in _NEED_TREATMENT)
    status = _status(phase, convincing, common, share)
    alternatives = tuple(
        Alternative(phase=name, name=load_phase(name).name, told_by=_told_by(phase.id, name)) for name in (*common, *rare)
    )
    states = {labels[k]: c.label for k, c in enumerate(candidate.components) if c is not None and c.states}
    spacing = next((c.spacings[0] for c in candidate.components if c is not None and c.spacings and c.fraction is None), None)
    named = [load_phase(name).name for name in common]
    reason = kept_reason(phase, status, ledger, named, treated=treated or phase.group not in _NEED_TREATMENT)
    return PhaseFinding(
        phase=phase.id, name=phase.name, group=phase.group, status=status, reason=reason, convincing=convincing,
        evidence=ledger.evidence,
        alternatives=alternatives, states=states, basal_spacing=None if spacing is None else round(spacing, 4),
    )  # fmt: skip


def _other_finding(
    one: Hopeful, kept: Sequence[PhaseFinding], labels: Sequence[str], prepared: Sequence[Prepared]
) -> PhaseFinding:
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
        phase=phase.id, name=phase.name, group=phase.group, status=status, reason=reason, alternatives=alternatives,
        evidence=absent_evidence(one, prepared, labels) if phase.is_sheet_silicate and status == "not_detected" else (),
    )  # fmt: skip


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
    considered, arena, selection = compare(sample, chosen, instrument or Instrument())
    labels = sample.labels
    plates = {a for a in selection.active if load_phase(arena.candidates[a].phase).is_sheet_silicate}
    total = sum(selection.amount(a) for a in plates)
    shares = {a: selection.amount(a) / total if a in plates and total > 0 else 1.0 for a in selection.active}
    kept = [_kept_finding(arena, selection, a, labels, shares[a]) for a in selection.active]
    names = {finding.phase for finding in kept}
    others = [_other_finding(one, kept, labels, arena.prepared) for one in considered if one.phase.id not in names]
    kept.sort(key=lambda f: -next(shares[a] for a in selection.active if arena.candidates[a].phase == f.phase))
    others.sort(key=lambda f: (f.status != "possible", f.phase))
    unassigned = unassigned_lines(arena, selection, labels)
    findings = Findings(
        sample=sample.name,
        phases=(*kept, *others),
        unassigned=unassigned,
        measure_next=next_measurements(sample, kept),
        next_measurements=next_steps(sample, kept),
        notes=(*sample_notes(sample, arena), *fibre_notes(kept, unassigned)),
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
    examination = examine(sample, phases, instrument)
    _recent.append(examination)
    return examination.findings


def examination_of(sample: Sample, findings: Findings, instrument: Instrument | None = None) -> Examination:
    """The comparison that findings came from, made again among their phases where it is no longer at hand.

    Parameters
    ----------
    sample : Sample
    findings : Findings
        From `identify` of that sample, or of an earlier session.
    instrument : Instrument, optional

    Returns
    -------
    Examination
    """
    wanted = instrument or Instrument()
    for one in tuple(_recent):
        grids = [item.view.grid for item in one.arena.prepared]
        if one.findings is findings and one.sample is sample and all(grid.instrument == wanted for grid in grids):
            return one
    return examine(sample, [load_phase(f.phase) for f in findings.phases if f.status != "not_detected"], instrument)
