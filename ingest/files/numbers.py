"""Numbers as files write them: a decimal point or comma, no grouping of digits."""

import re
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?", re.ASCII)


def numbers_of(texts: Sequence[str], decimal: str = ".") -> NDArray[np.float64]:
    """The numbers in ``texts``, float64 (N,); NaN where a text is none, infinite where it is too large."""
    if decimal == ",":
        texts = [text.replace(".", "?").replace(",", ".") for text in texts]
    is_number = _NUMBER.fullmatch
    return np.fromiter((float(text) if is_number(text := raw.strip()) else np.nan for raw in texts), np.float64, len(texts))
