"""Records to rows and back, to the last bit."""

import hashlib
import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, fields
from datetime import datetime
from pathlib import Path, PurePath
from typing import Any

from qa.geometry import Plane
from qa.records import (
    Acquisition,
    Judged,
    Measurement,
    NotMeasured,
    RecordedAcquisition,
    Region,
    Scanner,
    Settings,
    SourceFile,
    Verdict,
)

__all__ = [
    "VERDICT_COLUMNS",
    "Builder",
    "content_sha256",
    "dump",
    "judged_from_rows",
    "measurement_rows",
    "series_and_file_rows",
    "sound",
    "verdict",
    "verdict_row",
]

_SCANNER_FIELDS = {f.name for f in fields(Scanner)}
_SETTINGS_FIELDS = {f.name for f in fields(Settings)}


def dump(value: Any) -> str:  # noqa: ANN401 - anything that JSON can hold
    """Write JSON without blanks; arrays and numpy's numbers become lists and numbers, what is no finite number null."""
    return json.dumps(_plain(value), ensure_ascii=False, separators=(",", ":"), allow_nan=False)


def _plain(value: Any) -> Any:  # noqa: ANN401 - anything that JSON can hold
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple, set, frozenset)):
        return [_plain(item) for item in value]
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value if value is None or isinstance(value, (str, int)) else str(value)


def sound(measurements: Sequence[Measurement]) -> list[NotMeasured | None]:
    """Say of each measurement why it cannot be kept: its value or uncertainty is no finite number; None where it can."""
    return [
        None
        if math.isfinite(m.value) and math.isfinite(m.standard_uncertainty)
        else NotMeasured(m.quantity, "the result, or its uncertainty, is no finite number")
        for m in measurements
    ]


def content_sha256(acquisition: Acquisition) -> str:
    """Hash what was measured: the files of each repeat, and which of the images in them it is.

    One file may hold several echoes, kinds or stacks; each is an acquisition of its own.
    """
    parts = [
        [
            sorted({file.sha256 for file in one.files}) or one.series_instance_uid,
            one.kind,
            one.temporal_position,
            one.settings.echo_ms,
            len(one.planes),
            _place(one.planes),
        ]
        for one in acquisition.repeats
    ]
    return hashlib.sha256(dump(parts).encode("utf-8")).hexdigest()


def _place(planes: Sequence[Plane]) -> list[float]:
    if not planes:
        return []
    first = planes[0]
    return [round(v, 3) + 0.0 for v in (*first.position_patient, *first.row_direction, *first.column_direction)]


def series_and_file_rows(
    acquisition: Acquisition, kept_at: Mapping[str, str | PurePath]
) -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
    """Give a row for each repeat, and one for each file, which is named once however many repeats it holds."""
    repeats = [
        {
            "position": position,
            "series_instance_uid": one.series_instance_uid,
            "study_instance_uid": one.study_instance_uid,
            "description": one.description,
            "kind": one.kind,
            "temporal_position": one.temporal_position,
            "acquired_at": None if one.acquired_at is None else one.acquired_at.isoformat(),
        }
        for position, one in enumerate(acquisition.repeats, start=1)
    ]
    once = {file.sha256: file for one in acquisition.repeats for file in one.files}
    paths = [
        {
            "position": position,
            "sha256": file.sha256,
            "sop_instance_uid": file.sop_instance_uid,
            "path": PurePath(kept_at.get(file.sha256, file.path)).as_posix(),
        }
        for position, file in enumerate(once.values(), start=1)
    ]
    return repeats, paths


def measurement_rows(measurements: Sequence[Measurement]) -> tuple[list[dict[str, Any]], str]:
    """Give a row for each measurement, and the JSON text with details and regions of them all."""
    rows = [
        {
            "position": position,
            "quantity": m.quantity,
            "value": m.value,
            "unit": m.unit,
            "standard_uncertainty": m.standard_uncertainty,
            "method": m.method,
            "method_version": m.method_version,
            "slice": m.slice,
        }
        for position, m in enumerate(measurements, start=1)
    ]
    return rows, dump([[m.details, [_region_out(r) for r in m.regions]] for m in measurements])


def _region_out(region: Region) -> list[Any]:
    return [region.name, region.shape, region.slice, region.points, region.radius_mm]


def _region_in(values: Sequence[Any]) -> Region:
    name, shape, slice_, points, radius_mm = values
    return Region(name, shape, slice_, tuple((x, y) for x, y in points), radius_mm)


def verdict_row(position: int, judged: Verdict) -> dict[str, Any]:
    """Give the row of a verdict, whose quantity is that of its measurement."""
    row = asdict(judged)
    del row["quantity"]
    return {"position": position, "limit_text": row.pop("limit"), **row}


def judged_from_rows(measurements: Sequence[Any], details: str, verdicts: Sequence[Any]) -> tuple[Judged, ...]:
    """Put measurements, their details and their verdicts together again."""
    extras = json.loads(details)
    by_position = {row.position: row for row in verdicts}
    found = []
    for row, (detail, regions) in zip(measurements, extras, strict=True):
        measurement = Measurement(
            quantity=row.quantity,
            value=row.value,
            unit=row.unit,
            standard_uncertainty=row.standard_uncertainty,
            method=row.method,
            method_version=row.method_version,
            slice=row.slice,
            details=detail,
            regions=tuple(_region_in(region) for region in regions),
        )
        judged = by_position.get(row.position)
        found.append(Judged(measurement, None if judged is None else verdict(row.quantity, judged[2:])))
    return tuple(found)


VERDICT_COLUMNS = (
    "conformity", "lower", "upper", "limit_text", "rule", "source", "probability", "guard_band", "warn_lower", "warn_upper",
    "warned", "limit_key",
)  # fmt: skip
"""Columns of a verdict in the order of its fields."""


def verdict(quantity: str, values: Sequence[Any]) -> Verdict:
    """Make a verdict of the values of `VERDICT_COLUMNS`."""
    word, lower, upper, limit, rule, source, probability, guard, warn_lower, warn_upper, warned, key = values
    return Verdict(
        quantity, word, lower, upper, limit, rule, source, probability, guard, warn_lower, warn_upper, bool(warned), key
    )


class Builder:
    """Puts acquisitions together again from their rows; equal scanners and settings become one object."""

    def __init__(self) -> None:
        self._scanners: dict[str, Scanner] = {}
        self._settings: dict[str, Settings] = {}

    def acquisition(
        self,
        row: Any,  # noqa: ANN401 - a row
        *,
        series: Sequence[Any] = (),
        files: Sequence[Any] = (),
        judged: tuple[Judged, ...] = (),
        not_measured: Sequence[Any] = (),
    ) -> RecordedAcquisition:
        """Make the record of one row of acquisitions and the rows of other tables that belong to it."""
        centre = (row.centre_x_mm, row.centre_y_mm, row.centre_z_mm)
        return RecordedAcquisition(
            identifier=row.entry,
            scanner_name=row.scanner_name,
            phantom=row.phantom,
            phantom_sha256=row.phantom_sha256,
            acquired_at=datetime.fromisoformat(row.acquired_at),
            taken_in_at=datetime.fromisoformat(row.taken_in_at),
            scanner=self.scanner(row.scanner),
            settings=self.setting(row.settings),
            series_uids=tuple(dict.fromkeys(one.series_instance_uid for one in series)),
            files=tuple(SourceFile(Path(file.path), file.sop_instance_uid, file.sha256) for file in files),
            centre_patient=None if row.centre_x_mm is None else centre,
            rotation_deg=row.rotation_deg,
            tilt_deg=row.tilt_deg,
            judged=judged,
            not_measured=tuple(NotMeasured(one.quantity, one.reason) for one in not_measured),
            remarks=() if row.remarks == "[]" else tuple(json.loads(row.remarks)),
            software_version=row.software_version,
            limits_version=row.limits_version,
            limits_sha256=row.limits_sha256,
        )

    def scanner(self, text: str) -> Scanner:
        """Read what the header said of the scanner."""
        if text not in self._scanners:
            self._scanners[text] = Scanner(**{k: v for k, v in json.loads(text).items() if k in _SCANNER_FIELDS})
        return self._scanners[text]

    def setting(self, text: str) -> Settings:
        """Read what the header said of the protocol."""
        if text not in self._settings:
            given: dict[str, Any] = {
                k: tuple(v) if isinstance(v, list) else v for k, v in json.loads(text).items() if k in _SETTINGS_FIELDS
            }
            self._settings[text] = Settings(**given)
        return self._settings[text]
