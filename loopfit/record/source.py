"""From a path or the standard input to the bytes of one recording, whatever they are packed in."""

from __future__ import annotations

import sys
from pathlib import Path

from loopfit.core.errors import RecordError
from loopfit.record.packed import is_workbook, unpacked
from loopfit.record.table import Table

_FOREIGN = (
    (b"\x89PNG", "a PNG image"), (b"\xff\xd8\xff", "a JPEG image"), (b"GIF8", "a GIF image"), (b"BM", "a BMP image"),
    (b"II*\0", "a TIFF image"), (b"MM\0*", "a TIFF image"), (b"%PDF", "a PDF document"), (b"\x7fELF", "a program"),
    (b"MZ", "a program"), (b"\x89HDF", "an HDF5 file"), (b"MATLAB 5.0", "a MAT file"), (b"TDSm", "a TDMS file"),
    (b"Rar!", "a RAR archive"), (b"7z\xbc\xaf", "a 7-Zip archive"), (b"BZh", "a bzip2 archive"),
    (b"\xfd7zXZ", "an xz archive"),
    (b"(\xb5/\xfd", "a Zstandard archive"), (b"SQLite format 3", "a database"), (b"RIFF", "a sound or video file"),
    (b"ARROW1", "an Arrow file"), (b"{\\rtf", "a text document with formatting"),
)  # fmt: skip


def read_table(source: str) -> Table:
    """Return the table in a file, or in the standard input for "-".

    Raises
    ------
    RecordError
        If there is no such file, it may not be read, or it holds no table.
    """
    return table_from_bytes(source, _bytes_of(source))


def table_from_bytes(source: str, data: bytes) -> Table:
    """Return the table in the bytes of a file: the contents decide what they are, not the name."""
    data = unpacked(source, data)
    if not data:
        raise RecordError(source, "the file is empty")
    if is_workbook(data):
        from loopfit.record.workbook import table_from_workbook

        return table_from_workbook(source, data)
    if data[:4] == b"PAR1":
        from loopfit.record.parquet import table_from_parquet

        return table_from_parquet(source, data)
    _refuse_foreign(source, data)
    from loopfit.record.text import table_from_text

    return table_from_text(source, data)


def _bytes_of(source: str) -> bytes:
    if source == "-":
        return sys.stdin.buffer.read()
    path = Path(source)
    try:
        return path.read_bytes()
    except FileNotFoundError:
        raise RecordError(source, "no such file") from None
    except IsADirectoryError:
        raise RecordError(source, "this is a folder; name a file in it") from None
    except PermissionError:
        raise RecordError(source, "no permission to read this file") from None
    except (OSError, ValueError) as problem:
        reason = getattr(problem, "strerror", None) or str(problem)
        raise RecordError(source, f"cannot be read: {reason}") from None


def _refuse_foreign(source: str, data: bytes) -> None:
    """Raise RecordError for contents that are known to be no table of text."""
    wanted = "give the recording as delimited text, .xlsx or Parquet"
    for magic, what in _FOREIGN:
        # two letters are not enough to call a text an image
        if data.startswith(magic) and (len(magic) > 2 or b"\0" in data[:200]):
            raise RecordError(source, f"this is {what}, not a table; {wanted}")
    wide = data.startswith((b"\xff\xfe", b"\xfe\xff", b"\0\0\xfe\xff"))
    head = data[:4096].replace(b"\0", b"")
    control = sum(byte < 32 and byte not in b"\t\n\r\f\v\x1a\x1b" for byte in head)
    if control > 0.02 * max(len(head), 1) or (len(head) < 0.3 * len(data[:4096]) and not wide):
        raise RecordError(source, f"this is a binary file, not a table; {wanted}")
    text = head.lstrip(b"\xef\xbb\xbf\xff\xfe \t\r\n").lower()
    if text.startswith((b"<!doctype html", b"<html", b"<head", b"<body")):
        raise RecordError(source, f"this is an HTML page, perhaps an error message of the server; {wanted}")
    if text.startswith((b"<?xml", b"<svg")):
        raise RecordError(source, f"this is XML, not a table; {wanted}")
    if text.startswith(b"{") or (
        (text.startswith(b"[") and text[1:].lstrip()[:1] in (b"{", b"[", b'"', b"]")) or _is_array(text)
    ):
        raise RecordError(source, f"this is JSON, not a table; {wanted}")


def _is_array(text: bytes) -> bool:
    """Return whether a text opens like a JSON array of numbers; "[Header]" of a settings file does not."""
    return (
        text.startswith(b"[")
        and text[1:].lstrip()[:1].isdigit()
        and b"," in text[:200]
        and b"]" not in text.split(b",")[0]
    )
