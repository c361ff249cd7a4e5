"""``manage.py watch_folder``: read in what other programs write into FOLDER/STATION/TAP/, for ever or once."""

import json
import time
from argparse import ArgumentParser
from dataclasses import asdict
from pathlib import Path
from typing import Any

from django.conf import settings
from django.core.management.base import CommandError

from labmon.management.base import LabCommand
from labmon.pipeline.watched import Watch


class Command(LabCommand):
    help = "Read files in that appear or grow in FOLDER/STATION/TAP/; one JSON line for each. Moves and deletes nothing."

    def add_arguments(self, parser: ArgumentParser) -> None:
        super().add_arguments(parser)
        parser.add_argument("--folder", type=Path, default=settings.WATCHED_FOLDER, metavar="DIR",
                            help="default: LABMON_WATCHED_FOLDER")
        parser.add_argument("--once", action="store_true", help="look once and end")
        parser.add_argument("--every-s", type=float, default=10.0, metavar="S", help="time between two looks; default 10")

    def handle(self, *args: Any, **wish: Any) -> None:
        folder = wish["folder"]
        if folder is None or not folder.is_dir():
            raise CommandError(f"{folder or 'No folder'} is no folder to watch. Name one with --folder or "
                               "LABMON_WATCHED_FOLDER; in it make a folder for each station, in that one for each tap.")
        watch = Watch(folder)
        while True:
            for said in watch.look():
                self.stdout.write(json.dumps(asdict(said), ensure_ascii=False))
                self.stdout.flush()
            if wish["once"]:
                return
            time.sleep(wish["every_s"])
