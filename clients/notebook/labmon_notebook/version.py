"""The client's version, as the server's log gets to know it."""

VERSION = "0.1.0"
AGENT = f"labmon-notebook/{VERSION}"
