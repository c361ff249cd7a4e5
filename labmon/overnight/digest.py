"""The morning's mail: the night as its page says it, once a person and night, plain text."""

from datetime import datetime, timedelta
from typing import Final

from django.conf import settings
from django.db import transaction
from django.utils import timezone

from labmon.overnight.models import DigestWish
from labmon.overnight.nights import HOURS, Night, last_night
from labmon.overnight.queries import BenchNight, bench_nights
from labmon.overnight.words import BenchWords, bench_words, clock, night_sentence
from labmon.people.models import Person, Role
from labmon.people.rights import has_access, role_of
from labmon.tell.models import Message
from labmon.tell.outbox import Telling, queue

#: Readings that come a little late, and the rollups of the last minutes, are waited for.
AFTER: Final = timedelta(minutes=10)
#: A night that ended longer ago is no news: whoever switches the lab on at noon gets no mail of it.
NEWS_FOR: Final = timedelta(hours=4)
MOST_LINES: Final = 40


@transaction.atomic
def send_digests(now: datetime | None = None) -> int:
    """Write the mails of the night that has just ended; returns how many were new. Safe to run again and side by side."""
    clock_now = now or timezone.now()
    night = last_night(clock_now, settings.LAB_ZONE, HOURS)
    if not night.until_at + AFTER <= clock_now <= night.until_at + NEWS_FOR:
        return 0
    wishes = DigestWish.objects.select_related("person").order_by("person_id")
    wanted = {key_of(night, one.person): one.person for one in wishes if has_access(one.person)}
    told = set(Message.objects.filter(key__in=list(wanted)).values_list("key", flat=True))
    whole: list[BenchNight] | None = None
    tellings = []
    for key, person in wanted.items():
        if key in told:
            continue
        if role_of(person) is Role.GUEST:
            rows = bench_nights(person, night)
        else:
            rows = whole = bench_nights(person, night) if whole is None else whole
        tellings.append(Telling(key=key, person=person, subject=night_sentence(night, rows), body=body_of(night, rows),
                                path=f"/overnight/?date={night.date}"))
    return len(queue(tellings))


def key_of(night: Night, person: Person) -> str:
    """Makes it one mail a person and night."""
    return f"overnight-{night.date}-to-{person.pk}"


def body_of(night: Night, rows: list[BenchNight]) -> str:
    """The sentence, then the benches, worst first."""
    zone = settings.LAB_ZONE
    span = f"From {clock(night.from_at, zone)} to {clock(night.until_at, zone)}, {zone.key}."
    lines = [night_sentence(night, rows), "", span, ""]
    lines += [line_of(bench_words(row, night, zone)) for row in rows[:MOST_LINES]]
    if len(rows) > MOST_LINES:
        lines.append(f"and {len(rows) - MOST_LINES} more benches, on the page.")
    return "\n".join([*lines, "", f"{settings.PUBLIC_URL}/overnight/?date={night.date}",
                      "You asked for this mail; \"How you are told\" ends it."])


def line_of(one: BenchWords) -> str:
    """``bench-a/in: below limit, worst margin −1.2 dB about 03:10 (usual worst +4.0 dB, …); alarm 03:09 to 03:40``."""
    first = ", ".join(part for part in (one.word, one.worst and f"worst margin {one.worst}") if part)
    usual = f" ({one.usual})" if one.usual else ""
    rest = [part for part in (one.drift, one.untrusted, one.missing, *one.calls) if part]
    return "; ".join([f"{one.name}: {first}{usual}", *rest])
