"""What the lines above the numbers say: tube, sample, counting time."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping

from xrdmica.errors import XrdmicaError
from xrdmica.radiation import TUBES, Radiation

__all__ = ["counting_seconds", "header_items", "header_radiation", "radiation_from_wavelength"]

_MARKS = "#!;'*/%_\" \t"
_PAIR = re.compile(r"^([^\W\d_][^:=,;\t]{0,60}?)\s*(?:[:=,;\t])\s*(\S.*)$")
_METALS = {"copper": "Cu", "cobalt": "Co", "iron": "Fe", "chromium": "Cr", "molybdenum": "Mo"}
_LINE = re.compile(r"\b(Cu|Co|Fe|Cr|Mo)[\s_\-]*K[\s_\-]*(?:\\?a|α|alpha)", re.IGNORECASE)
_NUMBER = re.compile(r"[-+]?\d+(?:[.,]\d+)?(?:[eE][-+]?\d+)?")
_ITEMS, _LENGTH = 200, 200
# a wavelength this close [angstrom] to a line of a tube, or to the mean of its doublet, means that tube
_SAME_LINE = 0.0008


def header_items(lines: Iterable[str]) -> dict[str, str]:
    """Pairs of key and value in header lines, as text.

    Parameters
    ----------
    lines : iterable of str
        Lines above (or below) the numbers.

    Returns
    -------
    dict
        At most 200 items; a repeated key keeps its first value.
    """
    items: dict[str, str] = {}
    for line in lines:
        match = _PAIR.match(line.strip().lstrip(_MARKS).replace('"', ""))
        if match and len(items) < _ITEMS:
            items.setdefault(match.group(1).strip(), match.group(2).strip(" ,;\t")[:_LENGTH])
    return items


def _number(text: str) -> float | None:
    match = _NUMBER.search(text)
    return float(match.group().replace(",", ".")) if match else None


def radiation_from_wavelength(wavelength: float) -> Radiation:
    """The tube whose K-alpha1 line or doublet mean the wavelength [angstrom] is, else that single wavelength.

    Laboratory headers give K-alpha1 or the mean while the scan holds both lines (common practice).
    """
    for metal in TUBES:
        tube = Radiation.tube(metal)
        if min(abs(wavelength - tube.wavelength), abs(wavelength - tube.mean_wavelength)) < _SAME_LINE:
            return tube
    return Radiation.from_wavelength(wavelength)


def _metal(value: str) -> Radiation | None:
    word = re.split(r"[\s,;/(]", value.strip(), maxsplit=1)[0].lower()
    if word in _METALS:
        return Radiation.tube(_METALS[word])
    try:
        return None if _NUMBER.fullmatch(value.strip()) else Radiation.parse(value)
    except XrdmicaError:
        match = re.match(r"(cu|co|fe|cr|mo)\b", value.strip(), re.IGNORECASE)
        return Radiation.tube(match.group(1).capitalize()) if match else None


def header_radiation(items: Mapping[str, str], lines: Iterable[str] = ()) -> tuple[Radiation | None, str | None]:
    """What a header says of the tube.

    Parameters
    ----------
    items : mapping
        From `header_items`.
    lines : iterable of str
        The header lines, for a mention in free text such as ``Cu K-alpha``.

    Returns
    -------
    Radiation or None
        The tube, None when the header does not say.
    str or None
        A sentence when anode and wavelength contradict each other.
    """
    anode: Radiation | None = None
    wave: Radiation | None = None
    for key, value in items.items():
        name = re.sub(r"[\s_\-]+", "", key.lower())
        if "ratio" in name or "beta" in name or "filter" in name or re.search(r"(?:alpha|α|a)2$", name):
            continue
        if any(word in name for word in ("anode", "tube", "target", "radiation", "xraysource")):
            anode = anode or _metal(value)
        if any(word in name for word in ("wavelength", "lambda", "kalpha", "radiation", "ka1")):
            found = _number(value)
            if found is not None and 0.1 <= found <= 5.0 and wave is None and "ka" not in value.lower():
                single = name == "singlewavelength"
                wave = Radiation.from_wavelength(found) if single else radiation_from_wavelength(found)
            elif found is None or "ka" in value.lower():
                anode = anode or _metal(value)
    if anode and wave and abs(anode.mean_wavelength - wave.mean_wavelength) > 0.01:
        return None, f"the header names both {anode.name} and a wavelength of {wave.wavelength:g} angstrom"
    if anode or wave:
        return anode or wave, None
    mentions = {match.group(1).capitalize() for line in lines for match in _LINE.finditer(line)}
    return (Radiation.tube(mentions.pop()), None) if len(mentions) == 1 else (None, None)


def counting_seconds(items: Mapping[str, str]) -> float | None:
    """Counting time per step [s], when a header item gives it."""
    for key, value in items.items():
        name = re.sub(r"[\s_\-]+", "", key.lower())
        if re.search(r"time(?:per|/)(?:step|point)|steptime|count(?:ing)?time|secondsper(?:step|point)", name):
            found = _number(value)
            if found is not None and 0 < found < 1e6:
                minutes = re.search(r"\bmin", f"{key} {value}".lower())
                return found * (60.0 if minutes else 1.0)
    return None
