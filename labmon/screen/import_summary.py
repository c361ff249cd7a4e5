"""What a whole file becomes under a mapping, reduced, in one sentence; nothing is stored."""

from typing import BinaryIO, Final

import numpy as np

from analysis.quantities import db_from_ratio
from analysis.reduce.sample import Reduced
from ingest.files.mapping import Mapping
from ingest.files.parse import ROWS_A_CHUNK, FileReader
from ingest.models import Tap, TapKind
from ingest.times import at_of
from labmon.screen.import_preview import reduced_part
from labmon.screen.present import MISSING, angle_text, count_text, er_text, power_text, temperature_text, time_text

#: A larger file is summed up by its first rows: a person waits for this page.
MOST_ROWS: Final = 200_000


class Summary:
    """Adds up parts of a file."""

    def __init__(self, tap: Tap) -> None:
        self._tap = tap
        self.rows = self.refused = 0
        self._first_us: int | None = None
        self._last_us: int | None = None
        self._sums = np.zeros(2)
        self._ends: dict[str, tuple[float, float]] = {}

    def add(self, at_us: np.ndarray, reduced: Reduced, refused: int) -> None:
        """One part, reduced."""
        self.rows += len(at_us) + refused
        self.refused += refused
        if not len(at_us):
            return
        low_us, high_us = int(at_us.min()), int(at_us.max())
        self._first_us = low_us if self._first_us is None else min(self._first_us, low_us)
        self._last_us = high_us if self._last_us is None else max(self._last_us, high_us)
        has_both = np.isfinite(reduced.wanted_power) & np.isfinite(reduced.other_power)
        self._sums += reduced.wanted_power[has_both].sum(), reduced.other_power[has_both].sum()
        for name, values in (("er", reduced.er_db), ("angle", np.degrees(reduced.angle_rad)), ("power", reduced.power_w),
                             ("temperature", reduced.temperature_c)):
            if np.isfinite(values).any():
                low, high = self._ends.get(name, (np.inf, -np.inf))
                self._ends[name] = min(low, float(np.nanmin(values))), max(high, float(np.nanmax(values)))

    def sentence(self, *, is_whole: bool) -> str:
        """Counts, span and reduced values in one sentence."""
        of = "The whole file" if is_whole else f"Its first {self.rows} rows"
        if self._first_us is None or self._last_us is None:
            return f"{of}: {count_text(self.rows, 'row')}, none of them a reading."
        said = [f"{of}: {count_text(self.rows - self.refused, 'reading')} from {time_text(at_of(self._first_us))} to "
                f"{time_text(at_of(self._last_us))} UTC"]
        if self.refused:
            said.append(f"{count_text(self.refused, 'row')} would be set aside")
        if self._tap.kind == TapKind.CLIMATE:
            said += [f"temperature {self._range('temperature', temperature_text)}"] if "temperature" in self._ends else []
        else:
            wanted, other = self._sums
            mean = er_text(float(db_from_ratio(wanted / other))) if other > 0.0 and wanted > 0.0 else MISSING
            if "er" in self._ends:
                said.append(f"extinction ratio {self._range('er', er_text)}, {mean} over all (mean of leak)")
            said += [f"angle {self._range('angle', angle_text)}"] if "angle" in self._ends and "er" not in self._ends else []
            said += [f"power {self._range('power', power_text)}"] if "power" in self._ends else []
        return "; ".join(said) + "."

    def _range(self, name: str, text) -> str:  # type: ignore[no-untyped-def]
        low, high = self._ends[name]
        return text(low) if text(low) == text(high) else f"{text(low)} to {text(high)}"


def summary_of(raw: BinaryIO, mapping: Mapping, tap: Tap) -> str:
    """The sentence for a file; ``raw`` is put back to its start.

    Raises:
        MappingError: The header line lacks a mapped column.
        FileFault: The file cannot be read on.
    """
    summary, is_whole = Summary(tap), True
    for part in FileReader(raw, mapping, kind=tap.kind, unit=tap.unit).parts(ROWS_A_CHUNK):
        summary.add(part.at_us, reduced_part(part, tap), len(part.refused))
        if summary.rows >= MOST_ROWS:
            is_whole = False
            break
    raw.seek(0)
    return summary.sentence(is_whole=is_whole)
