"""A file as text: what it is read from, how it is decoded, where its lines end."""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Mapping
from pathlib import Path

from darkedge.analysis.errors import CaptureError

_GZIP = b"\x1f\x8b"
_SIGNATURES: Mapping[bytes, str] = {
    b"\x89PNG": "a PNG image",
    b"\xff\xd8\xff": "a JPEG image",
    b"GIF8": "a GIF image",
    b"BM": "a bitmap image",
    b"PK\x03\x04": "a zip archive or workbook",
    b"%PDF": "a PDF document",
    b"PAR1": "a Parquet file",
    b"\x89HDF": "an HDF5 file",
    b"\x7fELF": "a program",
    b"MZ": "a program",
}
_NO_CONTROLS = bytes({*range(32, 256), *b"\t\n\r\x0c\x1a"})
_SNIFF_BYTES = 8192


def read_text(path: Path) -> bytes:
    """Read a text file as UTF-8 bytes whose lines end in LF.

    Gzip is unpacked; a byte-order mark, CR and CRLF go; UTF-16 is recognised by its mark or its zero bytes; bytes
    that are no UTF-8 are taken as Latin-1, which never changes a number.

    Raises
    ------
    CaptureError
        No such file, a folder, no permission, an empty file, a damaged gzip file, bytes that are no text.
    """
    where = str(path)
    data = _bytes(path)
    if data.startswith(_GZIP):
        try:
            data = gzip.decompress(data)
        except (OSError, EOFError, zlib.error) as error:
            raise CaptureError("the gzip file is damaged", where=where, found=str(error)) from error
    text = _utf8(data, where)
    if b"\r" in text:
        text = text.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    if not text or text.isspace():
        raise CaptureError("the file is empty", where=where, wanted="a capture", mend="export it again")
    return text


def _bytes(path: Path) -> bytes:
    try:
        return path.read_bytes()
    except FileNotFoundError as error:
        raise CaptureError("no such file", where=str(path), mend="check the path") from error
    except IsADirectoryError as error:
        raise CaptureError("a folder, not a file", where=str(path), mend="name the captures in it") from error
    except OSError as error:
        reason = error.strerror or str(error)
        raise CaptureError("the file cannot be read", where=str(path), found=reason, mend="check the path") from error


def _utf8(data: bytes, where: str) -> bytes:
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return _from_utf16(data, "utf-16", where)
    data = data.removeprefix(b"\xef\xbb\xbf")
    head = data[:_SNIFF_BYTES]
    for signature, kind in _SIGNATURES.items():
        if head.startswith(signature) and _has_controls(head):
            raise _not_text(where, kind)
    if b"\x00" in head:
        if head[1::2].count(0) > len(head) // 4:
            return _from_utf16(data, "utf-16-le", where)
        if head[0::2].count(0) > len(head) // 4:
            return _from_utf16(data, "utf-16-be", where)
    if _has_controls(head):
        raise _not_text(where, "bytes that are no text")
    if data.isascii():
        return data
    try:
        data.decode("utf-8")
    except UnicodeDecodeError:
        return data.decode("latin-1").encode("utf-8")
    return data


def _from_utf16(data: bytes, encoding: str, where: str) -> bytes:
    try:
        text = data.decode(encoding)
    except UnicodeDecodeError as error:
        raise _not_text(where, "bytes that are no text") from error
    encoded = text.removeprefix("\ufeff").encode("utf-8", errors="replace")
    if _has_controls(encoded[:_SNIFF_BYTES]):
        raise _not_text(where, "bytes that are no text")
    return encoded


def _has_controls(data: bytes) -> bool:
    return bool(data.translate(None, delete=_NO_CONTROLS))


def _not_text(where: str, found: str) -> CaptureError:
    return CaptureError("not a text file", where=where, found=found, mend="export the capture as CSV")
