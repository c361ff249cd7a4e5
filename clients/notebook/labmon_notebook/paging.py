"""Long lists, asked for page by page."""

from collections.abc import Callable, Iterator
from typing import Any

PAGE = 1000


def all_pages(ask: Callable[[dict[str, Any]], dict[str, Any]], name: str, most: int | None,
              following: str = "before") -> Iterator[dict[str, Any]]:
    """The rows of a list that goes on with ``before``, newest first, at most ``most`` of them (None: all).

    ``following`` names the member of an answer that says what to ask for next.
    """
    before, left = None, most
    while left is None or left > 0:
        said = ask({"before": before, "count": PAGE if left is None else min(PAGE, left)})
        yield from said[name]
        before = said.get(following)
        if before is None:
            return
        left = None if left is None else left - len(said[name])
