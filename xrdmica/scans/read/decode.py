"""From bytes to text lines, whatever encoding and line ends the exporting computer used."""

from __future__ import annotations

import re

__all__ = ["looks_like_text", "text_lines"]

_HEAD = 65536
_CONTROL = re.compile(r"[\x00-\x08\x0e-\x1b]")


def _utf16_without_mark(head: bytes) -> str | None:
    """Name the byte order when nearly every second byte is zero, as in UTF-16 text that is mostly digits."""
    if len(head) < 16 or b"\x00" not in head:
        return None
    even, odd = head[0::2], head[1::2]
    if odd.count(0) > 0.9 * len(odd) and even.count(0) == 0:
        return "utf-16-le"
    if even.count(0) > 0.9 * len(even) and odd.count(0) == 0:
        return "utf-16-be"
    return None


def decode(data: bytes) -> str:
    """Decode UTF-8 or UTF-16 (with or without byte order mark) and, failing these, the western one-byte code page.

    Parameters
    ----------
    data : bytes
        Content of the file.

    Returns
    -------
    str
        The text; characters that do not exist in the encoding are replaced.
    """
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return data.decode("utf-16", errors="replace")
    if data.startswith(b"\xef\xbb\xbf"):
        return data.decode("utf-8-sig", errors="replace")
    order = _utf16_without_mark(data[:_HEAD])
    if order:
        return data.decode(order, errors="replace")
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError:
        return data.decode("cp1252", errors="replace")


def looks_like_text(head: bytes) -> bool:
    """Whether the first bytes of a file decode to text without control characters."""
    text = decode(head)
    return len(_CONTROL.findall(text)) <= 0.002 * len(text)


def text_lines(data: bytes) -> list[str]:
    """Split the text at CRLF, LF or CR, so that line numbers are those of an editor."""
    return decode(data).replace("\r\n", "\n").replace("\r", "\n").split("\n")
