"""Figures as JSON: the promise that other programs rely on. A change adds; it never renames or removes."""

import json
import math
from collections.abc import Iterable, Mapping
from datetime import datetime
from typing import TYPE_CHECKING, Any

from qa.records import Measurement, Outcome, Pose, Refused
from qa.version import __version__

if TYPE_CHECKING:
    from qa.judge import Assessment, QuantityState

__all__ = ["measurements_document", "status_document", "to_json"]


def to_json(document: Mapping[str, Any]) -> str:
    """Write a document as JSON text; a number that is not finite cannot be written and raises ValueError."""
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False)


def measurements_document(outcomes: Iterable[Outcome], refused: Iterable[Refused]) -> dict[str, Any]:
    """Lay out what `evenfield measure --json` prints.

    Parameters
    ----------
    outcomes : iterable of Outcome
        One for each acquisition.
    refused : iterable of Refused
        What was not taken in.

    Returns
    -------
    dict
        Plain values; numbers in the units of the quantities, never rounded.
    """
    return {
        "format": "evenfield-measurements",
        "version": 1,
        "software": {"name": "evenfield", "version": __version__},
        "acquisitions": [_acquisition(outcome) for outcome in outcomes],
        "refused": [{"path": str(one.path), "reason": one.reason} for one in refused],
    }


def status_document(at: datetime, assessments: "Iterable[Assessment]", remarks: Iterable[str] = ()) -> dict[str, Any]:
    """Lay out what `evenfield status --json` prints.

    Parameters
    ----------
    at : datetime
        The moment of the run, with its time zone.
    assessments : iterable of Assessment
        One a scanner.
    remarks : iterable of str
        What else a person should know, one sentence each.

    Returns
    -------
    dict
        Plain values.
    """
    return {
        "format": "evenfield-status",
        "version": 1,
        "at": _moment(at),
        "scanners": [_scanner(one) for one in assessments],
        "remarks": list(remarks),
    }


def _scanner(one: "Assessment") -> dict[str, Any]:
    return {
        "name": one.scanner_name,
        "standing": one.standing,
        "last_session": None if one.last_session is None else one.last_session.isoformat(),
        "due": None if one.due is None else one.due.isoformat(),
        "out": list(one.out),
        "drifting": list(one.drifting),
        "out_of_control": list(one.out_of_control),
        "sentence": one.sentence,
        "reasons": list(one.reasons),
        "remarks": list(one.remarks),
        "days_overdue": one.days_overdue,
        "missed": [day.isoformat() for day in one.kept.missed],
        "look_first_at": [{"sentence": cause.sentence, "evidence": list(cause.evidence)} for cause in one.causes],
        "quantities": [_state(state) for state in one.quantities if not state.superseded],
    }


def _state(state: "QuantityState") -> dict[str, Any]:
    stream, verdict, forecast = state.stream, state.verdict, state.forecast
    return {
        "quantity": stream.quantity,
        "phantom": stream.phantom,
        "day": stream.last_day.isoformat(),
        "value": float(stream.values[-1]),
        "unit": stream.unit,
        "standard_uncertainty": float(stream.uncertainties[-1]),
        "conformity": None if verdict is None else verdict.conformity,
        "limit": None if verdict is None else verdict.limit,
        "probability_of_conformity": None if verdict is None else verdict.probability,
        "not_judged": state.not_judged or None,
        "control": state.control,
        "rules": list(state.rules),
        "baseline": None if state.baseline is None else state.baseline.value,
        "forecast": None
        if forecast is None
        else {
            "crossing": forecast.crossing.isoformat(),
            "earliest": forecast.earliest.isoformat(),
            "latest": forecast.latest.isoformat(),
        },
    }


def _acquisition(outcome: Outcome) -> dict[str, Any]:
    first = outcome.acquisition.first
    scanner, settings = first.scanner, first.settings
    return {
        "series": list(dict.fromkeys(repeat.series_instance_uid for repeat in outcome.acquisition.repeats)),
        "repeats": len(outcome.acquisition.repeats),
        "description": first.description,
        "kind": first.kind,
        "phantom": outcome.phantom,
        "acquired_at": _moment(first.acquired_at),
        "scanner": {
            "manufacturer": scanner.manufacturer,
            "model": scanner.model,
            "station": scanner.station,
            "serial": scanner.serial,
            "software": scanner.software,
            "field_strength_T": scanner.field_strength_T,
        },
        "settings": {
            "protocol": settings.protocol,
            "sequence": settings.sequence,
            "slices": len(first.planes),
            "slice_thickness_mm": settings.slice_thickness_mm,
            "slice_spacing_mm": settings.slice_spacing_mm,
            "pixel_mm": list(settings.pixel_mm),
            "matrix": list(settings.matrix),
            "repetition_ms": settings.repetition_ms,
            "echo_ms": settings.echo_ms,
            "flip_deg": settings.flip_deg,
            "averages": settings.averages,
            "bandwidth_hz_per_pixel": settings.bandwidth_hz_per_pixel,
            "phase_encode": settings.phase_encode,
            "receive_coil": settings.receive_coil,
        },
        "pose": None if outcome.pose is None else _pose(outcome.pose),
        "measurements": [_measurement(one) for one in outcome.measurements],
        "not_measured": [{"quantity": one.quantity, "reason": one.reason} for one in outcome.not_measured],
        "remarks": [*outcome.acquisition.remarks, *outcome.remarks],
    }


def _pose(pose: Pose) -> dict[str, Any]:
    known = [u for u in pose.u_centre_mm if u is not None]
    return {
        "centre_mm": [float(v) for v in pose.centre_patient],
        "rotation_deg": pose.rotation_deg,
        "tilt_deg": pose.tilt_deg,
        "standard_uncertainty_mm": max(known) if known else None,
        "standard_uncertainties_mm": list(pose.u_centre_mm),
        "standard_uncertainty_rotation_deg": pose.u_rotation_deg,
        "standard_uncertainty_tilt_deg": pose.u_tilt_deg,
    }


def _measurement(one: Measurement) -> dict[str, Any]:
    return {
        "quantity": one.quantity,
        "value": one.value,
        "unit": one.unit,
        "standard_uncertainty": one.standard_uncertainty,
        "method": one.method,
        "method_version": one.method_version,
        "slice": one.slice,
        "details": _plain(one.details),
    }


def _plain(value: Any) -> Any:  # noqa: ANN401 - walks any JSON value
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def _moment(moment: datetime | None) -> str | None:
    return None if moment is None else moment.isoformat(timespec="seconds")
