"""Which column of a table is which, by the names above it."""

from __future__ import annotations

import re
from dataclasses import dataclass

from xrdmica.scans.read.raw import IntensityUnit

__all__ = ["ColumnNames", "clean_name", "name_columns"]

_ANGLE = ("twotheta", "2theta", "2th", "tth", "twoth", "2t", "ttheta")
_ANGLE_LOOSE = (
    "angle", "pos", "position", "pos2th", "pos2theta", "deg", "degrees", "degree", "twothetadeg", "angle2theta", "x2theta",
)  # fmt: skip
_INTENSITY = (
    "counts", "count", "intensity", "cps", "i", "int", "iobs", "yobs", "intensities", "countrate", "rawcounts",
    "totalcounts", "countspersecond", "counts/s", "y", "signal", "detector", "observed",
)  # fmt: skip
_SIGMA = ("sigma", "esd", "error", "err", "sd", "stddev", "uncertainty", "sig", "standarderror", "sigmai", "e", "std")
_SPACING = ("d", "dspacing", "dvalue", "dhkl", "spacing")
_TRANSFER = ("q", "qvalue", "qvector")
_THETA = ("theta", "omega", "th")
_UNIT = re.compile(r"[\(\[]([^\)\]]*)[\)\]]")


@dataclass(frozen=True)
class ColumnNames:
    """Where the columns stand; -1 for a column that is not there.

    Attributes
    ----------
    names : tuple of str
        As written.
    angle, intensity, sigma, spacing, transfer, theta : int
        Index of the two-theta, intensity, standard error, d, q and theta column.
    unit : str
        Unit of the intensities.
    radians : bool
        Whether the header says that angles are in radians.
    per_nanometre : bool
        Whether the header says that q is in 1/nm.
    """

    names: tuple[str, ...]
    angle: int
    intensity: int
    sigma: int
    spacing: int
    transfer: int
    theta: int
    unit: IntensityUnit
    radians: bool
    per_nanometre: bool = False

    @property
    def recognised(self) -> bool:
        """Whether at least one name is a known one."""
        return max(self.angle, self.intensity, self.spacing, self.transfer, self.theta) >= 0


def clean_name(name: str) -> str:
    """A column name in small letters without units, blanks and signs: ``2-Theta [deg]`` becomes ``2theta``."""
    name = _UNIT.sub("", name.lower().replace("ϑ", "θ").replace("θ", "theta").replace("two theta", "2theta"))
    return re.sub(r"[\s_\-°.*'\"#!:%$^\\]+", "", name)


def _find(cleaned: list[str], exact: tuple[str, ...], starts: tuple[str, ...] = ()) -> int:
    for wanted in exact:
        if wanted in cleaned:
            return cleaned.index(wanted)
    for index, name in enumerate(cleaned):
        if starts and name.startswith(starts):
            return index
    return -1


def name_columns(names: list[str]) -> ColumnNames:
    """Tell the columns apart by name.

    An exact name wins over a longer one that begins with it, so that ``twotheta`` is taken before ``twotheta_cuka``.

    Parameters
    ----------
    names : list of str
        The cells of the header line.
    """
    cleaned = [clean_name(name) for name in names]
    angle = _find(cleaned, (*_ANGLE, *_ANGLE_LOOSE), ("2theta", "twotheta", "angle2", "pos"))
    taken = ["" if index == angle else name for index, name in enumerate(cleaned)]
    intensity = _find(taken, _INTENSITY, ("intensity", "counts", "cps", "int"))
    units = " ".join(_UNIT.findall(names[intensity].lower())) if intensity >= 0 else ""
    unit: IntensityUnit = "unknown"
    if intensity >= 0:
        rate = cleaned[intensity].startswith(("cps", "countrate", "counts/s", "countspers"))
        if rate or re.search(r"cps|counts?\s*/\s*s|s\^?-1|per s", units):
            unit = "counts per second"
        elif cleaned[intensity].startswith(("count", "rawcounts", "totalcounts")) or "count" in units or "cts" in units:
            unit = "counts"
    angle_unit = " ".join(_UNIT.findall(names[angle].lower())) if angle >= 0 else ""
    transfer = _find(taken, _TRANSFER)
    return ColumnNames(
        tuple(name.strip() for name in names), angle, intensity, _find(taken, _SIGMA), _find(taken, _SPACING),
        transfer, _find(taken, _THETA), unit, "rad" in angle_unit and "grad" not in angle_unit,
        transfer >= 0 and any("nm" in unit for unit in _UNIT.findall(names[transfer].lower())),
    )  # fmt: skip
