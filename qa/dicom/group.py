"""From series to acquisitions: repeats of one series are measured together."""

from collections import defaultdict
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
    by_study: dict[str, list[_Growing]] = defaultdict(list)
    for each in sorted(stacks, key=lambda one: (one.order, one.series.series_instance_uid, one.series.temporal_position)):
        of_study = by_study[each.series.study_instance_uid]
        home, notes = _home(of_study, each)
        if home is None:
            home = _Growing([], notes)
            acquisitions.append(home)
            of_study.append(home)
        home.repeats.append(each)
    return tuple(
        Acquisition(
            tuple(one.series for one in each.repeats), tuple(dict.fromkeys([*each.remarks, *_scaled_differently(each)]))
        )
        for each in acquisitions
    )


def _home(known: Sequence[_Growing], each: Stacked) -> tuple[_Growing | None, list[str]]:
    """Return the acquisition of a study that a series repeats, or None and why it repeats none that are nearly like it."""
    notes = []
    for acquisition in known:
        first = acquisition.repeats[0]
        if not _same_scan(first, each):
            continue
        if not same_settings(first.series.settings, each.series.settings):
            notes.append(_coil_note(first, each))
            continue
        twin = next((one for one in acquisition.repeats if _same_pixels(one, each)), None)
        if twin is None:
            return acquisition, []
        notes.append(f"it holds the same pixels as series {twin.series.series_instance_uid}: stored twice, so not a repeat")
    return None, notes


def _same_scan(first: Stacked, second: Stacked) -> bool:
    """Tell whether two series of a study agree in kind, planes and all settings but the receive coil."""
    a, b = first.series, second.series
    return (
        a.kind == b.kind
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
