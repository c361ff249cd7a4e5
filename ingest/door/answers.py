"""The answer to a station, as CONTRACT.md, section 1, has it."""

from typing import Any

from ingest.door.commit import Answer
from ingest.times import rfc3339_of


def answer_json(answer: Answer, server_us: int) -> dict[str, Any]:
    """The body of status 200."""
    return {"stored": answer.stored, "known": answer.known, "set_aside": [aside.as_json() for aside in answer.aside],
            "accepted": {"boot": answer.boot or None, "ranges": answer.ranges}, "through": answer.through,
            "server_time": rfc3339_of(server_us)}
