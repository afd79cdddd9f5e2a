"""What a file name such as ``S12_K-550.xy`` says of sample, mount and treatment."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

from xrdmica.errors import SheetError
from xrdmica.scans.scan import Mount
from xrdmica.scans.treatment import Treatment

__all__ = ["NameGuess", "guess_from_name"]

_MOUNTS: dict[str, Mount] = {
    "random": "random", "powder": "random", "bulk": "random", "oriented": "oriented", "orientated": "oriented",
}  # fmt: skip
_PACKED = (".gz",)


@dataclass(frozen=True)
class NameGuess:
    """Reading of a file name.

    Attributes
    ----------
    sample : str
        The name without its ending on mount and treatment.
    mount, treatment
        As the ending says, else random and none.
    known : bool
        Whether the name has an ending on mount or treatment.
    bare_number : bool
        Whether the ending is a number alone, which may be a temperature or a sample number.
    notes : tuple of str
        What was supposed.
    """

    sample: str
    mount: Mount
    treatment: Treatment
    known: bool
    bare_number: bool
    notes: tuple[str, ...]


def _parse(text: str) -> Treatment | None:
    try:
        return Treatment.parse(text)
    except SheetError:
        return None


def _split_ending(words: list[str]) -> tuple[list[str], Treatment | None, str]:
    """Take the longest ending of up to three words that names a treatment."""
    for length in (3, 2, 1):
        if len(words) > length:
            ending = "_".join(words[-length:])
            state = _parse(ending)
            if state is not None:
                return words[:-length], state, ending
    return words, None, ""


def guess_from_name(path: str | Path, *, numbers: bool = True) -> NameGuess:
    """Read sample, mount and treatment from a file name.

    Parameters
    ----------
    path : str or Path
        The file; only its name is used.
    numbers : bool
        Whether a bare number at the end (``S12_550``) may be a heating temperature.

    Returns
    -------
    NameGuess
        With mount random and treatment none when the name says nothing.
    """
    name = Path(path).name
    for packed in _PACKED:
        name = name.removesuffix(packed)
    stem = re.sub(r"\.[A-Za-z]{2,4}$", "", name) or name
    words = [word for word in re.split(r"[_\s]+", stem) if word]
    if len(words) == 1 and "-" in stem:
        words = [word for word in stem.split("-") if word]
        joiner = "-"
    else:
        joiner = "_"
    mount: Mount | None = None
    if len(words) > 1 and words[-1].lower() in _MOUNTS:
        mount = _MOUNTS[words.pop().lower()]
    rest, state, ending = _split_ending(words)
    bare = bool(re.fullmatch(r"\d+", ending))
    # only round temperatures that furnaces are set to: S_0117 is no heated sample
    if bare and not (numbers and re.fullmatch(r"[1-9]\d?[05]0", ending)):
        rest, state, bare = words, None, False
    if len(rest) > 1 and mount is None and state is not None and rest[-1].lower() in _MOUNTS:
        mount = _MOUNTS[rest[-1].lower()]
        rest = rest[:-1]
    sample = joiner.join(rest) or stem
    if state is None and mount is None:
        note = "the file name says nothing of mount and treatment: taken as an untreated random powder"
        return NameGuess(sample, "random", Treatment("none"), False, False, (note,))
    if state is None:
        state = Treatment("none" if mount == "random" else "air_dried")
    if mount is None:
        mount = "random" if state.condition == "none" else "oriented"
    note = f"mount {mount} and treatment {state.name} were read from the file name"
    return NameGuess(sample, mount, state, True, bare, (note,))
