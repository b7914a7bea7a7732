"""The append-only record: tables, migrations, queries."""
