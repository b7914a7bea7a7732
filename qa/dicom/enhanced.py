"""Enhanced multi-frame objects: what functional groups say of each frame, laid over what the file says of all.

PS3.3, C.7.6.16: a functional group holds for all frames (shared) or for one (per frame), and the per-frame one is nearer.
"""

from collections.abc import Iterator, Mapping
from typing import Any

from qa.dicom.elements import Elements
from qa.dicom.refusal import RefusalError

__all__ = ["is_enhanced", "of_each_frame"]

_SHARED, _PER_FRAME = 0x52009229, 0x52009230
_MACROS = (
    0x00289110,  # Pixel Measures
    0x00209113,  # Plane Position
    0x00209116,  # Plane Orientation
    0x00209111,  # Frame Content
    0x00289145,  # Pixel Value Transformation
    0x00189112,  # MR Timing and Related Parameters
    0x00189114,  # MR Echo
    0x00189115,  # MR Modifier
    0x00189006,  # MR Imaging Modifier
    0x00189042,  # MR Receive Coil
    0x00189125,  # MR FOV/Geometry
    0x00189119,  # MR Averages
    0x00189117,  # MR Diffusion
    0x00189226,  # MR Image Frame Type
    0x00209170,  # Unassigned Shared Converted Attributes
    0x00209171,  # Unassigned Per-Frame Converted Attributes
    0x002110FE,  # Siemens' own, shared
    0x002111FE,  # Siemens' own, per frame
)
_GRADIENT_DIRECTION = 0x00189076


def is_enhanced(get: Elements) -> bool:
    """Tell whether the file describes its frames by functional groups."""
    return _SHARED in get or _PER_FRAME in get


def of_each_frame(get: Elements, frames: int) -> list[Elements]:
    """Return the look-ups of each frame.

    Raises
    ------
    RefusalError
        There are not as many per-frame groups as frames.
    """
    shared: dict[int, Any] = {}
    for item in get.items(_SHARED)[:1]:
        shared.update(_flat(item, {}))
    groups = get.items(_PER_FRAME)
    if len(groups) != frames:
        raise RefusalError(f"it has {frames} frames but functional groups for {len(groups)}")
    return [get.overlaid({**shared, **_flat(item, shared)}) for item in groups]


def _flat(group: Elements, beneath: Mapping[int, Any]) -> dict[int, Any]:
    flat: dict[int, Any] = {}
    for macro in _MACROS:
        for inner in group.items(macro)[:1]:
            flat.update(_fitting(inner, {**beneath, **flat}))
            for direction in inner.items(_GRADIENT_DIRECTION)[:1]:
                flat.update(direction.all())
    return flat


def _fitting(inner: Elements, beneath: Mapping[int, Any]) -> Iterator[tuple[int, Any]]:
    """Yield an item's elements, without private blocks that another creator has reserved already."""
    elements = inner.all()
    taken = {
        tag
        for tag in elements
        if tag >> 16 & 1 and tag & 0xFFFF <= 0xFF and tag in beneath and beneath[tag].value != elements[tag].value
    }
    for tag, element in elements.items():
        creator = tag & 0xFFFF0000 | (tag >> 8 & 0xFF)
        if not (tag >> 16 & 1 and (tag in taken or creator in taken)):
            yield tag, element
