"""The span of a page: from the address, moved and scaled, never into the future."""

from datetime import UTC, datetime, timedelta

import pytest

from labmon.api.span import Span
from labmon.screen.span import changed_span, shown_span, span_text, ways

NOW = datetime(2031, 3, 4, 12, tzinfo=UTC)


def test_without_a_span_the_last_day_is_followed():
    shown = shown_span(None, NOW)
    assert shown.is_following
    assert shown.text == "2031-03-03T12:00:00Z/2031-03-04T12:00:00Z"


def test_an_asked_span_stands_still():
    shown = shown_span("2031-03-01T00:00:00Z/P1D", NOW)
    assert (shown.text, shown.is_following, shown.fault) == ("2031-03-01T00:00:00Z/2031-03-02T00:00:00Z", False, "")


@pytest.mark.parametrize("asked", ["yesterday", "2031-03-01T00:00:00Z", "2031-03-02T00:00:00Z/2031-03-01T00:00:00Z"])
def test_an_unreadable_span_is_said_and_replaced(asked):
    shown = shown_span(asked, NOW)
    assert shown.is_following
    assert "cannot be used" in shown.fault


def test_steps_keep_the_middle_or_the_width():
    span = Span(NOW - timedelta(hours=10), NOW - timedelta(hours=6))
    assert span_text(changed_span(span, NOW, scale=0.5)) == "2031-03-04T03:00:00Z/2031-03-04T05:00:00Z"
    assert span_text(changed_span(span, NOW, move=-0.5)) == "2031-03-04T00:00:00Z/2031-03-04T04:00:00Z"
    assert changed_span(span, NOW, move=5).until_at == NOW
    assert [word for word, _ in ways(span, NOW)] == ["earlier", "later", "closer", "wider"]
