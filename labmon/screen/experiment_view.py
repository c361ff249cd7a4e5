"""An experiment's limits in words. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass

from labmon.experiments.floors import Floor
from labmon.experiments.queries import ExperimentRow, LimitFacts, VersionRow
from labmon.screen.alarm_view import AlarmView
from labmon.screen.level_words import NAMES, both_units, changes_text, deadband_text, level_words
from labmon.screen.present import age_text, count_text, number_text, time_text
from labmon.screen.quantity import angle_of_er


@dataclass(frozen=True, slots=True, kw_only=True)
class VersionView:
    """What a limit said from a moment on."""

    number: int
    since: str
    says: str
    set_by: str
    consented_by: str
    reason: str


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
    in_runs_only: bool
    floor: str
    is_beyond_floor: bool
    note: str
    versions: list[VersionView]


def limit_view(limit: LimitFacts, floor: Floor | None = None) -> LimitView:
    """A limit in words; its versions newest first; ``floor``: the lab's for its tap and quantity."""
    delays = f"on {age_text(limit.on_delay_s)}, off {age_text(limit.off_delay_s)}, deadband "
    delays += deadband_text(limit.quantity, limit.deadband) + (f", over {age_text(limit.window_s)}" if limit.window_s else "")
    is_retired = bool(limit.versions and limit.versions[0].is_retired)
    return LimitView(
        id=limit.limit_id,
        tap=limit.tap_name,
        station=limit.tap_name.split("/")[0],
        name=NAMES[limit.quantity],
        words=level_words(limit),
        alarm=both_units(limit.quantity, limit.alarm),
        warning="none" if limit.warning is None else both_units(limit.quantity, limit.warning),
        delays=delays,
        is_retired=is_retired,
        in_runs_only=limit.in_runs_only,
        floor="" if floor is None else both_units(limit.quantity, floor.value),
        is_beyond_floor=floor is not None and not is_retired and not floor.allows(limit.alarm),
        note=limit.note,
        versions=[
            _version_view(limit.quantity, version, before)
            for version, before in zip(limit.versions, [*limit.versions[1:], None], strict=True)
        ],
    )


def _version_view(quantity: str, version: VersionRow, before: VersionRow | None) -> VersionView:
    return VersionView(
        number=version.number,
        since=time_text(version.valid_from),
        says=_said_of(quantity, version, before),
        reason=version.reason,
        set_by=_name(version.set_by),
        consented_by=version.consented_by or "",
    )


def _said_of(quantity: str, version: VersionRow, before: VersionRow | None) -> str:
    """What the version did: the change from old to new, or all that it says where there is no old."""
    levels = both_units(quantity, version.alarm)
    if version.warning is not None:
        levels += f", warning {both_units(quantity, version.warning)}"
    if version.is_retired:
        return f"{levels} → retired"
    if before is None:
        return f"first set: {levels}"
    if before.is_retired:
        return f"set anew: {levels}"
    return changes_text(quantity, before, version) or "the same again"


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
