import dataclasses
import io
import json
import re
from datetime import date

import pytest
from pypdf import PdfReader

from qa import __version__
from qa.errors import UsageError
from qa.report.commission import page_size, render_commission_report

DAY = date(2026, 12, 1)


@pytest.fixture(scope="module")
def pdf(run):
    return render_commission_report(run, DAY)


def flat(pdf):
    return re.sub(r"\s+", "", "".join(page.extract_text() for page in PdfReader(io.BytesIO(pdf)).pages))


def test_it_says_what_was_run_on_what_and_when(run, pdf):
    text = flat(pdf)
    for words in (
        "Commissioning report", "1 Dec 2026", f"Evenfield {__version__}", f"numpy {run.machine['numpy']}",
        f"scipy {run.machine['scipy']}", f"Python {run.machine['Python']}", "sphere-170", "12 scans, seeds 0 to 11",
        "do not replace the judgement of a qualified MR medical physicist", "Name", "Role", "Signature", "Date",
        "Clopper and Pearson 1934", run.campaigns[0].phantom_sha256,
    ):  # fmt: skip
        assert re.sub(r"\s+", "", words) in text, words


def test_every_line_stands_in_it_with_its_chart(run, pdf):
    text = flat(pdf)
    for tally in run.campaigns[0].tallies:
        assert re.sub(r"\s+", "", tally.title) in text
    for axis in ("true value", "signal-to-noise ratio", "pixel size (mm)", "error / standard uncertainty", "error (pixel)"):
        assert re.sub(r"\s+", "", axis) in text, axis


def test_no_computer_or_person_is_named(pdf):
    import getpass
    import platform

    text = flat(pdf)
    for name in (platform.node(), getpass.getuser()):
        assert not re.search(rf"\b{re.escape(name)}\b", text)


def test_all_figures_travel_inside(run, pdf):
    (content,) = PdfReader(io.BytesIO(pdf)).attachments["commission.json"]
    document = json.loads(content)
    assert len(document["campaigns"][0]["cases"]) == 12
    assert document["campaigns"][0]["cases"][4]["figures"][0]["measured"] == run.campaigns[0].cases[4].figures[0].measured


def test_a_missed_bar_is_said_first(run):
    campaign = run.campaigns[0]
    tallies = tuple(
        dataclasses.replace(t, bias_met=False, point_met=False) if t.quantity == "ghosting" else t for t in campaign.tallies
    )
    missed = dataclasses.replace(run, campaigns=(dataclasses.replace(campaign, tallies=tallies, cases=campaign.cases[:2]),))
    first = PdfReader(io.BytesIO(render_commission_report(missed, DAY, "Letter"))).pages[0]
    assert float(first.mediabox.width) == pytest.approx(612, abs=0.5)
    assert "Barsmissed" in re.sub(r"\s+", "", first.extract_text())
    assert "sphere-170:Percentsignalghosting:bias,95%point" in re.sub(r"\s+", "", first.extract_text())


def test_the_same_run_gives_the_same_file(run, pdf):
    assert render_commission_report(run, DAY) == pdf


def test_paper_is_a4_or_letter():
    assert page_size("letter") == "Letter"
    with pytest.raises(UsageError, match="A3"):
        page_size("A3")
