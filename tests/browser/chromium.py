"""Debian's chromium, started so that it talks to nobody but the page under test."""

import shutil
from typing import Any

from playwright.sync_api import Browser, Playwright

FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-default-apps",
    "--no-first-run",
    "--disable-extensions",
    "--disable-domain-reliability",
    "--disable-client-side-phishing-detection",
    "--metrics-recording-only",
    "--no-default-browser-check",
    "--disable-features=OptimizationHints,MediaRouter,Translate",
    "--host-resolver-rules=MAP * ~NOTFOUND, EXCLUDE 127.0.0.1, EXCLUDE localhost",
]


def chromium_path() -> str | None:
    """Where chromium is, or None."""
    return shutil.which("chromium") or shutil.which("chromium-browser")


def launch(playwright: Playwright, **options: Any) -> Browser:
    """A headless browser.

    Raises:
        RuntimeError: There is no chromium.
    """
    path = chromium_path()
    if path is None:
        raise RuntimeError("chromium is missing; install it with: apt-get install chromium")
    return playwright.chromium.launch(executable_path=path, headless=True, args=FLAGS, **options)
