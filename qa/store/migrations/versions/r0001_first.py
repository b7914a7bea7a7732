"""The first version: entries and their chain, acquisitions with all that traces them, limits, refusals, runs."""

import sqlalchemy as sa
from alembic import op

from qa.store.migrations.guards import guard_content, guard_entries, shared_functions

revision = "0001"
down_revision: str | None = None
branch_labels: str | None = None
depends_on: str | None = None

_UNIQUE: dict[str, tuple[tuple[str, ...], ...]] = {
    "software": (("entry",), ("version", "libraries")),
    "limit_sets": (("entry",), ("version",)),
    "phantom_definitions": (("entry",), ("sha256",)),
    "sessions": (("entry",), ("scanner_name", "day")),
    "acquisitions": (("entry",), ("content_sha256", "revision")),
    "series": (("entry", "position"),),
    "files": (("entry", "position"),),
    "measurements": (("entry", "position"),),
    "details": (("entry",),),
    "not_measured": (("entry", "position"),),
    "verdicts": (("entry", "position"),),
    "refusals": (("entry",),),
    "runs": (("entry",),),
}


def _text(name: str, *, nullable: bool = False) -> sa.Column[str]:
    return sa.Column(name, sa.Text, nullable=nullable)


def _whole(name: str, *, nullable: bool = False) -> sa.Column[int]:
    return sa.Column(name, sa.Integer, nullable=nullable)


def _real(name: str, *, nullable: bool = True) -> sa.Column[float]:
    return sa.Column(name, sa.Double, nullable=nullable)


def _table(name: str, *columns: sa.schema.SchemaItem, several: bool = False) -> None:
    keys: list[sa.Column[int]] = [
        sa.Column("entry", sa.Integer, sa.ForeignKey("entries.number"), primary_key=True, autoincrement=False)
    ]
    if several:
        keys.append(sa.Column("position", sa.Integer, primary_key=True, autoincrement=False))
    op.create_table(name, *keys, *columns, sqlite_with_rowid=not several)


def upgrade() -> None:
    """Make all tables, then the triggers that guard them."""
    op.create_table(
        "entries",
        sa.Column("number", sa.Integer, primary_key=True, autoincrement=False),
        *(_text(name) for name in ("kind", "written_at", "user", "name", "why", "remark")),
        sa.Column("corrects", sa.Integer, sa.ForeignKey("entries.number"), unique=True, nullable=True),
        _text("previous"),
        sa.Column("hash", sa.Text, nullable=False, unique=True),
        sa.CheckConstraint("number >= 1", name="numbers_from_one"),
    )
    _table("software", _text("version"), _text("libraries"), sa.UniqueConstraint("version", "libraries", name="software_once"))
    _table("limit_sets", sa.Column("version", sa.Integer, nullable=False, unique=True), _text("sha256"), _text("content"))
    _table("phantom_definitions", sa.Column("sha256", sa.Text, nullable=False, unique=True), _text("name"), _text("content"))
    _table(
        "sessions",
        _text("scanner_name"),
        _text("day"),
        sa.UniqueConstraint("scanner_name", "day", name="one_session_a_day"),
    )
    _table(
        "acquisitions",
        sa.Column("session", sa.Integer, sa.ForeignKey("sessions.entry"), nullable=False),
        _text("content_sha256"),
        _whole("revision"),
        *(_text(name) for name in ("acquired_at", "taken_in_at", "phantom", "phantom_sha256", "protocol", "coil")),
        _real("field_strength_T"),
        *(_text(name) for name in ("scanner_software", "scanner", "settings")),
        *(_real(name) for name in ("centre_x_mm", "centre_y_mm", "centre_z_mm", "rotation_deg", "tilt_deg")),
        _text("remarks"),
        sa.Column("software", sa.Integer, sa.ForeignKey("software.entry"), nullable=False),
        sa.Column("limits_version", sa.Integer, sa.ForeignKey("limit_sets.version"), nullable=False),
        sa.UniqueConstraint("content_sha256", "revision", name="taken_in_once"),
    )
    op.create_index("acquisitions_by_session", "acquisitions", ["session"])
    _table(
        "series",
        *(_text(name) for name in ("series_instance_uid", "study_instance_uid", "description", "kind")),
        _whole("temporal_position"),
        _text("acquired_at", nullable=True),
        several=True,
    )
    _table("files", *(_text(name) for name in ("sha256", "sop_instance_uid", "path")), several=True)
    op.create_index("files_by_sha256", "files", ["sha256"])
    _table(
        "measurements",
        _text("quantity"),
        _real("value", nullable=False),
        _text("unit"),
        _real("standard_uncertainty", nullable=False),
        _text("method"),
        _whole("method_version"),
        _whole("slice", nullable=True),
        several=True,
    )
    _table("details", _text("content"))
    _table("not_measured", _text("quantity"), _text("reason"), several=True)
    _table(
        "verdicts",
        _text("conformity"),
        _real("lower"),
        _real("upper"),
        *(_text(name) for name in ("limit_text", "rule", "source")),
        _real("probability"),
        _real("guard_band", nullable=False),
        _real("warn_lower"),
        _real("warn_upper"),
        _whole("warned"),
        _text("limit_key"),
        several=True,
    )
    _table("refusals", *(_text(name) for name in ("path", "reason", "sha256")))
    op.create_index("refusals_by_sha256", "refusals", ["sha256"])
    _table("runs", _text("command"), _text("started_at"), _whole("exit_status"), _text("summary"))
    dialect = op.get_bind().dialect.name
    for statement in (
        *shared_functions(dialect),
        *guard_entries(dialect),
        *(line for table, unique in _UNIQUE.items() for line in guard_content(dialect, table, unique)),
    ):
        op.execute(statement)
