"""A department opened for work: its settings and its record."""

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import date, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from qa.site import Site, load_site

if TYPE_CHECKING:
    from qa.store import Record

__all__ = ["Department", "now_utc", "open_department"]


@dataclass(frozen=True, eq=False)
class Department:
    """Settings, record and the moment of the run; the clock is read once and passed in, so that a run has one date."""

    site: Site
    record: "Record"
    now: datetime

    @property
    def today(self) -> date:
        """The date by the department's own clock."""
        return self.now.astimezone(self.site.department.zone).date()


def now_utc() -> datetime:
    """Read the clock."""
    from datetime import UTC

    return datetime.now(UTC)


@contextmanager
def open_department(folder: Path, now: datetime | None = None) -> Iterator[Department]:
    """Read site.toml, open the record, and close it again at the end.

    Parameters
    ----------
    folder : pathlib.Path
        The department folder.
    now : datetime or None
        The moment of the run, with its time zone; None reads the clock.

    Raises
    ------
    SiteError
        site.toml is missing or wrong: nothing was done.
    FaultError
        The record cannot be opened.
    """
    from qa.store import open_record

    site = load_site(folder)
    with open_record(site.record_url) as record:
        yield Department(site, record, now or now_utc())
