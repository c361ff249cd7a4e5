"""Signing in, one's own keys, and one's password."""

from django.contrib import messages
from django.contrib.auth import update_session_auth_hash
from django.contrib.auth.forms import PasswordChangeForm
from django.contrib.auth.views import LoginView, LogoutView
from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import redirect, render
from django.utils import timezone
from django.views.decorators.cache import never_cache
from django.views.decorators.http import require_http_methods, require_POST

from labmon.errors import WriteError
from labmon.people.actions import set_password
from labmon.people.keys import make_person_key, revoke_person_key
from labmon.people.models import KeyScope
from labmon.people.rights import Action, require
from labmon.screen.account_forms import KeyForm, SignInForm
from labmon.screen.door import for_people, put_refusal, say_refusal

sign_in = require_http_methods(["GET", "HEAD", "POST"])(
    LoginView.as_view(template_name="screen/login.html", authentication_form=SignInForm, redirect_authenticated_user=True)
)
sign_out = LogoutView.as_view()


@require_http_methods(["GET", "HEAD", "POST"])
@for_people
def you_page(request: HttpRequest) -> HttpResponse:
    """One's own keys; the password form."""
    form = PasswordChangeForm(request.user, request.POST or None)
    if request.method == "POST" and form.is_valid():
        try:
            set_password(request.user, form.cleaned_data["new_password1"], by=request.user)
        except WriteError as error:
            put_refusal(form, error, {"password": "new_password1"})
        else:
            request.user.refresh_from_db()
            update_session_auth_hash(request, request.user)
            messages.success(request, "The new password holds. Other sessions of yours have ended.")
            return redirect("you")
    return render(
        request,
        "screen/you.html",
        {"form": form, "keys": request.user.keys.order_by("-pk"), "key_form": KeyForm(auto_id="key_%s"), "now": timezone.now()},
        status=422 if request.method == "POST" else 200,
    )


@require_POST
@never_cache
@for_people
def make_own_key(request: HttpRequest) -> HttpResponse:
    """A key for notebooks, shown on this answer and never again."""
    require(request.user, Action.MAKE_OWN_KEY)
    form = KeyForm(request.POST)
    if not form.is_valid():
        messages.error(request, "Not done. Choose what the key may do and when it ends from the lists.")
        return redirect("you")
    typed = form.cleaned_data
    try:
        _, key = make_person_key(request.user, by=request.user, expires_at=form.expires_at(),
                                 scope=typed["scope"] or KeyScope.READ, purpose=typed["purpose"])
    except WriteError as error:
        say_refusal(request, error)
        return redirect("you")
    return render(request, "screen/key_once.html", {"key": key, "name": request.user.username, "station": None})


@require_POST
@for_people
def revoke_own_key(request: HttpRequest, key_id: int) -> HttpResponse:
    """End one of one's own keys."""
    if not request.user.keys.filter(pk=key_id).exists():
        raise Http404("You have no such key.")
    revoke_person_key(key_id, by=request.user)
    messages.success(request, "The key is revoked.")
    return redirect("you")
