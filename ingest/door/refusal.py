"""What the door answers when it does not take a body: a status, and words for the person who looks after the station."""

from dataclasses import dataclass, field


@dataclass(slots=True)
class Refusal(Exception):
    """A body or request that is not taken; becomes application/problem+json (RFC 9457)."""

    status: int
    title: str
    detail: str
    """What to do."""
    at: str = ""
    """Which part of the body, as in ``taps.eom-in.port2``."""
    headers: dict[str, str] = field(default_factory=dict)

    def as_json(self) -> dict[str, object]:
        """Members of the problem document."""
        problem: dict[str, object] = {"type": "about:blank", "status": self.status, "title": self.title, "detail": self.detail}
        return problem | ({"field": self.at} if self.at else {})


def bad_form(title: str, detail: str, at: str = "") -> Refusal:
    """Status 400."""
    return Refusal(400, title, detail, at)


def too_large(title: str, detail: str) -> Refusal:
    """Status 413."""
    return Refusal(413, title, detail)


def no_entry(title: str, detail: str, *, error: str = "invalid_token") -> Refusal:
    """Status 401 with the header that RFC 6750 asks for."""
    challenge = 'Bearer realm="labmon station"' + (f', error="{error}"' if error else "")
    return Refusal(401, title, detail, headers={"www-authenticate": challenge})


def come_again(status: int, title: str, retry_after_s: int) -> Refusal:
    """Status 429 or 503 with Retry-After."""
    detail = f"Keep the readings and send them again in {retry_after_s} s or later, with back-off and jitter."
    return Refusal(status, title, detail, headers={"retry-after": str(retry_after_s)})
