"""What to measure next: the cheapest measurement that would settle an open question, with what each candidate would show.

What a candidate would show is computed from its layer model, not looked up, so that it can be held against the new scan.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from xrdmica.crystals.library import Phase, all_phases, load_phase
from xrdmica.identify.appearance import Appearance, basal_appearance, chemical_appearance, powder_appearance
from xrdmica.radiation import Radiation
from xrdmica.results import NextMeasurement, Outcome, PhaseFinding
from xrdmica.scans.scan import Sample
from xrdmica.scans.treatment import Treatment

__all__ = ["next_steps"]

# oriented mounts by rising cost of time and work, common practice
_MOUNTS: tuple[tuple[str, str], ...] = (
    ("air_dried", "an oriented mount, air-dried"),
    ("glycolated", "glycolate the oriented mount"),
    ("heated_400", "heat the oriented mount to 400 °C"),
    ("heated_550", "heat the oriented mount to 550 °C"),
    ("K_heated_300", "saturate with K and heat to 300 °C"),
    ("Mg_glycerolated", "saturate with Mg and solvate with glycerol"),
)
_SAME_HEAT = 75.0  # degrees C between which a phase is not expected to change
_POWDER = "a random powder mount, with the 060 region"
_CHEMISTRY = "a chemical analysis of the clay fraction or single grains"
_FORMAMIDE = "formamide on an untreated mount, scanned within the hour"
_NEIGHBOUR = 0.5  # angstrom
_WATER = 1.0  # angstrom by which the spacing of swelling layers depends on the moisture of the room, common practice
_MOST_RIVALS = 5
_TOGETHER = ("smectite", "vermiculite", "interstratified")


def next_steps(sample: Sample, kept: Sequence[PhaseFinding]) -> tuple[NextMeasurement, ...]:
    """For every open question the cheapest measurement that answers it.

    Parameters
    ----------
    sample : Sample
        Its scans say what has been measured.
    kept : sequence of PhaseFinding
        Findings on the phases that the fit keeps.

    Returns
    -------
    tuple of NextMeasurement
        One per open question, in the order of the findings; nothing twice.
    """
    out: dict[tuple[str, ...], NextMeasurement] = {}
    for finding in kept:
        for names in _questions(sample, finding):
            key = tuple(sorted(names))
            step = _cheapest(sample, [load_phase(name) for name in names]) if key not in out else None
            if step is not None and not any(step == other for other in out.values()):
                out[key] = step
    return tuple(out.values())


def _questions(sample: Sample, finding: PhaseFinding) -> list[tuple[str, ...]]:
    """Sets of phases among which a finding leaves the choice, itself first: the usual ones, then with the rare ones."""
    phase = load_phase(finding.phase)
    if finding.alternatives:
        names = [a.phase for a in finding.alternatives]
        usual = [name for name in names if load_phase(name).occurrence == "common"]
        rare = [name for name in names if name not in usual]
        sets = [usual[:_MOST_RIVALS], rare[:_MOST_RIVALS]]
        return [(finding.phase, *chosen) for chosen in sets if chosen]
    if finding.status != "possible" or not phase.is_sheet_silicate:
        return []
    # nothing rivals it in the fit, but its kind is named by behaviour only: what else stands there untreated
    near = [
        other.id
        for other in all_phases()
        if other.id != phase.id and other.is_sheet_silicate and other.occurrence == "common" and _near(sample, finding, other)
    ]
    return [(finding.phase, *near[:_MOST_RIVALS])] if near else []


def _near(sample: Sample, finding: PhaseFinding, other: Phase) -> bool:
    if finding.basal_spacing is None:
        return other.group in _TOGETHER and finding.group in _TOGETHER
    states = [state for scan in sample.scans for state in other.states_for(scan.treatment)]
    reach = _WATER if finding.group in _TOGETHER else _NEIGHBOUR
    return any(s.spacing is not None and abs(s.spacing - finding.basal_spacing) < reach for s in states)


def _cheapest(sample: Sample, phases: Sequence[Phase]) -> NextMeasurement | None:
    """The first measurement that tells the first phase from all others, else the one that tells it from the most."""
    tube = sample.scans[0].radiation
    best: tuple[str, list[Appearance], list[int]] | None = None
    for words, looks in _options(sample, phases, tube):
        apart = [i for i in range(1, len(looks)) if looks[0].differs(looks[i])]
        if best is None or len(apart) > len(best[2]):
            best = (words, looks, apart)
        if len(apart) == len(phases) - 1:
            break
    if best is None or not best[2]:
        return None
    words, looks, apart = best
    return NextMeasurement(
        measurement=words,
        separates=tuple(phases[i].id for i in (0, *apart)),
        outcomes=tuple(_outcome(phase, look, tube) for phase, look in zip(phases, looks, strict=True)),
    )


def _options(sample: Sample, phases: Sequence[Phase], tube: Radiation) -> list[tuple[str, list[Appearance]]]:
    """Measurements not made yet, the cheapest first, each with what every phase would show."""
    options = []
    for text, words in _MOUNTS:
        treatment = Treatment.parse(text)
        if not _measured(sample, treatment):
            options.append((words, [basal_appearance(phase, treatment, tube) for phase in phases]))
    if {"kaolinite", "halloysite"} <= {phase.id for phase in phases}:
        options.insert(1, (_FORMAMIDE, [_with_formamide(phase, tube) for phase in phases]))
    if not _powder_measured(sample):
        options.append((_POWDER, [powder_appearance(phase, tube) for phase in phases]))
    options.append((_CHEMISTRY, [chemical_appearance(phase) for phase in phases]))
    return options


def _measured(sample: Sample, treatment: Treatment) -> bool:
    for scan in sample.scans:
        done = scan.treatment
        same = done.condition == treatment.condition and (treatment.cation is None or done.cation == treatment.cation)
        as_hot = treatment.temperature is None or abs((done.temperature or 0.0) - treatment.temperature) <= _SAME_HEAT
        if scan.mount == "oriented" and same and as_hot:
            return True
    return False


def _powder_measured(sample: Sample) -> bool:
    """Whether a random mount reaches 1.49 angstrom, the end of the 060 region."""
    return any(
        scan.mount == "random" and float(scan.two_theta[-1]) >= float(scan.radiation.two_theta(1.485)) for scan in sample.scans
    )


def _with_formamide(phase: Phase, tube: Radiation) -> Appearance:
    """Halloysite takes it up, kaolinite does not (Churchman et al. 1984, Clays and Clay Minerals 32, 241; from memory)."""
    if phase.id == "halloysite":
        return Appearance((10.4,), (1.0,), "001 moves to 10.4 Å within the hour", first_only=True)
    usual = basal_appearance(phase, Treatment("air_dried"), tube)
    return Appearance(usual.spacings, usual.shares, f"stays: {usual.text}", first_only=True)


def _outcome(phase: Phase, look: Appearance, tube: Radiation) -> Outcome:
    first = look.spacings[0] if look.spacings else None
    angle = None if first is None else float(tube.two_theta(first))
    share = look.shares[0] if look.shares and look.first_only else None
    return Outcome(
        phase=phase.id, name=phase.name, text=look.text,
        d_spacing=None if first is None else round(first, 3),
        two_theta=None if angle is None or not np.isfinite(angle) else round(angle, 2),
        relative_intensity=None if share is None else round(100 * share, 1),
    )  # fmt: skip
