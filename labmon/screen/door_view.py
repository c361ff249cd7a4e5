"""What the door knows of a station beside its readings, in words. Pure."""

from collections.abc import Sequence
from datetime import datetime, timedelta

from labmon.benches.door_facts import DoorFacts
from labmon.benches.queries import TapFacts
from labmon.screen.present import age_text, count_text, time_text

#: Fewer readings that wait at the bench are its usual pace.
WORTH_TELLING = 100


def door_troubles(door: DoorFacts, taps: Sequence[TapFacts]) -> list[str]:
    """A sentence each, gravest first: mute instruments, a broken line, readings that wait at the bench."""
    said = [_mute_words(tap) for tap in taps if tap.is_mute]
    if door.link_lost_at is not None:
        said.append(f"The MQTT broker told at {time_text(door.link_lost_at)} that this station's line broke; nothing has come "
                    "since. It is a hint: silence is judged by readings alone.")
    if door.client is not None and (door.client.waiting or 0) >= WORTH_TELLING:
        said.append(f"{_readings(door.client.waiting or 0)} waited at the bench to be sent at "
                    f"{time_text(door.client.told_at)}: the line was away, or is slow. The oldest come first.")
    return said


def _mute_words(tap: TapFacts) -> str:
    if tap.names_itself_mute:
        return (f"{tap.name}: the instrument is mute. The bench's program lives and gets no answer from it: look at its cable, "
                "address and power, and switch it off and on if that does not help.")
    return (f"{tap.name}: nothing for {age_text(tap.silent_s)}, though its station is heard: the source behind it gives no "
            "readings.")


def door_words(door: DoorFacts, now: datetime) -> list[str]:
    """What is worth knowing and needs nobody: the program's health, repeats and disorder."""
    said = []
    if door.client is not None:
        said.append(_client_words(door, now))
    if door.known:
        said.append(f"{_readings(door.known)} of the last 24 h came again and {_were(door.known)} known: nothing is "
                    f"doubled.{_newest(door)}")
    if door.disordered:
        said.append(f"{_readings(door.disordered)} of the last 24 h came behind later ones and "
                    f"{'stands' if door.disordered == 1 else 'stand'} in {'its' if door.disordered == 1 else 'their'} place.")
    return said


def _client_words(door: DoorFacts, now: datetime) -> str:
    told = door.client
    assert told is not None
    parts = []
    if told.waiting is not None:
        parts.append(f"{_readings(told.waiting)} {'waits' if told.waiting == 1 else 'wait'} in its spool")
    if told.dropped is not None:
        parts.append(f"{told.dropped:,} dropped since the spool was made" if told.dropped else "none was ever dropped")
    if told.restarts is not None:
        parts.append(f"{count_text(told.restarts, 'restart')}")
    if told.clock:
        parts.append(f"its clock is kept by: {told.clock}")
    return f"The bench's program told {age_text((now - told.told_at).total_seconds())} ago: {', '.join(parts)}."


def _newest(door: DoorFacts) -> str:
    at = door.newest_hour_at
    return f" The newest of these came between {at:%H:%M} and {at + timedelta(hours=1):%H:%M} UTC." if at else ""


def _were(count: int) -> str:
    return "was" if count == 1 else "were"


def _readings(count: int) -> str:
    return f"{count:,} reading{'' if count == 1 else 's'}"
