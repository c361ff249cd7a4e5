"""The seconds of one tap's run, made while its readings pass piece by piece."""

import numpy as np

from analysis.judge.interval import IntervalState, pass_samples
from analysis.judge.ledger import joined
from analysis.judge.ledger_tap import Ruling, TapFold, TapSeconds, fold_tap
from analysis.quantities import US_PER_S
from analysis.reduce import sample
from analysis.reduce.sample import Reduced


class TapAccount:
    """Takes samples in order and classes whole seconds as soon as what follows them is known.

    Args:
        from_us, until_us: The run, whole seconds. interval: Spacings before the first sample.
        interval_s: The declared time between samples, s; None: the median of recent spacings.
    """

    def __init__(self, rulings: list[Ruling], from_us: int, until_us: int, *, interval: IntervalState,
                 interval_s: float | None) -> None:
        self._rulings, self._until_us, self._interval_s = rulings, until_us, interval_s
        self._upto_us, self._state, self._kept = from_us, TapFold(interval=interval), None
        self._parts: list[TapSeconds] = []

    def take(self, reduced: Reduced) -> None:
        """The next samples; those before the run only hold into it, the first behind it only ends the last one's hold."""
        reduced = self._with_kept(reduced)
        before = int(np.searchsorted(reduced.at_us, self._upto_us))
        if before:
            interval = pass_samples(self._state.interval, reduced.at_us[:before])
            self._state, reduced = TapFold(reduced.take(slice(before - 1, before)), interval), reduced.take(slice(before, None))
        self._kept = reduced
        if len(reduced):
            self._class_upto(min(int(reduced.at_us[-1]) // US_PER_S * US_PER_S, self._until_us))

    def seconds(self) -> TapSeconds:
        """Every second of the run; nothing more may be taken."""
        self._class_upto(self._until_us)
        return joined(self._parts)

    def _with_kept(self, reduced: Reduced) -> Reduced:
        return reduced if self._kept is None or not len(self._kept) else sample.concatenate([self._kept, reduced])

    def _class_upto(self, until_us: int) -> None:
        if until_us <= self._upto_us:
            return
        kept = self._kept if self._kept is not None else Reduced(**sample.empty_fields(np.empty(0, np.int64)))
        cut = int(np.searchsorted(kept.at_us, until_us))
        own, later = kept.take(slice(0, cut)), kept.take(slice(cut, None))
        next_at_us = int(later.at_us[0]) if len(later) else None
        self._state, seconds = fold_tap(self._state, own, self._rulings, self._upto_us, until_us, next_at_us=next_at_us,
                                        interval_s=self._interval_s)
        self._parts.append(seconds)
        self._kept, self._upto_us = later, until_us
