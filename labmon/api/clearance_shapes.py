"""The shapes of clearances, as JSON Schema for the OpenAPI document."""

from analysis.outlook.verdict import Verdict
from labmon.api.schemas import COUNT, ID, NUMBER, TAP_PATH, TEXT, TEXTS, TIME, YES_NO, Schema, many, or_null, shape
from labmon.clearance.checklist import Standing

VERDICT: Schema = {"type": "string", "enum": [one.value for one in Verdict]}
_N = or_null(NUMBER)

_LIMIT = shape({
    "tap": TAP_PATH, "quantity": {"type": "string", "enum": ["er_db", "angle_deg"]}, "alarm": NUMBER, "limit_deg": NUMBER,
    "angle_now_deg": _N, "is_trusted_now": YES_NO, "why_not_trusted": TEXTS, "newest_at": or_null(TIME), "verdict": VERDICT,
    "held": COUNT, "count": COUNT, "failure_bound": NUMBER, "median_s": _N, "tenth_s": _N, "trusted_share": _N,
    "doubtful_share": NUMBER, "changed_at": or_null(TIME), "widened": TEXTS, "counted": many(TIME),
    "failed": many(shape({"start": TIME, "crossed_at": TIME, "failed_at": TIME, "beyond_s": NUMBER, "worst_deg": NUMBER,
                          "known": TEXTS})),
    "set_aside": many(shape({"start": TIME, "why": TEXT})),
})
_STANDING: Schema = {"type": "string", "enum": [one.value for one in Standing]}
_POINT = shape({"what": TEXT, "about": TEXT, "standing": _STANDING, "said": TEXT, "do": TEXT})
_ANSWER: dict[str, Schema] = {
    "experiment": ID, "start": TIME, "length_s": NUMBER, "allowed_s": NUMBER, "asked_at": TIME, "known_until": TIME,
    "sentence": TEXT, "verdict": VERDICT, "reasons": TEXTS, "reason_codes": TEXTS, "remedies": TEXTS, "held": COUNT,
    "count": COUNT, "share": _N, "failure_bound": NUMBER, "level": NUMBER, "median_s": _N, "tenth_s": _N, "open_causes": TEXTS,
    "limits": many(_LIMIT), "checklist": many(_POINT),
}
_TEXT = ("k (held) of N (count) past windows that would have held from today's state, and the exact one-sided 95 % bound on the "
         "chance of failure. A window counts together for all limits. median_s, tenth_s: by when half and a tenth of the "
         "replays had reached the limit; null: not within the run. counted: starts of the windows; known: what was known of a "
         "failure. It advises; a past that no longer resembles the present advises badly.")

CLEARANCE_SHAPES: dict[str, Schema] = {
    "Clearance": shape(_ANSWER, text=_TEXT),
    "RunClearance": shape({"run": ID} | _ANSWER, text=_TEXT),
}
