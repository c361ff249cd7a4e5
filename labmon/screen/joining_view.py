"""A joining bench in words: one sentence, then the checklist of its slip. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from typing import Final

from analysis.reduce.plausible import Oddity
from ingest.models import StationBoot
from ingest.mqtt.broker_log import TURNED_AWAY
from labmon.benches.joining import Joining, TapJoining
from labmon.benches.models import DoorRefusal
from labmon.screen.clock_view import clock_state
from labmon.screen.present import age_text, count_text, dop_text, er_text, temperature_text

STRANGERS_SHOWN: Final = 3


class Tick(StrEnum):
    """Where a step stands; the value is the word beside its box."""

    DONE = "seen"
    WAITS = "not yet"
    FAULT = "look here"


@dataclass(frozen=True, slots=True)
class Step:
    """One line of the checklist."""

    name: str
    tick: Tick
    words: list[str]


@dataclass(frozen=True, slots=True)
class JoiningView:
    """The sentence and the steps."""

    sentence: str
    steps: list[Step]
    is_joined: bool


def joining_view(joining: Joining) -> JoiningView:
    """Everything the checklist shows."""
    steps = [_key_step(joining), _clock_step(joining), *(step for tap in joining.taps for step in _tap_steps(tap, joining))]
    return JoiningView(_sentence(joining, steps), steps, all(step.tick is Tick.DONE for step in steps) and bool(joining.taps))


def _sentence(joining: Joining, steps: Sequence[Step]) -> str:
    name = joining.station.name
    if not joining.taps:
        return f"{name} has no tap yet: add one below, a key alone measures nothing."
    done = sum(step.tick is Tick.DONE for step in steps)
    if done == len(steps):
        return f"{name} has joined: {_first_light_words(joining)}."
    fault = next((step for step in steps if step.tick is Tick.FAULT), None)
    if fault is not None:
        return f"{name} is not there yet: {done} of {len(steps)} seen, look at “{fault.name}”."
    if done == 0:
        return f"{name} has not been heard yet."
    waits = next(step for step in steps if step.tick is Tick.WAITS)
    return f"{name} is on its way: {done} of {len(steps)} seen, next is “{waits.name}”."


def _first_light_words(joining: Joining) -> str:
    said = [f"{tap.name} {_light(tap)}" for tap in joining.taps]
    return "first light, " + ", ".join(said) if any(tap.kind != "climate" for tap in joining.taps) else ", ".join(said)


def _key_step(joining: Joining) -> Step:
    used = [key for key in joining.keys if key.used_at is not None]
    wrong = [_refused_key_words(row, joining.now) for row in joining.refused if row.status == 401]
    if used:
        newest = max(used, key=lambda key: key.used_at or key.made_at)
        age = age_text((joining.now - (newest.used_at or joining.now)).total_seconds())
        words = [f"The key that begins with {newest.hint} came {_from(newest.used_from)}{age} ago."]
        return Step("Key seen", Tick.FAULT if wrong and not _is_after(used, joining) else Tick.DONE, words + wrong)
    if not joining.keys:
        return Step("Key seen", Tick.FAULT, ["No key is in force. Make one on the station's page.", *wrong])
    if joining.boot is not None:  # heard by a way on which the key is not seen here, such as a broker
        return Step("Key seen", Tick.DONE, ["Readings came; the key was checked on their way."])
    strangers = [_stranger_words(row, joining) for row in joining.strangers[:STRANGERS_SHOWN]]
    hints = " or ".join(key.hint for key in joining.keys)
    waits = f"Nobody has come with the key that begins with {hints}."
    return Step("Key seen", Tick.FAULT if wrong or strangers else Tick.WAITS, [waits, *wrong, *strangers])


def _is_after(used: Sequence, joining: Joining) -> bool:
    """The last good use is newer than the last wrong one."""
    return max(key.used_at for key in used) > max(row.last_at for row in joining.refused if row.status == 401)


def _refused_key_words(row: DoorRefusal, now: datetime) -> str:
    return (f"An old key of this bench{_hint(row)} was tried {_times(row)} {_from(row.remote_address)}"
            f"{_ago(row.last_at, now)}: {row.title}. Put the present key in its place.")


def _stranger_words(row: DoorRefusal, joining: Joining) -> str:
    where = f"{_times(row)} {_from(row.remote_address)}{_ago(row.last_at, joining.now)}"
    if row.hint == "pers":
        return f"A person's key was tried as a station's, {where}. The bench needs its own key."
    if row.title == "a station key is needed":
        return f"Someone came without a key, {where}. The header Authorization: Bearer … is missing."
    if row.title == TURNED_AWAY.title:
        return (f"The MQTT broker turned someone away {where}: a wrong key, or a user that is not the station's name. Which of "
                "them, the broker does not say. If that is this bench, compare both with the slip.")
    return (f"A key that labmon does not know{_hint(row)} was tried {where}. If that is this bench, compare it with the slip: "
            "letters lost at the end, a blank or a line break are usual.")


def _clock_step(joining: Joining) -> Step:
    boot: StationBoot | None = joining.boot
    if boot is None:
        return Step("Clock", Tick.WAITS, ["Known with the first reading."])
    state = clock_state(boot)
    return Step("Clock", Tick.FAULT if state.is_fault else Tick.DONE, [state.words])


def _tap_steps(tap: TapJoining, joining: Joining) -> list[Step]:
    steps = [_tap_step(tap, joining)]
    if tap.kind != "climate":
        steps.append(_unit_step(tap))
    steps.append(_light_step(tap))
    return steps


def _tap_step(tap: TapJoining, joining: Joining) -> Step:
    name = f"Tap {tap.name}"
    refused = [_refused_body_words(row, tap, joining) for row in joining.refused if row.status in {400, 403, 413}
               and (tap.heard_at is None or row.last_at > tap.heard_at)]
    words = []
    if tap.unknown_columns:
        words.append(f"Columns that labmon does not know, kept and not used: {', '.join(tap.unknown_columns)}.")
    if tap.aside is not None and tap.heard_at is None:
        words.append(f"Readings came and could not be used: {tap.aside.field}, {tap.aside.why}. To do: {tap.aside.do}.")
    if tap.heard_at is None:
        return Step(name, Tick.FAULT if refused or words else Tick.WAITS, [*refused, *words] or ["No reading yet."])
    heard = f"Last heard {_ago(tap.heard_at, joining.now)}, with {', '.join(tap.columns) or 'no value'}."
    return Step(name, Tick.FAULT if refused else Tick.DONE, [heard, *refused, *words])


def _refused_body_words(row: DoorRefusal, tap: TapJoining, joining: Joining) -> str:
    meant = ""
    if row.title.endswith(row.field.removeprefix("taps.").join("''")) and "has no tap" in row.title:
        names = ", ".join(one.name for one in joining.taps)
        meant = f" This bench has {names}."
    return (f"A batch was refused {_times(row)} {_from(row.remote_address)}{_ago(row.last_at, joining.now)}: {row.title}"
            f"{f' (field {row.field})' if row.field and not meant else ''}.{meant} {row.detail}")


_ODD_WORDS = {
    Oddity.TOO_STRONG: "is more than any fibre here carries. Is the unit right?",
    Oddity.TOO_WEAK: "is weaker than a detector sees. Is the unit right?",
    Oddity.NEGATIVE: "is negative. Send the raw value, no zero taken off; is the input turned round?",
    Oddity.CONSTANT: "does not change at all. Is the value read anew each time?",
    Oddity.LOOKS_LOGARITHMIC: "is negative as only a level in dBm is. Is the instrument set to dBm?",
    Oddity.LOOKS_LINEAR: "looks like a linear power, not a level in dBm. Is the instrument set to W?",
}


def _unit_step(tap: TapJoining) -> Step:
    name = f"Unit of {tap.name}"
    if tap.heard_at is None:
        return Step(name, Tick.WAITS, [f"Known with the first readings; the tap is declared in {_unit(tap)}."])
    if not tap.oddities:
        return Step(name, Tick.DONE, [f"The values can be {_unit(tap)}."])
    return Step(name, Tick.FAULT, [f"{column}: {value:.4g} {_unit(tap)} {_ODD_WORDS[oddity]}"
                                   for column, (oddity, value) in tap.oddities.items()])


def _light_step(tap: TapJoining) -> Step:
    is_air = tap.kind == "climate"
    name = f"First air of {tap.name}" if is_air else f"First light of {tap.name}"
    light = _light(tap)
    if light:
        return Step(name, Tick.DONE, [light[:1].upper() + light[1:] + "."])
    if tap.now is None:
        return Step(name, Tick.WAITS, ["The first reduced reading ticks this."])
    reasons = "; ".join(reason.rstrip(".") for reason in tap.now.trust_reasons)
    return Step(name, Tick.FAULT, [f"Readings come, and tell no polarization yet: {reasons or 'no light'}."])


def _light(tap: TapJoining) -> str:
    """What the first light says; empty before there is any."""
    sample = tap.now
    if sample is None:
        return ""
    if tap.kind == "climate":
        return temperature_text(sample.temperature_c) if sample.temperature_c is not None else ""
    if sample.er_db is not None:
        return f"extinction ratio {er_text(sample.er_db, is_lower_bound=sample.is_lower_bound)}"
    return f"degree of polarization {dop_text(sample.dop)}" if sample.dop is not None else ""


def _unit(tap: TapJoining) -> str:
    return tap.unit.replace("uW", "µW")


def _times(row: DoorRefusal) -> str:
    return "once" if row.count == 1 else count_text(row.count, "time")


def _from(address: str) -> str:
    return f"from {address}, " if address else ""


def _ago(at: datetime, now: datetime) -> str:
    return f"{age_text((now - at).total_seconds())} ago"


def _hint(row: DoorRefusal) -> str:
    return f" (it begins with {row.hint})" if row.hint else ""
