"""The MQTT example of docs/payload.md is a bench that forgets on our answer only."""

from ingest.times import now_us
from tests.ingest.mqtt.conftest import until
from tests.ingest.test_payload_page import blocks


def test_the_mqtt_example(sender, bench, broker, subscriber):
    names = {"station": sender.station.name, "key": sender.key, "broker": "127.0.0.1", "port": broker.port, "boot": "b1a7"}
    exec(blocks("mqtt")[0], names)  # noqa: S102  our own page
    until(names["bench"].is_connected)
    names["held"] |= {number: (now_us(), 1e-3, 1e-6) for number in range(3)}
    names["send"]()
    until(lambda: not names["held"] or names["send"]())  # the first answers may come before it listens
    assert sender.stored().sequence.tolist() == [0, 1, 2]
    names["bench"].disconnect()
    names["bench"].loop_stop()
