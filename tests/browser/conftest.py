"""A whole labmon under test: hashed static files, uvicorn on a free port, the session's database, and chromium."""

import os
import socket
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass

import pytest
from django.core.management import call_command
from django.test import override_settings

from tests.browser.chromium import chromium_path, launch

PLAIN = {"default": {"BACKEND": "django.core.files.storage.FileSystemStorage"}}
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


@pytest.fixture(scope="session")
def browser():
    """One chromium for all tests."""
    from playwright.sync_api import sync_playwright

    if chromium_path() is None:
        pytest.fail("chromium is missing: apt-get install chromium, or leave browser tests out with -m 'not browser'")
    # Playwright's own loop runs in this thread, and Django would take every query for one made inside a coroutine.
    os.environ["DJANGO_ALLOW_ASYNC_UNSAFE"] = "true"
    with sync_playwright() as playwright:
        chromium = launch(playwright)
        yield chromium
        chromium.close()


@pytest.fixture(scope="session")
def hashed_static() -> dict:
    """Static files collected once, without compressing them."""
    storages = PLAIN | {"staticfiles": {"BACKEND": "tests.labmon.screen.test_assets.Uncompressed"}}
    with override_settings(STORAGES=storages):
        call_command("collectstatic", interactive=False, verbosity=0)
    return storages


@dataclass
class Lab:
    """Where the lab answers, and how to sign in to it."""

    address: str

    def url(self, path: str) -> str:
        return f"{self.address}{path}"


@pytest.fixture
def lab(transactional_db, hashed_static) -> Iterator[Lab]:
    """labmon served by uvicorn from this process, on the test's database."""
    import uvicorn

    with override_settings(STORAGES=hashed_static):
        from channels.auth import AuthMiddlewareStack
        from channels.routing import URLRouter
        from django.core.asgi import get_asgi_application

        from labmon.asgi import Dispatcher, DoorApplication
        from labmon.live.routing import websocket_urlpatterns

        application = Dispatcher(
            door=DoorApplication(), pages=get_asgi_application(), live=AuthMiddlewareStack(URLRouter(websocket_urlpatterns))
        )
        with socket.create_server(("127.0.0.1", 0)) as listener:
            port = listener.getsockname()[1]
            server = uvicorn.Server(
                uvicorn.Config(application, log_level="error", ws="websockets-sansio", timeout_graceful_shutdown=1)
            )
            thread = threading.Thread(target=server.run, kwargs={"sockets": [listener]}, daemon=True)
            thread.start()
            until = time.monotonic() + 10
            while not server.started and time.monotonic() < until:
                time.sleep(0.02)
            assert server.started
            yield Lab(f"http://127.0.0.1:{port}")
            server.should_exit = True
            thread.join(timeout=15)
            assert not thread.is_alive()


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
