"""Addresses below /api/v1/. The station door, POST /api/v1/readings, is mounted before Django in labmon/asgi.py."""

from django.urls import path, re_path, register_converter

from ingest.models import NAME_PATTERN
from labmon.api.alarms import get_alarms, post_acknowledge, post_shelve, post_unshelve
from labmon.api.audit import get_audit, get_audit_export
from labmon.api.call import by_method, open_to_all, unknown_address
from labmon.api.clearance import get_clearance, get_run_clearance
from labmon.api.events import get_event, get_events, patch_station, post_take
from labmon.api.experiments import get_experiments, get_limits, post_experiment, post_limit
from labmon.api.floors import get_floors, post_floor
from labmon.api.holds import get_holds, post_end_hold, post_hold
from labmon.api.limit_requests import get_requests, post_grant, post_refuse, post_request, post_withdraw
from labmon.api.log import get_log, patch_entry, post_change, post_log, post_strike
from labmon.api.openapi import get_openapi
from labmon.api.readings import get_readings
from labmon.api.rehearsal import post_rehearse
from labmon.api.run_ledgers import get_ledger, get_ledger_change, post_ledger
from labmon.api.runs import get_run, get_runs, patch_run, post_cancel, post_run, post_stop
from labmon.api.stations import get_stations
from labmon.api.statistics import get_statistics
from labmon.api.taps import get_history, get_now, patch_calibration


class ShortName:
    """A station's or tap's name."""

    regex = NAME_PATTERN

    def to_python(self, text: str) -> str:
        return text

    def to_url(self, text: str) -> str:
        return text


class RowId:
    """A row's number, as large as the database's own."""

    regex = "[0-9]{1,18}"

    def to_python(self, text: str) -> int:
        return int(text)

    def to_url(self, number: int) -> str:
        return str(number)


register_converter(ShortName, "short")
register_converter(RowId, "row")
TAP = "taps/<short:station>/<short:tap>/"

app_name = "api"
urlpatterns = [
    path("stations", by_method(GET=get_stations), name="stations"),
    path("stations/<short:station>", by_method(PATCH=patch_station), name="station"),
    path("events", by_method(GET=get_events), name="events"),
    path("events/<row:event_id>", by_method(GET=get_event), name="event"),
    path("events/<row:event_id>/acknowledge", by_method(POST=post_take), name="take-event"),
    path(TAP + "now", by_method(GET=get_now), name="now"),
    path(TAP + "history", by_method(GET=get_history), name="history"),
    path(TAP + "statistics", by_method(GET=get_statistics), name="statistics"),
    path(TAP + "readings", by_method(GET=get_readings), name="readings"),
    path(TAP + "calibration", by_method(PATCH=patch_calibration), name="calibration"),
    path("experiments", by_method(GET=get_experiments, POST=post_experiment), name="experiments"),
    path("experiments/<row:experiment_id>/limits", by_method(GET=get_limits, POST=post_limit), name="limits"),
    path("experiments/<row:experiment_id>/limits/rehearse", by_method(POST=post_rehearse), name="rehearse"),
    path("experiments/<row:experiment_id>/limits/requests", by_method(GET=get_requests, POST=post_request),
         name="limit-requests"),
    path("limit-requests/<row:request_id>/grant", by_method(POST=post_grant), name="grant-limit-request"),
    path("limit-requests/<row:request_id>/refuse", by_method(POST=post_refuse), name="refuse-limit-request"),
    path("limit-requests/<row:request_id>/withdraw", by_method(POST=post_withdraw), name="withdraw-limit-request"),
    path("floors", by_method(GET=get_floors), name="floors"),
    path("stations/<short:station>/floors", by_method(POST=post_floor), name="set-floor"),
    path("experiments/<row:experiment_id>/clearance", by_method(GET=get_clearance), name="clearance"),
    path("runs/<row:run_id>/clearance", by_method(GET=get_run_clearance), name="run-clearance"),
    path("alarms", by_method(GET=get_alarms), name="alarms"),
    path("alarms/<row:alarm_id>/acknowledge", by_method(POST=post_acknowledge), name="acknowledge"),
    path("alarms/<row:alarm_id>/shelve", by_method(POST=post_shelve), name="shelve"),
    path("alarms/<row:alarm_id>/unshelve", by_method(POST=post_unshelve), name="unshelve"),
    path("holds", by_method(GET=get_holds), name="holds"),
    path("holds/<row:hold_id>/end", by_method(POST=post_end_hold), name="end-hold"),
    path(TAP + "holds", by_method(POST=post_hold), name="hold"),
    path("stations/<short:station>/log", by_method(GET=get_log, POST=post_log), name="log"),
    path("log/<row:entry_id>", by_method(PATCH=patch_entry), name="log-entry"),
    path("log/<row:entry_id>/change", by_method(POST=post_change), name="log-change"),
    path("log/<row:entry_id>/strike", by_method(POST=post_strike), name="log-strike"),
    path("runs", by_method(GET=get_runs, POST=post_run), name="runs"),
    path("runs/<row:run_id>", by_method(GET=get_run, PATCH=patch_run), name="run"),
    path("runs/<row:run_id>/stop", by_method(POST=post_stop), name="stop-run"),
    path("runs/<row:run_id>/cancel", by_method(POST=post_cancel), name="cancel-run"),
    path("runs/<row:run_id>/ledger", by_method(GET=get_ledger, POST=post_ledger), name="ledger"),
    path("runs/<row:run_id>/ledger/change", by_method(GET=get_ledger_change), name="ledger-change"),
    path("audit", by_method(GET=get_audit), name="audit"),
    path("audit/export", by_method(GET=get_audit_export), name="audit-export"),
    path("openapi.json", open_to_all(GET=get_openapi), name="openapi"),
    re_path(r"", unknown_address, name="unknown"),
]
