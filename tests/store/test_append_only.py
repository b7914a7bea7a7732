"""The database itself refuses what the record must never do, whoever asks."""

import sqlite3

import pytest

from qa.store.tables import CONTENT_TABLES, metadata

FILLED = list(metadata.tables)


@pytest.fixture
def connection(copy):
    opened = sqlite3.connect(copy)
    yield opened
    opened.close()


def rows(connection, table):
    return connection.execute(f"SELECT * FROM {table}").fetchall()


@pytest.mark.parametrize("table", FILLED)
def test_no_row_can_be_changed_removed_or_replaced(connection, table):
    before = rows(connection, table)
    assert before
    marks = ", ".join("?" for _ in before[0])
    key = "number" if table == "entries" else "entry"
    for attempt, values in (
        (f"UPDATE {table} SET {key} = {key}", ()),
        (f"DELETE FROM {table}", ()),
        (f"INSERT OR REPLACE INTO {table} VALUES ({marks})", before[-1]),
        (f"INSERT OR IGNORE INTO {table} VALUES ({marks})", before[0]),
    ):
        with pytest.raises(sqlite3.IntegrityError, match=r"append-only|newest entry only|must follow the last one"):
            connection.execute(attempt, values)
    assert rows(connection, table) == before


def test_every_table_is_guarded(connection):
    guards = {name for (name,) in connection.execute("SELECT name FROM sqlite_master WHERE type = 'trigger'")}
    for table in metadata.tables:
        assert {f"{table}_no_update", f"{table}_no_delete"} <= guards
    assert {f"{table.name}_newest" for table in CONTENT_TABLES} <= guards
    assert {table.name for table in CONTENT_TABLES} | {"entries"} == set(metadata.tables)


def test_a_row_cannot_be_added_to_a_closed_entry(connection):
    with pytest.raises(sqlite3.IntegrityError, match="newest entry only"):
        connection.execute("INSERT INTO not_measured VALUES (3, 99, 'snr', 'slipped in')")


def test_a_unique_key_cannot_be_taken_over(connection):
    (number,) = connection.execute("SELECT MAX(number) FROM entries").fetchone()
    with pytest.raises(sqlite3.IntegrityError, match="append-only"):
        connection.execute("INSERT OR REPLACE INTO limit_sets VALUES (?, 1, 'x', 'other limits')", (number,))


@pytest.mark.parametrize(("number", "previous"), [(99, None), (None, "f" * 64), (1, "")])
def test_an_entry_that_does_not_follow_is_refused(connection, number, previous):
    last, digest = connection.execute("SELECT number, hash FROM entries ORDER BY number DESC LIMIT 1").fetchone()
    values = (number or last + 1, "x", "", "", "", "", "", None, digest if previous is None else previous, "a" * 64)
    with pytest.raises(sqlite3.IntegrityError, match="must follow the last one"):
        connection.execute("INSERT OR REPLACE INTO entries VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)", values)
