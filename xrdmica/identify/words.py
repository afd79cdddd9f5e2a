"""Decisions in words."""

from __future__ import annotations

from collections.abc import Sequence

from xrdmica.crystals.library import Phase
from xrdmica.identify.candidates import Hopeful
from xrdmica.identify.evidence import Ledger
from xrdmica.identify.search import Arena
from xrdmica.results import PhaseFinding, Status, UnassignedLine
from xrdmica.scans.scan import Sample

__all__ = ["absent_reason", "fibre_notes", "kept_reason", "next_measurements", "sample_notes"]

_AMPHIBOLE = (8.3, 8.55)  # angstrom, 110 of amphiboles, handbook, from memory

def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def kept_reason(phase: Phase, status: Status, ledger: Ledger, rivals: Sequence[str], *, treated: bool = True) -> str:
    """One sentence on a phase that the fit keeps; `treated` says whether a treatment that would tell was measured."""
    count = ledger.clear_lines
    lines = f"{count} {'line is' if count == 1 else 'lines are'} clearly its own"
    if ledger.shared_lines:
        lines += f", {ledger.shared_lines} more shared with other phases"
    if ledger.moved:
        lines += ", and the first moves with treatment as it should"
    if status in ("present", "trace"):
        amount = " in a small amount" if status == "trace" else ""
        return f"needed by the scans{amount}: {lines}"
    if rivals:
        return f"something at its place is needed, but {_listed(rivals)} would explain the scans nearly as well; {lines}"
    if not treated:
        return f"fits best, but only a treated mount (glycol, heating) can name {phase.name}: {lines}"
    if ledger.missing_lines:
        return f"would improve the fit, but {ledger.missing_lines} of its lines should be seen and are not; {lines}"
    return f"would improve the fit, but what is seen is too little to be sure: {lines}"


def absent_reason(one: Hopeful, labels: Sequence[str]) -> str:
    """One sentence on a phase that is not there."""
    able = [(label, met) for label, met, options in zip(labels, one.met, one.options, strict=True) if options]
    if not able:
        return "gives no lines in the scans at hand"
    bare = [label for label, met in able if not met]
    if one.plausible:
        return "its lines are explained by other phases"
    return f"nothing stands where its strongest line should be ({', '.join(bare)})"


def next_measurements(sample: Sample, kept: Sequence[PhaseFinding]) -> tuple[str, ...]:
    """Measurements that would settle what is open, the cheapest first."""
    out: list[str] = []
    open_ones = [f for f in kept if f.status == "possible"]
    oriented = [scan for scan in sample.scans if scan.mount == "oriented"]
    organic = [s for s in sample.scans if s.treatment.condition in ("glycolated", "glycerolated")]
    heated = [s for s in sample.scans if s.treatment.condition == "heated"]
    low = [f for f in kept if (f.basal_spacing or 0) > 9.8 or f.group in ("smectite", "interstratified")]
    if not oriented:
        out.append("an oriented mount of the clay fraction, air-dried: basal lines stand out there")
    if not organic and (low or not oriented):
        out.append("a glycolated mount: smectite goes to 16.9 Å, mica and chlorite stay, vermiculite hardly moves")
    if organic and not heated and any(f.group in ("chlorite", "kaolin", "vermiculite", "serpentine") for f in open_ones):
        out.append("mounts heated to 400 and 550 °C: kaolinite is lost, the first line of chlorite grows, vermiculite collapses")
    for finding in open_ones:
        for other in finding.alternatives:
            out.append(f"{finding.name} or {other.name}: {other.told_by}")
        waits = not organic and finding.group in ("smectite", "interstratified", "vermiculite")
        if not finding.alternatives and finding.group != "companion" and not waits:
            out.append(f"{finding.name}: a longer count over its higher orders, and a random powder with the 060 region")
    return tuple(dict.fromkeys(out))


def sample_notes(sample: Sample, arena: Arena) -> tuple[str, ...]:
    """What the reader must know about the scans behind the decision."""
    notes = []
    for label, scan in zip(sample.labels, sample.scans, strict=True):
        if scan.radiation_origin == "assumed":
            notes.append(f"{label}: the radiation is not stated in the file; {scan.radiation.name} was assumed")
    conditions = {scan.treatment.condition for scan in sample.scans}
    if not conditions & {"glycolated", "glycerolated"}:
        notes.append("no glycolated scan: swelling layers cannot be told from others at the same spacing")
    if "heated" not in conditions:
        notes.append("no heated scan: chlorite with kaolinite, and collapsed with non-swelling layers, are told by spacing alone")
    for label, item in zip(sample.labels, arena.prepared, strict=True):
        if abs(item.view.displacement) > 0.25:
            off = f"{item.view.displacement:+.2f} mm"
            notes.append(f"{label}: the specimen stands {off} off its place; mount it again if you can")
    return tuple(notes)


def fibre_notes(kept: Sequence[PhaseFinding], unassigned: Sequence[UnassignedLine]) -> tuple[str, ...]:
    """A note where minerals are met that may be fibrous, or that come with such."""
    names = {f.phase: f.name for f in kept}
    amphibole = "amphibole" in names or any(_AMPHIBOLE[0] <= line.d_spacing <= _AMPHIBOLE[1] for line in unassigned)
    found = [names[phase] for phase in ("serpentine", "palygorskite", "sepiolite", "amphibole") if phase in names]
    if "talc" in names and amphibole:
        found = [*found, "talc with an amphibole line"]
    if not found:
        return ()
    return (
        f"{_listed(found)}: may be fibrous, which diffraction cannot tell; handle the sample as if it were, have it looked at by "
        "microscopy, and follow the local rules",
    )
