"""The data behind a report, as the CSV and JSON files that travel inside the PDF."""

import csv
import hashlib
import io
import json
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

from qa.records import Judged, RecordedAcquisition, Session
from qa.report.content import ScannerReport
from qa.report.numbers import COVERAGE_FACTOR

__all__ = ["AttachedFile", "attached_data", "figures_csv", "sessions_json"]

COLUMNS = (
    "scanner", "session", "acquired_at", "taken_in_at", "acquisition", "phantom", "protocol", "coil", "slice", "quantity",
    "value", "unit", "standard_uncertainty", "coverage_factor", "expanded_uncertainty", "method", "method_version",
    "verdict", "lower_limit", "upper_limit", "limit", "rule", "limit_source", "probability_of_conformity",
    "reason_not_measured", "software_version", "limits_version", "limits_sha256", "phantom_sha256", "series_instance_uids",
)  # fmt: skip


@dataclass(frozen=True)
class AttachedFile:
    """A file that travels inside a PDF."""

    name: str
    description: str
    content: bytes

    @property
    def sha256(self) -> str:
        """Hash of its content."""
        return hashlib.sha256(self.content).hexdigest()


def _harmless(text: str) -> str:
    """Keep a spreadsheet from taking a text that came from outside for a formula."""
    return f"'{text}" if text[:1] in {"=", "+", "-", "@", "\t", "\r"} else text


def _rows(acquisition: RecordedAcquisition, session: Session) -> Iterator[dict[str, object]]:
    shared: dict[str, object] = {
        "scanner": _harmless(session.scanner_name),
        "session": session.day.isoformat(),
        "acquired_at": acquisition.acquired_at.isoformat(),
        "taken_in_at": acquisition.taken_in_at.isoformat(),
        "acquisition": acquisition.identifier,
        "phantom": _harmless(acquisition.phantom),
        "protocol": _harmless(acquisition.settings.protocol),
        "coil": _harmless(acquisition.settings.receive_coil),
        "software_version": acquisition.software_version,
        "limits_version": acquisition.limits_version,
        "limits_sha256": acquisition.limits_sha256,
        "phantom_sha256": acquisition.phantom_sha256,
        "series_instance_uids": " ".join(acquisition.series_uids),
    }
    for judged in acquisition.judged:
        yield shared | _figure(judged)
    for absent in acquisition.not_measured:
        yield shared | {"quantity": absent.quantity, "reason_not_measured": _harmless(absent.reason)}


def _figure(judged: Judged) -> dict[str, object]:
    found, verdict = judged.measurement, judged.verdict
    row: dict[str, object] = {
        "slice": found.slice,
        "quantity": found.quantity,
        "value": repr(float(found.value)),
        "unit": found.unit,
        "standard_uncertainty": repr(float(found.standard_uncertainty)),
        "coverage_factor": COVERAGE_FACTOR,
        "expanded_uncertainty": repr(float(COVERAGE_FACTOR * found.standard_uncertainty)),
        "method": found.method,
        "method_version": found.method_version,
    }
    if verdict is not None:
        row |= {
            "verdict": verdict.conformity,
            "lower_limit": verdict.lower,
            "upper_limit": verdict.upper,
            "limit": _harmless(verdict.limit),
            "rule": verdict.rule,
            "limit_source": _harmless(verdict.source),
            "probability_of_conformity": verdict.probability,
        }
    return row


def figures_csv(sessions: Iterable[Session]) -> bytes:
    """Write every figure of sessions as one row of CSV (RFC 4180, UTF-8 with a byte order mark, which spreadsheets need)."""
    buffer = io.StringIO(newline="")
    writer = csv.DictWriter(buffer, COLUMNS, restval="", extrasaction="raise")
    writer.writeheader()
    for session in sessions:
        for acquisition in session.acquisitions:
            writer.writerows(_rows(acquisition, session))
    return buffer.getvalue().encode("utf-8-sig", errors="replace")


def _acquisition(acquisition: RecordedAcquisition) -> dict[str, Any]:
    return {
        "identifier": acquisition.identifier,
        "phantom": acquisition.phantom,
        "phantom_sha256": acquisition.phantom_sha256,
        "acquired_at": acquisition.acquired_at.isoformat(),
        "taken_in_at": acquisition.taken_in_at.isoformat(),
        "series": list(acquisition.series_uids),
        "files": [{"sop_instance_uid": f.sop_instance_uid, "sha256": f.sha256} for f in acquisition.files],
        "scanner": vars(acquisition.scanner),
        "settings": vars(acquisition.settings),
        "pose": {
            "centre_patient_mm": acquisition.centre_patient,
            "rotation_deg": acquisition.rotation_deg,
            "tilt_deg": acquisition.tilt_deg,
        },
        "measurements": [_measurement(judged) for judged in acquisition.judged],
        "not_measured": [{"quantity": n.quantity, "reason": n.reason} for n in acquisition.not_measured],
        "remarks": list(acquisition.remarks),
        "software_version": acquisition.software_version,
        "limits_version": acquisition.limits_version,
        "limits_sha256": acquisition.limits_sha256,
    }


def _measurement(judged: Judged) -> dict[str, Any]:
    found, verdict = judged.measurement, judged.verdict
    return {
        "quantity": found.quantity,
        "value": found.value,
        "unit": found.unit,
        "standard_uncertainty": found.standard_uncertainty,
        "method": found.method,
        "method_version": found.method_version,
        "slice": found.slice,
        "verdict": None
        if verdict is None
        else {
            "conformity": verdict.conformity,
            "lower": verdict.lower,
            "upper": verdict.upper,
            "limit": verdict.limit,
            "rule": verdict.rule,
            "source": verdict.source,
            "probability": verdict.probability,
        },
    }


def sessions_json(content: ScannerReport) -> bytes:
    """Write what a report shows as one JSON object: the sessions with every figure, unrounded, and what traces them."""
    document = {
        "format": "evenfield-report-data",
        "version": 1,
        "software": {"name": "evenfield", "version": content.software_version},
        "department": content.department,
        "scanner": content.scanner,
        "as_of": content.as_of.isoformat(),
        "period": {"from": content.first_day.isoformat(), "to": content.last_day.isoformat()},
        "standing": content.standing,
        "limits": {"version": content.limits_version, "sha256": content.limits_sha256},
        "record_head": content.record_head,
        "missing": [day.isoformat() for day in content.missing],
        "refused": [{"day": r.day.isoformat(), "what": r.what, "reason": r.reason} for r in content.refused],
        "events": [
            {"day": e.day.isoformat(), "until": e.until.isoformat() if e.until else None, "kind": e.kind, "text": e.text}
            for e in content.events
        ],
    }
    sessions = [
        {"day": session.day.isoformat(), "acquisitions": [_acquisition(a) for a in session.acquisitions]}
        for session in content.sessions
    ]
    # One line for each session: readable, and written ten times faster than with indents.
    lines = ",\n".join(_json(session) for session in sessions)
    head = _json(document)[:-1]
    return f'{head}, "sessions": [\n{lines}\n]}}\n'.encode(errors="replace")


def _json(value: object) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)


def attached_data(content: ScannerReport) -> tuple[AttachedFile, ...]:
    """Make the files that travel inside a scanner's report."""
    return (
        AttachedFile("figures.csv", "Every figure of the period, one row each", figures_csv(content.sessions)),
        AttachedFile("sessions.json", "The sessions of the period with all that traces them", sessions_json(content)),
    )
