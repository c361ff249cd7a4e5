"""What the form proposes for a limit's delays and deadband, by quantity, each with its reason in words.

Common practice, no source: the API's own defaults (60 s, 60 s, the usual deadband) are the contract's and stay.
"""

from dataclasses import dataclass

from analysis.judge.rule import Quantity


@dataclass(frozen=True, slots=True, kw_only=True)
class Proposal:
    """Delays and window in s; ``deadband`` in the quantity's unit, None: a fiftieth of the alarm level. ``why``: in words."""

    on_delay_s: float
    off_delay_s: float
    deadband: float | None
    window_s: float | None = None
    why: str


PROPOSALS: dict[Quantity, Proposal] = {
    Quantity.ER_DB: Proposal(
        on_delay_s=60, off_delay_s=300, deadband=1.0,
        why="1 min: a touched fibre rings down in less, and a call for it helps nobody. 5 min within the limit before it counts "
            "as back, and 1 dB to spare: light that swings about its limit calls once, not each time."),
    Quantity.ANGLE_DEG: Proposal(
        on_delay_s=60, off_delay_s=300, deadband=1.0,
        why="1 min: a touched fibre rings down in less. 5 min and 1° to spare before it counts as back: light that swings about "
            "its limit calls once."),
    Quantity.DOP: Proposal(
        on_delay_s=120, off_delay_s=300, deadband=0.01,
        why="2 min: the degree of polarization changes with the source, slowly, and a polarimeter's single values scatter. "
            "0.01 to spare is about that scatter."),
    Quantity.POWER_W: Proposal(
        on_delay_s=10, off_delay_s=60, deadband=None,
        why="10 s: a source that fails does so at once, and a shutter is opened again sooner. A fiftieth of the level to spare: "
            "more than a source usually flickers."),
    Quantity.TRUSTED_SHARE: Proposal(
        on_delay_s=60, off_delay_s=600, deadband=0.02, window_s=600,
        why="Over 10 min: the window itself waits, so 1 min more is enough. 10 min good again, and 0.02 to spare, so that the "
            "old window has gone by."),
    Quantity.TIME_TO_LIMIT_S: Proposal(
        on_delay_s=600, off_delay_s=900, deadband=1800, window_s=10_800,
        why="Over 3 h of drift, looked at each 5 min: it must hold for 10 min, so that one bad look calls nobody, and is "
            "withdrawn after 15 min with half an hour to spare."),
}


def proposal_facts() -> dict[str, dict[str, float | str | None]]:
    """All proposals as the form's script takes them."""
    return {quantity.value: {"on_delay_s": one.on_delay_s, "off_delay_s": one.off_delay_s, "deadband": one.deadband,
                             "window_s": one.window_s, "why": one.why} for quantity, one in PROPOSALS.items()}
