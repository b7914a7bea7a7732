"""A department from empty folder to PDF: every command of a first week, and what each says when something is wrong."""

import json
import shutil
from datetime import UTC, date, datetime, time, timedelta

import pypdf
import pytest

SITE = """
[department]
name = "Saltmarsh Imaging"
timezone = "UTC"

[[scanner]]
name = "north-3t"
match = { station = "NORTH3T" }
field_strength_T = 3.0
every_days = 3650

[[expect]]
scanner = "*"
phantom = "sphere-170"
series = "QA sphere*"
patient_id = "QA-*"
settings = { repetition_ms = 500, echo_ms = 20, slice_thickness_mm = 5.0 }

[[limit]]
quantity = "ghosting"
upper = 2.5
source = "invented"
"""


@pytest.fixture
def department(tmp_path):
    place = tmp_path / "department"
    for name in ("inbox", "archive", "refused", "reports"):
        (place / name).mkdir(parents=True)
    (place / "site.toml").write_text(SITE, encoding="utf-8")
    return place


def _send(folder, department, name="scan"):
    shutil.copytree(folder, department / "inbox" / name)


def test_init_starts_a_department_that_loads(evenfield, tmp_path):
    place = tmp_path / "new"
    status, out, err = evenfield("init", place)
    assert (status, out) == (0, "")
    assert "site.toml" in err
    assert sorted(p.name for p in place.iterdir()) == ["archive", "inbox", "refused", "reports", "site.toml"]
    assert evenfield("check", "--site", place)[0] == 3
    status, _, err = evenfield("init", place)
    assert status == 2
    assert "there is one already" in err


def test_from_the_inbox_to_the_report(evenfield, department, scans):
    _send(scans(), department)
    status, out, err = evenfield("ingest", "--site", department)
    assert (status, out) == (0, "")
    assert "1 acquisitions taken in, 0 files known already, 0 refused" in err
    assert list((department / "inbox").iterdir()) == []
    assert len(list((department / "archive" / "north-3t" / "2026-11-23").rglob("*.dcm"))) == 2

    status, out, _ = evenfield("status", "--site", department, "--json")
    document = json.loads(out)
    assert status == 0
    assert (document["format"], document["version"]) == ("evenfield-status", 1)
    (scanner,) = document["scanners"]
    assert {"name", "standing", "last_session", "due", "out", "drifting"} <= set(scanner)
    assert (scanner["name"], scanner["standing"], scanner["last_session"]) == ("north-3t", "within limits", "2026-11-23")

    status, out, _ = evenfield("report", "north-3t", "--site", department, "--as-of", "2026-11-23")
    assert status == 0
    path = department / "reports" / "2026" / "north-3t_2026-11-23.pdf"
    assert out.strip() == str(path)
    pages = pypdf.PdfReader(path).pages
    text = "".join(page.extract_text() for page in pages)
    assert "north-3t" in text
    assert f"page 1 of {len(pages)}" in text
    assert "Percent signal ghosting" in text

    before = path.read_bytes()
    evenfield("report", "north-3t", "--site", department, "--as-of", "2026-11-23")
    assert path.read_bytes() == before
    assert path.with_name("north-3t_2026-11-23_2.pdf").exists()


def test_check_is_silent_when_all_is_well(evenfield, department, scans):
    _send(scans(), department)
    assert evenfield("check", "--site", department) == (0, "", "")
    assert evenfield("check", "--site", department) == (0, "", "")


def test_check_is_loud_when_a_limit_is_passed(evenfield, department, scans):
    _send(scans(ghost_percent=6.0), department)
    status, out, _ = evenfield("check", "--site", department)
    assert status == 1
    assert "north-3t: out of limits: Percent signal ghosting" in out
    assert evenfield("status", "--site", department)[0] == 1


def test_a_series_sent_again_is_skipped(evenfield, department, scans):
    _send(scans(), department)
    evenfield("ingest", "--site", department)
    _send(scans(), department)
    status, _, err = evenfield("ingest", "--site", department)
    assert status == 0
    assert "0 acquisitions taken in, 2 files known already, 0 refused" in err
    assert list((department / "inbox").iterdir()) == []


def test_series_elsewhere_are_copied_and_left_alone(evenfield, department, scans):
    folder = scans()
    before = {p: p.read_bytes() for p in folder.rglob("*.dcm")}
    assert evenfield("ingest", folder, "--site", department)[0] == 0
    assert {p: p.read_bytes() for p in folder.rglob("*.dcm")} == before
    assert len(list((department / "archive").rglob("*.dcm"))) == 2


def test_a_patient_leaves_no_trace(evenfield, department, scans):
    from qa.phantoms import load_phantom
    from qa.simulate import default_setup
    from qa.simulate.misdirected import write_misdirected

    _send(scans(), department)
    write_misdirected(default_setup(load_phantom("sphere-170"), seed=3), department / "inbox" / "Invented^Person_19700101")
    status, out, err = evenfield("check", "--site", department)
    assert status == 3
    assert "not that of a phantom" in out
    evenfield("report", "--site", department, "--as-of", "2026-11-23")
    (moved,) = (department / "refused").rglob("*.dcm")
    assert moved.with_suffix(".txt").read_text().startswith("the patient ID is not that of a phantom")
    secrets = ("Invented^Person", "Invented Person", "19700101", "4711")
    said = out + err
    for path in department.rglob("*"):
        said += path.name
        if path.is_file() and path != moved:
            content = path.read_bytes()
            assert not any(secret.encode() in content for secret in secrets), path
    assert not any(secret in said for secret in secrets)


def test_a_changed_protocol_is_reported_and_not_measured_over(evenfield, department, scans):
    _send(scans(echo_ms=30.0), department)
    status, out, _ = evenfield("check", "--site", department)
    assert status == 3
    assert "echo_ms is 30, expected 20" in out


def test_overdue_is_said(evenfield, department, scans):
    text = (department / "site.toml").read_text("utf-8").replace("every_days = 3650", "every_days = 7\ngrace_days = 2")
    (department / "site.toml").write_text(text, encoding="utf-8")
    long_ago = datetime.now(UTC).replace(tzinfo=None, microsecond=0) - timedelta(days=30)
    _send(scans(acquired_at=long_ago), department)
    status, out, _ = evenfield("check", "--site", department)
    assert status == 3
    assert "north-3t: overdue" in out


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (("every_days", "evry_days"), "evry_days"),
        (('quantity = "ghosting"', 'quantity = "gosting"'), "did you mean 'ghosting'"),
        (("upper = 2.5", "upper = 2.5\nlower = 3.0"), "lower 3 lies above upper 2.5"),
        (("[department]", "[department"), "TOML"),
        (('phantom = "sphere-170"', 'phantom = "sphere-171"'), "sphere-171"),
    ],
)
@pytest.mark.parametrize("command", ["check", "ingest", "status", "report"])
def test_a_wrong_site_file_stops_everything(evenfield, department, command, change, said):
    (department / "inbox" / "waiting.dcm").write_bytes(b"not looked at")
    path = department / "site.toml"
    path.write_text(path.read_text("utf-8").replace(*change), encoding="utf-8")
    status, out, err = evenfield(command, "--site", department)
    assert (status, out) == (2, "")
    assert "site.toml" in err
    assert said in err
    assert len(err.strip().splitlines()) == 1
    assert not (department / "evenfield.db").exists()
    assert list((department / "inbox").iterdir())


def test_no_department_at_all(evenfield, tmp_path):
    status, _, err = evenfield("status", "--site", tmp_path)
    assert status == 2
    assert "evenfield init" in err


def test_the_site_can_come_from_the_environment(evenfield, department, monkeypatch):
    monkeypatch.setenv("EVENFIELD_SITE", str(department))
    assert "north-3t" in evenfield("status")[1]


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("report", "south"), "there is no scanner 'south'"),
        (("report", "--from", "2026-13-01"), "--from"),
        (("report", "--from", "2026-11-02", "--to", "2026-11-01"), "ends before it begins"),
        (("report", "--as-of", "2999-01-01"), "lies in the future"),
        (("report", "--page", "A3"), "A4 or Letter"),
        (("baseline", "accept", "north-3t", "--from", "2020-01-01", "--to", "2020-02-01", "--why", "x"), "no session"),
        (("sign", "north-3t", "--from", "2020-01-01", "--to", "2020-02-01", "--by", "R. Example"), "nothing to sign"),
        (("event", "add", "north-3t", "--kind", "service", "--day", "2999-01-01", "--text", "x"), "future"),
        (("limits", "set", "ghosting", "--upper", "2", "--source", "x", "--why", " "), "reason"),
        (("limits", "what-if", "gone.toml"), "gone.toml"),
    ],
)
def test_wrong_words_are_said_and_nothing_is_done(evenfield, department, words, said):
    status, out, err = evenfield(*words, "--site", department)
    assert (status, out) == (2, "")
    assert said in err
    assert "Traceback" not in err


def test_decisions_are_kept_and_shown(evenfield, department, scans):
    for week in range(3):
        day = datetime.combine(date(2026, 10, 5 + 7 * week), time(8))
        _send(scans(acquired_at=day, seed=20 + week), department, f"w{week}")
    evenfield("ingest", "--site", department)
    text = (department / "site.toml").read_text("utf-8")
    (department / "site.toml").write_text(f"{text}\n[charts]\nbaseline_sessions = 3\n", encoding="utf-8")
    status, out, _ = evenfield(
        "baseline", "accept", "north-3t", "--from", "2026-10-05", "--to", "2026-10-19", "--why", "all well", "--by",
        "R. Example", "--quantity", "snr", "--site", department,
    )  # fmt: skip
    assert status == 0
    assert out.startswith("snr on sphere-170: ")
    assert "R. Example" in evenfield("baseline", "show", "--site", department)[1]

    words = ("--kind", "repair", "--day", "2026-10-20", "--text", "coil plug cleaned", "--by", "R. Example")
    assert evenfield("event", "add", "north-3t", *words, "--site", department)[0] == 0
    assert "coil plug cleaned" in evenfield("event", "list", "--site", department)[1]

    assert evenfield("limits", "set", "ghosting", "--upper", "0.001", "--phantom", "sphere-170", "--source", "invented",
                     "--why", "a test", "--site", department)[0] == 0  # fmt: skip
    shown = evenfield("limits", "show", "--site", department)[1]
    assert any("ghosting" in line and "at most 0.001 %" in line for line in shown.splitlines())
    assert len(evenfield("limits", "history", "--site", department)[1].splitlines()) == 3

    signed = ("sign", "north-3t", "--from", "2026-10-01", "--to", "2026-10-31", "--by", "R. Example", "--site", department)
    assert evenfield(*signed)[0] == 0
    status, out, _ = evenfield("record", "verify", "--site", department)
    assert status == 0
    assert "The record is whole" in out


def test_what_if_changes_nothing(evenfield, department, scans, tmp_path):
    _send(scans(ghost_percent=6.0), department)
    evenfield("ingest", "--site", department)
    trial = tmp_path / "trial.toml"
    trial.write_text(SITE.replace("upper = 2.5", "upper = 50.0"), encoding="utf-8")
    status, out, _ = evenfield("limits", "what-if", trial, "--site", department)
    assert status == 0
    (line,) = [line for line in out.splitlines() if "ghosting" in line]
    assert line.split()[-2:] == ["fail", "pass"]
    assert (department / "site.toml").read_text("utf-8") == SITE


def test_an_altered_record_is_found(evenfield, department, scans):
    import sqlite3

    _send(scans(), department)
    evenfield("ingest", "--site", department)
    with sqlite3.connect(department / "evenfield.db") as connection:
        triggers = connection.execute("select name from sqlite_master where type = 'trigger'").fetchall()
        for (name,) in triggers:
            connection.execute(f'drop trigger "{name}"')
        connection.execute("update measurements set value = value + 1e-9 where quantity = 'snr'")
    connection.close()
    status, out, _ = evenfield("record", "verify", "--site", department)
    assert status == 4
    assert "entry" in out


def test_every_command_explains_itself_with_an_example(evenfield):
    words = [
        ("init",), ("measure",), ("ingest",), ("check",), ("status",), ("report",), ("board",), ("commission",), ("demo",),
        ("sign",),
        ("limits", "show"), ("limits", "set"), ("limits", "history"), ("limits", "what-if"), ("baseline", "accept"),
        ("baseline", "set"), ("baseline", "show"), ("event", "add"), ("event", "list"), ("record", "verify"),
    ]  # fmt: skip
    for command in words:
        status, out, _ = evenfield(*command, "--help")
        assert status == 0
        assert "Example" in out, command


def test_version(evenfield):
    from qa.version import __version__

    assert evenfield("--version") == (0, f"evenfield {__version__}\n", "")


def test_day_of_the_run_is_the_departments(department):
    from qa.pipeline import open_department

    moment = datetime(2026, 11, 23, 23, 30, tzinfo=UTC)
    with open_department(department, moment) as opened:
        assert opened.today == date(2026, 11, 23)
