"""HTML to PDF/A-3a by WeasyPrint, from the package's own files only and with the same bytes for the same input.

Each file also carries the mark of PDF/UA-1, and the files that it was made from as attachments. Source of what
the two standards ask for: ISO 19005-3 (PDF/A-3) and ISO 14289-1 (PDF/UA-1), as the validator of the tests reads them.
"""

from __future__ import annotations

import logging
import re
import warnings
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import lru_cache
from typing import Any
from xml.etree import ElementTree

from loopdoc.documents.rendering import font, style_sheet

PANGO_HINT = (
    "PDF needs the Pango library, which this machine lacks. On Debian: apt-get install libpango-1.0-0 "
    "libpangoft2-1.0-0 libharfbuzz-subset0. HTML needs nothing more: --formats html"
)


# PDF/A knows no PDF/UA: an extension schema describes its mark (ISO 19005-3, 6.6.2.3).
_UA_MARK = b"""\
<rdf:Description rdf:about="" xmlns:pdfuaid="http://www.aiim.org/pdfua/ns/id/" pdfuaid:part="1" />
<rdf:Description rdf:about="" xmlns:pdfaExtension="http://www.aiim.org/pdfa/ns/extension/"
 xmlns:pdfaSchema="http://www.aiim.org/pdfa/ns/schema#" xmlns:pdfaProperty="http://www.aiim.org/pdfa/ns/property#">
<pdfaExtension:schemas><rdf:Bag><rdf:li rdf:parseType="Resource">
<pdfaSchema:schema>PDF/UA identification schema</pdfaSchema:schema>
<pdfaSchema:namespaceURI>http://www.aiim.org/pdfua/ns/id/</pdfaSchema:namespaceURI>
<pdfaSchema:prefix>pdfuaid</pdfaSchema:prefix>
<pdfaSchema:property><rdf:Seq><rdf:li rdf:parseType="Resource">
<pdfaProperty:name>part</pdfaProperty:name><pdfaProperty:valueType>Integer</pdfaProperty:valueType>
<pdfaProperty:category>internal</pdfaProperty:category>
<pdfaProperty:description>Part of ISO 14289 to which the document conforms</pdfaProperty:description>
</rdf:li></rdf:Seq></pdfaSchema:property>
</rdf:li></rdf:Bag></pdfaExtension:schemas></rdf:Description>
"""


_VOID = re.compile(r"<((?:br|col|hr|img|link|meta)\b[^<>]*?)/?>")
"""Elements without an end in HTML; text has no bare angle bracket, and attributes of ours have none either."""
_INLINE = ("a", "b", "span")


@dataclass(frozen=True, slots=True)
class Enclosure:
    """A file that a PDF carries inside it."""

    name: str
    content: bytes
    media_type: str
    description: str


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
def _set_up() -> tuple[Any, Any]:
    """Fetcher and font configuration, made once for a process: fonts are slow to load."""
    _weasyprint()
    from weasyprint.text.fonts import FontConfiguration
    from weasyprint.urls import URLFetcher, URLFetcherResponse

    class PackageFetcher(URLFetcher):  # type: ignore[misc]
        """Serves the package's fonts and images inside the page, and refuses every other address."""

        def fetch(self, url: str, headers: Any = None) -> Any:
            scheme, _, name = url.partition(":")
            if url.startswith("data:image/"):
                return super().fetch(url, headers)
            if scheme != "loopdoc-font":
                raise ValueError(f"a document may not read {url}")
            return URLFetcherResponse(url, font(name), {"Content-Type": "font/ttf"})

    fetcher = PackageFetcher()
    return fetcher, FontConfiguration()


@lru_cache(maxsize=4)
def _css(own: str) -> Any:
    """The style sheet, read once for a process."""
    fetcher, fonts = _set_up()
    return _weasyprint().CSS(string=style_sheet(own), font_config=fonts, url_fetcher=fetcher)


def to_pdf(html: str, enclosures: Sequence[Enclosure] = (), *, dated: str = "", own_style: str = "") -> bytes:
    """The PDF of one document, with files enclosed.

    ``dated`` is the ISO date that the enclosures bear, if any; nothing comes from the clock. ``own_style`` stands in
    the place of our style sheet, where it is not empty.

    Raises
    ------
    PdfError
        Pango is missing, or WeasyPrint complains of the HTML or CSS (no page with a silent fault is issued).
    """
    weasyprint = _weasyprint()
    fetcher, fonts = _set_up()
    css = _css(own_style)  # what it says to screens only is passed over, as browsers do
    # Without a date, the first day that a PDF can bear.
    moment = datetime.fromisoformat(dated or "1970-01-01").replace(tzinfo=UTC)
    attachments = [
        weasyprint.Attachment(
            string=one.content,
            name=one.name,
            description=one.description,
            created=moment,
            modified=moment,
            relationship="Source",
        )
        for one in enclosures
    ]
    complaints: list[str] = []
    handler = _Collect(complaints)
    logger = logging.getLogger("weasyprint")
    logger.addHandler(handler)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ResourceWarning)  # its colour profile is read and not closed
            written = _parsed(html, fetcher).write_pdf(
                stylesheets=[css],
                font_config=fonts,
                pdf_variant="pdf/a-3a",
                attachments=attachments,
                finisher=lambda _, pdf: _finish(pdf, enclosures),
            )
    finally:
        logger.removeHandler(handler)
    if complaints:
        raise PdfError(f"the page could not be set as written: {complaints[0]}")
    return bytes(written)


def _parsed(html: str, fetcher: Any) -> Any:
    """The page as a tree. Pages of ours are well-formed XML, which is read fifty times as fast as HTML at large."""
    weasyprint = _weasyprint()
    try:
        tree = _tree(html)
    except ElementTree.ParseError:  # a template of the site's own, which browsers forgive
        return weasyprint.HTML(string=html, url_fetcher=fetcher)
    for element in list(tree.iter()):
        _set_space_apart(element)
    page = weasyprint.HTML(string="<title></title>", url_fetcher=fetcher)
    page.etree_element = tree
    page.wrapper_element = type(page.wrapper_element).from_html_root(tree, content_language=None)
    return page


def _tree(html: str) -> ElementTree.Element:
    """What a parser of HTML makes of a well-formed page.

    Raises
    ------
    ElementTree.ParseError
        The page is not well-formed.
    """
    tree = ElementTree.fromstring(_VOID.sub(r"<\1/>", html.removeprefix("<!doctype html>")))
    for table in list(tree.iter("table")):  # HTML puts bare rows into a body
        parts: list[ElementTree.Element] = []
        for part in table:
            if part.tag != "tr":
                parts.append(part)
            elif parts and parts[-1].tag == "tbody" and parts[-1] not in table:
                parts[-1].append(part)
            else:
                body = ElementTree.Element("tbody")
                body.append(part)
                parts.append(body)
        table[:] = parts
    return tree


def _set_space_apart(element: ElementTree.Element) -> None:
    """Give the space before an inline element an element of its own.

    WeasyPrint 70 breaks a text after its first word where all of it fits the line but for the space at its end.
    """
    before: ElementTree.Element | None = None
    for child in list(element):
        text = (element.text if before is None else before.tail) or ""
        if child.tag in _INLINE and text.endswith(" ") and not text.isspace():
            if before is None:
                element.text = text[:-1]
            else:
                before.tail = text[:-1]
            space = ElementTree.Element("span")
            space.text = " "
            element.insert(list(element).index(child), space)
        before = child


def _finish(pdf: Any, enclosures: Sequence[Enclosure]) -> None:
    """Put right what the two standards ask for and WeasyPrint 70 leaves."""
    metadata = pdf.objects[int(pdf.catalog["Metadata"].split()[0])]
    (packet,) = metadata.stream
    metadata.stream = [packet.replace(b"</rdf:RDF>", _UA_MARK + b"</rdf:RDF>")]
    metadata.compress = False
    if "AF" in pdf.catalog:  # every attachment stands there twice
        pdf.catalog["AF"][:] = dict.fromkeys(pdf.catalog["AF"])
    by_name = {one.name: one for one in enclosures}
    for specification in pdf.objects:
        if isinstance(specification, dict) and specification.get("Type") == "/Filespec":
            enclosure = by_name[specification["UF"].string]
            embedded = pdf.objects[int(specification["EF"]["F"].split()[0])]
            embedded.extra["Subtype"] = "/" + enclosure.media_type.replace("/", "#2f")
            embedded.extra["Filter"] = "/FlateDecode"
            embedded.stream, embedded.compress = [_deflated(enclosure.content)], False


@lru_cache(maxsize=1_000)
def _deflated(content: bytes) -> bytes:
    """The register goes into every document: it is pressed once for a process."""
    return zlib.compress(content, 9)


class _Collect(logging.Handler):
    def __init__(self, complaints: list[str]) -> None:
        super().__init__(logging.WARNING)
        self._complaints = complaints

    def emit(self, record: logging.LogRecord) -> None:
        self._complaints.append(record.getMessage())
