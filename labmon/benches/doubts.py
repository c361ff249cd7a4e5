"""A person's word on what labmon cannot tell: whether new firmware, or ports that exchanged their light, are right."""

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime

from django.db import transaction
from django.utils import timezone

from analysis.models import Calibration, Doubt
from analysis.record.doubts import end_doubt, reason_of
from analysis.reduce.trust import Reason
from ingest.models import Station
from ingest.times import at_of
from labmon.audit.actions import note
from labmon.errors import WriteError
from labmon.live.publish import publish
from labmon.people.models import Person
from labmon.people.rights import Action, require


@dataclass(frozen=True, slots=True)
class OpenDoubt:
    """One question that waits for a person."""

    id: int
    tap: str
    reason: Reason
    from_at: datetime
    text: str
    wanted_port: int
    has_zeros: bool


def open_doubts(station: Station, in_force: Mapping[int, Calibration | None]) -> list[OpenDoubt]:
    """Questions of a station that nobody has answered, oldest first; zeros taken since answer those about firmware. One query.

    Args:
        in_force: The calibration of each of its taps that holds now.
    """
    rows = Doubt.objects.filter(tap__station=station, answer=Doubt.Answer.NONE).select_related("tap").order_by("from_us", "pk")
    found = []
    for row in rows:
        version, from_at = in_force.get(row.tap_id), at_of(row.from_us)
        taken_at = version.zero_taken_at if version else None
        if row.reason == Reason.NEW_FIRMWARE.code and taken_at is not None and taken_at >= from_at:
            continue
        found.append(OpenDoubt(row.pk, row.tap.name, reason_of(row.reason), from_at, row.text,
                               version.wanted_port if version else 1, row.tap.kind in ("two-port", "dark-port")))
    return found


@transaction.atomic
def answer_doubt(doubt_id: int, answer: str, *, by: Person, reason: str = "") -> Doubt:
    """*right*: the readings since then are as good as any; *mended*: they were doubtful until now. Once answered it stays.

    Raises:
        NotAllowed: The person may not calibrate this tap.
        WriteError: There is no such answer.
    """
    doubt = Doubt.objects.select_for_update(of=("self",)).select_related("tap__station").get(pk=doubt_id)
    require(by, Action.CALIBRATE, doubt.tap)
    if answer not in (Doubt.Answer.RIGHT, Doubt.Answer.MENDED):
        raise WriteError("answer", f"{answer!r} is no answer.", "Say right or mended.")
    if doubt.answer == Doubt.Answer.NONE:
        end_doubt(doubt, Doubt.Answer(answer), timezone.now(), by.username)
        facts = {"reason": doubt.reason, "from": at_of(doubt.from_us), "seen": doubt.text}
        note(by, "answer doubt", doubt.tap, facts | {"answer": ""}, facts | {"answer": answer}, reason)
        publish({"kind": "calibration", "ids": [doubt.tap_id]})
    return doubt
