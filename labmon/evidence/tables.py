"""The ledger and what ruled as small CSV texts."""

import csv
import io
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from analysis.judge.ledger import Intervals
from analysis.judge.ledger_tap import LedgerClass
from analysis.quantities import US_PER_S
from labmon.api.times import rfc3339
from labmon.evidence.figures import Span
from labmon.runs.ledgers import interval_rows
from labmon.runs.models import RunLedger

LEDGER_COLUMNS = ("from", "until", "length_s", "class", "is_doubtful", "why", "taps")


def ledger_rows(ledger: RunLedger) -> list[dict[str, Any]]:
    """The ledger's stretches, half-open, with reasons and taps in words."""
    return [{"from": rfc3339(row.from_at), "until": rfc3339(row.until_at), "length_s": row.length_s, "class": row.klass.words,
             "is_doubtful": "true" if row.is_doubtful else "false", "why": "; ".join(row.reasons), "taps": " ".join(row.taps)}
            for row in interval_rows(ledger)]


def spans_of(found: Intervals, from_us: int) -> list[Span]:
    """Stretches of one class, for figures: doubt and taps apart."""
    starts = np.flatnonzero(np.diff(found.klass, prepend=found.klass[:1] ^ 0xFF) != 0)
    ends_s = np.append(found.first_s[starts[1:]], found.first_s[-1:] + found.length_s[-1:])
    return [Span(from_us + int(found.first_s[place]) * US_PER_S, from_us + int(end_s) * US_PER_S,
                 LedgerClass(int(found.klass[place])).words) for place, end_s in zip(starts.tolist(), ends_s, strict=True)]


def csv_bytes(columns: Sequence[str], rows: Iterable[dict[str, Any]]) -> bytes:
    """UTF-8, comma, point decimals, LF."""
    out = io.StringIO()
    writer = csv.DictWriter(out, columns, lineterminator="\n", extrasaction="ignore")
    writer.writeheader()
    writer.writerows(rows)
    return out.getvalue().encode()
