"""From running services to a usable lab; every step may be repeated."""

import json

import pytest
from django.core.management import call_command
from django.core.management.base import SystemCheckError
from django.db import connection

from labmon.audit.models import AuditEntry
from labmon.engines import prepare
from labmon.people.models import Person, Role


@pytest.fixture
def said():
    return []


@pytest.mark.django_db
def test_nothing_to_migrate_is_seen(said):
    assert prepare.migrate(said.append) == 0
    assert said == []


@pytest.mark.django_db(transaction=True)
def test_missing_migration_is_applied(said):
    with connection.cursor() as cursor:
        cursor.execute("delete from django_migrations where app = 'sessions'")
        cursor.execute("drop table django_session")
    assert prepare.migrate(said.append) == 1
    assert said == ["applying 1 migrations"]
    assert "django_session" in connection.introspection.table_names()


@pytest.mark.django_db
def test_first_login_is_made_once_and_leaves_its_audit_row():
    lines = prepare.first_login()
    password = lines[0].split("password ")[1].split()[0]
    person = Person.objects.get()
    assert person.role == Role.MANAGER
    assert person.check_password(password)
    assert AuditEntry.objects.count() == 1
    assert prepare.first_login() == []
    assert Person.objects.count() == 1


def test_static_files_are_collected_when_one_changes(settings, tmp_path, said):
    sources = tmp_path / "sources"
    sources.mkdir()
    (sources / "a.css").write_text("a {}")
    settings.STATICFILES_DIRS = [sources]
    settings.STATICFILES_FINDERS = ["django.contrib.staticfiles.finders.FileSystemFinder"]
    settings.STATIC_ROOT = tmp_path / "root"
    assert prepare.collect_static(said.append)
    assert (tmp_path / "root" / "staticfiles.json").is_file()
    assert not prepare.collect_static(said.append)
    (sources / "a.css").write_text("b {}")
    assert prepare.collect_static(said.append)
    names = json.loads((tmp_path / "root" / "staticfiles.json").read_text())["paths"]
    assert (tmp_path / "root" / names["a.css"]).read_text() == "b {}"


def test_checks_that_are_errors_stop_the_start(settings, said):
    settings.PUBLIC_URL = "nowhere"
    with pytest.raises(SystemCheckError):
        prepare.tell_checks(said.append)
    assert any("labmon.E002" in line for line in said)


@pytest.mark.django_db
def test_command_ends_with_one_json_line(capsys, settings):
    settings.IS_SECRET_KEY_KEPT = True
    call_command("prepare_lab")
    last = capsys.readouterr().out.strip().splitlines()[-1]
    assert list(json.loads(last)["prepared"]) == ["login"]
