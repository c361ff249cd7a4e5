"""The newest reduced sample of a tap as the pages and the API show it."""

from collections.abc import Sequence
from functools import lru_cache
from typing import Any

import numpy as np

from analysis.judge.phases import phase_at
from analysis.judge.rule import Quantity
from analysis.quantities import IntArray
from analysis.record.reduce_span import Group
from analysis.reduce.sample import Reduced
from analysis.reduce.trust import QUANTITIES, Reason, Trust, is_usable, reasons_in
from ingest.times import rfc3339_of
from labmon.pipeline.work import LimitWork, TapWork

_FLOOR, _TRUSTED = int(Reason.FLOOR), int(Trust.TRUSTED)
_PLAIN = ("er_sigma_db", "polarized_er_db", "temperature_c", "humidity_pct", "pressure_hpa")
_DEGREES = (("azimuth_deg", "azimuth_rad"), ("ellipticity_deg", "ellipticity_rad"))
_FLAGS = ("is_lower_bound", "is_upper_bound", "angle_is_upper_bound", "angle_is_lower_bound")


def newest_samples(group: Group, works: Sequence[TapWork]) -> list[dict[str, Any]]:
    """For each tap of a group the newest of its samples, JSON-able.

    A quantity that is untrusted or undefined is null; why stands in ``trust_by_quantity``, its last good value in
    ``last_trusted``.
    """
    newest = group.samples.take(group.ends - 1)
    usable = {quantity: is_usable(newest.trust[quantity], newest.values(quantity)) for quantity in QUANTITIES}
    columns = _columns(newest, usable)
    samples = []
    for number, work in enumerate(works):
        sample = {name: values[number] for name, values in columns.items()}
        at_us = int(newest.at_us[number])
        sample["taken_at"] = rfc3339_of(at_us)
        sample["interval_s"] = work.interval_s
        sample["trust_by_quantity"] = _trusts(newest, number, work.limits, at_us)
        span = (int(group.first[number]), int(group.ends[number]))
        sample["last_trusted"] = {
            quantity.value: last
            for quantity in QUANTITIES
            if (last := _last_trusted(group.samples, quantity, span, sample, work)) is not None
        }
        samples.append(sample)
    return samples


def _columns(newest: Reduced, usable: dict[Quantity, Any]) -> dict[str, list[Any]]:
    columns: dict[str, list[Any]] = {
        quantity.value: _finite(np.where(usable[quantity], newest.values(quantity), np.nan)) for quantity in QUANTITIES
    }
    columns |= {name: _finite(getattr(newest, name)) for name in _PLAIN}
    columns |= {name: _finite(np.degrees(getattr(newest, source))) for name, source in _DEGREES}
    columns |= {name: getattr(newest, name).tolist() for name in _FLAGS}
    for name in ("er_sigma_db", "polarized_er_db"):
        columns[name] = [value if good else None for value, good in zip(columns[name], usable[Quantity.ER_DB], strict=True)]
    sop = np.full((len(newest), 3), np.nan) if newest.sop is None else newest.sop
    columns["sop"] = [one.tolist() if np.isfinite(one).all() else None for one in sop]
    return columns


def _finite(values: Any) -> list[float | None]:
    return [value if value - value == 0.0 else None for value in values.tolist()]


def _trusts(newest: Reduced, number: int, limits: Sequence[LimitWork], at_us: int) -> dict[str, dict[str, Any]]:
    """Trust and reasons per quantity; "at floor, cannot tell" needs the limits, so it is added here."""
    trusts = {}
    for quantity in QUANTITIES:
        trust, mask = int(newest.trust[quantity][number]), int(newest.reasons[quantity][number])
        if mask & _FLOOR and trust == _TRUSTED and _is_undecided(newest, quantity, number, limits, at_us):
            trust, mask = int(Trust.DOUBTFUL), mask | int(Reason.UNDECIDED)
        if trust or mask:
            trusts[quantity.value] = _verdict(trust, mask)
    return trusts


@lru_cache(maxsize=4096)
def _verdict(trust: int, mask: int) -> dict[str, Any]:
    """Trust and reasons in words; made once for each combination, so not to be changed."""
    reasons = reasons_in(mask)
    return {
        "trust": Trust(trust).word,
        "reasons": [reason.words for reason in reasons],
        "codes": [reason.code for reason in reasons],
    }


def _is_undecided(newest: Reduced, quantity: Quantity, number: int, limits: Sequence[LimitWork], at_us: int) -> bool:
    """True if a bound on the good side does not meet the alarm level of a limit in force."""
    value = float(newest.values(quantity)[number])
    for limit in limits:
        phase = phase_at(limit.phases, at_us)
        if limit.limit.quantity == quantity and phase is not None and not phase.is_retired:
            is_met = value <= phase.rule.alarm if quantity.is_bad_above else value >= phase.rule.alarm
            if not is_met:
                return True
    return False


def _last_trusted(samples: Reduced, quantity: Quantity, span: tuple[int, int], sample: dict[str, Any], work: TapWork) -> Any:
    if sample[quantity.value] is not None:
        return {"value": sample[quantity.value], "at": sample["taken_at"]}
    begin, end = span
    good: IntArray = np.flatnonzero(is_usable(samples.trust[quantity][begin:end], samples.values(quantity)[begin:end]))
    if len(good):
        index = begin + int(good[-1])
        return {"value": float(samples.values(quantity)[index]), "at": rfc3339_of(int(samples.at_us[index]))}
    return work.last_trusted.get(quantity.value)
