"""Events, the rota and deliveries in words. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta

from labmon.events.models import OnCall
from labmon.events.queries import EventPage
from labmon.events.shared import ThingKind
from labmon.events.words import event_sentence, place_to_look
from labmon.screen.present import age_text, count_text, time_text
from labmon.tell.queries import DeliveryRow, MessageRow

WEEKDAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
WEEKS_SHOWN = 4


def event_title(page: EventPage) -> str:
    """The event in one sentence."""
    if page.facts is None:
        return "Later readings show that nothing was wrong."
    drill = "Drill, nothing is wrong. " if page.event.is_drill else ""
    return f"{drill}{event_sentence(page.facts)}."


def where_to_look(page: EventPage) -> str:
    """What its benches share; empty for one bench."""
    return place_to_look(page.facts) if page.facts and len(page.facts.benches) > 1 else ""


def calm_words(page: EventPage) -> list[str]:
    """Of each thing that the event's benches share, how many that share it too are calm."""
    if page.facts is None or len(page.facts.benches) < 2:
        return []
    said = []
    for kind, name in page.facts.things:
        if kind == ThingKind.BENCH:
            continue
        calm = page.members.get((kind, name), set()) - set(page.facts.benches)
        others = f"{count_text(len(calm), 'other bench', 'other benches')} of it calm" if calm else "none of its benches is calm"
        said.append(f"{kind.capitalize()} {name}: {others}.")
    return said


def taken_words(page: EventPage) -> str:
    """Who has it."""
    event = page.event
    if event.taken_at is None:
        return ""
    return f"Taken by {event.taken_by.username if event.taken_by else 'someone who left'} at {time_text(event.taken_at)} UTC."


def next_words(page: EventPage, now: datetime) -> str:
    """What happens if nobody takes it."""
    if page.event.due_at is not None:
        return "The call is about to be written: it waits some seconds for others of the same event."
    if page.event.next_step_at is None:
        return ""
    left_s = max((page.event.next_step_at - now).total_seconds(), 0.0)
    return f"If nobody takes it, the next is told in {age_text(left_s)}."


def delivery_words(row: DeliveryRow, now: datetime) -> str:
    """What became of a message on one channel."""
    if row.sent_at is not None:
        return f"{row.channel} to {row.to}: handed over at {time_text(row.sent_at)} UTC"
    if row.gave_up_at is not None:
        return f"{row.channel} to {row.to}: given up. {row.last_error}"
    if row.last_error:
        again = age_text(max((row.next_try_at - now).total_seconds(), 0.0))
        return f"{row.channel} to {row.to}: not handed over yet, tried again in {again}. {row.last_error}"
    if row.next_try_at > now:
        return f"{row.channel} to {row.to}: waits until {time_text(row.next_try_at)} UTC"
    return f"{row.channel} to {row.to}: about to be handed over"


@dataclass(frozen=True, slots=True)
class MessageView:
    """One line of who was told."""

    who: str
    duty: str
    kind: str
    at: str
    subject: str
    deliveries: list[str]
    tries: list[str]


def message_view(row: MessageRow, now: datetime) -> MessageView:
    """A message in words, with each attempt."""
    tries = [
        f"{time_text(one.at)} UTC, {delivery.channel}: {_try_words(one.is_handed_over, one.took_s)}{one.said and ', ' + one.said}"
        for delivery in row.deliveries
        for one in delivery.tries
    ]
    deliveries = [delivery_words(one, now) for one in row.deliveries]
    return MessageView(row.who, row.duty, row.kind, time_text(row.made_at), row.subject, deliveries, tries)


def _try_words(is_handed_over: bool | None, took_s: float | None) -> str:
    if is_handed_over is None:
        return "cut short, its outcome is not known"
    return f"{'handed over' if is_handed_over else 'failed'} in {took_s or 0.0:.2f} s"


def on_call_sentence(rota: Sequence[OnCall], now: datetime) -> str:
    """Who is on call, and who comes next."""
    here = next((one for one in rota if one.from_at <= now < one.until_at), None)
    after = next((one for one in rota if one.from_at > now), None)
    next_one = f" Then {after.person.username}, from {time_text(after.from_at)[:16]} UTC." if after else ""
    if here is None:
        return f"Nobody is on call now.{next_one}"
    gap = "" if after and after.from_at == here.until_at else " Nobody follows at once." if after else " Nobody follows."
    return f"{here.person.username} is on call until {time_text(here.until_at)[:16]} UTC.{gap}{next_one}"


@dataclass(frozen=True, slots=True)
class Day:
    """One day of the grid: who is on call in it, with the hours of each hand-over."""

    label: str
    is_today: bool
    lines: list[str]


def rota_weeks(rota: Sequence[OnCall], now: datetime) -> list[list[Day]]:
    """The grid, from this week's Monday, UTC."""
    monday = first_day(now)
    days = [monday + timedelta(days=number) for number in range(7 * WEEKS_SHOWN)]
    cells = [Day(day.strftime("%d %b"), day.date() == now.date(), _lines_of(rota, day)) for day in days]
    return [cells[number:number + 7] for number in range(0, len(cells), 7)]


def first_day(now: datetime) -> datetime:
    """Monday 00:00 of this week."""
    return now.replace(hour=0, minute=0, second=0, microsecond=0) - timedelta(days=now.weekday())


def _lines_of(rota: Sequence[OnCall], day: datetime) -> list[str]:
    end, lines = day + timedelta(days=1), []
    for one in rota:
        if one.from_at >= end or one.until_at <= day:
            continue
        first, last = max(one.from_at, day), min(one.until_at, end)
        whole = first == day and last == end
        until = "24:00" if last == end else f"{last:%H:%M}"
        lines.append(one.person.username if whole else f"{first:%H:%M} to {until} {one.person.username}")
    return lines
