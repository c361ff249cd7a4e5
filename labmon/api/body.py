"""The JSON body of a write, decoded into a frozen type; faults name the field."""

import re
from typing import Annotated, TypeVar

import msgspec
from django.http import HttpRequest

from labmon.api.problem import Problem, wrong_field

T = TypeVar("T")
LARGEST_BODY = 2**20
#: What the database can hold as a line of text: no NUL, at most 500 characters.
Text = Annotated[str, msgspec.Meta(max_length=500, pattern=r"^[^\x00]*$")]
#: The words of a log entry.
LongText = Annotated[str, msgspec.Meta(max_length=4000, pattern=r"^[^\x00]*$")]
_PATH = re.compile(r" - at `\$\.?(?P<path>[^`]*)`\Z")
_NAMED = re.compile(r"field `(?P<name>[^`]*)`")


class Body(msgspec.Struct, frozen=True, forbid_unknown_fields=True, kw_only=True):
    """What a caller may send; a field nobody reads is refused, so that a misspelt one is noticed."""


def body_of(request: HttpRequest, kind: type[T]) -> T:
    """The request's body as ``kind``.

    Raises:
        Problem: 413 too large, 415 not JSON by its type, 400 not decodable (with the field).
    """
    if int(request.META.get("CONTENT_LENGTH") or 0) > LARGEST_BODY:
        raise Problem(413, "The body is too large.", f"Send at most {LARGEST_BODY} bytes.")
    if not request.body:
        raise Problem(400, "The body is missing.", "Send one JSON object; /api/v1/openapi.json has its form.")
    if request.content_type not in {"application/json", "application/merge-patch+json"}:
        raise Problem(415, "The body is not announced as JSON.", "Send Content-Type: application/json.")
    try:
        return msgspec.json.decode(request.body, type=kind)
    except msgspec.ValidationError as error:
        raise _problem_of(str(error)) from None
    except (msgspec.DecodeError, UnicodeDecodeError) as error:
        raise Problem(400, "The body is not JSON.", f"Send one JSON object in UTF-8 ({error}).") from None


def _problem_of(said: str) -> Problem:
    """msgspec's message with the field taken out of it."""
    found = _PATH.search(said)
    path = found["path"] if found else ""
    why = said[:found.start()] if found else said
    named = _NAMED.search(why)
    field = ".".join(part for part in (path, named["name"] if named else "") if part)
    return wrong_field(field, f"{field or 'The body'} cannot be used.", f"{why}.")
