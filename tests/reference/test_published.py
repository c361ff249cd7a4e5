"""Each published value is met within its tolerance, and docs/published.md says what the code computes today."""

import pytest

from tests.reference.published.case import Case
from tests.reference.published.table import PAGE, cases_by_topic, page

CASES = [case for cases in cases_by_topic().values() for case in cases]


@pytest.mark.parametrize("case", CASES, ids=[case.name for case in CASES])
def test_published_value_is_met(case: Case):
    """Source: in the case."""
    assert case.source and abs(float(case.compute()) - case.published) <= case.tolerance


def test_names_are_given_once():
    """A value is found by its name."""
    names = [case.name for case in CASES]
    assert len(set(names)) == len(names)


def test_page_is_what_the_command_writes():
    """Run ``make published`` after a change."""
    assert PAGE.read_text(encoding="utf-8") == page()
