"""What a person decides: baselines accepted, events recorded, periods signed."""

from collections.abc import Collection
from datetime import date

from qa.errors import UsageError
from qa.judge import BASELINE_SESSIONS, NoBaseline, propose_baseline, streams
from qa.pipeline.department import Department
from qa.records import Baseline

__all__ = ["accept_baselines"]


def accept_baselines(
    department: Department,
    scanner_name: str,
    *,
    first: date,
    last: date,
    why: str,
    name: str = "",
    quantities: Collection[str] = (),
) -> tuple[tuple[Baseline, ...], tuple[str, ...]]:
    """Accept the sessions of a period, and take baselines from the first of them.

    Parameters
    ----------
    department : Department
        Opened by `open_department`.
    scanner_name : str
        Whose sessions.
    first, last : datetime.date
        The period, both days included.
    why, name : str
        The reason, and who accepts.
    quantities : collection of str
        Which; none means all that were measured.

    Returns
    -------
    tuple of Baseline
        Those that were kept.
    tuple of str
        Why others could not be taken, in sentences.

    Raises
    ------
    UsageError
        There is no session in the period, or nothing of what was asked for.
    """
    from qa.store import current_user

    record, site = department.record, department.site
    scanner = site.scanner(scanner_name)
    sessions = record.sessions(scanner.name, to_day=last)
    accepted = [session.day for session in sessions if first <= session.day <= last]
    if not accepted:
        raise UsageError(f"{scanner.name} has no session from {first} to {last}: there is nothing to accept.")
    events = [kept.what for kept in record.events(scanner.name)]
    wanted = site.charts.baseline_sessions or BASELINE_SESSIONS
    kept: list[Baseline] = []
    missing: list[str] = []
    for stream in streams(sessions, events):
        if quantities and stream.quantity not in quantities:
            continue
        found = propose_baseline(stream, accepted, wanted, since=first)
        if isinstance(found, NoBaseline):
            missing.append(f"{stream.quantity} on {stream.phantom}: {found.reason}")
            continue
        record.set_baseline(found, today=department.today, when=department.now, why=why, who=current_user(name))
        kept.append(found)
    if not kept and not missing:
        raise UsageError(f"{scanner.name} was not measured for {', '.join(quantities)} up to {last}.")
    return tuple(kept), tuple(missing)
