"""One-minute cells as the derived quantities need them: two queries, however many taps."""

from collections.abc import Mapping

import numpy as np

from analysis.judge.derived import MINUTE_US, Minutes
from analysis.judge.rule import Quantity
from analysis.record.rollup_pages import page_columns
from analysis.record.rollup_rows import MINUTE_S, open_cells
from analysis.reduce.trust import QUANTITIES

_NAMES = ("count", "trusted_us", "angle_deg_sum", "angle_count")
_ER = QUANTITIES.index(Quantity.ER_DB)


def minutes_of(spans: Mapping[int, tuple[int, int]]) -> dict[int, Minutes]:
    """Minutes of taps by id, each of its half-open span of whole minutes, µs; minutes without cell are empty."""
    if not spans:
        return {}
    found = {tap_id: _empty(from_us, until_us) for tap_id, (from_us, until_us) in spans.items()}
    from_us, until_us = min(span[0] for span in spans.values()), max(span[1] for span in spans.values())
    for tap_id, columns in page_columns(list(spans), MINUTE_S, _NAMES, from_us, until_us):
        _put(found[tap_id], columns["bucket_us"], columns)
    rows = open_cells(list(spans), MINUTE_S, from_us, until_us)
    for tap_id in np.unique(rows.tap).tolist():
        own = rows.take(rows.tap == tap_id)
        _put(found[tap_id], own.bucket_us, own.values)
    return found


def _empty(from_us: int, until_us: int) -> Minutes:
    count = max((until_us - from_us) // MINUTE_US, 0)
    whole = [np.zeros(count, dtype=np.int64) for _ in range(3)]
    return Minutes(from_us, whole[0], whole[1], np.zeros(count), whole[2])


def _put(minutes: Minutes, bucket_us: np.ndarray, columns: Mapping[str, np.ndarray]) -> None:  # type: ignore[type-arg]
    place = (bucket_us - minutes.from_us) // MINUTE_US
    inside = (place >= 0) & (place < len(minutes))
    place = place[inside]
    minutes.count[place] = columns["count"][inside]
    minutes.trusted_us[place] = columns["trusted_us"][inside][:, _ER]
    minutes.angle_sum[place] = columns["angle_deg_sum"][inside]
    minutes.angle_count[place] = columns["angle_count"][inside]
