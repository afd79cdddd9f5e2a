"""One sentence for files that are no scan that can be read, judged by their first bytes."""

from __future__ import annotations

from pathlib import Path

from xrdmica.errors import ScanError
from xrdmica.scans.read.raw import NotAScanError

__all__ = ["refuse_foreign", "refuse_unknown"]

_EXPORT = "export the scan from the diffractometer as two columns of text, two-theta and counts"
# first bytes of common containers (published file signatures)
_SIGNATURES: tuple[tuple[bytes, str], ...] = (
    (b"PK\x03\x04", "a zip container, perhaps a spreadsheet workbook, and these are not read"),
    (b"\xd0\xcf\x11\xe0", "an office document in binary form, and these are not read"),
    (b"%PDF", "a PDF document and holds no scan that can be read"),
    (b"\x89PNG", "a picture and holds no scan that can be read"),
    (b"\xff\xd8\xff", "a picture and holds no scan that can be read"),
    (b"BZh", "a bzip2 archive, and only gzip is unpacked here"),
    (b"\xfd7zXZ", "an xz archive, and only gzip is unpacked here"),
)


def refuse_foreign(head: bytes, path: Path) -> None:
    """Raise for content that no reader should try.

    Parameters
    ----------
    head : bytes
        First bytes of the file.
    path : Path
        For the message.

    Raises
    ------
    ScanError
        If the content is a known container or a web page.
    """
    for signature, words in _SIGNATURES:
        if head.startswith(signature):
            raise ScanError(f"{path}: this is {words}", fix=_EXPORT)
    start = head[:2048].lstrip(b"\xef\xbb\xbf \t\r\n").lower()
    if start.startswith((b"<!doctype html", b"<html")) or b"<html" in start:
        raise NotAScanError(
            f"{path}: this is a web page (HTML), not a scan",
            fix="download the file itself instead of the page that shows it",
        )


def refuse_unknown(head: bytes, path: Path) -> ScanError:
    """The sentence for a file that no reader recognises."""
    return ScanError(f"{path}: this is a binary file of a kind that is not known here", fix=_EXPORT)
