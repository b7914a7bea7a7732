"""The database behind the record: connections, transactions, migrations, and what can go wrong with them in plain words."""

import errno
import os
import sqlite3
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, create_engine, event, text
from sqlalchemy.engine import URL, make_url
from sqlalchemy.exc import ArgumentError, DBAPIError, NoSuchModuleError, SQLAlchemyError
from sqlalchemy.pool import QueuePool

from qa.errors import FaultError, SettingError
from qa.store.tables import CONTENT_TABLES

__all__ = ["HEAD_REVISION", "Database", "check_tables", "upgrade"]

HEAD_REVISION = "0002"
"""The newest migration; a test holds it against the folder of migrations."""

_APPLICATION = 0x45766E66
"""SQLite's application_id of a record: "Evnf"."""

_BUSY_S = 30.0
_PAGE_BYTES = 8192
_WRITE = "evenfield_write"
_SQLITE_SCHEMA = "SELECT type || ' ' || name, sql FROM sqlite_master"
_POSTGRESQL_SCHEMA = (
    "SELECT 'trigger ' || tgname, tgenabled::text FROM pg_trigger JOIN pg_class ON pg_class.oid = tgrelid "
    "WHERE NOT tgisinternal AND relnamespace = current_schema()::regnamespace"
)


class Database:
    """One database, by file or URL.

    Parameters
    ----------
    place : str or pathlib.Path
        A path or an SQLAlchemy URL.
    busy_s : float
        How long to wait for another program's transaction.
    """

    def __init__(self, place: str | Path, *, busy_s: float = _BUSY_S) -> None:
        try:
            url = make_url(place) if isinstance(place, str) and "://" in place else URL.create("sqlite", database=str(place))
        except ArgumentError as error:
            raise SettingError(
                "[record] url: cannot be read as a database URL: write it as sqlite:///evenfield.db."
            ) from error
        self.sqlite = url.get_backend_name() == "sqlite"
        self.path = Path(url.database) if self.sqlite and url.database else None
        self.name = str(self.path) if self.path else url.render_as_string(hide_password=True)
        self.busy_s = busy_s
        self.read_only = False
        self.engine = self._engine(url)

    def _engine(self, url: URL) -> Engine:
        if not self.sqlite:
            try:
                return create_engine(url, isolation_level="READ COMMITTED", connect_args={"connect_timeout": 10})
            except (NoSuchModuleError, ModuleNotFoundError) as error:
                raise SettingError(
                    f"{self.name}: its database driver is not installed: install 'evenfield[postgresql]', "
                    "or write the URL as postgresql+psycopg://."
                ) from error
        engine = create_engine("sqlite://", creator=self._connect, poolclass=QueuePool, pool_size=2)
        event.listen(engine, "begin", self._begin)
        return engine

    def _connect(self) -> sqlite3.Connection:
        if self.read_only:
            return self._connect_read_only()
        connection = self._open("mode=rw")
        connection.execute("PRAGMA synchronous = FULL")
        return connection

    def _connect_read_only(self) -> sqlite3.Connection:
        """Open where nothing can be written, not even the files beside the database that write-ahead logging needs."""
        connection = self._open("mode=ro")
        try:
            connection.execute("SELECT 1 FROM sqlite_master LIMIT 1")
        except sqlite3.OperationalError:
            connection.close()
            log = Path(f"{self.path}-wal")
            if log.exists() and log.stat().st_size > 0:
                raise
            return self._open("mode=ro&immutable=1")
        return connection

    def _open(self, how: str) -> sqlite3.Connection:
        uri = f"{Path(str(self.path)).absolute().as_uri()}?{how}"
        connection = sqlite3.connect(uri, uri=True, timeout=self.busy_s, isolation_level=None, check_same_thread=False)
        connection.execute("PRAGMA foreign_keys = ON")
        return connection

    @staticmethod
    def _begin(connection: Connection) -> None:
        writes = connection.get_execution_options().get(_WRITE, False)
        connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """Open a connection that sees one state of the record for as long as it lasts."""
        with self.plainly():
            options = {} if self.sqlite else {"isolation_level": "REPEATABLE READ"}
            with self.engine.connect().execution_options(**options) as connection, connection.begin():
                yield connection

    @contextmanager
    def writing(self) -> Iterator[Connection]:
        """Open one transaction, the only one that writes at this time; it is undone where the block fails."""
        if self.read_only:
            raise FaultError(f"{self.name}: is read-only: nothing can be added to the record; check the file's permissions.")
        with self.plainly(), self.engine.connect().execution_options(**{_WRITE: True}) as connection, connection.begin():
            if not self.sqlite:
                connection.exec_driver_sql("LOCK TABLE entries IN EXCLUSIVE MODE")
            yield connection

    @contextmanager
    def plainly(self) -> Iterator[None]:
        """Turn what the database says into one sentence of a `FaultError`."""
        try:
            yield
        except DBAPIError as error:
            raise FaultError(self._sentence(error.orig or error)) from error
        except sqlite3.Error as error:
            raise FaultError(self._sentence(error)) from error
        except UnicodeDecodeError as error:
            # A damaged table definition is quoted in the driver's own message, which then cannot be read either.
            raise FaultError(self._sentence(sqlite3.DatabaseError("malformed"))) from error
        except SQLAlchemyError as error:
            raise FaultError(f"{self.name}: the database failed ({type(error).__name__}): try again.") from error

    def _sentence(self, error: BaseException) -> str:
        said = " ".join(str(error).split())
        for sign, sentence in _FAULTS:
            if sign in said:
                return f"{self.name}: {sentence}"
        return f"{self.name}: the database failed: {said.rstrip('.')}."

    def prepare(self, *, create: bool) -> None:
        """Bring the tables to today's version, and make them where there are none.

        Raises
        ------
        FaultError
            There is no record and none was to be made, or it cannot be used; the sentence says why.
        """
        if self.sqlite:
            self._prepare_file(create=create)
        with self.plainly(), self.engine.connect() as connection:
            current, foreign = self._state(connection)
        if current == HEAD_REVISION:
            return
        if foreign:
            raise FaultError(f"{self.name}: is a database of another program: give the record a place of its own.")
        if current is None and not create:
            raise FaultError(f"{self.name}: there is no record yet: 'evenfield ingest' starts one.")
        self._check_known(current)
        if self.read_only:
            raise FaultError(
                f"{self.name}: was written by an older version and is read-only: open it once where it can be written."
            )
        self._migrate()

    def _prepare_file(self, *, create: bool) -> None:
        path = Path(str(self.path))
        if not path.exists():
            if not create:
                raise FaultError(f"{self.name}: there is no record yet: 'evenfield ingest' starts one.")
            self._make_empty(path)
        self.read_only = not _may(path.parent, os.W_OK)
        try:
            with path.open("rb" if self.read_only else "r+b"):
                pass
        except OSError as error:
            self.read_only = error.errno in {errno.EROFS, errno.EACCES, errno.EPERM} and _may(path, os.R_OK)
            if not self.read_only:
                raise FaultError(f"{self.name}: cannot be opened ({error.strerror}): check the path.") from error
        if not self.read_only:
            with self.plainly():
                self._write_ahead()

    def _make_empty(self, path: Path) -> None:
        try:
            path.touch()
        except OSError as error:
            raise FaultError(
                f"{self.name}: cannot be made ({error.strerror}): check the folder and its permissions."
            ) from error

    def _write_ahead(self) -> None:
        """Switch a new file to write-ahead logging, so that readers never wait; two programs may try at once."""
        until = time.monotonic() + self.busy_s
        while True:
            connection = self._connect()
            try:
                if connection.execute("PRAGMA journal_mode").fetchone()[0] == "wal":
                    return
                connection.execute(f"PRAGMA page_size = {_PAGE_BYTES}")
                connection.execute("PRAGMA journal_mode = WAL")
            except sqlite3.OperationalError as error:
                if "locked" not in str(error) or time.monotonic() > until:
                    raise
                time.sleep(0.05)
            else:
                return
            finally:
                connection.close()

    def _state(self, connection: Connection) -> tuple[str | None, bool]:
        """Give the revision of the tables, None where there are none, and whether they are somebody else's."""
        names = set(connection.dialect.get_table_names(connection))
        if "alembic_version" in names:
            revision = connection.execute(text("SELECT version_num FROM alembic_version")).scalar()
            if revision is not None:
                return str(revision), "entries" not in names
        return None, bool(names - {"alembic_version"})

    def _check_known(self, current: str | None) -> None:
        if current is not None and current not in _revisions():
            raise FaultError(
                f"{self.name}: was written by a newer version of evenfield (tables {current}, this one knows up to "
                f"{HEAD_REVISION}): update evenfield."
            )

    def _migrate(self) -> None:
        with self.plainly(), self.engine.connect().execution_options(**{_WRITE: True}) as connection, connection.begin():
            if not self.sqlite:
                # Two programs that start at once: the second waits here, and then finds nothing to do.
                connection.exec_driver_sql(f"SELECT pg_advisory_xact_lock({_APPLICATION})")
            if self._state(connection)[0] == HEAD_REVISION:
                return
            if self.sqlite:
                connection.exec_driver_sql(f"PRAGMA application_id = {_APPLICATION}")
            upgrade(connection)

    def close(self) -> None:
        """Let go of all connections."""
        self.engine.dispose()


def _may(path: Path, mode: int) -> bool:
    return os.access(path, mode, effective_ids=os.access in os.supports_effective_ids)


def upgrade(connection: Connection, revision: str = HEAD_REVISION) -> None:
    """Bring the tables to a revision, inside the transaction that the connection is in."""
    from alembic import command
    from alembic.config import Config

    config = Config()
    config.set_main_option("script_location", str(_migrations()).replace("%", "%%"))
    config.attributes["connection"] = connection
    command.upgrade(config, revision)


def check_tables(connection: Connection) -> list[str]:
    """Say what is wrong with the tables, triggers and indexes themselves, compared with a fresh record's.

    On SQLite the file's inner order is checked too, so that a byte changed in an index is found.
    """
    if connection.dialect.name != "sqlite":
        return _compare(_postgresql_guards(), _schema(_POSTGRESQL_SCHEMA, connection))
    problems = _compare(_fresh_schema(), _schema(_SQLITE_SCHEMA, connection))
    found = connection.exec_driver_sql("PRAGMA integrity_check(20)").scalars().all()
    return problems + [f"the database file is damaged: {line}" for line in found if line != "ok"]


@cache
def _fresh_schema() -> Mapping[str, Any]:
    fresh = create_engine("sqlite://")
    with fresh.begin() as connection:
        upgrade(connection)
        found = _schema(_SQLITE_SCHEMA, connection)
    fresh.dispose()
    return found


def _compare(wanted: Mapping[str, Any], found: Mapping[str, Any]) -> list[str]:
    missing, added = sorted(wanted.keys() - found.keys()), sorted(found.keys() - wanted.keys())
    changed = sorted(name for name in wanted.keys() & found.keys() if wanted[name] != found[name])
    return [
        *(f"{name} is missing: the record is not protected as it should be" for name in missing),
        *(f"{name} was added by another hand" for name in added),
        *(f"{name} was changed by another hand" for name in changed),
    ]


def _postgresql_guards() -> Mapping[str, Any]:
    """Name every trigger that there must be, switched on ("O")."""
    content = [name for table in CONTENT_TABLES for name in (f"{table.name}_no_change", f"{table.name}_newest")]
    return {f"trigger {name}": "O" for name in ("entries_no_change", "entries_in_order", *content)}


def _schema(query: str, connection: Connection) -> dict[str, Any]:
    return {row[0]: row[1] for row in connection.exec_driver_sql(query)}


def _migrations() -> Path:
    return Path(str(files("qa.store.migrations")))


def _revisions() -> set[str]:
    return {path.stem[1:5] for path in (_migrations() / "versions").glob("r[0-9]*.py*")}


_FAULTS: tuple[tuple[str, str], ...] = (
    ("database is locked", "another program is writing to the record and did not finish in time: try again."),
    ("database or disk is full", "the disk is full: make room and run again; what was done is kept."),
    ("readonly database", "is read-only: check the permissions of the file and its folder."),
    ("unable to open database file", "cannot be opened: check the path and the permissions of the folder."),
    ("file is not a database", "is not a database: restore it from a backup, or give the record another place."),
    ("malformed", "is damaged: restore it from a backup, and run 'evenfield record verify'."),
    ("disk I/O error", "the disk failed while reading or writing: check the disk and run again; what was done is kept."),
    ("append-only", "refused to change or remove what is in the record."),
    ("newest entry only", "refused to add to an entry that is closed."),
    ("must follow the last one", "refused an entry that does not follow the last one."),
)
