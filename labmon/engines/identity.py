"""Who runs PostgreSQL, which refuses root: ourselves, a user namespace, or the existing ``nobody``."""

import os
import pwd
import shutil
from pathlib import Path

from labmon.engines.binaries import PostgresPrograms
from labmon.engines.child import SAME, Identity, can_reach
from labmon.engines.faults import EngineFault

NAMESPACE = Identity("namespace")


def nobody() -> Identity | None:
    """The system's own ``nobody``, where there is one; no user is ever made."""
    try:
        entry = pwd.getpwnam("nobody")
    except KeyError:
        return None
    return Identity(f"{entry.pw_uid}:{entry.pw_gid}")


def choose_identity(folder: Path) -> Identity:
    """Whom PostgreSQL can run as with its files under ``folder``.

    Raises:
        EngineFault: We are root, and neither a user namespace nor ``nobody`` will do.
    """
    if os.geteuid() != 0:
        return SAME
    if can_reach(folder, NAMESPACE):
        return NAMESPACE
    other = nobody()
    if other is not None:
        open_to(folder, other)
        if can_reach(folder, other):
            return other
    raise EngineFault(f"PostgreSQL does not run as root, user namespaces are forbidden here, and the user 'nobody' "
                      f"cannot reach {folder}. Start labmon as an ordinary user, or choose a folder that everybody may "
                      "enter (--data /var/lib/labmon), or set LABMON_DATABASE_URL.")


def open_to(folder: Path, identity: Identity) -> None:
    """Let ``identity`` pass through our own data folder; what lies inside keeps its own mode."""
    if identity.owner:
        folder.chmod(0o711)


def give(path: Path, identity: Identity) -> None:
    """Hand one of our own folders to the user that needs it."""
    if identity.owner:
        os.chown(path, *identity.owner)


def programs_for(identity: Identity, programs: PostgresPrograms, folder: Path) -> PostgresPrograms:
    """The same programs, copied under ``folder`` where ``identity`` cannot reach them (a venv in root's home)."""
    if identity.owner is None or can_reach(programs.folder / "postgres", identity):
        return programs
    if not programs.is_from_wheel:
        raise EngineFault(f"The user 'nobody' cannot run {programs.folder}/postgres. Start labmon as an ordinary user, "
                          "or set LABMON_DATABASE_URL.")
    return PostgresPrograms(_copied(programs.folder.parents[1], folder / "programs"), programs.version, True)


def _copied(package: Path, target: Path) -> Path:
    """Copy the wheel's programs and libraries once; a mark with their time stamp tells a newer wheel."""
    mark = target / "copied-from"
    state = f"{package} {(package / 'pginstall/bin/postgres').stat().st_mtime_ns}"
    if not (mark.is_file() and mark.read_text() == state):
        shutil.rmtree(target, ignore_errors=True)
        shutil.copytree(package / "pginstall", target / package.name / "pginstall", symlinks=True,
                        ignore=shutil.ignore_patterns("include"))
        libraries = package.with_name(package.name + ".libs")
        if libraries.is_dir():
            shutil.copytree(libraries, target / libraries.name, symlinks=True)
        for path in [target, *target.rglob("*")]:
            if not path.is_symlink():
                path.chmod(path.stat().st_mode & 0o777 | 0o444 | (0o111 if path.is_dir() else 0))
        mark.write_text(state)
    return target / package.name / "pginstall" / "bin"
