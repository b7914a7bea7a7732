"""Alembic's migrations: how a record of any earlier version becomes one of today's."""
