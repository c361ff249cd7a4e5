"""Environment variables, typed; ``finish`` reports every fault at once."""

import json
from collections.abc import Callable, Mapping
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError


class EnvironmentFault(Exception):
    """One or more variables cannot be used; the message names each with its value and the remedy."""


def parse_bool(text: str) -> bool:
    """``1 yes true on`` or ``0 no false off``."""
    word = text.strip().lower()
    if word in {"1", "yes", "true", "on"}:
        return True
    if word in {"0", "no", "false", "off"}:
        return False
    raise ValueError("write 1 or 0")


def parse_words(text: str) -> list[str]:
    """Words with commas between."""
    return [word.strip() for word in text.split(",") if word.strip()]


def parse_positive(text: str) -> float:
    """A number above 0."""
    number = float(text)
    if not 0.0 < number < float("inf"):
        raise ValueError("write a number above 0")
    return number


def parse_zone(text: str) -> ZoneInfo:
    """A time zone of the IANA database."""
    try:
        return ZoneInfo(text)
    except (ZoneInfoNotFoundError, ValueError, OSError) as error:
        raise ValueError("write a time zone such as Europe/Berlin or UTC") from error


def parse_options(text: str) -> dict[str, Any]:
    """A JSON object."""
    try:
        found = json.loads(text)
    except ValueError as error:
        raise ValueError(f"write a JSON object ({error})") from error
    if not isinstance(found, dict):
        raise ValueError('write a JSON object, as in {"location": "/srv/days"}')
    return found


class Env:
    """Reads variables with a common prefix from a mapping."""

    def __init__(self, source: Mapping[str, str], prefix: str) -> None:
        self.source = source
        self.prefix = prefix
        self.faults: list[str] = []
        self.asked: dict[str, Any] = {}

    def get(self, name: str, parse: Callable[[str], Any], *, default: Any) -> Any:
        """The parsed value of ``prefix + name``; unset or empty gives ``default``."""
        self.asked[self.prefix + name] = default
        text = self.source.get(self.prefix + name, "")
        if not text:
            return default
        try:
            return parse(text)
        except ValueError as error:
            self.faults.append(f"{self.prefix}{name}={text!r}: {error}")
            return default

    def finish(self) -> None:
        """Raise once, with all faults."""
        if self.faults:
            raise EnvironmentFault("; ".join(self.faults))
