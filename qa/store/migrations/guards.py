"""Triggers that make a table append-only, for SQLite and PostgreSQL.

- UPDATE and DELETE are refused.
- A row may be added to the newest entry only, which is the one that is being written: transactions follow one another.
- On SQLite, INSERT OR REPLACE would delete without a DELETE trigger being asked: a row whose key is there already is refused
  before that.
- An entry's number follows the last one's, and it carries the last one's hash.

Migrations that are in use call these functions: what they give for given arguments never changes.
"""

from collections.abc import Iterable, Sequence
from string import Template

__all__ = ["guard_content", "guard_entries", "shared_functions"]

_WORDS = {
    "refused": "the record is append-only: a correction is a new entry",
    "old": "a row may be added to the newest entry only",
    "order": "an entry must follow the last one and carry its hash",
}
_OUT_OF_ORDER = (
    "NEW.number <> (SELECT COALESCE(MAX(number), 0) + 1 FROM entries) "
    "OR NEW.previous <> COALESCE((SELECT hash FROM entries WHERE number = NEW.number - 1), '')"
)
_SQLITE_CHANGE = (
    "CREATE TRIGGER ${table}_no_update BEFORE UPDATE ON $table BEGIN SELECT RAISE(ABORT, '$refused'); END",
    "CREATE TRIGGER ${table}_no_delete BEFORE DELETE ON $table BEGIN SELECT RAISE(ABORT, '$refused'); END",
)
_SQLITE_ORDER = (
    "CREATE TRIGGER entries_in_order BEFORE INSERT ON entries WHEN $out_of_order "
    "OR EXISTS (SELECT 1 FROM entries WHERE hash = NEW.hash OR corrects = NEW.corrects) "
    "BEGIN SELECT RAISE(ABORT, '$order'); END"
)
_SQLITE_CONTENT = (
    (
        "CREATE TRIGGER ${table}_newest BEFORE INSERT ON $table WHEN NEW.entry <> (SELECT MAX(number) FROM entries) "
        "BEGIN SELECT RAISE(ABORT, '$old'); END"
    ),
    "CREATE TRIGGER ${table}_no_replace BEFORE INSERT ON $table WHEN $there BEGIN SELECT RAISE(ABORT, '$refused'); END",
)
_POSTGRESQL_FUNCTIONS = (
    "CREATE FUNCTION evenfield_refuse() RETURNS trigger LANGUAGE plpgsql AS $$$$ BEGIN RAISE EXCEPTION '$refused'; END $$$$",
    (
        "CREATE FUNCTION evenfield_newest() RETURNS trigger LANGUAGE plpgsql AS $$$$ BEGIN "
        "IF NEW.entry <> (SELECT MAX(number) FROM entries) THEN RAISE EXCEPTION '$old'; END IF; RETURN NEW; END $$$$"
    ),
    (
        "CREATE FUNCTION evenfield_in_order() RETURNS trigger LANGUAGE plpgsql AS $$$$ BEGIN "
        "IF $out_of_order THEN RAISE EXCEPTION '$order'; END IF; RETURN NEW; END $$$$"
    ),
)
_POSTGRESQL_CHANGE = (
    "CREATE TRIGGER ${table}_no_change BEFORE UPDATE OR DELETE OR TRUNCATE ON $table "
    "FOR EACH STATEMENT EXECUTE FUNCTION evenfield_refuse()"
)
_POSTGRESQL_ORDER = (
    "CREATE TRIGGER entries_in_order BEFORE INSERT ON entries FOR EACH ROW EXECUTE FUNCTION evenfield_in_order()"
)
_POSTGRESQL_CONTENT = "CREATE TRIGGER ${table}_newest BEFORE INSERT ON $table FOR EACH ROW EXECUTE FUNCTION evenfield_newest()"


def _fill(statements: Sequence[str], **words: str) -> Iterable[str]:
    return (Template(statement).substitute(_WORDS, out_of_order=_OUT_OF_ORDER, **words) for statement in statements)


def shared_functions(dialect: str) -> Iterable[str]:
    """Give the functions that the triggers call, where the database wants them apart."""
    return _fill(_POSTGRESQL_FUNCTIONS) if dialect == "postgresql" else ()


def guard_entries(dialect: str) -> Iterable[str]:
    """Give the statements that guard the table of entries."""
    if dialect == "postgresql":
        return _fill([_POSTGRESQL_CHANGE, _POSTGRESQL_ORDER], table="entries")
    return _fill([*_SQLITE_CHANGE, _SQLITE_ORDER], table="entries")


def guard_content(dialect: str, table: str, unique: Sequence[Sequence[str]]) -> Iterable[str]:
    """Give the statements that guard a table of content.

    Parameters
    ----------
    dialect : str
        "sqlite" or "postgresql".
    table : str
        Its name.
    unique : sequence of sequence of str
        The sets of columns that are unique in it, the primary key among them.
    """
    if dialect == "postgresql":
        return _fill([_POSTGRESQL_CHANGE, _POSTGRESQL_CONTENT], table=table)
    there = " OR ".join(
        Template("EXISTS (SELECT 1 FROM $table WHERE $equal)").substitute(
            table=table, equal=" AND ".join(f"{column} = NEW.{column}" for column in columns)
        )
        for columns in unique
    )
    return _fill([*_SQLITE_CHANGE, *_SQLITE_CONTENT], table=table, there=there)
