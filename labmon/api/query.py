"""The query string of a call, each parameter checked by name."""

from collections.abc import Callable, Iterable
from datetime import datetime
from typing import TypeVar

from django.http import QueryDict

from labmon.api.problem import wrong_field
from labmon.api.span import Span, parse_span
from labmon.api.times import parse_time

T = TypeVar("T")


def known_only(query: QueryDict, *names: str) -> None:
    """Refuse parameters nobody reads: a misspelt one would be silently without effect."""
    for name in query:
        if name not in names:
            raise wrong_field(name[:60], f"The parameter {name[:60]!r} is not known.",
                              f"Use {', '.join(names)}." if names else "This call takes no parameters.")
        if len(query.getlist(name)) > 1:
            raise wrong_field(name, f"The parameter {name!r} is given more than once.", "Give it once.")


def span_of(query: QueryDict) -> Span:
    """``span``, which must be given."""
    return _parsed(query, "span", parse_span, "Give span=start/end or start/duration, such as "
                                              "span=2031-03-04T00:00:00Z/P1D.")


def time_or_none(query: QueryDict, name: str) -> datetime | None:
    """An absolute time, if given."""
    return _parsed(query, name, parse_time, "") if query.get(name) else None


def one_of(query: QueryDict, name: str, words: Iterable[str], *, default: str) -> str:
    """One of some words."""
    word = query.get(name) or default
    if word and word not in words:
        raise wrong_field(name, f"{word[:60]!r} is not known.", f"Use one of {', '.join(words)}.")
    return word


def whole_number(query: QueryDict, name: str, *, default: int, least: int = 1, most: int) -> int:
    """A whole number within bounds."""
    text = query.get(name) or str(default)
    if not (text.isascii() and text.isdigit() and len(text) <= 18 and least <= int(text) <= most):
        raise wrong_field(name, f"{text[:60]!r} cannot be used.", f"Give a whole number from {least} to {most}.")
    return int(text)


def _parsed(query: QueryDict, name: str, parse: Callable[[str], T], where_missing: str) -> T:
    text = query.get(name, "")
    if not text:
        raise wrong_field(name, f"The parameter {name!r} is missing.", where_missing)
    try:
        return parse(text)
    except ValueError as error:
        said = str(error)
        raise wrong_field(name, f"The parameter {name!r} cannot be used.", said[:1].upper() + said[1:] + ".") from None
