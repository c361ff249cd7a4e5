"""Which labmon made something that is kept."""

from typing import Final

#: Equal to the version in pyproject.toml (a test compares).
VERSION: Final = "0.1.0"
