"""Where the phantom lies in the images: centre, rotation, tilt, each with its uncertainty.

`locate` finds the body's outline in every slice (`qa.locate.outline`), from the outlines the body in space
(`qa.locate.body`), and from what lies in it its turn and its place along the axis (`qa.locate.contents`). Slices along a
cylinder's axis show a rectangle instead (`qa.locate.lengthwise`).
"""

from qa.locate.body import locate_body
from qa.locate.contents import refine
from qa.locate.lengthwise import locate_lengthwise
from qa.phantoms import Phantom
from qa.records import Acquisition, NotLocated, Pose

__all__ = ["locate"]


def locate(acquisition: Acquisition, phantom: Phantom) -> Pose | NotLocated:
    """Find the phantom.

    Parameters
    ----------
    acquisition : Acquisition
        Magnitude images; the first repeat is looked at.
    phantom : Phantom
        What to look for.

    Returns
    -------
    Pose or NotLocated
        Where it lies, or why it was not found, in words a technologist can act on.
    """
    pose = locate_body(acquisition, phantom)
    if isinstance(pose, Pose):
        return refine(acquisition, pose, phantom)
    if phantom.body.shape == "cylinder":
        lengthwise = locate_lengthwise(acquisition, phantom)
        return lengthwise if isinstance(lengthwise, Pose) else pose
    return pose
