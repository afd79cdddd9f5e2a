"""Where the data that ships with the program stands, whether installed, editable or in a clone."""

from __future__ import annotations

from pathlib import Path

from xrdmica.errors import XrdmicaError

__all__ = ["data_folder"]


def data_folder(name: str) -> Path:
    """Find a data folder that ships with the program.

    Parameters
    ----------
    name : str
        ``"structures"`` or ``"demo_patterns"``.

    Returns
    -------
    pathlib.Path
        The existing folder.

    Raises
    ------
    XrdmicaError
        If the installation is incomplete.
    """
    package = Path(__file__).resolve().parent
    for place in (package / "_data" / name, package.parent / name):
        if place.is_dir():
            return place
    raise XrdmicaError(f"the folder {name} is missing from this installation", fix="install xrdmica again")
