"""docker/env.example lists every variable that the settings read, with unit and default, and no other."""

import re

import pytest

from labmon import settings as module
from tests.docker.files import compose, env_example

OF_SERVICES = {"LABMON_DATABASE_URL", "LABMON_BROKER_URL"}
OF_COMPOSE = {"SITE", "DATABASE_PASSWORD", "MQTT_LISTEN"}
SAID_IN_WORDS = {"LABMON_DATA", "LABMON_STATIC", "LABMON_SECRET_KEY", "LABMON_MAIL_BACKEND", "LABMON_MAIL_HOST",
                 "LABMON_DAYS_OPTIONS"}


def plain(default) -> str:
    """A default as it is written in the file."""
    if default in ("", [], None):
        return "none"
    if isinstance(default, bool):
        return str(int(default))
    if isinstance(default, list):
        return ",".join(default)
    return f"{default:g}" if isinstance(default, float) else str(default)


def test_lists_what_is_read_and_nothing_else():
    assert set(env_example()) == set(module.env.asked) | OF_SERVICES | OF_COMPOSE


@pytest.mark.parametrize("name", sorted(set(module.env.asked) - SAID_IN_WORDS))
def test_default_is_the_true_one(name):
    comment, _ = env_example()[name]
    said = re.search(r"Default: (\S+)", comment)
    assert said, f"{name} has no default"
    assert said[1] == plain(module.env.asked[name])


def test_each_has_a_word_on_its_default():
    assert [name for name, (comment, _) in env_example().items() if not re.search(r"[Dd]efault", comment)] == []


def test_compose_asks_only_for_variables_of_the_example():
    asked = set(re.findall(r"\$\{([A-Z_]+)", str(compose())))
    assert asked == OF_COMPOSE


def test_addresses_of_the_example_are_those_of_the_container_set():
    example, services = env_example(), compose()["services"]
    assert {"database", "broker"} <= set(services)
    assert "@database:5432/" in example["LABMON_DATABASE_URL"][1]
    assert "//broker:6379/" in example["LABMON_BROKER_URL"][1]
