import dataclasses

from qa.report.content import Notice, RefusedSeries
from qa.report.mail import FleetNews, ScannerNews, compose_mail


def news(made, **changes):
    found = FleetNews(
        "Saltmarsh Imaging",
        made.last_day,
        (
            ScannerNews("west-3t", "within limits", "Within limits in the session of 2026-11-23."),
            ScannerNews("east-1t5", "overdue", "Overdue: the session due on 2026-11-02 is 21 days late."),
            ScannerNews(
                "north-3t", "out of limits", "Out of limits: ghosting is 2.9 %, limit at most 2.5 %.",
                (
                    Notice("out of limits", "Ghosting is 2.9 %, limit at most 2.5 %."),
                    Notice("drifting", "signal falls -3 % a month"),
                ),
                "reports/2026/north-3t_2026-11-23.pdf",
            ),
        ),
        (RefusedSeries(made.last_day, "inbox/x.dcm", "not a DICOM file"),),
        software_version="0.1.0",
    )  # fmt: skip
    return dataclasses.replace(found, **changes)


def test_the_gravest_comes_first_and_each_thing_once(made):
    mail = compose_mail(news(made))
    assert mail.subject == "MR quality assurance: 1 out of limits, 1 overdue, 1 refused (Saltmarsh Imaging, 23 Nov 2026)"
    assert (
        mail.plain.index("north-3t: OUT OF LIMITS")
        < mail.plain.index("east-1t5: OVERDUE")
        < mail.plain.index("west-3t: within")
    )
    assert mail.plain.count("hosting is 2.9 %") == 1
    assert "drifting: signal falls \u22123 % a month." in mail.plain
    assert "The session due on 2 Nov 2026 is 21 days late." in mail.plain
    assert "reports/2026/north-3t_2026-11-23.pdf" in mail.plain
    assert "23 Nov 2026, inbox/x.dcm: not a DICOM file" in mail.plain
    assert max(map(len, mail.plain.splitlines())) <= 78


def test_html_says_the_same(made):
    mail = compose_mail(news(made))
    for words in ("north-3t: out of limits", "is 21 days late.", "not a DICOM file", "do not replace the judgement"):
        assert words in mail.html
    assert "src=" not in mail.html


def test_all_well_is_said_in_the_subject(made):
    mail = compose_mail(news(made, scanners=news(made).scanners[:1], refused=()))
    assert mail.subject.startswith("MR quality assurance: all 1 scanner within limits")


def test_no_name_starts_another_header_or_runs(made):
    evil = "x\r\nBcc: all@example.test\n\u2028<script>alert(1)</script>"
    scanner = ScannerNews(evil, "overdue", evil, (Notice("due", evil),), evil)
    mail = compose_mail(
        news(made, department=evil, scanners=(scanner,), refused=(RefusedSeries(made.last_day, evil, evil),), note=evil)
    )
    assert "\n" not in mail.subject
    assert "\r" not in mail.subject
    assert not any(line.startswith("Bcc:") for line in mail.plain.splitlines())
    assert "<script>" not in mail.html
    assert len(mail.subject) <= 200


def test_many_refusals_are_counted_and_not_listed(made):
    many = tuple(RefusedSeries(made.last_day, f"file {n}", "not a DICOM file") for n in range(500))
    mail = compose_mail(news(made, refused=many))
    assert "and 488 more." in mail.plain
    assert mail.plain.count("not a DICOM file") == 12
