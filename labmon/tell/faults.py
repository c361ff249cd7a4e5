"""Why a message could not be handed over."""


class SendFault(Exception):
    """Not handed over; ``is_final``: trying again cannot help."""

    def __init__(self, what: str, *, is_final: bool = False) -> None:
        super().__init__(what)
        self.is_final = is_final
