"""An open broker is seen as one."""

from ingest.mqtt.address import BrokerAddress
from ingest.mqtt.probe import lets_anybody_in
from tests.ingest.door.test_over_uvicorn import free_port


def test_a_closed_broker_lets_nobody_in(broker):
    assert not lets_anybody_in(broker.address)


def test_an_open_one_is_noticed_and_told(broker, subscriber):
    broker.kill()
    settings = broker.folder / "mosquitto.conf"
    settings.write_text(settings.read_text().replace("allow_anonymous false", "allow_anonymous true"))
    broker.start()
    assert lets_anybody_in(broker.address) and "broker_lets_anybody_in" not in subscriber.log.read_text()
    subscriber.stop()
    again = type(subscriber)(broker)
    again.stop()
    assert "broker_lets_anybody_in" in again.log.read_text()


def test_no_broker_lets_nobody_in():
    assert not lets_anybody_in(BrokerAddress("127.0.0.1", free_port(), "labmon.door", "x", False))
