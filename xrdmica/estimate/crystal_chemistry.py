"""What the fit says of the minerals themselves: layers of mixed stacks, iron, sodium for potassium."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import load_phase
from xrdmica.matching.solve import Fitted
from xrdmica.results import FittedParameter

__all__ = ["crystal_chemistry"]

# d(001) of the end members [angstrom] and the error of a spacing by other causes: muscovite and paragonite, handbook, from memory
_MUSCOVITE, _PARAGONITE, _OTHER = 9.995, 9.635, 0.02
_IRON_GROUPS = ("phlogopite", "biotite", "annite", "chlorite", "talc", "vermiculite", "saponite")


def crystal_chemistry(fitted: Fitted, errors: NDArray[np.float64]) -> tuple[FittedParameter, ...]:
    """Readable numbers out of the fitted parameters.

    Parameters
    ----------
    fitted : Fitted
    errors : ndarray, shape (p,)
        Standard errors of the knobs.

    Returns
    -------
    tuple of FittedParameter
        Percent of the first kind of layer with its order; share of iron on octahedral sites; sodium share of the interlayer
        of white micas by their spacing.
    """
    out = []
    for number, knob in enumerate(fitted.model.knobs):
        if knob.phase < 0 or fitted.evaluation.amounts[knob.phase] <= 0:
            continue
        phase = load_phase(fitted.model.candidates[knob.phase].phase)
        value, error = float(fitted.evaluation.values[number]), float(errors[number])
        known = error if np.isfinite(error) and error > 0 else None
        if knob.kind == "fraction" and phase.stack is not None:
            first = load_phase(phase.stack.first).name
            out.append(_shown(f"{phase.name}: {first} layers, R{phase.stack.reichweite}", 100 * value, known, 100.0, "%"))
        elif knob.kind == "exchange" and knob.detail == "fe" and phase.id in _IRON_GROUPS:
            places = phase.site_formula.site_sum("octahedral")
            out.append(_shown(f"{phase.name}: iron on octahedral sites", 100 * value / places, known, 100 / places, "%"))
        elif knob.kind == "spacing" and phase.id in ("muscovite", "paragonite", "phengite") and knob.detail in (0, "0", ""):
            span = _MUSCOVITE - _PARAGONITE
            share = (_MUSCOVITE - value) / span
            total = None if known is None else float(np.hypot(known, _OTHER))
            if -0.15 <= share <= 1.15:
                clipped = min(max(share, 0.0), 1.0)
                out.append(_shown(f"{phase.name}: Na/(Na + K) by spacing", clipped, total, 1 / span, "", share != clipped))
    return tuple(dict.fromkeys(out))


def _shown(
    name: str, value: float, error: float | None, factor: float, unit: str, at_limit: bool = False
) -> FittedParameter:
    scaled = None if error is None or at_limit else round(error * factor, 4)
    return FittedParameter(name=name, value=round(value, 4), standard_error=scaled, unit=unit, at_limit=at_limit)
