"""What a write or a question can be refused for; doors turn these into form errors or problem+json."""

from django.core.exceptions import PermissionDenied


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
