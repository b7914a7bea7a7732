"""`setup_offset` and `setup_tilt`: how the phantom was put in.

The offset is the distance, in the image plane, of the phantom's centre from the middle of the image; details give the
offset along x and y, and the centre in patient coordinates, whose origin most scanners put at the isocentre. The tilt is
the angle between the phantom's axis and the slice normal; a sphere has none.
"""

import math
from collections.abc import Iterable

from qa.measure.regions import figure
from qa.phantoms import Phantom
from qa.records import Acquisition, Measurement, NotMeasured, Pose, Region

__all__ = ["setup"]

_OFFSET = ("centre of the outline against the middle of the image", 1)
_TILT = ("axis through the outlines' centres against the slice normal", 1)


def setup(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure offset and tilt of the phantom; standard uncertainties are those of its pose."""
    return [_offset(scan, pose), _tilt(pose, phantom)]


def _offset(scan: Acquisition, pose: Pose) -> Measurement | NotMeasured:
    u = [v for v in pose.u_centre_mm[:2] if v is not None]
    if len(u) < 2:
        return NotMeasured("setup_offset", "the phantom's centre was not found in the image plane")
    heights = [abs(float(plane.from_patient(pose.centre_patient)[2])) for plane in scan.planes]
    index = heights.index(min(heights))
    plane = scan.planes[index]
    local = plane.from_patient(pose.centre_patient)
    middle = plane.middle_mm
    x, y = float(local[0]) - middle[0], float(local[1]) - middle[1]
    value = math.hypot(x, y)
    u_value = math.hypot(x * u[0], y * u[1]) / value if value > 2 * max(u) else math.hypot(*u)
    details = {"x_mm": x, "y_mm": y, "centre_patient_mm": [float(v) for v in pose.centre_patient]}
    line = Region("offset", "line", index + 1, (middle, (float(local[0]), float(local[1]))))
    return figure("setup_offset", value, u_value, _OFFSET, slice_index=index, details=details, regions=(line,))


def _tilt(pose: Pose, phantom: Phantom) -> Measurement | NotMeasured:
    if phantom.body.shape == "sphere":
        return NotMeasured("setup_tilt", "a sphere has no axis")
    if pose.u_tilt_deg is None:
        return NotMeasured("setup_tilt", "one slice does not show the phantom's axis")
    return figure("setup_tilt", pose.tilt_deg, pose.u_tilt_deg, _TILT)
