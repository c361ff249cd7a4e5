"""Who is told of an alarm: the experiment's owner, and while a run lasts its owner and deputy; if none of them can be reached,
the managers. One mail an event.
"""

from collections.abc import Iterable, Mapping

from django.conf import settings

from labmon.alarms.models import Alarm, AlarmKind
from labmon.experiments.models import Experiment
from labmon.people.models import Person, Role
from labmon.runs.models import Run
from labmon.runs.queries import runs_now
from labmon.tell.outbox import Mail, queue_mails

#: What a mail may be about; with the alarm's number it is the event's key.
RAISED, ROSE, BACK, RUN_BEGAN = "raised", "rose", "back", "run"


def call_people(alarms: Iterable[tuple[Alarm, str]], names: Mapping[int, str]) -> None:
    """Queue a mail for each (alarm, event); the same again changes nothing.

    Events are RAISED, ROSE, BACK with the number of the hold that ended, RUN_BEGAN with the number of the run that began.

    Args:
        names: Of the alarms' taps, ``station/tap``, by tap id.
    """
    events = list(alarms)
    if not events:
        return
    experiments = Experiment.objects.select_related("owner").in_bulk(
        {alarm.experiment_id for alarm, _ in events if alarm.experiment_id}
    )
    runs = runs_now(experiments) if experiments else {}
    managers: list[str] | None = None
    mails = []
    for alarm, event in events:
        recipients = _owner_addresses(experiments.get(alarm.experiment_id), runs.get(alarm.experiment_id))
        if not recipients:
            managers = _manager_addresses() if managers is None else managers
            recipients = managers
        mails.append(
            Mail(f"alarm-{alarm.pk}-{event}", recipients, _subject(alarm), _body(alarm, names[alarm.tap_id], experiments))
        )
    queue_mails(mails)


def _owner_addresses(experiment: Experiment | None, run: Run | None) -> list[str]:
    people = [run.owner, run.deputy] if run else []
    people += [experiment.owner] if experiment else []
    return list(dict.fromkeys(one.email for one in people if one and one.is_active and one.email))


def _manager_addresses() -> list[str]:
    managers = Person.objects.filter(role=Role.MANAGER, is_active=True).exclude(email="")
    return list(managers.order_by("pk").values_list("email", flat=True))


def _subject(alarm: Alarm) -> str:
    return f"{alarm.level}: {alarm.message}"


def _body(alarm: Alarm, name: str, experiments: Mapping[int, Experiment]) -> str:
    what = {AlarmKind.LIMIT: "Raised", AlarmKind.NO_READING: "Noticed", AlarmKind.UNTRUSTED: "Noticed"}[AlarmKind(alarm.kind)]
    lines = [
        f"{alarm.message}.",
        "",
        f"{what}: {alarm.raised_at:%Y-%m-%d %H:%M:%S} UTC",
        *([f"Experiment: {experiments[alarm.experiment_id].name}"] if alarm.experiment_id else []),
        f"Bench: {settings.PUBLIC_URL}/stations/{name.split('/')[0]}/",
        f"Alarms: {settings.PUBLIC_URL}/alarms/",
        "",
        "labmon watches and advises; it changes nothing on the bench.",
    ]
    return "\n".join(lines)
