"""The embedded Valkey."""

import pytest
import redis

from labmon.engines.faults import EngineFault
from labmon.engines.valkey import EmbeddedValkey


@pytest.fixture
def engine(folder):
    engine = EmbeddedValkey(folder)
    engine.start()
    yield engine
    engine.stop()


@pytest.fixture
def client(engine):
    with redis.Redis(unix_socket_path=str(engine.socket)) as client:
        yield client


def test_restart_keeps_the_queue(engine, client):
    client.rpush("queue", "task")
    engine.stop()
    engine.start()
    assert client.lrange("queue", 0, -1) == [b"task"]


def test_listens_on_its_private_socket_only(engine, client):
    assert client.config_get("port") == {"port": "0"}
    assert client.config_get("appendfsync") == {"appendfsync": "everysec"}
    assert engine.socket.stat().st_mode & 0o077 == 0


def test_stop_leaves_no_process(engine):
    engine.stop()
    assert engine.process.poll() is not None
    assert not engine.answers()


def test_server_left_over_is_stopped_first(folder, engine):
    left = engine.process
    engine.start()
    assert left.wait(5) is not None
    assert engine.answers()


def test_damaged_file_is_said_with_its_log(folder, engine):
    engine.stop()
    for path in (engine.files / "appendonlydir").glob("*.manifest"):
        path.write_text("not a manifest\n")
    with pytest.raises(EngineFault, match=r"broker\.log"):
        engine.start()
