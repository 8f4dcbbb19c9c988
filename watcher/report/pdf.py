"""The page as PDF, through weasyprint where it is installed (the extra `pdf`)."""

from __future__ import annotations

import re
from typing import Any, Final

from watcher.errors import UsageError

_PRODUCER: Final = re.compile(rb'<rdf:Description [^>]*pdf:Producer="[^"]*"[^>]*/>')


def as_pdf(html: str) -> bytes:
    """A self-contained page as PDF/UA; the same page gives the same bytes. Raises UsageError without weasyprint.

    Nothing is fetched: an address in the page is refused, not followed.
    """
    try:
        from weasyprint import HTML
        from weasyprint.urls import URLFetcher
    except (ImportError, OSError) as error:
        # OSError: the package is there, but the system library that shapes text is not.
        raise UsageError(
            f"pdf: weasyprint cannot be loaded ({type(error).__name__}: {str(error).splitlines()[0]}); install it with "
            "`pip install 'promise-watcher[pdf]'` and the system package pango, or leave out pdf: html, csv and json need "
            "neither"
        ) from error

    class Refusing(URLFetcher):  # type: ignore[misc, unused-ignore]
        """Follows no address."""

        def fetch(self, url: str, headers: Any = None) -> Any:
            """Refuse."""
            del headers
            raise ValueError(f"a report is self-contained; refused: {url[:80]}")

    written: bytes = HTML(string=html, url_fetcher=Refusing(), base_url=None).write_pdf(
        pdf_variant="pdf/ua-1", finisher=_nameless
    )
    return written


def _nameless(document: Any, pdf: Any) -> None:
    """Take name and number of the program that laid it out from the file: they would change its bytes."""
    del document
    pdf.info.pop("Producer", None)
    for each in pdf.objects:
        stream = getattr(each, "stream", None)
        if stream is not None and each.extra.get("Type") == "/Metadata":
            each.stream = [_PRODUCER.sub(b"", part) if isinstance(part, bytes) else part for part in stream]
