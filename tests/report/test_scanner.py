import dataclasses
import io
import re
import shutil
import subprocess
import sys
from datetime import date, timedelta

import pytest
from pypdf import PdfReader

from qa.records import NotMeasured, Region
from qa.report.content import RefusedSeries
from qa.report.scanner import render_scanner_report

NASTY = [
    "<script>alert(1)</script>",
    "</style><style>body{display:none}</style>",
    "{{ 7 * 7 }}{% include '/etc/passwd' %}",
    "<img src='file:///etc/passwd'><svg onload=x><image href='http://127.0.0.1:9/a.png'/></svg>",
    "url(http://127.0.0.1:9/x.css); } @import 'file:///etc/passwd'; {",
    "$\\frac{1}{0}$ $x_{$",
    "&amp; &lt; \" ' ]]> -->",
]


def text_of(pdf):
    return "\n".join(page.extract_text() for page in PdfReader(io.BytesIO(pdf)).pages)


def flat(text):
    """Text without any white space: lines may break anywhere in a long name."""
    return re.sub(r"\s+", "", text)


@pytest.fixture(scope="module")
def year_pdf(year):
    return render_scanner_report(year)


@pytest.fixture(scope="module")
def year_text(year_pdf):
    return text_of(year_pdf)


def test_the_first_page_says_whether_it_is_fit_and_what_was_found(year_pdf):
    text = PdfReader(io.BytesIO(year_pdf)).pages[0].extract_text()
    for words in (
        "north-3t", "Saltmarsh Imaging", "23 Nov 2026", "Out of limits", "Ghosting is out of limits since 5 Oct 2026",
        "1 Dec 2025 to 23 Nov 2026", "49 made, 3 missed", "Fenwright Meridian", "NORTH3T", "sphere-170", "TR 500",
        "coil HEAD-20",
        "Percent signal ghosting",
        "at most 2.5 %", "conditional pass", "not measured: this phantom has no ramps",
        "30 Mar 2026 to 6 Apr 2026 (2 sessions); 7 Sep 2026",
    ):  # fmt: skip
        assert flat(words) in flat(text), words


def test_the_rest_traces_and_signs(year_text):
    for words in (
        "Evenfield 0.1.0", "version 3",
        "c4" * 32, "9f" * 32, "5e" * 32, "inbox/series-114", "Name", "Role", "Signature", "Date",
        "do not replace the judgement of a qualified MR medical physicist", "safety data sheet", "lowest 1 cm² mean",
    ):  # fmt: skip
        assert flat(words) in flat(year_text), words


def test_every_value_of_the_latest_session_stands_with_its_uncertainty(year, year_pdf):
    first = PdfReader(io.BytesIO(year_pdf)).pages[0].extract_text()
    found = {j.measurement.quantity: j.measurement for j in year.sessions[-1].acquisitions[0].judged}
    assert f"{found['snr'].value:.1f}" in first
    assert "3.8" in first
    assert f"{found['length_45'].value:.3f}" in first
    assert "0.060" in first
    assert f"{found['centre_frequency'].value:.6f}" in first


def test_pages_are_counted_and_sized(year, year_pdf):
    for size, width, height in (("A4", 595.28, 841.89), ("Letter", 612, 792)):
        pdf = year_pdf if size == "A4" else render_scanner_report(dataclasses.replace(year, page_size=size))
        pages = PdfReader(io.BytesIO(pdf)).pages
        for number, page in enumerate(pages, start=1):
            assert float(page.mediabox.width) == pytest.approx(width, abs=0.5)
            assert float(page.mediabox.height) == pytest.approx(height, abs=0.5)
            assert f"page {number} of {len(pages)}" in page.extract_text()


def test_the_file_says_what_it_is(year_pdf):
    reader = PdfReader(io.BytesIO(year_pdf))
    assert reader.metadata.title == "Scanner report: north-3t, 23 Nov 2026"
    assert reader.metadata.author == "Saltmarsh Imaging"
    assert reader.trailer["/Root"]["/Lang"] == "en"
    assert reader.trailer["/Root"]["/MarkInfo"]["/Marked"]
    assert reader.xmp_metadata.dc_title["x-default"] == reader.metadata.title
    assert b"pdfaid:part" in reader.trailer["/Root"]["/Metadata"].get_data()
    fonts = [
        font["/DescendantFonts"][0].get_object()["/FontDescriptor"]
        for page in reader.pages
        for font in (f.get_object() for f in page["/Resources"]["/Font"].values())
    ]
    assert fonts
    assert all(any(f"/FontFile{n}" in f for n in ("", "2", "3")) for f in fonts)
    assert any("Open" in f["/FontName"] for f in fonts)


def test_headings_make_the_bookmarks(year_pdf):
    outline = PdfReader(io.BytesIO(year_pdf)).outline
    names = [item.title for item in outline if not isinstance(item, list)]
    names += [item.title for group in outline if isinstance(group, list) for item in group if not isinstance(item, list)]
    for words in ("north-3t", "Latest session, 23 Nov 2026", "Completeness", "Trends", "Cautions", "Reviewed"):
        assert words in names


def test_same_content_same_bytes_in_this_process_and_another(year, year_pdf, made):
    assert render_scanner_report(year) == year_pdf
    small = made.content(
        made.sessions(8, only=("snr", "ghosting")), pictures=(made.picture(rows=64, columns=64, pixel_mm=(3.9, 3.9)),)
    )
    program = (
        "import hashlib, pickle, sys; from qa.report.scanner import render_scanner_report;"
        "print(hashlib.sha256(render_scanner_report(pickle.load(sys.stdin.buffer))).hexdigest())"
    )
    import hashlib
    import pickle

    detached = dataclasses.replace(
        small,
        sessions=tuple(
            dataclasses.replace(
                s,
                acquisitions=tuple(
                    dataclasses.replace(
                        a,
                        judged=tuple(
                            dataclasses.replace(j, measurement=dataclasses.replace(j.measurement, details={}))
                            for j in a.judged
                        ),
                    )
                    for a in s.acquisitions
                ),
            )
            for s in small.sessions
        ),
    )
    here = hashlib.sha256(render_scanner_report(small)).hexdigest()
    there = subprocess.run(
        [sys.executable, "-c", program], input=pickle.dumps(detached), capture_output=True, check=True,
        env={"PYTHONHASHSEED": "77", "PATH": "/usr/bin:/bin", "TZ": "Asia/Tokyo"},
    )  # fmt: skip
    assert there.stdout.decode().strip() == here


def test_another_day_or_figure_gives_another_file(made):
    sessions = made.sessions(2, only=("snr",))
    contents = (
        made.content(sessions),
        made.content(sessions, as_of=date(2026, 11, 24)),
        made.content(made.sessions(2, only=("snr",), seed=8)),
    )
    identifiers = [PdfReader(io.BytesIO(render_scanner_report(content))).trailer["/ID"][0] for content in contents]
    assert len(set(identifiers)) == 3


@pytest.mark.parametrize("nasty", NASTY)
def test_what_a_header_says_is_text_and_nothing_else(made, nasty):
    session = made.session(
        1, made.last_day, {k: made.steady[k] for k in ("snr", "ghosting")},
        header=dataclasses.replace(made.header, manufacturer=nasty[:60], model=nasty[:60], station=nasty[:60]),
        settings=dataclasses.replace(made.settings, protocol=nasty[:60], receive_coil=nasty[:60]),
        remarks=(nasty,),
    )  # fmt: skip
    region = Region(nasty, "circle", 6, ((125.0, 125.0),), 20.0)
    content = made.content(
        [session], scanner=nasty, department=nasty, description=nasty, standing_sentence=nasty,
        pictures=(made.picture(rows=64, columns=64, pixel_mm=(3.9, 3.9), title=nasty, extra=(region,)),),
        refused=(RefusedSeries(made.last_day, nasty, nasty),),
    )  # fmt: skip
    text = flat(text_of(render_scanner_report(content)))
    assert text.count(flat(nasty)) >= 6
    assert "root:" not in text
    assert "Cautions" in text


def test_very_long_names_stay_on_the_page(made):
    endless = "W" * 3000
    session = made.session(
        1, made.last_day, made.steady, header=dataclasses.replace(made.header, model=endless),
        settings=dataclasses.replace(made.settings, protocol=endless), remarks=(endless[:300],),
    )  # fmt: skip
    pdf = render_scanner_report(made.content([session], description=endless[:300], standing_sentence="A word. " * 60))
    assert len(PdfReader(io.BytesIO(pdf)).pages) < 8


@pytest.mark.parametrize("name", ["Βορράς", "ماسح الشمال", "北病棟3T装置", "\U0001f9f2"])
def test_names_of_any_script_do_not_break_it(made, name):
    pdf = render_scanner_report(made.content(made.sessions(1, only=("snr",)), scanner=name, department=name))
    assert len(PdfReader(io.BytesIO(pdf)).pages) == 2


def test_controls_and_turned_text_become_question_marks(made):
    text = text_of(render_scanner_report(made.content((), scanner="a\u202eb\x00c\ud800d")))
    assert "a?b?c?d" in text


def test_a_scanner_without_any_session_has_a_report(made):
    missing = tuple(made.last_day - timedelta(days=7 * n) for n in range(8, 0, -1))
    pdf = render_scanner_report(
        made.content((), standing="overdue", standing_sentence="Nothing is on record.", missing=missing)
    )
    text = text_of(pdf)
    assert "No session of this scanner is on record in this period." in text
    assert "28 Sep 2026 to 16 Nov 2026 (8 sessions)" in text
    assert "Trends" not in text


def test_a_gap_of_a_year_breaks_the_line_and_keeps_both_ends(made):
    early = made.sessions(6, last=date(2025, 6, 2), only=("snr",))
    sessions = (*early, *made.sessions(6, only=("snr",)))
    pdf = render_scanner_report(made.content(sessions))
    assert "12 made" in text_of(pdf)


def test_a_quantity_never_measured_is_named_with_its_reason(made):
    sessions = []
    for session in made.sessions(3, only=("snr", "ghosting")):
        acquisition = session.acquisitions[0]
        reasons = (NotMeasured("snr", "one repeat only: two are needed"),)
        kept = tuple(j for j in acquisition.judged if j.measurement.quantity != "snr")
        sessions.append(
            dataclasses.replace(session, acquisitions=(dataclasses.replace(acquisition, judged=kept, not_measured=reasons),))
        )
    last = sessions[-1].acquisitions[0]
    sessions[-1] = dataclasses.replace(sessions[-1], acquisitions=(dataclasses.replace(last, not_measured=()),))
    text = text_of(render_scanner_report(made.content(sessions)))
    assert "Never measured in this period" in text
    assert "one repeat only: two are needed" in text


def test_a_session_that_measured_nothing_has_its_reasons(made):
    session = made.session(1, made.last_day, {})
    text = text_of(render_scanner_report(made.content([session])))
    assert "not measured: this phantom has no ramps" in text


def test_two_coils_on_one_day_get_charts_of_their_own(made):
    sessions = []
    for number, session in enumerate(made.sessions(4, only=("snr", "ghosting"))):
        body = made.session(
            100 + number,
            session.day,
            {"snr": made.steady["snr"]},
            settings=dataclasses.replace(made.settings, receive_coil="BODY"),
        )
        sessions.append(dataclasses.replace(session, acquisitions=session.acquisitions + body.acquisitions))
    text = text_of(render_scanner_report(made.content(sessions)))
    assert "sphere-170, QA sphere, BODY" in text
    assert "sphere-170, QA sphere, HEAD-20" in text


def test_absent_limits_are_said(made):
    values = {"snr": ("1", 200.0, 1.0, None, None, "")}
    text = text_of(
        render_scanner_report(made.content([made.session(1, made.last_day, values)], limits_sha256="", limits_version=0))
    )
    assert "no limit set" in text
    assert "none are set" in text


def peer(*words):
    return subprocess.run(words, capture_output=True, check=True, text=True).stdout


@pytest.mark.skipif(shutil.which("qpdf") is None, reason="qpdf is not installed")
def test_qpdf_finds_nothing_wrong(year_pdf, tmp_path):
    path = tmp_path / "r.pdf"
    path.write_bytes(year_pdf)
    assert "No syntax or stream encoding errors found" in peer("qpdf", "--check", str(path))


@pytest.mark.skipif(shutil.which("pdfinfo") is None, reason="poppler is not installed")
def test_poppler_agrees_on_tags_title_fonts_and_reading_order(year_pdf, tmp_path):
    path = tmp_path / "r.pdf"
    path.write_bytes(year_pdf)
    info = peer("pdfinfo", str(path))
    assert re.search(r"Tagged:\s+yes", info)
    assert re.search(r"Page size:\s+595\.\d+ x 841\.\d+ pts \(A4\)", info)
    rows = peer("pdffonts", str(path)).splitlines()[2:]
    assert rows
    assert all(re.search(r"\s(yes)\s+(yes|no)\s+(yes|no)\s+\d+\s+\d+$", row) for row in rows)
    text = peer("pdftotext", str(path), "-")
    places = [
        text.index(w)
        for w in ("north-3t", "Out of limits", "Latest session", "Completeness", "Trends", "Record and versions", "Reviewed")
    ]
    assert places == sorted(places)
