from django.apps import AppConfig


class LabmonConfig(AppConfig):
    name = "labmon"
    default_auto_field = "django.db.models.BigAutoField"
