"""Who may do what."""

from django.contrib.auth.models import AbstractUser
from django.db import models


class Role(models.TextChoices):
    """Rights of CONTRACT section 5, least first."""

    GUEST = "guest"
    RESEARCHER = "researcher"
    OWNER = "owner"
    MANAGER = "manager"


class Person(AbstractUser):
    """Someone who signs in. A guest sees only the benches named for them."""

    role = models.CharField(max_length=10, choices=Role, default=Role.GUEST)
    guest_until = models.DateTimeField(null=True, blank=True)
    guest_stations = models.ManyToManyField("ingest.Station", blank=True, related_name="guests")


class KeyScope(models.TextChoices):
    """What a key is good for; never more than its person may."""

    READ = "read"
    WRITE = "write"


class PersonKey(models.Model):
    """A person's key for the API; only its digest is kept."""

    person = models.ForeignKey(Person, models.CASCADE, related_name="keys")
    digest = models.BinaryField(max_length=32, unique=True)
    hint = models.CharField(max_length=8)
    scope = models.CharField(max_length=5, choices=KeyScope, default=KeyScope.WRITE, help_text="write: read and write.")
    purpose = models.CharField(max_length=100, blank=True)
    made_at = models.DateTimeField(auto_now_add=True)
    expires_at = models.DateTimeField(null=True, blank=True)
    revoked_at = models.DateTimeField(null=True, blank=True)


class SignInTry(models.Model):
    """Failed sign-ins of late, of an account name or of an address; only a digest of either is kept, and no longer than a day."""

    mark = models.BinaryField(max_length=32, unique=True)
    failures = models.PositiveIntegerField(default=0)
    last_at = models.DateTimeField(db_index=True)
    paused_until = models.DateTimeField(null=True)
