"""What a person decides: baselines accepted, events recorded, periods signed."""

import tempfile
from collections.abc import Collection, Mapping
from dataclasses import dataclass
from datetime import date
from fnmatch import fnmatchcase
from pathlib import Path

from qa.errors import FaultError, SiteError, UsageError
from qa.judge import (
    BASELINE_SESSIONS,
    AlteredVerdict,
    Context,
    NoBaseline,
    altered_verdicts,
    choose,
    describe,
    propose_baseline,
    streams,
    true_values,
)
from qa.pipeline.department import Department
from qa.quantities import QUANTITIES
from qa.records import Baseline, Event, Limit
from qa.site import FILE_NAME, Site, load_site

__all__ = [
    "AppliedLimit",
    "accept_baselines",
    "add_event",
    "limits_in_force",
    "set_baseline",
    "set_limit",
    "what_if",
]


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


@dataclass(frozen=True)
class AppliedLimit:
    """The limit that applies to one quantity of one scanner on one phantom, and why that one."""

    scanner_name: str
    phantom: str
    quantity: str
    limit: str
    source: str
    why: str


def limits_in_force(department: Department, scanner_name: str | None = None) -> tuple[AppliedLimit, ...]:
    """Tell which limit applies to what.

    Parameters
    ----------
    department : Department
        Opened by `open_department`.
    scanner_name : str or None
        None means all scanners.

    Returns
    -------
    tuple of AppliedLimit
        For each scanner, each phantom that is expected of it, and each quantity that has a limit.

    Raises
    ------
    SiteError
        There is no scanner of that name.
    """
    site = department.site
    scanners = site.scanners if scanner_name is None else (site.scanner(scanner_name),)
    found: list[AppliedLimit] = []
    for scanner in scanners:
        expected = {e.phantom: e for e in site.expectations if any(fnmatchcase(scanner.name, p) for p in e.scanner)}
        for phantom, expectation in expected.items():
            thickness = expectation.settings.get("slice_thickness_mm")
            context = Context(
                scanner.name,
                phantom,
                department.today,
                field_strength_T=scanner.field_strength_T,
                slice_thickness_mm=thickness if isinstance(thickness, float) else None,
            )
            for name in QUANTITIES:
                choice = choose(site.limits, name, context)
                if choice.limit is not None:
                    words = _bounds_words(choice.limit, QUANTITIES[name].unit)
                    found.append(AppliedLimit(scanner.name, phantom, name, words, choice.limit.source, choice.why))
    return tuple(found)


def _bounds_words(limit: Limit, unit: str) -> str:
    tail = "" if unit == "1" else f" {unit}"
    words = [describe(limit.lower, limit.upper, unit)]
    if limit.plus_minus is not None:
        centre = "the true value" if limit.nominal is None else f"{limit.nominal:g}"
        words.append(f"{centre} \N{PLUS-MINUS SIGN} {limit.plus_minus:g}{tail}")
    if limit.lower_percent_of_baseline is not None:
        words.append(f"at least {limit.lower_percent_of_baseline:g} % of the baseline")
    if limit.upper_percent_of_baseline is not None:
        words.append(f"at most {limit.upper_percent_of_baseline:g} % of the baseline")
    if limit.per_day is not None:
        words.append(f"a change of at most {limit.per_day:g}{tail} a day")
    said = " and ".join(word for word in words if word) or "none, on purpose"
    return said if limit.rule == "simple" else f"{said}, {limit.rule}"


def set_limit(department: Department, table: Mapping[str, str | float | None], *, why: str, name: str = "") -> int:
    """Write a limit at the end of site.toml and keep the new set as a version.

    The file is put in place only once it was found right as a whole. Where an earlier limit of the file selects exactly the
    same, the file is left alone: which of the two was meant is for a person to say.

    Parameters
    ----------
    department : Department
        Opened by `open_department`.
    table : mapping
        Keys of `[[limit]]`; None and "*" are left out.
    why, name : str
        The reason, and who decides.

    Returns
    -------
    int
        The version of the limits.

    Raises
    ------
    SiteError
        The limit is wrong, contradicts another, or names what there is not.
    UsageError
        No reason is given, or the limits were changed meanwhile.
    FaultError
        site.toml cannot be written.
    """
    from qa.store import current_user

    if not why.strip():
        raise UsageError("No reason was given: a change of limits needs one.")
    path = department.site.folder / FILE_NAME
    sets = department.record.limit_sets()
    based_on = sets[-1].version if sets else None
    lines = "".join(f"{key} = {_toml(value)}\n" for key, value in table.items() if value not in {None, "*"})
    try:
        text = path.read_text("utf-8")
        with tempfile.TemporaryDirectory(dir=department.site.folder, prefix=".limits-") as scratch:
            trial = Path(scratch) / FILE_NAME
            trial.write_text(f"{text.rstrip()}\n\n[[limit]]\n{lines}", encoding="utf-8")
            site = _tried(department.site.folder, trial, path)
            if path.read_text("utf-8") != text:
                raise UsageError(f"{path}: was changed by somebody else meanwhile: look at it and make your change again.")
            version = department.record.limits_version(
                site.limits_json, current_user(name), department.now, why, based_on=based_on
            )
            trial.replace(path)
    except OSError as error:
        raise FaultError(f"{path}: could not be changed ({error.strerror}): mend its permissions or free space.") from error
    return version


def _tried(folder: Path, trial: Path, path: Path) -> Site:
    """Check a file that is to take the place of site.toml; what is wrong with it is said of site.toml."""
    try:
        return load_site(folder, trial)
    except SiteError as error:
        raise SiteError(f"{str(error).replace(str(trial), str(path))} Nothing was changed.") from error


def _toml(value: str | float | None) -> str:
    import json

    return json.dumps(value, ensure_ascii=False)


def what_if(department: Department, file: Path) -> tuple[AlteredVerdict, ...]:
    """Tell which past verdicts the limits of another site.toml would alter; nothing is changed.

    Raises
    ------
    SiteError
        The file is missing or wrong.
    """
    record = department.record
    site = load_site(department.site.folder, file)
    truths = {name: true_values(phantom) for name, phantom in department.site.phantoms.items()}
    baselines = [kept.what for kept in record.baselines()]
    events = [kept.what for kept in record.events()]
    fields = {scanner.name: scanner.field_strength_T for scanner in department.site.scanners}
    return altered_verdicts(record.sessions(), site.limits, baselines, events, truths, field_strengths_T=fields)


def set_baseline(
    department: Department,
    scanner_name: str,
    quantity: str,
    value: float,
    uncertainty: float,
    *,
    since: date,
    phantom: str,
    why: str,
    name: str = "",
) -> int:
    """Set a baseline by hand, and give the number of its entry.

    Raises
    ------
    SiteError
        There is no scanner of that name.
    UsageError
        There is no such quantity, the value is not finite, it begins in the future, or no reason is given.
    """
    from qa.store import current_user

    if quantity not in QUANTITIES:
        raise UsageError(f"There is no quantity {quantity!r}: known are {', '.join(QUANTITIES)}.")
    baseline = Baseline(
        department.site.scanner(scanner_name).name, quantity, value, uncertainty, None, 0, since, phantom, method="set by hand"
    )
    return department.record.set_baseline(
        baseline, today=department.today, when=department.now, why=why, who=current_user(name)
    )


def add_event(department: Department, event: Event, *, name: str = "") -> int:
    """Record an event, and give the number of its entry.

    Raises
    ------
    SiteError
        There is no scanner of that name.
    UsageError
        The event lies in the future, its text is empty, or it names a quantity or kind that there is not.
    """
    from qa.store import current_user

    department.site.scanner(event.scanner_name)
    return department.record.add_event(event, today=department.today, when=department.now, who=current_user(name))
