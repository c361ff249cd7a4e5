"""The programs of docs/boards.md do what the page says, against a real door."""

import math
import os
import random
import re
import shutil
import subprocess
import types

import pytest

from tests.clients.bench.conftest import ROOT, free_port, server
from tests.running_lab import until_true

PAGE = (ROOT / "docs" / "boards.md").read_text()
PYTHON, C = (re.search(rf"^```{language} board\n(.*?)^```", PAGE, re.MULTILINE | re.DOTALL)[1] for language in ("python", "c"))


class BoardStops(BaseException):
    """Ends the endless loop of a board."""


class Board:
    """Stands in for a MicroPython board: its clock moves with each conversion (0.3 ms), its light hums at twice 50 Hz."""

    HUM_W, LEVEL_W = 2e-4, 1e-3

    def __init__(self, post, turns):
        self.us, self.turn, self.turns, self.began_us = 5_000_000, 0, turns, []
        self.time = types.SimpleNamespace(sleep_us=self.wait, sleep_ms=self.sleep_ms, ticks_us=lambda: self.us,
                                          ticks_ms=lambda: self.us // 1000, ticks_diff=lambda one, other: one - other)
        self.modules = {"time": self.time, "ubinascii": __import__("binascii"), "os": os, "random": random.Random(1),
                        "urequests": types.SimpleNamespace(post=post)}

    def wait(self, us):
        self.us += us
        self.began_us.append(self.us)

    def sleep_ms(self, ms):
        self.us, self.turn = self.us + 1000 * ms, self.turn + 1
        if self.turn >= self.turns:
            raise BoardStops

    def read_port(self, number):
        self.us += 300
        return self.LEVEL_W * 10.0 ** (3 - 3 * number) + self.HUM_W * math.sin(2 * math.pi * 100 * self.us / 1e6)

    def run(self, program):
        true_import = __import__

        def board_import(name, *arguments):
            return self.modules[name] if name in self.modules else true_import(name, *arguments)

        names = {"__builtins__": {**__builtins__, "__import__": board_import}, "read_port": self.read_port}
        with pytest.raises(BoardStops):
            exec(program, names)  # noqa: S102  our own page
        return names


def post_to(sender, fault_of):
    numbers = iter(range(10_000))

    def post(url, json, headers):
        fault = fault_of(next(numbers))
        if fault == "away":
            raise OSError("no network")
        response = sender.post(json, headers={"Authorization": f"Bearer {sender.key}"})
        if fault == "answer lost":
            raise OSError("the answer is lost")
        return response

    return post


def test_a_micropython_board_loses_and_doubles_nothing(sender):
    faults = {2: "away", 3: "away", 5: "answer lost"}
    board = Board(post_to(sender, lambda number: faults.get(number % 7, "")), 30)
    names = board.run(PYTHON)
    stored = sender.stored()
    assert sorted(stored.sequence.tolist()) == list(range(30)) and names["held"] == [] and stored.is_server_timed.all()
    assert len(PYTHON.strip().splitlines()) == 17  # imports and sixteen lines


def test_hum_averages_out_over_whole_cycles_and_the_moments_are_spread(sender):
    """Ten cycles of 50 Hz hold twenty whole periods of 100 Hz: the mean of a sine over whole periods is 0."""
    board = Board(post_to(sender, lambda number: ""), 40)
    board.run(PYTHON)
    stored = sender.stored()
    assert abs(stored.column("port1") - board.LEVEL_W).max() < 0.01 * board.HUM_W
    assert (stored.column("port2_max") - stored.column("port2_min")).min() > 1.5 * board.HUM_W
    phases = [us % 20_000 for us in board.began_us]
    assert min(phases) < 4_000 and max(phases) > 16_000 and stored.column("averaged").min() > 300


def test_a_micropython_board_whose_memory_ran_full_goes_on(sender):
    board = Board(post_to(sender, lambda number: "away" if 5 <= number < 60 else ""), 80)
    names = board.run(PYTHON.replace("-1999", "-19"))
    assert sorted(sender.stored().sequence.tolist()) == [*range(5), *range(41, 80)] and names["held"] == []


YOURS = """
#include <stdio.h>
double read_port(int number) { static unsigned long turn; return ++turn, number == 1 ? 1e-3 : 1e-6; }
unsigned random_word(void) {
    unsigned word = 0;
    FILE *noise = fopen("/dev/urandom", "rb");
    if (!noise || fread(&word, sizeof word, 1, noise) != 1) return 7;
    fclose(noise);
    return word;
}
"""


@pytest.fixture
def c_board(sender, tmp_path):
    """Compiles the page's program for a port and a ring's size, and starts it."""
    compiler = next(filter(None, map(shutil.which, ("gcc", "cc", "clang"))), None)
    if compiler is None:
        pytest.skip("no C compiler here")
    (tmp_path / "board.c").write_text(C)
    (tmp_path / "yours.c").write_text(YOURS)
    running = []

    def start(port, held):
        defined = {"HOST": '"127.0.0.1"', "PORT": f'"{port}"', "KEY": f'"{sender.key}"', "HELD": held, "PAUSE_US": 1000,
                   "_GNU_SOURCE": 1}
        subprocess.run([compiler, "-std=c11", "-O1", "-Wall", "-Wextra", "-Werror",
                        *(f"-D{name}={value}" for name, value in defined.items()), "board.c", "yours.c", "-o", "board"],
                       cwd=tmp_path, check=True, capture_output=True, text=True)
        running.append(subprocess.Popen([tmp_path / "board"]))
        return running[-1]

    yield start
    for process in running:
        process.kill()
        process.wait()


def test_a_c_board_loses_and_doubles_nothing(sender, c_board):
    port = free_port()
    board = c_board(port, 2000)  # the door is not there yet
    with server(port) as door:
        assert until_true(lambda: len(sender.stored()) >= 5, 30.0)
        door.kill()
    with server(port):
        reached = len(sender.stored())
        assert until_true(lambda: len(sender.stored()) >= reached + 5, 30.0)
        board.kill()
        board.wait()
        stored = sender.stored()
    assert stored.sequence.tolist() == list(range(len(stored))) and stored.is_server_timed.all()
    assert abs(stored.column("port1") - 1e-3).max() < 1e-9 and abs(stored.column("port2") - 1e-6).max() < 1e-12


def test_a_c_board_whose_ring_ran_full_goes_on(sender, c_board):
    port = free_port()
    c_board(port, 5)
    with server(port):
        assert until_true(lambda: len(sender.stored()) >= 2, 30.0)
    began = int(sender.stored().sequence.max())
    __import__("time").sleep(2.5)  # more readings than the ring holds
    with server(port):
        assert until_true(lambda: int(sender.stored().sequence.max()) > began + 9, 30.0)
    numbers = sender.stored().sequence.tolist()
    assert len(set(numbers)) == len(numbers) < max(numbers) + 1
