"""What can go wrong with a call, each saying what to do."""

from collections.abc import Mapping
from typing import Any


class LabFault(Exception):
    """A call that labmon refused, or could not answer.

    Attributes:
        status: The HTTP status; 0 where no answer came.
        title, detail: What is wrong; what to do.
        field: The parameter at fault; empty where none is.
        said: The whole problem document (RFC 9457).
    """

    def __init__(self, title: str, detail: str = "", *, status: int = 0, field: str = "",
                 said: Mapping[str, Any] | None = None) -> None:
        about = f" (parameter {field})" if field else ""
        super().__init__(f"{title}{about} {detail}".strip())
        self.title, self.detail, self.status, self.field, self.said = title, detail, status, field, dict(said or {})


class LabAway(LabFault):
    """No whole answer came: the network, the address or the server."""


class NotSignedIn(LabFault):
    """The key is missing, unknown, revoked or expired (401)."""


class NotAllowed(LabFault):
    """Your role does not allow it (403)."""


class NotThere(LabFault):
    """There is no such thing, or not for you (404)."""


class WrongQuestion(LabFault):
    """Something you gave cannot be used; ``field`` names it (400)."""


KINDS: dict[int, type[LabFault]] = {400: WrongQuestion, 401: NotSignedIn, 403: NotAllowed, 404: NotThere, 429: LabAway,
                                    502: LabAway, 503: LabAway, 504: LabAway}


def fault_of(status: int, said: Any, address: str) -> LabFault:
    """The exception for an answer that is no success.

    Args:
        said: The answer's JSON; anything but a problem document means that something else than labmon answered.
    """
    kind = KINDS.get(status, LabFault)
    if isinstance(said, Mapping) and "title" in said:
        return kind(str(said["title"]), str(said.get("detail", "")), status=status, field=str(said.get("field") or ""), said=said)
    return kind(f"{address} answered {status} without saying why.",
                "Check that this is labmon's own address, without a path behind it, and that no proxy stands between.",
                status=status)
