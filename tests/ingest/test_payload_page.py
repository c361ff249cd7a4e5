"""The examples of docs/payload.md and of the README do what the pages say."""

import json
import re
import subprocess
import types
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from ingest.models import StationBoot
from ingest.times import now_us
from tests.ingest.door.test_over_uvicorn import free_port, server

ROOT = Path(__file__).resolve().parents[2]
PAGE = (ROOT / "docs" / "payload.md").read_text()
BLOCKS = re.findall(r"^```(\w+)(?: (\w+))?\n(.*?)^```", PAGE, re.MULTILINE | re.DOTALL)


def blocks(kind):
    return [text for _, word, text in BLOCKS if word == kind]


def filled(text):
    """The example with its moments of time put in."""
    now = datetime.now(UTC)
    for mark, at in (("{now}", now), ("{now-1s}", now - timedelta(seconds=1)), ("{now-2s}", now - timedelta(seconds=2))):
        text = text.replace(mark, at.strftime("%Y-%m-%dT%H:%M:%S.%fZ"))
    return json.loads(text)


def test_each_example_is_answered_as_the_page_says(sender):
    examples = [(word, text) for language, word, text in BLOCKS if language == "json"]
    assert [word for word, _ in examples] == ["send", "answer", "send", "answer", "send", "problem"]
    for (_, sent), (word, said) in zip(examples[::2], examples[1::2], strict=True):
        response = sender.post(filled(sent))
        answer, expected = response.json(), json.loads(said)
        assert response.status_code == (200 if word == "answer" else expected["status"])
        assert {name: answer[name] for name in expected} == expected
        assert set(answer) - set(expected) <= {"server_time", "type"}
    assert not StationBoot.objects.filter(boot="7f3a9c21", is_server_timed=True).exists()


def test_the_msgpack_example(sender):
    names = {"start_us": now_us()}
    exec(blocks("msgpack")[0], names)  # noqa: S102  our own page
    answer = sender.send(names["body"], headers={"Content-Type": "application/msgpack"})
    assert answer["stored"] == 500 and answer["through"] == {"eom-in": 499}


def test_the_stream_example(sender):
    port = free_port()
    names = {"address": f"ws://127.0.0.1:{port}", "key": sender.key}
    with server(port, "labmon.asgi"):
        exec(blocks("stream")[0], names)  # noqa: S102  our own page
    assert names["answer"]["through"] == {"eom-in": 0}


def test_the_curl_line(sender):
    command = next(text for language, _, text in BLOCKS if language == "sh")
    port = free_port()
    with server(port):
        done = subprocess.run(
            ["sh", "-c", command.replace("8000", str(port))],
            env={"KEY": sender.key, "PATH": "/usr/bin:/bin"},
            capture_output=True,
            text=True,
            timeout=30,
            check=True,
        )
    assert json.loads(done.stdout)["stored"] == 1


class BoardStops(BaseException):
    """Ends the endless loop of a board."""


def board_program(page):
    """The fenced program that imports urequests."""
    return next(text for text in re.findall(r"^```python.*?\n(.*?)^```", page, re.MULTILINE | re.DOTALL) if "urequests" in text)


def run_board(program, post, turns):
    """Run a MicroPython program here: its modules stand in for the board's, ``post`` for the radio.

    Its clock runs a second a turn while ours hardly moves, so the order of placed times says nothing here.
    """
    state = {"turn": 0, "ms": 5_000}

    def sleep(seconds):
        state["turn"] += 1
        state["ms"] += int(1000 * seconds)
        if state["turn"] >= turns:
            raise BoardStops

    modules = {
        "time": types.SimpleNamespace(ticks_ms=lambda: state["ms"], sleep=sleep),
        "ubinascii": __import__("binascii"),
        "os": __import__("os"),
        "urequests": types.SimpleNamespace(post=post),
    }
    true_import = __import__

    def board_import(name, *arguments):
        return modules[name] if name in modules else true_import(name, *arguments)

    names = {"__builtins__": {**__builtins__, "__import__": board_import}, "read_port": lambda number: 10.0 ** -(3 * number)}
    with pytest.raises(BoardStops):
        exec(program, names)  # noqa: S102  our own page
    return names


@pytest.mark.parametrize("page", ["docs/payload.md", "README.md"])
def test_the_board_program_loses_nothing_that_it_holds(sender, page):
    """The network is away for a while, and answers get lost: in the end every reading is stored once, and none held."""
    program = board_program((ROOT / page).read_text())
    assert len(program.strip().splitlines()) <= 13
    turn = iter(range(1000))

    def post(url, json, headers):
        number = next(turn)
        if number % 7 in (2, 3):
            raise OSError("no network")
        response = sender.post(json, headers={"Authorization": f"Bearer {sender.key}"})
        if number % 7 == 5:
            raise OSError("the answer is lost")
        return response

    names = run_board(program, post, turns=30)
    stored = sender.stored()
    assert sorted(stored.sequence.tolist()) == list(range(30)) and names["held"] == []
    assert stored.is_server_timed.all()


@pytest.mark.parametrize("page", ["docs/payload.md", "README.md"])
def test_a_board_whose_memory_ran_full_goes_on(sender, page):
    """Readings that a board had to drop leave a hole; it must not send the same batch for ever."""
    program = board_program((ROOT / page).read_text()).replace("2000", "20")
    turn = iter(range(1000))

    def post(url, json, headers):
        if 5 <= next(turn) < 60:
            raise OSError("no network")
        return sender.post(json, headers={"Authorization": f"Bearer {sender.key}"})

    names = run_board(program, post, turns=80)
    assert sorted(sender.stored().sequence.tolist()) == [*range(5), *range(41, 80)] and names["held"] == []
