"""Everything that can go wrong, and the exit status each carries.

A message is one sentence of one shape: which file or setting, what is wrong with it, what to do.
An expected failure of a measurement is not an error but a record: `qa.records.NotMeasured`;
a file that is not taken in is a record too: `qa.records.Refused`.
"""

from enum import IntEnum

__all__ = ["EvenfieldError", "ExitStatus", "FaultError", "PhantomError", "SettingError", "SiteError", "UsageError"]


class ExitStatus(IntEnum):
    """What a command tells the shell or the scheduled job that started it."""

    DONE = 0
    """Done; every scanner is within its limits."""
    OUT_OF_LIMITS = 1
    """Done; at least one scanner is out of limits."""
    WRONG_COMMAND = 2
    """The command line or site.toml is wrong: nothing was done."""
    NEEDS_A_PERSON = 3
    """Done; nothing is out of limits, but a person has to look."""
    COULD_NOT_FINISH = 4
    """A fault stopped the run; what was done is kept, and a rerun goes on from there."""


class EvenfieldError(Exception):
    """Root of all errors a user can meet; `str()` of it is the sentence to print."""

    exit_status = ExitStatus.COULD_NOT_FINISH


class UsageError(EvenfieldError):
    """The command line or a call's arguments are wrong; nothing was done."""

    exit_status = ExitStatus.WRONG_COMMAND


class SettingError(UsageError):
    """A setting has a value that cannot be; the sentence names the setting, its value and what is allowed."""


class SiteError(UsageError):
    """site.toml is wrong; the sentence names file, table, key, what was found and what is allowed."""


class PhantomError(UsageError):
    """A phantom definition is wrong or unknown; the sentence names file, table and key."""


class FaultError(EvenfieldError):
    """The disk, the database or another part outside failed; a rerun goes on from there."""
