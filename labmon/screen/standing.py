"""How a bench stands, in one word, and how a lab stands, in one sentence. Pure."""

from collections import Counter
from collections.abc import Sequence
from enum import StrEnum


class Standing(StrEnum):
    """What a person needs to know of a bench first; listed worst first."""

    BELOW = "below"
    NO_READING = "no-reading"
    UNTRUSTED = "untrusted"
    UNDECIDED = "undecided"
    THIN = "thin"
    WITHIN = "within"
    NO_LIMIT = "no-limit"
    NEVER_HEARD = "never-heard"

    @property
    def word(self) -> str:
        """As the screen writes it."""
        return WORDS[self]

    @property
    def rank(self) -> int:
        """0 is worst."""
        return list(Standing).index(self)

    @property
    def has_shape(self) -> bool:
        """True where a bench's mark is a shape of its own, not a plain tick."""
        return self not in {Standing.WITHIN, Standing.NO_LIMIT}

    @property
    def wants_a_look(self) -> bool:
        """True where the bench is named on the rail."""
        return self not in {Standing.WITHIN, Standing.NO_LIMIT, Standing.NEVER_HEARD}


WORDS = {
    Standing.BELOW: "below limit",
    Standing.NO_READING: "no reading",
    Standing.UNTRUSTED: "untrusted",
    Standing.UNDECIDED: "undecided",
    Standing.THIN: "thin",
    Standing.WITHIN: "in spec",
    Standing.NO_LIMIT: "no limit",
    Standing.NEVER_HEARD: "never heard",
}
_BY_WORD = {word: standing for standing, word in WORDS.items()}


def standing_of(word: str) -> Standing:
    """The standing that a bench's state word names (labmon.benches.queries gives the word).

    Raises:
        KeyError: No standing has this word.
    """
    return _BY_WORD[word]


def lab_sentence(standings: Sequence[Standing], *, unacknowledged: int = 0, thinnest: str = "") -> str:
    """The lab in one sentence: what is wrong first, else that all is well and where it is thinnest.

    Args:
        standings: one per bench the reader may see.
        unacknowledged: alarms that nobody has acknowledged yet.
        thinnest: words for the thinnest bench, e.g. ``"n4, 2.1 dB (1.9°) inside"``; used when all is well.
    """
    if not standings:
        return "No station has joined yet."
    counts = Counter(standings)
    parts = _bad_parts(counts)
    if parts:
        said = ", ".join(parts)
    else:
        said = _good_part(counts)
        if thinnest:
            said += f"; thinnest is {thinnest}"
    waits = ""
    if unacknowledged:
        waits = f" {unacknowledged} alarm{'s wait' if unacknowledged > 1 else ' waits'} for someone."
    return f"{said[0].upper()}{said[1:]}.{waits}"


def _bad_parts(counts: Counter[Standing]) -> list[str]:
    below = counts[Standing.BELOW]
    parts = [f"{below} bench{'es' if below > 1 else ''} below {'their' if below > 1 else 'its'} limit"] if below else []
    for standing, word in (
        (Standing.THIN, "thin"),
        (Standing.NO_READING, "silent"),
        (Standing.UNTRUSTED, "untrusted"),
        (Standing.UNDECIDED, "undecided"),
    ):
        if counts[standing]:
            noun = "" if parts else f" bench{'es' if counts[standing] > 1 else ''}"
            parts.append(f"{counts[standing]}{noun} {word}")
    return parts


def _good_part(counts: Counter[Standing]) -> str:
    within, without, unheard = counts[Standing.WITHIN], counts[Standing.NO_LIMIT], counts[Standing.NEVER_HEARD]
    if within:
        said = "the one bench with a limit is within it" if within == 1 else f"all {within} benches with a limit are within it"
    else:
        said = "no bench has a limit yet"
    if without:
        said += f", {without} without a limit"
    return said + (f", {unheard} not heard yet" if unheard else "")
