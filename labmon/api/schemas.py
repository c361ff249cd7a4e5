"""The shapes of bodies and answers, as JSON Schema for the OpenAPI document.

Written by hand from the contract; tests hold every answer against its shape.
"""

from typing import Any

Schema = dict[str, Any]

TIME: Schema = {"type": "string", "format": "date-time", "description": "RFC 3339, UTC, with microseconds."}
NAME: Schema = {"type": "string", "pattern": "^[a-z0-9][a-z0-9-]{0,62}$"}
TAP_PATH: Schema = {"type": "string", "pattern": "^[a-z0-9][a-z0-9-]{0,62}/[a-z0-9][a-z0-9-]{0,62}$",
                    "description": "station/tap"}
NUMBER: Schema = {"type": "number"}
COUNT: Schema = {"type": "integer", "minimum": 0}
ID: Schema = {"type": "integer", "minimum": 1}
TEXT: Schema = {"type": "string"}
YES_NO: Schema = {"type": "boolean"}
TEXTS: Schema = {"type": "array", "items": TEXT}
MEASURED = ("er_db", "angle_deg", "dop", "power_w", "temperature_c", "humidity_pct", "pressure_hpa")
SAMPLED = ("er_db", "angle_deg", "dop", "power_w")
LIMITED = (*SAMPLED, "trusted_share", "time_to_limit_s")
TRUST: Schema = {"type": "string", "enum": ["trusted", "doubtful", "untrusted", "none"]}
ALARM_STATES = ("normal", "unacknowledged", "acknowledged", "returned-unacknowledged", "shelved", "suppressed",
                "out-of-service")


def or_null(schema: Schema) -> Schema:
    """The same, or null where the value is missing."""
    if "type" in schema and "enum" not in schema:
        return schema | {"type": [schema["type"], "null"]}
    return {"anyOf": [schema, {"type": "null"}]}


def ref(name: str) -> Schema:
    """A schema by its name in the document."""
    return {"$ref": f"#/components/schemas/{name}"}


def many(schema: Schema) -> Schema:
    """A list of it."""
    return {"type": "array", "items": schema}


def shape(properties: dict[str, Schema], *, optional: tuple[str, ...] = (), text: str = "") -> Schema:
    """An object with just these members; all are there except the optional ones."""
    return {"type": "object", "properties": properties, "additionalProperties": False,
            "required": [name for name in properties if name not in optional]} | ({"description": text} if text else {})


PROBLEM = {"type": "object", "description": "RFC 9457; detail says what to do.",
           "required": ["type", "title", "status", "detail"],
           "properties": {"type": TEXT, "title": TEXT, "status": {"type": "integer"}, "detail": TEXT,
                          "field": {"type": "string", "description": "The field at fault, where one is."},
                          "missing": TEXTS}}

TAP = shape({
    "tap": TAP_PATH, "name": NAME, "kind": {"type": "string", "enum": ["two-port", "dark-port", "stokes", "climate"]},
    "unit": or_null({"type": "string", "enum": ["W", "mW", "uW", "dBm", "V", "count"]}),
    "interval_s": or_null(NUMBER), "last_heard_at": or_null(TIME), "newest_at": or_null(TIME), "unknown_columns": TEXTS,
}, text="newest_at: data time of the newest reading; last_heard_at: arrival on the server's clock.")

STATION = shape({
    "name": NAME, "room": or_null(TEXT), "laser": or_null(TEXT), "logger": or_null(TEXT), "network": or_null(TEXT),
    "health": TEXT, "last_heard_at": or_null(TIME), "firmware": or_null(TEXT),
    "clock_offset_s": or_null(NUMBER), "clock_fault": or_null(TEXT), "is_server_timed": YES_NO, "link_lost_at": or_null(TIME),
    "taps": many(TAP),
}, text="clock_offset_s: arrival minus the station's clock, the smallest seen in this boot; link_lost_at: when an MQTT broker "
        "last told of a lost connection, a hint.")

LAST_TRUSTED = shape({"value": NUMBER, "at": TIME})

NOW = shape({
    "tap": TAP_PATH, "kind": TEXT, "taken_at": or_null(TIME), "age_s": or_null(NUMBER),
    "er_db": or_null(NUMBER), "er_sigma_db": or_null(NUMBER), "is_lower_bound": YES_NO, "is_upper_bound": YES_NO,
    "angle_deg": or_null(NUMBER), "angle_is_upper_bound": YES_NO,
    "angle_is_lower_bound": YES_NO, "polarized_er_db": or_null(NUMBER),
    "dop": or_null(NUMBER), "azimuth_deg": or_null(NUMBER), "ellipticity_deg": or_null(NUMBER),
    "sop": or_null({"type": "array", "items": NUMBER, "minItems": 3, "maxItems": 3}), "power_w": or_null(NUMBER),
    "temperature_c": or_null(NUMBER), "humidity_pct": or_null(NUMBER), "pressure_hpa": or_null(NUMBER),
    "trust": TRUST, "trust_reasons": TEXTS,
    **{f"{name}_trust": TRUST for name in SAMPLED}, **{f"{name}_reasons": TEXTS for name in SAMPLED},
    **{f"{name}_codes": TEXTS for name in SAMPLED}, "last_trusted": shape({name: or_null(LAST_TRUSTED) for name in SAMPLED}),
}, text="The newest sample by data time. An untrusted or undefined quantity is null with its reasons; last_trusted has "
        "its last trusted value. trust and trust_reasons are those of er_db; reasons are phrases, codes their fixed names. "
        "Where is_lower_bound is true, er_db is a 95 % bound: the ratio is at least this.")

HISTORY = shape({
    "tap": TAP_PATH, "quantity": {"type": "string", "enum": list(MEASURED)}, "span": TEXT, "bucket_s": NUMBER,
    "at": many(TIME), "min": many(or_null(NUMBER)), "mean": many(or_null(NUMBER)), "max": many(or_null(NUMBER)),
    "trusted_share": many(or_null(NUMBER)),
}, text="Buckets of bucket_s from each time in at; a bucket without readings is null.")

EXPERIMENT = shape({
    "id": ID, "name": TEXT, "owner": or_null(TEXT), "taps": many(TAP_PATH), "no_reading_after_s": or_null(NUMBER),
    "untrusted_after_s": NUMBER, "created_at": TIME,
})

_LIMIT_VALUES: dict[str, Schema] = {
    "alarm": NUMBER, "warning": or_null(NUMBER), "on_delay_s": NUMBER, "off_delay_s": NUMBER, "deadband": NUMBER,
    "window_s": or_null(NUMBER), "in_runs_only": YES_NO, "reason": TEXT,
}
LIMIT = shape({
    "id": ID, "experiment": ID, "tap": TAP_PATH, "quantity": {"type": "string", "enum": list(LIMITED)},
    "version": ID, "valid_from": TIME, "valid_until": or_null(TIME), **_LIMIT_VALUES,
    "alarm_db": or_null(NUMBER), "alarm_deg": or_null(NUMBER), "is_retired": YES_NO, "set_by": or_null(TEXT),
    "consented_by": or_null(TEXT),
}, text="One version of a limit. alarm_db and alarm_deg are the same alarm level on the other scale, tan²(γ/2).")

LIMITS = shape({"experiment": ID, "limits": many(ref("Limit")), "history": many(ref("Limit"))},
               text="limits: in force now; history: every version, oldest first.")

ALARM = shape({
    "id": ID, "kind": {"type": "string", "enum": ["limit", "no-reading", "untrusted"]}, "experiment": or_null(ID),
    "tap": TAP_PATH, "quantity": or_null({"type": "string", "enum": list(LIMITED)}),
    "level": {"type": "string", "enum": ["warning", "alarm"]}, "state": {"type": "string", "enum": list(ALARM_STATES)},
    "raised_at": TIME, "alarm_at": or_null(TIME), "returned_at": or_null(TIME), "acknowledged_at": or_null(TIME),
    "acknowledged_by": or_null(TEXT), "note": TEXT, "value": or_null(NUMBER), "limit": or_null(NUMBER),
    "cause": or_null(TEXT), "event": or_null(ID), "is_drill": YES_NO, "message": TEXT, "is_late": YES_NO, "is_withdrawn": YES_NO,
    "shelved_until": or_null(TIME),
    "earlier_bounds": many(shape({"raised_at": TIME, "returned_at": or_null(TIME)})),
}, text="value: the worst while open; limit: the level that it is held against. Times of limit alarms are data times. "
        "earlier_bounds: as it was told before late data moved it.")

THING = shape({"kind": {"type": "string", "enum": ["bench", "room", "laser", "logger", "network"]}, "name": TEXT})
EVENT = shape({
    "id": ID, "kind": {"type": "string", "enum": ["light", "silence"]}, "level": {"type": "string", "enum": ["warning", "alarm"]},
    "sentence": TEXT, "began_at": TIME, "shared": or_null(THING), "benches": many(NAME), "alarms": many(ID),
    "taken_at": or_null(TIME), "taken_by": or_null(TEXT), "is_drill": YES_NO,
}, text="shared: the one thing that explains it, where it is one. alarms: their ids.")
SHARED = shape({"name": NAME, "room": or_null(TEXT), "laser": or_null(TEXT), "logger": or_null(TEXT), "network": or_null(TEXT)})
STATION_CHANGE = shape({"room": or_null(TEXT), "laser": or_null(TEXT), "logger": or_null(TEXT), "network": or_null(TEXT),
                        "reason": TEXT}, optional=("room", "laser", "logger", "network", "reason"),
                       text="What is given is changed; an empty text takes it away.")

CALIBRATION = shape({
    "tap": TAP_PATH, "valid_from": TIME, "entered_at": TIME, "entered_by": TEXT, "zero1": NUMBER, "zero2": NUMBER,
    "zero1_error": or_null(NUMBER), "zero2_error": or_null(NUMBER),
    "zero_taken_at": or_null(TIME), "gain_ratio": NUMBER, "floor1": NUMBER, "floor2": NUMBER,
    "saturation1": or_null(NUMBER), "saturation2": or_null(NUMBER), "leakage": or_null(many(many(NUMBER))),
    "leakage_sigma": or_null(many(many(NUMBER))),
    "wanted_port": {"type": "integer", "enum": [1, 2]}, "monitor_ratio": or_null(NUMBER),
    "bright_nominal": or_null(NUMBER), "wanted_state": or_null(many(NUMBER)),
    "handedness": {"type": "string", "enum": ["ieee", "optics"]},
})

NEW_EXPERIMENT = shape({"name": TEXT, "taps": many(TAP_PATH), "no_reading_after_s": or_null(NUMBER),
                        "untrusted_after_s": NUMBER}, optional=("no_reading_after_s", "untrusted_after_s"))
NEW_LIMIT = shape({"tap": TAP_PATH, "quantity": {"type": "string", "enum": list(LIMITED)}, **_LIMIT_VALUES},
                  optional=tuple(name for name in _LIMIT_VALUES if name != "alarm"))
PROPOSAL = shape(
    {"tap": TAP_PATH, "quantity": {"type": "string", "enum": list(LIMITED)}}
    | {name: schema for name, schema in _LIMIT_VALUES.items() if name not in {"in_runs_only", "reason"}}
    | {"hard": or_null(NUMBER), "days": {"type": "number", "exclusiveMinimum": 0, "maximum": 31, "default": 30}},
    optional=("warning", "on_delay_s", "off_delay_s", "deadband", "window_s", "hard", "days"),
    text="hard: the level that lead times are measured to.")
REHEARSAL = shape({
    "from": TIME, "until": TIME, "count": COUNT, "at_night": COUNT, "longest_s": or_null(NUMBER), "open_s": NUMBER,
    "read_share": NUMBER,
    "calls": many(shape({"raised_at": TIME, "returned_at": or_null(TIME), "alarm_at": or_null(TIME),
                         "lead_s": or_null(NUMBER)})),
}, text="at_night: begun between 22:00 and 06:00 UTC. lead_s: from the call to the first second beyond hard; negative: too late.")
NEW_CALIBRATION = shape({name: schema for name, schema in CALIBRATION["properties"].items()
                         if name not in {"tap", "entered_at", "entered_by"}} | {"reason": TEXT},
                        optional=(*CALIBRATION["properties"], "reason"),
                        text="A missing field is taken from the version valid at valid_from (now, where that is missing).")
ACKNOWLEDGEMENT = shape({"note": TEXT}, optional=("note",))
FOR_S = {"type": "number", "exclusiveMinimum": 0}
SHELVING = shape({"for_s": FOR_S | {"maximum": 14_400}, "reason": TEXT}, text="reason is asked for: it stands in the banner.")
HOLD_KIND: Schema = {"type": "string", "enum": ["shelved", "out-of-service"]}
HELD: Schema = {"type": "string", "enum": ["all", "limit", "no-reading", "untrusted"]}
HOLD = shape({"id": ID, "kind": HOLD_KIND, "tap": TAP_PATH, "alarms": HELD, "limit": or_null(ID), "by": or_null(TEXT),
              "reason": TEXT, "begun_at": TIME, "until": or_null(TIME), "ended_at": or_null(TIME)},
             text="Alarms of a tap (all, of one limit, or of one kind) kept quiet. Readings are judged all the same.")
NEW_HOLD = shape({"kind": HOLD_KIND, "reason": TEXT, "alarms": HELD, "limit": or_null(ID), "for_s": or_null(FOR_S)},
                 optional=("alarms", "limit", "for_s"))

FLOOR_FACTS: dict[str, Schema] = {
    "station": NAME, "tap": or_null(NAME), "quantity": {"type": "string", "enum": list(LIMITED)}, "value": or_null(NUMBER),
    "set_at": TIME, "reason": TEXT,
}
FLOOR = shape(FLOOR_FACTS, text="tap null: all taps of the bench. value: of the angle the most, else the least; null: lifted.")
NEWLY_SET_FLOOR = shape(FLOOR_FACTS | {"limits_beyond": many(shape({"experiment": ID, "tap": TAP_PATH, "alarm": NUMBER}))},
                        text="limits_beyond: in force and asking for less; they stay until they are set anew.")
NEW_FLOOR = shape({name: FLOOR_FACTS[name] for name in ("quantity", "value", "reason", "tap")}, optional=("tap",))
LIMIT_REQUEST = shape({
    "id": ID, "experiment": ID, "tap": TAP_PATH, "quantity": {"type": "string", "enum": list(LIMITED)},
    "wish": {"type": ["object", "null"]}, "loosens": TEXTS, "asked_by": TEXT, "asked_at": TIME, "reason": TEXT,
    "expires_at": TIME, "state": {"type": "string", "enum": ["waiting", "granted", "refused", "withdrawn", "expired"]},
    "decided_by": or_null(TEXT), "decided_at": or_null(TIME), "note": TEXT,
}, text="A looser limit asked for during a run; wish null: to retire it. loosens: the parts that would be looser.")
LOOSER_LIMIT = shape({"tap": TAP_PATH, "quantity": {"type": "string", "enum": list(LIMITED)}, "retire": YES_NO} | _LIMIT_VALUES
                     | {"alarm": or_null(NUMBER)}, optional=("retire", *(name for name in _LIMIT_VALUES if name != "reason")))
DECISION = shape({"note": TEXT}, optional=("note",))

COLUMNS = ("By tap name, columns of equal length. Any tap: sequence, at (RFC 3339 or microseconds since 1970), uptime_ms, "
           "temperature_c, humidity_pct, drive_ma. Two-port: port1, port2, each with _min, _max, _sd, and averaged, clipped. "
           "Dark-port: port2, monitor. Stokes: s0 s1 s2 s3, or azimuth_deg ellipticity_deg dop power. Climate: temperature_c, "
           "humidity_pct, pressure_hpa. Values as measured, in the tap's unit; other columns are kept and reported.")
BATCH: Schema = {
    "type": "object", "required": ["taps"],
    "properties": {
        "boot": TEXT, "firmware": TEXT,
        "now": {"type": "object", "properties": {"at": {"type": ["string", "integer", "null"]},
                                                 "uptime_ms": {"type": ["integer", "null"]}}},
        "client": {"type": "object", "description": "What the sending program tells of itself: a hint.", "properties": {
            "waiting": {"type": "integer"}, "dropped": {"type": "integer"}, "restarts": {"type": "integer"}, "clock": TEXT,
            "mute": many(TEXT)}},
        "taps": {"type": "object", "additionalProperties": {
            "type": "object", "description": COLUMNS,
            "additionalProperties": {"type": "array"}}},
    },
}
ACCEPTED = {
    "type": "object", "required": ["stored", "known", "set_aside", "accepted", "through", "server_time"],
    "properties": {
        "stored": COUNT, "known": COUNT, "server_time": TIME,
        "set_aside": many(shape({"tap": TEXT, "row": COUNT, "field": TEXT, "why": TEXT, "do": TEXT})),
        "accepted": {"type": "object"}, "through": {"type": "object", "additionalProperties": {"type": "integer"}},
    },
}

NAMED: dict[str, Schema] = {
    "Problem": PROBLEM, "Tap": TAP, "Station": STATION, "Now": NOW, "History": HISTORY, "Experiment": EXPERIMENT,
    "Limit": LIMIT, "Limits": LIMITS, "Alarm": ALARM, "Calibration": CALIBRATION, "NewExperiment": NEW_EXPERIMENT,
    "NewLimit": NEW_LIMIT, "NewCalibration": NEW_CALIBRATION, "Acknowledgement": ACKNOWLEDGEMENT,
    "Proposal": PROPOSAL, "Rehearsal": REHEARSAL, "Shelving": SHELVING,
    "Event": EVENT, "Events": shape({"events": many(ref("Event")), "before": or_null(ID)}),
    "Shared": SHARED, "StationChange": STATION_CHANGE,
    "Hold": HOLD, "NewHold": NEW_HOLD, "Holds": shape({"holds": many(ref("Hold"))}),
    "Floor": FLOOR, "NewFloor": NEW_FLOOR, "NewlySetFloor": NEWLY_SET_FLOOR, "Floors": shape({"floors": many(ref("Floor"))}),
    "LimitRequest": LIMIT_REQUEST, "LooserLimit": LOOSER_LIMIT, "Decision": DECISION,
    "LimitRequests": shape({"experiment": ID, "requests": many(ref("LimitRequest"))}),
    "Batch": BATCH,
    "Accepted": ACCEPTED,
    "Stations": shape({"stations": many(ref("Station"))}),
    "Experiments": shape({"experiments": many(ref("Experiment"))}),
    "Alarms": shape({"alarms": many(ref("Alarm")), "before": or_null(ID)},
                    text="Newest raised first; where more may follow, before is what to ask for next."),
    "ProcessUp": shape({"process": TEXT}),
    "ServicesUp": shape({"database": TEXT, "broker": TEXT, "migrations": TEXT, "missing": TEXTS}),
}
