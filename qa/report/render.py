"""Templates become HTML, HTML becomes PDF; nothing is fetched from outside `templates/` and the page's own figures."""

import re
import warnings
from collections.abc import Mapping, Sequence
from datetime import date, datetime, time
from functools import lru_cache
from typing import TYPE_CHECKING

from qa.errors import FaultError
from qa.report.data import AttachedFile
from qa.report.numbers import THIN_SPACE
from qa.resources import shipped_folder

if TYPE_CHECKING:
    from jinja2 import Environment
    from markupsafe import Markup

__all__ = ["TooManyPagesError", "fill_template", "to_pdf"]


_JOINED = re.compile(f"(\\S{{1,24}}(?:{THIN_SPACE}\\S{{1,24}})+)")
_UNDATED = date(1970, 1, 1)

# Characters that no page can hold or that turn the text around them: controls but tab and line ends, surrogates, direction
# overrides and isolates, non-characters.
_UNPRINTABLE = re.compile(
    "[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\ud800-\udfff\u202a-\u202e\u2066-\u2069\ufdd0-\ufdef\ufffe\uffff]"
)


class TooManyPagesError(Exception):
    """A page that has to fit a number of sheets does not."""


def _printable(content: object) -> object:
    """Put a question mark in the place of what cannot be printed; leave markup that a template made alone."""
    return _UNPRINTABLE.sub("?", content) if type(content) is str else content


def _tied(text: str) -> "Markup":
    """Escape a text and keep what a thin space joins, a number and its unit, on one line.

    The rest goes into spans too, with the blanks between them outside: WeasyPrint 70 breaks a line early where text ends in a
    blank and the element after it does not fit.
    """
    from markupsafe import Markup, escape

    parts = _JOINED.split(str(_printable(text)))
    if len(parts) == 1:
        return escape(parts[0])
    pieces = []
    for number, part in enumerate(parts):
        bare = part.strip()
        if number % 2:
            pieces.append(Markup('<span class="tied">{}</span>').format(part))
        elif bare:
            before, after = (" " if part[:1].isspace() else ""), (" " if part[-1:].isspace() else "")
            pieces.append(Markup("{}<span>{}</span>{}").format(before, bare, after))
        else:
            pieces.append(escape(part))
    return Markup("").join(pieces)


@lru_cache(maxsize=1)
def _environment() -> "Environment":
    """Templates with escaping on for whatever is put in, and an error for whatever was forgotten."""
    from jinja2 import Environment, FileSystemLoader, StrictUndefined

    environment = Environment(
        loader=FileSystemLoader(shipped_folder("templates")),
        autoescape=True,
        undefined=StrictUndefined,
        finalize=_printable,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["tied"] = _tied
    return environment


def fill_template(name: str, **content: object) -> str:
    """Fill a template of `templates/`; every text put in is escaped."""
    return _environment().get_template(name).render(**content)


def to_pdf(
    html: str,
    figures: Mapping[str, bytes],
    identifier: bytes,
    page_css: str,
    *,
    attached: Sequence[AttachedFile] = (),
    as_of: date = _UNDATED,
    most_pages: int | None = None,
) -> bytes:
    """Lay HTML out as an archival PDF (PDF/A-3a: tagged, fonts embedded).

    Parameters
    ----------
    html : str
        The page; it refers to style sheets as ``template:report.css`` and to figures as ``figure:NAME``.
    figures : Mapping
        SVG by name.
    identifier : bytes
        What the file identifier is made from; the same page with the same identifier gives the same bytes.
    page_css : str
        Rules of this paper size, added to the page's own.
    attached : sequence of AttachedFile
        Data files that travel inside.
    as_of : date
        The day they are dated with.
    most_pages : int or None
        Pages that it may have.

    Returns
    -------
    bytes
        PDF.

    Raises
    ------
    TooManyPagesError
        It has more than `most_pages`.
    FaultError
        A part of the report is missing from this installation, or WeasyPrint's own libraries are.
    """
    try:
        from weasyprint import CSS, HTML, Attachment
        from weasyprint.text.fonts import FontConfiguration
        from weasyprint.urls import FatalURLFetchingError
    except OSError as error:
        raise FaultError(
            "The report cannot be made into a PDF: the Pango library is missing on this machine; install it "
            "(Debian and Ubuntu: apt-get install libpango-1.0-0 libpangoft2-1.0-0) and run the report again."
        ) from error
    from qa.report.fetcher import TEMPLATE_SCHEME, OwnFiles

    fonts = FontConfiguration()
    fetcher = OwnFiles(shipped_folder("templates"), figures)
    sheet = CSS(string=page_css, font_config=fonts, url_fetcher=fetcher)
    page = HTML(string=html, base_url=f"{TEMPLATE_SCHEME}:/", url_fetcher=fetcher)
    midnight = datetime.combine(as_of, time())
    files = [
        Attachment(
            string=file.content, name=file.name, description=file.description, relationship="Data", created=midnight,
            modified=midnight, url_fetcher=fetcher,
        )
        for file in attached
    ]  # fmt: skip
    options = {"pdf_variant": "pdf/a-3a", "pdf_identifier": identifier, "attachments": files}
    try:
        with warnings.catch_warnings():
            # WeasyPrint leaves closing its colour profile's file to the garbage collector.
            warnings.simplefilter("ignore", ResourceWarning)
            document = page.render(font_config=fonts, stylesheets=[sheet], **options)
            if most_pages is not None and len(document.pages) > most_pages:
                raise TooManyPagesError(len(document.pages))
            pdf = document.write_pdf(**options)
    except FatalURLFetchingError as error:
        raise FaultError(f"The report is not complete ({error}): install this copy of evenfield again.") from error
    if not isinstance(pdf, bytes):
        raise FaultError("The report was not made: the PDF library gave nothing back; install this copy of evenfield again.")
    return pdf
