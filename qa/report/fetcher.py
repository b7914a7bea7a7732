"""The only things that a page may refer to: files of `templates/` and its own figures."""

from collections.abc import Mapping
from pathlib import Path
from urllib.parse import unquote, urlsplit

from weasyprint.urls import URLFetcher, URLFetcherResponse

__all__ = ["FIGURE_SCHEME", "TEMPLATE_SCHEME", "OwnFiles"]

TEMPLATE_SCHEME = "template"
FIGURE_SCHEME = "figure"
_MIME = {".css": "text/css", ".svg": "image/svg+xml", ".ttf": "font/ttf"}
_NESTED_PNG = "data:image/png;base64,"


class OwnFiles(URLFetcher):
    """Serves `template:PATH` from one folder, `figure:NAME` from memory and the PNG inside a figure; refuses all else.

    A refusal stops the rendering: a report with a hole in it is a fault, not a report.
    """

    def __init__(self, folder: Path, figures: Mapping[str, bytes]) -> None:
        super().__init__(allowed_protocols={"data"}, allow_redirects=False, fail_on_errors=True)
        self._root = folder.resolve()
        self._figures = figures

    def fetch(self, url: str, headers: Mapping[str, str] | None = None) -> URLFetcherResponse:
        """Serve one address.

        Raises
        ------
        ValueError
            It is not one of the report's own.
        """
        if url.startswith(_NESTED_PNG):
            return super().fetch(url, headers)
        parts = urlsplit(url)
        name = unquote(parts.path).lstrip("/")
        if parts.scheme == FIGURE_SCHEME and name in self._figures:
            return URLFetcherResponse(url, self._figures[name], {"Content-Type": "image/svg+xml"})
        if parts.scheme == TEMPLATE_SCHEME:
            path = (self._root / name).resolve()
            if path.is_relative_to(self._root) and path.suffix in _MIME and path.is_file():
                return URLFetcherResponse(url, path.read_bytes(), {"Content-Type": _MIME[path.suffix]})
        raise ValueError("not one of the report's own files")
