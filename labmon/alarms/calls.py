"""Who is told of an alarm: the experiment's owner; if that is nobody who can be reached, the managers. One mail an event."""

from collections.abc import Iterable, Mapping

from django.conf import settings

from labmon.alarms.models import Alarm, AlarmKind
from labmon.experiments.models import Experiment
from labmon.people.models import Person, Role
from labmon.tell.outbox import queue_mail

#: What a mail may be about; with the alarm's number it is the event's key.
RAISED, ROSE = "raised", "rose"


def call_people(alarms: Iterable[tuple[Alarm, str]], names: Mapping[int, str]) -> None:
    """Queue a mail for each (alarm, RAISED or ROSE); the same again changes nothing.

    Args:
        names: Of the alarms' taps, ``station/tap``, by tap id.
    """
    events = list(alarms)
    if not events:
        return
    owners = _addresses_by_experiment(events)
    managers: list[str] | None = None
    for alarm, event in events:
        recipients = owners.get(alarm.experiment_id or 0, [])
        if not recipients:
            managers = _manager_addresses() if managers is None else managers
            recipients = managers
        queue_mail(f"alarm-{alarm.pk}-{event}", recipients, _subject(alarm), _body(alarm, names[alarm.tap_id]))


def _addresses_by_experiment(events: list[tuple[Alarm, str]]) -> dict[int, list[str]]:
    asked = {alarm.experiment_id for alarm, _ in events if alarm.experiment_id}
    rows = Experiment.objects.filter(pk__in=asked, owner__is_active=True).exclude(owner__email="").values_list("pk", "owner__email")
    return {pk: [address] for pk, address in rows}


def _manager_addresses() -> list[str]:
    managers = Person.objects.filter(role=Role.MANAGER, is_active=True).exclude(email="")
    return list(managers.order_by("pk").values_list("email", flat=True))


def _subject(alarm: Alarm) -> str:
    return f"{alarm.level}: {alarm.message}"


def _body(alarm: Alarm, name: str) -> str:
    what = {AlarmKind.LIMIT: "Raised", AlarmKind.NO_READING: "Silent since", AlarmKind.UNTRUSTED: "Noticed"}[AlarmKind(alarm.kind)]
    lines = [f"{alarm.message}.", "", f"{what}: {alarm.raised_at:%Y-%m-%d %H:%M:%S} UTC",
             f"Experiment: {alarm.experiment.name}" if alarm.experiment else "", f"Bench: {settings.PUBLIC_URL}/stations/{name.split('/')[0]}/",
             f"Alarms: {settings.PUBLIC_URL}/alarms/", "", "labmon watches and advises; it changes nothing on the bench."]
    return "\n".join(line for line in lines if line is not None)
