import pytest

from qa.errors import FaultError
from qa.report.fetcher import OwnFiles
from qa.report.render import fill_template, to_pdf
from qa.resources import shipped_folder

OWN = OwnFiles(shipped_folder("templates"), {"trend-1": b"<svg xmlns='http://www.w3.org/2000/svg'/>"})


@pytest.mark.parametrize(("url", "start"), [("template:/report.css", b"@font-face"), ("figure:trend-1", b"<svg")])
def test_own_files_are_served(url, start):
    assert OWN.fetch(url).read().startswith(start)


@pytest.mark.parametrize(
    "url",
    [
        "http://127.0.0.1:9/x.png",
        "https://example.test/x.css",
        "ftp://example.test/x",
        "file:///etc/passwd",
        "file:report.css",
        "template:/../pyproject.toml",
        "template:/%2e%2e/pyproject.toml",
        "template:/../templates/../LICENSE",
        "template:/scanner.html",
        "template:/fonts",
        "figure:trend-2",
        "figure:",
        "data:text/html,x",
        "data:image/svg+xml,<svg/>",
        "",
        "//example.test/x",
    ],
)
def test_all_else_is_refused(url):
    with pytest.raises(ValueError, match="not one of the report's own files"):
        OWN.fetch(url)


@pytest.mark.parametrize("source", ["http://127.0.0.1:9/a.png", "file:///etc/hostname", "figure:absent"])
def test_a_page_that_wants_something_else_is_a_fault_and_not_a_page_with_a_hole(source):
    with pytest.raises(FaultError, match="not complete"):
        to_pdf(f"<p>x<img src='{source}'>", {}, bytes(16), "")


def test_templates_escape_and_miss_nothing():
    from jinja2 import UndefinedError

    with pytest.raises(UndefinedError):
        fill_template("mail.html")
