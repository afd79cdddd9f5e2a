"""From bytes to text lines, whatever encoding and line ends the exporting computer used."""

from __future__ import annotations

import re

__all__ = ["looks_like_text", "text_lines"]

_HEAD = 65536
_PAIR = re.compile(rb"[\x81-\x9f][\x40-\x7e\x80-\xfc]")
_CONTROL = bytes([*range(0x09), *range(0x0E, 0x1C)])


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
    """Decode UTF-8 or UTF-16 (with or without byte order mark) and, failing these, Shift-JIS or the western one-byte code page.

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
        return _japanese(data) or data.decode("cp1252", errors="replace")


def _japanese(data: bytes) -> str | None:
    """The text as Shift-JIS when it must be that.

    Most of its kana and common characters begin with a byte from 0x81 to 0x9f, which western text has only for
    curly quotes and dashes; bytes such as the degree sign are legal in both and prove nothing.
    """
    if len(_PAIR.findall(data[:_HEAD])) < 2:
        return None
    try:
        return data.decode("cp932")
    except UnicodeDecodeError as problem:
        return data.decode("cp932", errors="replace") if problem.start > len(data) - 2 else None


def looks_like_text(head: bytes) -> bool:
    """Whether the first bytes of a file decode to text without control characters."""
    # control characters are the same single bytes in every encoding but UTF-16
    wide = head.startswith((b"\xff\xfe", b"\xfe\xff")) or _utf16_without_mark(head) is not None
    plain = decode(head).encode() if wide else head
    return len(plain) - len(plain.translate(None, _CONTROL)) <= 0.002 * len(plain)


def text_lines(data: bytes) -> list[str]:
    """Split the text at CRLF, LF or CR, so that line numbers are those of an editor."""
    return decode(data).replace("\r\n", "\n").replace("\r", "\n").split("\n")
