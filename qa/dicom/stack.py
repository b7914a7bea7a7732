"""From loose frames to series: what belongs in one stack is put in order of position; what is odd is said."""

import math
from collections import Counter, defaultdict
from collections.abc import Callable, Hashable, Sequence
from dataclasses import dataclass, replace
from statistics import median, median_low

import numpy as np
from numpy.typing import NDArray

from qa.dicom.alike import SAME_PLACE_MM, same_grid, same_settings
from qa.dicom.frames import Frame
from qa.dicom.pixels import scale_into
from qa.records import Refused, Series

__all__ = ["Stacked", "stack"]

_UNEVEN = 0.1  # share of the usual step by which a step may differ from a whole number of them
_EXACTLY = 0.005
_NAMED_AT_MOST = 6
_NEGATIVE_SHARE = 0.05


@dataclass(frozen=True, eq=False)
class Stacked:
    """A series with what grouping needs to know besides."""

    series: Series
    contrast: tuple[object, ...]
    order: tuple[object, ...]
    slopes: tuple[float, ...]


def stack(frames: Sequence[Frame], lost: Sequence[Refused] = ()) -> tuple[list[Stacked], list[Refused]]:
    """Sort the frames of one DICOM series into stacks of parallel slices of one kind, echo and time.

    Parameters
    ----------
    frames : sequence of Frame
        In any order.
    lost : sequence of Refused
        Files of the series that were refused; its stacks say so.

    Returns
    -------
    stacks, left_out
        `left_out` are files that hold a second image where the series has one already.
    """
    stacks: list[Stacked] = []
    left_out: list[Refused] = []
    lots = _lots(sorted(frames, key=lambda each: each.order))
    remarks = [*_mixed(lots), *_lost(lost)]
    for lot in lots:
        parts, extra = _repeats(lot)
        left_out += [Refused(each.origin.source.path, _extra_reason(each)) for each in extra if each.number == 0]
        said = remarks + [_extra_remark(each) for each in extra]
        places = max((_places(part) for part in parts), key=len)
        for position, part in enumerate(parts, start=1):
            stacks.append(_stacked(part, position, [*said, *_fewer(_places(part), places, len(parts))]))
    return stacks, left_out


def _lots(frames: Sequence[Frame]) -> list[list[Frame]]:
    """Put frames together that agree in all but position and time."""
    lots: list[list[Frame]] = []
    for frame in frames:
        for lot in lots:
            first = lot[0]
            if (
                first.kind == frame.kind
                and first.stack_id == frame.stack_id
                and first.contrast == frame.contrast
                and same_grid(first.plane, frame.plane)
                and same_settings(first.settings, frame.settings)
            ):
                lot.append(frame)
                break
        else:
            lots.append([frame])
    return lots


def _places(frames: Sequence[Frame]) -> list[float]:
    """Return the distinct positions along the normal, in order."""
    places: list[float] = []
    for position in sorted(float(frames[0].plane.normal @ np.asarray(f.plane.position_patient)) for f in frames):
        if not places or position - places[-1] > SAME_PLACE_MM:
            places.append(position)
    return places


def _by_place(frames: Sequence[Frame]) -> list[list[Frame]]:
    """Return the frames at each position along the normal, in order of position."""
    normal = frames[0].plane.normal
    at = [(float(normal @ np.asarray(frame.plane.position_patient)), frame) for frame in frames]
    groups: list[list[Frame]] = []
    last = -np.inf
    for position, frame in sorted(at, key=lambda pair: pair[0]):
        if position - last > SAME_PLACE_MM:
            groups.append([])
            last = position
        groups[-1].append(frame)
    return groups


def _repeats(lot: list[Frame]) -> tuple[list[list[Frame]], list[Frame]]:
    """Split frames that lie at the same places into repeats, each with one frame a place; give also what is left over.

    What the file says is believed first (place in the plane, temporal position, acquisition, time); where it says nothing
    useful, the frames at each place are dealt out in order of time and instance number.
    """
    groups = _by_place(lot)
    most = max(len(group) for group in groups)
    if most == 1:
        return [[group[0] for group in groups]], []
    for key in _KEYS:
        parts: dict[Hashable, list[Frame]] = defaultdict(list)
        for frame in lot:
            parts[key(frame)].append(frame)
        if len(parts) == most and all(len(_places(part)) == len(part) for part in parts.values()):
            return [[group[0] for group in _by_place(part)] for part in parts.values()], []
    usual = max(1, int(median(len(group) for group in groups)))
    dealt = [sorted(group, key=lambda frame: frame.order) for group in groups]
    extra = [frame for group in dealt for frame in group[usual:]]
    return [[group[turn] for group in dealt if turn < len(group)] for turn in range(usual)], extra


_KEYS: tuple[Callable[[Frame], Hashable], ...] = (
    lambda frame: tuple(round(x, 1) for x in frame.plane.from_patient((0.0, 0.0, 0.0))[:2]),
    lambda frame: frame.temporal,
    lambda frame: frame.acquisition,
    lambda frame: (frame.temporal, frame.acquisition),
    lambda frame: frame.origin.source.sop_instance_uid,
    lambda frame: frame.acquired_at,
)


def _stacked(frames: list[Frame], position: int, remarks: Sequence[str]) -> Stacked:
    first = min(frames, key=lambda frame: frame.order)
    pixels = np.empty((len(frames), *first.plane.shape), dtype=np.float32)
    for image, frame in zip(pixels, frames, strict=True):
        scale_into(image, frame.stored, frame.scaling)
    pixels.setflags(write=False)
    places = _places(frames)
    settings = first.settings
    if settings.slice_spacing_mm is None and len(places) > 1:
        settings = replace(settings, slice_spacing_mm=float(median(np.diff(places))))
    sources = {frame.origin.source: None for frame in frames}
    kind, doubt = first.kind, []
    if kind == "magnitude" and any(map(_may_be_negative, frames)) and _is_negative(pixels):
        kind = "other"
        doubt = ["it holds negative values, as a magnitude image cannot: not taken for one"]
    series = Series(
        series_instance_uid=first.origin.series_instance_uid,
        study_instance_uid=first.origin.study_instance_uid,
        description=first.origin.description,
        acquired_at=first.acquired_at,
        kind=kind,
        temporal_position=position,
        scanner=first.origin.scanner,
        settings=settings,
        planes=tuple(frame.plane for frame in frames),
        pixels=pixels,
        files=tuple(sources),
        remarks=tuple(dict.fromkeys([*_inherited(frames), *doubt, *_gaps(places, frames), *remarks])),
    )
    return Stacked(series, first.contrast, first.order, tuple(frame.scaling.slope for frame in frames))


def _is_negative(pixels: NDArray[np.float32]) -> bool:
    return float(pixels.min()) < -_NEGATIVE_SHARE * float(pixels.max())


def _may_be_negative(frame: Frame) -> bool:
    return frame.stored.dtype.kind != "u" or frame.scaling.slope < 0 or frame.scaling.intercept < 0


def _inherited(frames: Sequence[Frame]) -> list[str]:
    return [remark for frame in frames for remark in frame.origin.remarks]


def _gaps(places: Sequence[float], frames: Sequence[Frame]) -> list[str]:
    """Say where slices are missing or unevenly spaced."""
    if len(places) < 2:
        return []
    steps = np.diff(places)
    nominal, thickness = frames[0].settings.slice_spacing_mm, frames[0].settings.slice_thickness_mm or 0.0
    usual = float(median_low(steps))
    # Where every other slice is missing the usual step is twice the nominal one; but some scanners give the gap as nominal.
    skipped = round(usual / nominal) if nominal is not None and nominal > SAME_PLACE_MM else 1
    if skipped > 1 and math.isclose(usual, skipped * (nominal or 0.0), rel_tol=_EXACTLY):
        is_gap = math.isclose(usual, (nominal or 0.0) + thickness, rel_tol=_EXACTLY)
        usual = usual if is_gap else usual / skipped
    said = []
    for number, step in enumerate(steps, start=1):
        ratio = float(step) / usual
        if abs(ratio - 1) <= _UNEVEN:
            continue
        where = f"between slice {number} (at {places[number - 1]:.1f} mm) and slice {number + 1} (at {places[number]:.1f} mm)"
        count = round(ratio)
        if count > 1 and abs(ratio - count) <= _UNEVEN:
            missing = "1 slice is missing" if count == 2 else f"{count - 1} slices are missing"
            said.append(f"{missing} {where}: {step:.1f} mm apart, where {usual:.1f} mm is usual")
        else:
            said.append(f"slices are unevenly spaced {where}: {step:.1f} mm apart, where {usual:.1f} mm is usual")
    return _shortened(said)


def _fewer(places: Sequence[float], all_places: Sequence[float], parts: int) -> list[str]:
    if parts == 1 or len(places) == len(all_places):
        return []
    absent = [f"{p:.1f}" for p in all_places if not any(abs(p - q) <= SAME_PLACE_MM for q in places)]
    where = ", ".join(absent[:_NAMED_AT_MOST])
    return [f"it holds {len(places)} of the {len(all_places)} slices of its series: none at {where} mm"]


def _mixed(lots: Sequence[Sequence[Frame]]) -> list[str]:
    """Name the geometries of a series that holds more than one."""
    kinds: list[tuple[Frame, Counter[str]]] = []
    for lot in lots:
        names = next((names for first, names in kinds if same_grid(first.plane, lot[0].plane)), None)
        if names is None:
            names = Counter()
            kinds.append((lot[0], names))
        names.update(frame.origin.source.path.name for frame in lot)
    if len(kinds) == 1:
        return []
    told = []
    for first, names in kinds:
        rows, columns = first.plane.shape
        some = ", ".join(sorted(names)[:3]) + (" ..." if len(names) > 3 else "")
        told.append(f"{sum(names.values())} of {rows} x {columns} ({some})")
    return [f"its DICOM series holds images of {len(kinds)} geometries, kept apart: {'; '.join(told[:_NAMED_AT_MOST])}"]


def _lost(refused: Sequence[Refused]) -> list[str]:
    return _shortened([f"{each.path.name} of its DICOM series was refused: {each.reason}" for each in refused])


def _extra_reason(frame: Frame) -> str:
    return f"a further image at {frame.plane.position_along_normal:.1f} mm, where its series holds one already"


def _extra_remark(frame: Frame) -> str:
    name = frame.origin.source.path.name
    return f"a second image at {frame.plane.position_along_normal:.1f} mm was left out: {name}"


def _shortened(said: list[str]) -> list[str]:
    rest = len(said) - _NAMED_AT_MOST
    return said if rest <= 0 else [*said[:_NAMED_AT_MOST], f"and {rest} more of the same"]
