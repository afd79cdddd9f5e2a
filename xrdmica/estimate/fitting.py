"""The joint fit of the phases that an examination keeps."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.layer import exchanges_of
from xrdmica.crystals.library import load_phase
from xrdmica.identify.decide import Examination
from xrdmica.matching.model import Candidate, build_model, composition_shows
from xrdmica.matching.solve import Fitted, fit_model

__all__ = ["fit_examined"]


def fit_examined(examination: Examination, known: Mapping[str, SiteFormula]) -> Fitted | None:
    """Fit all scans of an examined sample together; None when nothing was kept.

    Where oriented and random mounts are there, sheet silicates tie them together, while companions may differ: coarse grains
    settle otherwise than clay does.

    Parameters
    ----------
    examination : Examination
    known : mapping
        Phase id -> mineral formula known otherwise, which the fit keeps to.
    """
    arena, selection = examination.arena, examination.selection
    if not selection.active:
        return None
    start = [item.spread(item.view.orientation_spread * selection.factor) for item in arena.prepared]
    chosen = [arena.candidates[a] for a in selection.active]
    chosen = [_with_formula(one, known[one.phase]) if one.phase in known else one for one in chosen]
    chosen = [part for one in chosen for part in _untied(one, [item.scan.mount for item in arena.prepared])]
    return fit_model(build_model(start, chosen, exchanges=composition_shows(chosen), known=tuple(known)))


def _untied(candidate: Candidate, mounts: list[str]) -> list[Candidate]:
    """A companion as one candidate per kind of mount; sheet silicates as they are."""
    if load_phase(candidate.phase).is_sheet_silicate or len(set(mounts)) < 2:
        return [candidate]
    out = []
    for kind in ("random", "oriented"):
        components = tuple(
            one if mount == kind else None for one, mount in zip(candidate.components, mounts, strict=True)
        )
        if any(one is not None for one in components):
            out.append(replace(candidate, components=components))
    return out


def _with_formula(candidate: Candidate, formula: SiteFormula) -> Candidate:
    """The candidate with the composition of a known mineral formula."""
    exchanges = tuple(exchanges_of(load_phase(candidate.phase), formula).items())
    components = tuple(
        one if one is None or not one.states or one.fraction is not None else replace(one, exchanges=exchanges)
        for one in candidate.components
    )
    return replace(candidate, components=components)
