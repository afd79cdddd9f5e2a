"""Fit the spacing model to the published cells of `cells.csv` and write `spacing.json`.

Run it after a change of the cells::

    python -m xrdmica.crystals.calibration.fit_spacing
"""

from __future__ import annotations

import csv
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.spacing import TERMS, predictors

__all__ = ["KnownCell", "fit", "known_cells", "leave_one_out", "main"]

_FOLDER = Path(__file__).resolve().parent
# analyses of single crystals balance within a few per cent of the charges
_IMBALANCE = 0.3


@dataclass(frozen=True)
class KnownCell:
    """A published cell with the composition of its crystal.

    Attributes
    ----------
    name : str
    formula : SiteFormula
    b, d001 : float
        [angstrom]; d001 of one layer.
    recalled : bool
        Whether the cell is from memory.
    source : str
    """

    name: str
    formula: SiteFormula
    b: float
    d001: float
    recalled: bool
    source: str


def known_cells(path: Path | None = None) -> tuple[KnownCell, ...]:
    """The cells of `cells.csv`."""
    from pymatgen.core.lattice import Lattice

    text = (path or _FOLDER / "cells.csv").read_text(encoding="utf-8")
    out = []
    for row in csv.DictReader(line for line in text.splitlines() if not line.startswith("#")):
        lattice = Lattice.from_parameters(*(float(row[key]) for key in ("a", "b", "c", "alpha", "beta", "gamma")))
        spacing = float(lattice.d_hkl((0, 0, 1))) / int(row["layers"])
        formula = SiteFormula.parse(row["formula"], tolerance=_IMBALANCE)
        out.append(KnownCell(row["name"], formula, float(row["b"]), spacing, row["recalled"] == "yes", row["source"]))
    return tuple(out)


def _system(cells: tuple[KnownCell, ...], quantity: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    rows = [[predictors(cell.formula)[term] for term in TERMS[quantity]] for cell in cells]
    return np.array(rows), np.array([getattr(cell, quantity) for cell in cells])


def fit(cells: tuple[KnownCell, ...], quantity: str) -> dict[str, Any]:
    """Least squares of one quantity: coefficients, their covariance, residual standard error.

    Parameters
    ----------
    cells : tuple of KnownCell
    quantity : str
        ``"b"`` or ``"d001"``.
    """
    matrix, target = _system(cells, quantity)
    coefficients, *_ = np.linalg.lstsq(matrix, target, rcond=None)
    residual = target - matrix @ coefficients
    variance = float(residual @ residual) / (len(target) - matrix.shape[1])
    covariance = variance * np.linalg.inv(matrix.T @ matrix)
    return {
        "terms": list(TERMS[quantity]),
        "coefficients": [round(float(c), 6) for c in coefficients],
        "covariance": [[round(float(c), 9) for c in row] for row in covariance],
        "residual_sigma": round(variance**0.5, 6),
        "leave_one_out_rms": round(float(np.sqrt(np.mean(leave_one_out(cells, quantity) ** 2))), 6),
        "leave_one_mineral_out_rms": round(float(np.sqrt(np.mean(leave_one_out(cells, quantity, whole_mineral=True) ** 2))), 6),
        "cells": len(target),
    }


def leave_one_out(
    cells: tuple[KnownCell, ...], quantity: str, *, whole_mineral: bool = False
) -> NDArray[np.float64]:
    """Error of the prediction of every cell from all the others [angstrom], shape (n,).

    Parameters
    ----------
    cells : tuple of KnownCell
    quantity : str
        ``"b"`` or ``"d001"``.
    whole_mineral : bool
        Leave out all cells of the same mineral together, so that no twin of the predicted cell takes part in the fit.
    """
    matrix, target = _system(cells, quantity)
    label = np.array([cell.name.split()[0] if whole_mineral else str(i) for i, cell in enumerate(cells)])
    errors = np.zeros(len(target))
    for out in dict.fromkeys(label.tolist()):
        keep = label != out
        coefficients, *_ = np.linalg.lstsq(matrix[keep], target[keep], rcond=None)
        errors[~keep] = target[~keep] - matrix[~keep] @ coefficients
    return errors


def main() -> None:
    """Write `spacing.json` beside the cells."""
    cells = known_cells()
    record = {quantity: fit(cells, quantity) for quantity in TERMS}
    (_FOLDER / "spacing.json").write_text(json.dumps(record, indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
