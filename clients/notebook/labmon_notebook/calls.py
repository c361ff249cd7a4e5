"""Every call that this client makes. Tests hold this table against the OpenAPI document that the server publishes."""

from dataclasses import dataclass
from urllib.parse import quote

BASE = "/api/v1"


@dataclass(frozen=True)
class Call:
    """A GET of the API: its path as the document writes it, and the parameters behind the question mark that we send."""

    path: str
    query: tuple[str, ...] = ()

    def address(self, **path: object) -> str:
        """The path with its places filled in."""
        return BASE + self.path.format(**{name: quote(str(part), safe="") for name, part in path.items()})


STATIONS = Call("/stations")
NOW = Call("/taps/{station}/{tap}/now")
HISTORY = Call("/taps/{station}/{tap}/history", ("span", "points", "quantity"))
READINGS = Call("/taps/{station}/{tap}/readings", ("span", "format", "as_of"))
STATISTICS = Call("/taps/{station}/{tap}/statistics", ("span",))
EXPERIMENTS = Call("/experiments")
LIMITS = Call("/experiments/{id}/limits")
ALARMS = Call("/alarms", ("state", "experiment", "before", "count"))
HOLDS = Call("/holds")
RUNS = Call("/runs", ("experiment", "state", "before", "count"))
LEDGER = Call("/runs/{id}/ledger", ("version", "first"))
