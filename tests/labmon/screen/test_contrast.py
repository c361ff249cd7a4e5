"""Contrast of every pair of colours the sheet uses, by WCAG 2.2's own formula (success criteria 1.4.3 and 1.4.11)."""

import re
from pathlib import Path

import pytest

SHEET = Path(__file__).resolve().parents[3] / "labmon" / "static" / "labmon" / "css" / "lab.css"
TEXT = ["ink", "soft", "below", "thin", "link"]
MARKS = ["calm", "limit", "rule", "below"]


def palettes() -> dict[str, dict[str, str]]:
    css = SHEET.read_text()
    day, night = (
        dict(re.findall(r"--([\w-]+): (#[0-9a-f]{6})", block)) for block in re.findall(r":root \{(.*?)\}", css, re.S)[:2]
    )
    return {"light": day, "dark": day | night}


def luminance(colour: str) -> float:
    """Relative luminance, WCAG 2.2, definition of that name."""
    channels = [int(colour[start : start + 2], 16) / 255 for start in (1, 3, 5)]
    red, green, blue = (channel / 12.92 if channel <= 0.04045 else ((channel + 0.055) / 1.055) ** 2.4 for channel in channels)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def contrast(one: str, other: str) -> float:
    low, high = sorted((luminance(one), luminance(other)))
    return (high + 0.05) / (low + 0.05)


def test_the_formula_gives_the_known_ends():
    """Black on white is 21:1; #767676 on white is the known least grey, 4.54:1 (WCAG technique G18, from memory)."""
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    assert contrast("#767676", "#ffffff") == pytest.approx(4.54, abs=0.005)


@pytest.mark.parametrize("theme", ["light", "dark"])
@pytest.mark.parametrize("ground", ["ground", "sheet"])
def test_text_stands_out(theme, ground):
    colours = palettes()[theme]
    ratios = {name: contrast(colours[name], colours[ground]) for name in TEXT}
    assert min(ratios.values()) >= 4.5, ratios


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_marks_and_controls_stand_out(theme):
    colours = palettes()[theme]
    ratios = {name: contrast(colours[name], colours["sheet"]) for name in MARKS}
    ratios["thin mark by its edge"] = contrast(colours["thin"], colours["sheet"])
    assert min(ratios.values()) >= 3.0, ratios
    assert contrast(colours["act-ink"], colours["act"]) >= 4.5


def test_the_night_is_a_warm_ground():
    """Red above green above blue in both night grounds."""
    night = palettes()["dark"]
    for name in ("ground", "sheet"):
        red, green, blue = (int(night[name][start : start + 2], 16) for start in (1, 3, 5))
        assert red > green > blue
