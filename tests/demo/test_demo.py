"""The demo, built once: what it promises is there, and its three faults are found as a physicist would want."""

from datetime import date, timedelta

import pypdf
import pytest

from qa.demo import build_demo
from qa.demo.plan import FAULTS_BEGIN, LAST_MONDAY, plan
from qa.errors import UsageError
from qa.judge import assess
from qa.phantoms import phantom_names
from qa.pipeline import open_department
from qa.pipeline.survey import grounds_for

FAULTS = {
    "north-3t": ("receive element", {"snr", "uniformity_piu"}),
    "south-1t5": ("ghosts after service", {"ghosting"}),
    "west-3t": ("gradient along rows", {"scale_x", "distortion_max"}),
}


@pytest.fixture(scope="module")
def built(tmp_path_factory):
    folder = tmp_path_factory.mktemp("demo") / "saltmarsh"
    return folder, list(build_demo(folder))


@pytest.fixture(scope="module")
def mondays(built):
    """Every scanner's assessment as it was on each of its Mondays."""
    with open_department(built[0]) as department:
        found = {}
        for scanner in department.site.scanners:
            history = department.record.sessions(scanner.name)
            grounds = grounds_for(department, scanner)
            found[scanner.name] = [assess(scanner.name, history, grounds, session.day) for session in history]
    return found


def test_all_shipped_phantoms_are_in_use():
    assert {scan.setup.phantom.name for scan in plan()} == set(phantom_names())


def test_the_year_is_52_weeks_of_three_scanners_of_two_field_strengths():
    scans = plan()
    days = sorted({scan.day for scan in scans})
    assert (days[0], days[-1]) == (LAST_MONDAY - timedelta(weeks=52), LAST_MONDAY)
    assert {scan.setup.field_strength_T for scan in scans} == {1.5, 3.0}
    assert len({scan.scanner_name for scan in scans}) == 3


def test_same_plan_same_seeds():
    assert [scan.setup.seed for scan in plan()] == [scan.setup.seed for scan in plan()]
    assert len({scan.setup.seed for scan in plan()}) == len(plan())


def test_the_last_lines_say_what_to_open_first(built):
    folder, lines = built
    first = next(line for line in lines if line.startswith("Open first: "))
    path = first.removeprefix("Open first: ")
    assert path.startswith(str(folder))
    assert pypdf.PdfReader(path).pages
    assert any("qualified MR medical physicist" in line for line in lines)


def test_each_scanner_has_its_report(built):
    folder, _ = built
    for name in FAULTS:
        path = folder / "reports" / "2026" / f"{name}_{LAST_MONDAY.isoformat()}.pdf"
        text = "".join(page.extract_text() for page in pypdf.PdfReader(path).pages)
        assert name in text


def test_two_weeks_are_missed(mondays):
    missed = {name: assessments[-1].kept.missed for name, assessments in mondays.items()}
    assert {name: len(days) for name, days in missed.items()} == {"north-3t": 0, "south-1t5": 1, "west-3t": 1}


def test_the_patients_series_was_refused(built):
    folder, _ = built
    (refused,) = (folder / "refused").rglob("*.dcm")
    assert "not that of a phantom" in refused.with_suffix(".txt").read_text("utf-8")


def test_the_crooked_set_up_is_seen(built):
    with open_department(built[0]) as department:
        sessions = department.record.sessions("west-3t")
    tilts = {
        session.day: judged.measurement.value
        for session in sessions
        for acquisition in session.acquisitions
        if acquisition.phantom == "cylinder-200"
        for judged in acquisition.judged
        if judged.measurement.quantity == "setup_tilt"
    }
    worst = max(tilts, key=tilts.get)
    assert worst == LAST_MONDAY - timedelta(weeks=52 - 9)
    assert tilts[worst] == pytest.approx(5.0, abs=0.8)


@pytest.mark.parametrize("name", FAULTS)
def test_a_flag_comes_before_the_first_fail(mondays, name):
    began: date = FAULTS_BEGIN[name]
    flagged = next(a.today for a in mondays[name] if a.today >= began and (a.standing != "within limits" or a.out_of_control))
    failed = next(a.today for a in mondays[name] if a.out)
    assert began <= flagged < failed


@pytest.mark.parametrize("name", FAULTS)
def test_the_first_thing_to_look_at_is_the_true_cause(mondays, name):
    cause, quantities = FAULTS[name]
    out = [a for a in mondays[name] if a.standing == "out of limits"]
    assert out
    assert set(out[0].out) <= quantities
    assert out[0].causes[0].name == cause


@pytest.mark.parametrize("name", FAULTS)
def test_all_is_well_before_a_fault_begins(mondays, name):
    before = [a.standing for a in mondays[name] if a.today < FAULTS_BEGIN[name]]
    assert set(before) == {"within limits"}


def test_a_folder_in_use_is_left_alone(tmp_path):
    (tmp_path / "mine.txt").write_text("mine")
    with pytest.raises(UsageError, match="not empty"):
        list(build_demo(tmp_path))
    with pytest.raises(UsageError, match="is a file"):
        list(build_demo(tmp_path / "mine.txt"))
    assert [p.name for p in tmp_path.iterdir()] == ["mine.txt"]
