"""Signing in, and making a key."""

from datetime import timedelta
from typing import Any

from django import forms
from django.contrib.auth.forms import AuthenticationForm
from django.core.exceptions import NON_FIELD_ERRORS, ValidationError
from django.utils import timezone

from labmon.people.models import KeyScope
from labmon.people.sign_in import begin_try, note_success
from labmon.screen.present import age_text

NEVER = ""


class SignInForm(AuthenticationForm):
    """Name and password; after several failures it asks for a pause and does not look at the password."""

    @property
    def is_paused(self) -> bool:
        """Whether it was refused unseen."""
        return self.has_error(NON_FIELD_ERRORS, "paused")

    def clean(self) -> dict[str, Any]:
        name, password = self.cleaned_data.get("username"), self.cleaned_data.get("password")
        if name is None or not password:
            return super().clean()
        address = self.request.META.get("REMOTE_ADDR", "")
        wait_s = begin_try(name, address)
        if wait_s > 0.0:
            raise ValidationError(f"Too many tries. Wait {age_text(wait_s + 1.0)}, then try again.", code="paused")
        cleaned = super().clean()
        note_success(name, address)
        return cleaned


class KeyForm(forms.Form):
    """A key of one's own."""

    purpose = forms.CharField(label="What it is for", max_length=100, required=False)
    scope = forms.ChoiceField(
        label="It may", choices=[(KeyScope.READ.value, "read only"), (KeyScope.WRITE.value, "read, and write what I may write")],
        required=False,
    )
    days = forms.ChoiceField(
        label="It ends after", choices=[("30", "30 days"), ("90", "90 days"), ("365", "a year"), (NEVER, "never by itself")],
        initial="90", required=False,
    )

    def expires_at(self):
        """When it ends, None: never by itself."""
        days = self.cleaned_data["days"]
        return timezone.now() + timedelta(days=int(days)) if days else None
