"""The OpenAPI document: every call, who may make it, what it answers."""

import functools
from typing import Any

from django.http import HttpRequest, HttpResponse

from labmon.api.answer import json_answer
from labmon.api.audit_shapes import AUDIT_SHAPES
from labmon.api.clearance_shapes import CLEARANCE_SHAPES
from labmon.api.log_shapes import LOG_SHAPES, TAG
from labmon.api.run_shapes import RUN_SHAPES, RUN_STATES
from labmon.api.schemas import ALARM_STATES, ID, MEASURED, NAME, NAMED, TIME, Schema, ref
from labmon.api.statistics_shapes import STATISTICS

AUDIT_TYPES = {"csv": "text/csv; charset=utf-8", "jsonl": "application/jsonl"}
Operation = dict[str, Any]

BASE = "/api/v1"
PERSON = [{"personKey": []}, {"session": []}]
READING_FORMATS = {"csv": "text/csv", "json": "application/json", "parquet": "application/vnd.apache.parquet",
                   "arrow": "application/vnd.apache.arrow.stream"}


def get_openapi(request: HttpRequest) -> HttpResponse:
    """The document itself; open to all, as it holds nothing of the lab."""
    return json_answer(document())


def call(text: str, answers: dict[int, Schema], *, parameters: tuple[Schema, ...] = (), body: str = "",
         faults: tuple[int, ...] = (400, 401, 404), security: list[Schema] | None = None,
         is_body_required: bool = True) -> Operation:
    """One operation of a path."""
    said: Operation = {"summary": text, "security": PERSON if security is None else security,
                       "responses": {str(status): schema for status, schema in answers.items()}
                       | {str(status): problem(status) for status in (*faults, 503)}}
    if parameters:
        said["parameters"] = list(parameters)
    if body:
        said["requestBody"] = {"required": is_body_required, "content": {"application/json": {"schema": ref(body)}}}
    return said


def answer(text: str, name: str) -> Schema:
    """A JSON answer of a named shape."""
    return {"description": text, "content": {"application/json": {"schema": ref(name)}}}


FAULT_TEXTS = {400: "Something sent cannot be used; field names it.", 401: "No usable key or session.",
               403: "The role does not allow it, or the CSRF token is missing.",
               404: "Not there, or not for this person.",
               409: "Readings of the span cannot be read (see unreadable), or allow no figures; or a second person must consent.",
               413: "Too large.",
               415: "Not announced as JSON.", 429: "Too fast; see Retry-After.",
               503: "Database away; see Retry-After."}


def problem(status: int) -> Schema:
    """A fault."""
    return {"description": FAULT_TEXTS[status], "content": {"application/problem+json": {"schema": ref("Problem")}}}


def in_path(name: str, schema: Schema) -> Schema:
    """A parameter in the address."""
    return {"name": name, "in": "path", "required": True, "schema": schema}


def in_query(name: str, schema: Schema, text: str, *, required: bool = False) -> Schema:
    """A parameter behind the question mark."""
    return {"name": name, "in": "query", "required": required, "schema": schema, "description": text}


TAP = (in_path("station", NAME), in_path("tap", NAME))
SPAN = in_query("span", {"type": "string"}, "ISO 8601 interval start/end or start/duration, absolute times with zone, "
                                            "such as 2031-03-04T00:00:00Z/P1D.", required=True)
AUDIT = (in_query("bench", NAME, "Only about this bench."), in_query("subject", {"type": "string"}, "Only about this, as named."),
         in_query("person", {"type": "string"}, "Only by this person."),
         in_query("action", {"type": "string"}, "Only this act, such as set calibration."),
         in_query("span", {"type": "string"}, "Only within this ISO 8601 interval."))
WRITE = (400, 401, 403, 404, 413, 415)

PATHS: dict[str, dict[str, Operation]] = {
    f"{BASE}/stations": {"get": call(
        "Stations with their taps, when last heard, health and clock.", {200: answer("All that you may see.", "Stations")},
        faults=(400, 401))},
    f"{BASE}/taps/{{station}}/{{tap}}/now": {"get": call(
        "The newest reduced sample.", {200: answer("The sample; null where none yet.", "Now")}, parameters=TAP)},
    f"{BASE}/taps/{{station}}/{{tap}}/history": {"get": call(
        "An envelope of one quantity over a span.", {200: answer("The envelope.", "History")},
        parameters=(*TAP, SPAN,
                    in_query("points", {"type": "integer", "minimum": 1, "maximum": 10_000, "default": 1000},
                             "At most so many buckets."),
                    in_query("quantity", {"type": "string", "enum": list(MEASURED), "default": "er_db"},
                             "What to draw.")))},
    f"{BASE}/taps/{{station}}/{{tap}}/statistics": {"get": call(
        "Leak, angle, Allan deviations, drift model, temperature response and thermal arc of at most 8 days.",
        {200: answer("The figures, each with its uncertainty and count.", "Statistics")}, parameters=(*TAP, SPAN),
        faults=(400, 401, 404, 409))},
    f"{BASE}/taps/{{station}}/{{tap}}/readings": {"get": call(
        "Raw and reduced samples, streamed. Columns named raw_… are as sent; the unit ends each name.",
        {200: {"description": "The samples, in order of time.",
               "content": {kind: {"schema": {"type": "string"} if word != "json" else {"type": "object"}}
                           for word, kind in READING_FORMATS.items()}}},
        parameters=(*TAP, SPAN,
                    in_query("format", {"type": "string", "enum": list(READING_FORMATS), "default": "json"}, "The form."),
                    in_query("as_of", TIME, "Reduce with the calibrations that were entered by this time.")),
        faults=(400, 401, 404, 409))},
    f"{BASE}/taps/{{station}}/{{tap}}/calibration": {"patch": call(
        "A new version of the calibration.", {200: answer("The new version.", "Calibration")},
        parameters=TAP, body="NewCalibration", faults=WRITE)},
    f"{BASE}/experiments": {
        "get": call("Experiments that watch taps you may see.", {200: answer("The experiments.", "Experiments")},
                    faults=(400, 401)),
        "post": call("A new experiment.", {201: answer("The experiment.", "Experiment")}, body="NewExperiment",
                     faults=WRITE)},
    f"{BASE}/experiments/{{id}}/limits": {
        "get": call("Limits in force and their history.", {200: answer("The limits.", "Limits")},
                    parameters=(in_path("id", ID),)),
        "post": call("A new limit, or a new version of it.", {201: answer("The version.", "Limit")},
                     parameters=(in_path("id", ID),), body="NewLimit", faults=(*WRITE, 409))},
    f"{BASE}/experiments/{{id}}/limits/rehearse": {"post": call(
        "Try a proposed limit on the stored past, with the fold that judges live; writes nothing.",
        {200: answer("What it would have raised.", "Rehearsal")}, parameters=(in_path("id", ID),), body="Proposal",
        faults=WRITE)},
    f"{BASE}/experiments/{{id}}/limits/requests": {
        "get": call("Requests for looser limits during runs, newest first.", {200: answer("The requests.", "LimitRequests")},
                    parameters=(in_path("id", ID),)),
        "post": call("Ask a second person for a looser limit while a run is under way (or to retire it).",
                     {201: answer("The request.", "LimitRequest")}, parameters=(in_path("id", ID),), body="LooserLimit",
                     faults=WRITE)},
    **{f"{BASE}/limit-requests/{{id}}/{word}": {"post": call(
        text, {200: answer("The request.", "LimitRequest")}, parameters=(in_path("id", ID),), body="Decision" if has_body else "",
        is_body_required=False, faults=WRITE)}
       for word, text, has_body in (
           ("grant", "Consent to a looser limit; not by the one who asked. It is in force at once.", True),
           ("refuse", "Refuse a looser limit; not by the one who asked.", True),
           ("withdraw", "Take back what you asked for.", False))},
    f"{BASE}/floors": {"get": call("The lab's floors: the least that limits must ask for.",
                                   {200: answer("The floors.", "Floors")}, faults=(400, 401))},
    f"{BASE}/stations/{{station}}/floors": {"post": call(
        "Set, lower or lift (value null) a floor for a bench or one of its taps; managers only.",
        {201: answer("The floor, and the limits that ask for less.", "NewlySetFloor")}, parameters=(in_path("station", NAME),),
        body="NewFloor", faults=WRITE)},
    f"{BASE}/experiments/{{id}}/clearance": {"get": call(
        "Will it hold? Past windows of the run's length, replayed from today's state: k of N, the bound, what failed and why. "
        "Writes nothing; of a start in the past it says what would have been said then.",
        {200: answer("The answer, with all it rests on.", "Clearance")},
        parameters=(in_path("id", ID), in_query("start", TIME, "When the run would start; now if left out."),
                    in_query("length_s", {"type": "number", "minimum": 60, "maximum": 2_678_400, "default": 43_200},
                             "How long it would last, s."),
                    in_query("allowed_s", {"type": "number", "minimum": 0, "default": 0},
                             "Seconds beyond the limit that it bears.")))},
    f"{BASE}/runs/{{id}}/clearance": {"get": call(
        "The clearance of a declared run; of one that has begun, what would have been said at its start.",
        {200: answer("The answer, with all it rests on.", "RunClearance")}, parameters=(in_path("id", ID),))},
    f"{BASE}/alarms": {"get": call(
        "Alarms, newest first.", {200: answer("The alarms.", "Alarms")},
        parameters=(in_query("state", {"type": "string", "enum": list(ALARM_STATES)}, "Only in this state."),
                    in_query("experiment", ID, "Only of this experiment."),
                    in_query("before", ID, "Only older ones: ids below this."),
                    in_query("count", {"type": "integer", "minimum": 1, "maximum": 1000, "default": 200},
                             "At most so many.")), faults=(400, 401))},
    f"{BASE}/alarms/{{id}}/acknowledge": {"post": call(
        "Say that you have seen an alarm; a second time changes nothing.", {200: answer("The alarm.", "Alarm")},
        parameters=(in_path("id", ID),), body="Acknowledgement", is_body_required=False, faults=WRITE)},
    f"{BASE}/alarms/{{id}}/shelve": {"post": call(
        "Keep an alarm, and what its limit (or its tap, of this kind) may raise meanwhile, quiet for at most 4 h; it comes back "
        "by itself. Shelving again replaces the end.", {200: answer("The alarm.", "Alarm")},
        parameters=(in_path("id", ID),), body="Shelving", faults=WRITE)},
    f"{BASE}/alarms/{{id}}/unshelve": {"post": call(
        "End every shelving that keeps an alarm quiet; where there is none nothing changes.",
        {200: answer("The alarm.", "Alarm")}, parameters=(in_path("id", ID),), faults=WRITE)},
    f"{BASE}/stations/{{station}}": {"patch": call(
        "Say what a bench shares with others: room, laser, logger, network.", {200: answer("What it shares now.", "Shared")},
        parameters=(in_path("station", NAME),), body="StationChange", faults=WRITE)},
    f"{BASE}/events": {"get": call(
        "Events, newest first: alarms that start together and share something are one.", {200: answer("The events.", "Events")},
        parameters=(in_query("before", ID, "Only older ones: ids below this."),
                    in_query("count", {"type": "integer", "minimum": 1, "maximum": 200, "default": 50}, "At most so many.")),
        faults=(400, 401))},
    f"{BASE}/events/{{id}}": {"get": call("One event.", {200: answer("The event.", "Event")},
                                         parameters=(in_path("id", ID),))},
    f"{BASE}/events/{{id}}/acknowledge": {"post": call(
        "Take an event: all its alarms are acknowledged; a second time changes nothing.", {200: answer("The event.", "Event")},
        parameters=(in_path("id", ID),), body="Acknowledgement", is_body_required=False, faults=WRITE)},
    f"{BASE}/holds": {"get": call("What is kept quiet now, by whom, why and until when.", {200: answer("The holds.", "Holds")},
                                  faults=(400, 401))},
    f"{BASE}/holds/{{id}}/end": {"post": call(
        "End a hold before its time; a second time changes nothing.", {200: answer("The hold.", "Hold")},
        parameters=(in_path("id", ID),), faults=WRITE)},
    f"{BASE}/taps/{{station}}/{{tap}}/holds": {"post": call(
        "Shelve alarms of a tap (at most 4 h), or take them out of service (the bench's owner and managers).",
        {201: answer("The hold.", "Hold")}, parameters=TAP, body="NewHold", faults=WRITE)},
    f"{BASE}/stations/{{station}}/log": {
        "get": call("A bench's logbook, newest first.", {200: answer("The entries.", "LogEntries")},
                    parameters=(in_path("station", NAME),
                                in_query("span", {"type": "string"}, "Only what touches this ISO 8601 interval."),
                                in_query("tag", TAG, "Only entries about this."),
                                in_query("before", ID, "Only those that stand below this entry."),
                                in_query("count", {"type": "integer", "minimum": 1, "maximum": 1000, "default": 100},
                                         "At most so many."))),
        "post": call("Write an entry; it may be a configuration change of the bench.", {201: answer("The entry.", "LogEntry")},
                     parameters=(in_path("station", NAME),), body="NewLogEntry", faults=WRITE)},
    f"{BASE}/log/{{id}}": {"patch": call(
        "Edit an entry (who wrote it, the bench's owner, managers); how it read before is kept.",
        {200: answer("The entry.", "LogEntry")}, parameters=(in_path("id", ID),), body="LogEntryChange", faults=WRITE)},
    f"{BASE}/log/{{id}}/change": {"post": call(
        "Say whether it was a configuration change, and of which kind.", {200: answer("The entry.", "LogEntry")},
        parameters=(in_path("id", ID),), body="WasChange", faults=WRITE)},
    f"{BASE}/log/{{id}}/strike": {"post": call(
        "Strike an entry out: it stays readable, and a configuration change of it counts no more.",
        {200: answer("The entry.", "LogEntry")}, parameters=(in_path("id", ID),), faults=WRITE)},
    f"{BASE}/runs": {
        "get": call("Runs of experiments that you may see, latest start first.", {200: answer("The runs.", "Runs")},
                    parameters=(in_query("experiment", ID, "Only of this experiment."),
                                in_query("state", {"type": "string", "enum": list(RUN_STATES)}, "Only those that stand so."),
                                in_query("before", {"type": "string"}, "The next of the page before."),
                                in_query("count", {"type": "integer", "minimum": 1, "maximum": 1000, "default": 100},
                                         "At most so many."))),
        "post": call("Plan a run. No two of one experiment overlap.", {201: answer("The run.", "Run")}, body="NewRun",
                     faults=WRITE)},
    f"{BASE}/runs/{{id}}": {
        "get": call("One run.", {200: answer("The run.", "Run")}, parameters=(in_path("id", ID),)),
        "patch": call("Change a run.", {200: answer("The run.", "Run")}, parameters=(in_path("id", ID),), body="RunChange",
                      faults=WRITE)},
    **{f"{BASE}/runs/{{id}}/{word}": {"post": call(
        text, {200: answer("The run.", "Run")}, parameters=(in_path("id", ID),), body="RunReason", is_body_required=False,
        faults=WRITE)}
       for word, text in (("stop", "End a run that is under way, now."), ("cancel", "Take back a run that has not begun."))},
    f"{BASE}/runs/{{id}}/ledger": {
        "get": call("A run's ledger: every second good, below limit, untrusted or no reading.",
                    {200: answer("The newest version that is made, or the one asked for.", "Ledger")},
                    parameters=(in_path("id", ID), in_query("version", ID, "This version."),
                                in_query("first", {"type": "integer", "minimum": 0}, "Intervals from this one on."))),
        "post": call("Ask for the next version, with what is known now and with edits.",
                     {202: answer("It is being made.", "Ledger")}, parameters=(in_path("id", ID),), body="NewLedger",
                     faults=WRITE)},
    f"{BASE}/runs/{{id}}/ledger/change": {"get": call(
        "Two versions of a ledger compared, second by second.", {200: answer("What changed.", "LedgerChange")},
        parameters=(in_path("id", ID), in_query("before", ID, "A version.", required=True),
                    in_query("after", ID, "Another version.", required=True)))},
    f"{BASE}/audit": {"get": call(
        "Who changed what, newest first: managers all of it, owners what is about their benches and experiments.",
        {200: answer("The entries.", "AuditEntries")},
        parameters=(*AUDIT, in_query("before", ID, "Only older ones: ids below this."),
                    in_query("count", {"type": "integer", "minimum": 1, "maximum": 1000, "default": 200}, "At most so many.")),
        faults=(400, 401, 403))},
    f"{BASE}/audit/export": {"get": call(
        "The same as a file, streamed; that it was taken is itself an entry.",
        {200: {"description": "The entries, newest first.",
               "content": {kind: {"schema": {"type": "string"}} for kind in AUDIT_TYPES.values()}}},
        parameters=(*AUDIT, in_query("format", {"type": "string", "enum": list(AUDIT_TYPES), "default": "csv"}, "The form."),
                    in_query("chain", {"type": "string", "enum": ["yes", "no"], "default": "no"},
                             "yes: each line with a digest of all before it, so that a changed or missing line is noticed.")),
        faults=(400, 401, 403))},
    f"{BASE}/readings": {"post": {
        "summary": "The station door: a batch of readings. Answered after the commit, never before.",
        "security": [{"stationKey": []}],
        "parameters": [{"name": "Content-Encoding", "in": "header", "schema": {"type": "string", "enum": ["gzip"]}}],
        "requestBody": {"required": True, "content": {
            "application/json": {"schema": ref("Batch")},
            "application/msgpack": {"schema": {"description": "The same map; a column may be a binary string of "
                                                              "little-endian float64 or int64."}}}},
        "responses": {"200": answer("Committed.", "Accepted")}
        | {str(status): problem(status) for status in (400, 401, 403, 413, 415, 429, 503)}}},
    f"{BASE}/openapi.json": {"get": call("This document.", {200: {
        "description": "OpenAPI 3.1.", "content": {"application/json": {"schema": {"type": "object"}}}}},
        faults=(), security=[])},
    "/health/process": {"get": call("The process is up.", {200: answer("It is.", "ProcessUp")}, faults=(), security=[])},
    "/health/services": {"get": call("Database and broker reachable, migrations applied.",
                                     {200: answer("All are.", "ServicesUp")}, faults=(), security=[])},
}


@functools.cache
def document() -> dict[str, Any]:
    """The whole document, OpenAPI 3.1."""
    return {
        "openapi": "3.1.0",
        "info": {"title": "labmon", "version": "1", "description": "Polarization on a laboratory's fibre benches. "
                 "Additions are free, changes are not: clients must accept members that they do not know."},
        "paths": PATHS,
        "components": {
            "schemas": NAMED | {"Statistics": STATISTICS} | CLEARANCE_SHAPES | LOG_SHAPES | AUDIT_SHAPES | RUN_SHAPES,
            "securitySchemes": {
                "personKey": {"type": "http", "scheme": "bearer", "description": "A person's key."},
                "session": {"type": "apiKey", "in": "cookie", "name": "sessionid",
                            "description": "A signed-in browser; writes need X-CSRFToken."},
                "stationKey": {"type": "http", "scheme": "bearer", "description": "A station's key."}}},
    }
