"""From series to acquisitions: repeats of one series are measured together."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from qa.dicom.alike import same_plane, same_settings, same_settings_but_coil
from qa.dicom.stack import Stacked
from qa.records import Acquisition

__all__ = ["group"]


@dataclass(eq=False)
class _Growing:
    repeats: list[Stacked]
    remarks: list[str] = field(default_factory=list)


def group(stacks: Sequence[Stacked]) -> tuple[Acquisition, ...]:
    """Put together series of one study with the same geometry, settings and kind, in order of acquisition.

    Series that would be repeats but hold the very same pixels were stored twice: they stay apart, or their difference would
    be taken for a noiseless scan. Series that differ in the receive coil alone stay apart too, and say so.
    """
    acquisitions: list[_Growing] = []
    for each in sorted(stacks, key=lambda one: (one.order, one.series.series_instance_uid, one.series.temporal_position)):
        notes = []
        for known in acquisitions:
            if not _same_scan(known.repeats[0], each):
                continue
            if not same_settings(known.repeats[0].series.settings, each.series.settings):
                notes.append(_coil_note(known.repeats[0], each))
                continue
            if (
                twin := next((r for r in known.repeats if np.array_equal(r.series.pixels, each.series.pixels)), None)
            ) is not None:
                notes.append(
                    f"it holds the same pixels as series {twin.series.series_instance_uid}: stored twice, so not a repeat"
                )
                continue
            known.repeats.append(each)
            break
        else:
            acquisitions.append(_Growing([each], notes))
    return tuple(
        Acquisition(
            tuple(one.series for one in each.repeats), tuple(dict.fromkeys([*each.remarks, *_scaled_differently(each)]))
        )
        for each in acquisitions
    )


def _same_scan(first: Stacked, second: Stacked) -> bool:
    """Tell whether two series agree in study, kind, planes and all settings but the receive coil."""
    a, b = first.series, second.series
    return (
        a.study_instance_uid == b.study_instance_uid
        and a.kind == b.kind
        and first.contrast == second.contrast
        and len(a.planes) == len(b.planes)
        and same_settings_but_coil(a.settings, b.settings)
        and all(same_plane(p, q) for p, q in zip(a.planes, b.planes, strict=True))
    )


def _same_pixels(first: Stacked, second: Stacked) -> bool:
    a, b = first.series.pixels, second.series.pixels
    middle = len(a) // 2  # noise tells nearly all apart in one slice
    return np.array_equal(a[middle], b[middle]) and np.array_equal(a, b)


def _coil_note(first: Stacked, second: Stacked) -> str:
    ours, theirs = (each.series.settings.receive_coil or "none named" for each in (second, first))
    uid = first.series.series_instance_uid
    return f"it agrees with series {uid} in all but the receive coil ({ours}, there {theirs}): not a repeat of it"


def _scaled_differently(acquisition: _Growing) -> list[str]:
    if len({each.slopes for each in acquisition.repeats}) == 1:
        return []
    return ["the repeats are rescaled with different slopes: part of a difference between them may be the scanner's scaling"]
