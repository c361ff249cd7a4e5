"""A whole labmon under test: its web process on a free port, the session's engines, and chromium."""

import os
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass
from urllib.parse import urlsplit, urlunsplit

import httpx
import pytest
from django.conf import settings
from django.db import connection

from tests.browser.chromium import chromium_path, launch

WATCH = """
window.violations = [];
document.addEventListener('securitypolicyviolation',
  (event) => window.violations.push(`${event.violatedDirective} ${event.sourceFile}:${event.lineNumber}`));
"""


def pytest_collection_modifyitems(items):
    """Every test here needs a browser."""
    for item in items:
        if "tests/browser/" in item.nodeid:
            item.add_marker(pytest.mark.browser)


@pytest.fixture(scope="module")
def browser():
    """One chromium for a module's tests; Playwright's loop must be gone before a test of another module runs its own."""
    from playwright.sync_api import sync_playwright

    if chromium_path() is None:
        pytest.fail("chromium is missing: apt-get install chromium, or leave browser tests out with -m 'not browser'")
    # Playwright's own loop runs in this thread, and Django would take every query for one made inside a coroutine.
    with pytest.MonkeyPatch.context() as environment, sync_playwright() as playwright:
        environment.setenv("DJANGO_ALLOW_ASYNC_UNSAFE", "true")
        chromium = launch(playwright)
        yield chromium
        chromium.close()


@dataclass
class Lab:
    """Where the lab answers, and how to sign in to it."""

    address: str

    def url(self, path: str) -> str:
        return f"{self.address}{path}"


@pytest.fixture
def lab(transactional_db, collected_static) -> Iterator[Lab]:
    """labmon's web process as users run it, on the test's database, broker and static files."""
    with socket.create_server(("127.0.0.1", 0)) as listener:
        environ = os.environ | {
            "LABMON_DATABASE_URL": database_url_of_test(),
            "LABMON_STATIC": str(collected_static),
            "LABMON_LOG_LEVEL": "ERROR",
        }
        process = subprocess.Popen(
            [sys.executable, "-m", "labmon.web", "--socket", str(listener.fileno())],
            env=environ,
            pass_fds=[listener.fileno()],
            cwd=settings.BASE_DIR,
        )
        address = f"http://127.0.0.1:{listener.getsockname()[1]}"
        try:
            wait_for(f"{address}/login/", process)
            yield Lab(address)
        finally:
            process.terminate()
            process.wait(timeout=20)


def database_url_of_test() -> str:
    """The session's database address with the name of the test database."""
    parts = urlsplit(os.environ["LABMON_DATABASE_URL"])
    return urlunsplit(parts._replace(path=f"/{connection.settings_dict['NAME']}"))


def wait_for(address: str, process: subprocess.Popen) -> None:
    """Until the page answers."""
    until = time.monotonic() + 30
    while time.monotonic() < until:
        assert process.poll() is None, "the web process ended"
        with suppress(httpx.TransportError):
            answer = httpx.get(address, timeout=5)
            assert answer.status_code == 200, answer.text
            return
        time.sleep(0.05)
    pytest.fail(f"{address} did not answer within 30 s")


@pytest.fixture
def page(browser, lab):
    """A page in a context of its own, wide; violations of the policy and script errors fail the test."""
    context = browser.new_context(viewport={"width": 1280, "height": 900}, timezone_id="UTC")
    context.add_init_script(WATCH)
    opened = context.new_page()
    errors: list[str] = []
    opened.on("pageerror", lambda error: errors.append(str(error)))
    yield opened
    violations = opened.evaluate("window.violations || []")
    context.close()
    assert errors == []
    # plotly sets style="" on some of its own elements: seen, harmless, and the only thing let pass.
    assert [one for one in violations if not (one.startswith("style-src-attr") and "plotly" in one)] == []


@pytest.fixture
def signed_in(page, lab, django_user_model):
    """Signs a person in by the form: ``signed_in(person)`` gives the page."""

    def sign_in(person):
        person.set_password("a password for tests")
        person.save()
        page.goto(lab.url("/login/"))
        page.fill("#id_username", person.username)
        page.fill("#id_password", "a password for tests")
        page.click("button.first")
        page.wait_for_url(lab.url("/"))
        return page

    return sign_in
