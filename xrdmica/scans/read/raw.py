"""What a reader hands over, before it is checked and becomes a Scan."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import ScanError
from xrdmica.radiation import Radiation

__all__ = ["AXES", "Axis", "IntensityUnit", "NotAScanError", "RawScan"]

Axis = Literal["two_theta", "theta", "radians", "d", "q"]
AXES: tuple[Axis, ...] = ("two_theta", "theta", "radians", "d", "q")
IntensityUnit = Literal["counts", "counts per second", "unknown"]


class NotAScanError(ScanError):
    """The file is something else than a scan, such as a table of minerals; folders of samples pass over it."""


@dataclass(frozen=True, eq=False)
class RawScan:
    """Columns and header of one file, as they stand there.

    Attributes
    ----------
    two_theta, intensity : ndarray, shape (n,)
        As in the file [degree, see `unit`].
    sigma : ndarray, shape (n,), or None
        Standard errors, when the file gives them.
    unit : str
        What the intensities are.
    seconds : float or None
        Counting time per step [s].
    radiation : Radiation or None
        What the header says of the tube.
    radiation_conflict : str or None
        A sentence, when the header contradicts itself about the tube.
    places : ndarray of int, shape (n,), or None
        Line of the file behind every point, for messages.
    metadata : mapping
        Header items as text.
    notes : tuple of str
        Decisions of the reader.
    axis : str or None
        What the file says `two_theta` really holds, None when it says nothing.
    axis_scale : float
        What values of q are multiplied by to be in 1/angstrom.
    axis_name : str
        Its name in the file.
    axis_line : int or None
        Line that names it.
    """

    two_theta: NDArray[np.float64]
    intensity: NDArray[np.float64]
    sigma: NDArray[np.float64] | None = None
    unit: IntensityUnit = "unknown"
    seconds: float | None = None
    radiation: Radiation | None = None
    radiation_conflict: str | None = None
    places: NDArray[np.int64] | None = None
    metadata: Mapping[str, str] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    axis: Axis | None = None
    axis_scale: float = 1.0
    axis_name: str = ""
    axis_line: int | None = None

    def place(self, index: int) -> str:
        """Where point `index` stands, in words."""
        return f"point {index + 1}" if self.places is None else f"line {int(self.places[index])}"

    def points(self, keep: NDArray[np.bool_] | slice) -> RawScan:
        """The same with some of the points, or with the points in another order."""
        return replace(
            self, two_theta=self.two_theta[keep], intensity=self.intensity[keep],
            sigma=None if self.sigma is None else self.sigma[keep], places=None if self.places is None else self.places[keep],
        )  # fmt: skip

    def noted(self, *notes: str) -> RawScan:
        """The same with further notes."""
        return replace(self, notes=(*self.notes, *notes))
