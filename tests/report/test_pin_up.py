import dataclasses
import io

import pytest
from pypdf import PdfReader

from qa.report.pin_up import ExpectedSeries, PinUp, render_pin_up

EXPECTED = (
    ExpectedSeries("sphere-170", "QA sphere*", "QA-*", "TR 500\u2009ms, TE 20\u2009ms"),
    ExpectedSeries("sectioned-190", "QA sectioned*", "QA-*"),
)


def read(pdf):
    pages = PdfReader(io.BytesIO(pdf)).pages
    return len(pages), " ".join(" ".join(page.extract_text() for page in pages).split())


def test_the_sheet_says_what_to_scan_when_and_what_to_do(rich):
    pages, text = read(render_pin_up(PinUp(rich, EXPECTED, ("physics@saltmarsh.example",))))
    assert pages == 1
    for words in (
        "north-3t", "Out of limits", "Monday, 30 Nov 2026", "every 7 days, at most 2 days late", "sphere-170", "QA sphere*",
        "QA-*",
        "To do now", "Last session, 23 Nov 2026", "conditional pass", "tell physics@saltmarsh.example", "safety data sheet",
    ):  # fmt: skip
        assert words in text, words


@pytest.mark.parametrize("size", ["A4", "Letter"])
def test_it_stays_one_page_however_much_there_is_to_say(rich, size):
    last = rich.sessions[-1]
    acquisition = dataclasses.replace(
        last.acquisitions[0], remarks=tuple(f"Remark {n}: " + "set it up again. " * 30 for n in range(9))
    )
    session = dataclasses.replace(last, acquisitions=(acquisition, acquisition, acquisition))
    full = dataclasses.replace(rich, sessions=(session,), page_size=size, standing_sentence="A long sentence. " * 20)
    expected = tuple(ExpectedSeries(f"phantom-{n}", "QA series number one*", "QA-*", "TR 500 ms, " * 8) for n in range(6))
    pages, text = read(render_pin_up(PinUp(full, expected)))
    assert pages == 1
    assert "phantom-5" in text
    assert "are in the report" in text


def test_a_scanner_without_sessions_has_a_sheet(made):
    pages, text = read(render_pin_up(PinUp(made.content((), standing="overdue", standing_sentence="Nothing is on record."))))
    assert pages == 1
    assert "not planned" in text
