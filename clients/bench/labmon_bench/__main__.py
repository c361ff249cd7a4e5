"""The command ``labmon-bench``: run, check, status, service, example."""

from __future__ import annotations

import argparse
import json
import logging
import logging.handlers
import signal
import sys
import threading
from collections.abc import Sequence
from pathlib import Path

from labmon_bench.bench import Bench
from labmon_bench.check import run_check
from labmon_bench.health import status_path, status_words
from labmon_bench.service import SYSTEMS, service_command, service_remedy, service_text
from labmon_bench.settings import BenchSettings, SettingsFault, read_settings
from labmon_bench.version import FIRMWARE

EXAMPLE = """\
[bench]
door = http://192.0.2.10:8000
key_file = station.key

[tap eom-in]
source = instrument
address = TCPIP0::192.0.2.20::5025::SOCKET
ask =
    port1 port2: READ?
read_every_s = 1
"""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; its exit status."""
    wish = _parser().parse_args(arguments)
    try:
        return int(wish.command(wish))
    except SettingsFault as fault:
        print(fault, file=sys.stderr)
        return 2
    except KeyboardInterrupt:
        return 130


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="labmon-bench",
                                     description="Reads the detectors of one bench and sends them to labmon.")
    parser.add_argument("--version", action="version", version=FIRMWARE)
    commands = parser.add_subparsers(required=True, metavar="COMMAND")
    for name, command, words in (("run", _run, "read and send, for ever"),
                                 ("check", _check, "prove the chain from the settings to an accepted reading"),
                                 ("status", _status, "how the running client does")):
        made = commands.add_parser(name, help=words, description=words)
        made.add_argument("settings", type=Path, help="the settings file")
        made.set_defaults(command=command)
    service = commands.add_parser("service", help="print the file that makes the system start the client")
    service.add_argument("system", choices=SYSTEMS)
    service.add_argument("settings", type=Path)
    service.add_argument("--write", type=Path, help="write it to a file instead")
    service.add_argument("--user", default="", help="who runs it (systemd and launchd)")
    service.set_defaults(command=_service)
    commands.add_parser("example", help="print a settings file to begin with").set_defaults(command=_example)
    return parser


def _run(wish: argparse.Namespace) -> int:
    settings = read_settings(wish.settings)
    _begin_log(settings)
    stop = threading.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: stop.set())
    Bench(settings).run(stop)
    return 0


def _check(wish: argparse.Namespace) -> int:
    logging.disable()
    return 0 if run_check(wish.settings, print) else 1


def _status(wish: argparse.Namespace) -> int:
    path = status_path(read_settings(wish.settings).spool)
    try:
        print(status_words(json.loads(path.read_text(encoding="utf-8"))))
    except (OSError, ValueError):
        print(f"No client has run with these settings: {path} is not there.", file=sys.stderr)
        return 1
    return 0


def _service(wish: argparse.Namespace) -> int:
    read_settings(wish.settings)
    text = service_text(wish.system, wish.settings, service_command(wish.settings), wish.user)
    if wish.write is None:
        sys.stdout.write(text)
    else:
        wish.write.write_text(text, encoding="utf-16" if wish.system == "windows" else "utf-8")
    print(service_remedy(wish.system, wish.settings), file=sys.stderr)
    return 0


def _example(wish: argparse.Namespace) -> int:
    sys.stdout.write(EXAMPLE)
    return 0


def _begin_log(settings: BenchSettings) -> None:
    """To the error output, and to a file of bounded size where one is named."""
    handlers: list[logging.Handler] = [logging.StreamHandler()]
    if settings.log_file is not None:
        handlers.append(logging.handlers.RotatingFileHandler(
            settings.log_file, maxBytes=1_000_000, backupCount=3, encoding="utf-8"))
    for handler in handlers:
        handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
        logging.getLogger("labmon_bench").addHandler(handler)
    logging.getLogger("labmon_bench").setLevel(logging.INFO)


if __name__ == "__main__":
    sys.exit(main())
