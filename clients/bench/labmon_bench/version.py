"""The client's version, as the door gets to know it."""

VERSION = "0.1.0"
FIRMWARE = f"labmon-bench {VERSION}"
