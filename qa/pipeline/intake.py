"""Take series in: read, refuse what is not ours, measure, judge, file away, record.

Each acquisition is filed and recorded before the next one is looked at, in an order that a crash cannot harm: the copy in the
archive first, the record second, the inbox last. A rerun recognises what is recorded by its hash and goes on from there.
"""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING

from qa.pipeline.department import Department
from qa.pipeline.verdicts import judge_outcome
from qa.pipeline.walk import Progress, examine, no_progress
from qa.records import Acquisition, NotMeasured, Outcome, Refused, SourceFile, Verdict
from qa.site import Expectation, SiteScanner, changed_settings, expectation_for, match_scanner
from qa.version import __version__

if TYPE_CHECKING:
    from qa.dicom import Header

__all__ = ["Intake", "Taken", "take_in"]

_ELSEWHERE = Path("outside the department folder")
_STAYS = Path("still in the inbox")


@dataclass(frozen=True, eq=False)
class Taken:
    """One acquisition that was taken in; `changed` names the settings that are not what site.toml expects."""

    scanner_name: str
    day: date
    outcome: Outcome
    verdicts: tuple[Verdict | None, ...]
    changed: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Intake:
    """What a run took in, how many files it skipped because the record has them, and what it refused."""

    taken: tuple[Taken, ...]
    skipped: int
    refused: tuple[Refused, ...]

    @property
    def unmeasured(self) -> tuple[Taken, ...]:
        """What was taken in but gave no figure of the phantom: it was not found, or the protocol has changed."""
        return tuple(one for one in self.taken if one.changed or one.outcome.pose is None)

    @property
    def needs_a_person(self) -> bool:
        """Tell whether something has to be looked at, whatever the figures say."""
        return bool(self.refused or self.unmeasured)


@dataclass
class _Gate:
    """Decides on a header alone whether a file is taken, and remembers whose series it is."""

    department: Department
    known: dict[Path, str] = field(default_factory=dict)
    hashes: dict[Path, str] = field(default_factory=dict)
    series: dict[str, tuple[SiteScanner, Expectation]] = field(default_factory=dict)

    def __call__(self, header: "Header") -> str | None:
        self.hashes[header.path] = header.sha256
        if self.department.record.known_files([header.sha256]):
            self.known[header.path] = header.sha256
            return "taken in before"
        site = self.department.site
        scanner = match_scanner(site, header.station, header.serial)
        if isinstance(scanner, str):
            return scanner
        expectation = expectation_for(site, scanner, header.series_description, header.patient_id)
        if isinstance(expectation, str):
            return expectation
        if header.acquired_at is None:
            return "the header gives no date of acquisition: it cannot be put into a session"
        self.series[header.series_instance_uid] = (scanner, expectation)
        return None


def take_in(department: Department, paths: Sequence[Path] = (), progress: Progress = no_progress) -> Intake:
    """Take in what lies in the inbox, or under the paths given.

    Files in the inbox leave it: into the archive, or into the refused folder with the reason beside them. Files elsewhere are
    copied into the archive and otherwise left alone.

    Parameters
    ----------
    department : Department
        Opened by `open_department`.
    paths : sequence of pathlib.Path
        Files or folders; none means the inbox.
    progress : Progress
        Wraps the loop over acquisitions.

    Returns
    -------
    Intake
        What was taken in, skipped and refused.

    Raises
    ------
    UsageError
        A path does not exist.
    FaultError
        Another run is at work, or the disk or the record failed; what was done is kept.
    """
    from qa.dicom import read
    from qa.store import current_user, run_lock
    from qa.store.archive import clear_empty_folders

    site, record = department.site, department.record
    with run_lock(site.folder, department.now):
        for folder in (site.inbox, site.archive, site.refused, site.reports):
            folder.mkdir(parents=True, exist_ok=True)
        gate = _Gate(department)
        reading = read(list(paths) or [site.inbox], admit=gate)
        version = record.limits_version(
            site.limits_json, current_user(), department.now, "site.toml as it stood when series were taken in"
        )
        taken: list[Taken] = []
        for together in progress(_sharing_files(reading.acquisitions), "Measuring"):
            taken += _store(department, gate, together, version)
        refused = tuple(
            _refuse(department, gate, one)
            for one in reading.refused
            if one.path not in gate.known or _let_go(department, gate, one)
        )
        if not paths:
            clear_empty_folders(site.inbox)
        return Intake(tuple(taken), len(gate.known), refused)


def _sharing_files(acquisitions: Iterable[Acquisition]) -> list[list[Acquisition]]:
    """Group acquisitions that come from the same files: a file counts as taken in once all that it holds is recorded."""
    groups: list[tuple[set[str], list[Acquisition]]] = []
    for acquisition in acquisitions:
        files = {file.sha256 for file in _files(acquisition)}
        sharing = [group for group in groups if group[0] & files]
        members = [one for group in sharing for one in group[1]]
        groups = [group for group in groups if group not in sharing]
        groups.append((files.union(*(group[0] for group in sharing)), [*members, acquisition]))
    return [members for _, members in groups]


def _files(acquisition: Acquisition) -> tuple[SourceFile, ...]:
    return tuple({file.sha256: file for repeat in acquisition.repeats for file in repeat.files}.values())


def _store(department: Department, gate: _Gate, acquisitions: Sequence[Acquisition], limits_version: int) -> list[Taken]:
    """Measure, judge, file and record acquisitions that belong together."""
    from qa.store import Intake as Entry
    from qa.store.archive import archive_path, file_away, release

    site, record = department.site, department.record
    taken: list[Taken] = []
    entries: list[Entry] = []
    kept: dict[str, Path] = {}
    files: dict[str, SourceFile] = {}
    for acquisition in acquisitions:
        scanner, expectation = gate.series[acquisition.first.series_instance_uid]
        phantom = site.phantoms[expectation.phantom]
        changed = changed_settings(expectation, acquisition.settings)
        outcome = _not_measured_over(acquisition, phantom.name, changed) if changed else examine(acquisition, phantom)
        acquired_at = acquisition.first.acquired_at
        day = department.today if acquired_at is None else acquired_at.date()
        outcome, verdicts = judge_outcome(department, scanner, phantom, outcome, day)
        for repeat in acquisition.repeats:
            for file in repeat.files:
                files[file.sha256] = file
                target = archive_path(site.archive, scanner.name, day, repeat.series_instance_uid, file)
                if file.sha256 not in kept:
                    kept[file.sha256] = file_away(file, target, move=False)
        record.keep_phantom(phantom.name, _definition(site.phantom_files[phantom.name], phantom.name), department.now)
        places = {sha256: path.relative_to(site.folder) for sha256, path in kept.items()}
        entries.append(
            Entry(outcome, verdicts, scanner.name, phantom.sha256, limits_version, department.now, __version__, places)
        )
        taken.append(Taken(scanner.name, day, outcome, verdicts, changed))
    record.store_all(entries)
    for sha256, file in files.items():
        if _inside(file.path, site.inbox):
            release(file.path, sha256, kept[sha256])
    return taken


def _definition(path: Path | None, name: str) -> str:
    from qa.resources import shipped_folder

    return (path or shipped_folder("phantoms") / f"{name}.toml").read_text("utf-8")


def _not_measured_over(acquisition: Acquisition, phantom: str, changed: Sequence[str]) -> Outcome:
    """Report a changed protocol in place of figures that could not be held against earlier ones."""
    from qa.measure import ROUTINES

    reason = f"the protocol is not the one that site.toml expects: {'; '.join(changed)}"
    missing = tuple(NotMeasured(name, reason) for routine in ROUTINES for name in routine.quantities)
    return Outcome(acquisition, phantom, None, (), missing, (f"not measured, because {reason}",))


def _let_go(department: Department, gate: _Gate, one: Refused) -> bool:
    """Take a file that the record has out of the inbox, its archived copy permitting; never true: it is not a refusal."""
    from qa.store.archive import release

    if _inside(one.path, department.site.inbox):
        sha256 = gate.known[one.path]
        kept = department.record.kept_at(sha256)
        if kept is not None:
            release(one.path, sha256, department.site.folder / kept)
    return False


def _refuse(department: Department, gate: _Gate, one: Refused) -> Refused:
    """Record a refusal; a file in the inbox moves to the refused folder, under a name that holds nothing of its sender's."""
    from qa.store.archive import refuse_file

    site, sha256 = department.site, gate.hashes.get(one.path, "")
    shown = _ELSEWHERE
    if _inside(one.path, site.inbox):
        target = refuse_file(one.path, site.refused, department.today, one.reason)
        shown = _STAYS if target == one.path else target.relative_to(site.folder)
        one = replace(one, path=target)
    department.record.refuse(shown, one.reason, sha256, department.now)
    return one


def _inside(path: Path, folder: Path) -> bool:
    """Tell whether a path lies in a folder; where a link itself lies counts, not where it leads."""
    return path.parent.resolve().is_relative_to(folder.resolve())
