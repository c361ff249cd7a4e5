"""The rail places benches by margin on one scale, names the abnormal ones, and parks the silent."""

import re
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as st

from labmon.screen.rail import GUTTER_PERCENT, HIGH_DB, LIMIT_PERCENT, LOW_DB, Mark, axis, room_rail, short_mark, x_percent
from labmon.screen.standing import Standing

SVG = "{http://www.w3.org/2000/svg}"


def mark(name="n2", standing=Standing.BELOW, margin_db=-0.6, **fields) -> Mark:
    return Mark(
        **{"name": name, "href": f"/stations/{name}/", "standing": standing, "margin_db": margin_db, "label": "−0.8° −0.6 dB"}
        | fields
    )


def tree_of(svg: str) -> ElementTree.Element:
    return ElementTree.fromstring(svg.replace("<svg", '<svg xmlns="http://www.w3.org/2000/svg"', 1))


@given(st.floats(-100, 100), st.floats(-100, 100))
def test_more_margin_never_stands_further_left(one, other):
    assert (x_percent(one) - x_percent(other)) * (one - other) >= 0
    assert GUTTER_PERCENT <= x_percent(one) <= 100


def test_the_limit_is_where_the_margin_is_zero_and_the_ends_hold():
    assert LIMIT_PERCENT == x_percent(0.0)
    assert x_percent(LOW_DB - 5) == x_percent(LOW_DB) == GUTTER_PERCENT
    assert x_percent(HIGH_DB + 5) == x_percent(HIGH_DB)


def test_an_abnormal_bench_is_named_with_both_margins_and_linked():
    link = tree_of(room_rail("North Hall", [mark()])).find(f"{SVG}a")
    assert link.get("href") == "/stations/n2/"
    assert "".join(link.itertext()) == "n2 −0.8° −0.6 dB"
    assert link.find(f"{SVG}use").get("href") == "#mark-below"


def test_calm_benches_share_one_path_of_ticks():
    svg = room_rail("Vault", [mark(f"v{index}", Standing.WITHIN, 4.0 + index) for index in range(5)])
    assert svg.count("<a") == 0
    assert len(re.findall(r"M[\d.]+ 26v13", svg)) == 5


def test_a_silent_bench_stands_in_the_gutter_whatever_it_last_read():
    svg = room_rail("South Hall", [mark("s3", Standing.NO_READING, 3.0)])
    x = float(re.search(r'#mark-no-reading" x="([\d.]+)%', svg).group(1))
    assert x < GUTTER_PERCENT


def test_many_silent_benches_are_counted():
    svg = room_rail("South Hall", [mark(f"s{index}", Standing.NO_READING, None) for index in range(7)])
    assert "7 silent" in svg
    assert svg.count("#mark-no-reading") == 3


def test_names_never_overlap_on_their_level():
    marks = [mark(f"bench-{index:02d}", Standing.THIN, index * 0.1) for index in range(30)]
    spans: dict[str, list[tuple[float, float]]] = {}
    for x, y, anchor, text in re.findall(r'x="([\d.]+)%" y="(\d+)" text-anchor="(\w+)">([^<]+)<', room_rail("R", marks)):
        width = len(text) * 0.82
        start = {"middle": float(x) - width / 2, "start": float(x), "end": float(x) - width}[anchor]
        spans.setdefault(y, []).append((start, start + width))
    assert spans
    for level in spans.values():
        level.sort()
        assert all(before[1] <= after[0] + 0.11 for before, after in zip(level, level[1:], strict=False))


def test_a_doubtful_mark_is_hollow():
    assert "#mark-thin-hollow" in short_mark(mark(standing=Standing.THIN, is_doubtful=True))
    assert short_mark(mark(standing=Standing.WITHIN)) == ""


@pytest.mark.parametrize("name", ["<script>", 'a"b', "a&b"])
def test_names_are_escaped(name):
    svg = room_rail(name, [mark(name)])
    assert tree_of(svg).get("aria-label").startswith(name)


def test_the_group_says_what_a_picture_shows():
    svg = room_rail("North Hall", [mark(), mark("n1", Standing.WITHIN, 5.0), mark("n3", Standing.WITHIN, 6.0)])
    assert tree_of(svg).get("aria-label") == "North Hall: n2 below limit −0.8° −0.6 dB; 2 as wanted"


def test_the_axis_names_the_limit():
    assert "limit" in "".join(tree_of(axis()).itertext())
