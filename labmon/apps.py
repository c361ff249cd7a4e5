from django.apps import AppConfig


class LabmonConfig(AppConfig):
    name = "labmon"
    default_auto_field = "django.db.models.BigAutoField"

    def ready(self) -> None:
        """Connect the one listener to what the door announces; make the system checks known."""
        import labmon.checks  # noqa: F401  (registers them)
        from ingest.announce import listen
        from labmon.pipeline.hint import ask_for_judging

        listen(ask_for_judging)
