"""The style sheet beside the plotting library is what the library would have written itself."""

from tests.browser.plotly_css import BUNDLE, SHEET, rules_in


def test_the_sheet_matches_the_bundle(browser):
    made = SHEET.read_text().splitlines()[1:]
    assert rules_in(browser, BUNDLE) == made
    assert len(made) > 50
    assert not [rule for rule in made if "focus {" in rule.replace(":focus-within", "") and "outline" in rule]
