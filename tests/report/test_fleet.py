import dataclasses
import io
import json
from datetime import date, timedelta

import pytest
from pypdf import PdfReader

from qa.judge import FleetRow, Grounds, Schedule, assess
from qa.records import Event
from qa.report.fleet import lay_out_fleet, render_fleet_report
from qa.report.fleet_content import FleetReport, fleet_scanner, mondays, weeks_of

FIRST, LAST = date(2025, 12, 1), date(2026, 11, 23)
SCHEDULE = Schedule(7, 2)


def renamed(sessions, name):
    return tuple(
        dataclasses.replace(
            session,
            scanner_name=name,
            acquisitions=tuple(dataclasses.replace(a, scanner_name=name) for a in session.acquisitions),
        )
        for session in sessions
    )


def ghosted(made, session, week):
    """The same session with ghosting above its limit, a little more each week."""
    (acquisition,) = session.acquisitions
    values = {"ghosting": ("%", 3.0 + 0.01 * week, 0.06, None, 2.5, "at most 2.5 %")}
    bad = made.session(acquisition.identifier, session.day, values).acquisitions[0].judged
    kept = tuple(j for j in acquisition.judged if j.measurement.quantity != "ghosting")
    return dataclasses.replace(session, acquisitions=(dataclasses.replace(acquisition, judged=(*kept, *bad)),))


@pytest.fixture(scope="module")
def gather(made):
    """A scanner with two quantities; week 17 and 18 missed; ghosting out from a chosen week on until another."""

    def build(name, *, out=range(0), skip=(17, 18), events=(), schedule=SCHEDULE):
        weeks = enumerate(made.sessions(52, only=("ghosting", "uniformity_piu"), ghost_step=2.0))
        sessions = [ghosted(made, session, week) if week in out else session for week, session in weeks if week not in skip]
        sessions = renamed(sessions, name)
        events = tuple(dataclasses.replace(e, scanner_name=name) for e in events)
        assessment = assess(name, sessions, Grounds(events=events, schedule=schedule), LAST)
        return fleet_scanner(
            assessment, sessions, schedule=schedule, events=events, first=FIRST, last=LAST, description="Meridian, 3 T"
        )

    return build


@pytest.fixture(scope="module")
def fleet(gather):
    repair = Event("", date(2026, 7, 1), "repair", "Gradient amplifier exchanged", ("ghosting",))
    return FleetReport(
        "Saltmarsh Imaging", FIRST, LAST,
        (gather("east-1t5"), gather("north-3t", out=range(26, 31), events=(repair,)), gather("west-3t", out=range(48, 52))),
        "0.1.0", 3, "c4" * 32, "9f" * 32, LAST,
    )  # fmt: skip


def states(scanner):
    return {week.monday: week.state for week in scanner.weeks}


def test_weeks_tell_what_each_session_found(fleet):
    quiet, mended, broken = fleet.scanners
    monday = FIRST + timedelta(weeks=17)
    assert states(quiet)[monday] == states(quiet)[monday + timedelta(weeks=1)] == "missed"
    assert "out of limits" not in states(quiet).values()
    assert [m for m, s in states(mended).items() if s == "out of limits"] == [
        FIRST + timedelta(weeks=n) for n in range(26, 31)
    ]
    assert [m for m, s in states(broken).items() if s == "out of limits"] == [
        FIRST + timedelta(weeks=n) for n in range(48, 52)
    ]
    assert len(quiet.weeks) == 52


def test_completeness_counts_what_was_due(fleet):
    quiet = fleet.scanners[0]
    assert (quiet.expected, quiet.made, len(quiet.missed)) == (52, 50, 2)


def test_episodes_have_beginning_end_worst_and_remedy(fleet):
    _, mended, broken = fleet.scanners
    (episode,) = mended.episodes
    assert (episode.began, episode.ended) == (FIRST + timedelta(weeks=26), FIRST + timedelta(weeks=31))
    assert (episode.sessions, episode.worst) == (5, pytest.approx(3.30))
    assert episode.cause == "over after repair on 1 Jul 2026: Gradient amplifier exchanged"
    (lasting,) = broken.episodes
    assert lasting.ended is None
    assert lasting.began == FIRST + timedelta(weeks=48)


def test_downtime_and_weeks_before_the_first_session_are_not_missed(gather):
    away = Schedule(7, 2, downtimes=((date(2026, 3, 23), date(2026, 4, 12)),))
    scanner = gather("south-1t5", skip=(16, 17, 18), schedule=away)
    assert [states(scanner)[FIRST + timedelta(weeks=n)] for n in (16, 17, 18)] == ["downtime"] * 3
    assert scanner.missed == ()


def test_a_period_is_cut_into_its_weeks():
    assert mondays(date(2026, 11, 18), date(2026, 11, 24)) == [date(2026, 11, 16), date(2026, 11, 23)]


def test_the_pages_say_it_in_words(fleet):
    reader = PdfReader(io.BytesIO(render_fleet_report(fleet)))
    text = " ".join(" ".join(page.extract_text() for page in reader.pages).split())
    for words in (
        "Of 3 scanners, 1 out of limits", "Week by week", "within limits", "out of limits", "50 of 52, 96\u2009%",
        "over after repair on 1 Jul 2026", "lasts", "do not replace the judgement",
    ):  # fmt: skip
        assert " ".join(words.split()) in text, words
    assert reader.metadata.title == "Fleet report: Saltmarsh Imaging, 23 Nov 2026"
    document = json.loads(reader.attachments["fleet.json"][0])
    assert [scanner["name"] for scanner in document["scanners"]] == ["east-1t5", "north-3t", "west-3t"]


def test_same_fleet_same_bytes(fleet):
    assert render_fleet_report(fleet) == render_fleet_report(fleet)


def test_calendar_cells_add_up_and_are_named(fleet):
    page, _ = lay_out_fleet(fleet)
    assert sum(columns for columns, _ in page.months) == 52
    for row in page.calendar:
        assert sum(cell.columns for cell in row.cells) == 52
    broken = page.calendar[2]
    assert (broken.cells[-1].columns, broken.cells[-1].text) == (4, "O")
    assert broken.cells[-1].words == "out of limits, 4 weeks from 2 Nov 2026 to that of 23 Nov 2026"


def test_long_periods_share_columns_and_keep_the_gravest_week(fleet):
    long = dataclasses.replace(fleet, first_day=date(2021, 12, 6))
    page, _ = lay_out_fleet(long)
    columns = sum(columns for columns, _ in page.months)
    assert columns <= 56
    assert "with the gravest of them" in page.column_words
    assert any(cell.style == "out-of-limits" for cell in page.calendar[1].cells)


def test_a_model_is_compared_and_the_odd_one_marked(fleet):
    rows = [
        FleetRow(
            "Meridian, 3 T",
            "snr",
            "sphere-170",
            "1",
            f"s{n:02d}",
            value,
            2.0,
            200.0,
            8,
            apart,
            apart is not None and apart > 3.5,
        )
        for n, (value, apart) in enumerate([(200.1, 0.1), (199.0, -0.4), (201.0, 0.5), (230.0, 14.2), *[(200.0, 0.0)] * 4])
    ]
    page, _ = lay_out_fleet(dataclasses.replace(fleet, comparison=tuple(rows)))
    first, second = page.compared
    assert first.title == "Meridian, 3 T, 1 to 6 of 8"
    assert first.rows[0] == (
        "Signal-to-noise ratio, two images, sphere-170",
        (("200.1", False), ("199.0", False), ("201.0", False), ("230.0 (+14)", True), ("200.0", False), ("200.0", False)),
    )
    assert second.names == ("s06", "s07")


def test_a_department_without_scanners_or_sessions_has_a_report(fleet):
    bare = assess("new", (), Grounds(schedule=SCHEDULE), LAST)
    scanner = fleet_scanner(bare, (), schedule=SCHEDULE, events=(), first=FIRST, last=LAST)
    for scanners in ((), (scanner,)):
        pdf = render_fleet_report(dataclasses.replace(fleet, scanners=scanners))
        assert len(PdfReader(io.BytesIO(pdf)).pages) >= 1
    assert weeks_of(bare, (), SCHEDULE, (), first=FIRST, last=LAST)[0].state == "not due"
