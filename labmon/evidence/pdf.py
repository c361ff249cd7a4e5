"""The report as PDF, where this machine can make one: WeasyPrint needs pango, which pip does not bring."""

import functools
import logging
from typing import Any

log = logging.getLogger(__name__)


@functools.cache
def can_write_pdf() -> bool:
    """True where WeasyPrint and the libraries under it are there; asked once."""
    try:
        import weasyprint
    except (ImportError, OSError) as fault:     # OSError: the package is there, pango is not
        log.info("no_pdf", extra={"why": str(fault).splitlines()[0]})
        return False
    return bool(weasyprint.VERSION)


def pdf_of(page: str) -> bytes:
    """A page of ours as tagged PDF. Nothing is fetched: the page carries its figures."""
    import weasyprint

    return weasyprint.HTML(string=page, url_fetcher=_refused).write_pdf(pdf_variant="pdf/ua-1")


def _refused(url: str, *_args: Any, **_more: Any) -> Any:
    raise ValueError(f"url={url[:80]!r}: a report fetches nothing; put what it shows into the page.")
