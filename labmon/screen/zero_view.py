"""A zero in words: what each port says, whether it may be entered, and what the bench can then claim. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from analysis.reduce.ceiling import CeilingCause
from analysis.reduce.zero import DARK_SHARE, Unfit
from labmon.benches.ceilings import TapCeiling
from labmon.benches.zeros import DuePart, ZeroTaking, refusal_words
from labmon.screen.present import MINUS, age_text, count_text, er_text, time_text

_CAUSES = {
    CeilingCause.ZERO: "the error of its zero",
    CeilingCause.NOISE: "the noise of its dark port",
    CeilingCause.STEP: "the step of its converter",
    CeilingCause.LEAKAGE: "its splitter's leakage",
    CeilingCause.LEAKAGE_ERROR: "what is not known of its splitter's leakage",
}


@dataclass(frozen=True, slots=True)
class PortWords:
    """One port's row."""

    name: str
    zero: str
    sigma: str
    before: str
    said: str


@dataclass(frozen=True, slots=True)
class ZeroView:
    """A zero that is being taken or proposed."""

    sentence: str
    ports: list[PortWords]
    notes: list[str]
    share: int
    is_running: bool
    may_be_entered: bool


def zero_view(name: str, taking: ZeroTaking, unit: str) -> ZeroView:
    """Everything the page says of a stretch."""
    notes = []
    if taking.holds_until is not None:
        notes.append(f"It would hold until {time_text(taking.holds_until)}, when the next version begins.")
    if any(Unfit.NO_LIGHT_KNOWN in port.unfit for port in taking.ports.values()):
        notes.append("No bright light is known from the day before: whether this is dark, only you can tell.")
    if any(port.is_frozen for port in taking.ports.values()):
        notes.append("A port gave one and the same value throughout: its spread says nothing, and its floor stays as it is.")
    is_running = not taking.is_complete
    return ZeroView(
        sentence=_sentence(name, taking),
        ports=[_port_words(number, taking, unit) for number in sorted(taking.ports)],
        notes=notes,
        share=round(100 * taking.elapsed_s / taking.stretch.seconds),
        is_running=is_running,
        may_be_entered=not is_running and not taking.is_refused,
    )


def _sentence(name: str, taking: ZeroTaking) -> str:
    counts = [port.count for port in taking.ports.values()]
    came = count_text(max(counts, default=0), "reading")
    if not taking.is_complete:
        left = age_text(taking.stretch.seconds - taking.elapsed_s)
        trouble = "" if not taking.is_refused or max(counts, default=0) < 10 else f"; {refusal_words(taking)}"
        return f"Watching {name} in the dark: {came} so far, {left} to go{trouble}."
    if taking.is_refused:
        return f"No zero of {name} from this: {refusal_words(taking)}."
    return f"A sound zero of {name}: both ports steady and dark over {came}." if len(counts) > 1 else (
        f"A sound zero of {name}: steady and dark over {came}.")


def _port_words(number: int, taking: ZeroTaking, unit: str) -> PortWords:
    port = taking.ports[number]
    before = "none" if taking.before is None else value_text(getattr(taking.before, f"zero{number}"), unit)
    said = []
    for why in port.unfit:
        said.append({
            Unfit.TOO_FEW: f"only {count_text(port.count, 'reading')} came",
            Unfit.NOT_STEADY: "it moved while it was watched: someone opened the beam, or the detector still drifts",
            Unfit.NOT_DARK: f"it still shows {share_text(port.light_share)} of the usual light; at most {share_text(DARK_SHARE)} "
                            "may be left",
            Unfit.NO_LIGHT_KNOWN: "no light to compare with",
        }[why])
    return PortWords(f"Port {number}", value_text(port.mean, unit, port.error), value_text(port.sigma, unit), before,
                     "; ".join(said) or "steady and dark")


def value_text(value: float | None, unit: str, error: float | None = None) -> str:
    """A value in the tap's raw unit with as many digits as its error carries: ``(3.012 ± 0.004)e−07 W``."""
    if value is None or not np.isfinite(value):
        return "–"
    size = max(abs(value), error or 0.0)
    power = int(np.floor(np.log10(size))) if size > 0 else 0
    power = 0 if -3 <= power < 4 else power
    digits = 4
    if error is not None and error > 0:
        digits = int(np.clip(1 - np.floor(np.log10(error / 10.0**power)), 0, 6))
    number = f"{value / 10.0**power:.{digits}f}"
    if error is not None:
        number = f"({number} ± {error / 10.0**power:.{digits}f})" if power or error > 0 else number
    tail = f"e{power:+03d}" if power else ""
    return f"{number}{tail} {unit.replace('uW', 'µW')}".replace("-", MINUS).strip()


def share_text(share: float) -> str:
    """``2.3 %``."""
    return f"{100 * share:.2g} %".replace("-", MINUS)


def ceiling_words(ceiling: TapCeiling | None) -> str:
    """One sentence: what this bench can honestly claim; empty where nothing is to be said."""
    if ceiling is None:
        return ""
    lacking = " and ".join(ceiling.missing)
    if ceiling.er_db is None:
        return f"What extinction ratio it can honestly claim cannot be told: no {lacking} is entered. Take a zero."
    said = f"The highest extinction ratio it can honestly claim now is {er_text(ceiling.er_db)}"
    if ceiling.worst is not None:
        said += f", limited by {_CAUSES[ceiling.worst]}"
    return f"{said}; no {lacking} is entered, so the true ceiling is lower." if lacking else f"{said}."


def due_words(due: DuePart) -> str:
    """How far derived values are made anew; empty where nothing waits."""
    if not due.spans:
        return ""
    return f"Derived values are being made anew: {age_text(due.seconds)} of readings to go. Raw readings never change."


def stretch_words(seconds: Sequence[float]) -> str:
    """``3 dark stretches of the last week``."""
    return f"{count_text(len(seconds), 'dark stretch', 'dark stretches')} of the last week"
