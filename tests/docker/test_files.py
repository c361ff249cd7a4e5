"""The container files keep the rules we set for them; no container engine is needed."""

import json
import re
import subprocess
import sys

import pytest

from tests.docker.files import FOLDER, PROJECT, compose, dockerfile

KNOWN_KEYS = {"image", "build", "command", "environment", "env_file", "restart", "read_only", "tmpfs", "volumes", "cap_drop",
              "security_opt", "depends_on", "healthcheck", "ports", "stop_grace_period", "shm_size", "profiles"}
PINNED = re.compile(r"[\w./-]+:\d+(\.\d+)*[\w.-]*")


def services():
    return compose()["services"]


def test_yaml_is_clean():
    rules = "{extends: default, rules: {line-length: {max: 130}, document-start: disable}}"
    done = subprocess.run([sys.executable, "-m", "yamllint", "--strict", "-d", rules, FOLDER / "compose.yaml"],
                          capture_output=True, text=True)
    assert done.returncode == 0, done.stdout


def test_processes_are_all_there():
    assert set(services()) == {"prepare", "web", "worker", "worker-long", "beat", "mqtt", "database", "broker", "mqtt-broker",
                               "proxy"}


@pytest.mark.parametrize("name", sorted(services()))
def test_service_is_well_formed(name):
    service, volumes = services()[name], compose()["volumes"]
    assert set(service) <= KNOWN_KEYS
    assert "restart" in service
    assert PINNED.fullmatch(service["image"]), "an image names its version"
    assert set(service.get("depends_on", {})) <= set(services())
    for volume in service.get("volumes", []):
        source = volume.split(":")[0]
        assert source in volumes or (FOLDER / source).exists()
    for other, wish in service.get("depends_on", {}).items():
        needed = services()[other].get("healthcheck", {}).get("disable") is not True
        assert wish["condition"] == "service_completed_successfully" or needed, f"{other} has no health to wait for"


def test_only_the_proxy_is_reachable_from_outside_unless_the_mqtt_broker_is_asked_for():
    open_to = {name: service["ports"] for name, service in services().items() if "ports" in service}
    assert open_to == {"proxy": ["80:80", "443:443"], "mqtt-broker": ["${MQTT_LISTEN:-127.0.0.1}:1883:1883"]}
    assert [name for name, service in services().items() if "profiles" in service] == ["mqtt", "mqtt-broker"]


@pytest.mark.parametrize("name", ["prepare", "web", "worker", "worker-long", "beat", "mqtt"])
def test_our_processes_have_few_rights(name):
    service = services()[name]
    assert service["read_only"] is True
    assert service["cap_drop"] == ["ALL"]
    assert service["security_opt"] == ["no-new-privileges:true"]


def test_image_runs_as_an_ordinary_user_and_tells_its_health():
    last = [index for index, (word, _) in enumerate(dockerfile()) if word == "FROM"][-1]
    final = dockerfile()[last:]
    words = [word for word, _ in final]
    user = next(value for word, value in final if word == "USER")
    assert user not in {"root", "0"}
    assert words.index("USER") < words.index("CMD")
    assert not any(word in {"RUN", "COPY"} for word in words[words.index("USER"):])
    health = next(value for word, value in final if word == "HEALTHCHECK")
    assert "/health/process" in health
    assert json.loads(health[health.index("["):])
    assert json.loads(dict(final)["CMD"])[:3] == ["python", "-m", "labmon.web"]


def test_image_is_built_from_pinned_parts():
    for word, value in dockerfile():
        assert word in {"FROM", "WORKDIR", "COPY", "RUN", "ENV", "USER", "EXPOSE", "HEALTHCHECK", "CMD"}
        if word == "FROM":
            assert PINNED.fullmatch(value.split()[0])
        if word == "RUN" and "pip install" in value:
            assert "--require-hashes" in value


def test_image_copies_what_exists_and_is_not_ignored():
    kept = {line[1:] for line in (FOLDER / "Dockerfile.dockerignore").read_text().splitlines() if line.startswith("!")}
    copied = {value.split()[0] for word, value in dockerfile() if word == "COPY" and not value.startswith("--from")}
    assert copied == kept
    for name in copied:
        assert (PROJECT / name).exists()
