"""The shapes of runs and their ledgers."""

from labmon.api.schemas import COUNT, ID, NUMBER, TAP_PATH, TEXT, TEXTS, TIME, YES_NO, Schema, many, or_null, ref, shape

RUN_STATES = ("planned", "running", "over", "cancelled")
LEDGER_STATES = ("waiting", "made", "failed")
CLASSES = ("good", "below limit", "untrusted", "no reading")
SHARE: Schema = {"type": "number", "minimum": 0, "maximum": 1}
_WISH: dict[str, Schema] = {
    "name": TEXT, "starts_at": TIME, "ends_at": TIME, "taps": many(TAP_PATH), "owner": or_null(TEXT), "deputy": or_null(TEXT),
    "allowed_below_s": NUMBER, "wanted_trusted_share": SHARE,
}
_RULED = shape({"limit": ID, "tap": TAP_PATH, "quantity": TEXT, "version": ID, "alarm": NUMBER, "warning": or_null(NUMBER),
                "from": TIME, "until": TIME})
_TOTALS: dict[str, Schema] = {name: or_null(COUNT) for name in (
    "good_s", "below_s", "untrusted_s", "no_reading_s", "doubtful_s", "longest_good_s")}

RUN_SHAPES: dict[str, Schema] = {
    "Run": shape(
        {"id": ID, "experiment": ID, "state": {"type": "string", "enum": list(RUN_STATES)}, **_WISH, "ended_at": or_null(TIME),
         "end_reason": TEXT, "cancelled_at": or_null(TIME), "cancel_reason": TEXT, "planned_at": TIME,
         "planned_by": or_null(TEXT), "length_s": COUNT, "limits": many(_RULED)}, optional=("limits",),
        text="It lasts from starts_at up to ended_at, else ends_at. limits: which version rules from when to when; before the "
             "start those that are in force now; left out of lists."),
    "Runs": shape({"runs": many(ref("Run")), "next": or_null(TEXT)},
                  text="Latest start first; where more may follow, next is what to ask for as before."),
    "NewRun": shape({"experiment": {"type": ["integer", "string"]}, "length_s": NUMBER} | _WISH,
                    optional=("length_s", *(name for name in _WISH if name not in ("name", "starts_at"))),
                    text="experiment: its id or its name. Give ends_at or length_s, in whole seconds. Without taps: all of the "
                         "experiment that measure light."),
    "RunChange": shape(_WISH | {"reason": TEXT}, optional=(*_WISH, "reason"),
                       text="Before the start all of it, while it lasts name, people and end, afterwards nothing."),
    "RunReason": shape({"reason": TEXT}, optional=("reason",)),
    "Ledger": shape(
        {"run": ID, "version": ID, "state": {"type": "string", "enum": list(LEDGER_STATES)}, "from": TIME, "until": TIME,
         "length_s": COUNT, "asked_at": TIME, "asked_by": or_null(TEXT), "reason": TEXT, "made_at": or_null(TIME),
         "done_share": SHARE, "fault": TEXT, **_TOTALS, "longest_good_from": or_null(TIME), "usable_share": or_null(SHARE),
         "trusted_share": or_null(SHARE), "edits": {"type": "object"}, "facts": {"type": "object"},
         "intervals": many(shape({"from": TIME, "until": TIME, "length_s": COUNT,
                                  "class": {"type": "string", "enum": list(CLASSES)}, "is_doubtful": YES_NO, "reasons": TEXTS,
                                  "taps": many(TAP_PATH)})),
         "next": or_null(COUNT), "versions": many(ID)},
        text="Every second of the run is in exactly one class; good_s + below_s + untrusted_s + no_reading_s = length_s. "
             "doubtful_s is of the good ones. Where more intervals follow, next is what to ask for as first."),
    "NewLedger": shape(
        {"reason": TEXT, "unusable": many(shape({"from": TIME, "until": TIME, "why": TEXT})),
         "levels": {"type": "object", "additionalProperties": {"type": "number"}}},
        optional=("unusable", "levels"),
        text="unusable: spans taken away from good. levels: by limit id, used through the whole run instead of those in force."),
    "LedgerChange": shape(
        {"run": ID, "before": ID, "after": ID, "changed_s": COUNT,
         "counts": many(shape({"before": TEXT, "after": TEXT, "seconds": COUNT})),
         "stretches": many(shape({"from": TIME, "until": TIME, "before": TEXT, "after": TEXT}))},
        text="Seconds by class in both versions (only those that are), and the first 10,000 stretches that changed."),
}
