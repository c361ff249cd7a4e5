"""Bytes to a plain map: content type and encoding, gzip, JSON and MessagePack. Whatever comes, a map or a Refusal."""

import json
import zlib
from dataclasses import dataclass
from typing import Any, NoReturn

import msgspec

from ingest.door.refusal import bad_form, too_large

LARGEST_BODY = 8 << 20
"""Bytes after decompression."""
JSON_TYPES = frozenset({"", "application/json"})
MSGPACK_TYPES = frozenset({"application/msgpack", "application/x-msgpack", "application/vnd.msgpack"})


@dataclass(frozen=True, slots=True)
class Form:
    """In which form a body comes."""

    is_msgpack: bool = False
    is_gzip: bool = False


def form_of(content_type: str, content_encoding: str) -> Form:
    """The form by the two headers.

    Raises:
        Refusal: 400 for a form the door does not know.
    """
    kind, _, rest = content_type.partition(";")
    kind, encoding = kind.strip().lower(), content_encoding.strip().lower()
    charset = next((part.split("=", 1)[1].strip(' "').lower() for part in rest.split(";")
                    if part.strip().lower().startswith("charset=")), "utf-8")
    if kind not in JSON_TYPES | MSGPACK_TYPES:
        raise bad_form(f"Content-Type {kind[:80]!r} is not known",
                       "Send application/json or application/msgpack.", "Content-Type")
    if kind in JSON_TYPES and charset not in {"utf-8", "utf8", "us-ascii"}:
        raise bad_form(f"charset {charset[:40]!r} is not known", "Send JSON in UTF-8.", "Content-Type")
    if encoding not in {"", "identity", "gzip", "x-gzip"}:
        raise bad_form(f"Content-Encoding {encoding[:40]!r} is not known", "Send gzip or no encoding.", "Content-Encoding")
    return Form(kind in MSGPACK_TYPES, encoding in {"gzip", "x-gzip"})


def is_gzipped(body: bytes, form: Form | None) -> bool:
    """Whether a body is packed with gzip: as its form says, else by its first bytes (RFC 1952, section 2.3.1)."""
    return body[:2] == b"\x1f\x8b" if form is None else form.is_gzip


def decode(body: bytes, form: Form | None) -> dict[str, Any]:
    """The map that a body holds; ``form`` None tells JSON, MessagePack and gzip apart by the first bytes.

    Raises:
        Refusal: 400 or 413.
    """
    if is_gzipped(body, form):
        body = _inflate(body)
    if len(body) > LARGEST_BODY:
        raise too_large(f"the body has more than {LARGEST_BODY >> 20} MiB", "Send half as many readings at a time.")
    is_msgpack = _begins_as_msgpack_map(body) if form is None else form.is_msgpack
    found = _from_msgpack(body) if is_msgpack else _from_json(body)
    if not isinstance(found, dict):
        raise bad_form(f"the body is a {_word(found)}, not a map", "Send a map with the member taps; see docs/payload.md.")
    return found


def _begins_as_msgpack_map(body: bytes) -> bool:
    """MessagePack's three kinds of map: 0x80 to 0x8f, 0xde, 0xdf. No JSON text in UTF-8 begins so."""
    return bool(body) and (body[0] & 0xF0 == 0x80 or body[0] in (0xDE, 0xDF))


def _inflate(body: bytes) -> bytes:
    """gzip's content, at most one byte more than is allowed: a small body that swells is stopped on its way."""
    parts, room = [], LARGEST_BODY + 1
    while body and room > 0:
        reader = zlib.decompressobj(31)
        try:
            parts.append(reader.decompress(body, room))
        except zlib.error as error:
            raise bad_form("the body is not gzip", "Compress it with gzip, or leave Content-Encoding out.") from error
        room -= len(parts[-1])
        if not reader.eof and room > 0:
            raise bad_form("the gzip body is cut off", "Send it again whole.")
        body = reader.unused_data
    return b"".join(parts)


def _from_json(body: bytes) -> Any:
    try:
        found = msgspec.json.decode(body)
    except (msgspec.MsgspecError, RecursionError, UnicodeDecodeError):
        return _from_odd_json(body)
    if isinstance(found, dict) and body.count(b'"') != 2 * _count_texts(found):
        return _from_odd_json(body)
    return found


def _count_texts(found: dict[str, Any]) -> int:
    """Names and text values of a body in the usual form, never more than there are.

    Each has two quotation marks in the JSON. More marks than that mean a name given twice (the decoder keeps the last one
    only), or escapes and deeper maps: then the thorough decoder looks.
    """
    count = len(found) + sum(isinstance(value, str) for value in found.values())
    now, taps = found.get("now"), found.get("taps")
    if isinstance(now, dict):
        count += len(now) + sum(isinstance(value, str) for value in now.values())
    if isinstance(taps, dict):
        count += len(taps)
        for part in taps.values():
            if isinstance(part, dict):
                count += len(part)
                for column in part.values():
                    if isinstance(column, list) and column and isinstance(column[0], str) and set(map(type, column)) == {str}:
                        count += len(column)
    return count


def _from_odd_json(body: bytes) -> Any:
    """The thorough decoder: numbers beyond float64 become infinite (and are set aside later), a name twice is refused."""
    try:
        found = json.loads(body.decode("utf-8"), object_pairs_hook=_without_twins, parse_constant=_refuse_constant)
        msgspec.json.encode(found)  # finds half surrogates, which are no text
    except RecursionError:
        raise bad_form("the JSON is nested too deeply", "Send columns as plain lists; see docs/payload.md.") from None
    except UnicodeDecodeError as error:
        raise bad_form(f"byte {error.start} is not UTF-8", "Send JSON in UTF-8.") from error
    except UnicodeEncodeError as error:
        raise bad_form("a text holds half a surrogate pair", "Send JSON in UTF-8.") from error
    except json.JSONDecodeError as error:
        raise bad_form(f"not JSON: {error.msg} at byte {error.pos}", "Send one JSON map in UTF-8.") from error
    except ValueError as error:
        raise bad_form("not JSON: a number has too many digits", "Send numbers as float64 or int64.") from error
    return found


def _without_twins(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) < len(pairs):
        names = [name for name, _ in pairs]
        twin = next(name for name in names if names.count(name) > 1)
        raise bad_form(f"the name {twin[:80]!r} is given twice in one map",
                       "Give each name once; put its readings into one list.")
    return found


def _refuse_constant(word: str) -> NoReturn:
    raise bad_form(f"not JSON: {word} is no JSON number", "Send null or leave the reading out; JSON has no NaN and no Infinity.")


def _from_msgpack(body: bytes) -> Any:
    try:
        return msgspec.msgpack.decode(body)
    except (msgspec.MsgspecError, RecursionError, ValueError, TypeError, OverflowError) as error:
        raise bad_form(f"not MessagePack: {str(error)[:150]}", "Send one MessagePack map.") from error


def _word(found: Any) -> str:
    """What a decoded value is called."""
    names = {dict: "map", list: "list", str: "text", bytes: "binary string", bool: "yes or no", int: "number", float: "number"}
    return "null" if found is None else names.get(type(found), type(found).__name__)
