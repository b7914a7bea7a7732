"""Figures as JSON: the promise that other programs rely on. A change adds; it never renames or removes."""

import json
import math
from collections.abc import Iterable, Mapping
from datetime import datetime
from typing import Any

from qa import __version__
from qa.records import Measurement, Outcome, Pose, Refused

__all__ = ["measurements_document", "to_json"]


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
