"""A run's evidence, written in one pass over its readings at constant memory."""

import json
import tempfile
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet

from analysis.judge.ledger import Account, add_tap, declare_unusable
from analysis.judge.margin import limit_side_by_side
from analysis.judge.rule import Quantity
from analysis.quantities import US_PER_S
from analysis.reduce.sample import Reduced
from ingest.models import Tap
from ingest.times import rfc3339_of, us_of
from labmon.api.formats import with_texts
from labmon.api.named import tap_path
from labmon.api.times import parse_time, rfc3339
from labmon.evidence import facts, report, tables, words
from labmon.evidence.account import TapAccount
from labmon.evidence.bag import Bag
from labmon.evidence.columns import columns_facts
from labmon.evidence.course import Course
from labmon.evidence.figures import Level, course_figure, ledger_figure
from labmon.evidence.pdf import can_write_pdf, pdf_of
from labmon.evidence.rows import TapRows
from labmon.runs.ledgers import stretches
from labmon.runs.models import RunLedger
from labmon.software import VERSION

HERE = Path(__file__).parent
CALIBRATION_COLUMNS = ("tap", "valid_from", "entered_at", "zero_taken_at", "zero1", "zero2", "zero1_error", "zero2_error",
                       "gain_ratio", "floor1", "floor2", "saturation1", "saturation2", "leakage", "leakage_sigma", "wanted_port",
                       "monitor_ratio", "bright_nominal", "wanted_state", "handedness")
LIMIT_COLUMNS = ("tap", "quantity", "version", "from", "until", "alarm", "in_force", "warning", "reason")


class NotAsMade(Exception):
    """The readings of today do not make the ledger as it is kept; the message says what to do."""


@dataclass(frozen=True, slots=True)
class Order:
    """What to write: a made version of a run's ledger. ``number`` is the package's own within the run."""

    ledger: RunLedger
    number: int
    made_at: datetime

    @property
    def package(self) -> str:
        """The package's name, and the folder that it unpacks to."""
        return f"labmon-run-{self.ledger.run_id}-evidence-{self.number}"


@dataclass(slots=True)
class _Writing:
    """What has been gathered so far."""

    order: Order
    bag: Bag
    on_rows: Callable[[int], None]
    account: Account
    taps: list[dict[str, Any]] = field(default_factory=list)
    courses: list[tuple[Tap, Course, list[dict[str, Any]]]] = field(default_factory=list)


def write_evidence(file: BinaryIO, order: Order, on_rows: Callable[[int], None] = lambda _count: None) -> None:
    """Write the package.

    Args:
        on_rows: Told how many rows each piece had, for a progress bar.
    Raises:
        NotAsMade: The readings that are stored now make other seconds than the ledger's.
    """
    ledger = order.ledger
    bag = Bag(file, order.package, order.made_at)
    try:
        _write_payload(_Writing(order, bag, on_rows, Account.of(ledger.length_s)))
    except BaseException:
        bag.abandon()
        raise
    bag.write("README.txt", _readme(order))
    bag.write("recompute.py", (HERE / "recompute.py").read_bytes())
    bag.close({"Bag-Software-Agent": f"labmon {VERSION}", "Bagging-Date": f"{order.made_at:%Y-%m-%d}",
               "External-Identifier": order.package,
               "External-Description": f"Evidence of the run {ledger.run.name} of {ledger.run.experiment.name}, "
                                       f"{rfc3339(ledger.from_at)} to {rfc3339(ledger.until_at)}"})


def _write_payload(writing: _Writing) -> None:
    for tap in run_taps(writing.order.ledger):
        _write_tap(writing, tap)
    _check_account(writing)
    _write_settings(writing)
    _write_words(writing)


def run_taps(ledger: RunLedger) -> list[Tap]:
    """The taps that the ledger accounts for, in its order."""
    order = {one["tap"]: place for place, one in enumerate(ledger.facts["taps"])}
    return sorted(ledger.run.taps.select_related("station"), key=lambda tap: order[tap_path(tap)])


def _write_tap(writing: _Writing, tap: Tap) -> None:
    ledger = writing.order.ledger
    from_us, until_us = us_of(ledger.from_at), us_of(ledger.until_at)
    limits = facts.limits_of(ledger, tap_path(tap))
    rows = TapRows.of(tap, from_us, until_us, parse_time(ledger.facts["calibrations_as_of"]))
    account = TapAccount(facts.rulings_of(limits), from_us, until_us, interval=rows.interval, interval_s=tap.interval_s)
    course = Course.of(from_us, until_us)
    stem = f"data/readings/{tap.station.name}__{tap.name}"
    schema = rows.no_rows()
    with tempfile.TemporaryDirectory() as folder:
        parquet = Path(folder) / "rows.parquet"
        _write_rows(writing, rows, schema, f"{stem}.csv", parquet, account, course)
        writing.bag.copy(f"{stem}.parquet", parquet)
    writing.bag.write(f"{stem}.columns.json", _json({"tap": tap_path(tap), "columns": columns_facts(schema.names, tap.unit)}))
    add_tap(writing.account, account.seconds())
    files = {"csv": f"{stem}.csv", "parquet": f"{stem}.parquet", "columns": f"{stem}.columns.json", "rows": rows.row_count}
    writing.taps.append(facts.tap_facts(rows, limits, files))
    writing.courses.append((tap, course, limits))


def _check_account(writing: _Writing) -> None:
    """What was just written must make the ledger that goes with it, second by second."""
    ledger = writing.order.ledger
    from_us = us_of(ledger.from_at)
    declare_unusable(writing.account, [((us_of(parse_time(one["from"])) - from_us) // US_PER_S,
                                        -((from_us - us_of(parse_time(one["until"]))) // US_PER_S))
                                       for one in facts.declared_of(ledger)])
    kept = stretches(ledger)
    klass, is_doubtful = (np.repeat(values, kept.length_s) for values in (kept.klass, kept.is_doubtful))
    unlike = np.flatnonzero((klass != writing.account.klass) | (is_doubtful != writing.account.is_doubtful))
    if len(unlike):
        first = rfc3339_of(from_us + int(unlike[0]) * US_PER_S)
        raise NotAsMade(f"Since version {ledger.number} of the ledger was made, readings or settings of the run have changed: "
                        f"{len(unlike)} s are another class now, the first at {first}. Make a new version of the ledger, and "
                        "the evidence of that.")


def _write_rows(writing: _Writing, rows: TapRows, schema: pa.Schema, name: str, parquet: Path, account: TapAccount,
                course: Course) -> None:
    texts = with_texts(schema.empty_table()).schema
    with ExitStack() as open_files:
        entry = open_files.enter_context(writing.bag.open(name))
        as_text = open_files.enter_context(pa.csv.CSVWriter(pa.PythonFile(entry, "w"), texts))
        as_parquet = open_files.enter_context(pa.parquet.ParquetWriter(parquet, schema, compression="zstd"))
        for readings, reduced in rows.pieces():
            table = rows.table(readings, reduced)
            as_text.write_table(with_texts(table))
            as_parquet.write_table(table)
            _pass(reduced, account, course)
            writing.on_rows(len(readings))


def _pass(reduced: Reduced, account: TapAccount, course: Course) -> None:
    course.take(reduced)
    account.take(reduced)


def _write_settings(writing: _Writing) -> None:
    order, bag, ledger = writing.order, writing.bag, writing.order.ledger
    said = facts.software_facts(order.made_at) | {
        "run": facts.run_facts(ledger), "ledger": {"version": ledger.number, "made_at": rfc3339(ledger.made_at)},
        "as_of": rfc3339(parse_time(ledger.facts["calibrations_as_of"])), "declared_unusable": facts.declared_of(ledger),
        "taps": writing.taps}
    bag.write("data/run.json", _json(said))
    bag.write("data/limits.csv", tables.csv_bytes(LIMIT_COLUMNS, _of_taps(writing.taps, "limits")))
    bag.write("data/calibrations.csv", tables.csv_bytes(CALIBRATION_COLUMNS, _of_taps(writing.taps, "calibrations")))


def _of_taps(taps: list[dict[str, Any]], name: str) -> Iterator[dict[str, Any]]:
    for tap in taps:
        yield from ({"tap": tap["tap"], **one} for one in tap[name])


def _write_words(writing: _Writing) -> None:
    order, bag, ledger = writing.order, writing.bag, writing.order.ledger
    run, totals, figures = facts.run_facts(ledger), facts.totals_of(ledger), facts.figures_of(ledger)
    from_us, until_us = us_of(ledger.from_at), us_of(ledger.until_at)
    rows = tables.ledger_rows(ledger)
    bag.write("data/ledger.csv", tables.csv_bytes(tables.LEDGER_COLUMNS, rows))
    bag.write("data/ledger.json", _json({"version": ledger.number, "totals": totals, "figures": figures}))
    statement = words.statement_of(run, writing.taps, totals, figures, package=order.package)
    bag.write("data/statement.txt", (statement + "\n").encode())
    spans = tables.spans_of(stretches(ledger), from_us)
    drawings = {"ledger": ledger_figure(from_us, until_us, spans)}
    for tap, course, limits in writing.courses:
        drawings[f"{tap.station.name}__{tap.name}"] = course_figure(tap_path(tap), course, until_us, levels_of(limits), spans)
    for name, drawing in drawings.items():
        bag.write(f"data/figures/{name}.svg", drawing.encode())
    page = report.report_of(run, writing.taps, totals, figures, rows, list(drawings.values()), statement=statement,
                            package=order.package, made_at=str(rfc3339(order.made_at)))
    bag.write("data/report.html", page.encode())
    if can_write_pdf():
        bag.write("data/report.pdf", pdf_of(page))


def levels_of(limits: list[dict[str, Any]]) -> list[Level]:
    """Limits on ER or angle as lines on the dB scale."""
    levels = [(one, limit_side_by_side(Quantity(one["quantity"]), one["alarm"])[0]) for one in limits]
    return [Level(us_of(parse_time(one["from"])), us_of(parse_time(one["until"])), er_db) for one, er_db in levels
            if er_db is not None]


def _readme(order: Order) -> bytes:
    run, span = order.ledger.run, f"{rfc3339(order.ledger.from_at)} to {rfc3339(order.ledger.until_at)}"
    text = (HERE / "README.txt").read_text(encoding="utf-8")
    for word, said in (("version", VERSION), ("name", f"{run.name} ({run.experiment.name})"), ("span", span)):
        text = text.replace("{" + word + "}", said)
    return text.encode()


def _json(said: Any) -> bytes:
    return (json.dumps(said, indent=1, ensure_ascii=False, allow_nan=False) + "\n").encode()
