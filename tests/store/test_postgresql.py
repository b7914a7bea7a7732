"""The same record on PostgreSQL: a server of the test's own, where the programs for one are installed."""

import os
import shutil
import subprocess
import sys
import tempfile
import textwrap
from contextlib import closing
from dataclasses import replace
from datetime import date, timedelta
from importlib.util import find_spec
from pathlib import Path

import pytest

from qa.errors import FaultError, UsageError
from qa.store import open_record
from qa.store.tables import CONTENT_TABLES

SERVER = shutil.which("pg_ctl"), shutil.which("initdb")
ROOT = os.name == "posix" and os.geteuid() == 0
OTHER_USER = shutil.which("setpriv") and Path("/etc/passwd").read_text().find("\npostgres:") >= 0

pytestmark = [
    pytest.mark.skipif(find_spec("psycopg") is None, reason="needs psycopg"),
    pytest.mark.skipif(None in SERVER, reason="needs PostgreSQL's server programs"),
    pytest.mark.skipif(ROOT and not OTHER_USER, reason="PostgreSQL does not run as root, and there is no other user"),
]


def run(*arguments):
    """Run one of the server's programs, as its own user where the tests run as root."""
    drop = ["setpriv", "--reuid=postgres", "--regid=postgres", "--clear-groups"] if ROOT else []
    subprocess.run([*drop, *map(str, arguments)], check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, cwd="/")


@pytest.fixture(scope="module")
def server():
    """Where a server listens: a folder with its socket."""
    # Not in pytest's own folder, whose parents the server's user may not enter.
    with tempfile.TemporaryDirectory(prefix="evenfield-pg-") as name:
        folder = Path(name)
        if ROOT:
            shutil.chown(folder, "postgres")
        run(SERVER[1], "-D", folder / "data", "-A", "trust", "-U", "evenfield", "--no-sync", "-E", "UTF8", "--locale=C")
        options = f"-c listen_addresses='' -c unix_socket_directories='{folder}' -c fsync=off"
        run(SERVER[0], "-D", folder / "data", "-o", options, "-l", folder / "log", "-w", "start")
        try:
            yield folder
        finally:
            run(SERVER[0], "-D", folder / "data", "-m", "immediate", "-w", "stop")


@pytest.fixture
def url(server, request):
    import psycopg

    name = f"t{abs(hash(request.node.name))}"
    with closing(psycopg.connect(host=str(server), user="evenfield", dbname="postgres", autocommit=True)) as connection:
        connection.execute(f"CREATE DATABASE {name}")
    return f"postgresql+psycopg://evenfield@/{name}?host={server}"


@pytest.fixture
def database(url):
    """A plain connection, as another hand would have it."""
    import psycopg

    with closing(psycopg.connect(url.replace("+psycopg", ""), autocommit=True)) as connection:
        yield connection


def test_a_record_on_a_server_says_the_same_as_one_in_a_file(url, path, make):
    found = []
    for place in (url, path):
        with open_record(place) as record:
            make.fill(record)
            make.decide(record)
            assert record.verify().problems == ()
            history = record.history()
            found.append((
                record.head(), record.sessions(), record.events(), record.baselines(), record.sign_offs(), record.limit_sets(),
                record.refusals(), record.last_days(), history.values.tolist(), history.identifiers.tolist(),
                record.known_files([f"{2:032x}{0:032x}", "x"]),
            ))  # fmt: skip
    assert found[0] == found[1]


def test_opening_it_again_changes_nothing(url, make):
    with open_record(url) as record:
        make.fill(record)
        before = record.head()
    with open_record(url) as record:
        assert record.head() == before
        assert record.store_all([make.intake(1)]) == (3,)


def test_a_record_that_is_not_there(url):
    with pytest.raises(FaultError, match="there is no record yet"):
        open_record(url, create=False)


def test_the_server_refuses_what_the_record_never_does(url, database, make):
    import psycopg

    with open_record(url) as record:
        make.fill(record)
        make.decide(record)
    for table in ("entries", *(table.name for table in CONTENT_TABLES)):
        key = "number" if table == "entries" else "entry"
        for attempt in (f"UPDATE {table} SET {key} = {key}", f"DELETE FROM {table}", f"TRUNCATE {table} CASCADE"):
            with pytest.raises(psycopg.Error, match="append-only"):
                database.execute(attempt)
    with pytest.raises(psycopg.Error, match="newest entry only"):
        database.execute("INSERT INTO not_measured VALUES (3, 99, 'snr', 'slipped in')")
    with pytest.raises(psycopg.Error, match="must follow the last one"):
        database.execute("INSERT INTO entries VALUES (99, 'x', '', '', '', '', '', NULL, '', 'a')")


def test_what_was_forged_is_found(url, database, make):
    with open_record(url) as record:
        make.fill(record)
        database.execute("ALTER TABLE measurements DISABLE TRIGGER measurements_no_change")
        database.execute("UPDATE measurements SET value = value + 1e-9 WHERE entry = 4 AND position = 2")
        database.execute("DROP TRIGGER files_newest ON files")
        said = record.verify().problems
    assert said[0].startswith("entry 4 (acquisition")
    assert said[1:] == (
        "trigger files_newest is missing: the record is not protected as it should be",
        "trigger measurements_no_change was changed by another hand",
    )


def test_all_of_one_call_is_stored_or_nothing(url, make):
    with open_record(url) as record:
        record.limits_version("[]", make.who, make.now, "first")
        with pytest.raises(UsageError, match="no date"):
            record.store_all([make.intake(1), make.intake(outcome=make.outcome(make.series(9, when=None)))])
        assert record.head().number == 1
        assert record.known_files([f"{2:032x}{0:032x}"]) == set()


def test_corrections_and_signatures(url, make):
    with open_record(url) as record:
        make.fill(record)
        old = record.sessions()[0].acquisitions[0].identifier
        better = replace(make.intake(1).outcome, measurements=(make.measurement(value=1.0),))
        new = record.replace(old, make.intake(outcome=better), why="again")
        assert record.sessions()[0].acquisitions[0].identifier == new
        today = date(2026, 3, 31)
        record.sign("north-3t", date(2026, 3, 1), today, comment="", who=make.who, today=today, when=make.now + timedelta(30))
        late = record.store_all([make.intake(9, day=3)])[0]
        assert record.added_since(record.sign_offs()[0]) == (late,)
        assert record.added_to_signed() == {record.sign_offs()[0].entry: (late,)}
        assert record.verify().whole


def test_programs_that_start_and_write_at_once_lose_nothing(url):
    code = """
        import sys
        sys.path.insert(0, sys.argv[1])
        from conftest import Maker
        from qa.store import open_record

        make, first = Maker(), int(sys.argv[3])
        with open_record(sys.argv[2]) as record:
            record.limits_version("[]", make.who, make.now, "first")
            for n in range(first, first + 10):
                record.store_all([make.intake(n, day=n % 4)])
    """
    arguments = [sys.executable, "-c", textwrap.dedent(code), str(Path(__file__).parent), url]
    started = [subprocess.Popen([*arguments, first], stderr=subprocess.PIPE) for first in ("100", "200", "200")]
    assert [(one.communicate()[1], one.returncode) for one in started] == [(b"", 0)] * 3
    with open_record(url) as record:
        assert record.verify().whole
        assert record.head().number == 21
        assert sum(len(s.acquisitions) for s in record.sessions()) == 20
