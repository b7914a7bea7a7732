"""`snr`: signal to noise ratio from the difference of two images.

NEMA MS 1, two-image difference method: the mean S over M of the first image, over the standard deviation of the difference
in M divided by the square root of 2. A slow drift between the repeats is taken out of the difference with a second-order
surface.
"""

import math
from collections.abc import Iterable

from qa.measure.noise import difference_noise
from qa.measure.regions import figure, uniform_field
from qa.phantoms import Phantom
from qa.records import Acquisition, Measurement, NotMeasured, Pose

__all__ = ["snr"]

_METHOD = ("two-image difference (NEMA MS 1)", 1)


def snr(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure the signal to noise ratio.

    Standard uncertainty: that of a standard deviation from the independent pixels there are, 1 / sqrt(2 n), with that of the
    mean signal; n is counted from the difference image's own autocorrelation.
    """
    field = uniform_field(scan, pose, phantom)
    if isinstance(field, str):
        return [NotMeasured("snr", field)]
    noise = difference_noise(scan, field)
    if isinstance(noise, str):
        return [NotMeasured("snr", noise)]
    signal = field.mean(field.cut(scan.pixels))
    pixels = float(field.inside.sum())
    u_signal = noise.sigma * math.sqrt(noise.correlation.mean_factor / pixels)
    value = signal / noise.sigma
    relative = math.hypot(1 / math.sqrt(2 * noise.freedom), u_signal / signal)
    details = {
        "signal": signal,
        "noise": noise.sigma,
        "pixels": int(pixels),
        "independent_pixels": noise.freedom,
    }
    return [
        figure(
            "snr", value, value * relative, _METHOD, slice_index=field.slice_index, details=details, regions=(field.region,)
        )
    ]
