"""Who wrote an entry, as far as a reader may know: who touched what, and when, is personal."""

from labmon.logbook.models import LogEntry
from labmon.people.models import Person, Role
from labmon.people.rights import role_of


def author_of(entry: LogEntry, reader: Person) -> str:
    """``you``; the name to managers and to the bench's owner; to others the role."""
    if entry.by is None:
        return "labmon"
    if entry.by_id == reader.pk:
        return "you"
    if role_of(reader) is Role.MANAGER or owns_bench_of(entry, reader):
        return entry.by.username
    return f"{'an' if entry.by.role == Role.OWNER else 'a'} {entry.by.role}"


def may_answer(entry: LogEntry, reader: Person) -> bool:
    """Whether ``reader`` may change the entry, from rows that are loaded already (``actions.may_edit`` decides)."""
    role = role_of(reader)
    return role is Role.MANAGER or (role is not Role.GUEST and (entry.by_id == reader.pk or owns_bench_of(entry, reader)))


def owns_bench_of(entry: LogEntry, reader: Person) -> bool:
    """As ``rights.owns``, without a query where the bench is loaded."""
    bench = getattr(entry.station, "bench", None)
    return bench is not None and bench.owner_id == reader.pk
