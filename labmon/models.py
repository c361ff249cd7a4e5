"""Gathers the models of labmon's nouns for Django."""

from labmon.ahead.models import AheadDue, AheadScore, LimitOutlook
from labmon.alarms.models import Alarm, AlarmBounds, AlarmHold
from labmon.audit.models import AuditEntry
from labmon.benches.models import Bench, DoorRefusal, KeyUse
from labmon.experiments.models import Experiment, FoldCheckpoint, Limit, LimitFloor, LimitRequest, LimitVersion
from labmon.logbook.models import ConfigurationChange, LogEntry, LogEntryBefore
from labmon.people.models import Person, PersonKey
from labmon.runs.models import Run, RunLimit, RunTap
from labmon.tell.models import OutboxMail

__all__ = [
    "AheadDue", "AheadScore", "Alarm", "AlarmBounds", "AlarmHold", "AuditEntry", "Bench", "ConfigurationChange",
    "DoorRefusal", "Experiment", "FoldCheckpoint", "KeyUse", "Limit", "LimitFloor", "LimitOutlook", "LimitRequest",
    "LimitVersion", "LogEntry", "LogEntryBefore", "OutboxMail", "Person", "PersonKey", "Run", "RunLimit", "RunTap",
]
