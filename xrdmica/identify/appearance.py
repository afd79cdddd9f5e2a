"""How a phase would look in a measurement that is still to be made, computed from its models."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np

from xrdmica.chemistry.oxides import oxide_percent
from xrdmica.crystals.layer import formula_with
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.columns import Component, ExpectedLine, View, components_for, cross_lines, expected_lines
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import Instrument
from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.scans.treatment import Treatment

__all__ = ["Appearance", "basal_appearance", "chemical_appearance", "powder_appearance"]

_STRONG = 0.25  # share of the strongest line
_APART = 0.02  # relative difference of spacing that a usual mount shows beyond doubt, common practice
_APART_POWDER = 0.004  # the same at the high angles of the 060 region
_OXIDE_APART = 3.0  # wt %
_OXIDES = ("K2O", "Na2O", "CaO", "MgO", "FeO", "Fe2O3", "Al2O3", "SiO2", "Li2O")


@dataclass(frozen=True)
class Appearance:
    """What would be seen.

    Attributes
    ----------
    spacings, shares : tuple of float
        Lines to look at [angstrom] and their height relative to the strongest, the most telling first; empty when no
        line is left.
    text : str
        In words.
    known : bool
        Whether the model says anything about this measurement.
    tolerance : float
        Relative difference of spacing that counts.
    first_only : bool
        Whether only the first strong line counts: the others of a basal series are there before the measurement too.
    oxides : dict
        Oxide -> wt %, for analyses.
    """

    spacings: tuple[float, ...]
    shares: tuple[float, ...]
    text: str
    known: bool = True
    tolerance: float = _APART
    first_only: bool = False
    oxides: dict[str, float] = field(default_factory=dict)

    def differs(self, other: Appearance) -> bool:
        """Whether the two could not be taken for each other: a strong line of one has no counterpart in the other."""
        if not (self.known and other.known):
            return False
        if self.oxides or other.oxides:
            names = {*self.oxides, *other.oxides}
            return any(abs(self.oxides.get(n, 0.0) - other.oxides.get(n, 0.0)) > _OXIDE_APART for n in names)
        return self._lacks(other) or other._lacks(self)

    def _lacks(self, other: Appearance) -> bool:
        strong = [d for d, share in zip(self.spacings, self.shares, strict=True) if share >= _STRONG]
        strong = strong[:1] if self.first_only else strong
        return any(not any(abs(d - x) <= self.tolerance * d for x in other.spacings) for d in strong)


@lru_cache(maxsize=16)
def _view(radiation: Radiation) -> View:
    low, high = float(radiation.two_theta(30.0)), float(radiation.two_theta(2.4))
    two_theta = np.arange(low, high, 0.05)
    return View(make_grid(two_theta, radiation, Instrument()), two_theta, "oriented")


def basal_appearance(phase: Phase, treatment: Treatment, radiation: Radiation) -> Appearance:
    """Basal lines of a phase on an oriented mount after a treatment.

    Parameters
    ----------
    phase : Phase
    treatment : Treatment
    radiation : Radiation
    """
    return _basal(phase.id, treatment, radiation)


@lru_cache(maxsize=512)
def _basal(name: str, treatment: Treatment, radiation: Radiation) -> Appearance:
    phase = load_phase(name)
    components = components_for(phase, treatment)
    if not components:
        lost = any(state.lost for state in phase.states_for(treatment))
        return Appearance((), (), "its lines are gone" if lost else "not known", known=lost)
    lines = sorted(expected_lines(components[0], _view(radiation), 0.03), key=lambda line: line.two_theta)[:5]
    if not lines:
        return Appearance((), (), "no line in reach", known=False)
    words = ", ".join(f"{_called(x)} at {x.d_spacing:.2f} Å ({100 * x.share:.0f} %)" for x in lines[:4])
    return Appearance(tuple(x.d_spacing for x in lines), tuple(x.share for x in lines), words, first_only=True)


def _called(line: ExpectedLine) -> str:
    return f"00{line.order}" if line.order else "a line"


def powder_appearance(phase: Phase, radiation: Radiation) -> Appearance:
    """The 060 line and the strongest other lines of a phase in a random powder.

    Parameters
    ----------
    phase : Phase
    radiation : Radiation
    """
    return _powder(phase.id, radiation)


@lru_cache(maxsize=256)
def _powder(name: str, radiation: Radiation) -> Appearance:
    phase = load_phase(name)
    low = float(radiation.two_theta(6.0))
    high = float(radiation.two_theta(1.46))
    two_theta = np.arange(low, high if np.isfinite(high) else 150.0, 0.1)
    view = View(make_grid(two_theta, radiation, Instrument()), two_theta, "random")
    lines = cross_lines(Component(phase.id), view)  # None where no atoms are known: the 060 line alone must do
    strong: list[tuple[float, float]] = []
    if lines is not None and lines.d_spacing.size:
        angle = radiation.two_theta(lines.d_spacing)
        area = lines.structure_factor_squared / np.sin(np.radians(angle) / 2) ** 2
        seen = np.isfinite(area) & (lines.d_spacing < 6.0)
        best = np.argsort(-np.where(seen, area, 0.0))[:4]
        strong = [(float(lines.d_spacing[i]), float(area[i] / area[best[0]])) for i in best]
    first = [] if phase.d060 is None else [(phase.d060, 1.0)]
    listed = [*first, *strong]
    if not listed:
        return Appearance((), (), "not known", known=False)
    words = [f"060 at {phase.d060:.3f} Å"] if phase.d060 is not None else []
    words += [f"strong lines at {', '.join(f'{d:.3f}' for d, _ in strong[:3])} Å"] if strong else []
    return Appearance(
        tuple(d for d, _ in listed), tuple(s for _, s in listed), "; ".join(words), tolerance=_APART_POWDER
    )


def chemical_appearance(phase: Phase) -> Appearance:
    """Oxides of a phase at the usual values of its file [wt %].

    Parameters
    ----------
    phase : Phase
    """
    try:
        usual = {v.id: v.typical for v in phase.variables if v.kind == "exchange"}
        oxides = oxide_percent(formula_with(phase, usual))
    except XrdmicaError:
        return Appearance((), (), "not known", known=False)
    shown = {name: oxides[name] for name in _OXIDES if oxides.get(name, 0.0) > 0.3}
    return Appearance((), (), ", ".join(f"{name} {value:.0f} %" for name, value in shown.items()), oxides=shown)
