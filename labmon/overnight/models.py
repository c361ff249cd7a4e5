"""Who wants the night by mail."""

from django.conf import settings
from django.db import models


class DigestWish(models.Model):
    """Somebody wants every night's sentence and lines by mail in the morning."""

    person = models.OneToOneField(settings.AUTH_USER_MODEL, models.CASCADE, primary_key=True, related_name="digest_wish")
    since = models.DateTimeField(auto_now_add=True)
