"""An experiment's limits in words. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass

from labmon.experiments.queries import ExperimentRow, LimitFacts
from labmon.screen.alarm_view import AlarmView
from labmon.screen.level_words import NAMES, both_units, level_words
from labmon.screen.present import age_text, count_text, number_text, time_text
from labmon.screen.quantity import angle_of_er


@dataclass(frozen=True, slots=True, kw_only=True)
class VersionView:
    """What a limit said from a moment on."""

    number: int
    since: str
    levels: str
    set_by: str
    reason: str
    is_retired: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitView:
    """A limit with its history."""

    id: int
    tap: str
    station: str
    name: str
    words: str
    alarm: str
    warning: str
    delays: str
    is_retired: bool
    versions: list[VersionView]


def limit_view(limit: LimitFacts) -> LimitView:
    """A limit in words; its versions newest first."""
    return LimitView(
        id=limit.limit_id,
        tap=limit.tap_name,
        station=limit.tap_name.split("/")[0],
        name=NAMES[limit.quantity],
        words=level_words(limit),
        alarm=both_units(limit.quantity, limit.alarm),
        warning="none" if limit.warning is None else both_units(limit.quantity, limit.warning),
        delays=f"on {age_text(limit.on_delay_s)}, off {age_text(limit.off_delay_s)}, deadband {number_text(limit.deadband, 2)}",
        is_retired=bool(limit.versions and limit.versions[0].is_retired),
        versions=[_version_view(limit.quantity, version) for version in limit.versions],
    )


def _version_view(quantity: str, version) -> VersionView:
    levels = both_units(quantity, version.alarm)
    if version.warning is not None:
        levels += f", warning {both_units(quantity, version.warning)}"
    return VersionView(
        number=version.number,
        since=time_text(version.valid_from),
        levels=levels,
        reason=version.reason,
        set_by=_name(version.set_by),
        is_retired=version.is_retired,
    )


def _name(person: object) -> str:
    return getattr(person, "username", None) or (person if isinstance(person, str) else "") or "the command line"


def experiment_sentence(name: str, limits: Sequence[LimitFacts], alarms: Sequence[AlarmView]) -> str:
    """How the experiment stands, in one sentence."""
    is_open = [view for view in alarms if view.is_open]
    waiting = [view for view in alarms if view.is_waiting]
    if is_open:
        return f"{name} has {count_text(len(is_open), 'open alarm')}" + (
            f", {len(waiting)} unacknowledged." if waiting else ", acknowledged."
        )
    in_force = [limit for limit in limits if not (limit.versions and limit.versions[0].is_retired)]
    if not in_force:
        return f"{name} has no limit in force, so nobody would be called."
    return f"{name} is within its {count_text(len(in_force), 'limit')}." + (
        " One alarm came back and waits for someone." if waiting else ""
    )


def experiments_sentence(rows: Sequence[ExperimentRow]) -> str:
    """All experiments in one sentence."""
    if not rows:
        return "No experiment watches a bench yet."
    troubled = sum(row.open_alarms > 0 for row in rows)
    return (
        f"{troubled} of {count_text(len(rows), 'experiment')} ha{'s' if troubled == 1 else 've'} an open alarm."
        if troubled
        else (f"{count_text(len(rows), 'experiment')}, no open alarm.")
    )


def ladder() -> list[tuple[str, str]]:
    """Extinction ratios with their angles on the sphere."""
    return [(number_text(er_db, 0), number_text(angle_of_er(er_db), 2)) for er_db in (10, 13, 15, 17, 20, 23, 25, 27, 30, 35, 40)]
