"""Who calls: a person's key, else the session of the browser."""

from http import HTTPStatus

from django.http import HttpRequest
from django.middleware.csrf import CsrfViewMiddleware

from labmon.api.problem import Problem
from labmon.people.keys import live_key
from labmon.people.models import KeyScope, Person
from labmon.people.rights import has_access

SAFE_METHODS = frozenset({"GET", "HEAD", "OPTIONS"})


class _CsrfCheck(CsrfViewMiddleware):
    """Django's check, giving the reason instead of a page."""

    def _reject(self, request: HttpRequest, reason: str) -> str:
        return reason


def person_of(request: HttpRequest) -> Person:
    """The person who calls.

    A key in ``Authorization`` counts alone, even where a session is open. A write by session needs the CSRF token.

    Raises:
        Problem: 401 without a usable key or session, 403 for a write with a key that only reads, or without CSRF token.
    """
    header = request.headers.get("Authorization", "")
    person = _person_by_key(header, request.method) if header else _person_by_session(request)
    if not has_access(person):
        raise _unauthorized("Your access is over.", "Ask a manager to prolong it.")
    return person


def _person_by_key(header: str, method: str) -> Person:
    scheme, _, text = header.partition(" ")
    key = live_key(text.strip()) if scheme.lower() == "bearer" else None
    if key is None:
        raise _unauthorized("The key is not known, or it was revoked or has expired.",
                            "Send Authorization: Bearer <person's key>; a manager makes a new one.")
    if method not in SAFE_METHODS and key.scope == KeyScope.READ:
        raise Problem(HTTPStatus.FORBIDDEN, "This key only reads.", "Make a key that also writes at /you/, or use GET.")
    return key.person


def _person_by_session(request: HttpRequest) -> Person:
    if not request.user.is_authenticated:
        raise _unauthorized("This needs a sign-in.", "Send Authorization: Bearer <person's key>, or sign in at /login/.")
    if request.method not in SAFE_METHODS:
        check = _CsrfCheck(lambda _request: None)
        check.process_request(request)
        reason = check.process_view(request, None, (), {})
        if reason:
            raise Problem(HTTPStatus.FORBIDDEN, "The write lacks its CSRF token.",
                          "Send the page's token as X-CSRFToken, or use a person's key.")
    return request.user


def _unauthorized(title: str, detail: str) -> Problem:
    return Problem(HTTPStatus.UNAUTHORIZED, title, detail)
