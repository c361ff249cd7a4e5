"""A proposed limit rehearsed over 30 days of one tap at 1 Hz, against folding all of its raw readings in the same run.

The light is calm with an excursion of about half an hour every other night. Wanted: at most 1 s; and the same episodes.
The second proposal is drawn through the noise of the light, so that nothing can be left out: the worst case, told as it is.
"""

import sys
import time

import numpy as np

from benchmarks.lab import best_of, row, throw_away_lab

DAYS = int(sys.argv[1]) if len(sys.argv) > 1 else 30
S, DAY_S = 10**6, 86_400


def day_er_db(day: int, random: np.random.Generator) -> np.ndarray:
    """ER of each second of a day, dB."""
    at_s = np.arange(DAY_S)
    er_db = 30 + np.sin(2 * np.pi * at_s / DAY_S) + random.normal(0, 0.3, DAY_S)
    return er_db - (12 * np.exp(-(((at_s - 10_000) / 1200) ** 2)) if day % 2 else 0)


def main() -> None:
    """Fill, roll up, rehearse."""
    with throw_away_lab():
        from analysis.judge.fold import FoldState, episodes_of, fold
        from analysis.judge.rule import Quantity
        from analysis.judge.seconds import seconds_of
        from analysis.record.reduce_span import find_samples
        from ingest.models import Tap
        from ingest.stations import NewTap, add_station
        from ingest.store.append import write_blocks
        from ingest.times import now_us
        from labmon.experiments.rehearsal import rehearse_limit
        from labmon.experiments.rules import LimitWish, checked_wish
        from labmon.pipeline.catch_up import catch_up

        add_station("bench", None, [NewTap("eom-in", "two-port", "W", 1.0)])
        tap, random = Tap.objects.get(), np.random.default_rng(4)
        end_us = now_us() // (DAY_S * S) * DAY_S * S
        for day in range(DAYS, 0, -1):
            at_us = end_us - day * DAY_S * S + np.arange(DAY_S, dtype=np.int64) * S
            columns = {"port1": np.full(DAY_S, 1e-3), "port2": 1e-3 * 10 ** (-day_er_db(day, random) / 10)}
            write_blocks(tap, at_us, columns, boot="b1", sequence=np.arange(DAY_S, dtype=np.int64) + (DAYS - day) * DAY_S)
            catch_up()
        from_us = end_us - DAYS * DAY_S * S
        for name, alarm, wanted in (("near the excursions only", 22.0, "≤ 1 s"), ("through the noise", 29.5, "told as it is")):
            wish = LimitWish(alarm=alarm)
            found = rehearse_limit(tap, "er_db", wish, from_us, end_us, end_us + DAY_S * S)
            ours_s = best_of(3, lambda wish=wish: rehearse_limit(tap, "er_db", wish, from_us, end_us, end_us + DAY_S * S))
            began = time.perf_counter()
            seconds = seconds_of(find_samples(tap, from_us, end_us)[0], Quantity.ER_DB)
            _, events = fold(checked_wish(Quantity.ER_DB, wish), FoldState(), seconds, 1.0)
            plain_s = time.perf_counter() - began
            plain = [(one.raised_us, one.returned_us) for one in episodes_of(events)]
            assert [(one.raised_us, one.returned_us) for one in found.calls] == plain
            row(f"{DAYS} days at 1 Hz, limit {name}: {len(plain)} calls, {found.read_share:.1%} read raw",
                f"{ours_s:.2f} s (all of it raw: {plain_s:.2f} s, ratio {plain_s / ours_s:.1f})", wanted)


if __name__ == "__main__":
    main()
