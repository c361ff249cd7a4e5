"""What every page carries: where one can go, and the server's clock."""

from dataclasses import dataclass
from typing import Any

from django.http import HttpRequest
from django.urls import reverse
from django.utils import timezone

from labmon.people.models import Role
from labmon.people.rights import has_access, role_of
from labmon.screen.present import time_text


@dataclass(frozen=True, slots=True)
class Way:
    """An entry of the navigation."""

    name: str
    href: str
    is_here: bool


@dataclass(frozen=True, slots=True)
class Frame:
    """Navigation and clock of one page."""

    ways: list[Way]
    now: str
    now_ms: int


def frame(request: HttpRequest) -> dict[str, Any]:
    """Context processor: ``page``."""
    now = timezone.now()
    return {"page": Frame(ways=_ways(request), now=time_text(now), now_ms=int(now.timestamp() * 1000))}


def _ways(request: HttpRequest) -> list[Way]:
    person = getattr(request, "user", None)
    if person is None or not has_access(person):
        return []
    names = [("Lab", "lab"), ("Alarms", "alarms"), ("Experiments", "experiments"), ("Runs", "runs"), ("Overnight", "overnight")]
    role = role_of(person)
    names += [("Calls", "calls")] if role is not Role.GUEST else []
    names += [("Audit", "audit")] if role in {Role.OWNER, Role.MANAGER} else []
    names += [("Health", "health")] if role is Role.MANAGER else []
    names += [("People", "people")] if role is Role.MANAGER else [("You", "you")]
    return [Way(name, reverse(view), _is_under(request.path, reverse(view))) for name, view in names]


def _is_under(path: str, start: str) -> bool:
    return path == start if start == "/" else path.startswith(start)
