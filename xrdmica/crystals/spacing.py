"""b and d(001) of 2:1 layer silicates without water between the layers, from the composition."""

from __future__ import annotations

import json
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np

from xrdmica.chemistry.checks import interlayer_cations
from xrdmica.chemistry.formula import SiteFormula
from xrdmica.chemistry.ions import charge_of
from xrdmica.errors import StructureError

__all__ = [
    "INTERLAYER_RADIUS", "OCTAHEDRAL_RADIUS", "TERMS", "PredictedSpacing", "octahedral_radius", "predict_spacing", "predicted_b",
    "predicted_spacing", "predictors",
]  # fmt: skip

# Shannon (1976), Acta Crystallographica A32, 751-767: effective ionic radii, six-fold, high spin [angstrom]; the values are
# compared with those of pymatgen in the tests
OCTAHEDRAL_RADIUS = {
    "Al3+": 0.535, "Mg2+": 0.72, "Fe2+": 0.78, "Fe3+": 0.645, "Li+": 0.76, "Ti4+": 0.605, "Mn2+": 0.83, "Mn3+": 0.645,
    "Ni2+": 0.69, "Zn2+": 0.74, "Co2+": 0.745, "Cr3+": 0.615, "V3+": 0.64, "V4+": 0.58, "Cu2+": 0.73, "Sc3+": 0.745, "Ga3+": 0.62,
    "Ti3+": 0.67, "Zr4+": 0.72, "Mn4+": 0.53, "V5+": 0.54, "Co3+": 0.545, "Ni3+": 0.56,
}  # fmt: skip
# the same, twelve-fold; NH4 from memory, near to Rb
INTERLAYER_RADIUS = {
    "K+": 1.64, "Na+": 1.39, "Ca2+": 1.34, "Ba2+": 1.61, "Rb+": 1.72, "Cs+": 1.88, "Sr2+": 1.44, "NH4+": 1.70,
}  # fmt: skip
_POTASSIUM = INTERLAYER_RADIUS["K+"]
# model terms; which were chosen by leave-one-out error among those that have a reason
TERMS: dict[str, tuple[str, ...]] = {
    "b": ("one", "octahedral_radius", "tetrahedral_al", "large_divalent", "lithium", "smaller_than_k"),
    "d001": ("one", "octahedral_radius", "interlayer", "smaller_than_k", "fluorine", "divalent_dioctahedral"),
}


@dataclass(frozen=True)
class PredictedSpacing:
    """Predicted b and d(001) of one layer with their standard errors [angstrom].

    Attributes
    ----------
    b, b_sigma : float
    d001, d001_sigma : float
    notes : tuple of str
        Where the composition lies outside what the model was fitted to.
    """

    b: float
    b_sigma: float
    d001: float
    d001_sigma: float
    notes: tuple[str, ...] = ()

    @property
    def d060(self) -> float:
        """b / 6 [angstrom]."""
        return self.b / 6

    @property
    def d060_sigma(self) -> float:
        """Standard error of `d060` [angstrom]."""
        return self.b_sigma / 6

    def text(self) -> str:
        """One line with every number and its standard error."""
        return (
            f"predicted d(001) {self.d001:.3f} ± {self.d001_sigma:.3f} Å, b {self.b:.3f} ± {self.b_sigma:.3f} Å, "
            f"d(060) {self.d060:.4f} ± {self.d060_sigma:.4f} Å (one standard error)"
        )


def octahedral_radius(formula: SiteFormula) -> float:
    """Mean radius of the octahedral cations [angstrom].

    Raises
    ------
    StructureError
        If a cation has no radius here, or the octahedral site is empty.
    """
    unknown = [ion for ion, n in formula.octahedral.items() if n and ion not in OCTAHEDRAL_RADIUS]
    if unknown:
        raise StructureError(f"no octahedral radius is known for {unknown[0]}", fix="replace it by a similar ion")
    total = formula.site_sum("octahedral")
    if not total:
        raise StructureError("the formula has no octahedral cation", fix="give the octahedral site its cations")
    return sum(n * OCTAHEDRAL_RADIUS[ion] for ion, n in formula.octahedral.items()) / total


def _check_interlayer(cations: dict[str, float]) -> None:
    unknown = [ion for ion, n in cations.items() if n and ion not in INTERLAYER_RADIUS]
    if unknown:
        raise StructureError(
            f"{unknown[0]} between the layers holds water: no spacing follows from the formula",
            fix="ask for a phase of the library, such as smectite or vermiculite, in a state",
        )


def predictors(formula: SiteFormula) -> dict[str, float]:
    """Terms of the model for a 2:1 layer silicate.

    Parameters
    ----------
    formula : SiteFormula

    Returns
    -------
    dict
        Term -> value per O10(OH,F)2: mean octahedral radius [angstrom], tetrahedral Al, Fe2+ and Mn2+, Li, interlayer cations,
        what these lack of the radius of K [angstrom, summed], F in a layer with interlayer cations, divalent octahedral
        cations times vacancies.
    """
    cations = interlayer_cations(formula)
    _check_interlayer(cations)
    octahedral = formula.octahedral
    vacant = max(3.0 - formula.site_sum("octahedral"), 0.0)
    filling = min(sum(cations.values()), 1.0)
    return {
        "one": 1.0,
        "octahedral_radius": octahedral_radius(formula),
        "tetrahedral_al": formula.tetrahedral.get("Al3+", 0.0),
        "large_divalent": octahedral.get("Fe2+", 0.0) + octahedral.get("Mn2+", 0.0),
        "lithium": octahedral.get("Li+", 0.0),
        "interlayer": sum(cations.values()),
        "smaller_than_k": sum(n * (_POTASSIUM - INTERLAYER_RADIUS[ion]) for ion, n in cations.items()),
        "fluorine": formula.anions.get("F-", 0.0) * filling,
        "divalent_dioctahedral": vacant * sum(n for ion, n in octahedral.items() if charge_of(ion) == 2),
    }


@lru_cache(maxsize=1)
def _model() -> dict[str, Any]:
    path = Path(__file__).resolve().parent / "calibration" / "spacing.json"
    model: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
    return model


def predict_spacing(formula: SiteFormula) -> PredictedSpacing:
    """Predict b and d(001) of a mica, brittle mica or talc-group composition.

    A linear model in the terms of `predictors`, fitted by least squares to published cells
    (`xrdmica/crystals/calibration/cells.csv`); the standard error holds the scatter of those cells and the uncertainty of
    the coefficients.

    Parameters
    ----------
    formula : SiteFormula
        A 2:1 layer silicate without interlayer water.

    Returns
    -------
    PredictedSpacing

    Raises
    ------
    StructureError
        For another layer type, interlayer water, or hydrated interlayer cations.
    """
    if formula.layer_type != "2:1":
        raise StructureError(
            f"the spacing model is for 2:1 layers, not {formula.layer_type}", fix="give a mica, talc or pyrophyllite"
        )
    if formula.water > 0 or formula.group in ("smectite", "vermiculite"):
        raise StructureError(
            f"a {formula.group} takes up water: no spacing follows from the formula",
            fix="ask for a phase of the library in a state, such as smectite glycolated",
        )
    values = predictors(formula)
    numbers: dict[str, tuple[float, float]] = {}
    for quantity, model in _model().items():
        x = np.array([values[term] for term in model["terms"]])
        spread = model["residual_sigma"] ** 2 + x @ np.array(model["covariance"]) @ x
        numbers[quantity] = (float(x @ np.array(model["coefficients"])), float(np.sqrt(spread)))
    return PredictedSpacing(*numbers["b"], *numbers["d001"], _outside(formula))


def predicted_spacing(formula: SiteFormula) -> tuple[float, float]:
    """d(001) of one layer and its standard error [angstrom]; see `predict_spacing`."""
    found = predict_spacing(formula)
    return found.d001, found.d001_sigma


def predicted_b(formula: SiteFormula) -> tuple[float, float]:
    """b and its standard error [angstrom]; see `predict_spacing`."""
    found = predict_spacing(formula)
    return found.b, found.b_sigma


def _outside(formula: SiteFormula) -> tuple[str, ...]:
    notes = []
    fitted = {"Al3+", "Mg2+", "Fe2+", "Fe3+", "Li+", "Ti4+", "Mn2+"}
    strange = [ion for ion, n in formula.octahedral.items() if n > 0.1 and ion not in fitted]
    if strange:
        notes.append(f"{', '.join(strange)} on octahedral sites: no cell with it was in the fit")
    cations = interlayer_cations(formula)
    rare = [ion for ion, n in cations.items() if n > 0.1 and ion in ("Rb+", "Cs+", "NH4+", "Ba2+", "Sr2+")]
    if rare:
        notes.append(f"{', '.join(rare)} between the layers: no cell with it was in the fit")
    if formula.tetrahedral.get("Fe3+", 0.0) > 0.1:
        notes.append("tetrahedral Fe3+ is not in the model: b will be larger")
    if formula.octahedral.get("Fe3+", 0.0) > 0.5:
        notes.append("no cell rich in octahedral Fe3+ was in the fit")
    return tuple(notes)
