"""Bytes -> one JSON document, within limits. What the document means belongs to `bundle.py`.

Nothing here trusts its input: size is checked before and during decompression, depth before parsing. An error says
where and what, and never repeats what was sent.
"""

from __future__ import annotations

import zlib
from dataclasses import dataclass
from itertools import accumulate
from typing import Any

import orjson

from cds.errors import InputError, InputTooLargeError


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """How much one input may hold: bytes after decompression, entries of its Bundles, levels of nesting."""

    max_bytes: int
    max_entries: int
    max_depth: int = 200


COMMAND_LINE_LIMITS = Limits(max_bytes=256 * 1024 * 1024, max_entries=200_000)  # ruling 43
SERVICE_LIMITS = Limits(max_bytes=16 * 1024 * 1024, max_entries=20_000)

_GZIP = b"\x1f\x8b"
_GZIP_FORMAT = 31  # zlib's word for a gzip header and the largest window
_PIECE = 4096
_UTF8_MARK = b"\xef\xbb\xbf"
_OTHER_ENCODINGS = (b"\xff\xfe", b"\xfe\xff", b"\x00\x00\xfe\xff")
_NOT_A_NUMBER = (b"NaN", b"Infinity", b"-Infinity")
_KEPT = b'"[]{}'
_ALL_BUT_KEPT = bytes(byte for byte in range(256) if byte not in _KEPT)
_STEP = {ord("["): 1, ord("{"): 1, ord("]"): -1, ord("}"): -1}
_SEND_JSON = "Send one FHIR R4 resource or Bundle as JSON in UTF-8"


def read_json(data: bytes, limits: Limits) -> dict[str, Any]:
    """Read one FHIR resource from `data` (JSON in UTF-8, gzip or not).

    Raises InputTooLargeError beyond `limits`, InputError for everything that is not one JSON object with a
    `resourceType`. Of a key given twice the last one counts.
    """
    text = _plain(data, limits)
    if not text.strip():
        raise InputError("the input is empty", _SEND_JSON)
    _refuse_other_encodings(text)
    if depth_of(text) > limits.max_depth:
        raise InputTooLargeError(
            f"the JSON is nested more than {limits.max_depth} levels deep",
            "Send the resources flat, as entries of one Bundle",
        )
    document = _parse(text)
    if not isinstance(document, dict):
        raise InputError("the JSON is not an object", "Send one FHIR resource or Bundle, not a list or a value")
    if not isinstance(document.get("resourceType"), str) or not document["resourceType"]:
        raise InputError("the JSON object has no resourceType, so it is no FHIR resource", _SEND_JSON)
    return document


def depth_of(text: bytes) -> int:
    """Deepest nesting of arrays and objects, without parsing; exact up to the first place where `text` is no JSON."""
    if b"\\" in text:
        text = text.replace(b"\\\\", b"").replace(b'\\"', b"")
    marks = text.translate(None, _ALL_BUT_KEPT)
    # Two quotes side by side may go whichever strings they belong to: what lies in a string and what not stays so.
    marks = marks.replace(b'""', b"")
    if b'"' in marks:
        marks = b"".join(marks.split(b'"')[::2])
    return max(accumulate(map(_STEP.__getitem__, marks)), default=0)


def _plain(data: bytes, limits: Limits) -> bytes:
    if len(data) > limits.max_bytes:
        raise _too_many_bytes(limits)
    text = _decompress(data, limits) if data.startswith(_GZIP) else data
    if text.startswith(_GZIP):
        raise InputError("the input is compressed twice", "Compress it once, or send it plain")
    return text.removeprefix(_UTF8_MARK)


def _decompress(data: bytes, limits: Limits) -> bytes:
    """Undo gzip, one member after the other, and stop as soon as the result is too long.

    Zeros after a member are padding, as the common tools take them. The data goes in piece by piece, because zlib copies
    whatever follows a member: a million tiny members would otherwise cost the square of their number.
    """
    parts: list[bytes] = []
    room = limits.max_bytes
    stream = zlib.decompressobj(wbits=_GZIP_FORMAT)
    for start in range(0, len(data), _PIECE):
        rest = data[start : start + _PIECE]
        while rest:
            if stream.eof:
                rest = rest.lstrip(b"\x00")
                stream = zlib.decompressobj(wbits=_GZIP_FORMAT) if rest else stream
                continue
            try:
                part = stream.decompress(rest, room + 1)
            except zlib.error:
                raise InputError("the gzip data is damaged", "Compress the file again, or send it plain") from None
            room -= len(part)
            if room < 0:
                raise _too_many_bytes(limits)
            parts.append(part)
            rest = stream.unused_data
    if not stream.eof:
        raise InputError("the gzip data ends too early", "Send the whole file, or send it plain")
    return b"".join(parts)


def _too_many_bytes(limits: Limits) -> InputTooLargeError:
    return InputTooLargeError(
        f"the input is larger than {limits.max_bytes} bytes",
        "Send fewer resources at a time, or use the audit for whole panels",
    )


def _refuse_other_encodings(text: bytes) -> None:
    if text.startswith(_OTHER_ENCODINGS) or b"\x00" in text[:4]:
        raise InputError("the text is in UTF-16 or UTF-32", "Save it as UTF-8, as FHIR R4 requires for JSON")


def _parse(text: bytes) -> object:
    try:
        return orjson.loads(text)
    except orjson.JSONDecodeError as error:
        line, column = error.lineno, error.colno
    if _is_ndjson(text):
        raise InputError(
            "the input is NDJSON: one resource a line",
            "Put the resources of a patient into one Bundle, or give the folder of NDJSON files to the audit",
        )
    problem, where = "the input is not JSON", f"line {line}, column {column}"
    try:
        text.decode()
    except UnicodeDecodeError:
        raise InputError("the input is not UTF-8", "Save it as UTF-8, as FHIR R4 requires for JSON") from None
    if _is_not_a_number_at(text, line, column):
        problem = "the input holds NaN or Infinity, which JSON does not know"
    raise InputError(f"{problem} ({where})", _SEND_JSON)


def _is_not_a_number_at(text: bytes, line: int, column: int) -> bool:
    """True if a non-finite number stands at the place where parsing stopped (columns count characters from 1)."""
    lines = text.split(b"\n")
    if line > len(lines):
        return False
    rest = lines[line - 1].decode(errors="replace")[max(0, column - 2) :].lstrip(":,[ ").encode()
    return rest.startswith(_NOT_A_NUMBER)


def _is_ndjson(text: bytes) -> bool:
    first, _, rest = text.strip().partition(b"\n")
    second = rest.strip().partition(b"\n")[0]
    return bool(second) and all(_is_object(line) for line in (first, second))


def _is_object(line: bytes) -> bool:
    try:
        return isinstance(orjson.loads(line), dict)
    except orjson.JSONDecodeError:
        return False
