"""Where a tap's own folds stand between two runs of the pipeline: kept beside the newest sample and in checkpoints."""

from dataclasses import dataclass, field, replace
from typing import Any, Final

from analysis.judge.interval import IntervalState
from analysis.judge.untrusted import UntrustedState

SNAPSHOTS: Final = 4


@dataclass(frozen=True, slots=True)
class TapState:
    """Behind all samples before ``upto_us``.

    Attributes:
        upto_us: A whole second: every sample before it is folded. None before the first.
        flat: State of the frozen-value fold, as `FlatState.as_json` gives it for one tap.
        interval: Spacings of the recent samples.
        untrusted: State of the untrusted-reading fold, which never goes back; ``untrusted_upto_us`` where it stands.
        arrivals_us: Recent arrivals on the server's clock, oldest first.
        snapshots: Earlier (time, flat), oldest first, at rollup bounds: where rolling up starts without looking back.
    """

    upto_us: int | None = None
    flat: Any = None
    interval: IntervalState = IntervalState()
    untrusted: UntrustedState = field(default_factory=UntrustedState)
    arrivals_us: tuple[int, ...] = ()
    snapshots: tuple[tuple[int, Any], ...] = ()
    untrusted_upto_us: int | None = None

    def as_json(self) -> dict[str, Any]:
        return {
            "upto_us": self.upto_us,
            "flat": self.flat,
            "interval": self.interval.as_json(),
            "untrusted": self.untrusted.as_json(),
            "arrivals_us": list(self.arrivals_us),
            "snapshots": [list(one) for one in self.snapshots],
            "untrusted_upto_us": self.untrusted_upto_us,
        }

    @classmethod
    def from_json(cls, values: dict[str, Any] | None) -> "TapState":
        if not values:
            return cls()
        return cls(
            values["upto_us"],
            values["flat"],
            IntervalState.from_json(values["interval"]),
            UntrustedState.from_json(values["untrusted"]),
            tuple(values["arrivals_us"]),
            tuple((at_us, flat) for at_us, flat in values["snapshots"]),
            values["untrusted_upto_us"],
        )

    def with_snapshot(self, at_us: int, flat: Any) -> "TapState":
        """The same with one more snapshot, the oldest left out."""
        kept = tuple(one for one in self.snapshots if one[0] < at_us)
        return replace(self, snapshots=(*kept, (at_us, flat))[-SNAPSHOTS:])
