"""Who may do what at the broker: its password file and its rules file, written from the stations' keys in force.

A station is a user of the broker with its key as password; it may send its readings and its last will, and hear its answers.
Of several keys the newest in force counts, since a broker knows one password a user.
"""

import logging
import os
import signal
from pathlib import Path

from django.db.models import Q
from django.utils import timezone

from ingest.broker_hash import broker_hash_of, is_hash_of
from ingest.models import StationKey
from ingest.mqtt.address import BrokerAddress
from ingest.mqtt.broker_log import NOTICES
from ingest.mqtt.topics import ANSWER, GONE, READINGS, topic_of

log = logging.getLogger(__name__)

PASSWORDS, RULES = "passwords", "rules"


def write_access(folder: Path, own: BrokerAddress, broker_pid_file: Path | None) -> bool:
    """Bring both files up to date and have the broker read them; False where nothing had changed.

    Any number of processes may do this at once: the files follow from the database, and each is replaced whole.

    Raises:
        OSError: The folder cannot be written.
    """
    changes = [_replace(folder / PASSWORDS, _passwords(folder / PASSWORDS, own)), _replace(folder / RULES, rules_for(own.user))]
    if not any(changes):
        return False
    log.info("broker_access_written", extra={"folder": str(folder)})
    if broker_pid_file is not None:
        _hang_up(broker_pid_file)
    return True


def rules_for(own_user: str) -> str:
    """The rules file; %u stands for the user, which is the station."""
    return (f"user {own_user}\ntopic read {READINGS}\ntopic read {GONE}\ntopic read {NOTICES}\ntopic write {ANSWER}\n\n"
            f"pattern write {topic_of(READINGS, '%u')}\npattern write {topic_of(GONE, '%u')}\n"
            f"pattern read {topic_of(ANSWER, '%u')}\n")


def _passwords(path: Path, own: BrokerAddress) -> str:
    """The password file, with our own line kept as long as it is right."""
    written = dict(line.split(":", 1) for line in path.read_text().splitlines() if ":" in line) if path.is_file() else {}
    kept = written.get(own.user, "")
    lines = {own.user: kept if is_hash_of(kept, own.password) else broker_hash_of(own.password)}
    in_force = StationKey.objects.filter(Q(expires_at=None) | Q(expires_at__gt=timezone.now()), revoked_at=None)
    lines |= dict(in_force.exclude(broker_hash="").order_by("pk").values_list("station__name", "broker_hash"))
    return "".join(f"{user}:{hashed}\n" for user, hashed in lines.items())


def _replace(path: Path, text: str) -> bool:
    if path.is_file() and path.read_text() == text:
        return False
    part = path.with_name(f".{path.name}.{os.getpid()}")
    part.write_text(text)
    part.chmod(0o644)
    part.replace(path)
    return True


def _hang_up(pid_file: Path) -> None:
    """SIGHUP: mosquitto reads its files again, and ends connections whose password is no longer good."""
    try:
        os.kill(int(pid_file.read_text()), signal.SIGHUP)
    except (OSError, ValueError) as error:
        log.warning("broker_not_told", extra={"pid_file": str(pid_file), "error": str(error)})
