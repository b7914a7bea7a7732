"""What is wrong with where the phantom and the slices were placed, in words a technologist can act on."""

import numpy as np

from qa.geometry import Floats, Plane
from qa.locate.view import SliceView
from qa.phantoms import Phantom, WedgeBars
from qa.records import Acquisition, NotLocated, Pose

__all__ = ["is_axial", "off_sections", "suffering"]

_MOST_NAMED = 4
_ENTERS_MM = 1.0
"""What a set-up puts into a slice position, from which it is worth a remark."""
_MOST_OFF = 0.75
"""How far the slices may be off the sections, as a share of the distance between them."""


def is_axial(plane: Plane) -> bool:
    """Tell whether slices lie across the patient rather than along."""
    return int(np.argmax(np.abs(plane.normal))) == 2


def _heights(acquisition: Acquisition, pose: Pose) -> Floats:
    """Phantom z at which the slices cross its axis, lowest first."""
    normal = acquisition.planes[0].normal
    along = np.array([p.position_along_normal for p in acquisition.planes]) - normal @ pose.centre_patient
    return np.sort(along / (normal @ pose.orientation[:, 2]))


def _off_mm(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> float | None:
    """How far a complete stack lies above where the definition expects it; None where slices are missing or too many."""
    stack = phantom.slices
    heights = _heights(acquisition, pose)
    if stack is None or len(heights) != stack.count:
        return None
    return float(np.median(heights - stack.first_z_mm - stack.spacing_mm * np.arange(stack.count)))


def off_sections(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> tuple[str, ...] | NotLocated:
    """Compare where the slices lie with where the definition expects them."""
    stack = phantom.slices
    if stack is None or pose.u_centre_mm[2] is None:
        return ()
    heights, expected = _heights(acquisition, pose), stack.first_z_mm + stack.spacing_mm * np.arange(stack.count)
    off = _off_mm(acquisition, pose, phantom)
    if off is not None:
        if abs(off) > _MOST_OFF * stack.spacing_mm:
            return NotLocated(
                f"the slices lie {abs(off):.0f} mm off the sections, too far towards {_way(acquisition, off)}: "
                f"place them on the sections (the first at z = {stack.first_z_mm:g} mm) and scan again"
            )
        return ()
    missing = [n for n, z in enumerate(expected, start=1) if np.abs(heights - z).min() > stack.spacing_mm / 2]
    which = f"; missing: {', '.join(f'slice {n}' for n in missing)}" if 0 < len(missing) <= _MOST_NAMED else ""
    seen = "1 slice" if len(heights) == 1 else f"{len(heights)} slices"
    return (f"{seen} where {stack.count} are expected{which}",)


def _way(acquisition: Acquisition, off_mm: float) -> str:
    """Name the direction in which something lies off along the phantom's axis."""
    if is_axial(acquisition.planes[0]):
        return "the head" if off_mm > 0 else "the feet"
    return "the phantom's +z end" if off_mm > 0 else "the phantom's -z end"


def suffering(acquisition: Acquisition, pose: Pose, phantom: Phantom) -> tuple[str, ...]:
    """Say which figures suffer from how the phantom was set up rather than from the scanner."""
    said = []
    wedges = [s for s in phantom.sections if isinstance(s, WedgeBars)]
    if wedges and pose.u_centre_mm[2] is not None:
        middle = SliceView.of(acquisition.planes[len(acquisition.planes) // 2], pose)
        entered = float(np.mean([middle.lean[1] * (s.start_y_mm + s.length_mm) for s in wedges]))
        if abs(entered) >= _ENTERS_MM:
            said.append(
                f"the phantom is tilted by {pose.tilt_deg:.1f} degrees, which puts {entered:+.1f} mm into slice positions: "
                "that is the set-up, not the scanner; level the phantom"
            )
        off = _off_mm(acquisition, pose, phantom)
        if off is not None and abs(off) >= _ENTERS_MM:
            said.append(
                f"all slices lie {abs(off):.1f} mm from the sections, towards {_way(acquisition, off)}: slice positions show "
                "where the slices were placed on the phantom, not only the scanner"
            )
    return tuple(said)
