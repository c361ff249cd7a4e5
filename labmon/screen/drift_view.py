"""How a tap drifted on its last whole day, in words with uncertainties: one sentence, then the facts. Pure."""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from labmon.screen.present import age_text, angle_text, er_text, number_text
from labmon.screen.station_view import Fact

_HOUR_S = 3600.0
_MOST_ODDS = 1e6


@dataclass(frozen=True, slots=True, kw_only=True)
class DriftView:
    """One tap's day: ``sentence`` first; ``facts`` are empty where no figures could be made."""

    id: int
    name: str
    sentence: str
    facts: list[Fact]
    is_angle_only: bool = False


def drift_view(tap_id: int, name: str, day: datetime | None, facts: Mapping[str, Any] | None) -> DriftView:
    """What the stored statistics of a tap's newest day say; None where no day is over yet."""
    if day is None or facts is None:
        return DriftView(id=tap_id, name=name, facts=[], sentence=(
            "No whole day (UTC) of readings is over yet. The figures of a day come an hour after its end."))
    said_day = day.strftime("%Y-%m-%d")
    if facts["why_none"]:
        return DriftView(id=tap_id, name=name, facts=[], sentence=f"No figures of {said_day} (UTC). {facts['why_none']}")
    missing = "" if facts["is_complete"] else " Some raw readings of that day are missing."
    return DriftView(id=tap_id, name=name, sentence=f"On {said_day} (UTC) {_moved(facts)}.{missing}", facts=_facts(facts),
                     is_angle_only=facts["direction"] is None)


def _moved(facts: Mapping[str, Any]) -> str:
    model = facts["drift_model"]
    match model["motion"]:
        case "still":
            return "it stood still, as far as reading noise lets see"
        case "Brownian":
            return f"it wandered at random, by {_wander_text(facts)} in an hour"
        case "bounded":
            return f"it strayed about one place and came back within about {age_text(model['relaxation_s'])}"
        case "cyclic":
            return f"it swung once in {age_text(model['period_s'])}, by {angle_text(model['amplitude_deg'])} to either side"
    reason = f": {model['reason']}" if model["reason"] else ""
    return f"it cannot be told how it moved{reason}"


def _facts(facts: Mapping[str, Any]) -> list[Fact]:
    is_walk = facts["drift_model"]["motion"] == "Brownian"
    wander = "Random wander in an hour" if is_walk else "In an hour, were it a random walk"
    found = [
        Fact(name="ER of the mean leak", text=_er_text(facts["er"])),
        Fact(name="Spread", text=_spread_text(facts)),
        Fact(name="Kind of motion", text=_motion_text(facts["drift_model"])),
    ]
    if facts["drift_model"]["motion"] not in ("bounded", "cyclic"):
        found.append(Fact(name=wander, text=_wander_text(facts)))
    if facts["direction"] is not None and is_walk:
        found.append(Fact(name="Forgets its state within", text=_decorrelation_text(facts["drift_model"])))
    found += [
        Fact(name="Trend of the angle", text=_trend_text(facts["trend"]["angle_deg_per_day"])),
        Fact(name="With temperature", text=_response_text(facts)),
        Fact(name="Worst ER of the thermal arc", text=_arc_text(facts["thermal_arc"], facts["direction"] is not None)),
    ]
    return found


def _er_text(er: Mapping[str, Any]) -> str:
    if er["leak_mean_db"] is None:
        return "none: no usable reading"
    band = _band(er_text(er["leak_mean_db"]), er["leak_mean_low_db"], er["leak_mean_high_db"], er_text)
    worth = "" if er["effective_count"] is None else f" worth {_whole(er['effective_count'])}"
    bounds = f", {_whole(er['lower_bounds'])} of them only bounds" if er["lower_bounds"] else ""
    return f"{band}, from {_whole(er['count'])} reading{'' if er['count'] == 1 else 's'}{worth}{bounds}"


def _spread_text(facts: Mapping[str, Any]) -> str:
    spread = facts["direction"]
    if spread is not None:
        return f"{angle_text(spread['spread_major_deg'])} by {angle_text(spread['spread_minor_deg'])} about the mean state (1 σ)"
    return f"{angle_text(facts['angle_deg']['sd'])} in the angle (1 σ)"


def _motion_text(model: Mapping[str, Any]) -> str:
    """The kind with its odds over the next best (Bayes' criterion), or why it is undecided."""
    if model["motion"] == "undecided":
        return f"undecided: {model['reason']}" if model["reason"] else "undecided"
    odds = math.exp(min(model["lead"] / 2.0, math.log(_MOST_ODDS))) if model["lead"] is not None else math.nan
    more = "more than " if odds >= _MOST_ODDS * 0.999 else ""
    return f"{model['motion']}, {more}{_whole(odds)} to 1 against the next best model"


def _wander_text(facts: Mapping[str, Any]) -> str:
    """Root of the mean square angle after an hour of the walk that fits: √(4Dt) on the sphere, √(2Dt) in the angle alone."""
    model, ways = facts["drift_model"], 4.0 if facts["direction"] is not None else 2.0

    def after_an_hour_deg(diffusion: float | None) -> float | None:
        return None if diffusion is None else math.degrees(math.sqrt(ways * diffusion * _HOUR_S))

    value, low, high = (after_an_hour_deg(model[f"diffusion_{end}rad2_per_s"]) for end in ("", "low_", "high_"))
    return _band(_small_angle(value), low, high, _small_angle)


def _decorrelation_text(model: Mapping[str, Any]) -> str:
    high = model["decorrelation_high_s"]
    end = age_text(high) if high is not None else "no end shown"
    return f"{age_text(model['decorrelation_s'])} ({age_text(model['decorrelation_low_s'])} to {end})"


def _trend_text(trend: Mapping[str, Any]) -> str:
    if trend["verdict"] not in ("rising", "falling"):
        return trend["verdict"]
    low, value, high = (number_text(trend[key], 2, "°", always_signed=True) for key in ("low_per_day", "per_day", "high_per_day"))
    return f"{value} a day ({low} to {high})"


def _response_text(facts: Mapping[str, Any]) -> str:
    """The straight-line response; a fibre whose phase turns far shows none, and yet a thermal arc."""
    response, source, arc = facts["temperature_response"], facts["temperature_from"], facts["thermal_arc"]
    if response is None:
        return "no temperature known"
    beside = f" (temperatures of {source})" if source else ""
    if response["verdict"] != "relation shown" and arc is not None and (arc["seen_as"], arc["verdict"]) == ("leak", "measured"):
        return "turns the fibre's phase, see the thermal arc; no straight line" + beside
    if response["verdict"] != "relation shown":
        return response["verdict"] + beside
    value = number_text(response["angle_deg_per_k"], 2, "°", always_signed=True)
    lag = f"{age_text(response['lag_s'])} behind ({age_text(response['lag_low_s'])} to {age_text(response['lag_high_s'])})"
    return f"{value} ± {number_text(response['standard_error'], 2, '°')} per K, {lag}{beside}"


def _arc_text(arc: Mapping[str, Any] | None, is_stokes: bool) -> str:
    if arc is None:
        return "not known: no wanted state is set" if is_stokes else "not known: no temperature is measured"
    if arc["verdict"] != "measured":
        return arc["verdict"]
    return _band(er_text(arc["worst_er_db"]), arc["worst_er_low_db"], arc["worst_er_high_db"], er_text)


def _band(value: str, low: float | None, high: float | None, text: Any) -> str:
    """``24.3 dB (24.1 dB to 24.6 dB)``, 95 %; an end that the readings do not show is said so."""
    ends = ["no end shown" if end is None else text(end) for end in (low, high)]
    return f"{value} ({ends[0]} to {ends[1]})"


def _small_angle(value: float | None) -> str:
    return number_text(value, 3 if value is not None and value < 0.1 else 1 if value is None or value >= 10.0 else 2, "°")


def _whole(value: float) -> str:
    return f"{value:,.0f}"
