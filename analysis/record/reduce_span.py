"""Raw readings and the calibrations that held become reduced samples: one tap, or many taps in few array calls."""

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, fields
from datetime import datetime, timedelta
from typing import Any, Final, Protocol

import numpy as np

from analysis.models import Calibration, TapCheckpoint
from analysis.quantities import BoolArray, FloatArray, IntArray
from analysis.record.calibrations import versions_of
from analysis.record.doubts import DoubtSpan, doubts_of
from analysis.reduce import sample
from analysis.reduce.calibration import TapCalibration, stack
from analysis.reduce.flat import FlatState, flat_from_json, mark_flat
from analysis.reduce.sample import Reduced
from analysis.reduce.tap import TrustContext, flat_channels, reduce_tap
from analysis.reduce.trust import Reason, ReasonArray, clock_marks
from ingest.clocks import CLOCK_TOLERANCE_US
from ingest.files.origin import FILE_BOOT
from ingest.models import Tap, TapBoot, TapKind
from ingest.store.columns import NO_TIME, Readings, concatenate
from ingest.store.days.faults import note_faults
from ingest.store.read import DamagedStore, Hole, HoleKind, find_readings
from ingest.times import us_of

#: A zero older than this casts doubt (a proposal, no source).
OLD_ZERO_AFTER: Final = timedelta(days=30)
#: Two boots that overlap by less may be a reboot seen by an unsteady clock.
OVERLAP_LEAST_US: Final = 2_000_000
OVERLAP_REACH_US: Final = 3_000_000
_COLUMNS_OF = {TapKind.TWO_PORT: ("port1", "port2"), TapKind.DARK_PORT: ("port2",), TapKind.CLIMATE: ()}
_ANGLES, _STOKES = ("azimuth_deg", "ellipticity_deg"), ("s0", "s1", "s2", "s3")


class TapLike(Protocol):
    """What reducing needs of a tap; a row of `Tap` has it."""

    @property
    def pk(self) -> int: ...
    @property
    def kind(self) -> str: ...
    @property
    def unit(self) -> str: ...


@dataclass(frozen=True, slots=True)
class Knowledge:
    """What besides the readings decides how taps are reduced.

    Attributes:
        calibrations: Versions in force per tap, oldest first.
        overlaps: Spans (µs) in which two boots of a tap were heard at once, per tap.
        doubts: Spans that are doubtful until a person has spoken, per tap.
    """

    calibrations: Mapping[int, list[Calibration]]
    overlaps: Mapping[int, list[tuple[int, int]]]
    doubts: Mapping[int, list[DoubtSpan]]


def knowledge_of(tap_ids: Iterable[int], as_of: datetime | None = None) -> Knowledge:
    """Three queries however many taps."""
    asked = list(tap_ids)
    return Knowledge(versions_of(asked, as_of), _overlaps_of(asked), doubts_of(asked))


def reduced_samples(tap: Tap, from_us: int, until_us: int, as_of: datetime | None = None) -> Reduced:
    """A tap's reduced samples of the half-open span, with the calibrations valid at each (known at ``as_of``).

    Raises:
        DamagedStore: Some of its readings cannot be read.
    """
    samples, holes = find_samples(tap, from_us, until_us, as_of)
    if unreadable := [hole.why for hole in holes if hole.kind is HoleKind.UNREADABLE]:
        raise DamagedStore("; ".join(unreadable))
    return samples


def find_samples(tap: Tap, from_us: int, until_us: int, as_of: datetime | None = None) -> tuple[Reduced, list[Hole]]:
    """The same, with the span's holes (readings that cannot be read or are no longer kept) instead of an exception."""
    checkpoint = TapCheckpoint.objects.filter(tap=tap, at_us__lte=from_us).order_by("-at_us").first()
    start_us = checkpoint.at_us if checkpoint else from_us
    flat = checkpoint.state["flat"] if checkpoint else None
    found = find_readings(tap.pk, start_us, until_us)
    note_faults(found.holes)
    many = reduce_many([tap], {tap.pk: found.readings}, knowledge_of([tap.pk], as_of), {tap.pk: flat})
    result = many.samples_of(tap.pk)
    holes = [hole for hole in found.holes if hole.until_us >= from_us]
    return result.take(slice(int(np.searchsorted(result.at_us, from_us)), None)), holes


@dataclass(frozen=True, slots=True)
class Group:
    """Samples of K taps of one kind and unit, one tap after the other: tap k has those from first[k] up to ends[k]."""

    taps: list[TapLike]
    first: IntArray
    ends: IntArray
    samples: Reduced


@dataclass(frozen=True, slots=True)
class ManyReduced:
    """Reduced samples in groups, and per tap the frozen-value state at each cut that was asked for and at the end."""

    groups: list[Group]
    flat: dict[int, list[Any]]

    def samples_of(self, tap_id: int) -> Reduced:
        """One tap's samples; empty where it has none."""
        for group in self.groups:
            for tap, begin, end in zip(group.taps, group.first.tolist(), group.ends.tolist(), strict=True):
                if tap.pk == tap_id:
                    return group.samples.take(slice(begin, end))
        return Reduced(**sample.empty_fields(np.empty(0, np.int64)))


def reduce_many(
    taps: Sequence[TapLike],
    readings: Mapping[int, Readings],
    knowledge: Knowledge,
    flat: Mapping[int, Any],
    cuts: Mapping[int, Sequence[int]] | None = None,
) -> ManyReduced:
    """Reduce each tap's readings (sorted); taps of one kind and unit go through in one call.

    Args:
        flat: Per tap the frozen-value state before its readings, None where it starts.
        cuts: Per tap the same number of rising times, µs, at which that state is wanted too.
    """
    flats = {tap.pk: [flat.get(tap.pk)] * (len(cuts[tap.pk]) + 1 if cuts else 1) for tap in taps}
    groups = []
    for members in _alike((tap for tap in taps if len(readings[tap.pk])), readings):
        group, states = _reduce_alike(members, readings, knowledge, flat, cuts)
        groups.append(group)
        for number, tap in enumerate(members):
            flats[tap.pk] = [at_cut[number] for at_cut in states]
    return ManyReduced(groups, flats)


def _alike(taps: Iterable[TapLike], readings: Mapping[int, Readings]) -> list[list[TapLike]]:
    """Taps of one kind, unit and (polarimeters) form of reading together."""
    groups: dict[tuple[str, str, bool], list[TapLike]] = {}
    for tap in taps:
        is_in_angles = tap.kind == TapKind.STOKES and "s0" not in readings[tap.pk].columns
        groups.setdefault((tap.kind, tap.unit, is_in_angles), []).append(tap)
    return list(groups.values())


def _reduce_alike(
    taps: list[TapLike],
    readings: Mapping[int, Readings],
    knowledge: Knowledge,
    flat: Mapping[int, Any],
    cuts: Mapping[int, Sequence[int]] | None,
) -> tuple[Group, list[list[Any]]]:
    parts = [readings[tap.pk] for tap in taps]
    counts = np.array([len(part) for part in parts])
    first = np.concatenate([[0], np.cumsum(counts)[:-1]])
    raw = concatenate(parts)
    kind, unit = TapKind(taps[0].kind), taps[0].unit
    columns = _with_needed(kind, raw)
    own_cuts = np.array([cuts[tap.pk] for tap in taps], dtype=np.int64) if cuts else np.empty((len(taps), 0), dtype=np.int64)
    piece = (np.repeat(own_cuts, counts, axis=0) <= raw.at_us[:, None]).sum(axis=1)
    is_flat, flats = _flat_marks(kind, columns, first, piece, own_cuts.shape[1] + 1, [flat.get(tap.pk) for tap in taps])
    versions, index = _version_index(taps, raw.at_us, first, counts, knowledge.calibrations)
    marks = clock_marks(raw.own_at_us, raw.arrival_us, _has_wrong_stamp(raw))
    marks |= _two_devices(taps, raw.at_us, first, knowledge.overlaps)
    marks |= _old_zeros(versions, index, raw.at_us)
    marks |= _doubts(taps, raw.at_us, first, knowledge.doubts, versions, index)
    calibration = _as_calibration(versions, index)
    samples = _reduced(kind, unit, raw.at_us, columns, calibration, marks, is_flat)
    return Group(taps, first, first + counts, samples), flats


def _has_wrong_stamp(raw: Readings) -> BoolArray:
    """True where the server's time stands because the station's own stamp was wrong.

    A boot whose clock was wrong stays timed by the server, yet once its stamps agree again there is nothing to doubt.
    """
    is_off = np.abs(raw.own_at_us - raw.at_us) > CLOCK_TOLERANCE_US
    return raw.is_server_timed & (raw.own_at_us != NO_TIME) & is_off


def _with_needed(kind: TapKind, raw: Readings) -> dict[str, FloatArray]:
    """The columns, with all-NaN ones for what the kind needs and none of the taps sent."""
    columns = dict(raw.columns)
    needed = _COLUMNS_OF.get(kind) or ((_ANGLES if "azimuth_deg" in columns else _STOKES) if kind is TapKind.STOKES else ())
    if kind is TapKind.STOKES and "s0" in columns:
        needed = (*needed, *_STOKES)
    for name in needed:
        if name not in columns:
            columns[name] = np.full(len(raw), np.nan)
    return columns


def _reduced(
    kind: TapKind,
    unit: str,
    at_us: IntArray,
    columns: dict[str, FloatArray],
    calibration: TapCalibration,
    marks: ReasonArray,
    is_flat: BoolArray | None,
) -> Reduced:
    context = TrustContext(marks=marks, is_flat=is_flat)
    if kind is TapKind.STOKES and "s0" in columns and "azimuth_deg" in columns:
        return _reduced_in_two_forms(unit, at_us, columns, calibration, context)
    return reduce_tap(kind.value, unit, at_us, columns, calibration, trust_context=context)


def _reduced_in_two_forms(
    unit: str, at_us: IntArray, columns: dict[str, FloatArray], calibration: TapCalibration, context: TrustContext
) -> Reduced:
    """Polarimeters of which some send Stokes values and some angles: each form by itself, then in order again."""
    is_stokes = np.isfinite(columns["s0"])
    parts, order = [], []
    for mask, left_out in ((is_stokes, _ANGLES), (~is_stokes, _STOKES)):
        rows = np.flatnonzero(mask)
        if len(rows):
            chosen = {name: values[rows] for name, values in columns.items() if name not in left_out}
            own = TrustContext(marks=context.marks[rows], is_flat=None if context.is_flat is None else context.is_flat[rows])
            parts.append(reduce_tap(TapKind.STOKES.value, unit, at_us[rows], chosen, calibration.take(rows), trust_context=own))
            order.append(rows)
    return sample.concatenate(parts).take(np.argsort(np.concatenate(order), kind="stable"))


def _flat_marks(
    kind: TapKind, columns: Mapping[str, FloatArray], first: IntArray, piece: IntArray, pieces: int, states: list[Any]
) -> tuple[BoolArray | None, list[list[Any]]]:
    """Marks of all readings, and the states of all taps behind each piece (``piece``: which one a reading lies in)."""
    if kind is TapKind.CLIMATE:
        return None, [states] * pieces
    values = flat_channels(kind.value, dict(columns))
    tap = np.repeat(np.arange(len(first)), np.diff(first, append=len(values)))
    marks = np.zeros(values.shape, dtype=bool)
    state = flat_from_json(states, values.shape[1])
    behind: list[list[Any]] = []
    for number in range(pieces):
        rows = np.flatnonzero(piece == number)
        if len(rows):
            present, starts = np.unique(tap[rows], return_index=True)
            marks[rows], after = mark_flat(values[rows], starts, _state_map(lambda part, _, p=present: part[p], state, state))
            state = _state_map(lambda part, new, p=present: _with_rows(part, p, new), state, after)
            behind.append(state.as_json())
        else:
            behind.append(behind[-1] if behind else states)
    return marks, behind


def _state_map(change: Callable[[Any, Any], Any], state: FlatState, other: FlatState) -> FlatState:
    return FlatState(*(change(getattr(state, field.name), getattr(other, field.name)) for field in fields(FlatState)))


def _with_rows(part: Any, rows: IntArray, new: Any) -> Any:
    changed = part.copy()
    changed[rows] = new
    return changed


def _version_index(
    taps: list[TapLike], at_us: IntArray, first: IntArray, counts: IntArray, calibrations: Mapping[int, list[Calibration]]
) -> tuple[list[Calibration | None], IntArray]:
    """All versions in one list, and for each sample which of them holds."""
    versions: list[Calibration | None] = []
    bases = np.empty(len(taps), dtype=np.int64)
    has_several = False
    for number, tap in enumerate(taps):
        own = calibrations.get(tap.pk, [])
        bases[number] = len(versions)
        versions += [None, *own]
        has_several = has_several or bool(own)
    index = np.repeat(bases, counts)
    if has_several:
        for number, tap in enumerate(taps):
            if own := calibrations.get(tap.pk):
                begin, end = first[number], first[number] + counts[number]
                starts = np.array([us_of(version.valid_from) for version in own])
                index[begin:end] += np.searchsorted(starts, at_us[begin:end], side="right")
    return versions, index


def _as_calibration(versions: list[Calibration | None], index: IntArray) -> TapCalibration:
    used, where = np.unique(index, return_inverse=True)
    return stack([tap_calibration(versions[number]) for number in used.tolist()]).take(where)


_DEFAULT = TapCalibration()


def tap_calibration(version: Calibration | None) -> TapCalibration:
    """A stored version as the reducers take it; no version is no correction at all."""
    if version is None:
        return _DEFAULT
    return TapCalibration(
        zero1=version.zero1,
        zero2=version.zero2,
        gain_ratio=version.gain_ratio,
        floor1=version.floor1,
        floor2=version.floor2,
        saturation1=version.saturation1,
        saturation2=version.saturation2,
        leakage=version.leakage,
        leakage_sigma=version.leakage_sigma,
        wanted_port=version.wanted_port,
        monitor_ratio=version.monitor_ratio,
        bright_nominal=version.bright_nominal,
        wanted_state=version.wanted_state,
        handedness=version.handedness,
    )


def _old_zeros(versions: list[Calibration | None], index: IntArray, at_us: IntArray) -> ReasonArray:
    marks = np.zeros(len(at_us), dtype=np.uint32)
    never = np.iinfo(np.int64).max
    old_from_us = np.array(
        [us_of(version.zero_taken_at + OLD_ZERO_AFTER) if version and version.zero_taken_at else never for version in versions]
    )
    if (old_from_us != never).any():
        marks[at_us > old_from_us[index]] = np.uint32(Reason.OLD_ZERO)
    return marks


def _doubts(
    taps: list[TapLike],
    at_us: IntArray,
    first: IntArray,
    doubts: Mapping[int, list[DoubtSpan]],
    versions: list[Calibration | None],
    index: IntArray,
) -> ReasonArray:
    """Spans that wait for a person's word; new firmware's end also where zeros have been taken since."""
    marks = np.zeros(len(at_us), dtype=np.uint32)
    if not any(tap.pk in doubts for tap in taps):
        return marks
    taken_us = np.array([us_of(one.zero_taken_at) if one and one.zero_taken_at else NO_TIME for one in versions])
    ends = np.append(first[1:], len(at_us))
    for tap, begin, end in zip(taps, first.tolist(), ends.tolist(), strict=True):
        own, zero_us = at_us[begin:end], taken_us[index[begin:end]]
        for doubt in doubts.get(tap.pk, ()):
            inside = (own >= doubt.from_us) & (own < doubt.until_us)
            if doubt.reason is Reason.NEW_FIRMWARE:
                inside &= zero_us < doubt.from_us
            marks[begin:end][inside] |= np.uint32(doubt.reason)
    return marks


def _two_devices(
    taps: list[TapLike], at_us: IntArray, first: IntArray, overlaps: Mapping[int, list[tuple[int, int]]]
) -> ReasonArray:
    marks = np.zeros(len(at_us), dtype=np.uint32)
    ends = np.append(first[1:], len(at_us))
    for tap, begin, end in zip(taps, first.tolist(), ends.tolist(), strict=True):
        for from_us, until_us in overlaps.get(tap.pk, ()):
            own = at_us[begin:end]
            marks[begin:end][(own >= from_us) & (own <= until_us)] = np.uint32(Reason.TWO_DEVICES)
    return marks


def _overlaps_of(tap_ids: list[int]) -> dict[int, list[tuple[int, int]]]:
    """Where the data times of two boots overlap: two devices on one key. Readings without boot id, or of files, do not count."""
    spans: dict[int, list[tuple[int, int]]] = {}
    boots = TapBoot.objects.filter(tap_id__in=tap_ids).exclude(station_boot__boot="")
    rows = boots.exclude(station_boot__boot__startswith=FILE_BOOT).order_by("tap_id", "first_at_us")
    for tap_id, first_us, last_us in rows.values_list("tap_id", "first_at_us", "last_at_us"):
        spans.setdefault(tap_id, []).append((first_us, last_us))
    return {tap_id: found for tap_id, own in spans.items() if (found := _overlapping(own))}


def _overlapping(spans: list[tuple[int, int]]) -> list[tuple[int, int]]:
    """Overlaps of spans sorted by their start, a little prolonged: what comes next belongs to the same double."""
    found: list[tuple[int, int]] = []
    reach: int | None = None
    for first_us, last_us in spans:
        if reach is not None and min(reach, last_us) - first_us >= OVERLAP_LEAST_US:
            found.append((first_us, min(reach, last_us) + OVERLAP_REACH_US))
        reach = last_us if reach is None else max(reach, last_us)
    return found
