"""Who gets a page: signed in and with access; refusals of a write become messages beside the form."""

from collections.abc import Callable
from functools import wraps
from typing import Any
from urllib.parse import quote

from django.conf import settings
from django.contrib import messages
from django.forms import Form
from django.http import HttpRequest, HttpResponse
from django.shortcuts import redirect, resolve_url

from ingest.store.read import DamagedStore
from labmon.errors import NotAllowed, WriteError
from labmon.people.rights import has_access
from labmon.screen.faults import unreadable

Page = Callable[..., HttpResponse]


def for_people(page: Page) -> Page:
    """Only for who is signed in; an account that has ended is told so."""

    @wraps(page)
    def guarded(request: HttpRequest, *args: Any, **kwargs: Any) -> HttpResponse:
        if not request.user.is_authenticated:
            return redirect(f"{resolve_url(settings.LOGIN_URL)}?next={quote(request.get_full_path())}")
        if not has_access(request.user):
            raise NotAllowed("Your access is over. Ask a lab manager to prolong it.")
        try:
            return page(request, *args, **kwargs)
        except DamagedStore as error:
            return unreadable(request, str(error))

    return guarded


def say_refusal(request: HttpRequest, error: WriteError) -> None:
    """Show why a write was refused and what to do."""
    messages.error(request, f"Not done. {error.why} {error.do}")


def put_refusal(form: Form, error: WriteError, names: dict[str, str] | None = None) -> None:
    """Show it at the field it belongs to; ``names`` maps contract names to the form's."""
    field = (names or {}).get(error.field, error.field)
    form.add_error(field if field in form.fields else None, f"{error.why} {error.do}")
