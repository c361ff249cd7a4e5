"""What an outlook is asked from: past windows of a bench, the run that is planned, and today's state."""

from dataclasses import dataclass

import numpy as np

from analysis.quantities import US_PER_S, BoolArray, FloatArray, IntArray


@dataclass(frozen=True, slots=True, kw_only=True)
class LabelledSpan:
    """A stretch of time that somebody or something has named: an episode's cause, a logbook entry."""

    start_us: int
    end_us: int
    label: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PastWindow:
    """One past window of a bench, as long as a run or longer.

    Attributes:
        start_us: Its start, µs since 1970 UTC. length_s: Its length, s.
        at_us: Times of its samples, shape (N,), strictly rising; gaps are simply absent.
        state: What was seen: angle from the wanted state, rad, shape (N,) (two ports), or unit Stokes vectors, shape (N, 3).
            Of a minute, give the worst second (CONTRACT 5). NaN rows are not judged.
        is_trusted: Shape (N,); untrusted samples are neither good nor bad.
        start_hour: Local hour of the start, [0, 24). is_working_day, air: Kind of day and of air regime.
        start_state: State from which displacement counts, rad or shape (3,); without it the first judged sample is taken.
        is_upper_bound: Shape (N,), two ports at the floor: the angle is at most this. A start at the floor counts from 0.
        cut_at_us: Moment at which somebody realigned; what follows is another story and is not followed.
        interval_s: Nominal spacing of the samples, s; without it the median spacing. A sample holds for three at most.
        held_s: Judged seconds of each sample, shape (N,), where they are known (minutes of many seconds); goes before
            ``interval_s``.
        excess_rad: Stokes, shape (N,): by how much the worst second of a sample was further from the wanted state than
            ``state`` (then the minute's mean direction), rad, not below 0. A replay adds it.
        temperature_k: Lowest and highest room temperature, K, where known.
        labels: Named stretches, from which a failure takes its *why*.
    """

    start_us: int
    length_s: float
    at_us: IntArray
    state: FloatArray
    is_trusted: BoolArray
    start_hour: float
    is_working_day: bool
    air: str = ""
    start_state: FloatArray | float | None = None
    is_upper_bound: BoolArray | None = None
    cut_at_us: int | None = None
    interval_s: float | None = None
    held_s: FloatArray | None = None
    excess_rad: FloatArray | None = None
    temperature_k: tuple[float, float] | None = None
    labels: tuple[LabelledSpan, ...] = ()

    def __post_init__(self) -> None:
        count = len(self.at_us)
        if np.shape(self.state) not in ((count,), (count, 3)) or np.shape(self.is_trusted) != (count,):
            raise ValueError(f"state has shape {np.shape(self.state)}, is_trusted {np.shape(self.is_trusted)} for {count} times; "
                             "pass one angle or one Stokes vector and one mark per time.")
        for name in ("held_s", "excess_rad"):
            beside = getattr(self, name)
            if beside is not None and np.shape(beside) != (count,):
                raise ValueError(f"{name} has shape {np.shape(beside)} for {count} times; pass one per time.")
        if self.excess_rad is not None and np.ndim(self.state) == 1:
            raise ValueError("excess_rad belongs to Stokes vectors; of angles pass the worst one as state.")
        if count > 1 and not np.all(self.at_us[1:] > self.at_us[:-1]):
            raise ValueError("at_us must rise strictly; sort the samples and drop repeats.")
        if not self.length_s > 0.0:
            raise ValueError(f"length_s={self.length_s!r} s must be above 0.")

    @property
    def end_us(self) -> int:
        """End of the window, cut or not, µs."""
        return self.start_us + round(self.length_s * US_PER_S)


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedRun:
    """The run for which clearance is asked.

    Attributes:
        start_us: Its start (mostly now), µs. length_s: Its length L, s. allowed_s: Seconds below the limit that it bears.
        start_hour, is_working_day, air: As of `PastWindow`. temperature_k: Room temperature now, K, where known.
        changed_at_us: The bench's last configuration change (fibre, joint, laser, optics, tap, gain): history begins there.
    """

    start_us: int
    length_s: float
    start_hour: float
    is_working_day: bool
    air: str = ""
    allowed_s: float = 0.0
    temperature_k: float | None = None
    changed_at_us: int | None = None

    def __post_init__(self) -> None:
        if not (self.length_s > 0.0 and self.allowed_s >= 0.0):
            raise ValueError(f"length_s={self.length_s!r} s must be above 0 and allowed_s={self.allowed_s!r} s not below it.")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StartReading:
    """Today's state and what is known against it.

    Attributes:
        state: As of `PastWindow` for one moment, rad or shape (3,). is_trusted: Whether the reading is.
        is_at_floor: The dark port is at its floor and the angle therefore unknown. Where the floor's bound itself is tight
            enough to be asked about, pass the bound as the state and leave this False: a replay from it errs to the safe side.
        open_causes: Causes that nobody has closed yet, in words.
    """

    state: FloatArray | float
    is_trusted: bool = True
    is_at_floor: bool = False
    open_causes: tuple[str, ...] = ()
