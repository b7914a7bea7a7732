"""The tables of the record.

Every row belongs to one *entry*, and nothing is ever changed or removed: triggers in the database refuse it
(`qa.store.migrations`), and the entries form a chain of hashes that shows it (`qa.store.chain`). An acquisition's number
is that of its entry.

A table's columns never change once they have been in use, because the hashes cover them: a new fact gets a new table.
Values are whole numbers, double-precision floats and text (dates and times in ISO 8601, JSON), which every database gives
back to the last bit.
"""

from sqlalchemy import (
    CheckConstraint,
    Column,
    Double,
    ForeignKey,
    Index,
    Integer,
    MetaData,
    Table,
    Text,
    UniqueConstraint,
)

__all__ = [
    "CONTENT_TABLES",
    "acquisitions",
    "baselines",
    "details",
    "entries",
    "events",
    "files",
    "limit_sets",
    "measurements",
    "metadata",
    "not_measured",
    "phantom_definitions",
    "refusals",
    "runs",
    "series",
    "sessions",
    "sign_offs",
    "software",
    "verdicts",
]

metadata = MetaData()

entries = Table(
    "entries",
    metadata,
    Column("number", Integer, primary_key=True, autoincrement=False),
    Column("kind", Text, nullable=False),
    Column("written_at", Text, nullable=False, comment="UTC"),
    Column("user", Text, nullable=False, comment="the operating system's user"),
    Column("name", Text, nullable=False, comment="who it was, where given"),
    Column("why", Text, nullable=False),
    Column("remark", Text, nullable=False, comment="what was odd, such as a clock that had jumped back"),
    Column("corrects", ForeignKey("entries.number"), unique=True, comment="the entry that this one takes the place of"),
    Column("previous", Text, nullable=False, comment="hash of the entry before"),
    Column("hash", Text, nullable=False, unique=True),
    CheckConstraint("number >= 1", name="numbers_from_one"),
)


def _entry() -> Column[int]:
    """Make the column that ties a row to its entry."""
    return Column("entry", ForeignKey("entries.number"), primary_key=True, autoincrement=False)


def _position() -> Column[int]:
    return Column("position", Integer, primary_key=True, autoincrement=False, comment="from 1, in the order given")


software = Table(
    "software",
    metadata,
    _entry(),
    Column("version", Text, nullable=False),
    Column("libraries", Text, nullable=False, comment="JSON: name to version"),
    UniqueConstraint("version", "libraries", name="software_once"),
)

limit_sets = Table(
    "limit_sets",
    metadata,
    _entry(),
    Column("version", Integer, nullable=False, unique=True),
    Column("sha256", Text, nullable=False),
    Column("content", Text, nullable=False, comment="JSON: the limits in force"),
)

phantom_definitions = Table(
    "phantom_definitions",
    metadata,
    _entry(),
    Column("sha256", Text, nullable=False, unique=True),
    Column("name", Text, nullable=False),
    Column("content", Text, nullable=False, comment="the definition file"),
)

sessions = Table(
    "sessions",
    metadata,
    _entry(),
    Column("scanner_name", Text, nullable=False),
    Column("day", Text, nullable=False),
    UniqueConstraint("scanner_name", "day", name="one_session_a_day"),
)

acquisitions = Table(
    "acquisitions",
    metadata,
    _entry(),
    Column("session", ForeignKey("sessions.entry"), nullable=False),
    Column("content_sha256", Text, nullable=False, comment="hash of what was measured: the same is not taken in twice"),
    Column("revision", Integer, nullable=False, comment="0, and one more for each correction"),
    Column("acquired_at", Text, nullable=False, comment="the scanner's clock"),
    Column("taken_in_at", Text, nullable=False),
    Column("phantom", Text, nullable=False),
    Column("phantom_sha256", Text, nullable=False),
    Column("protocol", Text, nullable=False),
    Column("coil", Text, nullable=False),
    Column("field_strength_T", Double),
    Column("scanner_software", Text, nullable=False),
    Column("scanner", Text, nullable=False, comment="JSON: what the header says of the scanner"),
    Column("settings", Text, nullable=False, comment="JSON: what the header says of the protocol"),
    Column("centre_x_mm", Double, comment="the phantom's centre in patient coordinates"),
    Column("centre_y_mm", Double),
    Column("centre_z_mm", Double),
    Column("rotation_deg", Double),
    Column("tilt_deg", Double),
    Column("remarks", Text, nullable=False, comment="JSON: list of sentences"),
    Column("software", ForeignKey("software.entry"), nullable=False),
    Column("limits_version", ForeignKey("limit_sets.version"), nullable=False),
    UniqueConstraint("content_sha256", "revision", name="taken_in_once"),
    Index("acquisitions_by_session", "session"),
)

series = Table(
    "series",
    metadata,
    _entry(),
    _position(),
    Column("series_instance_uid", Text, nullable=False),
    Column("study_instance_uid", Text, nullable=False),
    Column("description", Text, nullable=False),
    Column("kind", Text, nullable=False),
    Column("temporal_position", Integer, nullable=False),
    Column("acquired_at", Text),
    sqlite_with_rowid=False,
)

files = Table(
    "files",
    metadata,
    _entry(),
    _position(),
    Column("sha256", Text, nullable=False),
    Column("sop_instance_uid", Text, nullable=False),
    Column("path", Text, nullable=False, comment="where it was kept, from the department folder"),
    Index("files_by_sha256", "sha256"),
    sqlite_with_rowid=False,
)

measurements = Table(
    "measurements",
    metadata,
    _entry(),
    _position(),
    Column("quantity", Text, nullable=False),
    Column("value", Double, nullable=False),
    Column("unit", Text, nullable=False),
    Column("standard_uncertainty", Double, nullable=False),
    Column("method", Text, nullable=False),
    Column("method_version", Integer, nullable=False),
    Column("slice", Integer, comment="from 1 along the slice normal"),
    sqlite_with_rowid=False,
)

details = Table(
    "details",
    metadata,
    _entry(),
    Column(
        "content",
        Text,
        nullable=False,
        comment="JSON: details and regions of every measurement in order; apart, so that a history is read without them",
    ),
)

not_measured = Table(
    "not_measured",
    metadata,
    _entry(),
    _position(),
    Column("quantity", Text, nullable=False),
    Column("reason", Text, nullable=False),
    sqlite_with_rowid=False,
)

verdicts = Table(
    "verdicts",
    metadata,
    _entry(),
    Column("position", Integer, primary_key=True, autoincrement=False, comment="that of the measurement"),
    Column("conformity", Text, nullable=False),
    Column("lower", Double, comment="what was applied"),
    Column("upper", Double),
    Column("limit_text", Text, nullable=False),
    Column("rule", Text, nullable=False),
    Column("source", Text, nullable=False),
    Column("probability", Double, comment="of conformity"),
    Column("guard_band", Double, nullable=False),
    Column("warn_lower", Double),
    Column("warn_upper", Double),
    Column("warned", Integer, nullable=False, comment="1: within the limits, at or beyond a warning level"),
    Column("limit_key", Text, nullable=False),
    sqlite_with_rowid=False,
)

refusals = Table(
    "refusals",
    metadata,
    _entry(),
    Column("path", Text, nullable=False),
    Column("reason", Text, nullable=False),
    Column("sha256", Text, nullable=False, comment="empty where the file could not be read"),
    Index("refusals_by_sha256", "sha256"),
)

runs = Table(
    "runs",
    metadata,
    _entry(),
    Column("command", Text, nullable=False),
    Column("started_at", Text, nullable=False),
    Column("exit_status", Integer, nullable=False),
    Column("summary", Text, nullable=False, comment="JSON: what was done"),
)

events = Table(
    "events",
    metadata,
    _entry(),
    Column("scanner_name", Text, nullable=False),
    Column("day", Text, nullable=False),
    Column("until", Text, comment="last day, for what lasts"),
    Column("kind", Text, nullable=False),
    Column("text", Text, nullable=False),
    Column("quantities", Text, nullable=False, comment="JSON: the quantities concerned, none meaning all"),
    Column("restarts_baseline", Integer, nullable=False, comment="1: what came before no longer counts"),
)

baselines = Table(
    "baselines",
    metadata,
    _entry(),
    Column("scanner_name", Text, nullable=False),
    Column("quantity", Text, nullable=False),
    Column("value", Double, nullable=False),
    Column("standard_uncertainty", Double, nullable=False),
    Column("scatter", Double),
    Column("sessions", Integer, nullable=False, comment="how many it rests on, 0 where set by hand"),
    Column("since", Text, nullable=False),
    Column("phantom", Text, nullable=False),
    Column("protocol", Text, nullable=False),
    Column("coil", Text, nullable=False),
    Column("method", Text, nullable=False),
    Column("rests_on", Text, nullable=False, comment="JSON: numbers of the acquisitions it was taken from"),
)

sign_offs = Table(
    "sign_offs",
    metadata,
    _entry(),
    Column("scanner_name", Text, nullable=False),
    Column("first_day", Text, nullable=False),
    Column("last_day", Text, nullable=False),
    Column("comment", Text, nullable=False),
    Column("sessions", Integer, nullable=False, comment="how many the period held when it was signed"),
    Column("head_number", Integer, nullable=False, comment="end of the record when it was signed"),
    Column("head_hash", Text, nullable=False),
)

CONTENT_TABLES = (
    software,
    limit_sets,
    phantom_definitions,
    sessions,
    acquisitions,
    series,
    files,
    measurements,
    details,
    not_measured,
    verdicts,
    refusals,
    runs,
    events,
    baselines,
    sign_offs,
)
"""All tables whose rows an entry's hash covers, in the order in which it covers them and in which they are written."""
