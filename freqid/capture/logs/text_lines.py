"""Which lines of text does a file hold? Encodings and line ends, undone.

Byte-order marks are honoured; without one the file is UTF-16 if every other byte is zero, else UTF-8,
else Latin-1 (ISO/IEC 8859-1), in which every byte is a character. A file cut in the middle of a
character loses that character only.
"""

from __future__ import annotations

import codecs

__all__ = ["decoded", "split_lines"]

_MARKS = (
    (codecs.BOM_UTF8, "utf-8"),
    (codecs.BOM_UTF16_LE, "utf-16-le"),
    (codecs.BOM_UTF16_BE, "utf-16-be"),
)
_LONGEST_CHARACTER = 4  # bytes, UTF-8


def decoded(content: bytes) -> str | None:
    """The text in `content` without a byte-order mark; None where it is no text (it holds zero bytes)."""
    for mark, encoding in _MARKS:
        if content.startswith(mark):
            return content[len(mark) :].decode(encoding, errors="replace" if "16" in encoding else "ignore")
    if encoding_without_mark := _utf16_without_mark(content):
        return content.decode(encoding_without_mark, errors="replace")
    if b"\x00" in content:
        return None
    return _utf8_or_latin1(content)


def split_lines(text: str) -> list[str]:
    """The lines of `text`, ended by LF, CR LF or CR."""
    return text.replace("\r\n", "\n").replace("\r", "\n").split("\n")


def _utf16_without_mark(content: bytes) -> str | None:
    beginning = content[:512]
    half = len(beginning) // 2
    if half < 4:
        return None
    even, odd = beginning[0::2].count(0), beginning[1::2].count(0)
    if odd > 0.8 * half and even == 0:
        return "utf-16-le"
    return "utf-16-be" if even > 0.8 * half and odd == 0 else None


def _utf8_or_latin1(content: bytes) -> str:
    try:
        return content.decode("utf-8")
    except UnicodeDecodeError as fault:
        if fault.start > 0 and len(content) - fault.start < _LONGEST_CHARACTER and "unexpected end" in fault.reason:
            return content[: fault.start].decode("utf-8")
        return content.decode("latin-1")
