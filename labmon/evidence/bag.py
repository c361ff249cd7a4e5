"""A package in the BagIt layout, version 1.0, as one ZIP, written front to back at constant memory.

Source: RFC 8493 (Kunze et al., The BagIt File Packaging Format, 2018; sections 2.1.1 to 2.2.2 and 6 as quoted at rfc-editor.org;
checked with the Library of Congress' ``bagit``).
"""

import hashlib
import io
import zipfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from datetime import datetime
from pathlib import Path
from typing import BinaryIO

PART = 1 << 20
PAYLOAD = "data/"
LEVEL = 1               # numbers as text shrink to about a fifth at the first level; higher ones take longer than the rest
STORED = frozenset({".parquet", ".pdf", ".png"})


class Bag:
    """Files written into a ZIP below one folder, with their digests.

    Args:
        file: Where the ZIP goes.
        folder: The bag's base folder within it.
        made_at: Stamp of every file in it.
    """

    def __init__(self, file: BinaryIO, folder: str, made_at: datetime) -> None:
        self._zip = zipfile.ZipFile(file, "w")
        self._folder, self._stamp = folder, made_at.timetuple()[:6]
        self._payload: dict[str, str] = {}
        self._tags: dict[str, str] = {}
        self._octets = 0

    @property
    def digests(self) -> dict[str, str]:
        """SHA-256 of each file of the payload, by name."""
        return dict(self._payload)

    @contextmanager
    def open(self, name: str) -> Iterator["Entry"]:
        """A new file, written in parts; ``data/…`` is payload, anything else a tag file."""
        if name in self._payload or name in self._tags:
            raise ValueError(f"name={name!r} is in the bag already; give each file its own name.")
        info = zipfile.ZipInfo(f"{self._folder}/{name}", self._stamp)
        info.compress_type = zipfile.ZIP_STORED if Path(name).suffix in STORED else zipfile.ZIP_DEFLATED
        info._compresslevel = LEVEL  # Python 3.11 has no public name for it
        info.external_attr = 0o644 << 16
        with self._zip.open(info, "w", force_zip64=True) as raw:
            entry = Entry(raw)
            yield entry
        if name.startswith(PAYLOAD):
            self._payload[name] = entry.digest
            self._octets += entry.size
        else:
            self._tags[name] = entry.digest

    def write(self, name: str, content: bytes) -> None:
        """A small file at once."""
        with self.open(name) as entry:
            entry.write(content)

    def copy(self, name: str, path: Path) -> None:
        """A file that lies elsewhere."""
        with self.open(name) as entry, path.open("rb") as source:
            while part := source.read(PART):
                entry.write(part)

    def abandon(self) -> None:
        """Let go of a bag that will not be ended; what was written is no package."""
        self._zip.close()

    def close(self, about: Mapping[str, str]) -> None:
        """Write the bag's own files and end the ZIP; ``about`` goes into bag-info.txt."""
        self.write("manifest-sha256.txt", _manifest(self._payload))
        self.write("bagit.txt", b"BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n")
        said = {**about, "Payload-Oxum": f"{self._octets}.{len(self._payload)}"}
        self.write("bag-info.txt", "".join(f"{name}: {_one_line(text)}\n" for name, text in said.items()).encode())
        self.write("tagmanifest-sha256.txt", _manifest(self._tags))
        self._zip.close()


class Entry(io.RawIOBase):
    """A file being written: what goes through it is digested."""

    def __init__(self, raw: BinaryIO) -> None:
        self._raw, self._hash, self.size = raw, hashlib.sha256(), 0

    def writable(self) -> bool:
        return True

    def write(self, part: bytes) -> int:  # type: ignore[override]
        view = memoryview(part).cast("B")
        self._hash.update(view)
        self._raw.write(view)
        self.size += len(view)
        return len(view)

    @property
    def digest(self) -> str:
        """SHA-256 of what was written, in hexadecimal."""
        return self._hash.hexdigest()


def _manifest(digests: Mapping[str, str]) -> bytes:
    """Lines of digest and name; a line break or per cent sign in a name is written as RFC 8493, 2.1.3 says."""
    def escaped(name: str) -> str:
        return name.replace("%", "%25").replace("\n", "%0A").replace("\r", "%0D")

    return "".join(f"{digest}  {escaped(name)}\n" for name, digest in sorted(digests.items())).encode()


def _one_line(text: str) -> str:
    return " ".join(text.split())
