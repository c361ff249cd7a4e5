"""One file out of a package, without unpacking the rest."""

import zipfile

from labmon.evidence.files import name_of, place_of
from labmon.evidence.models import RunEvidence


def file_within(evidence: RunEvidence, name: str) -> bytes | None:
    """The file's content; None where the package has no such file (a PDF where pango was missing)."""
    with zipfile.ZipFile(place_of(evidence)) as package:
        try:
            return package.read(f"{name_of(evidence)}/{name}")
        except KeyError:
            return None


def has_pdf(evidence: RunEvidence) -> bool:
    """True where the package brings its report as PDF."""
    try:
        with zipfile.ZipFile(place_of(evidence)) as package:
            return f"{name_of(evidence)}/data/report.pdf" in package.namelist()
    except (OSError, zipfile.BadZipFile):
        return False
