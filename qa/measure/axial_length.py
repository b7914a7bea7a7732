"""`length_axial`: a cylinder's length from end to end, from slices along its axis (a sagittal or coronal localiser).

The distance between straight lines through the sub-pixel edges of both end faces, at half height between the levelled plateau
inside and the floor outside (NEMA MS 2's lengths, along the third axis).
"""

from collections.abc import Iterable

import numpy as np

from qa.locate.lengthwise import find_faces
from qa.measure.regions import figure
from qa.phantoms import Phantom
from qa.records import Acquisition, Measurement, NotMeasured, Pose, Region

__all__ = ["length_axial"]

_NAME = "length_axial"
_METHOD = ("distance of the end faces between half heights (NEMA MS 2)", 1)


def length_axial(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the length end to end; standard uncertainty from the scatter of the edges about both lines, and 0.01 pixel."""
    if phantom.body.shape != "cylinder":
        return [NotMeasured(_NAME, "only a cylinder has two ends")]
    along = abs(float(scan.planes[0].normal @ pose.orientation[:, 2]))
    if along > 0.5:
        return [NotMeasured(_NAME, "the slices lie across the phantom: its length shows in a sagittal or coronal localiser")]
    faces = find_faces(scan, phantom)
    if isinstance(faces, str):
        return [NotMeasured(_NAME, faces)]
    half = faces.length_mm / 2 * faces.axis
    ends = tuple((float(x), float(y)) for x, y in (faces.centre_mm - half, faces.centre_mm + half))
    details = {
        "true_length_mm": phantom.extent_mm,
        "width_seen_mm": faces.width_mm,
        "axis_from_rows_deg": float(np.degrees(np.arctan2(faces.axis[1], faces.axis[0]))),
    }
    line = Region("length", "line", faces.slice_index + 1, ends)
    return [
        figure(
            _NAME, faces.length_mm, faces.u_length_mm, _METHOD, slice_index=faces.slice_index, details=details, regions=(line,)
        )
    ]
