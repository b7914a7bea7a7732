"""The survey is read from columns; what it says is what the sessions themselves say, and it says when it cannot be trusted."""

import shutil
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import numpy as np
import pytest

from qa.errors import ExitStatus
from qa.geometry import Plane
from qa.judge import assess
from qa.pipeline import open_department, survey
from qa.pipeline.survey import grounds_for
from qa.pipeline.verdicts import judge_outcome
from qa.records import (
    Acquisition,
    Baseline,
    Event,
    Measurement,
    Outcome,
    Scanner,
    Series,
    Settings,
    SourceFile,
)
from qa.store import Intake, Who

FIRST = datetime(2025, 1, 6, 7, 30, tzinfo=UTC)
WHO = Who("ada", "Ada Invented")
PLANE = Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (1.0, 1.0), (4, 4))
SITE = """
[department]
name = "Saltmarsh Imaging"
timezone = "UTC"
[[scanner]]
name = "north-3t"
match = { station = "N" }
field_strength_T = 3.0
[[scanner]]
name = "south-15t"
match = { station = "S" }
field_strength_T = 1.5
[[scanner]]
name = "new"
match = { station = "X" }
field_strength_T = 3.0
since = 2026-01-05
[[expect]]
scanner = "*"
phantom = "sphere-170"
series = "*"
patient_id = "QA-*"
[[limit]]
quantity = "snr"
lower_percent_of_baseline = 90
[[limit]]
quantity = "ghosting"
upper = 1.0
[[limit]]
quantity = "centre_frequency"
per_day = 1e-6
"""


def outcome(number, when, values, *, coil="HEAD", software="1.0"):
    series = Series(
        f"1.2.{number}", f"1.2.{number}", "QA sphere", when.replace(tzinfo=None), "magnitude", 1,
        Scanner("Invented", "Model 7", "N", "1", 3.0, software),
        Settings("QA", "SE", 5.0, None, (1.0, 1.0), (4, 4), 500.0, 20.0, receive_coil=coil, frequency_MHz=127.7 + number),
        (PLANE,), np.zeros((1, 4, 4), np.float32),
        (SourceFile(Path(f"archive/{number}.dcm"), f"1.2.{number}.1", f"{number:064x}"),),
    )  # fmt: skip
    found = tuple(Measurement(name, value, "1", 0.1, "a method", 1, details={"n": number}) for name, value in values.items())
    return Outcome(Acquisition((series,)), "sphere-170", None, found, ())


@pytest.fixture(scope="module")
def built(tmp_path_factory):
    """Sixty weeks of two scanners: the SNR of one falls, the other begins to ghost; new coils and software, a correction."""
    place = tmp_path_factory.mktemp("department")
    (place / "site.toml").write_text(SITE, encoding="utf-8")
    with open_department(place, FIRST + timedelta(weeks=60)) as opened:
        record, site, rng = opened.record, opened.site, np.random.default_rng(8)
        version = record.limits_version(site.limits_json, WHO, FIRST, "first")
        phantom = site.phantoms["sphere-170"]
        for name in ("north-3t", "south-15t"):
            since = Baseline(name, "snr", 200.0, 0.5, 2.0, 10, FIRST.date())
            record.set_baseline(since, today=FIRST.date(), when=FIRST, why="accepted", who=WHO)
        number = 0
        for week in range(60):
            when = FIRST + timedelta(weeks=week)
            for name in ("north-3t", "south-15t"):
                number += 1
                north = name == "north-3t"
                values = {
                    "snr": 200 + rng.normal() - (0.9 * max(week - 45, 0) if north else 0),
                    "ghosting": 0.4 + 0.05 * rng.normal() + (0.8 if not north and week > 56 else 0),
                    "centre_frequency": 127.7 + 1e-7 * rng.normal(),
                }
                one = outcome(number, when, values, coil="HEAD" if week < 20 else "HEAD 2", software="1" if week < 30 else "2")
                one, verdicts = judge_outcome(opened, site.scanner(name), phantom, one, when.date())
                record.store(
                    one, verdicts, scanner_name=name, phantom_sha256=phantom.sha256, limits_version=version,
                    taken_in_at=when, software_version="0", who=WHO,
                )  # fmt: skip
        visit = Event("south-15t", date(2025, 9, 1), "replacement", "new head coil", ("snr",), restarts_baseline=True)
        record.add_event(visit, today=opened.today, when=opened.now, who=WHO)
        wrong = record.sessions("north-3t")[-1].acquisitions[-1]
        again = outcome(number + 1, FIRST + timedelta(weeks=59), {"snr": 186.0, "ghosting": 0.4})
        again, verdicts = judge_outcome(opened, site.scanner("north-3t"), phantom, again, date(2026, 2, 23))
        record.replace(
            wrong.identifier,
            Intake(again, verdicts, "north-3t", phantom.sha256, version, opened.now, "0"),
            why="measured again", who=WHO,
        )  # fmt: skip
    return place


@pytest.fixture
def place(built, tmp_path):
    return shutil.copytree(built, tmp_path / "department")


@pytest.fixture
def department(place):
    with open_department(place, FIRST + timedelta(weeks=60)) as opened:
        yield opened


def said(one):
    """All that an assessment says, its streams' figures and charts included; of their verdicts the latest."""
    quantities = [
        (
            s.quantity, s.stream.phantom, s.stream.coil, s.stream.acquisitions, s.stream.values.tolist(),
            s.stream.uncertainties.tolist(), s.stream.days.tolist(), s.stream.starts, s.stream.latest, s.stream.out.tolist(),
            s.verdict, s.not_judged, s.control, s.rules, s.alarm_since, s.shift, s.shift_sigmas, s.worse, s.margin_used,
            s.trend, s.forecast, s.onset, s.baseline, s.out_since, s.superseded, s.absent_since, s.drifting,
            np.nan_to_num(s.chart.smoothed).tolist(), np.nan_to_num(s.chart.upper).tolist(), s.chart.out.tolist(),
        )
        for s in one.quantities
    ]  # fmt: skip
    return (
        one.scanner_name, one.standing, one.sentence, one.reasons, one.out, one.drifting, one.out_of_control,
        one.last_session, one.due, one.days_overdue, one.kept, one.causes, one.remarks, quantities,
    )  # fmt: skip


@pytest.mark.parametrize("day", [date(2026, 2, 25), date(2025, 11, 30), date(2025, 2, 1), date(2024, 1, 1)])
def test_it_says_what_the_sessions_say(department, day):
    found = survey(department, day)
    assert [one.scanner_name for one in found.assessments] == ["north-3t", "south-15t", "new"]
    for scanner, one in zip(department.site.scanners, found.assessments, strict=True):
        sessions = department.record.sessions(scanner.name, to_day=day)
        assert said(one) == said(assess(scanner.name, sessions, grounds_for(department, scanner), day))


def test_it_finds_what_there_is_to_find(department):
    north, south, new = survey(department, date(2026, 2, 25)).assessments
    assert (north.standing, north.drifting) == ("drifting", ("snr",))
    assert (south.standing, south.out) == ("out of limits", ("ghosting",))
    assert south.reasons[0].endswith("since 2026-02-09")
    assert (new.standing, new.quantities) == ("overdue", ())
    assert {s.quantity: len(s.stream.starts) for s in south.quantities} == {"snr": 4, "ghosting": 3, "centre_frequency": 3}
    assert survey(department, date(2026, 2, 25)).exit_status() == ExitStatus.OUT_OF_LIMITS


def test_a_clock_that_jumped_back_needs_a_person(place, department):
    assert survey(department).clock == ""
    with open_department(place, FIRST + timedelta(weeks=10)) as early:
        found = survey(early)
    assert found.clock.startswith("this machine's clock stands 350 days before")
    assert found.sentences == (found.clock,)
    assert found.exit_status() == ExitStatus.NEEDS_A_PERSON


def test_what_was_added_to_a_signed_period_is_said(department):
    record, now = department.record, department.now
    period = date(2025, 1, 1), date(2025, 3, 31)
    assert survey(department).remarks == ()
    record.sign("south-15t", *period, comment="seen", who=WHO, today=department.today, when=now)
    record.sign("north-3t", *period, comment="seen", who=WHO, today=department.today, when=now)
    assert survey(department).remarks == ()
    gone = [s.acquisitions[0].identifier for s in record.sessions("north-3t", *period)[:2]]
    for number in gone:
        record.withdraw(number, why="another phantom", when=now, who=WHO)
    (remark,) = survey(department).remarks
    assert remark == (
        "north-3t: 2 acquisitions were added, corrected or withdrawn after Ada Invented had signed the period from "
        "2025-01-01 to 2025-03-31 off"
    )
    record.sign("north-3t", *period, comment="seen again", who=Who("bob", "Bob"), today=department.today, when=now)
    assert survey(department).remarks == ()


def test_the_change_since_the_session_before_is_judged_by_the_latest_that_has_the_quantity(department):
    scanner, phantom = department.site.scanner("south-15t"), department.site.phantoms["sphere-170"]
    last = department.record.sessions("south-15t")[-1].acquisitions[-1].judged[2].measurement
    one = outcome(999, FIRST + timedelta(weeks=61), {"centre_frequency": last.value + 10e-6})
    for weeks, lower in ((60, last.value - 7e-6), (61, last.value - 14e-6)):
        day = (FIRST + timedelta(weeks=weeks)).date()
        (verdict,) = judge_outcome(department, scanner, phantom, one, day)[1]
        assert verdict.lower == pytest.approx(lower, abs=1e-12)
        assert verdict.conformity == ("fail" if weeks == 60 else "pass")
    late = (FIRST + timedelta(weeks=59, days=500)).date()
    assert judge_outcome(department, scanner, phantom, one, late)[1] == (None,)
