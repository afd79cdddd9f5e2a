"""One measured scan and one sample with all its scans."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import ScanError
from xrdmica.radiation import Radiation
from xrdmica.scans.treatment import Treatment

__all__ = ["MINIMUM_POINTS", "Mount", "RadiationOrigin", "Sample", "Scan"]

Mount = Literal["oriented", "random"]
RadiationOrigin = Literal["file header", "sample sheet", "option", "assumed"]
MINIMUM_POINTS = 50


@dataclass(frozen=True, eq=False)
class Scan:
    """One scan on a rising angle scale.

    Attributes
    ----------
    two_theta : ndarray, shape (n,)
        Scattering angle, strictly rising [degree].
    counts : ndarray, shape (n,)
        Counts, or counts per second times `count_scale`.
    sigma : ndarray, shape (n,)
        Standard error of `counts`: from the file, else ``sqrt(max(counts, 1))``.
    radiation : Radiation
        The tube.
    radiation_origin : str
        Where the tube is known from; ``"assumed"`` is always told to the user.
    source : str
        File the scan came from.
    mount : str
        ``"oriented"`` or ``"random"``.
    treatment : Treatment
        State of the mount.
    notes : tuple of str
        What reading it had to decide, in words for the result.
    metadata : mapping
        Header items of the file, kept as text.
    """

    two_theta: NDArray[np.float64]
    counts: NDArray[np.float64]
    sigma: NDArray[np.float64]
    radiation: Radiation
    radiation_origin: RadiationOrigin = "assumed"
    source: str = ""
    mount: Mount = "oriented"
    treatment: Treatment = field(default_factory=lambda: Treatment("air_dried"))
    notes: tuple[str, ...] = ()
    metadata: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))

    def __post_init__(self) -> None:
        n = self.two_theta.size
        if n < MINIMUM_POINTS:
            raise ScanError(
                f"{self.source or 'scan'}: only {n} points",
                fix=f"export the whole scan, at least {MINIMUM_POINTS} points",
            )
        if self.counts.shape != self.two_theta.shape or self.sigma.shape != self.two_theta.shape:
            raise ScanError(f"{self.source or 'scan'}: columns differ in length", fix="export the scan again")
        for array in (self.two_theta, self.counts, self.sigma):
            array.setflags(write=False)

    @classmethod
    def from_arrays(
        cls, two_theta: NDArray[np.float64], counts: NDArray[np.float64], *, radiation: str | Radiation = "Cu", **more: Any
    ) -> Scan:
        """Build a scan from plain arrays, with counting statistics when no `sigma` is given.

        Parameters
        ----------
        two_theta, counts : array_like, shape (n,)
            Angle [degree] and counts.
        radiation : str or Radiation
            Tube or wavelength.
        **more
            Other attributes of the class.
        """
        two_theta = np.array(two_theta, dtype=float)
        counts = np.array(counts, dtype=float)
        sigma = more.pop("sigma", None)
        sigma = np.sqrt(np.maximum(counts, 1.0)) if sigma is None else np.array(sigma, dtype=float)
        tube = Radiation.parse(radiation) if isinstance(radiation, str) else radiation
        more.setdefault("radiation_origin", "option")
        return cls(two_theta, counts, sigma, tube, **more)

    @property
    def step(self) -> float:
        """Median step [degree]."""
        return float(np.median(np.diff(self.two_theta)))

    @property
    def label(self) -> str:
        """Short name of the scan inside its sample: treatment, plus the mount when it is a random powder."""
        return self.treatment.name if self.mount == "oriented" else f"random_{self.treatment.name}"

    @property
    def d_spacing(self) -> NDArray[np.float64]:
        """Bragg spacing of every point [angstrom]."""
        return self.radiation.d_spacing(self.two_theta)

    def restricted(self, low: float, high: float) -> Scan:
        """The part from `low` to `high` [degree]; raises ScanError when too few points are left."""
        keep = (self.two_theta >= low) & (self.two_theta <= high)
        return replace(self, two_theta=self.two_theta[keep], counts=self.counts[keep], sigma=self.sigma[keep])


@dataclass(frozen=True, eq=False)
class Sample:
    """All scans of one sample.

    Attributes
    ----------
    name : str
        As in the sample sheet.
    scans : tuple of Scan
        One per mount and treatment, in the order of the sheet.
    details : mapping
        Further columns of the sheet, passed through as text.
    notes : tuple of str
        Decisions made while putting the sample together.
    """

    name: str
    scans: tuple[Scan, ...]
    details: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    notes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.scans:
            raise ScanError(f"sample {self.name}: no scans", fix="give at least one scan")

    def with_condition(self, condition: str) -> tuple[Scan, ...]:
        """The scans of one condition, such as ``"glycolated"``."""
        return tuple(scan for scan in self.scans if scan.treatment.condition == condition)

    @property
    def labels(self) -> tuple[str, ...]:
        """A distinct label per scan: repeats of a treatment are numbered."""
        seen: dict[str, int] = {}
        out = []
        for scan in self.scans:
            seen[scan.label] = seen.get(scan.label, 0) + 1
            out.append(scan.label if seen[scan.label] == 1 else f"{scan.label}#{seen[scan.label]}")
        return tuple(out)
