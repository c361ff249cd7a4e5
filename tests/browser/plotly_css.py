"""Makes plotly.css from the vendored bundle: the rules it would write into the page itself, in their order.

A strict content security policy blocks written-in styles, so the page brings them as a file. Run
``python -m tests.browser.plotly_css`` after changing the bundle; test_plotly_css.py checks that the file still matches.
"""

from pathlib import Path

from playwright.sync_api import Browser, sync_playwright

from tests.browser.chromium import launch

VENDOR = Path(__file__).resolve().parents[2] / "labmon" / "static" / "labmon" / "vendor"
BUNDLE = VENDOR / "plotly-cartesian.min.js"
SHEET = VENDOR / "plotly.css"
# The bundle hides the focus ring of its inputs; WCAG 2.2, success criterion 2.4.7, wants it seen.
HIDES_FOCUS = "focus"


def rules_in(browser: Browser, bundle: Path) -> list[str]:
    """The rules, as Chromium reads them back, without the one that hides the focus ring."""
    page = browser.new_page()
    page.set_content("<!doctype html><title>plotly</title>")
    page.add_script_tag(path=str(bundle))
    rules = page.evaluate("[...document.getElementById('plotly.js-style-global').sheet.cssRules].map(r => r.cssText)")
    page.close()
    return [rule for rule in rules if not (HIDES_FOCUS in rule.split("{")[0] and "outline" in rule)]


def main() -> None:
    with sync_playwright() as playwright:
        browser = launch(playwright)
        rules = rules_in(browser, BUNDLE)
        browser.close()
    SHEET.write_text(
        "/* Made by tests/browser/plotly_css.py from plotly-cartesian.min.js; MIT, see plotly.LICENSE. */\n"
        + "\n".join(rules)
        + "\n"
    )


if __name__ == "__main__":
    main()
