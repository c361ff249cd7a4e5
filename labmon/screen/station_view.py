"""A station as its page shows it: one sentence, then taps with their values in words. Pure."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime

from django.utils.safestring import SafeString, mark_safe

from analysis.models import Calibration
from ingest.models import StationBoot
from ingest.times import at_of
from labmon.ahead.queries import Ahead
from labmon.benches.queries import NowSample, StationFacts, TapFacts
from labmon.screen.ahead_view import ahead_words
from labmon.screen.clock_view import clock_state
from labmon.screen.level_words import level_words
from labmon.screen.present import (
    MISSING,
    age_text,
    angle_text,
    count_text,
    dop_text,
    er_text,
    margin_db_text,
    margin_deg_text,
    number_text,
    power_text,
    temperature_text,
    time_text,
)
from labmon.screen.rail import Mark, own_rail
from labmon.screen.standing import Standing, standing_of
from labmon.screen.zero_view import ceiling_words, leakage_texts, value_text


@dataclass(frozen=True, slots=True, kw_only=True)
class Fact:
    """A name with its value in words; ``is_doubtful`` draws it hollow."""

    name: str
    text: str
    is_doubtful: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class TapView:
    """One tap in words."""

    id: int
    name: str
    kind: str
    unit: str
    standing: Standing
    values: list[Fact]
    doubt: str
    limits: list[str]
    ahead: list[tuple[str, str]]
    calibration: list[Fact]
    unknown_columns: list[str]
    heard_ms: int | None
    heard: str
    measures_light: bool
    has_stokes: bool
    rail: SafeString
    ceiling: str
    has_zero: bool


def station_sentence(name: str, facts: StationFacts, unacknowledged: int) -> str:
    """What a person came to know: how its worst tap stands, and whether someone has taken it."""
    if not facts.taps:
        return f"{name} has no tap yet."
    worst = min(facts.taps, key=_place)
    standing = standing_of(worst.state)
    tap = f"{name}/{worst.name}"
    said = {
        Standing.NEVER_HEARD: f"{tap} has not been heard yet",
        Standing.NO_READING: f"{tap} has sent no reading for {age_text(worst.silent_s)}"
        + (", though its station lives" if worst.is_mute else ""),
        Standing.UNTRUSTED: f"{tap} cannot be trusted now{_because(worst)}",
        Standing.UNDECIDED: f"{tap} is at the detector's floor, cannot tell",
        Standing.BELOW: f"{tap} is {_margins(worst, below=True)} below its limit",
        Standing.THIN: f"{tap} is thin: {_margins(worst)} to its limit",
        Standing.WITHIN: f"{tap} is {_margins(worst)} inside its limit",
        Standing.NO_LIMIT: f"{tap} sends readings and has no limit",
    }[standing]
    waits = (
        f" {count_text(unacknowledged, 'alarm')} wait{'s' if unacknowledged == 1 else ''} for someone." if unacknowledged else ""
    )
    return f"{said}.{waits}"


def tap_view(tap: TapFacts, now: datetime, ahead: Mapping[int, Ahead] | None = None) -> TapView:
    """One tap in words; ``ahead``: what is said of the time to its limits, by limit."""
    heard_at = tap.last_heard_at
    return TapView(
        id=tap.id,
        name=tap.name,
        kind=tap.kind,
        unit=unit_text(tap.unit),
        standing=standing_of(tap.state),
        values=_values(tap),
        doubt=doubt_words(tap.now),
        limits=[level_words(limit) for limit in tap.limits],
        ahead=ahead_words(tap.limits, ahead or {}, now),
        calibration=calibration_words(tap),
        unknown_columns=list(tap.unknown_columns),
        heard_ms=None if heard_at is None else int(heard_at.timestamp() * 1000),
        rail=_rail(tap),
        heard=age_text(None if heard_at is None else (now - heard_at).total_seconds()),
        measures_light=tap.kind != "climate",
        has_stokes=tap.has_stokes,
        ceiling=ceiling_words(tap.ceiling),
        has_zero=tap.kind in ("two-port", "dark-port"),
    )


def doubt_words(sample: NowSample | None) -> str:
    """``doubtful: clock unset``; empty where the sample is trusted or nothing is wrong with it."""
    if sample is None or sample.trust == "trusted" or not sample.trust_reasons:
        return ""
    reasons = ", ".join(reason[:1].lower() + reason[1:] for reason in sample.trust_reasons)
    return reasons if sample.trust == "none" else f"{sample.trust}: {reasons}"


def unit_text(unit: str) -> str:
    """The unit as it is written, with µ."""
    return unit.replace("uW", "µW")


def _rail(tap: TapFacts) -> SafeString:
    """The tap's own margin rail; nothing where no margin is known and none is awaited."""
    margin_db = tap.margin.margin_db if tap.margin is not None else None
    standing = standing_of(tap.state)
    if margin_db is None and not (tap.limits and standing is Standing.NO_READING):
        return mark_safe("")
    mark = Mark(name=tap.name, href=f"#tap-{tap.id}", standing=standing, margin_db=margin_db, label=_margins(tap, signed=True))
    return mark_safe(own_rail(mark))


def _values(tap: TapFacts) -> list[Fact]:
    """The newest values; what is untrusted is missing and its last trusted value stands beside, with its time."""
    sample = tap.now
    if sample is None:
        return []
    air = [
        Fact(name=name, text=text)
        for name, text, value in (
            ("Temperature", temperature_text(sample.temperature_c), sample.temperature_c),
            ("Humidity", number_text(sample.humidity_pct, 1, "%"), sample.humidity_pct),
            ("Pressure", number_text(sample.pressure_hpa, 1, "hPa"), sample.pressure_hpa),
        )
        if value is not None
    ]
    return air if tap.kind == "climate" else [*_light_values(sample, is_old=tap.is_silent), *_margin_values(tap), *air]


def _light_values(sample: NowSample, *, is_old: bool) -> list[Fact]:
    def doubtful(quantity: str) -> bool:
        return is_old or sample.trust_by_quantity.get(quantity, {}).get("trust") == "doubtful"

    er = f"{'≤' if sample.is_upper_bound else ''}{er_text(sample.er_db, is_lower_bound=sample.is_lower_bound)}"
    if sample.er_sigma_db is not None:
        er += f" ± {number_text(sample.er_sigma_db, 2)}"
    facts = [
        Fact(name="Extinction ratio", text=er, is_doubtful=doubtful("er_db")),
        Fact(
            name="Angle from wanted",
            text=angle_text(
                sample.angle_deg, is_upper_bound=sample.angle_is_upper_bound, is_lower_bound=sample.angle_is_lower_bound
            ),
            is_doubtful=doubtful("angle_deg"),
        ),
    ]
    if sample.power_w is not None:
        facts.append(Fact(name="Power", text=power_text(sample.power_w), is_doubtful=doubtful("power_w")))
    if sample.sop is not None:
        facts += [
            Fact(name="Degree of polarization", text=dop_text(sample.dop), is_doubtful=doubtful("dop")),
            Fact(name="Azimuth, ellipticity", text=f"{angle_text(sample.azimuth_deg)}, {angle_text(sample.ellipticity_deg)}"),
        ]
    names = {
        "er_db": ("extinction ratio", er_text),
        "angle_deg": ("angle", angle_text),
        "dop": ("DOP", dop_text),
        "power_w": ("power", power_text),
    }
    return facts + [
        Fact(
            name=f"Last trusted {names[quantity][0]}",
            text=f"{names[quantity][1](last['value'])} at {time_text(_moment(last['at']))}",
            is_doubtful=True,
        )
        for quantity, last in (sample.last_trusted or {}).items()
        if quantity in names and getattr(sample, quantity) is None and last
    ]


def _margin_values(tap: TapFacts) -> list[Fact]:
    if tap.margin is None:
        return []
    return [Fact(name="Margin", text=_margins(tap, signed=True), is_doubtful=tap.is_silent)]


def _margins(tap: TapFacts, *, below: bool = False, signed: bool = False) -> str:
    """Both margins, degrees first; ``below`` drops the sign, for the word says it."""
    margin = tap.margin
    if margin is None:
        return MISSING
    texts = [
        margin_deg_text(margin.margin_deg, is_bound=margin.is_bound),
        margin_db_text(margin.margin_db, is_bound=margin.is_bound),
    ]
    known = [text for text, value in zip(texts, (margin.margin_deg, margin.margin_db), strict=True) if value is not None]
    joined = " (".join(known) + (")" if len(known) == 2 else "") if known else MISSING
    if below:
        return joined.replace("−", "")
    return joined if signed else joined.replace("+", "")


def _because(tap: TapFacts) -> str:
    reasons = list(tap.now.trust_reasons) if tap.now else []
    return ": " + ", ".join(reason[:1].lower() + reason[1:] for reason in reasons).rstrip(".") if reasons else ""


def _place(tap: TapFacts) -> tuple[int, float]:
    margin = tap.margin.margin_db if tap.margin is not None and tap.margin.margin_db is not None else float("inf")
    standing = standing_of(tap.state)
    return (99 if tap.kind == "climate" and standing is Standing.NO_LIMIT else standing.rank), margin


def calibration_words(tap: TapFacts) -> list[Fact]:
    """The version in force, each set field in words."""
    version = tap.calibration
    if version is None:
        return []
    unit = "W" if tap.unit == "dBm" else unit_text(tap.unit)
    facts = [
        ("In force since", time_text(version.valid_from)),
        ("Zero of port 1", value_text(version.zero1, unit, version.zero1_error)),
        ("Zero of port 2", value_text(version.zero2, unit, version.zero2_error)),
        ("Zeros taken", time_text(version.zero_taken_at)),
        ("Gain of port 1 over port 2", number_text(version.gain_ratio, 4)),
        *_leakage_facts(version),
        ("Floor (1 σ) of port 1", value_text(version.floor1, unit)),
        ("Floor (1 σ) of port 2", value_text(version.floor2, unit)),
        ("Saturation of port 1", value_text(version.saturation1, unit)),
        ("Saturation of port 2", value_text(version.saturation2, unit)),
    ]
    if tap.kind == "stokes":
        wanted = ", ".join(number_text(part, 3) for part in version.wanted_state) if version.wanted_state else "not set"
        facts = [facts[0], ("Wanted state (s1, s2, s3)", wanted), ("Handedness as sent", version.handedness)]
    else:
        facts.append(("Wanted port", str(version.wanted_port)))
    return [Fact(name=name, text=_trimmed(text)) for name, text in facts]


def _leakage_facts(version: Calibration) -> list[tuple[str, str]]:
    if version.leakage is None:
        return []
    into2, into1 = leakage_texts(version)
    return [("Leakage into port 2", into2), ("Leakage into port 1", into1)]


def _trimmed(text: str) -> str:
    """Without zeros behind the last digit that says something."""
    number, gap, unit = text.partition("\N{NO-BREAK SPACE}")
    return (number.rstrip("0").rstrip(".") if "." in number else number) + gap + unit


def clock_words(boots: Sequence[StationBoot]) -> list[str]:
    """What the newest boot's clock is worth, in words; nothing when it is good."""
    return [state.words for boot in boots[:1] if (state := clock_state(boot)).is_fault]


def boot_words(boot: StationBoot) -> str:
    """One boot: firmware, when it was heard, and how its clock stood to the server's."""
    said = f"Boot {boot.boot or 'without id'}"
    if boot.firmware:
        said += f", firmware {boot.firmware}"
    said += f": heard {time_text(at_of(boot.first_arrival_us))} to {time_text(at_of(boot.last_arrival_us))} UTC"
    if boot.clock_fault:
        return f"{said}. {clock_state(boot).words}"
    if boot.is_server_timed:
        return f"{said}. Readings are placed by their arrival."
    if boot.clock_offset_us is None:
        return f"{said}. Its clock was not told."
    offset = number_text(boot.clock_offset_us / 1e6, 2, "s", always_signed=True)
    return f"{said}. Its clock and the way to the server differ by {offset}."


def _moment(value: object) -> datetime | None:
    return datetime.fromisoformat(value.replace("Z", "+00:00")) if isinstance(value, str) else value
