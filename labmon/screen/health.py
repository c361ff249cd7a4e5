"""The lab's own health, for managers: services, what waits, what is kept in how much room, when the disk is full."""

from typing import Any

import redis
from django.conf import settings
from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.views.decorators.http import require_safe

from ingest.models import KeepRule, WatchedFile
from labmon.api.health import PATIENCE_S, REMEDIES, missing_services
from labmon.benches.keeping import rule_text
from labmon.disk.queries import Forecast, Kept, LabHealth, lab_health
from labmon.people.rights import Action, require
from labmon.pipeline.lanes import Lane, queue_of
from labmon.pipeline.watched import strange_folders
from labmon.screen.door import for_people
from labmon.screen.followed_view import followed_sentence
from labmon.screen.present import MISSING, age_text, count_text, number_text

#: Fewer days than this are worth a word.
FEW_DAYS = 30.0
_STEPS = ((1e12, "TB"), (1e9, "GB"), (1e6, "MB"), (1e3, "kB"))


@require_safe
@for_people
def health_page(request: HttpRequest) -> HttpResponse:
    """One sentence first, then the tables it comes from."""
    require(request.user, Action.SEE_HEALTH)
    missing = missing_services()
    health, followed = lab_health(), _followed()
    rules = [rule_text(rule) for rule in KeepRule.objects.select_related("tap__station").order_by("pk")]
    return render(request, "screen/health.html", {
        "sentence": health_sentence(health, missing, len(followed["not_read"])),
        "services": [(name, "missing: " + REMEDIES[name] if name in missing else "up") for name in REMEDIES],
        "waiting": waiting_rows(health, _queue_length()),
        "kept": [kept_row("Inbox, in the database", health.inbox), kept_row("Blocks, in the database", health.blocks),
                 kept_row("Day files", health.days)],
        "sizes": [("The database in all", size_text(health.database)), ("Rollups in it", size_text(health.rollups))],
        "forecast": forecast_text(health.forecast),
        "faults": health.faults,
        **followed,
        "rules": rules or ["raw readings are kept for ever: no rule is set"],
    })


def _followed() -> dict[str, Any]:
    """The watched folder: one sentence, and each file that cannot be read."""
    folder = settings.WATCHED_FOLDER
    is_there = folder is not None and folder.is_dir()
    names = {f"{one.tap.station.name}/{one.tap.name}/{one.name}": one.problem
             for one in WatchedFile.objects.exclude(problem="").select_related("tap__station").order_by("pk")[:50]}
    sentence = followed_sentence(WatchedFile.objects.count(), list(names), strange_folders(folder) if is_there else [],
                                 is_watched=folder is not None, is_there=is_there)
    return {"followed": sentence, "not_read": list(names.items())}


def health_sentence(health: LabHealth, missing: list[str], not_read: int = 0) -> str:
    """The worst first; ``not_read`` files of the watched folder cannot be read."""
    if missing:
        return f"Missing: {', '.join(missing)}."
    if health.faults:
        return f"{count_text(len(health.faults), 'day file')} cannot be read."
    if not_read:
        return f"{count_text(not_read, 'file')} of the watched folder cannot be read."
    left = health.forecast.days_left
    if left is not None and left < FEW_DAYS:
        return f"The disk is full in {number_text(left, 0)} days."
    if health.oldest_touch_s is not None and health.oldest_touch_s > 60:
        return f"Readings have waited {age_text(health.oldest_touch_s)} to be judged."
    return "All services are up, nothing waits long, every day file that was looked at is readable."


def waiting_rows(health: LabHealth, queue: int | None) -> list[tuple[str, str]]:
    """What waits, in words and numbers."""
    return [
        ("Marks of readings to be judged", str(health.touches)),
        ("The oldest of them", age_text(health.oldest_touch_s) if health.oldest_touch_s is not None else MISSING),
        ("Batches in the inbox", str(health.inbox_rows)),
        ("Spans to be rolled up", str(health.rollups_due)),
        ("Mails to be sent", str(health.unsent_mails)),
        ("Tasks in the queue", MISSING if queue is None else str(queue)),
        ("Files to be removed", str(health.left_files)),
    ]


def kept_row(what: str, kept: Kept) -> tuple[str, str, str, str]:
    """Form, readings, room, bytes a reading."""
    return what, f"{kept.readings:,}", size_text(kept.size), number_text(kept.bytes_per_reading, 1)


def forecast_text(forecast: Forecast) -> str:
    """Days until the disk is full, and by what."""
    room = f"{size_text(forecast.free)} of {size_text(forecast.total)} are free"
    if forecast.growth is None or forecast.days_left is None:
        return f"{room}. How fast it fills is known when a day is sealed, six hours after its end."
    return (f"{room}: enough for about {number_text(forecast.days_left, 0)} days at {size_text(forecast.growth)} a day, the mean "
            f"of the last {count_text(forecast.basis_days, 'sealed day')} with their rollups. "
            "Rules of keeping are not reckoned in.")


def size_text(size: float) -> str:
    """Bytes in the largest unit that fits, ``12.3 MB``."""
    for step, unit in _STEPS:
        if size >= step:
            return number_text(size / step, 1, unit)
    return number_text(size, 0, "B")


def _queue_length() -> int | None:
    """Tasks of all lanes that no worker has taken; None where the broker does not answer."""
    address = settings.CHANNEL_LAYERS["default"]["CONFIG"]["hosts"][0]
    try:
        with redis.Redis.from_url(address, socket_connect_timeout=PATIENCE_S, socket_timeout=PATIENCE_S) as link:
            return sum(int(link.llen(queue_of(lane))) for lane in Lane)
    except (redis.RedisError, OSError):
        return None
