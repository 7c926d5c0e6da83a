"""HTML to PDF by WeasyPrint, from the package's own files only and with the same bytes for the same input."""

from __future__ import annotations

import logging
from functools import lru_cache
from typing import Any

from loopdoc.documents.rendering import font, style_sheet

PANGO_HINT = (
    "PDF needs the Pango library, which this machine lacks. On Debian: apt-get install libpango-1.0-0 "
    "libpangoft2-1.0-0 libharfbuzz-subset0. HTML needs nothing more: --formats html"
)


class PdfError(Exception):
    """PDF cannot be made on this machine or from this HTML; the message says why and what to do."""


@lru_cache(maxsize=1)
def _weasyprint() -> Any:
    try:
        import weasyprint
    except OSError as error:  # the import looks for Pango
        raise PdfError(PANGO_HINT) from error
    return weasyprint


def ensure_available() -> None:
    """Raise PdfError where this machine cannot make PDF."""
    _weasyprint()


@lru_cache(maxsize=1)
def _set_up() -> tuple[Any, Any, Any]:
    """Fetcher, font configuration and style sheet, made once for a process: fonts are slow to load."""
    weasyprint = _weasyprint()
    from weasyprint.text.fonts import FontConfiguration
    from weasyprint.urls import URLFetcher, URLFetcherResponse

    class PackageFetcher(URLFetcher):  # type: ignore[misc]
        """Serves the package's fonts and refuses every other address."""

        def fetch(self, url: str, headers: Any = None) -> Any:
            scheme, _, name = url.partition(":")
            if scheme != "loopdoc-font":
                raise ValueError(f"a document may not read {url}")
            return URLFetcherResponse(url, font(name), {"Content-Type": "font/ttf"})

    fetcher = PackageFetcher()
    fonts = FontConfiguration()
    css = weasyprint.CSS(string=style_sheet(), font_config=fonts, url_fetcher=fetcher)
    return fetcher, fonts, css


def to_pdf(html: str) -> bytes:
    """The PDF of one document.

    Raises
    ------
    PdfError
        Pango is missing, or WeasyPrint complains of the HTML or CSS (no page with a silent fault is issued).
    """
    weasyprint = _weasyprint()
    fetcher, fonts, css = _set_up()
    complaints: list[str] = []
    handler = _Collect(complaints)
    logger = logging.getLogger("weasyprint")
    logger.addHandler(handler)
    try:
        written = weasyprint.HTML(string=html, url_fetcher=fetcher).write_pdf(
            stylesheets=[css], font_config=fonts, pdf_tags=True, pdf_variant="pdf/ua-1"
        )
    finally:
        logger.removeHandler(handler)
    if complaints:
        raise PdfError(f"the page could not be set as written: {complaints[0]}")
    return bytes(written)


class _Collect(logging.Handler):
    def __init__(self, complaints: list[str]) -> None:
        super().__init__(logging.WARNING)
        self._complaints = complaints

    def emit(self, record: logging.LogRecord) -> None:
        self._complaints.append(record.getMessage())
