"""The check command: each link of the chain broken in turn, and the words for it."""

import socketserver
import threading
from http.server import BaseHTTPRequestHandler

import pytest
from labmon_bench import check
from labmon_bench.check import run_check

from ingest.models import SetAside, StationKey
from ingest.stations import revoke_key
from tests.clients.bench.conftest import free_port, server, write_settings
from tests.clients.bench.test_sources import SIMULATED

INSTRUMENT = ["[tap eom-in]", "source = instrument", "address = ASRL1::INSTR", "backend = meter.yaml@sim",
              "ask =", "  port1 port2: READ?",
              "[tap air]", "source = csv", "file = air.csv", "time = Time", "columns =", "  temperature_c: T"]


@pytest.fixture
def bench(sender, tmp_path):
    """A settings file whose whole chain is sound, and a way to check it."""
    (tmp_path / "meter.yaml").write_text(SIMULATED)
    (tmp_path / "air.csv").write_text("Time,T\n2031-03-04T00:00:00Z,21.5\n")
    port = free_port()

    def checked(change=lambda text: text, key=sender.key):
        settings = write_settings(tmp_path, port, key, INSTRUMENT)
        settings.write_text(change(settings.read_text()))
        said = []
        return run_check(settings, said.append), said

    checked.port = port
    return checked


def test_a_sound_chain_ends_with_an_accepted_reading(sender, bench):
    with server(bench.port):
        is_well, said = bench()
    assert is_well, said
    assert [line.split(":")[0] for line in said] == [
        "ok 1. settings", "ok 2. spool", "ok 3. source of eom-in", "ok 4. source of air", "ok 5. clock", "ok 6. door",
        "ok 7. key", "ok 8. reading of eom-in", "ok 9. reading of air", "All is well"]
    assert "port1 = 0.000998, port2 = 1.1e-06" in said[2]
    assert sender.stored().column("port2").tolist() == [1.1e-6] and len(sender.stored("air")) == 0


@pytest.mark.parametrize(("old", "new", "step", "said"), [
    ("source = csv", "source = cvs", 1, "line 12: [tap air] source = cvs: is none of"),
    ("READ?", "NOTHING?", 3, "is mute: no answer to NOTHING?"),
    ("meter.yaml", "none.yaml", 3, "is mute"),
    ("air.csv", "none.csv", 4, "none.csv is not there; is its writer running"),
    ("temperature_c: T", "temperature_c: Temp", 4, "no column 'Temp'; it has Time, T"),
    ("http://127.0.0.1", "http://no-such-host.invalid", 6, "no-such-host.invalid"),
    ("[tap eom-in]", "[tap none]", 8, "has no tap 'none'"),
    ("port1 port2: READ?", "port1 temperature_c: READ?", 8, "port2 is missing"),
    ("port1 port2: READ?", "port1 port2: OVER?", 8, "set the reading aside: port1: null is not a power"),
    ("temperature_c: T", "drive_ma: T", 9, "a climate tap sends at least one of"),
])
def test_the_first_broken_link_is_named(sender, bench, monkeypatch, old, new, step, said):
    monkeypatch.setattr(check, "PATIENCE_S", 0.5)
    with server(bench.port):
        is_well, lines = bench(lambda text: text.replace(old, new, 1))
    assert not is_well and len(lines) == step and lines[-1].startswith(f"FAILED at step {step}: ") and said in lines[-1], lines


def test_no_door(bench):
    is_well, lines = bench()
    assert not is_well and "FAILED at step 6: nobody listens at" in lines[-1] and "is labmon running" in lines[-1]


def test_a_wrong_and_a_revoked_key(sender, bench):
    with server(bench.port):
        is_well, lines = bench(key="wrong")
        assert not is_well and "FAILED at step 7: the key is refused (the key is not known" in lines[-1]
        revoke_key(StationKey.objects.get().pk)
        is_well, lines = bench()
        assert not is_well and "revoked" in lines[-1] and "current key" in lines[-1]


def test_the_clock_is_compared_with_labmons(bench, monkeypatch):
    import time

    true_time = time.time
    monkeypatch.setattr(check.time, "time", lambda: true_time() + 420.0)
    with server(bench.port):
        is_well, lines = bench()
    assert not is_well and "s ahead of labmon's" in lines[-1] and "the PC's clock is 4" in lines[-1]
    monkeypatch.setattr(check, "now_us", lambda: 5)
    is_well, lines = bench()
    assert "FAILED at step 5: the PC's clock was never set" in lines[-1]


class Stranger(BaseHTTPRequestHandler):
    def do_GET(self):
        self.send_response(200)
        self.end_headers()

    def log_message(self, *words):
        pass


def test_another_server_at_the_address(bench):
    with socketserver.TCPServer(("127.0.0.1", bench.port), Stranger) as stranger:
        threading.Thread(target=stranger.serve_forever, daemon=True).start()
        is_well, lines = bench()
        stranger.shutdown()
    assert not is_well and "it is no labmon station door" in lines[-1] and SetAside.objects.count() == 0
