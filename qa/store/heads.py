"""The heads file: beside the record, one line for every commit with the number and hash of the last entry.

The chain cannot show that its own end was cut off; a head known from elsewhere can. The file is only ever added to. It lies in
the same folder and protects against accidents, restored backups and a careless hand; against somebody who rewrites both, the
heads printed on reports and mailed out of the house stand.
"""

import os
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path

from qa.errors import FaultError
from qa.store.chain import Head

__all__ = ["Heads"]


class Heads:
    """The heads file at a path; None where the record has none, as on a server."""

    def __init__(self, path: Path | None) -> None:
        self.path = path

    def add(self, head: Head, at: datetime) -> None:
        """Add a line, in one write, so that two programs do not mix theirs.

        Raises
        ------
        FaultError
            The file cannot be written to; the entry itself is in the record.
        """
        if self.path is None or head.number == 0:
            return
        line = f"{head.number} {head.hash} {at.astimezone(UTC).isoformat()}\n".encode("ascii")
        try:
            descriptor = os.open(self.path, os.O_WRONLY | os.O_APPEND | os.O_CREAT, 0o644)
            try:
                os.write(descriptor, line)
            finally:
                os.close(descriptor)
        except OSError as error:
            raise FaultError(
                f"{self.path}: cannot be written to ({error.strerror}): check permissions and space; what was done is kept."
            ) from error

    def read(self) -> Iterator[tuple[str, Head]]:
        """Yield every head with where it is known from; a line that is none is yielded as a head that fits nothing."""
        if self.path is None or not self.path.exists():
            return
        try:
            lines = self.path.read_text("utf-8", errors="replace").splitlines()
        except OSError as error:
            raise FaultError(f"{self.path}: cannot be read ({error.strerror}): check permissions.") from error
        for count, line in enumerate(lines, start=1):
            number, _, rest = line.partition(" ")
            hash_ = rest.partition(" ")[0]
            where = f"{self.path.name}, line {count},"
            yield where, Head(int(number) if number.isascii() and number.isdigit() and len(number) < 16 else -1, hash_)

    def last(self) -> Head | None:
        """Give the newest head that the file knows."""
        return max((head for _, head in self.read()), key=lambda head: head.number, default=None)
