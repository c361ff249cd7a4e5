"""Which parts of a changed limit would call less, later or for a shorter time: during a run these need a second person."""

from analysis.judge.rule import LimitRule

#: Parts of which more (or longer) is looser, and parts of which less (or shorter) is.
_LOOSER_IF_MORE, _LOOSER_IF_LESS = ("on_delay_s",), ("off_delay_s", "deadband")


def loosened_parts(before: LimitRule, after: LimitRule) -> tuple[str, ...]:
    """Names of the rule's parts that are looser after than before; none where the change only tightens.

    Looser: a level further out, no warning where there was one, a longer on-delay, a shorter off-delay or a smaller
    deadband (an open alarm then ends sooner), any other window (what it is taken over is another thing).
    Raises:
        ValueError: The rules are for different quantities.
    """
    if before.quantity is not after.quantity:
        raise ValueError(f"before is for {before.quantity.value}, after for {after.quantity.value}; compare one quantity.")
    parts = [name for name in ("alarm", "warning") if _is_further_out(before, after, name)]
    parts += [name for name in _LOOSER_IF_MORE if getattr(after, name) > getattr(before, name)]
    parts += [name for name in _LOOSER_IF_LESS if getattr(after, name) < getattr(before, name)]
    if before.window_s != after.window_s:
        parts.append("window_s")
    return tuple(parts)


def _is_further_out(before: LimitRule, after: LimitRule, name: str) -> bool:
    was, will_be = getattr(before, name), getattr(after, name)
    if was is None or will_be is None:
        return was is not None
    return will_be > was if before.quantity.is_bad_above else will_be < was
