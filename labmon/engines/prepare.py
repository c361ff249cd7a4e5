"""What stands between running services and a usable lab: tables, static files, a first login."""

import hashlib
import secrets
import shutil
from collections.abc import Callable
from pathlib import Path

from django.conf import settings
from django.contrib.staticfiles.finders import get_finders
from django.core.checks import run_checks
from django.core.management import call_command
from django.core.management.base import SystemCheckError
from django.db import connection
from django.db.migrations.executor import MigrationExecutor

from labmon.checks import TAG
from labmon.people.actions import add_person
from labmon.people.models import Person, Role

Say = Callable[[str], None]
MIGRATE_LOCK = 0x6C61626D_6D696772        # "labmmigr", an advisory lock: several hosts may start at once
FIRST_LOGIN = "manager"


def tell_checks(say: Say) -> None:
    """Say what labmon's own checks find.

    Raises:
        SystemCheckError: One of them is an error.
    """
    found = run_checks(tags=[TAG], include_deployment_checks=True)
    for message in found:
        say(f"{message.id}: {message.msg} {message.hint}")
    if any(message.is_serious() for message in found):
        raise SystemCheckError("The settings cannot be used; the lines above say why.")


def migrate(say: Say) -> int:
    """Apply what is missing; returns the number of migrations applied."""
    with connection.cursor() as cursor:
        cursor.execute("select pg_advisory_lock(%s)", [MIGRATE_LOCK])
        try:
            executor = MigrationExecutor(connection)
            missing = executor.migration_plan(executor.loader.graph.leaf_nodes())
            if missing:
                say(f"applying {len(missing)} migrations")
                call_command("migrate", verbosity=0, interactive=False)
        finally:
            cursor.execute("select pg_advisory_unlock(%s)", [MIGRATE_LOCK])
    return len(missing)


def static_state() -> str:
    """A digest of every static file's name and content, and of the storage that renames them."""
    digest = hashlib.sha256(settings.STORAGES["staticfiles"]["BACKEND"].encode())
    for finder in get_finders():
        for name, storage in sorted(finder.list(ignore_patterns=[]), key=lambda found: found[0]):
            digest.update(name.encode() + b"\0" + hashlib.sha256(Path(storage.path(name)).read_bytes()).digest())
    return digest.hexdigest()


def collect_static(say: Say) -> bool:
    """Collect static files if one has changed since; True if it did."""
    root = Path(settings.STATIC_ROOT)
    mark = root / "collected-from"
    state = static_state()
    if mark.is_file() and mark.read_text() == state:
        return False
    say("collecting static files")
    shutil.rmtree(root, ignore_errors=True)
    root.mkdir(parents=True)
    call_command("collectstatic", verbosity=0, interactive=False)
    mark.write_text(state)
    return True


def first_login() -> list[str]:
    """Make a manager where there is none yet; the password is shown once, in these lines, and kept nowhere."""
    if Person.objects.filter(role=Role.MANAGER, is_active=True).exists():
        return []
    password = secrets.token_urlsafe(12)
    add_person(FIRST_LOGIN, Role.MANAGER, password=password)
    return [f"Sign in as {FIRST_LOGIN} with the password {password} (shown this once).",
            f"Change it with: manage.py changepassword {FIRST_LOGIN} --data {settings.DATA_DIR}"]
