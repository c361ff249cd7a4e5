"""What a person is told of an event: one sentence first, then the figures, then what to do. Pure."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta

from analysis.judge.margin import margin_of
from analysis.judge.rule import Quantity
from labmon.alarms.words import span_text, value_text
from labmon.events.models import EventKind
from labmon.events.shared import Thing, ThingKind

#: So many alarms are written out; the page has them all.
MOST_WRITTEN = 8
NO_CHANGE = "labmon watches and advises; it changes nothing on the bench."
_OF_THING = {
    ThingKind.ROOM: "in room {}",
    ThingKind.LASER: "on laser {}",
    ThingKind.LOGGER: "on logger {}",
    ThingKind.NETWORK: "on network {}",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class AlarmFacts:
    """One alarm as it is told; ``now`` values are of the tap's newest sample, None where it has none that counts."""

    id: int
    tap: str
    station: str
    experiment: str
    level: str
    sentence: str
    began_at: datetime
    raised_at: datetime
    returned_at: datetime | None = None
    cause: str = ""
    quantity: str = ""
    limit: float | None = None
    now_value: float | None = None
    now_sigma_db: float | None = None
    now_at: datetime | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class EventFacts:
    """An event as it is told: its benches, what they share, and the one thing that explains it, if it is one."""

    id: int
    kind: str
    level: str
    began_at: datetime
    benches: Sequence[str]
    things: Sequence[Thing] = ()
    shared: Thing | None = None
    is_drill: bool = False
    url: str = ""
    alarms: Sequence[AlarmFacts] = field(default_factory=tuple)


def event_sentence(event: EventFacts) -> str:
    """The event in one sentence, without its full stop."""
    count, first = len(event.benches), event.alarms[0]
    if count == 1:
        rest = len(event.alarms) - 1
        return first.sentence + (f" (and {rest} more of this bench)" if rest else "")
    place = f" {thing_words(event.shared)}" if event.shared else ""
    what = "sent their last readings" if event.kind == EventKind.SILENCE else "went beyond their limits, or lost trust,"
    return f"{count} benches{place} {what} together, at {event.began_at:%H:%M:%S} UTC"


def thing_words(thing: Thing) -> str:
    """``in room North Hall``, ``on laser Beacon``."""
    return _OF_THING[ThingKind(thing[0])].format(thing[1])


def subject_of(event: EventFacts, own: Sequence[AlarmFacts], prefix: str = "") -> str:
    """A mail's subject: the level, what happened, and whose of several benches it is."""
    mine = sorted({one.station for one in own})
    yours = f"; yours: {', '.join(mine)}" if 1 <= len(mine) < len(event.benches) else ""
    sentence = _sentence_for(event, own)
    return f"{'Drill, nothing is wrong. ' if event.is_drill else ''}{prefix}{_level(own)}: {sentence}{yours}"


def _level(own: Sequence[AlarmFacts]) -> str:
    return "alarm" if any(one.level == "alarm" for one in own) else "warning"


def _sentence_for(event: EventFacts, own: Sequence[AlarmFacts]) -> str:
    """Of one bench its own alarm speaks, whoever it is told to."""
    if len(event.benches) > 1 or not own:
        return event_sentence(event)
    rest = len(own) - 1
    return own[0].sentence + (f" (and {rest} more of this bench)" if rest else "")


def body_of(event: EventFacts, own: Sequence[AlarmFacts], duty: str, remind_after_s: float, extra: Sequence[str] = ()) -> str:
    """The mail's text; ``own`` are the alarms that concern who is told, ``extra`` lines follow the first sentence."""
    lines = [f"{_sentence_for(event, own)}.", *extra]
    if event.is_drill:
        lines.append("This is a drill: the reading is false and marked, no bench is concerned. Take it as you would a real one.")
    if len(event.benches) > 1:
        lines.append(place_to_look(event))
    for one in own[:MOST_WRITTEN]:
        lines += ["", *alarm_lines(one, with_sentence=len(event.benches) > 1 or len(own) > 1)]
    if len(own) > MOST_WRITTEN:
        lines += ["", f"and {len(own) - MOST_WRITTEN} more of yours; the page has them all."]
    lines += ["", f"You are told as {duty}."]
    if _level(own) == "alarm" and not event.is_drill:
        lines.append(f"Should nobody take it within {span_text(remind_after_s)}, you are reminded and the next is told.")
    links = [] if event.is_drill else _bench_links(event.url, own)
    lines += [f"Take it: {event.url}/events/{event.id}/", *links, "", NO_CHANGE]
    return "\n".join(lines)


def place_to_look(event: EventFacts) -> str:
    """Where to look first; where it is not clear, what could be it."""
    if event.shared is not None:
        kind, name = event.shared
        return f"They share {kind} {name} and nothing else that explains it: look there first."
    said = [f"{kind} {name}" for kind, name in event.things if kind != ThingKind.BENCH]
    if not said:
        return "They share nothing that labmon knows of."
    return f"They share {' and '.join(said)}; which of it is the cause, if any, is open."


def alarm_lines(one: AlarmFacts, *, with_sentence: bool) -> list[str]:
    """Value with its error, margin, since when, likely cause."""
    lines = [f"{one.sentence}."] if with_sentence else []
    if one.quantity and one.now_value is not None and one.now_at is not None:
        lines.append(f"Now: {_value_with_error(one)}, {_margin_words(one)}, read at {one.now_at:%H:%M:%S} UTC")
    lines.append(f"Since: {one.began_at:%Y-%m-%d %H:%M:%S} UTC; raised: {one.raised_at:%Y-%m-%d %H:%M:%S} UTC")
    if one.returned_at:
        lines.append(f"Returned by itself: {one.returned_at:%Y-%m-%d %H:%M:%S} UTC")
    if one.cause:
        lines.append(f"Likely cause: {one.cause}")
    if one.experiment:
        lines.append(f"Experiment: {one.experiment}")
    return lines


def _value_with_error(one: AlarmFacts) -> str:
    text = value_text(one.quantity, one.now_value)
    if one.quantity == Quantity.ER_DB and one.now_sigma_db is not None and math.isfinite(one.now_sigma_db):
        return f"{text.removesuffix(' dB')} ± {max(one.now_sigma_db, 0.1):.1f} dB"
    return text


def _margin_words(one: AlarmFacts) -> str:
    """Both margins to the limit, positive inside."""
    if one.limit is None or one.now_value is None:
        return "limit unknown"
    margin = margin_of(Quantity(one.quantity), one.now_value, one.limit)
    said = [
        f"{float(amount):+.1f}{unit}"
        for amount, unit in ((margin.margin_db, " dB"), (margin.margin_deg, "°"))
        if math.isfinite(float(amount))
    ]
    limit = value_text(one.quantity, one.limit)
    return f"margin to the limit {limit}: {', '.join(said)}" if said else f"limit {limit}"


def _bench_links(url: str, own: Sequence[AlarmFacts]) -> list[str]:
    stations = list(dict.fromkeys(one.station for one in own))[:3]
    return [f"Bench: {url}/stations/{station}/" for station in stations]


def reminder_lines(waited: timedelta) -> list[str]:
    """Said to who was told already."""
    return [f"Nobody has taken it for {span_text(waited.total_seconds())}."]


def passed_on_lines(waited: timedelta, told: Sequence[str]) -> list[str]:
    """Said to who is told next."""
    return [f"Nobody has taken it for {span_text(waited.total_seconds())}. Told so far: {', '.join(told) or 'nobody'}."]


def taken_subject(event: EventFacts, by: str) -> str:
    """Said to the others."""
    return f"{'Drill. ' if event.is_drill else ''}Taken by {by}: {event_sentence(event)}"


def taken_body(event: EventFacts, by: str, at: datetime, note: str) -> str:
    """Said to the others: they may rest."""
    said = f"{by} took it at {at:%Y-%m-%d %H:%M:%S} UTC" + (f" and says: {note}" if note else "") + "."
    return "\n".join([said, "", f"It was: {event_sentence(event)}.", f"All of it: {event.url}/events/{event.id}/", "", NO_CHANGE])
