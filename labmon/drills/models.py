"""Drills: a marked false drop that goes the real way to a person; each step's time."""

from django.conf import settings
from django.db import models


class Drill(models.Model):
    """One drill. Steps without a time have not happened (yet); ``failed_step`` names the one that did not in time."""

    person = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="drills")
    person_name = models.CharField(max_length=150)
    asked_by = models.ForeignKey(settings.AUTH_USER_MODEL, models.SET_NULL, null=True, related_name="+")
    week = models.CharField(max_length=8, null=True, unique=True, help_text="2031-W10 for the weekly one; two beats make one.")
    alarm = models.ForeignKey("labmon.Alarm", models.SET_NULL, null=True, related_name="+")
    begun_at = models.DateTimeField()
    sent_at = models.DateTimeField(null=True, help_text="The false readings left for the door.")
    answered_at = models.DateTimeField(null=True, help_text="The door answered: committed.")
    reduced_at = models.DateTimeField(null=True)
    raised_at = models.DateTimeField(null=True)
    written_at = models.DateTimeField(null=True, help_text="The message was in the outbox.")
    handed_at = models.DateTimeField(null=True, help_text="The first channel took it.")
    taken_at = models.DateTimeField(null=True)
    ended_at = models.DateTimeField(null=True)
    failed_step = models.CharField(max_length=20, blank=True)
    fault = models.CharField(max_length=300, blank=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["person"], condition=models.Q(ended_at=None), name="one_drill_a_person_at_a_time"),
        ]
