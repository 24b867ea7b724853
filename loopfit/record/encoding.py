"""From bytes to text: byte order marks, UTF-16 by its zero bytes, UTF-8, else Windows-1252."""

from __future__ import annotations

import codecs

_MARKS = (
    (codecs.BOM_UTF8, "utf-8"),
    (codecs.BOM_UTF32_LE, "utf-32-le"),  # before UTF-16: it begins with the same two bytes
    (codecs.BOM_UTF32_BE, "utf-32-be"),
    (codecs.BOM_UTF16_LE, "utf-16-le"),
    (codecs.BOM_UTF16_BE, "utf-16-be"),
)


def decode(data: bytes) -> tuple[str, str, int]:
    """Return the text, the name of the encoding, and the number of bytes that could not be read in it.

    Numbers are ASCII in all of these, so a wrong guess between the 8-bit encodings touches names only.
    """
    for mark, name in _MARKS:
        if data.startswith(mark):
            return _lenient(data[len(mark) :], name)
    wide = _wide_without_mark(data)
    if wide is not None:
        return _lenient(data, wide)
    try:
        return data.decode("utf-8"), "utf-8", 0
    except UnicodeDecodeError:
        pass
    try:
        return data.decode("cp1252"), "cp1252", 0
    except UnicodeDecodeError:
        return data.decode("latin-1"), "latin-1", 0


def _lenient(data: bytes, name: str) -> tuple[str, str, int]:
    try:
        return data.decode(name), name, 0
    except UnicodeDecodeError:
        text = data.decode(name, errors="replace")
        return text, name, text.count("\ufffd")


def _wide_without_mark(data: bytes) -> str | None:
    """Return the UTF-16 byte order in which every other byte of the head is zero, else None."""
    head = data[:2000]
    head = head[: len(head) // 2 * 2]
    if len(head) < 4:
        return None
    even, odd = head[0::2].count(0), head[1::2].count(0)
    half = len(head) // 2
    if odd > 0.7 * half and even < 0.1 * half:
        return "utf-16-le"
    if even > 0.7 * half and odd < 0.1 * half:
        return "utf-16-be"
    return None
