"""A zero in words: what each port says, whether it may be entered, and what the bench can then claim. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from analysis.models import Calibration
from analysis.reduce.ceiling import CeilingCause
from analysis.reduce.zero import DARK_SHARE, Unfit
from labmon.benches.ceilings import TapCeiling
from labmon.benches.zeros import DuePart, ZeroTaking, refusal_words
from labmon.screen.present import MINUS, MISSING, age_text, count_text, er_text, number_text, time_text

_BASE = {"W": (1.0, "W"), "mW": (1e-3, "W"), "uW": (1e-6, "W"), "V": (1.0, "V")}
_STEPS = [(1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"), (1e-12, "p")]
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
    """A raw value in the step of its unit that reads well, with the digits that its error carries: ``199.90 ± 0.12 nW``."""
    if value is None or not np.isfinite(value):
        return MISSING
    factor, base = _BASE.get(unit, (1.0, ""))
    value, error = value * factor, None if error is None else error * factor
    size = max(abs(value), error or 0.0)
    step, prefix = (1.0, "") if not base or size == 0.0 else next(
        ((step, prefix) for step, prefix in _STEPS if size >= step), _STEPS[-1])
    digits = 3 if error is None or error <= 0.0 else int(np.clip(1 - np.floor(np.log10(error / step)), 0, 6))
    number = f"{value / step:.4g}" if error is None else f"{value / step:.{digits}f} ± {error / step:.{digits}f}"
    return f"{number} {prefix}{base or unit}".replace("-", MINUS).strip()


@dataclass(frozen=True, slots=True)
class VersionWords:
    """One version's row of a calibration's history."""

    holds_from: str
    entered: str
    by: str
    zeros: tuple[str, str]
    floors: tuple[str, str]
    gain: str
    leakage: tuple[str, str]
    wanted: str
    handedness: str


def version_words(version: Calibration, unit: str) -> VersionWords:
    """A version of a calibration in words."""
    state = version.wanted_state
    return VersionWords(
        holds_from=time_text(version.valid_from),
        entered=time_text(version.entered_at),
        by=version.entered_by,
        zeros=(value_text(version.zero1, unit, version.zero1_error), value_text(version.zero2, unit, version.zero2_error)),
        floors=(value_text(version.floor1, unit), value_text(version.floor2, unit)),
        gain=f"{version.gain_ratio:.5g}",
        leakage=leakage_texts(version),
        wanted=", ".join(number_text(part, 3) for part in state) if state else str(version.wanted_port),
        handedness=version.handedness,
    )


def leakage_texts(version: Calibration) -> tuple[str, str]:
    """Leakage of port 1's light into port 2, and of port 2's into port 1."""
    if version.leakage is None:
        return MISSING, MISSING
    sigma = version.leakage_sigma
    return (leak_text(version.leakage[1][0], sigma[1][0] if sigma else None),
            leak_text(version.leakage[0][1], sigma[0][1] if sigma else None))


def leak_text(share: float, sigma: float | None) -> str:
    """``0.0620 ± 0.0012 %``; without an uncertainty ``0.062 %``."""
    if sigma is None:
        return f"{100 * share:.3g} %"
    error = 100.0 * sigma
    digits = int(np.clip(1 - np.floor(np.log10(error)), 0, 8)) if error > 0.0 else 4
    return f"{100.0 * share:.{digits}f} ± {error:.{digits}f} %"


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
