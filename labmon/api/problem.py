"""A call that cannot be answered, as RFC 9457 says it."""

from http import HTTPStatus
from typing import Any

import msgspec
from django.http import HttpResponse

PROBLEM_TYPE = "application/problem+json"
HEADERS = {HTTPStatus.UNAUTHORIZED: {"WWW-Authenticate": "Bearer"}, HTTPStatus.SERVICE_UNAVAILABLE: {"Retry-After": "5"}}


class Problem(Exception):
    """What is wrong (``title``), what to do (``detail``) and, where one is at fault, the field."""

    def __init__(self, status: int, title: str, detail: str, *, field: str = "",
                 more: dict[str, Any] | None = None, headers: dict[str, str] | None = None) -> None:
        super().__init__(f"{title} {detail}")
        self.status = status
        self.title = title
        self.detail = detail
        self.field = field
        self.more = more or {}
        self.headers = headers or {}

    def as_json(self) -> dict[str, Any]:
        """The members of the answer; ``type`` is ``about:blank``, so the status says the kind (RFC 9457, 4.2.1)."""
        said = {"type": "about:blank", "title": self.title, "status": int(self.status), "detail": self.detail}
        if self.field:
            said["field"] = self.field
        return said | self.more


def wrong_field(field: str, title: str, detail: str) -> Problem:
    """The caller sent something that cannot be used."""
    return Problem(HTTPStatus.BAD_REQUEST, title, detail, field=field)


def not_found(title: str = "There is no such thing here.",
              detail: str = "Check the address; /api/v1/openapi.json lists every call.") -> Problem:
    """Not there, or not for this person: the two look the same."""
    return Problem(HTTPStatus.NOT_FOUND, title, detail)


def problem_answer(problem: Problem) -> HttpResponse:
    """The problem as an HTTP answer."""
    answer = HttpResponse(msgspec.json.encode(problem.as_json()), status=problem.status, content_type=PROBLEM_TYPE)
    answer.headers["Cache-Control"] = "no-store"
    for name, value in (HEADERS.get(problem.status, {}) | problem.headers).items():
        answer.headers[name] = value
    return answer
