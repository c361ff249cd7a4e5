"""A decoded map to a checked body: the good readings as arrays, the others set aside one by one with reason and remedy.

What makes a whole body unusable is a Refusal (400, 403 or 413); nothing here raises anything else.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np

from ingest.clocks import LONGEST_UPTIME_MS, NO_UPTIME, Sending
from ingest.door.body import GREATEST_SEQUENCE, Body, KnownStation, Part
from ingest.door.parts import Draft, draft_of, give_stamps, give_values, part_of
from ingest.door.refusal import Refusal, bad_form, too_large
from ingest.stamps import parse_stamp
from ingest.store.columns import NO_SEQUENCE, NO_TIME, IntArray
from ingest.times import YEAR_1_US, YEAR_10000_US

LARGEST_BATCH = 100_000


class UnknownTap(Refusal):
    """The station has no such tap (or the door has not heard of it yet)."""


def check_body(found: Mapping[str, Any], station: KnownStation, arrival_us: int, remote_address: str = "") -> Body:
    """The readings of a decoded map.

    Raises:
        Refusal: The body cannot be taken as a whole.
    """
    named = found.get("station")
    if named is not None and named != station.name:
        raise Refusal(403, f"this key belongs to station {station.name!r}",
                      "Use the key of the station that the body names, or leave the name out.", "station")
    boot, firmware = _text(found, "boot", 100), _text(found, "firmware", 200, is_cut=True)
    now_at_us, now_uptime_ms = _now(found.get("now"))
    drafts = _drafts(found.get("taps"), station)
    parts = [part_of(draft, boot) for draft in drafts]
    own_at_us = np.concatenate([part.own_at_us for part in parts]) if parts else np.empty(0, np.int64)
    is_stamped = not len(own_at_us) or int(own_at_us.min()) != NO_TIME
    if not is_stamped:
        for part in parts:
            _check_times(part, now_uptime_ms)
    sending = Sending(arrival_us, now_at_us, now_uptime_ms, bool(boot), _oldest(own_at_us))
    return Body(station, boot, firmware, sending, parts, own_at_us, is_stamped, sum(part.count for part in parts), remote_address)


def lowest_sequences(found: Mapping[str, Any], station: KnownStation) -> tuple[str, dict[int, int]]:
    """Boot and each tap's smallest sequence of a body that was refused, as far as they can be read.

    A station must never delete what was refused: these numbers hold back ``through``.
    """
    boot, taps = found.get("boot"), found.get("taps")
    lowest: dict[int, int] = {}
    if isinstance(boot, str) and 0 < len(boot) <= 100 and boot.isprintable() and isinstance(taps, dict):
        for name, sent in taps.items():
            column = sent.get("sequence") if isinstance(sent, dict) and isinstance(name, str) else None
            tap = station.taps.get(name) if isinstance(name, str) else None
            numbers = [number for number in (column if isinstance(column, list) else ())
                       if type(number) is int and 0 <= number <= GREATEST_SEQUENCE]
            if tap and numbers:
                lowest[tap.id] = min(numbers)
    return boot if isinstance(boot, str) else "", lowest


def _drafts(taps: Any, station: KnownStation) -> list[Draft]:
    """The columns of all taps."""
    if not isinstance(taps, dict):
        raise bad_form("taps is missing or no map", "Send taps: a map from tap name to columns; see docs/payload.md.", "taps")
    texts: list[str] = []
    drafts: list[Draft] = []
    total = 0
    for name, sent in taps.items():
        tap = station.taps.get(name) if isinstance(name, str) else None
        if tap is None:
            raise UnknownTap(400, f"station {station.name!r} has no tap {str(name)[:80]!r}",
                             "Check the name, or add the tap on the station's page or with manage.py add_station.",
                             f"taps.{str(name)[:80]}")
        drafts.append(draft_of(tap, sent, texts))
        total += drafts[-1].count
        if total > LARGEST_BATCH:
            raise too_large(f"the body has more than {LARGEST_BATCH:,} readings", "Send half as many at a time.")
    give_stamps(drafts, texts)
    give_values(drafts)
    return drafts


def _text(found: Mapping[str, Any], name: str, longest: int, *, is_cut: bool = False) -> str:
    text = found.get(name)
    if text is None:
        return ""
    if not isinstance(text, str) or (len(text) > longest and not is_cut) or not text.isprintable():
        raise bad_form(f"{name} is not a text of at most {longest} printable letters",
                       f"Send {name} as short text or leave it out.", name)
    return text[:longest]


def _now(now: Any) -> tuple[int | None, int | None]:
    """The station's clock and uptime at the moment of sending."""
    if now is None:
        return None, None
    if not isinstance(now, dict):
        raise bad_form("now is no map", 'Send now as {"at": …, "uptime_ms": …} or leave it out.', "now")
    at, uptime_ms = now.get("at"), now.get("uptime_ms")
    at_us = parse_stamp(at) if isinstance(at, str) else at
    if at is not None and (type(at_us) is not int or not YEAR_1_US <= at_us < YEAR_10000_US):
        raise bad_form("now.at is no time", "Send RFC 3339 with a zone, whole microseconds since 1970, or null.", "now.at")
    if uptime_ms is not None and (type(uptime_ms) not in (int, float) or not 0 <= uptime_ms <= LONGEST_UPTIME_MS):
        raise bad_form("now.uptime_ms is no uptime", "Send milliseconds since power-up, or null.", "now.uptime_ms")
    return at_us, None if uptime_ms is None else int(uptime_ms)


def _oldest(own_at_us: IntArray) -> int | None:
    """The earliest stamp, None where there is none."""
    stamped = own_at_us[own_at_us != NO_TIME]
    return int(stamped.min()) if len(stamped) else None


def _check_times(part: Part, now_uptime_ms: int | None) -> None:
    """Enough is known to place each reading."""
    has_none, uptime_ms = part.own_at_us == NO_TIME, part.uptimes()
    if now_uptime_ms is None and bool((has_none & (uptime_ms != NO_UPTIME)).any()):
        raise bad_form(f"tap {part.tap.name!r} has readings without at, and now.uptime_ms is missing",
                       "Send now.uptime_ms with every attempt, or at with every reading.", "now.uptime_ms")
    nameless = has_none & (uptime_ms == NO_UPTIME) & (part.sequence == NO_SEQUENCE)
    if int(nameless.sum()) > 1:
        raise bad_form(f"tap {part.tap.name!r} has several readings without at, uptime_ms and sequence",
                       "Give each reading at, uptime_ms or sequence, or send one reading at a time.", f"taps.{part.tap.name}.at")
