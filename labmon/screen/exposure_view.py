"""Exposures in words: how far one is, what both ports read, and what two of them propose. Pure."""

from dataclasses import dataclass

from labmon.benches.exposures import Exposure
from labmon.screen.present import age_text, count_text, time_text
from labmon.screen.zero_view import share_text, value_text


@dataclass(frozen=True, slots=True)
class ExposureWords:
    """What a page says of its two stretches; ``begin`` has a place for the tap's name."""

    title: str
    begin: str
    how: str
    first: str
    second: str
    first_act: str
    second_act: str


@dataclass(frozen=True, slots=True)
class Proposal:
    """What two exposures give: one sentence, and what it means."""

    sentence: str
    notes: list[str]


@dataclass(frozen=True, slots=True)
class StretchView:
    """One exposure's row; ``sentence`` is the page's while this is the newest, with a place for the tap's name."""

    title: str
    began: str
    port1: str
    port2: str
    share: str
    said: str
    sentence: str
    percent: int
    is_running: bool
    is_sound: bool


def stretch_view(title: str, found: Exposure, unit: str) -> StretchView:
    """One exposure in words."""
    came, fault = count_text(found.count, "reading"), found.fault()
    lower = f"{title[:1].lower()}{title[1:]}"
    if not found.is_complete:
        said = f"{came} so far, {age_text(found.stretch.seconds - found.elapsed_s)} to go"
        sentence = f"Watching {{name}}, {lower}: {said}."
    else:
        said = fault or f"steady over {came}"
        sentence = f"{title}, {{name}}: {said}."
    means = (float(found.first.mean()), float(found.second.mean())) if found.count else (None, None)
    bright, dark = (means if found.brighter == 1 else means[::-1])
    return StretchView(
        title=title,
        began=time_text(found.stretch.from_at),
        port1=value_text(means[0], unit),
        port2=value_text(means[1], unit),
        share=share_text(dark / (bright + dark)) if bright and dark is not None and bright > 0.0 else "—",
        said=said,
        sentence=sentence,
        percent=round(100 * found.elapsed_s / found.stretch.seconds),
        is_running=not found.is_complete,
        is_sound=found.is_complete and not fault,
    )
