"""Who may do what (CONTRACT section 5): one table, one question."""

from enum import StrEnum

from django.db.models import Exists, Model, OuterRef, Q, QuerySet
from django.utils import timezone

from ingest.models import Station, Tap
from labmon.alarms.models import Alarm
from labmon.errors import NotAllowed
from labmon.experiments.models import Experiment, Limit
from labmon.people.models import Person, Role
from labmon.runs.models import Run


class Action(StrEnum):
    """What a person may want to do; the words end the sentence "you may not …"."""

    READ = "look at this"
    MAKE_OWN_KEY = "make a key of your own"
    ACKNOWLEDGE = "acknowledge alarms"
    SHELVE = "shelve alarms"
    TAKE_OUT = "take alarms out of service"
    LOG = "write in the logbook"
    PLAN_RUN = "plan runs"
    PLAN_FOR_OTHERS = "plan runs for others"
    CHANGE_RUN = "change this run"
    EXPORT = "take evidence of a run out of the lab"
    MAKE_EXPERIMENT = "make or change an experiment"
    SET_LIMIT = "set limits"
    CALIBRATE = "set zeros and calibrations"
    MAKE_STATION_KEY = "make or revoke station keys"
    IMPORT_FILE = "read files in"
    READ_AUDIT = "read the audit"
    ADD_STATION = "add stations"
    ADD_TAP = "add taps"
    SET_FLOOR = "lock the least limit of a bench"
    SET_KEEPING = "say how long raw readings are kept"
    SEE_HEALTH = "see the lab's health"
    MANAGE_PEOPLE = "add people and set their roles"
    SET_SHARED = "say what this bench shares with others"
    SEE_CALLS = "see who is on call"
    SET_CALLS = "set who is called, and how"


_GUEST = frozenset({Action.READ, Action.MAKE_OWN_KEY})
_RESEARCHER = _GUEST | {Action.ACKNOWLEDGE, Action.SHELVE, Action.LOG, Action.PLAN_RUN, Action.EXPORT, Action.SEE_CALLS}
_OWNER_OF_IT = frozenset(
    {Action.MAKE_EXPERIMENT, Action.SET_LIMIT, Action.TAKE_OUT, Action.CALIBRATE, Action.MAKE_STATION_KEY, Action.ADD_TAP,
     Action.IMPORT_FILE, Action.READ_AUDIT, Action.SET_SHARED, Action.PLAN_FOR_OTHERS}
)
_OWN_RUN = frozenset({Action.CHANGE_RUN})

#: What a role may do to whatever it sees, and what an owner may do besides to what is their own.
EVERYWHERE = {Role.GUEST: _GUEST, Role.RESEARCHER: _RESEARCHER, Role.OWNER: _RESEARCHER, Role.MANAGER: frozenset(Action)}
ON_OWN = {Role.RESEARCHER: _OWN_RUN, Role.OWNER: _OWNER_OF_IT | _OWN_RUN}


def may(person: Person, action: Action, subject: Model | None = None) -> bool:
    """True if ``person`` may do ``action`` to ``subject`` (a station, tap, experiment, limit, alarm or run).

    Without subject the question is about the lab as a whole: an owner then may what they may on any bench of their own
    only where the action asks for no bench (nothing today), so it answers for managers and for what roles may everywhere.
    """
    if not has_access(person):
        return False
    role = role_of(person)
    if action in EVERYWHERE[role]:
        return subject is None or role is not Role.GUEST or _is_named_for(person, subject)
    return subject is not None and action in ON_OWN.get(role, frozenset()) and owns(person, subject)


def require(person: Person, action: Action, subject: Model | None = None) -> None:
    """Raises NotAllowed with a sentence unless ``may``."""
    if not may(person, action, subject):
        raise NotAllowed(f"You may not {action.value}. Ask the bench's owner or a lab manager.")


def has_access(person: Person) -> bool:
    """True while the account is alive: signed in, not ended, and for a guest before their date."""
    if not (person.is_authenticated and person.is_active):
        return False
    return role_of(person) is not Role.GUEST or person.guest_until is None or person.guest_until > timezone.now()


def role_of(person: Person) -> Role:
    """The person's role; an account made by Django's createsuperuser counts as manager."""
    return Role.MANAGER if person.is_superuser else Role(person.role)


def owns(person: Person, subject: Model) -> bool:
    """True if the subject, or the bench it stands on, belongs to ``person``."""
    match subject:
        case Station():
            return Station.objects.filter(pk=subject.pk, bench__owner=person).exists()
        case Tap():
            return Station.objects.filter(pk=subject.station_id, bench__owner=person).exists()
        case Experiment():
            return subject.owner_id == person.pk
        case Limit():
            return subject.experiment.owner_id == person.pk or owns(person, subject.tap)
        case Alarm():
            return owns(person, subject.tap)
        case Run():
            return person.pk in (subject.owner_id, subject.deputy_id) or subject.experiment.owner_id == person.pk
    return False


def _is_named_for(guest: Person, subject: Model) -> bool:
    match subject:
        case Station():
            return stations_visible_to(guest).filter(pk=subject.pk).exists()
        case Tap():
            return stations_visible_to(guest).filter(pk=subject.station_id).exists()
        case Experiment():
            return experiments_visible_to(guest).filter(pk=subject.pk).exists()
        case Limit():
            return experiments_visible_to(guest).filter(pk=subject.experiment_id).exists()
        case Alarm():
            return alarms_visible_to(guest).filter(pk=subject.pk).exists()
        case Run():
            return experiments_visible_to(guest).filter(pk=subject.experiment_id).exists()
    return False


def stations_visible_to(person: Person) -> QuerySet[Station]:
    """All stations but that of drills; for a guest only the named ones, until their date."""
    if not has_access(person):
        return Station.objects.none()
    return person.guest_stations.all() if role_of(person) is Role.GUEST else Station.objects.exclude(bench__is_drill=True)


def taps_visible_to(person: Person) -> QuerySet[Tap]:
    """Taps of visible stations."""
    if not has_access(person):
        return Tap.objects.none()
    if role_of(person) is Role.GUEST:
        return Tap.objects.filter(station__guests=person)
    return Tap.objects.exclude(station__bench__is_drill=True)


def experiments_visible_to(person: Person) -> QuerySet[Experiment]:
    """All experiments; for a guest those that watch named benches and nothing else."""
    if not has_access(person):
        return Experiment.objects.none()
    watched = Experiment.taps.through.objects.filter(experiment=OuterRef("pk"))
    if role_of(person) is not Role.GUEST:
        return Experiment.objects.filter(~Exists(watched.filter(tap__station__bench__is_drill=True)))
    hidden = watched.exclude(tap__station__in=person.guest_stations.values("pk"))
    return Experiment.objects.filter(Exists(watched), ~Exists(hidden))


def alarms_visible_to(person: Person) -> QuerySet[Alarm]:
    """Alarms of visible taps; for a guest not those of experiments they do not see."""
    if not has_access(person):
        return Alarm.objects.none()
    if role_of(person) is not Role.GUEST:
        return Alarm.objects.all()
    return Alarm.objects.filter(
        Q(experiment=None) | Q(experiment__in=experiments_visible_to(person)), tap__in=taps_visible_to(person)
    )
