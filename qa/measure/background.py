"""`snr_background`: signal to noise ratio from one image, its noise read in signal-free air.

NEMA MS 1, single image: S over (standard deviation of air / f). f is the standard deviation of the magnitude of noise alone in
units of the noise of a real or imaginary part: sqrt(2 - pi / 2) = 0.6551 for one receive channel, that of the chi distribution
with 2 n degrees of freedom for n channels combined as root sum of squares (Constantinides et al. 1997). The header does not
say n; it is inferred from the ratio of mean to standard deviation of the air, on which f depends weakly (0.655 to 0.707).
"""

import math
from collections.abc import Iterable

from qa.measure.air import air_corners, air_noise
from qa.measure.regions import figure, rectangle, uniform_field
from qa.phantoms import Phantom
from qa.records import Acquisition, Measurement, NotMeasured, Pose

__all__ = ["snr_background"]

_METHOD = ("single image, noise in air (NEMA MS 1)", 1)


def snr_background(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the signal to noise ratio from one image.

    Standard uncertainty: that of the air's standard deviation from the independent pixels there are and the kurtosis of its
    distribution, with that of the mean signal.
    """
    field = uniform_field(scan, pose, phantom)
    if isinstance(field, str):
        return [NotMeasured("snr_background", field)]
    if scan.settings.parallel_imaging:
        return [
            NotMeasured(
                "snr_background", "parallel imaging makes noise differ from place to place, so air does not stand for M"
            )
        ]
    if scan.settings.filtered:
        return [NotMeasured("snr_background", "the images were filtered, so air does not show the noise of M")]
    boxes = air_corners(field.plane, field.section, scan.settings.phase_encode)
    again = scan.repeats[1].pixels[field.slice_index] if len(scan.repeats) > 1 else None
    found = air_noise(scan.pixels[field.slice_index], field.plane, boxes, again)
    if isinstance(found, str):
        return [NotMeasured("snr_background", found)]
    air, used = found
    signal = field.mean(field.cut(scan.pixels))
    value = signal / air.sigma
    u_signal = air.sigma * math.sqrt(air.correlation.mean_factor / float(field.inside.sum()))
    relative = math.hypot(air.u_relative, u_signal / signal)
    details = {
        "signal": signal,
        "air_mean": air.mean,
        "air_standard_deviation": air.sd,
        "air_ratio": air.mean / air.sd,
        "channels": air.chi.channels,
        "factor": air.chi.sd,
        "pixels": air.pixels,
        "independent_pixels": air.pixels / air.shared,
    }
    regions = (field.region, *(rectangle(name, field.slice_index, *box) for name, box in used.items()))
    return [
        figure(
            "snr_background", value, value * relative, _METHOD, slice_index=field.slice_index, details=details, regions=regions
        )
    ]
