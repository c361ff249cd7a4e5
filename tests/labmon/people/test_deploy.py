"""``manage.py check --deploy`` is clean for a lab behind TLS, and says what is missing for one that is not."""

import os
import subprocess
import sys

import pytest
from django.conf import settings

WHOLE = {"LABMON_BEHIND_TLS": "1", "LABMON_SECRET_KEY": "a0".join(map(str, range(10, 40))), "LABMON_HOSTS": "lab.example",
         "LABMON_PUBLIC_URL": "https://lab.example", "LABMON_MAIL_HOST": "mail.lab.example"}


def checked(**environment):
    clean = {name: value for name, value in os.environ.items() if name not in {"DJANGO_SETTINGS_MODULE"}}
    return subprocess.run([sys.executable, "manage.py", "check", "--deploy"], env=clean | environment, cwd=settings.BASE_DIR,
                          capture_output=True, text=True, check=False)


def test_behind_tls_nothing_is_left_to_say():
    said = checked(**WHOLE)
    assert said.returncode == 0 and "no issues" in said.stdout + said.stderr, said.stderr


@pytest.mark.parametrize(("changes", "code"), [
    ({"LABMON_BEHIND_TLS": "0"}, "labmon.W003"), ({"LABMON_BEHIND_TLS": "0"}, "security.W012"),
    ({"LABMON_DEBUG": "1"}, "security.W018"),
])
def test_what_is_wrong_is_named(changes, code):
    assert code in checked(**WHOLE | changes).stderr
