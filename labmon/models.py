"""Gathers the models of labmon's nouns for Django."""

from labmon.ahead.models import AheadDue, AheadScore, LimitOutlook
from labmon.alarms.models import Alarm, AlarmBounds, AlarmHold
from labmon.audit.models import AuditEntry, AuditPlace
from labmon.benches.models import Bench, ClientState, DoorHour, DoorRefusal, KeyUse
from labmon.clearance.models import BackTestDue, BackTestPass, LimitBackTest, RunClearance, RunWatch
from labmon.drills.models import Drill
from labmon.events.models import CallRules, Event, OnCall
from labmon.evidence.models import RunEvidence
from labmon.experiments.models import Experiment, FoldCheckpoint, Limit, LimitFloor, LimitRequest, LimitVersion
from labmon.logbook.models import ConfigurationChange, LogEntry, LogEntryBefore
from labmon.overnight.models import DigestWish
from labmon.people.models import Person, PersonKey, SignInTry
from labmon.runs.models import Run, RunLedger, RunLimit, RunSoFar, RunTap
from labmon.tell.models import Delivery, DeliveryTry, Message, PushDevice, QuietHours, SigningKey, Webhook

__all__ = [
    "AheadDue", "AheadScore", "Alarm", "AlarmBounds", "AlarmHold", "AuditEntry", "AuditPlace", "BackTestDue",
    "BackTestPass", "Bench", "CallRules", "ClientState", "ConfigurationChange", "Delivery", "DeliveryTry", "DigestWish",
    "DoorHour", "DoorRefusal", "Drill", "Event", "Experiment", "FoldCheckpoint", "KeyUse", "Limit", "LimitBackTest", "LimitFloor",
    "LimitOutlook", "LimitRequest", "LimitVersion", "LogEntry", "LogEntryBefore", "Message", "OnCall", "Person",
    "PersonKey", "PushDevice", "QuietHours", "Run", "RunClearance", "RunEvidence", "RunLedger", "RunLimit",
    "RunSoFar", "RunTap",
    "RunWatch", "SignInTry", "SigningKey", "Webhook",
]
