"""The shape of the statistics' answer, as JSON Schema for the OpenAPI document."""

from labmon.api.schemas import COUNT, NUMBER, TAP_PATH, TEXT, TEXTS, TIME, YES_NO, Schema, many, or_null, shape

_N = or_null(NUMBER)
_LIST: Schema = many(_N)


def _numbers(*names: str) -> dict[str, Schema]:
    return dict.fromkeys(names, _N)


def _or_null(schema: Schema) -> Schema:
    return {"anyOf": [schema, {"type": "null"}]}


SUMMARY = shape({"count": COUNT, **_numbers("mean", "standard_error", "effective_count", "sd", "min", "median", "max")})
ER = shape({"count": COUNT, "lower_bounds": COUNT, "upper_bounds": COUNT, "shares": many(NUMBER), "quantiles_db": _LIST,
            **_numbers("power_mean_db", "leak_mean_db", "leak_mean_low_db", "leak_mean_high_db", "level", "effective_count")})
DIRECTION = shape({"count": COUNT, "state": _LIST, **_numbers(
    "mean_resultant", "concentration", "concentration_low", "concentration_high", "level", "independent_cone_deg",
    "spread_major_deg", "spread_minor_deg")})
SPEED = shape({"over_s": _N, "count": COUNT, "shares": many(NUMBER), "raw_deg_per_s": _LIST, "net_deg_per_s": _LIST,
               **_numbers("rms_net_deg_per_s", "noise_deg_per_s", "noise_share")})
DISPLACEMENT = shape({"tau_s": _LIST, "mean_square_rad2": _LIST, "net_rad2": _LIST, "noise_rad2": _N, "mean_cosine": _LIST,
                      "pairs": many(COUNT)})
ALLAN = shape({
    "place_s": _N, "tau_s": _LIST, "terms": many(COUNT), "level": NUMBER,
    "curves": many(shape({"component": TEXT, "deviation": _LIST, "low": _LIST, "high": _LIST, "edf": _LIST, "noise": TEXTS})),
    "modified": shape({"tau_s": _LIST, "terms": many(COUNT), "deviation": many(_LIST)})})
DRIFT_MODEL = shape({
    "motion": {"type": "string", "enum": ["still", "Brownian", "bounded", "cyclic", "undecided"]}, "reason": TEXT,
    **_numbers("lead", "relaxation_s", "period_s", "amplitude_deg"), "places": COUNT,
    **_numbers("step_s", "diffusion_rad2_per_s", "diffusion_low_rad2_per_s", "diffusion_high_rad2_per_s", "decorrelation_s",
               "decorrelation_low_s", "decorrelation_high_s", "noise_deg"),
    "steps": COUNT, "level": NUMBER, "criterion": {"type": "object", "additionalProperties": _N}})
TREND = shape({"verdict": TEXT, **_numbers("per_day", "low_per_day", "high_per_day", "level"), "bins": COUNT,
               "effective_bins": _N})
RESPONSE = shape({"verdict": TEXT, **_numbers(
    "angle_deg_per_k", "standard_error", "lag_s", "lag_low_s", "lag_high_s", "level", "correlation", "chance"),
    "pairs": COUNT, "effective_pairs": _N})
ARC = shape({"seen_as": {"type": "string", "enum": ["leak", "sphere"]}, "verdict": TEXT, **_numbers(
    "worst_er_db", "worst_er_low_db", "worst_er_high_db", "level", "best_er_db", "seen_er_db", "half_arc_deg", "kappa_rad_per_k",
    "kappa_low_rad_per_k", "kappa_high_rad_per_k", "radius_deg", "inflation"), "readings": COUNT})

STATISTICS = shape({
    "tap": TAP_PATH, "kind": TEXT, "span": TEXT, "made_at": or_null(TIME), "readings": COUNT, "interval_s": _N,
    "is_complete": YES_NO, "why_none": TEXT, "first_at": or_null(TIME), "last_at": or_null(TIME),
    "temperature_from": or_null(TEXT),
    "er": _or_null(ER), "leak": _or_null(SUMMARY), "angle_deg": _or_null(SUMMARY), "power_w": _or_null(SUMMARY),
    "direction": _or_null(DIRECTION), "speed": _or_null(SPEED), "displacement": _or_null(DISPLACEMENT),
    "allan": _or_null(ALLAN), "drift_model": _or_null(DRIFT_MODEL),
    "trend": _or_null(shape({"angle_deg_per_day": TREND, "leak_db_per_day": TREND})),
    "temperature_response": _or_null(RESPONSE), "thermal_arc": _or_null(ARC),
}, text="made_at: of the stored day, null where made now. is_complete false: raw readings of the span are unreadable or no "
        "longer kept. Parts are null where there are under two readings (why_none), or where the tap cannot tell. Intervals are "
        "at level.")
