"""What people decide: service events, baselines, sign-offs."""

import sqlalchemy as sa
from alembic import op

from qa.store.migrations.guards import guard_content

revision = "0002"
down_revision = "0001"
branch_labels: str | None = None
depends_on: str | None = None


def _text(*names: str) -> list[sa.Column[str]]:
    return [sa.Column(name, sa.Text, nullable=False) for name in names]


def _entry() -> sa.Column[int]:
    return sa.Column("entry", sa.Integer, sa.ForeignKey("entries.number"), primary_key=True, autoincrement=False)


def upgrade() -> None:
    """Make the three tables, then the triggers that guard them."""
    op.create_table(
        "events",
        _entry(),
        *_text("scanner_name", "day"),
        sa.Column("until", sa.Text, nullable=True),
        *_text("kind", "text", "quantities"),
        sa.Column("restarts_baseline", sa.Integer, nullable=False),
    )
    op.create_table(
        "baselines",
        _entry(),
        *_text("scanner_name", "quantity"),
        sa.Column("value", sa.Double, nullable=False),
        sa.Column("standard_uncertainty", sa.Double, nullable=False),
        sa.Column("scatter", sa.Double, nullable=True),
        sa.Column("sessions", sa.Integer, nullable=False),
        *_text("since", "phantom", "protocol", "coil", "method", "rests_on"),
    )
    op.create_table(
        "sign_offs",
        _entry(),
        *_text("scanner_name", "first_day", "last_day", "comment"),
        sa.Column("sessions", sa.Integer, nullable=False),
        sa.Column("head_number", sa.Integer, nullable=False),
        *_text("head_hash"),
    )
    dialect = op.get_bind().dialect.name
    for table in ("events", "baselines", "sign_offs"):
        for statement in guard_content(dialect, table, (("entry",),)):
            op.execute(statement)
