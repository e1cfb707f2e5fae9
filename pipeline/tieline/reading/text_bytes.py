"""The bytes of a text table as UTF-8: unpacking with a bound, and the encoding where it is not given."""

from __future__ import annotations

import codecs
import zlib

import pyarrow as pa

from tieline.errors import InputError, Problem
from tieline.reading.input_file import InputFile

CHUNK = 1 << 20
_BYTE_ORDER_MARKS = (
    (codecs.BOM_UTF8, "utf-8-sig"),
    (codecs.BOM_UTF32_LE, "utf-32"),
    (codecs.BOM_UTF16_LE, "utf-16"),
    (codecs.BOM_UTF16_BE, "utf-16"),
)


def utf8_bytes(file: InputFile, encoding: str | None, largest: int) -> tuple[pa.Buffer, str]:
    """The file's text as UTF-8 without byte order mark, and the encoding it was in.

    Gzip is unpacked up to `largest` bytes. UTF-8 data are checked and passed on without a copy.
    Raises InputError for an unknown or wrong encoding, damaged gzip data, NUL bytes and an oversized file.
    """
    data = file.data
    if _starts_with(data, b"\x1f\x8b"):
        data = _gunzip(file, largest)
    name = _codec_name(file, encoding) if encoding else _find_encoding(file, data)
    if name in ("utf-8", "ascii"):
        _check_utf8(file, data)
        text = data.slice(3) if _starts_with(data, codecs.BOM_UTF8) else data
    else:
        text = _transcode(file, data, name)
    _refuse_nul(file, text)
    return text, name


def _starts_with(data: pa.Buffer, mark: bytes) -> bool:
    return bytes(memoryview(data)[: len(mark)]) == mark


def _gunzip(file: InputFile, largest: int) -> pa.Buffer:
    unpack = zlib.decompressobj(wbits=31)
    sink = pa.BufferOutputStream()
    source = memoryview(file.data)
    position, size = 0, 0
    try:
        while position < len(source) or unpack.unconsumed_tail:
            pending = unpack.unconsumed_tail or bytes(source[position : position + CHUNK])
            position += 0 if unpack.unconsumed_tail else CHUNK
            piece = unpack.decompress(pending, CHUNK)
            size += len(piece)
            if size > largest:
                raise InputError(
                    Problem(f"unpacks to more than {largest} bytes.", file.path, remedy=_RAISE_LIMIT)
                )
            sink.write(piece)
            if unpack.eof:
                left = unpack.unused_data + bytes(source[position:])
                if not left.startswith(b"\x1f\x8b"):
                    break
                source, position = memoryview(left), 0
                unpack = zlib.decompressobj(wbits=31)
    except zlib.error as error:
        raise InputError(Problem(f"damaged gzip data ({error}).", file.path)) from error
    if not unpack.eof:
        raise InputError(
            Problem("gzip data end before their end mark.", file.path, remedy="Copy the file again.")
        )
    return sink.getvalue()


_RAISE_LIMIT = "If that is right, raise ingest.limits.expanded_mb."


def _codec_name(file: InputFile, encoding: str) -> str:
    try:
        name = codecs.lookup(encoding).name
        if not codecs.lookup(encoding)._is_text_encoding:
            raise LookupError
    except LookupError:
        remedy = "Known are utf-8, utf-16, windows-1252, latin-1 and the other names Python knows."
        raise InputError(
            Problem(f'no text encoding is called "{encoding}".', file.path, remedy=remedy)
        ) from None
    return name


def _find_encoding(file: InputFile, data: pa.Buffer) -> str:
    for mark, name in _BYTE_ORDER_MARKS:
        if _starts_with(data, mark):
            return "utf-8" if name == "utf-8-sig" else name
    head = bytes(memoryview(data)[:4096])
    even, odd = head[0::2].count(0), head[1::2].count(0)
    if len(head) > 3 and max(even, odd) > len(head) // 8 and min(even, odd) * 8 < max(even, odd):
        return "utf-16-le" if odd > even else "utf-16-be"
    return "utf-8" if _first_bad_byte(data) is None else "cp1252"


def _first_bad_byte(data: pa.Buffer) -> int | None:
    """Place of the first byte that is no UTF-8."""
    decoder = codecs.getincrementaldecoder("utf-8")()
    view = memoryview(data)
    for start in range(0, len(view), CHUNK):
        last = start + CHUNK >= len(view)
        pending = len(decoder.getstate()[0])
        piece = bytes(view[start : start + CHUNK])
        if not pending and piece.isascii():  # seen in a tenth of the time
            continue
        try:
            decoder.decode(piece, last)
        except UnicodeDecodeError as error:
            return start + error.start - pending
    return None


def _check_utf8(file: InputFile, data: pa.Buffer) -> None:
    bad = _first_bad_byte(data)
    if bad is not None:
        raise InputError(_bad_encoding(file, data, bad, "utf-8"))


def _transcode(file: InputFile, data: pa.Buffer, name: str) -> pa.Buffer:
    decoder = codecs.getincrementaldecoder(name)()
    view, sink = memoryview(data), pa.BufferOutputStream()
    for start in range(0, max(len(view), 1), CHUNK):
        try:
            text = decoder.decode(view[start : start + CHUNK], start + CHUNK >= len(view))
            sink.write(text.encode("utf-8"))
        except UnicodeError as error:
            place = start + getattr(error, "start", 0)
            raise InputError(_bad_encoding(file, data, place, name)) from error
    buffer = sink.getvalue()
    return buffer.slice(3) if _starts_with(buffer, codecs.BOM_UTF8) else buffer


def _bad_encoding(file: InputFile, data: pa.Buffer, place: int, name: str) -> Problem:
    before = memoryview(data)[:place]
    row = bytes(before).count(b"\n") + 1 if len(before) < 1 << 28 else None
    return Problem(
        f"byte {place} does not fit the encoding {name}.",
        file.path,
        row,
        remedy='State the encoding of the table, for example encoding = "windows-1252".',
    )


def _refuse_nul(file: InputFile, text: pa.Buffer) -> None:
    view = memoryview(text)
    for start in range(0, len(view), CHUNK):
        if b"\x00" in bytes(view[start : start + CHUNK]):
            remedy = "Export the table again as text, or state its encoding."
            raise InputError(
                Problem("contains NUL bytes; this is not a text table.", file.path, remedy=remedy)
            )
