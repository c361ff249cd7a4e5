"""The notebook client's front door: ``from labmon_notebook import Lab``."""

from labmon_notebook.faults import LabAway, LabFault, NotAllowed, NotSignedIn, NotThere, WrongQuestion
from labmon_notebook.lab import Lab
from labmon_notebook.readings import NotKept

__all__ = ["Lab", "LabAway", "LabFault", "NotAllowed", "NotKept", "NotSignedIn", "NotThere", "WrongQuestion"]
