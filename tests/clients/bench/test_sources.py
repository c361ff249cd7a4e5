"""Instruments, boards, programs and functions as sources; a mute source is told from a silent station."""

import io
import os
import threading
import time

import pytest
from labmon_bench.function import FunctionSource
from labmon_bench.instrument import Instrument, Link
from labmon_bench.lines import SerialLines, StandardInput
from labmon_bench.reading import number_of
from labmon_bench.settings import Ask, FunctionSettings, InstrumentSettings, SerialSettings, StdinSettings, TapSettings
from labmon_bench.source import OddLine, SourceEnded, SourceFault
from labmon_bench.sources import Reader

SIMULATED = """
spec: "1.1"
devices:
  meter:
    eom:
      ASRL INSTR: {q: "\\n", r: "\\n"}
      TCPIP INSTR: {q: "\\n", r: "\\n"}
    error: {status_register: [{q: "*ESR?"}]}
    dialogues:
      - {q: "*IDN?", r: "Skerry Works,two-channel meter,7,1.0"}
      - {q: "*CLS"}
      - {q: "READ?", r: "9.98e-4,1.1e-6"}
      - {q: "TEMP?", r: "21.5"}
      - {q: "OVER?", r: "9.91E+37,1.0E-6"}
      - {q: "WORDS?", r: "not ready"}
resources:
  ASRL1::INSTR: {device: meter}
  TCPIP0::192.0.2.20::inst0::INSTR: {device: meter}
"""


@pytest.fixture
def backend(tmp_path):
    (tmp_path / "meter.yaml").write_text(SIMULATED)
    Link._shared.clear()
    yield f"{tmp_path / 'meter.yaml'}@sim"
    Link._shared.clear()


def instrument(backend, *asks, **more):
    made = {"address": "TCPIP0::192.0.2.20::inst0::INSTR", "backend": backend, "ask": asks, "at_open": ("*CLS",), "expect": "",
            "timeout_s": 0.2, "baud": 9600, "ending": "\n"}
    return Instrument("eom-in", InstrumentSettings(**made | more))


READ = Ask(("port1", "port2"), "READ?")


@pytest.mark.parametrize("address", ["TCPIP0::192.0.2.20::inst0::INSTR", "ASRL1::INSTR"])
def test_an_instruments_answers_fill_their_columns(backend, address):
    source = instrument(backend, READ, Ask(("temperature_c",), "TEMP?"), address=address)
    (reading,), place = source.read()
    assert reading.values == {"port1": 9.98e-4, "port2": 1.1e-6, "temperature_c": 21.5} and place is None
    assert abs(reading.at_us / 1e6 - time.time()) < 5.0 and source.link.identity.startswith("Skerry Works")
    source.close()


def test_scpis_marks_for_no_number_become_no_value(backend):
    """SCPI-1999 vol. 1, 7.2.1: 9.91E+37 is "not a number" (from memory). It must not become a power."""
    (reading,), _ = instrument(backend, Ask(("port1", "port2"), "OVER?")).read()
    assert reading.values == {"port1": None, "port2": 1e-6}


def test_a_mute_instrument_is_closed_and_opened_anew(backend):
    source = instrument(backend, Ask(("port1", "port2"), "NOTHING?"))
    for _ in range(2):
        with pytest.raises(SourceFault, match=r"is mute: no answer to NOTHING\?"):
            source.read()
    with pytest.raises(SourceFault, match="failed 3 times running: look at its cable"):
        source.read()
    source.settings = instrument(backend, READ).settings
    assert source.read()[0][0].values["port1"] == 9.98e-4


def test_a_late_answer_is_not_taken_for_that_of_the_next_query(backend):
    """After a timeout the link is cleared: what the instrument still had to say is gone."""
    source = instrument(backend, READ)
    source.read()
    source.link._resource.write("TEMP?")  # an answer nobody has fetched
    with pytest.raises(SourceFault):
        instrument(backend, Ask(("port1", "port2"), "NOTHING?")).read()
    assert source.read()[0][0].values == {"port1": 9.98e-4, "port2": 1.1e-6}


def test_another_instrument_at_the_address_is_refused(backend):
    with pytest.raises(SourceFault, match="not 'single-channel'"):
        instrument(backend, READ, expect="single-channel").read()


@pytest.mark.parametrize("ask", [Ask(("port1",), "READ?"), Ask(("port1",), "WORDS?")])
def test_an_answer_of_another_form_is_shown(backend, ask):
    with pytest.raises(SourceFault, match="is not one number for each of port1"):
        instrument(backend, ask).read()


def test_no_such_instrument(backend):
    with pytest.raises(SourceFault, match="192.0.2.99.* is mute"):
        instrument(backend, READ, address="TCPIP0::192.0.2.99::inst0::INSTR").read()


def test_two_taps_share_one_instrument(backend):
    one, other = instrument(backend, READ), instrument(backend, Ask(("temperature_c",), "TEMP?"))
    assert one.link is other.link and one.read()[0][0].values["port1"] == 9.98e-4
    assert other.read()[0][0].values == {"temperature_c": 21.5}


def test_without_pyvisa_the_remedy_is_named(backend, monkeypatch):
    monkeypatch.setitem(__import__("sys").modules, "pyvisa", None)
    with pytest.raises(SourceFault, match="pip install pyvisa"):
        instrument(backend, READ).read()


@pytest.fixture
def board():
    """A pair of pseudo terminals: ours writes as a board would."""
    if not hasattr(os, "openpty"):
        pytest.skip("no pseudo terminals here")
    ours, theirs = os.openpty()
    import tty

    tty.setraw(theirs)
    yield ours, os.ttyname(theirs)
    for one in (ours, theirs):
        try:
            os.close(one)
        except OSError:
            pass


def test_a_board_on_a_serial_port(board):
    ours, name = board
    source = SerialLines("eom-in", SerialSettings(name, 115_200, ("port1", "port2")))
    writer = threading.Timer(0.2, os.write, (ours, b"98,0.0011\r\n0.997, 0.0012\r\n0.9"))
    writer.start()
    found = []
    while not found:
        found += source.read()[0]
    os.write(ours, b"96 0.0013\nnonsense\n")
    while len(found) < 2:
        found += source.read()[0]
    assert [reading.values for reading in found] == [{"port1": 0.997, "port2": 0.0012}, {"port1": 0.996, "port2": 0.0013}]
    with pytest.raises(OddLine, match="correct columns"):
        source.read()
    writer.join()
    source.close()


def test_a_board_that_is_not_there():
    with pytest.raises(SourceFault, match="is the board plugged in"):
        SerialLines("eom-in", SerialSettings("/dev/no-such-port", 9600, ("port1",))).read()


def test_lines_of_another_program():
    source = StandardInput("eom-in", StdinSettings(("-", "port1", "port2")), io.StringIO("7;0.998;nan\n7,1e-3 2e-6\nx\n"))
    assert source.read()[0][0].values == {"port1": 0.998, "port2": None}
    assert source.read()[0][0].values == {"port1": 1e-3, "port2": 2e-6}
    with pytest.raises(OddLine):
        source.read()
    with pytest.raises(SourceEnded):
        source.read()


@pytest.mark.parametrize(("text", "number"), [("1,5", 1.5), (" -3 ", -3.0), ("", None), ("NaN", None), ("inf", None),
                                              ("9.9e37", None)])
def test_numbers(text, number):
    assert number_of(text, ",") == number if "." not in text else number_of(text) == number


@pytest.mark.parametrize("text", ["1_000", "0x1", "one", "1.5"])
def test_what_is_no_number(text):
    with pytest.raises(ValueError):
        number_of(text, ",")


def test_a_function_of_the_users(tmp_path):
    file = tmp_path / "ports.py"
    file.write_text("count = 0\ndef read():\n    global count\n    count += 1\n"
                    "    return [None, {'port1': count, 'port2': '1e-6'}, "
                    "{}, {'port1': 'x'}, 1 / 0 if count == 5 else None][count - 1]\n")
    source = FunctionSource("eom-in", FunctionSettings(file, "read"))
    assert source.read() == ([], None)
    assert source.read()[0][0].values == {"port1": 2.0, "port2": 1e-6}
    for said in ("let it return a map", "return a number, or None", "ZeroDivisionError"):
        with pytest.raises(SourceFault, match=said):
            source.read()
    file.write_text("def read():\n    return {'port1': 5}\n")
    source.close()
    assert source.read()[0][0].values == {"port1": 5.0}
    with pytest.raises(SourceFault, match="has no function none"):
        FunctionSource("eom-in", FunctionSettings(file, "none")).read()
    with pytest.raises(SourceFault, match="is not there"):
        FunctionSource("eom-in", FunctionSettings(tmp_path / "no.py", "read")).read()


class Scripted:
    """A source that does what its script says."""

    is_awaited = False

    def __init__(self, *script):
        self.script, self.closed = list(script), 0

    def read(self):
        step = self.script.pop(0)
        if isinstance(step, Exception):
            raise step
        return step, None

    def kept(self):
        pass

    def close(self):
        self.closed += 1


def reader(*script, every_s=1.0):
    from tests.clients.bench.conftest import readings

    kept = []
    source = Scripted(*(readings(step) if isinstance(step, int) else step for step in script))
    made = Reader(TapSettings("eom-in", StdinSettings(()), every_s), source, lambda some, place: kept.extend(some), mains_hz=50.0,
                  seed=1)
    return made, source, kept


def test_a_mute_source_is_told_tried_again_later_and_later_and_welcomed_back(caplog):
    fault = SourceFault("the meter is mute; look at its cable")
    made, source, kept = reader(1, fault, fault, fault, fault, 1)
    assert made.turn() == 0.0 and made.state.mute_since_us is None
    pauses_s = [made.turn() for _ in range(4)]
    assert 0.5 <= pauses_s[0] <= 1.0 and 4.0 <= pauses_s[3] <= 8.0 and source.closed == 4
    assert made.state.mute_since_us and made.state.trouble.startswith("the meter is mute") and caplog.text.count("is mute") == 2
    assert made.turn() == 0.0 and made.state.mute_since_us is None and "come again" in caplog.text and len(kept) == 2


def test_odd_lines_are_counted_and_do_not_close_the_source(caplog):
    made, source, kept = reader(OddLine("x"), OddLine("y"), 1)
    assert [made.turn() for _ in range(3)] == [0.0, 0.0, 0.0]
    assert made.state.odd_lines == 2 and source.closed == 0 and len(kept) == 1 and caplog.text.count("tap eom-in") == 1


def test_reading_instants_are_spread_over_one_cycle_of_the_mains():
    """20 ms at 50 Hz: sampled at whole seconds, hum of 49.98 Hz would show as a wave of 50 s."""
    made, _, kept = reader(*([1] * 60), SourceEnded("over"), every_s=0.05)
    at_s, began_s, true_turn = [], time.monotonic(), made.turn

    def turn():
        at_s.append(time.monotonic() - began_s)
        return true_turn()

    made.turn = turn
    made.run(threading.Event())
    assert len(kept) == 60
    phases = [(at - 0.05 * number) / 0.02 for number, at in enumerate(at_s[1:60], 1)]
    assert sum(0.0 <= phase < 1.6 for phase in phases) > 30 and max(phases) - min(phases) > 0.5
