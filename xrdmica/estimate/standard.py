"""An added standard puts proportions on the scale of the whole sample, and shows what is not accounted for."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xrdmica.crystals.library import load_phase
from xrdmica.errors import XrdmicaError
from xrdmica.estimate.shares import Shares
from xrdmica.scans.scan import Sample

__all__ = ["UNACCOUNTED", "added_standard", "whole_sample"]

FloatArray = NDArray[np.float64]
UNACCOUNTED = "unaccounted"


def added_standard(sample: Sample) -> tuple[str, float] | None:
    """Phase and share of the standard that was mixed in, from the sheet's columns standard and standard_percent.

    Returns
    -------
    tuple of str and float, or None
        Library id and weight fraction of the spiked specimen.

    Raises
    ------
    XrdmicaError
        If only one of the columns is there, the phase is not in the library, or the share is 0 or 100 %.
    """
    name, share = (sample.details.get(key, "").strip() for key in ("standard", "standard_percent"))
    if not name and not share:
        return None
    if not name or not share:
        missing = "standard" if not name else "standard_percent"
        raise XrdmicaError(
            f"sample {sample.name}: {missing} is missing", fix="give both standard and standard_percent, or neither"
        )
    phase = load_phase(name.lower())
    fraction = float(share) / 100
    if not 0 < fraction < 1:
        raise XrdmicaError(f"sample {sample.name}: standard_percent is {share}", fix="give weight percent of the spiked specimen")
    return phase.id, fraction


def whole_sample(
    shares: Shares, covariance: FloatArray, standard: int, fraction: float
) -> tuple[Shares, FloatArray, float, float]:
    """Weights of the original sample from shares of the crystalline part that hold a known amount of a standard.

    With the standard added as fraction x of the specimen and found as w_s of its crystalline part, a phase with w_i of that
    part makes up w_i x / (w_s (1 - x)) of the original sample; what is missing to 1 is not accounted for.

    Parameters
    ----------
    shares : Shares
        Of the crystalline part, standard included.
    covariance : ndarray, shape (m, m)
        Of the shares, with all that is not sure about them.
    standard : int
        Place of the standard among the shares.
    fraction : float
        Weight fraction of the standard in the specimen.

    Returns
    -------
    whole : Shares
        Of the original sample, without the standard.
    covariance : ndarray, shape (m - 1, m - 1)
    unaccounted, error : float
        The rest, which may come out below 0, and its standard error.

    References
    ----------
    Klug & Alexander (1974), X-ray Diffraction Procedures (internal standard; from memory).
    """
    weights = shares.weights
    own = float(weights[standard])
    factor = fraction / (1 - fraction)
    keep = [i for i in range(weights.size) if i != standard]
    values = weights[keep] * factor / own
    gradient = np.zeros((len(keep), weights.size))
    for row, i in enumerate(keep):
        gradient[row, i] = factor / own
        gradient[row, standard] = -weights[i] * factor / own**2
    found = gradient @ covariance @ gradient.T
    total = np.ones(len(keep))
    places = tuple(shares.places[i] for i in keep)
    error = float(np.sqrt(max(float(total @ found @ total), 0.0)))
    return Shares(places, values, found), found, 1.0 - float(values.sum()), error


def standard_place(shares: Shares, names: Sequence[str], phase: str) -> int | None:
    """Where the standard stands among the shares, if the fit holds it."""
    return next((i for i, place in enumerate(shares.places) if names[place] == phase), None)
