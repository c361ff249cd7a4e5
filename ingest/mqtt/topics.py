"""The topics between stations and labmon."""

SHARED = "$share/labmon/"
"""Subscribers of one share divide the messages (MQTT 5.0, section 4.8.2)."""
READINGS = "labmon/v1/+/readings"
GONE = "labmon/v1/+/gone"
ANSWER = "labmon/v1/+/answer"


def topic_of(pattern: str, station: str) -> str:
    """A station's own topic."""
    return pattern.replace("+", station)


def station_of(topic: str) -> str:
    """The station that a topic names."""
    return topic.split("/")[2]
