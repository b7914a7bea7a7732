"""Build the invented department: scan, take in week by week, report."""

import shutil
import tempfile
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace
from datetime import UTC, datetime, time
from itertools import groupby
from pathlib import Path
from typing import TYPE_CHECKING

from qa.demo.plan import LAST_MONDAY, PHYSICIST, SITE_TOML, WEEKS, Scan, acceptances, plan, services
from qa.errors import FaultError, UsageError
from qa.pipeline import Progress, accept_baselines, no_progress, open_department, survey, take_in, write_reports
from qa.report.content import CAUTIONS
from qa.simulate import write_dicom
from qa.simulate.misdirected import write_misdirected

if TYPE_CHECKING:
    from qa.store import Who

__all__ = ["build_demo"]

_PATIENT_WEEK = 18
_EVENING = time(17, 30, tzinfo=UTC)


def build_demo(folder: Path, progress: Progress = no_progress) -> Iterator[str]:
    """Build the department in a folder and run the whole job on it.

    Parameters
    ----------
    folder : pathlib.Path
        A new or an empty folder.
    progress : Progress
        Wraps the long loops.

    Yields
    ------
    str
        Lines to print: what was built, and what to open first.

    Raises
    ------
    UsageError
        The folder is a file, or is not empty.
    FaultError
        The disk failed.
    """
    folder = folder.absolute()
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if any(folder.iterdir()):
            raise UsageError(f"{folder}: is not empty: give the demo a new or an empty folder.")
        for name in ("inbox", "archive", "refused", "reports"):
            (folder / name).mkdir()
        (folder / "site.toml").write_text(SITE_TOML, encoding="utf-8")
    except FileExistsError:
        raise UsageError(f"{folder}: is a file: give the demo a new or an empty folder.") from None
    except OSError as error:
        raise FaultError(f"{folder}: could not be written to ({error.strerror}): choose another folder.") from error
    with tempfile.TemporaryDirectory(prefix="evenfield-demo-") as scratch:
        staging = Path(scratch)
        scans = plan()
        _scan_all(scans, staging, progress)
        _run_weeks(folder, staging, scans, progress)
    with open_department(folder, datetime.combine(LAST_MONDAY, _EVENING)) as department:
        reports = write_reports(department, progress=progress)
        standings = [(one.scanner_name, one.sentence) for one in survey(department).assessments]
    yield from _closing_lines(folder, reports, standings)


def _place(staging: Path, number: int) -> Path:
    return staging / f"{number:04d}"


def _scan_all(scans: tuple[Scan, ...], staging: Path, progress: Progress) -> None:
    """Scan the whole year's phantoms, on all cores; the seeds make the files the same on any number of them."""
    from joblib import Parallel, delayed

    jobs = [delayed(write_dicom)(scan.setup, _place(staging, number)) for number, scan in enumerate(scans)]
    done = iter(Parallel(n_jobs=-1, return_as="generator_unordered", batch_size=4)(jobs))
    for _ in progress(scans, "Scanning phantoms"):
        next(done)


def _run_weeks(folder: Path, staging: Path, scans: tuple[Scan, ...], progress: Progress) -> None:
    """Hand each week's series to the inbox and run the job on its Monday evening, as a department would."""
    weeks = [(day, list(group)) for day, group in groupby(enumerate(scans), key=lambda item: item[1].day)]
    coming = sorted(services(), key=lambda service: service.event.day)
    with open_department(folder) as opened:
        for week, (day, group) in enumerate(progress(weeks, "Taking weeks in")):
            department = replace(opened, now=datetime.combine(day, _EVENING))
            for service in [one for one in coming if one.event.day <= day]:
                coming.remove(service)
                department.record.add_event(service.event, today=department.today, when=department.now, who=_physicist())
            for number, _scan in group:
                shutil.move(_place(staging, number), department.site.inbox / f"{number:04d}")
            if week == _PATIENT_WEEK:
                write_misdirected(group[0][1].setup, department.site.inbox / "misdirected")
            take_in(department)
            for acceptance in (one for one in acceptances() if one.week == week):
                accept_baselines(
                    department,
                    acceptance.scanner_name,
                    first=acceptance.since,
                    last=day,
                    why=acceptance.why,
                    name=PHYSICIST,
                    quantities=acceptance.quantities,
                )


def _physicist() -> "Who":
    from qa.store import current_user

    return current_user(PHYSICIST)


def _closing_lines(folder: Path, reports: Sequence[Path], standings: Iterable[tuple[str, str]]) -> Iterator[str]:
    yield f"Saltmarsh Imaging (invented) stands in {folder}: three scanners, {WEEKS} Mondays, a record, and these reports:"
    yield from (f"  {path}" for path in reports)
    yield "Where its scanners stand:"
    yield from (f"  {name}: {sentence}" for name, sentence in standings)
    yield from CAUTIONS
    yield f"Open first: {reports[0]}"
    yield f"Then try: evenfield status --site {folder} --as-of {LAST_MONDAY.isoformat()}"
