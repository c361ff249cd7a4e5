"""How often a tap measures."""

from analysis.models import TapNow
from analysis.record.tap_state import TapState
from ingest.models import Tap

UNKNOWN_S = 1.0


def interval_of(tap: Tap) -> float:
    """Time between readings, s: declared, else the median of recent ones, else ``UNKNOWN_S``."""
    if tap.interval_s:
        return tap.interval_s
    state = TapNow.objects.filter(tap=tap).values_list("trust_state", flat=True).first()
    return TapState.from_json(state).interval.interval_s or UNKNOWN_S
