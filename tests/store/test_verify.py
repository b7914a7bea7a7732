"""Whatever is done to the file, `verify` finds it; each test does it the way somebody who knows SQLite would."""

import random
import sqlite3

import pytest

from qa.errors import FaultError, UsageError
from qa.store import Head, open_record
from qa.store.chain import entry_hash
from qa.store.tables import CONTENT_TABLES

GUARDS = "SELECT name, sql FROM sqlite_master WHERE type = 'trigger'"


class Forger:
    """Takes the triggers away, changes something, and puts them back as they were."""

    def __init__(self, path):
        self.connection = sqlite3.connect(path, isolation_level=None)
        self.connection.execute("PRAGMA synchronous = OFF")
        self.connection.execute("BEGIN")
        self.guards = self.connection.execute(GUARDS).fetchall()
        for name, _ in self.guards:
            self.connection.execute(f"DROP TRIGGER {name}")

    def __enter__(self):
        return self.connection

    def __exit__(self, *_):
        for _, sql in self.guards:
            self.connection.execute(sql)
        self.connection.execute("COMMIT")
        self.connection.close()


def problems(path, anchors=()):
    with open_record(path) as record:
        return record.verify(anchors).problems


def dump(path):
    """All that the record says: every row of every table."""
    connection = sqlite3.connect(f"file:{path}?mode=ro", uri=True)
    connection.text_factory = bytes
    names = ["entries", *(table.name for table in CONTENT_TABLES)]
    found = {name: connection.execute(f"SELECT * FROM {name} ORDER BY 1, 2").fetchall() for name in names}
    connection.close()
    return found


def test_an_untouched_record_is_whole(copy):
    with open_record(copy) as record:
        found = record.verify([("the report of 2026-03-02", record.head())])
        assert found.whole
        assert found.head == record.head()
        assert found.remarks == ()


COLUMNS = [
    (table.name, column.name) for table in CONTENT_TABLES for column in table.c if column.name not in {"entry", "position"}
]


@pytest.mark.parametrize(("table", "column"), COLUMNS, ids=[f"{t}.{c}" for t, c in COLUMNS])
def test_a_changed_value_is_found_in_every_column(copy, table, column):
    with Forger(copy) as connection:
        number, kind = connection.execute(f"SELECT entry, typeof({column}) FROM {table} LIMIT 1").fetchone()
        value = {"text": f"{column} || 'x'", "integer": f"{column} + 1", "real": f"{column} + 1e-9", "null": "1"}[kind]
        where = (
            "WHERE rowid = (SELECT MIN(rowid) FROM"
            if "position" not in columns(table)
            else "WHERE (entry, position) = (SELECT entry, MIN(position) FROM"
        )
        connection.execute(f"UPDATE {table} SET {column} = {value} {where} {table} WHERE entry = {number})")
    said = problems(copy)
    assert said[0].startswith(f"entry {number} (")
    assert "was altered" in said[0]
    assert len(said) == 1


def columns(table):
    return {column.name for one in CONTENT_TABLES if one.name == table for column in one.c}


@pytest.mark.parametrize("column", ["kind", "written_at", "user", "name", "why", "remark", "previous", "hash"])
def test_a_changed_header_is_found(copy, column):
    with Forger(copy) as connection:
        connection.execute(f"UPDATE entries SET {column} = {column} || 'x' WHERE number = 3")
    said = problems(copy)
    assert said[0].startswith("entry 3 (")
    assert "altered" in said[0]


def test_an_entry_removed_from_the_middle_is_found(copy):
    with Forger(copy) as connection:
        for table in CONTENT_TABLES:
            connection.execute(f"DELETE FROM {table.name} WHERE entry = 4")
        connection.execute("DELETE FROM entries WHERE number = 4")
    assert problems(copy)[0].startswith("entry 4 is missing before entry 5 (")


def test_entries_moved_up_to_close_a_gap_are_found(copy):
    with Forger(copy) as connection:
        for table in CONTENT_TABLES:
            connection.execute(f"DELETE FROM {table.name} WHERE entry = 4")
            connection.execute(f"UPDATE {table.name} SET entry = entry - 1 WHERE entry > 4")
        connection.execute("DELETE FROM entries WHERE number = 4")
        connection.execute("UPDATE entries SET number = number - 1 WHERE number > 4")
    said = problems(copy)
    assert any(line.startswith("entry 4 (") and "does not carry the hash of the entry before" in line for line in said)


def test_two_entries_exchanged_are_found(copy):
    with Forger(copy) as connection:
        for step in ((3, 99), (4, 3), (99, 4)):
            for table in CONTENT_TABLES:
                connection.execute(f"UPDATE {table.name} SET entry = ?2 WHERE entry = ?1", step)
            connection.execute("UPDATE entries SET number = ?2 WHERE number = ?1", step)
    said = problems(copy)
    assert any(line.startswith("entry 3 (") for line in said)
    assert any(line.startswith("entry 4 (") for line in said)


def test_an_entry_hashed_anew_breaks_the_link_to_the_next(copy):
    with Forger(copy) as connection:
        connection.execute("UPDATE limit_sets SET content = '[]' WHERE entry = 1")
        header = list(connection.execute("SELECT * FROM entries WHERE number = 1").fetchone()[:9])
        row = list(connection.execute("SELECT * FROM limit_sets WHERE entry = 1").fetchone()[1:])
        connection.execute("UPDATE entries SET hash = ? WHERE number = 1", (entry_hash(header, [("limit_sets", [row])]),))
    said = problems(copy)
    assert said[0].startswith("entry 2 (")
    assert "does not carry the hash of the entry before" in said[0]
    assert any("evenfield.db.heads, line 1, knows entry 1 with another hash" in line for line in said)


def rebuild(connection):
    """Make the whole chain anew, as somebody would who knows how it is made."""
    previous = ""
    for header in connection.execute("SELECT * FROM entries ORDER BY number").fetchall():
        content = []
        for table in CONTENT_TABLES:
            order = "position" if "position" in table.c else "entry"
            query = f"SELECT * FROM {table.name} WHERE entry = ? ORDER BY {order}"
            if rows := [row[1:] for row in connection.execute(query, header[:1])]:
                content.append((table.name, rows))
        new = [*header[:8], previous]
        previous = entry_hash(new, content)
        connection.execute("UPDATE entries SET previous = ?, hash = ? WHERE number = ?", (new[8], previous, header[0]))


def test_a_chain_made_anew_is_found_by_any_head_known_from_elsewhere(copy):
    with open_record(copy) as record:
        printed = record.head()
    with Forger(copy) as connection:
        connection.execute("UPDATE measurements SET value = 300 WHERE entry = 3 AND position = 1")
        rebuild(connection)
    assert any("knows entry 3 with another hash" in line for line in problems(copy))
    copy.with_name("evenfield.db.heads").unlink()
    assert problems(copy) == ()
    assert problems(copy, [("the report", printed)]) == (
        f"the report knows entry {printed.number} with another hash: the record was made anew from there or before",
    )


def test_an_end_that_was_cut_off_is_found_by_the_heads_file(copy):
    with open_record(copy) as record:
        last = record.head().number
    with Forger(copy) as connection:
        for table in CONTENT_TABLES:
            connection.execute(f"DELETE FROM {table.name} WHERE entry = {last}")
        connection.execute(f"DELETE FROM entries WHERE number = {last}")
    assert problems(copy) == (
        f"evenfield.db.heads, line {last}, knows entry {last}, but the record ends with entry {last - 1}: its end was cut off",
    )
    heads = copy.with_name("evenfield.db.heads")
    heads.write_text("".join(heads.read_text().splitlines(keepends=True)[:-1]))
    assert problems(copy) == ()
    assert len(problems(copy, [("the mail of Monday", Head(last, "f" * 64))])) == 1


def test_a_heads_file_scribbled_over_is_no_proof_of_a_whole_record(copy):
    heads = copy.with_name("evenfield.db.heads")
    heads.write_bytes(heads.read_bytes().replace(b"1 ", b"x ", 1) + b"\xff\n\n")
    assert len(problems(copy)) == 3


def test_a_hash_printed_on_a_report_is_enough(copy):
    with open_record(copy) as record:
        printed = record.head().hash
        assert record.verify([("the report", printed)]).whole
        assert record.verify([("the report", printed[:8].upper())]).whole
        assert record.verify([("the report", "0" * 12)]).problems == (
            "the report knows a hash that no entry has: the record was cut off or made anew",
        )
        with pytest.raises(UsageError, match="the report: 'abc' is not the hash of an entry"):
            record.verify([("the report", "abc")])


def test_an_entry_put_in_before_the_first_is_found(copy):
    with Forger(copy) as connection:
        connection.execute("PRAGMA ignore_check_constraints = ON")
        connection.execute("INSERT INTO entries VALUES (-3, 'event', '', '', '', '', '', NULL, '', 'abc')")
    assert any("stands before the first entry: it was put in" in line for line in problems(copy))


@pytest.mark.parametrize("entry", ["99", "0", "-1", "'x'", "4.5"])
def test_rows_of_no_entry_are_found(copy, entry):
    with Forger(copy) as connection:
        connection.execute("PRAGMA foreign_keys = OFF")
        connection.execute(f"INSERT INTO not_measured VALUES ({entry}, 1, 'snr', 'slipped in')")
    assert any("rows name entry" in line and "(in not_measured)" in line for line in problems(copy))


def test_a_row_added_to_an_entry_is_found(copy):
    with Forger(copy) as connection:
        connection.execute("INSERT INTO not_measured VALUES (3, 2, 'snr', 'slipped in')")
    assert [line[:9] for line in problems(copy)] == ["entry 3 ("]


def test_a_missing_changed_or_added_trigger_is_found(copy):
    connection = sqlite3.connect(copy)
    connection.execute("DROP TRIGGER files_no_delete")
    connection.execute("CREATE TRIGGER helpful AFTER INSERT ON entries BEGIN SELECT 1; END")
    connection.execute("DROP TRIGGER runs_no_update")
    connection.execute("CREATE TRIGGER runs_no_update BEFORE UPDATE ON runs BEGIN SELECT 1; END")
    connection.commit()
    connection.close()
    assert problems(copy) == (
        "trigger files_no_delete is missing: the record is not protected as it should be",
        "trigger helpful was added by another hand",
        "trigger runs_no_update was changed by another hand",
    )


def test_any_byte_changed_in_the_file_is_found_or_changes_nothing(copy):
    """240 bytes anywhere: the record does not open, or is not whole, or still says every word that it said."""
    whole, said = copy.read_bytes(), dump(copy)
    rng = random.Random(7)  # noqa: S311 - the same places every time
    # As many where text and numbers are as anywhere else: most of a young file is empty.
    used = [place for place, byte in enumerate(whole) if byte]
    places = [*(rng.randrange(len(whole)) for _ in range(60)), *(rng.choice(used) for _ in range(180))]
    silent = 0
    for place in places:
        changed = bytearray(whole)
        changed[place] ^= 1 << rng.randrange(8)
        for extra in ("-wal", "-shm"):
            copy.with_name(copy.name + extra).unlink(missing_ok=True)
        copy.write_bytes(changed)
        try:
            found = problems(copy)
        except FaultError:
            continue
        if not found:
            silent += 1
            assert dump(copy) == said, place
    assert silent < 100
