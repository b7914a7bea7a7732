"""`uniformity_piu` and `uniformity_naad`: how even the signal is over M.

NEMA MS 3. Percent integral uniformity is 100 (1 - (max - min) / (max + min)), max and min being the highest and lowest mean
of a 1 cm2 disc that lies wholly in M. The normalised absolute average deviation is 100 (1 - mean of abs(Y - Ybar) / Ybar)
over M after the 3 by 3 low-pass filter (1 2 1, 2 4 2, 1 2 1) / 16.

Both are stated as an image without noise would show them. Noise lifts magnitudes, dark ones most, which is taken off by
what air shows; its scatter drives the highest disc up, the lowest down and every deviation away from zero, and how far is
worked out from the noise found in the image and a plain surface through it. Details give the figure before the second
(`uncorrected`) and the correction.
"""

import math
from collections.abc import Iterable
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats, Plane, disc_overlap, sample
from qa.measure.air import AirNoise, air_corners, air_noise
from qa.measure.noise import Correlation, Noise, difference_noise, evaluate, fit_surface, ripple_noise, surface_noise
from qa.measure.regions import Field, figure, uniform_field
from qa.phantoms import Phantom
from qa.records import Acquisition, Measurement, NotMeasured, Pose, Region

__all__ = ["uniformity"]

_PIU = ("percent integral uniformity (NEMA MS 3), less the effect of noise", 1)
_NAAD = ("normalised absolute average deviation (NEMA MS 3), less the effect of noise", 1)
_DISC_MM = math.sqrt(100 / math.pi)
_GRID = 121
_WRAP = 128
_DRAWS = 12
_DOUBT = 0.2
_BORDER = 0.001
_LEAST_PERCENT = 0.0015


def uniformity(scan: Acquisition, pose: Pose, phantom: Phantom) -> Iterable[Measurement | NotMeasured]:
    """Measure both uniformities.

    Standard uncertainty: of the integral uniformity by resampling (noise of the image's own level, drawn once and for all,
    on the fitted surface), with a fifth of the correction for what the surface hides of the noise, and a thousandth of the
    non-uniformity for where M's border runs, on which extremes lie; of the average deviation by propagation of the noise of
    each pixel, with what the border of M makes of the pixels it divides (the difference between counting whole pixels and
    counting their share) and 0.0015 points for what rounding and the outline leave.
    """
    field = uniform_field(scan, pose, phantom)
    if isinstance(field, str):
        return [NotMeasured(name, field) for name in ("uniformity_piu", "uniformity_naad")]
    image = field.cut(scan.pixels)
    noise, lift = _noise(scan, field, image)
    image = np.sqrt(np.clip(image**2 - lift, 0, None))
    surface = _plain_surface(image, field, noise)
    return [_integral(image, field, noise, surface), _deviation(image, field, noise, surface)]


def _noise(scan: Acquisition, field: Field, image: Floats) -> tuple[Noise, float]:
    """Find the noise in M, and how much it lifts the square of a magnitude where there is signal.

    Of n channels the 2 n - 1 parts of the noise that do not lie along the signal lift it (to second order); air shows 2 n.
    """
    noise = difference_noise(scan, field)
    air: AirNoise | None = None
    if not scan.settings.parallel_imaging and not scan.settings.filtered:
        boxes = air_corners(field.plane, field.section, scan.settings.phase_encode)
        found = air_noise(scan.pixels[field.slice_index], field.plane, boxes)
        air = None if isinstance(found, str) else found[0]
    if isinstance(noise, str):
        noise = _single_image_noise(image, field, air)
    return noise, 0.0 if air is None else (air.mean**2 + air.sd**2) * (1 - 1 / (2 * air.chi.channels))


def _single_image_noise(image: Floats, field: Field, air: AirNoise | None) -> Noise:
    """Tell noise from structure in one image.

    What a fourth-order surface leaves is noise where air shows as much, or where there is no such air, where it does not
    hang together over five pixels. Else air is believed; its correlation, of magnitudes of noise alone, is near the square
    of that of the noise. Without air, the image's ripple.
    """
    left = surface_noise(image, field, 4)
    if air is None:
        return left if abs(left.correlation.trend) < 0.1 else ripple_noise(image, field)
    if left.sigma < 1.2 * air.sigma:
        return left
    axes = (tuple(math.sqrt(max(r, 0.0)) for r in lags) for lags in (air.correlation.along_x, air.correlation.along_y))
    return Noise(air.sigma, Correlation(*axes), air.pixels / air.shared)


def _plain_surface(image: Floats, field: Field, noise: Noise) -> Floats:
    """Fit the plainest polynomial surface that a fourth-order one does not better by more than noise allows.

    What a surface follows of the noise hides how much noise there is, so it is given no more freedom than the image asks
    for: the sum of squares that a fourth-order surface saves is chi-square in units of the noise where it follows noise
    alone.
    """
    x, y = field.grid
    surfaces = {degree: fit_surface(image, field.inside, x, y, degree) for degree in (4, 1, 2, 3)}
    left = {d: float((((image - evaluate(s, x, y)) * field.inside) ** 2).sum()) for d, s in surfaces.items()}
    unit = noise.sigma**2 * noise.correlation.mean_factor
    for degree in (1, 2, 3):
        spare = 15 - (degree + 1) * (degree + 2) // 2
        if left[degree] - left[4] < unit * (spare + 3 * math.sqrt(2 * spare)):
            return surfaces[degree]
    return surfaces[4]


def _integral(image: Floats, field: Field, noise: Noise, surface: Floats) -> Measurement | NotMeasured:
    reach = field.radius_mm - _DISC_MM
    if reach < _DISC_MM:
        return NotMeasured(
            "uniformity_piu", f"a measurement region of radius {field.radius_mm:.0f} mm is too small for discs of 1 cm2"
        )
    disc = _disc(field.plane)
    means = _convolve(image, disc)
    at, values = _places(means, field, reach)
    high, low = int(values.argmax()), int(values.argmin())
    highest, lowest = float(values[high]), float(values[low])
    if not highest + lowest > 0:
        return NotMeasured("uniformity_piu", "there is no signal in the measurement region")
    raw = 100 * (1 - (highest - lowest) / (highest + lowest))
    spread = noise.sigma * math.sqrt(noise.correlation.mean_factor * float((disc**2).sum()))
    shift, u_scatter = _resampled(surface, field.radius_mm, reach, spread)
    u_value = math.hypot(u_scatter, _DOUBT * shift, _BORDER * (100 - raw))
    places = {
        name: (float(at[k, 0] + field.section.centre_mm[0]), float(at[k, 1] + field.section.centre_mm[1]))
        for name, k in (("highest", high), ("lowest", low))
    }
    details = {"uncorrected": raw, "noise_correction": -shift, "highest": highest, "lowest": lowest}
    regions = (
        field.region,
        *(Region(name, "circle", field.slice_index + 1, (place,), _DISC_MM) for name, place in places.items()),
    )
    return figure(
        "uniformity_piu", raw - shift, u_value, _PIU, slice_index=field.slice_index, details=details, regions=regions
    )


def _places(means: Floats, field: Field, reach_mm: float) -> tuple[Floats, Floats]:
    """Places (N, 2) from M's centre, mm, of discs within M, and their means: every pixel, and all round the limit.

    Shading is strongest at the limit, which lies between pixels; disc means are smooth enough to read between them.
    """
    x, y = (v * field.radius_mm for v in field.grid)
    rows, columns = np.nonzero(x[None, :] ** 2 + y[:, None] ** 2 <= reach_mm**2)
    turns = np.linspace(0, 2 * np.pi, 360, endpoint=False)
    round_x, round_y = reach_mm * np.cos(turns), reach_mm * np.sin(turns)
    limit = sample(means[None], ((round_y - y[0]) / (y[1] - y[0]))[None], ((round_x - x[0]) / (x[1] - x[0]))[None])[0]
    at = np.stack([np.append(x[columns], round_x), np.append(y[rows], round_y)], axis=1)
    return at, np.append(means[rows, columns], limit)


def _disc(plane: Plane) -> Floats:
    """Weights, sum 1, of the pixels under a disc of 1 cm2 about the middle one."""
    half = [math.ceil(_DISC_MM / step + 0.5) for step in plane.pixel_mm]
    shape = (2 * half[0] + 1, 2 * half[1] + 1)
    own = Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), plane.pixel_mm, shape)
    weights = disc_overlap(own, own.middle_mm, _DISC_MM)
    normal: Floats = weights / weights.sum()
    return normal


def _convolve(image: Floats, kernel: Floats) -> Floats:
    """Weighted mean about every pixel, by way of the Fourier transform; the border wraps and is not to be used."""
    shape = tuple(_fast(n + k) for n, k in zip(image.shape, kernel.shape, strict=True))
    middle = image.mean()
    spectrum = np.fft.rfft2(image - middle, shape) * np.fft.rfft2(kernel, shape)
    top, left = (k // 2 for k in kernel.shape)
    full = np.fft.irfft2(spectrum, shape)
    part: Floats = full[top : top + image.shape[0], left : left + image.shape[1]] + middle
    return part


def _fast(count: int) -> int:
    """Return the next multiple of 16, a length that transforms fast."""
    return -(-count // 16) * 16


@lru_cache(maxsize=8)
def _unit_noise(step_in_discs: float) -> tuple[NDArray[np.float32], float]:
    """Disc means of white noise, unit standard deviation, (8 x 12 draws, points), on a grid about M's centre, and their span.

    Drawn once with a fixed seed. Every draw appears in all eight turns and mirror images, so that no direction is
    preferred: an image and its mirror image are given the same figure.
    """
    half = math.ceil(1 / step_in_discs + 0.5)
    plane = Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (1.0, 1.0), (2 * half + 1, 2 * half + 1))
    disc = disc_overlap(plane, plane.middle_mm, 1 / step_in_discs)
    white = np.random.default_rng(20_061_123).standard_normal((_DRAWS, _WRAP, _WRAP))
    wrapped = np.zeros((_WRAP, _WRAP))
    wrapped[: 2 * half + 1, : 2 * half + 1] = disc
    spectrum = np.fft.rfft2(white) * np.fft.rfft2(np.roll(wrapped, (-half, -half), axis=(0, 1)))
    fields = np.fft.irfft2(spectrum, (_WRAP, _WRAP))[:, :_GRID, :_GRID] / math.sqrt(float((disc**2).sum()))
    turned = [np.rot90(f, k, axes=(1, 2)) for f in (fields, fields[:, :, ::-1]) for k in range(4)]
    allowed = _within_unit_disc()
    every: NDArray[np.float32] = np.concatenate(turned)[:, allowed].astype(np.float32)
    every.setflags(write=False)
    return every, float(every.max() - every.min())


def _within_unit_disc() -> NDArray[np.bool_]:
    """Tell which points of the resampling grid, (121, 121), lie within its inscribed circle."""
    at = np.linspace(-1, 1, _GRID)
    return at[None, :] ** 2 + at[:, None] ** 2 <= 1 + 1e-9


def _resampled(surface: Floats, radius_mm: float, reach_mm: float, spread: float) -> tuple[float, float]:
    """Return what noise of the discs' means adds to the integral uniformity on average, and the scatter it causes."""
    at = np.linspace(-reach_mm, reach_mm, _GRID)
    smooth = evaluate(surface, at / radius_mm, at / radius_mm)[_within_unit_disc()]
    unit, widest = _unit_noise(round(float(at[1] - at[0]) / _DISC_MM, 6))
    top, bottom = float(smooth.max()), float(smooth.min())
    near_top = smooth >= top - widest * spread  # noise cannot lift what lies lower to the highest place
    near_bottom = smooth <= bottom + widest * spread
    highest = top + ((smooth[near_top] - top).astype(np.float32) + np.float32(spread) * unit[:, near_top]).max(axis=1)
    lowest = bottom + ((smooth[near_bottom] - bottom).astype(np.float32) + np.float32(spread) * unit[:, near_bottom]).min(
        axis=1
    )
    highest, lowest = highest.astype(np.float64), lowest.astype(np.float64)
    drawn = 100 * (1 - (highest - lowest) / (highest + lowest))
    return float(drawn.mean()) - 100 * (1 - (top - bottom) / (top + bottom)), float(drawn.std())


def _deviation(image: Floats, field: Field, noise: Noise, surface: Floats) -> Measurement | NotMeasured:
    from scipy.special import erf

    smooth = _low_pass(image)
    weights = (field.weights > 0.5).astype(np.float64)
    total = float(weights.sum())
    middle = float((smooth * weights).sum()) / total
    if not middle > 0:
        return NotMeasured("uniformity_naad", "there is no signal in the measurement region")
    raw = float((np.abs(smooth - middle) * weights).sum()) / total
    fitted = evaluate(surface, *field.grid)
    away = fitted - float((fitted * weights).sum()) / total
    spread = noise.sigma * math.sqrt(
        math.prod(_passed(axis) for axis in (noise.correlation.along_x, noise.correlation.along_y))
    )
    added, variance = 0.0, 0.0
    if spread > 0:
        scaled = away / spread
        folded = spread * math.sqrt(2 / math.pi) * np.exp(-0.5 * scaled**2) + away * erf(scaled / math.sqrt(2))
        added = float(((folded - np.abs(away)) * weights).sum()) / total
        variance = float(((away**2 + spread**2 - folded**2) * weights).sum()) / total / spread**2
    u_mean = noise.sigma * math.sqrt(noise.correlation.mean_factor * variance / total)
    u_added = added / math.sqrt(2 * noise.freedom)
    shared = float((np.abs(smooth - middle) * field.weights).sum()) / float(field.weights.sum())
    u_border = math.hypot(abs(shared - raw), _LEAST_PERCENT / 100 * middle)
    details = {"uncorrected": 100 * (1 - raw / middle), "noise_correction": 100 * added / middle, "mean": middle}
    return figure(
        "uniformity_naad",
        100 * (1 - (raw - added) / middle),
        100 * math.hypot(u_mean, u_added, u_border) / middle,
        _NAAD,
        slice_index=field.slice_index,
        details=details,
        regions=(field.region,),
    )


def _low_pass(image: Floats) -> Floats:
    """Filter with (1 2 1, 2 4 2, 1 2 1) / 16; the outermost pixels are left alone."""
    out = image.copy()
    out[1:-1] = (image[:-2] + 2 * image[1:-1] + image[2:]) / 4
    out[:, 1:-1] = (out[:, :-2] + 2 * out[:, 1:-1] + out[:, 2:]) / 4
    return out


def _passed(lags: tuple[float, ...]) -> float:
    """Share of the variance that the filter passes along one axis."""
    return max(0.0, 0.375 + 0.5 * lags[1] + 0.125 * lags[2])
