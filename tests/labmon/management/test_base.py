"""Commands say in one line that no lab is running."""

import pytest
from django.core.management import CommandError
from django.db import OperationalError, connection

from labmon.management.base import LabCommand


class Command(LabCommand):
    def handle(self, *args, **options):
        return "ran"


def run():
    return Command().execute(force_color=False, no_color=True, skip_checks=True, stdout=None, stderr=None)


@pytest.mark.django_db
def test_command_runs_on_a_running_lab(capsys):
    assert run() == "ran"


def test_no_services_known(settings):
    settings.HAS_SERVICES = False
    with pytest.raises(CommandError) as caught:
        run()
    assert str(settings.DATA_DIR) in str(caught.value)
    assert "run_lab" in str(caught.value)
    assert "\n" not in str(caught.value)


def test_database_that_does_not_answer(monkeypatch):
    def refuse():
        raise OperationalError("connection refused\nmore lines")

    monkeypatch.setattr(connection, "ensure_connection", refuse)
    with pytest.raises(CommandError) as caught:
        run()
    assert "connection refused" in str(caught.value)
    assert "LABMON_DATABASE_URL" in str(caught.value)
    assert "\n" not in str(caught.value)
