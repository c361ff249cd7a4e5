"""Entries of a settings file with their lines, and everything that is wrong with them, told at once."""

from __future__ import annotations

import configparser
import difflib
import re
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

T = TypeVar("T")
_SECTION = re.compile(r"\[(?P<name>[^]]+)\]")
_KEY = re.compile(r"(?P<name>[^\s=:#;][^=:]*?)\s*[=:]")


class SettingsFault(Exception):
    """The settings cannot be used; each line names place, value and remedy."""


class Entries:
    """One INI file: sections of keys, each with the number of its line."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.faults: list[tuple[int, str]] = []
        parser = configparser.ConfigParser(interpolation=None, strict=True, delimiters=("=",), default_section="\0")
        try:
            text = path.read_text(encoding="utf-8-sig")
            parser.read_string(text)
        except OSError as error:
            raise SettingsFault(f"{path}: cannot be read ({error.strerror}); write the file, or name another one") from error
        except UnicodeDecodeError as error:
            raise SettingsFault(f"{path}: is no UTF-8 text; save it again as UTF-8") from error
        except configparser.Error as error:
            raise SettingsFault(_syntax_words(path, error)) from error
        self.sections = {name: dict(parser[name]) for name in parser.sections()}
        self.lines = _lines_of(text)

    def section(self, name: str) -> Section:
        """A section; an absent one is empty."""
        return Section(self, name, self.sections.get(name, {}))

    def fault(self, section: str, key: str, words: str) -> None:
        """Remember a fault; ``words`` say what is wrong and what to write."""
        line = self.lines.get((section, key)) or self.lines.get((section, "")) or 0
        value = self.sections.get(section, {}).get(key)
        shown = f" {key}" if value is None else f" {key} = {value.splitlines()[0] if value.splitlines() else ''}"
        self.faults.append((line, f"[{section}]{shown if key else ''}: {words}"))

    def finish(self) -> None:
        """All is read.

        Raises:
            SettingsFault: Something was wrong.
        """
        if self.faults:
            said = (f"{self.path.name} line {line}: {words}" if line else f"{self.path.name}: {words}"
                    for line, words in sorted(self.faults))
            raise SettingsFault("\n".join(said))


class Section:
    """Typed reading of one section; what is wrong is remembered and a default given, so that all faults come together."""

    def __init__(self, entries: Entries, name: str, found: dict[str, str]) -> None:
        self.entries, self.name, self.found = entries, name, found
        self.asked: set[str] = set()

    def fault(self, key: str, words: str) -> None:
        """Remember a fault of one of its keys."""
        self.entries.fault(self.name, key, words)

    def parsed(self, key: str, parse: Callable[[str], T], default: T, example: str) -> T:
        """A value by ``parse``, which raises ValueError with the reason."""
        self.asked.add(key)
        if key not in self.found:
            return default
        try:
            return parse(self.found[key].strip())
        except ValueError as error:
            self.fault(key, f"{error}; write for instance {key} = {example}")
            return default

    def text(self, key: str, default: str = "", *, example: str = "", is_needed: bool = False) -> str:
        """Text; a fault where it is needed and absent or empty."""
        self.asked.add(key)
        value = self.found.get(key, default).strip()
        if is_needed and not value:
            self.fault(key, f"is missing; write for instance {key} = {example}")
        return value

    def number(self, key: str, default: float, *, above: float, below: float = 1e9, example: str) -> float:
        """A number between two bounds."""
        return self.parsed(key, lambda text: _number_between(text, above, below), default, example)

    def is_on(self, key: str, default: bool) -> bool:
        """yes or no."""
        return self.parsed(key, _yes_or_no, default, "yes")

    def one_of(self, key: str, words: tuple[str, ...], default: str) -> str:
        """One of some words."""

        def parse(text: str) -> str:
            if text not in words:
                raise ValueError(f"is none of {', '.join(words)}")
            return text

        return self.parsed(key, parse, default, words[0])

    def pairs(self, key: str, example: str) -> list[tuple[str, str]]:
        """Lines of ``left: right``; at least one is needed."""
        text = self.text(key, is_needed=True, example=example)
        found = []
        for line in filter(None, map(str.strip, text.splitlines())):
            left, colon, right = line.partition(":")
            if not colon or not left.strip() or not right.strip():
                self.fault(key, f"the line {line!r} is not of the form name: text; write for instance {example}")
            else:
                found.append((left.strip(), right.strip()))
        return found

    def finish(self) -> None:
        """Nothing else is asked: what is left over is a fault."""
        for key in self.found:
            if key not in self.asked:
                near = difflib.get_close_matches(key, self.asked, 1)
                self.fault(key, f"is no entry of this section; {f'perhaps {near[0]} was meant' if near else 'take it out'}"
                                f" (known here: {', '.join(sorted(self.asked))})")


def _number_between(text: str, above: float, below: float) -> float:
    try:
        number = float(text)
    except ValueError:
        raise ValueError("is no number") from None
    if not above < number <= below:
        raise ValueError(f"is not above {above:g}" if number <= above else f"is more than {below:g}")
    return number


def _yes_or_no(text: str) -> bool:
    if text.lower() not in {"yes", "no"}:
        raise ValueError("is neither yes nor no")
    return text.lower() == "yes"


def _lines_of(text: str) -> dict[tuple[str, str], int]:
    """Line of each section ("" as key) and key."""
    lines: dict[tuple[str, str], int] = {}
    section = ""
    for number, line in enumerate(text.splitlines(), 1):
        if match := _SECTION.match(line):
            section = match["name"]
            lines.setdefault((section, ""), number)
        elif not line[:1].isspace() and (match := _KEY.match(line)):
            lines.setdefault((section, match["name"].lower()), number)
    return lines


def _syntax_words(path: Path, error: configparser.Error) -> str:
    if isinstance(error, configparser.MissingSectionHeaderError):
        return f"{path.name} line {error.lineno}: stands before any section; begin the file with the line [bench]"
    if isinstance(error, configparser.ParsingError):
        lines = "\n".join(f"{path.name} line {number}: {line} has no = sign; write key = value, or indent the line if it "
                          "goes on from the one above" for number, line in error.errors)
        return lines or f"{path.name}: {error}"
    if isinstance(error, configparser.DuplicateOptionError):
        return f"{path.name} line {error.lineno}: [{error.section}] {error.option}: stands twice; take one out"
    if isinstance(error, configparser.DuplicateSectionError):
        return f"{path.name} line {error.lineno}: [{error.section}]: stands twice; put its entries under one"
    return f"{path.name}: {error}"
