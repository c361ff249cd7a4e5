"""What a write or a question can be refused for; doors turn these into form errors or problem+json."""

from django.core.exceptions import PermissionDenied
from django.db.models import Model


class WriteError(ValueError):
    """A value that cannot be written: which field, why, and what to do."""

    def __init__(self, field: str, why: str, do: str):
        super().__init__(f"{field}: {why} {do}")
        self.field, self.why, self.do = field, why, do


class NotAllowed(PermissionDenied):
    """The person may not do this; ``detail`` says what would be needed."""

    def __init__(self, detail: str):
        super().__init__(detail)
        self.detail = detail


class SecondPersonNeeded(WriteError):
    """During a declared run a limit may only be tightened by one person; ``parts`` are those that would be looser."""

    def __init__(self, field: str, why: str, parts: tuple[str, ...], limit: Model):
        super().__init__(field, why, "Ask a second person to consent, or wait until the run is over.")
        self.parts, self.limit = parts, limit
