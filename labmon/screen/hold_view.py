"""What is kept quiet, in words. Pure."""

from dataclasses import dataclass
from datetime import datetime

from labmon.alarms.models import AlarmHold, HoldKind
from labmon.screen.present import age_text, time_text

_LIMITED = {"er_db": "extinction ratio", "angle_deg": "angle", "dop": "degree of polarization", "power_w": "power",
            "trusted_share": "trusted share", "time_to_limit_s": "time to the limit"}


@dataclass(frozen=True, slots=True, kw_only=True)
class HoldView:
    """One line of the banner."""

    id: int
    station: str
    tap: str
    what: str
    state: str
    until: str
    reason: str
    may_end: bool
    act: str


def hold_view(hold: AlarmHold, now: datetime, *, may_end: bool) -> HoldView:
    """A standing hold in words."""
    is_shelved = hold.kind == HoldKind.SHELVED
    until = "until someone puts it back"
    if hold.until is not None:
        left_s = max((hold.until - now).total_seconds(), 0.0)
        until = f"until {time_text(hold.until)[:16]} UTC, another {age_text(left_s)}"
    return HoldView(
        id=hold.pk,
        station=hold.tap.station.name,
        tap=f"{hold.tap.station.name}/{hold.tap.name}",
        what=held_words(hold),
        state=f"{'shelved' if is_shelved else 'out of service'} by {hold.by.username if hold.by else 'someone who left'}",
        until=until,
        reason=hold.reason,
        may_end=may_end,
        act="Unshelve" if is_shelved else "Put back",
    )


def held_words(hold: AlarmHold) -> str:
    """Which of the tap's alarms."""
    if hold.limit is not None:
        return f"limit on {_LIMITED[hold.limit.quantity]} of {hold.limit.experiment.name}"
    return {"": "all its alarms", "no-reading": "no reading", "untrusted": "untrusted readings"}[hold.alarm_kind]
