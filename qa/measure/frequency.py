"""`centre_frequency`: the imaging frequency that the header states (0018,0084), in MHz.

By the Larmor relation it follows the magnet's field: 42.577478518 MHz for each tesla (CODATA 2018).
"""

import math
from collections.abc import Iterable

from qa.measure.regions import figure
from qa.phantoms import Phantom
from qa.records import Acquisition, Measurement, NotLocated, NotMeasured, Pose

__all__ = ["centre_frequency"]

_METHOD = ("as the header states it", 1)
_FINEST_MHZ = 1e-6


def centre_frequency(
    scan: Acquisition,
    pose: Pose | NotLocated,  # noqa: ARG001 - routines share one signature
    phantom: Phantom,  # noqa: ARG001 - the same
) -> Iterable[Measurement | NotMeasured]:
    """Read the centre frequency; it needs no phantom to be seen.

    Standard uncertainty: the figure is as good as its last decimal, 1 Hz at best, since scanners set whole hertz; a
    rectangular distribution over that step (GUM 4.3.7).
    """
    value = scan.settings.frequency_MHz
    if value is None or not math.isfinite(value) or value <= 0:
        return [NotMeasured("centre_frequency", "the header does not state the imaging frequency")]
    _, _, decimals = f"{value:.9f}".rstrip("0").partition(".")
    resolution = max(_FINEST_MHZ, 10.0 ** -len(decimals))
    return [figure("centre_frequency", value, resolution / math.sqrt(12), _METHOD, details={"resolution_MHz": resolution})]
