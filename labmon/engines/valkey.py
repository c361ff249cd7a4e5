"""An embedded Valkey (Redis protocol): Unix socket only, append-only file synced every second."""

import signal
import subprocess
import time
from pathlib import Path

import redis
from redis.backoff import NoBackoff
from redis.retry import Retry

from labmon.engines import child
from labmon.engines.binaries import find_valkey
from labmon.engines.faults import EngineFault
from labmon.engines.folder import DataFolder

READY_WITHIN_S = 20.0
STOP_WITHIN_S = 10.0


class EmbeddedValkey:
    """The server whose files lie in the data folder's ``valkey``; it holds nothing that may not be lost.

    Args:
        folder: The data folder, held by this process.
        is_kept: Whether it writes its append-only file.
    """

    name = "broker"
    title = "Valkey"

    def __init__(self, folder: DataFolder, *, is_kept: bool = True) -> None:
        self.folder = folder
        self.files = folder.path / "valkey"
        self.is_kept = is_kept
        self.socket = folder.sockets() / "valkey.sock"
        self.process: subprocess.Popen[bytes] | None = None

    @property
    def url(self) -> str:
        """Address for Celery and for LABMON_BROKER_URL."""
        return f"redis+socket://{self.socket}"

    def start(self) -> None:
        """Start the server and wait until it answers.

        Raises:
            EngineFault: It does not run; the message names its log.
        """
        self.files.mkdir(mode=0o700, exist_ok=True)
        self._end_leftover()
        self.socket.unlink(missing_ok=True)
        log_path = self.folder.logs / "broker.log"
        with log_path.open("ab") as log:
            self.process = child.start([find_valkey(), self._write_settings()], log=log, folder=self.files)
        until = time.monotonic() + READY_WITHIN_S
        while not self.answers():
            if self.process.poll() is not None:
                raise EngineFault(f"Valkey did not start; see {log_path}.")
            if time.monotonic() > until:
                self.stop()
                raise EngineFault(f"Valkey did not answer within {READY_WITHIN_S:.0f} s; see {log_path}.")
            time.sleep(0.01)

    def _write_settings(self) -> Path:
        """Ours at every start: no TCP, no snapshots, nothing evicted."""
        lines = {"port": "0", "unixsocket": f'"{self.socket}"', "unixsocketperm": "700", "dir": f'"{self.files}"',
                 "daemonize": "no", "save": '""', "appendonly": "yes" if self.is_kept else "no",
                 "appendfsync": "everysec", "maxmemory-policy": "noeviction", "loglevel": "notice"}
        path = self.files / "labmon.conf"
        path.write_text("".join(f"{key} {value}\n" for key, value in lines.items()))
        return path

    def _end_leftover(self) -> None:
        """A server of a killed lab may still hold the files (where the system knows no death signal)."""
        if self.answers():
            self._client().shutdown(nosave=True)

    def _client(self) -> redis.Redis:
        once = Retry(NoBackoff(), 0)    # the client's own ten attempts take seconds where no server is
        return redis.Redis(unix_socket_path=str(self.socket), socket_timeout=2.0, retry=once)

    def answers(self) -> bool:
        """Whether it answers now."""
        try:
            return self.socket.exists() and bool(self._client().ping())
        except redis.RedisError:
            return False

    def stop(self) -> None:
        """Write the file out and stop."""
        if self.process is not None:
            child.stop(self.process, how=signal.SIGTERM, within_s=STOP_WITHIN_S)
