"""A layer as atoms on a line: what basal reflections see."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Layer"]


@dataclass(frozen=True, eq=False)
class Layer:
    """Atoms of one layer and its share of the interlayer, projected on the stacking direction.

    Attributes
    ----------
    z : ndarray, shape (m,)
        Heights from the middle of the layer [angstrom].
    counts : ndarray, shape (m,)
        Atoms per formula unit at each height.
    ions : tuple of str, length m
        Ion at each height, such as ``"Mg2+"`` or ``"O2-"``.
    b_iso : ndarray, shape (m,)
        Isotropic displacement parameter B [angstrom^2].
    spacing : float
        Distance from this layer to the next one [angstrom].
    area : float
        In-plane area per formula unit [angstrom^2].
    molar_mass : float
        Dry mass of a formula unit (structural OH counts, interlayer water and organic molecules do not) [g/mol].
    """

    z: NDArray[np.float64]
    counts: NDArray[np.float64]
    ions: tuple[str, ...]
    b_iso: NDArray[np.float64]
    spacing: float
    area: float
    molar_mass: float

    @property
    def centrosymmetric(self) -> bool:
        """Whether every atom has a twin at the opposite height."""
        return all(
            abs(self._count_at(ion, -height) - self._count_at(ion, height)) < 1e-9
            for ion, height in zip(self.ions, self.z, strict=True)
        )

    def _count_at(self, ion: str, height: float) -> float:
        here = [i == ion and abs(z - height) < 1e-6 for i, z in zip(self.ions, self.z, strict=True)]
        return float(self.counts[np.array(here, dtype=bool)].sum())
