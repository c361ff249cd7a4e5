"""The slip's texts work as printed: the client reads its settings, the line by hand and the board's text reach a real door."""

import json
import shlex
import sys
import types

import pytest
from labmon_bench.settings import read_settings

from labmon.screen.slip_text import BOARD_LINES, SlipTap, board_text, curl_line, settings_text
from tests.ingest.conftest import sender  # noqa: F401  the fixture of the door's own tests

TAPS = [SlipTap("eom-in", "two-port", 1.0), SlipTap("head", "stokes", 0.5), SlipTap("air", "climate", None),
        SlipTap("leak", "dark-port", 2.0)]
ADDRESS = "http://192.0.2.10:8000/api/v1/readings"


def test_the_bench_client_reads_its_settings(tmp_path):
    (tmp_path / "bench.ini").write_text(settings_text(TAPS, door="http://192.0.2.10:8000"))
    read = read_settings(tmp_path / "bench.ini")
    assert read.door == "http://192.0.2.10:8000"
    assert [(tap.tap, tap.read_every_s) for tap in read.taps] == [("eom-in", 1.0), ("head", 0.5), ("air", 1.0), ("leak", 2.0)]
    assert read.taps[1].source.ask[0].columns == ("s0", "s1", "s2", "s3")


@pytest.mark.parametrize("tap", TAPS)
def test_the_reading_by_hand_is_a_body_of_its_kind(tap):
    words = shlex.split(curl_line(tap, address=ADDRESS, key="KEY"))
    assert words[0] == "curl" and words[-1] == ADDRESS and "Authorization: Bearer KEY" in words
    columns = json.loads(words[words.index("-d") + 1])["taps"][tap.name]
    assert all(len(values) == 1 for values in columns.values())


def test_the_boards_text_has_twelve_lines_and_each_fits_a_page():
    text = board_text(TAPS[0], address=ADDRESS, key="x" * 43)
    assert len(text.splitlines()) == BOARD_LINES
    assert max(map(len, text.splitlines())) <= 150


class Rounds(Exception):
    """The board was unplugged."""


@pytest.mark.django_db(transaction=True)
def test_the_boards_text_sends_and_forgets_only_what_was_acknowledged(sender, monkeypatch):  # noqa: F811
    """Run as it stands on this Python, with the board's libraries put in: one round without a network, then three with."""
    rounds, answers = [], []

    def post(address, data, headers):
        assert address == ADDRESS
        if not answers:
            answers.append(None)
            raise OSError("no network")
        answer = sender.post(data.encode(), headers=headers)
        answers.append(answer)
        return answer

    def sleep(seconds):
        rounds.append(seconds)
        if len(rounds) == 4:
            raise Rounds

    monkeypatch.setitem(sys.modules, "requests", types.SimpleNamespace(post=post))
    monkeypatch.setitem(sys.modules, "ports", types.SimpleNamespace(read_ports=lambda: (1e-3 + 1e-6 * len(rounds), 1.1e-6)))
    monkeypatch.setattr("time.sleep", sleep)
    with pytest.raises(Rounds):
        exec(board_text(SlipTap("eom-in", "two-port", 1.0), address=ADDRESS, key=sender.key), {})  # noqa: S102
    assert [answer.json()["stored"] for answer in answers[1:]] == [2, 1, 1]
    assert sum(answer.json()["known"] for answer in answers[1:]) == 0
    assert rounds == [1.0] * 4
