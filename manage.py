#!/usr/bin/env python
"""Django's command entry; ``--data DIR`` anywhere after the command names the lab's folder, as LABMON_DATA does."""

import os
import sys


def without_folder(words: list[str]) -> tuple[list[str], str | None]:
    """The words without ``--data DIR`` or ``--data=DIR``, and DIR; words after ``--`` are left alone."""
    kept: list[str] = []
    folder = None
    rest = iter(words)
    for word in rest:
        if word == "--":
            return [*kept, word, *rest], folder
        if word == "--data":
            folder = next(rest, None)
            if not folder:
                sys.exit("--data needs a folder: --data DIR")
        elif word.startswith("--data="):
            folder = word.removeprefix("--data=")
        else:
            kept.append(word)
    return kept, folder


def main() -> None:
    """Set the folder before the settings are read, then let Django run the command."""
    words, folder = without_folder(sys.argv)
    if folder:
        os.environ["LABMON_DATA"] = os.path.abspath(folder)
    os.environ.setdefault("DJANGO_SETTINGS_MODULE", "labmon.settings")
    from django.core.management import execute_from_command_line

    execute_from_command_line(words)


if __name__ == "__main__":
    main()
