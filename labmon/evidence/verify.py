"""Is a package what was made? Its own digests, its ledger from its raw readings, and what this lab knows of it."""

import shutil
import tempfile
import zipfile
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Any

import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet

from labmon.api.formats import with_texts
from labmon.evidence import recompute
from labmon.evidence.models import RunEvidence

LARGEST = 1 << 36   # what a package may unpack to, bytes
HERE = Path(__file__).parent


class NoPackage(Exception):
    """The file is no evidence package; the message says why and what to do."""


@dataclass(frozen=True, slots=True)
class Verified:
    """What was found.

    Attributes:
        faults: Every difference, in words; empty where all agrees.
        totals: Seconds of each class that the raw readings make.
        remarks: What a person should know although nothing differs.
    """

    faults: list[str]
    totals: dict[str, Any]
    remarks: list[str]


def verify_file(path: Path) -> Verified:
    """Check a package. Nothing in it is run: the recomputing is ours, and the script within is compared with it.

    Raises:
        NoPackage: It is no ZIP with one folder.
    """
    with tempfile.TemporaryDirectory() as folder:
        bag = unpack(path, Path(folder))
        faults, totals = recompute.check(bag)
        if not faults:
            faults = unlike_forms(bag)
        return Verified(faults, totals, _remarks(bag))


def unpack(path: Path, folder: Path) -> Path:
    """The package's folder, unpacked below ``folder``; names that lead elsewhere are refused."""
    try:
        with zipfile.ZipFile(path) as package:
            names = [PurePosixPath(name) for name in package.namelist()]
            if any(name.is_absolute() or ".." in name.parts for name in names):
                raise NoPackage(f"{path} holds names that lead out of its folder: do not unpack it.")
            if sum(info.file_size for info in package.infolist()) > LARGEST:
                raise NoPackage(f"{path} would unpack to more than {LARGEST >> 30} GiB: this is no evidence package.")
            tops = {name.parts[0] for name in names}
            if len(tops) != 1 or any(len(name.parts) < 2 for name in names):
                raise NoPackage(f"{path} has not one folder with everything in it: this is no evidence package.")
            for info in package.infolist():
                _unpack_one(package, info, folder)
    except zipfile.BadZipFile as fault:
        raise NoPackage(f"{path} cannot be read as a ZIP ({fault}). Fetch it again, or look at a copy.") from None
    return folder / tops.pop()


def _unpack_one(package: zipfile.ZipFile, info: zipfile.ZipInfo, folder: Path) -> None:
    """A file whose ZIP checksum fails is unpacked all the same: the manifest then names it."""
    target = folder / info.filename
    target.parent.mkdir(parents=True, exist_ok=True)
    try:
        with package.open(info) as source, target.open("wb") as file:
            shutil.copyfileobj(source, file, 1 << 20)
    except (zipfile.BadZipFile, OSError, EOFError, ValueError, zipfile.zlib.error):
        target.write_bytes(b"")


def unlike_forms(bag: Path) -> list[str]:
    """Rows in which a tap's CSV and Parquet differ, by number."""
    faults = []
    for parquet in sorted((bag / "data/readings").glob("*.parquet")):
        binary = with_texts(pa.parquet.read_table(parquet))
        kinds = pa.csv.ConvertOptions(column_types=binary.schema, strings_can_be_null=False)
        text = pa.csv.read_csv(parquet.with_suffix(".csv"), convert_options=kinds)
        if text.num_rows != binary.num_rows:
            faults.append(f"{parquet.name} has {binary.num_rows} rows, the CSV beside it {text.num_rows}")
            continue
        for name in binary.column_names:
            faults += _unlike_cells(parquet.name, name, text.column(name), binary.column(name))
    return faults


def _unlike_cells(file: str, name: str, text: pa.ChunkedArray, binary: pa.ChunkedArray) -> list[str]:
    if pa.types.is_string(binary.type):
        binary, text = binary.fill_null(""), text.fill_null("")
    if text.equals(binary):
        return []
    unlike = [row for row, (one, other) in enumerate(zip(text.to_pylist(), binary.to_pylist(), strict=True))
              if one != other and not (one != one and other != other)]
    return [f"{file} row {row + 2}, {name}: {binary[row]} in Parquet, {text[row]} in CSV" for row in unlike[:recompute.LISTED]]


def _remarks(bag: Path) -> list[str]:
    script = bag / "recompute.py"
    if script.is_file() and script.read_bytes() != (HERE / "recompute.py").read_bytes():
        return ["The recompute.py within is not that of this labmon (an older one, or changed); it was not run."]
    return []


def known_here(digest: str) -> RunEvidence | None:
    """The package that this lab made with this SHA-256, if it did."""
    return RunEvidence.objects.select_related("run", "ledger").filter(sha256=digest).order_by("pk").first()
