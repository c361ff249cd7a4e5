"""The five people of the invented laboratory."""

from dataclasses import dataclass

from labmon.demo.benches import GUEST, MANAGER, RESEARCHER, STUDENT, TECHNICIAN
from labmon.demo.moments import moment


@dataclass(frozen=True, slots=True, kw_only=True)
class PersonPlan:
    """One person: login, full name, role of CONTRACT section 5, and for a guest the bench and the date."""

    login: str
    first_name: str
    last_name: str
    role: str
    guest_bench: str = ""
    guest_until_s: float | None = None


PEOPLE = (
    PersonPlan(login=MANAGER, first_name="Maren", last_name="Oduya-Lind", role="manager"),
    PersonPlan(login=RESEARCHER, first_name="Tobias", last_name="Quillfeather", role="researcher"),
    PersonPlan(login=STUDENT, first_name="Asha", last_name="Verrick", role="owner"),
    PersonPlan(login=TECHNICIAN, first_name="Joren", last_name="Pell", role="researcher"),
    PersonPlan(login=GUEST, first_name="Nadia", last_name="Floss", role="guest", guest_bench="V2",
               guest_until_s=moment(11, 0)),
)
"""The student owns the three benches she built (N2, N4, S2); the technician has a researcher's rights."""
