"""The append-only record: tables, migrations, queries.

Importing it imports SQLAlchemy, which takes its time: do so where the record is opened.
"""

from qa.store.chain import Head, Who
from qa.store.decisions import Kept, SignOff
from qa.store.intake import Intake
from qa.store.ledger import current_user
from qa.store.lock import run_lock
from qa.store.queries import LimitSet, Refusal
from qa.store.record import Record, open_record
from qa.store.verify import Verification

__all__ = [
    "Head",
    "Intake",
    "Kept",
    "LimitSet",
    "Record",
    "Refusal",
    "SignOff",
    "Verification",
    "Who",
    "current_user",
    "open_record",
    "run_lock",
]
