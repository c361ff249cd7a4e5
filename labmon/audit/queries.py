"""Reading the audit: managers all of it, owners their own benches'."""

from django.db.models import Q

from ingest.models import Tap
from labmon.audit.models import AuditEntry
from labmon.experiments.models import Experiment, Limit
from labmon.people.models import Person, Role
from labmon.people.rights import has_access, role_of
from labmon.runs.models import Run


def audit_rows(person: Person, *, subject: str | None = None, before_id: int | None = None, limit: int = 100) -> list[AuditEntry]:
    """Newest first; ``before_id`` pages on."""
    rows = AuditEntry.objects.filter(_readable_by(person))
    if subject is not None:
        rows = rows.filter(subject=subject)
    if before_id is not None:
        rows = rows.filter(pk__lt=before_id)
    return list(rows.order_by("-pk")[:limit])


def _readable_by(person: Person) -> Q:
    nothing = Q(pk=None)
    if not has_access(person):
        return nothing
    if role_of(person) is Role.MANAGER:
        return Q()
    if role_of(person) is not Role.OWNER:
        return nothing
    taps = Tap.objects.filter(station__bench__owner=person).values_list("station__name", "name")
    experiments = Experiment.objects.filter(owner=person).values_list("pk", flat=True)
    limits = Limit.objects.filter(Q(experiment__owner=person) | Q(tap__station__bench__owner=person)).values_list("pk", flat=True)
    runs = Run.objects.filter(Q(experiment__owner=person) | Q(owner=person)).values_list("pk", flat=True)
    stations = {station for station, _ in taps} | set(person.benches.values_list("station__name", flat=True))
    return Q(
        subject__in=[
            *(f"tap/{station}/{tap}" for station, tap in taps),
            *(f"station/{one}" for one in stations),
            *(f"experiment/{one}" for one in experiments),
            *(f"limit/{one}" for one in limits),
            *(f"run/{one}" for one in runs),
        ]
    )
