"""Who may plan a run for whom: a researcher for themselves, an experiment's owner and managers for others too."""

from labmon.experiments.models import Experiment
from labmon.people.models import Person
from labmon.people.rights import Action, may, require


def require_planning(person: Person, experiment: Experiment, owner: Person | None) -> None:
    """Raises NotAllowed with a sentence unless ``person`` may plan a run of ``experiment`` that belongs to ``owner``."""
    require(person, Action.PLAN_RUN, experiment)
    if owner is not None and owner.pk != person.pk:
        require(person, Action.PLAN_FOR_OTHERS, experiment)


def may_plan_for_others(person: Person, experiment: Experiment) -> bool:
    """True if the run may belong to somebody else from the start."""
    return may(person, Action.PLAN_FOR_OTHERS, experiment)
