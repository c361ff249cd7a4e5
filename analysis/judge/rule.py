"""What is judged, and by which rule."""

from dataclasses import dataclass
from enum import StrEnum


class Quantity(StrEnum):
    """A judged quantity, as the contract names it: limits are in this unit."""

    ER_DB = "er_db"
    ANGLE_DEG = "angle_deg"
    DOP = "dop"
    POWER_W = "power_w"
    TRUSTED_SHARE = "trusted_share"
    TIME_TO_LIMIT_S = "time_to_limit_s"

    @property
    def is_bad_above(self) -> bool:
        """True where larger is worse."""
        return self is Quantity.ANGLE_DEG

    @property
    def is_derived(self) -> bool:
        """True where it is not of a sample but of the minutes before: judged from one-minute cells, live and in replay."""
        return self in (Quantity.TRUSTED_SHARE, Quantity.TIME_TO_LIMIT_S)


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitRule:
    """A limit's values at one moment; levels and deadband in the quantity's unit, delays in s.

    ``window_s``: over which a derived quantity is taken, s; None for the others.
    """

    quantity: Quantity
    alarm: float
    warning: float | None = None
    on_delay_s: float = 60.0
    off_delay_s: float = 60.0
    deadband: float = 1.0
    window_s: float | None = None
