"""The supervising process: services, preparation, web, worker and beat; one address; everything stops together."""

import http.client
import json
import os
import signal
import socket
import subprocess
import sys
import threading
import time
from dataclasses import dataclass
from pathlib import Path

from labmon.engines import child
from labmon.engines.faults import EngineFault
from labmon.engines.folder import DataFolder
from labmon.engines.logs import trim_logs
from labmon.engines.part import Command, Watch
from labmon.engines.postgres import EmbeddedPostgres
from labmon.engines.progress import Progress
from labmon.engines.valkey import EmbeddedValkey
from labmon.web import bound_socket

PROJECT = Path(__file__).resolve().parents[2]
LOOK_EVERY_S = 0.2
TRIM_EVERY_S = 60.0
WEB_READY_WITHIN_S = 60.0
STOP_WITHIN_S = 8.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Wish:
    """What the caller asked for.

    Args:
        folder: The data folder.
        listen, port: Where the web process listens.
        has_demo: Whether to run the invented laboratory.
        database_url, broker_url: Given servers; empty: embedded ones.
        has_mqtt: Whether an MQTT broker is named, so that a subscriber runs.
    """

    folder: Path
    listen: str
    port: int
    has_demo: bool = False
    database_url: str = ""
    broker_url: str = ""
    has_mqtt: bool = False


class Stopped(Exception):
    """Ctrl-C or SIGTERM came before the lab was ready."""


class Supervisor:
    """Runs one lab from start to stop.

    Its main thread starts every child: Linux sends a death signal when the starting *thread* ends.
    """

    def __init__(self, wish: Wish, progress: Progress) -> None:
        self.wish = wish
        self.progress = progress
        self.folder = DataFolder(wish.folder)
        self.engines: list[EmbeddedPostgres | EmbeddedValkey] = []
        self.commands: list[Command] = []
        self.listener: socket.socket | None = None
        self.stop_asked = threading.Event()
        self.stops = 0

    @property
    def address(self) -> str:
        """Where a browser on this machine finds the lab."""
        host = {"0.0.0.0": "127.0.0.1", "::": "[::1]"}.get(self.wish.listen, self.wish.listen)
        return f"http://{host}:{self.wish.port}/"

    def run(self) -> None:
        """Start everything, watch it until a signal comes, stop everything.

        Raises:
            EngineFault: Something cannot start; what was started has been stopped.
        """
        for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
            signal.signal(number, self._on_signal)
        self.folder.make()
        self.folder.hold()
        try:
            self._start()
            self._watch()
        except Stopped:
            pass
        finally:
            self._stop()
            self.folder.release()

    def _on_signal(self, number: int, frame: object) -> None:
        self.stops += 1
        self.stop_asked.set()

    def _start(self) -> None:
        self.listener = self._listener()
        self.progress.plain(f"labmon in {self.folder.path}" + (" with the demo laboratory" if self.wish.has_demo else ""))
        trim_logs(self.folder.logs)
        self.folder.keep_secret_key()
        self._start_services()
        answer = self._prepare()
        self._start_web()
        self._await_web()
        self._start_others()
        self._tell_ready(answer)

    def _listener(self) -> socket.socket:
        """Bound before anything else is started, and kept open, so that a restarting web process refuses nobody."""
        try:
            listener = bound_socket(self.wish.listen, self.wish.port)
        except OSError as error:
            raise EngineFault(f"Port {self.wish.port} on {self.wish.listen} cannot be used ({error.strerror}). Stop the "
                              f"program that has it, or choose another: --port {self.wish.port + 1}.") from error
        listener.set_inheritable(True)
        return listener

    def _start_services(self) -> None:
        database_url, broker_url = self.wish.database_url, self.wish.broker_url
        if not database_url:
            database_url = self._start_engine(EmbeddedPostgres(self.folder))
        if not broker_url:
            broker_url = self._start_engine(EmbeddedValkey(self.folder))
        os.environ.update(LABMON_DATA=str(self.folder.path), LABMON_DATABASE_URL=database_url,
                          LABMON_BROKER_URL=broker_url)
        os.environ.setdefault("LABMON_PUBLIC_URL", self.address.rstrip("/"))
        self.folder.write_services(database_url=database_url, broker_url=broker_url, address=self.address)

    def _start_engine(self, engine: EmbeddedPostgres | EmbeddedValkey) -> str:
        self._check_stop()
        before_s = self.progress.elapsed_s()
        self.engines.append(engine)
        engine.start()
        self.progress.say(engine.name, f"{engine.title} is up ({self.progress.elapsed_s() - before_s:.2f} s)")
        return engine.url

    def _prepare(self) -> dict[str, list[str]]:
        """Migrate, collect static files, make the first login: in a process that knows the services' addresses."""
        self._check_stop()
        words = [sys.executable, str(PROJECT / "manage.py"), "prepare_lab", *(["--demo"] if self.wish.has_demo else [])]
        self.preparing = subprocess.Popen(child.launched(words), stdin=subprocess.DEVNULL, stdout=subprocess.PIPE,
                                          stderr=subprocess.STDOUT, text=True, cwd=PROJECT, start_new_session=True)
        answer: dict[str, list[str]] = {}
        assert self.preparing.stdout is not None
        stopper = threading.Thread(target=self._stop_preparing, args=[self.preparing], daemon=True)
        stopper.start()
        for line in self.preparing.stdout:
            if line.startswith('{"prepared"'):
                answer = json.loads(line)["prepared"]
            else:
                self.progress.say("prepare", line.rstrip())
        status = self.preparing.wait()
        self._check_stop()
        if status != 0:
            raise EngineFault("The lab could not be prepared; the lines above say why.")
        return answer

    def _stop_preparing(self, process: subprocess.Popen[str]) -> None:
        while process.poll() is None:
            if self.stop_asked.wait(LOOK_EVERY_S):
                process.terminate()
                return

    def _start_web(self) -> None:
        """First and alone: the page is there sooner when nothing else starts beside it."""
        assert self.listener is not None
        number = self.listener.fileno()
        self._add("web", [sys.executable, "-m", "labmon.web", "--socket", str(number)], number)

    def _start_others(self) -> None:
        for name, lane in (("worker", "prompt"), ("worker-long", "long")):
            self._add(name, [sys.executable, "-m", "labmon.worker", lane])
        self._add("beat", [sys.executable, "-m", "celery", "-A", "labmon", "beat", "--loglevel", "INFO", "--pidfile", ""])
        if self.wish.has_mqtt:
            self._add("mqtt", [sys.executable, str(PROJECT / "manage.py"), "run_mqtt"])
        if self.wish.has_demo:
            self._add("demo", [sys.executable, str(PROJECT / "manage.py"), "send_demo_readings", "--to", self.address])

    def _add(self, name: str, words: list[str], *open_files: int) -> None:
        self._check_stop()
        command = Command(name, words, folder=PROJECT, logs=self.folder.logs, open_files=open_files)
        self.commands.append(command)
        command.start()

    def _await_web(self) -> None:
        until = time.monotonic() + WEB_READY_WITHIN_S
        web = self.commands[0]
        while not self._web_answers():
            self._check_stop()
            assert web.process is not None
            if web.process.poll() is not None:
                raise EngineFault(f"The web process ended with status {web.process.returncode}; see {web.log_path}.")
            if time.monotonic() > until:
                raise EngineFault(f"The web process did not answer within {WEB_READY_WITHIN_S:.0f} s; "
                                  f"see {web.log_path}.")
            time.sleep(0.05)
        self.progress.say("web", "answers")

    def _web_answers(self) -> bool:
        """The socket takes connections as soon as it listens, so only an answer counts."""
        host = self.address.removeprefix("http://").rsplit(":", 1)[0]
        connection = http.client.HTTPConnection(host.strip("[]"), self.wish.port, timeout=2.0)
        try:
            connection.request("GET", "/health/process", headers={"Host": "localhost"})
            return connection.getresponse().status == 200
        except (OSError, http.client.HTTPException):
            return False
        finally:
            connection.close()

    def _tell_ready(self, answer: dict[str, list[str]]) -> None:
        say = self.progress.plain
        say()
        say(f"  Ready after {self.progress.elapsed_s():.1f} s:  {self.address}")
        for line in answer.get("login", []):
            say(f"  {line}")
        say(f"  Logs: {self.folder.logs}/   Stop: Ctrl-C")
        say()

    def _watch(self) -> None:
        watches = [Watch(part, self.progress.say) for part in [*self.engines, *self.commands]]
        trim_at_s = time.monotonic() + TRIM_EVERY_S
        while not self.stop_asked.wait(LOOK_EVERY_S):
            for watch in watches:
                watch.look()
            if time.monotonic() >= trim_at_s:
                trim_logs(self.folder.logs)
                trim_at_s = time.monotonic() + TRIM_EVERY_S

    def _check_stop(self) -> None:
        if self.stop_asked.is_set():
            raise Stopped

    def _stop(self) -> None:
        """Our processes first, together; the services they need last. A second Ctrl-C does not wait."""
        before_s = self.progress.elapsed_s()
        for command in self.commands:
            command.ask_to_stop()
        until = time.monotonic() + STOP_WITHIN_S
        while self._is_any_running() and time.monotonic() < until and self.stops < 2:
            time.sleep(0.05)
        for command in self.commands:
            if command.is_running():
                self.progress.say(command.name, "did not stop in time and was ended")
            command.make_stop()
        for engine in reversed(self.engines):
            engine.stop()
        self.folder.forget_services()
        if self.listener is not None:
            self.listener.close()
        if self.engines or self.commands:
            self.progress.say("labmon", f"stopped in {self.progress.elapsed_s() - before_s:.1f} s")

    def _is_any_running(self) -> bool:
        return any(command.is_running() for command in self.commands)
