"""The one root error: what happened, why, what to do about it."""

from __future__ import annotations

__all__ = ["ChemistryError", "FitError", "ScanError", "SheetError", "StructureError", "XrdmicaError"]


class XrdmicaError(Exception):
    """An error a user can act on.

    Parameters
    ----------
    what : str
        What is wrong and where (file, line, column), without a full stop.
    why : str, optional
        The reason, when it is not obvious from `what`.
    fix : str
        What to do about it; an error without a way out is not a message, so this cannot be left out.
    """

    def __init__(self, what: str, *, why: str | None = None, fix: str) -> None:
        self.what = what
        self.why = why
        self.fix = fix
        reason = f" ({why})" if why else ""
        super().__init__(f"{what}{reason}: {fix}")

    def __reduce__(self) -> tuple[object, ...]:
        # keyword-only arguments do not survive the default pickling that worker processes rely on
        return (_rebuild, (type(self), self.what, self.why, self.fix))


def _rebuild(kind: type[XrdmicaError], what: str, why: str | None, fix: str) -> XrdmicaError:
    return kind(what, why=why, fix=fix)


class ChemistryError(XrdmicaError):
    """A formula or an analysis that cannot be used."""


class StructureError(XrdmicaError):
    """A phase file or a structure that cannot be used."""


class ScanError(XrdmicaError):
    """A diffractometer export that cannot be read."""


class SheetError(XrdmicaError):
    """A sample sheet that cannot be used."""


class FitError(XrdmicaError):
    """A fit that cannot be set up from what was given."""
