"""The container set's own commands, run natively against Debian's PostgreSQL and Redis servers."""

import os
import pwd
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import psycopg
import pytest
import redis

from labmon.engines import child
from labmon.engines.binaries import _system_postgres
from labmon.engines.child import SAME, Identity
from tests.docker.files import PROJECT, compose, dockerfile
from tests.running_lab import clean_environ, free_port, until_true

pytestmark = pytest.mark.slow
PYTHON_FOLDER = Path(shutil.which("celery", path=str(Path(sys.executable).parent)) or sys.executable).parent


def server_user() -> Identity:
    """PostgreSQL refuses root: Debian's own ``postgres`` user, else ``nobody``."""
    if os.geteuid() != 0:
        return SAME
    for name in ("postgres", "nobody"):
        try:
            entry = pwd.getpwnam(name)
        except KeyError:
            continue
        return Identity(f"{entry.pw_uid}:{entry.pw_gid}")
    pytest.fail("no user to run PostgreSQL as")


@pytest.fixture
def place():
    path = Path(tempfile.mkdtemp(prefix="lm-", dir="/tmp"))
    path.chmod(0o755)
    yield path
    shutil.rmtree(path)


@pytest.fixture
def database_url(place):
    """Debian's PostgreSQL on TCP, as a given server is."""
    programs = next(_system_postgres(), None)
    if programs is None:
        pytest.skip("Debian's PostgreSQL is not installed (apt-get install postgresql)")
    user, port, cluster, log_path = server_user(), free_port(), place / "pg", place / "pg.log"
    cluster.mkdir(mode=0o700)
    if user.owner:
        os.chown(cluster, *user.owner)
    subprocess.run(child.launched([programs / "initdb", "-D", cluster, "-U", "labmon", "--auth=trust", "--encoding=UTF8",
                                   "--locale=C"], identity=user), check=True, capture_output=True, cwd="/")
    with log_path.open("wb") as log:
        server = child.start([programs / "postgres", "-D", cluster, "-p", str(port), "-k", cluster, "-c",
                              "listen_addresses=127.0.0.1"], log=log, identity=user, death_signal=signal.SIGINT,
                             folder=Path("/"))
    url = f"postgresql://labmon@127.0.0.1:{port}"

    def is_up():
        try:
            psycopg.connect(f"{url}/postgres").close()
        except psycopg.OperationalError:
            return False
        return True

    assert until_true(is_up, 30.0), log_path.read_text()
    with psycopg.connect(f"{url}/postgres", autocommit=True) as connection:
        connection.execute("create database labmon")
    yield f"{url}/labmon"
    child.stop(server, how=signal.SIGINT, within_s=20.0)


@pytest.fixture
def broker_url(place):
    """Debian's redis-server on TCP."""
    program = shutil.which("redis-server")
    if program is None:
        pytest.skip("Debian's redis-server is not installed (apt-get install redis-server)")
    port = free_port()
    with (place / "redis.log").open("wb") as log:
        server = child.start([program, "--port", str(port), "--bind", "127.0.0.1", "--save", "", "--dir", place], log=log)
    url = f"redis://127.0.0.1:{port}/0"
    with redis.Redis.from_url(url) as client:
        assert until_true(lambda: answers(client), 20.0)
    yield url
    child.stop(server, how=signal.SIGTERM, within_s=20.0)


def answers(client):
    try:
        return client.ping()
    except redis.RedisError:
        return False


class ContainerSet:
    """Runs services' commands as the containers do: same words, same variables, another address."""

    def __init__(self, place: Path, database_url: str, broker_url: str) -> None:
        self.place = place
        self.port = free_port()
        image = dict(part.split("=", 1) for word, value in dockerfile() if word == "ENV" for part in value.split())
        self.environ = clean_environ() | {key: value for key, value in image.items() if key.startswith("LABMON_")} | {
            "PATH": f"{PYTHON_FOLDER}:{os.environ['PATH']}", "LABMON_DATA": str(place / "data"),
            "LABMON_STATIC": str(place / "static"), "LABMON_LISTEN": "127.0.0.1", "LABMON_PORT": str(self.port),
            "LABMON_DATABASE_URL": database_url, "LABMON_BROKER_URL": broker_url, "LABMON_SECRET_KEY": "x" * 50,
            "LABMON_PUBLIC_URL": "https://lab.example", "LABMON_HOSTS": "lab.example", "LABMON_BEHIND_TLS": "1",
            "LABMON_PROXIES": "*"}
        self.running: list[subprocess.Popen[bytes]] = []

    def start(self, name: str) -> subprocess.Popen[bytes]:
        with (self.place / f"{name}.log").open("wb") as log:
            process = child.start(compose()["services"][name]["command"], log=log, environ=self.environ, folder=PROJECT)
        self.running.append(process)
        return process

    def run(self, words: list[str]) -> subprocess.CompletedProcess[str]:
        return subprocess.run(words, env=self.environ, cwd=PROJECT, capture_output=True, text=True, timeout=120)

    def health(self) -> bool:
        """The image's own health check, at this test's port."""
        words = next(value for word, value in dockerfile() if word == "HEALTHCHECK")
        return self.run(eval_words(words.replace(":8000", f":{self.port}"))).returncode == 0

    def log(self, name: str) -> str:
        return (self.place / f"{name}.log").read_text()


def eval_words(health: str) -> list[str]:
    import json

    return json.loads(health[health.index("["):])


@pytest.fixture
def containers(place, database_url, broker_url):
    running = ContainerSet(place, database_url, broker_url)
    yield running
    for process in running.running:
        child.stop(process, how=signal.SIGTERM, within_s=20.0)


def test_the_set_comes_up_and_goes_down(containers):
    """Image build step, prepare, web, worker, beat; their health checks; then SIGTERM, as a container is stopped."""
    build = next(value for word, value in dockerfile() if word == "RUN" and "manage.py" in value)
    done = containers.run(build.split())
    assert done.returncode == 0, done.stderr
    prepare = containers.start("prepare")
    assert prepare.wait(120) == 0, containers.log("prepare")
    assert "Sign in as manager" in containers.log("prepare")
    assert "collecting" not in containers.log("prepare"), "the image brings its static files"
    web, worker, long_worker, beat = (containers.start(name) for name in ("web", "worker", "worker-long", "beat"))
    assert until_true(containers.health, 60.0), containers.log("web")
    for name in ("worker", "worker-long"):
        ping = [word for word in compose()["services"][name]["healthcheck"]["test"] if word != "CMD"]
        assert until_true(lambda words=ping: containers.run(words).returncode == 0, 60.0), containers.log(name)
    assert until_true(lambda: "beat_lock_taken" in containers.log("beat"), 30.0), containers.log("beat")
    services = containers.run(["python", "-c", "import urllib.request; print(urllib.request.urlopen("
                               f"'http://127.0.0.1:{containers.port}/health/services').status)"])
    assert services.stdout.strip() == "200", services.stderr
    began_s = time.monotonic()
    for process in (web, worker, long_worker, beat):
        assert child.stop(process, how=signal.SIGTERM, within_s=20.0), "stops by itself when asked"
    print(f"[containers] stopped in {time.monotonic() - began_s:.1f} s")


def test_prepare_twice_changes_nothing(containers):
    assert containers.start("prepare").wait(120) == 0, containers.log("prepare")
    assert containers.start("prepare").wait(120) == 0, containers.log("prepare")
    assert "applying" not in containers.log("prepare")
    assert "Sign in as" not in containers.log("prepare")
