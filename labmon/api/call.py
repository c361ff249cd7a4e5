"""The door of every API call: who asks, may the method be used, and each fault as a problem document."""

import functools
from collections.abc import Callable
from http import HTTPStatus
from typing import Any

from django.core.exceptions import PermissionDenied
from django.db import InterfaceError, OperationalError
from django.http import Http404, HttpRequest, HttpResponse, HttpResponseBase, RawPostDataException
from django.http.request import UnreadablePostError
from django.views.decorators.csrf import csrf_exempt

from labmon.api.problem import Problem, not_found, problem_answer, wrong_field
from labmon.api.signin import person_of
from labmon.errors import SecondPersonNeeded, WriteError

Handler = Callable[..., HttpResponseBase]


def by_method(**handlers: Handler) -> Handler:
    """A view that signs the caller in and calls the handler of the method as ``handler(request, person, **path)``.

    HEAD is answered as GET. The view carries ``methods``, so that a test can compare it with the OpenAPI document.
    """
    @answering_problems
    def view(request: HttpRequest, **path: Any) -> HttpResponseBase:
        return _chosen(handlers, request)(request, person_of(request), **path)

    view.methods = frozenset(handlers)
    return view


def open_to_all(**handlers: Handler) -> Handler:
    """As ``by_method`` for calls that need no sign-in: ``handler(request, **path)``."""
    @answering_problems
    def view(request: HttpRequest, **path: Any) -> HttpResponseBase:
        return _chosen(handlers, request)(request, **path)

    view.methods = frozenset(handlers)
    return view


def answering_problems(view: Handler) -> Handler:
    """Every expected fault as ``application/problem+json``; a database that is away is 503, never a plausible answer."""
    @csrf_exempt  # signin checks it where a session, not a key, carries the person
    @functools.wraps(view)
    def answered(request: HttpRequest, **path: Any) -> HttpResponseBase:
        try:
            return view(request, **path)
        except Problem as problem:
            return problem_answer(problem)
        except Http404:
            return problem_answer(not_found())
        except SecondPersonNeeded as error:
            return problem_answer(Problem(HTTPStatus.CONFLICT, error.why,
                                          f"{error.do} POST to …/limits/requests asks.", field=error.field))
        except WriteError as error:
            return problem_answer(wrong_field(error.field, error.why, error.do))
        except PermissionDenied as error:
            return problem_answer(Problem(HTTPStatus.FORBIDDEN, "Your role does not allow this.",
                                          str(error) or "Ask the bench's owner or a manager."))
        except (UnreadablePostError, RawPostDataException):
            return problem_answer(Problem(HTTPStatus.BAD_REQUEST, "The body broke off.", "Send the whole body."))
        except (OperationalError, InterfaceError):
            return problem_answer(Problem(HTTPStatus.SERVICE_UNAVAILABLE, "The database is away.",
                                          "Wait and try again; /health/services says what is missing."))

    return answered


@answering_problems
def unknown_address(request: HttpRequest, **_path: Any) -> HttpResponse:
    """Anything else below /api/v1/."""
    raise not_found()


def _chosen(handlers: dict[str, Handler], request: HttpRequest) -> Handler:
    method = "GET" if request.method == "HEAD" and "HEAD" not in handlers else request.method
    if method not in handlers:
        allowed = ", ".join(sorted(handlers))
        raise Problem(HTTPStatus.METHOD_NOT_ALLOWED, "This address has no such method.", f"Use {allowed}.",
                      headers={"Allow": allowed})
    return handlers[method]
