"""The append-only record: tables, migrations, queries.

Importing it imports SQLAlchemy, which takes its time: do so where the record is opened.
"""

from qa.store.chain import Head, Verification, Who
from qa.store.lock import run_lock
from qa.store.queries import LimitSet, Refusal
from qa.store.record import Intake, Record, current_user, open_record

__all__ = [
    "Head",
    "Intake",
    "LimitSet",
    "Record",
    "Refusal",
    "Verification",
    "Who",
    "current_user",
    "open_record",
    "run_lock",
]
