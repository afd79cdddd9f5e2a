"""X-ray tubes: wavelengths and how tubes are written in files, sheets and options.

This stands on the lowest floor because both the readers of scans and the diffraction engine need it.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrdmica.errors import XrdmicaError

__all__ = ["TUBES", "Radiation"]

# Hoelzer et al. (1997) Phys. Rev. A 56, 4554 for Cu, Co, Fe, Cr; Mo from memory [angstrom]
TUBES: dict[str, tuple[float, float]] = {
    "Cu": (1.5405929, 1.5444274),
    "Co": (1.7889960, 1.7928350),
    "Fe": (1.9360410, 1.9399730),
    "Cr": (2.2897260, 2.2936510),
    "Mo": (0.7093172, 0.7136070),
}
_SECOND_LINE = 0.5  # area of K-alpha2 relative to K-alpha1, common practice
_KEV_ANGSTROM = 12.398419843  # h c, CODATA 2018


@dataclass(frozen=True)
class Radiation:
    """One tube setting.

    Attributes
    ----------
    name : str
        ``"Cu"``, ``"Co"`` ... for a K-alpha doublet, or the wavelength as text.
    wavelengths : tuple of float
        Lines used, strongest first [angstrom].
    weights : tuple of float
        Relative areas of the lines, summing to 1.
    """

    name: str
    wavelengths: tuple[float, ...]
    weights: tuple[float, ...]

    @classmethod
    def parse(cls, text: str) -> Radiation:
        """Read what people write: ``Cu``, ``CuKa``, ``Co K-alpha``, ``Cu K-alpha1``, ``1.7902``.

        Parameters
        ----------
        text : str
            Tube metal, optionally with the line, or a wavelength in angstrom.

        Returns
        -------
        Radiation
            A doublet for a bare tube or K-alpha, a single line for K-alpha1 and for a number.

        Raises
        ------
        XrdmicaError
            If the text is neither a known tube nor a wavelength from 0.1 to 5 angstrom.
        """
        cleaned = text.strip().strip("'\"")
        try:
            return cls.from_wavelength(float(cleaned.removesuffix("A").removesuffix("Å").strip().replace(",", ".")))
        except ValueError:
            pass
        squeezed = re.sub(r"[\s_\-\\~,.:()]+", "", cleaned).lower().replace("α", "a").replace("alpha", "a")
        match = re.fullmatch(r"(cu|co|fe|cr|mo)(?:ka?)?(1|12|1\+2|a1a2|a1\+a2)?(?:radiation|tube|anode)?", squeezed)
        if match is None:
            raise XrdmicaError(
                f"radiation {text!r} is not known",
                fix=f"write one of {', '.join(TUBES)} or the wavelength in angstrom, such as 1.5406",
            )
        return cls.tube(match.group(1).capitalize(), doublet=match.group(2) != "1")

    @classmethod
    def tube(cls, metal: str, *, doublet: bool = True) -> Radiation:
        """K-alpha radiation of a tube; ``doublet=False`` keeps K-alpha1 alone.

        Parameters
        ----------
        metal : str
            One of the keys of ``TUBES``.
        doublet : bool
            Whether K-alpha2 is there.
        """
        first, second = TUBES[metal]
        if not doublet:
            return cls(f"{metal}Ka1", (first,), (1.0,))
        return cls(metal, (first, second), (1 / (1 + _SECOND_LINE), _SECOND_LINE / (1 + _SECOND_LINE)))

    @classmethod
    def from_wavelength(cls, wavelength: float) -> Radiation:
        """Radiation of one given wavelength [angstrom].

        Raises
        ------
        XrdmicaError
            If the wavelength is not between 0.1 and 5 angstrom.
        """
        if not 0.1 <= wavelength <= 5.0:
            raise XrdmicaError(
                f"wavelength {wavelength:g} is out of range", fix="give it in angstrom, between 0.1 and 5 (Cu is 1.5406)"
            )
        return cls(f"{wavelength:g}", (wavelength,), (1.0,))

    @property
    def wavelength(self) -> float:
        """The strongest line [angstrom]."""
        return self.wavelengths[0]

    @property
    def mean_wavelength(self) -> float:
        """Area-weighted mean of the lines [angstrom], right for unresolved doublets."""
        return float(np.dot(self.wavelengths, self.weights))

    @property
    def energy_ev(self) -> float:
        """Photon energy of the strongest line [eV]."""
        return 1000.0 * _KEV_ANGSTROM / self.wavelength

    def d_spacing(self, two_theta: NDArray[np.float64] | float) -> NDArray[np.float64]:
        """Bragg spacing [angstrom] for the mean wavelength at `two_theta` [degree]."""
        return np.asarray(self.mean_wavelength / (2 * np.sin(np.radians(np.asarray(two_theta, dtype=float)) / 2)))

    def two_theta(self, d_spacing: NDArray[np.float64] | float) -> NDArray[np.float64]:
        """Angle [degree] of a spacing [angstrom] for the mean wavelength; nan where it cannot be reached."""
        sine = self.mean_wavelength / (2 * np.asarray(d_spacing, dtype=float))
        with np.errstate(invalid="ignore"):
            return np.asarray(2 * np.degrees(np.arcsin(np.where(sine <= 1, sine, np.nan))))
