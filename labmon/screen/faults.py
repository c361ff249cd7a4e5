"""Pages for what goes wrong: each says what happened and what to do."""

from django.http import HttpRequest, HttpResponse, HttpResponseServerError
from django.shortcuts import render
from django.template.loader import get_template


def not_allowed(request: HttpRequest, exception: Exception) -> HttpResponse:
    """403."""
    detail = getattr(exception, "detail", "") or "You may not do this. Ask the bench's owner or a lab manager."
    return render(request, "screen/fault.html", {"sentence": "This is not yours to do.", "detail": detail}, status=403)


def not_found(request: HttpRequest, exception: Exception) -> HttpResponse:
    """404."""
    detail = (
        "The address may be mistyped, the bench renamed, or it is one that you may not see. "
        "Go to the lab page and look from there."
    )
    return render(request, "screen/fault.html", {"sentence": "There is nothing at this address.", "detail": detail}, status=404)


def no_token(request: HttpRequest, reason: str = "") -> HttpResponse:
    """403 for a form without its token: an old page, or cookies are off."""
    detail = "The form is too old or cookies are off. Go back, reload the page and send it again. Nothing was changed."
    return render(request, "screen/fault.html", {"sentence": "The form could not be accepted.", "detail": detail}, status=403)


def unreadable(request: HttpRequest, why: str) -> HttpResponse:
    """409: the page is about readings of which some cannot be read."""
    return render(request, "screen/fault.html", {"sentence": "Stored readings that this page needs cannot be read.",
                                                 "detail": f"{why} A lab manager finds it on the health page."}, status=409)


def broken(request: HttpRequest) -> HttpResponse:
    """500: rendered without the database, which may be what broke."""
    return HttpResponseServerError(get_template("screen/broken.html").render({}))
