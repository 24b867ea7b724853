"""Gzip and zip: one recording inside, unpacked within a bound on memory."""

from __future__ import annotations

import io
import zipfile
import zlib

from loopfit.core.errors import RecordError

LARGEST = 256 * 1024 * 1024  # bytes after unpacking; a million rows of ten columns take about 100 MB
_BLOCK = 1 << 20


def unpacked(source: str, data: bytes) -> bytes:
    """Return the bytes inside gzip or zip, at most two layers deep; other bytes as they are.

    Raises
    ------
    RecordError
        If the archive is damaged, holds several files, or unpacks to more than `LARGEST` bytes.
    """
    for _ in range(2):
        if data[:2] == b"\x1f\x8b":
            data = _gunzip(source, data)
        elif data[:4] in (b"PK\x03\x04", b"PK\x05\x06") and not is_workbook(data):
            data = _unzip(source, data)
        else:
            break
    return data


def is_workbook(data: bytes) -> bool:
    """Return whether the bytes are a workbook: .xlsx or .ods (a zip with known parts) or the older .xls."""
    if data[:8] == b"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1":
        return True
    if data[:4] != b"PK\x03\x04":
        return False
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            names = archive.namelist()
    except (zipfile.BadZipFile, ValueError, OSError, NotImplementedError):
        return False
    return any(name.startswith("xl/") or name.endswith("/workbook.xml") for name in names) or "content.xml" in names


def _too_large(source: str) -> RecordError:
    return RecordError(
        source, f"unpacks to more than {LARGEST // 2**20} MB; unpack it and keep the part with the step test"
    )


def _gunzip(source: str, data: bytes) -> bytes:
    whole = bytearray()
    rest = data
    try:
        while rest[:2] == b"\x1f\x8b":
            engine = zlib.decompressobj(wbits=31)
            piece = engine.decompress(rest, _BLOCK)
            while True:
                whole += piece
                if len(whole) > LARGEST:
                    raise _too_large(source)
                if engine.eof:
                    break
                if not piece and not engine.unconsumed_tail:
                    raise RecordError(source, "the gzip data end too early; fetch the file again")
                piece = engine.decompress(engine.unconsumed_tail, _BLOCK)
            rest = engine.unused_data
    except zlib.error:
        raise RecordError(source, "the gzip data are damaged; fetch the file again") from None
    return bytes(whole)


def _unzip(source: str, data: bytes) -> bytes:
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            members = [m for m in archive.infolist() if not m.is_dir() and not m.filename.startswith(("__MACOSX", "."))]
            if len(members) != 1:
                names = ", ".join(member.filename for member in members[:5])
                raise RecordError(
                    source,
                    f"the archive holds {len(members)} files ({names}); unpack it and name one"
                    if members
                    else "the archive is empty",
                )
            if members[0].flag_bits & 1:
                raise RecordError(source, "the archive is locked with a password; unpack it first")
            with archive.open(members[0]) as stream:
                inside = stream.read(LARGEST + 1)
    except (
        zipfile.BadZipFile,
        zlib.error,
        EOFError,
        OSError,
        NotImplementedError,
        ValueError,
        RuntimeError,
    ) as problem:
        if isinstance(problem, RecordError):
            raise
        raise RecordError(source, "the zip archive is damaged; fetch the file again") from None
    if len(inside) > LARGEST:
        raise _too_large(source)
    return inside
