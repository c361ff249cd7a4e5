"""Who the broker turned away, read from its own log where it publishes that: a hint for whoever joins a bench.

labmon never sees a key that is tried at a broker. mosquitto (2.0) logs ``New connection from ADDRESS:PORT on port N.`` and then
either ``New client connected from ADDRESS:PORT as …`` or ``Client … disconnected, not authorised.``, without naming key or
user; ``log_dest topic`` publishes these lines under `NOTICES`.
"""

import re
from collections import deque
from typing import Final

from ingest.door.refusal import no_entry

NOTICES: Final = "$SYS/broker/log/N"
TURNED_AWAY: Final = no_entry("the broker turned it away", "The user must be the station's name and the password its key.")
_CAME: Final = re.compile(r"New connection from (?P<address>.+):(?P<port>\d+) on port \d+\.")
_LET_IN: Final = re.compile(r"New client connected from (?P<address>.+):(?P<port>\d+) as ")
_TURNED_AWAY: Final = "disconnected, not authorised."
#: So many connections that are neither let in nor turned away yet are remembered.
_MOST_PENDING: Final = 200


class BrokerLog:
    """Follows the broker's lines; gives the address that was turned away. Of several at once the oldest is meant."""

    def __init__(self) -> None:
        self._pending: deque[tuple[str, str]] = deque(maxlen=_MOST_PENDING)

    def turned_away(self, line: str) -> str | None:
        """The address that this line turns away (empty where it is not known); None where it turns nobody away."""
        if came := _CAME.search(line):
            self._pending.append((came["address"], came["port"]))
        elif let_in := _LET_IN.search(line):
            who = let_in["address"], let_in["port"]
            if who in self._pending:
                self._pending.remove(who)
        elif _TURNED_AWAY in line:
            return self._pending.popleft()[0] if self._pending else ""
        return None
