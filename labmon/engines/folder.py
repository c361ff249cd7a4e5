"""The data folder: held by one lab at a time; its parts, its short socket folder, its list of services."""

import fcntl
import hashlib
import json
import os
import secrets
import stat
import tempfile
from pathlib import Path

from labmon.engines.faults import EngineFault, FolderInUse
from labmon.services import SERVICES_FILE

LONGEST_SOCKET = 107          # bytes of a Unix socket's address, unix(7), less the closing zero
SOCKET_NAME_ROOM = len("/.s.PGSQL.5432.lock")


def own_folder(path: Path, owners: set[int]) -> Path:
    """Make a folder in a place that others can write to, or take it if it is truly one of ours.

    Raises:
        EngineFault: It is someone else's, or open to others.
    """
    path.mkdir(mode=0o700, exist_ok=True)
    found = path.lstat()
    if not stat.S_ISDIR(found.st_mode) or found.st_uid not in owners or found.st_mode & 0o077:
        raise EngineFault(f"{path} belongs to someone else. Remove it, or choose a shorter path with --data.")
    return path


class DataFolder:
    """A folder with everything one lab keeps."""

    def __init__(self, path: Path) -> None:
        self.path = path.absolute()
        self._held: int | None = None

    def make(self) -> None:
        """Make the folder where it is missing; one that exists keeps its mode."""
        try:
            self.path.mkdir(mode=0o700, parents=True, exist_ok=True)
            self.logs.mkdir(exist_ok=True)
        except OSError as error:
            raise EngineFault(f"The data folder {self.path} cannot be made: {error.strerror}. Choose another with "
                              "--data.") from error

    @property
    def logs(self) -> Path:
        """Where each process writes its own file."""
        return self.path / "logs"

    def hold(self) -> None:
        """Take the folder for this process; given back when it ends, however it ends.

        Raises:
            FolderInUse: Another process holds it.
        """
        held = os.open(self.path / "lock", os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
        try:
            fcntl.flock(held, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            holder = os.pread(held, 64, 0).decode().strip()
            os.close(held)
            raise FolderInUse(f"Another lab is running on {self.path} (process {holder or 'unknown'}). Stop it with "
                              "Ctrl-C first, or give this one its own folder with --data.") from None
        os.ftruncate(held, 0)
        os.pwrite(held, f"{os.getpid()}\n".encode(), 0)
        self._held = held

    def release(self) -> None:
        """Give the folder back."""
        if self._held is not None:
            os.close(self._held)
            self._held = None

    def sockets(self) -> Path:
        """The folder for sockets: inside where the address stays short enough, else one of our own under /tmp."""
        inside = self.path / "sockets"
        if len(os.fsencode(inside)) + SOCKET_NAME_ROOM <= LONGEST_SOCKET:
            inside.mkdir(mode=0o700, exist_ok=True)
            return inside
        name = hashlib.sha256(os.fsencode(self.path)).hexdigest()[:12]
        short = Path(tempfile.gettempdir()) / f"labmon-{os.getuid()}-{name}"
        if len(os.fsencode(short)) + SOCKET_NAME_ROOM > LONGEST_SOCKET:
            short = Path("/tmp") / short.name
        return own_folder(short, {os.geteuid()})

    def write_services(self, **entries: str) -> None:
        """Write down addresses for the lab's other commands, readable by this user only."""
        self._write(SERVICES_FILE, json.dumps(entries, indent=1) + "\n")

    def forget_services(self) -> None:
        """The lab has stopped: its addresses lead nowhere."""
        (self.path / SERVICES_FILE).unlink(missing_ok=True)

    def keep_secret_key(self) -> None:
        """Make the key that signs sessions, once."""
        if not (self.path / "secret-key").is_file():
            self._write("secret-key", secrets.token_urlsafe(50) + "\n")

    def _write(self, name: str, text: str) -> None:
        """Whole or not at all."""
        part = self.path / f".{name}.part"
        part.unlink(missing_ok=True)
        with open(os.open(part, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600), "w") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        part.rename(self.path / name)
