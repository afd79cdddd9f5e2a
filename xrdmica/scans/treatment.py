"""How a mount was treated before the scan, and the many ways people write it."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

from xrdmica.errors import SheetError

__all__ = ["Condition", "Treatment"]

Condition = Literal["air_dried", "glycolated", "glycerolated", "heated", "none"]

_WORDS: dict[str, Condition] = {
    "air_dried": "air_dried", "airdried": "air_dried", "air": "air_dried", "ad": "air_dried", "n": "air_dried",
    "natural": "air_dried", "untreated": "air_dried", "normal": "air_dried",
    "glycolated": "glycolated", "glycol": "glycolated", "eg": "glycolated", "gly": "glycolated",
    "ethylene_glycol": "glycolated", "glycolised": "glycolated", "glycolized": "glycolated",
    "glycerolated": "glycerolated", "glycerol": "glycerolated", "gl": "glycerolated",
    "none": "none", "random": "none", "powder": "none", "bulk": "none",
}  # fmt: skip
_CATIONS = {"k": "K", "mg": "Mg", "na": "Na", "ca": "Ca", "li": "Li", "sr": "Sr"}


@dataclass(frozen=True)
class Treatment:
    """State of the mount when it was scanned.

    Attributes
    ----------
    condition : str
        ``air_dried``, ``glycolated``, ``glycerolated``, ``heated`` or ``none`` (untreated powder).
    temperature : float or None
        Heating temperature [degree Celsius], only for ``heated``.
    cation : str or None
        Saturating cation, such as ``"K"``, when the laboratory saturated the clay.
    """

    condition: Condition
    temperature: float | None = None
    cation: str | None = None

    @classmethod
    def parse(cls, text: str) -> Treatment:
        """Read a treatment as laboratories write it: ``air_dried``, ``AD``, ``EG``, ``550``, ``K-550``, ``Mg_glycerolated``.

        Raises
        ------
        SheetError
            If the text names no known treatment or a temperature outside 60 to 1200 degrees.
        """
        words = [w for w in re.split(r"[\s_\-]+", text.strip().lower().replace("°", "")) if w]
        cation = None
        if len(words) > 1 and words[0] in _CATIONS:
            cation = _CATIONS[words.pop(0)]
        joined = "_".join(words)
        if joined in _WORDS:
            return cls(_WORDS[joined], cation=cation)
        heated = re.fullmatch(r"(?:heated_?|h_?|t_?)?(\d{2,4})(?:_?c)?", joined)
        if heated and 60 <= float(heated.group(1)) <= 1200:
            return cls("heated", float(heated.group(1)), cation)
        raise SheetError(
            f"treatment {text!r} is not known",
            fix="write air_dried, glycolated, glycerolated, heated_400 (any temperature in C) or none, "
            "with a saturating cation in front if there is one, such as K_heated_300",
        )

    @property
    def name(self) -> str:
        """The treatment as the sample sheet writes it, such as ``heated_550`` or ``Mg_glycerolated``."""
        base = self.condition if self.temperature is None else f"heated_{self.temperature:g}"
        return f"{self.cation}_{base}" if self.cation else base

    @property
    def label(self) -> str:
        """The treatment in words for people."""
        words = {
            "air_dried": "air-dried", "glycolated": "ethylene glycol", "glycerolated": "glycerol",
            "heated": f"heated {self.temperature or 0:g} °C", "none": "untreated powder",
        }[self.condition]  # fmt: skip
        return f"{self.cation}-saturated, {words}" if self.cation else words
