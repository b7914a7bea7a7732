"""An acquisition on its way into the record: all that was found becomes the rows of one entry."""

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field
from datetime import datetime
from functools import lru_cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import PurePath
from typing import Any

from sqlalchemy import Connection, Table

from qa.errors import UsageError
from qa.records import Outcome, Verdict
from qa.store import queries, rows
from qa.store.chain import Who, append
from qa.store.tables import (
    acquisitions,
    details,
    files,
    measurements,
    not_measured,
    series,
    sessions,
    software,
    verdicts,
)

__all__ = ["Intake", "store"]

_LIBRARIES = ("numpy", "scipy", "scikit-image", "pydicom")


@dataclass(frozen=True, eq=False)
class Intake:
    """One acquisition on its way into the record.

    Attributes
    ----------
    outcome : Outcome
        What was measured.
    verdicts : sequence of Verdict or None
        One for each measurement, in their order; None where no limit applies.
    scanner_name : str
        The scanner's name in site.toml.
    phantom_sha256 : str
        Content hash of the phantom's definition.
    limits_version : int
        Version of the limits that the verdicts were made by.
    taken_in_at : datetime.datetime
        The machine's clock.
    software_version : str
        Version of this program.
    kept_at : mapping of str to path
        Where each file is kept, by its SHA-256, from the department folder; where it was read, for those not named.
    """

    outcome: Outcome
    verdicts: Sequence[Verdict | None]
    scanner_name: str
    phantom_sha256: str
    limits_version: int
    taken_in_at: datetime
    software_version: str
    kept_at: Mapping[str, str | PurePath] = field(default_factory=dict)


def store(connection: Connection, intake: Intake, who: Who, *, corrects: int | None = None, why: str = "") -> int:
    """Write one acquisition as an entry, and give its number; what was stored before is only looked up."""
    outcome, acquisition = intake.outcome, intake.outcome.acquisition
    acquired_at = acquisition.first.acquired_at
    if acquired_at is None:
        raise UsageError(f"A series of {intake.scanner_name} has no date of acquisition: it cannot be put into a session.")
    if len(intake.verdicts) != len(outcome.measurements):
        raise ValueError(f"{len(intake.verdicts)} verdicts do not match {len(outcome.measurements)} measurements")
    content = rows.content_sha256(acquisition)
    before = queries.acquisition_of(connection, content)
    if corrects is None and before is not None:
        return before.entry
    faults = rows.sound(outcome.measurements)
    kept = [(m, v) for m, v, fault in zip(outcome.measurements, intake.verdicts, faults, strict=True) if fault is None]
    figures, extras = rows.measurement_rows([m for m, _ in kept])
    missing = [*outcome.not_measured, *(fault for fault in faults if fault is not None)]
    repeats, paths = rows.series_and_file_rows(acquisition, intake.kept_at)
    day = {"scanner_name": intake.scanner_name, "day": acquired_at.date().isoformat()}
    session = queries.same(connection, sessions, day)
    environment = {"version": intake.software_version, "libraries": _libraries()}
    program = queries.same(connection, software, environment)
    scanner, settings, pose = acquisition.scanner, acquisition.settings, outcome.pose
    centre = (None,) * 3 if pose is None else tuple(float(v) for v in pose.centre_patient)

    def of_entry(number: int) -> dict[Table, list[dict[str, Any]]]:
        main = {
            "session": session or number,
            "content_sha256": content,
            "revision": 0 if before is None else before.revision + 1,
            "acquired_at": acquired_at.isoformat(),
            "taken_in_at": intake.taken_in_at.isoformat(),
            "phantom": outcome.phantom,
            "phantom_sha256": intake.phantom_sha256,
            "protocol": settings.protocol,
            "coil": settings.receive_coil,
            "field_strength_T": scanner.field_strength_T,
            "scanner_software": scanner.software,
            "scanner": rows.dump(asdict(scanner)),
            "settings": rows.dump(asdict(settings)),
            "centre_x_mm": centre[0],
            "centre_y_mm": centre[1],
            "centre_z_mm": centre[2],
            "rotation_deg": None if pose is None else pose.rotation_deg,
            "tilt_deg": None if pose is None else pose.tilt_deg,
            "remarks": rows.dump([*acquisition.remarks, *outcome.remarks]),
            "software": program or number,
            "limits_version": intake.limits_version,
        }
        return {
            software: [] if program else [environment],
            sessions: [] if session else [day],
            acquisitions: [main],
            series: repeats,
            files: paths,
            measurements: figures,
            details: [{"content": extras}],
            not_measured: [
                {"position": n, "quantity": m.quantity, "reason": m.reason} for n, m in enumerate(missing, start=1)
            ],
            verdicts: [rows.verdict_row(n, v) for n, (_, v) in enumerate(kept, start=1) if v is not None],
        }

    return append(connection, "acquisition", of_entry, at=intake.taken_in_at, who=who, why=why, corrects=corrects)


@lru_cache(maxsize=1)
def _libraries() -> str:
    found = {}
    for name in _LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    return rows.dump(found)
