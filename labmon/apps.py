from django.apps import AppConfig


class LabmonConfig(AppConfig):
    name = "labmon"
    default_auto_field = "django.db.models.BigAutoField"

    def ready(self) -> None:
        """Register the system checks."""
        import labmon.checks  # noqa: F401  (its import registers them)
