"""Whether a reduced quantity may be believed, and why not.

The contract's four words: *trusted*; *doubtful* (judged, shown with its reason); *untrusted* (not judged); *none*
(the tap does not measure it). A reason is a bit; each quantity has its own reasons for every sample.
"""

from enum import IntEnum, IntFlag
from typing import Final

import numpy as np
from numpy.typing import NDArray

from analysis.judge.rule import Quantity
from analysis.quantities import BoolArray, FloatArray, IntArray

ReasonArray = NDArray[np.uint32]
TrustArray = NDArray[np.uint8]

FUTURE_AFTER_US: Final = 2_000_000


class Trust(IntEnum):
    NONE = 0
    UNTRUSTED = 1
    DOUBTFUL = 2
    TRUSTED = 3

    @property
    def word(self) -> str:
        return self.name.lower()


class Reason(IntFlag):
    """Why a quantity is a bound, doubtful, untrusted or missing."""

    FLOOR = 1 << 0
    SATURATED = 1 << 1
    DARK = 1 << 2
    NEGATIVE = 1 << 3
    FLAT = 1 << 4
    DOP_ABOVE_ONE = 1 << 5
    CLOCK_FUTURE = 1 << 6
    CLOCK_UNSET = 1 << 7
    TWO_DEVICES = 1 << 8
    DECLARED_BRIGHT = 1 << 9
    OLD_ZERO = 1 << 10
    HUM = 1 << 11
    UNDEFINED = 1 << 12
    IMPOSSIBLE = 1 << 13
    NO_WANTED_STATE = 1 << 14
    NO_BRIGHT = 1 << 15
    NO_POWER_UNIT = 1 << 16
    UNDECIDED = 1 << 17
    NO_DOP = 1 << 18
    NEW_FIRMWARE = 1 << 19
    PORTS_SWAPPED = 1 << 20

    @property
    def code(self) -> str:
        """The reason's name in the API."""
        return str(self.name).lower()

    @property
    def words(self) -> str:
        """A short phrase for a person."""
        return _WORDS[self]


_WORDS: Final = {
    Reason.FLOOR: "At floor: only a bound",
    Reason.SATURATED: "Port saturated",
    Reason.DARK: "Both ports dark",
    Reason.NEGATIVE: "Net power not above zero: check the zero",
    Reason.FLAT: "Value frozen",
    Reason.DOP_ABOVE_ONE: "Degree of polarization above 1",
    Reason.CLOCK_FUTURE: "Time stamp in the future",
    Reason.CLOCK_UNSET: "Clock unset: timed by the server",
    Reason.TWO_DEVICES: "Two devices on one key",
    Reason.DECLARED_BRIGHT: "Bright power declared, not measured",
    Reason.OLD_ZERO: "Zero is old",
    Reason.HUM: "Mains hum in the reading",
    Reason.UNDEFINED: "Not defined for this reading",
    Reason.IMPOSSIBLE: "Impossible value",
    Reason.NO_WANTED_STATE: "No wanted state set",
    Reason.NO_BRIGHT: "No bright power known: set the monitor ratio or the bright power",
    Reason.NO_POWER_UNIT: "The tap's unit is not a power",
    Reason.UNDECIDED: "At floor, cannot tell",
    Reason.NO_DOP: "Degree of polarization not measured",
    Reason.NEW_FIRMWARE: "New firmware: zeros not taken again, nobody has confirmed",
    Reason.PORTS_SWAPPED: "Ports exchanged, or the light turned by 90°: nobody has said which",
}

# Reasons that forbid judging, and those that only cast doubt. The reducers put a reason on a quantity only where it
# concerns it (dark goes on ER and angle, never on power), so that one pair of masks serves all quantities.
UNTRUSTED_REASONS: Final = (
    Reason.SATURATED | Reason.DARK | Reason.NEGATIVE | Reason.FLAT | Reason.TWO_DEVICES | Reason.UNDEFINED | Reason.IMPOSSIBLE
)
DOUBTFUL_REASONS: Final = (
    Reason.DOP_ABOVE_ONE
    | Reason.CLOCK_FUTURE
    | Reason.CLOCK_UNSET
    | Reason.DECLARED_BRIGHT
    | Reason.OLD_ZERO
    | Reason.HUM
    | Reason.UNDECIDED
    | Reason.NEW_FIRMWARE
    | Reason.PORTS_SWAPPED
)
NONE_REASONS: Final = Reason.NO_WANTED_STATE | Reason.NO_BRIGHT | Reason.NO_POWER_UNIT | Reason.NO_DOP


def trust_of(reasons: ReasonArray) -> TrustArray:
    """Trust of a measured quantity from its reasons, shape (N,)."""
    trust = np.full(reasons.shape, Trust.TRUSTED, dtype=np.uint8)
    if reasons.any():
        trust[(reasons & np.uint32(DOUBTFUL_REASONS)) != 0] = Trust.DOUBTFUL
        trust[(reasons & np.uint32(UNTRUSTED_REASONS)) != 0] = Trust.UNTRUSTED
        trust[(reasons & np.uint32(NONE_REASONS)) != 0] = Trust.NONE
    return trust


def reasons_in(mask: int) -> list[Reason]:
    """The single reasons of one sample's mask, in a fixed order."""
    return [reason for reason in _WORDS if mask & reason]


def clock_marks(own_at_us: IntArray, arrival_us: IntArray, has_clock_fault: BoolArray | bool = False) -> ReasonArray:
    """Reasons that come from the station's clock, shape (N,).

    Args:
        own_at_us: The station's own stamp, µs; the smallest int64 where it sent none.
        arrival_us: When the server had the reading, µs.
        has_clock_fault: True where the boot is timed by the server because its clock is wrong.
    """
    marks = np.zeros(own_at_us.shape, dtype=np.uint32)
    faulty = np.broadcast_to(has_clock_fault, marks.shape)
    has_stamp = own_at_us > np.iinfo(np.int64).min
    future = has_stamp & ~faulty
    future[future] = own_at_us[future] - arrival_us[future] > FUTURE_AFTER_US
    marks[future] |= np.uint32(Reason.CLOCK_FUTURE)
    marks[faulty] |= np.uint32(Reason.CLOCK_UNSET)
    return marks


def marked(shape: int, *pairs: tuple[BoolArray, Reason]) -> ReasonArray:
    """Reasons, shape (shape,), set where each mask is true."""
    reasons = np.zeros(shape, dtype=np.uint32)
    for mask, reason in pairs:
        if mask.any():
            reasons[mask] |= np.uint32(reason)
    return reasons


def is_usable(trust: TrustArray, values: FloatArray) -> BoolArray:
    """True where a sample may be judged: trusted or doubtful, and a number."""
    return (trust >= Trust.DOUBTFUL) & np.isfinite(values)


QUANTITIES: Final = (Quantity.ER_DB, Quantity.ANGLE_DEG, Quantity.DOP, Quantity.POWER_W)
