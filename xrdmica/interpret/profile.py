"""Samples in the order of a coordinate: proportions with their intervals along a boring or a line."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from xrdmica.errors import XrdmicaError
from xrdmica.results import SampleResult

__all__ = ["PROFILE_HEADER", "ProfilePoint", "profile_points"]

PROFILE_HEADER = ("coordinate", "sample", "phase", "name", "group", "status", "weight_percent", "low95", "high95", "basis")


@dataclass(frozen=True)
class ProfilePoint:
    """One phase of one sample.

    Attributes
    ----------
    coordinate : float
        In the unit of the sheet's column.
    sample, phase, name, group, status, basis : str
    weight, low, high : float or None
        [wt %]
    """

    coordinate: float
    sample: str
    phase: str
    name: str
    group: str
    status: str
    weight: float | None
    low: float | None
    high: float | None
    basis: str

    @property
    def row(self) -> tuple[str | float | None, ...]:
        """The point under `PROFILE_HEADER`."""
        return (
            self.coordinate, self.sample, self.phase, self.name, self.group, self.status, self.weight, self.low, self.high,
            self.basis,
        )  # fmt: skip


def profile_points(results: Sequence[SampleResult], along: str) -> list[ProfilePoint]:
    """Weighed phases of all samples that have the coordinate, by rising coordinate.

    Parameters
    ----------
    results : sequence of SampleResult
    along : str
        Column of the sample sheet, such as ``depth_m``.

    Raises
    ------
    XrdmicaError
        If no sample has the column, or it holds something else than a number.
    """
    out = []
    for result in results:
        text = result.details.get(along, "").strip().replace(",", ".")
        if not text:
            continue
        try:
            place = float(text)
        except ValueError:
            raise XrdmicaError(f"sample {result.sample}: {along} is {text!r}, no number", fix="give numbers there") from None
        out += [
            ProfilePoint(
                place, result.sample, p.phase, p.name, p.group, p.status, p.weight_percent, p.low95, p.high95,
                result.proportions.basis,
            )
            for p in result.proportions.phases if p.weight_percent is not None
        ]  # fmt: skip
    if not out:
        known = sorted({key for result in results for key in result.details})
        raise XrdmicaError(
            f"no sample has proportions and a column {along!r}",
            fix=f"choose one of {', '.join(known)}" if known else "add a column such as depth_m to the sample sheet",
        )
    return sorted(out, key=lambda point: (point.coordinate, point.sample, point.phase))
