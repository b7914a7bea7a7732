"""One case: a digital scan drawn at random, measured, and held against its true values."""

import math
import zlib
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np

from qa.commission.bars import ROD_CENTRES, Row, row_of
from qa.commission.limits import least_deviation
from qa.phantoms import Phantom
from qa.quantities import QUANTITIES
from qa.records import Acquisition, Measurement, NotLocated, NotMeasured, Pose
from qa.report.commission_content import Case, Figure, Missing
from qa.simulate import Setup, Truth, random_setup, simulate, true_values
from qa.simulate.encode import Scan

__all__ = ["Measurer", "draw_setup", "locate_and_measure", "run_case"]

Measurer = Callable[[Acquisition, Phantom], tuple[tuple[Measurement, ...], tuple[NotMeasured, ...]]]
"""What is put to the test: an acquisition and a phantom give measurements, and what was not measured."""
Rods = tuple[tuple[int, int, float, float], ...]

_KEPT = (
    "matrix", "pixel_mm", "row_direction", "column_direction", "thickness_mm", "profile_edge_mm", "centre_patient",
    "rotation_deg", "tilt_x_deg", "tilt_y_deg", "snr", "channels", "shading_percent", "shading_direction_deg",
    "shading_curvature",
    "ghost_percent", "phase_encode", "gain_drift_percent", "gain_drift_slope_percent", "scale_x_percent", "scale_y_percent",
    "nonlinearity_x_mm", "nonlinearity_y_mm", "frequency_offset_ppm", "diameter_mm", "seed",
)  # fmt: skip


def draw_setup(phantom: Phantom, seed: int) -> Setup:
    """Draw a scan from the ranges in which the accuracy is promised.

    In half of the scans the scanner is a little off besides, so that a routine which gives back the nominal value, or ignores
    the drift between repeats, is found out: scale up to 1 % off along either axis, gradients bent by up to 1 mm at 100 mm,
    gain that drifts by up to 0.5 % between repeats and unevenly by as much again, a soft-edged slice profile, and a magnet up
    to 20 ppm from its nominal field.

    Parameters
    ----------
    phantom : Phantom
        What is scanned.
    seed : int
        Not negative; the same seed draws the same scan of a phantom of the same name.

    Returns
    -------
    Setup
        The scan.
    """
    source = [seed, zlib.crc32(phantom.name.encode())]
    rng = np.random.default_rng([*source, 1])
    off: dict[str, Any] = {}
    if rng.uniform() < 0.5:
        off = {
            "scale_x_percent": float(rng.uniform(-1, 1)),
            "scale_y_percent": float(rng.uniform(-1, 1)),
            "nonlinearity_x_mm": float(rng.uniform(-1, 1)),
            "nonlinearity_y_mm": float(rng.uniform(-1, 1)),
            "gain_drift_percent": float(rng.uniform(-0.5, 0.5)),
            "gain_drift_slope_percent": float(rng.uniform(-0.5, 0.5)),
            "profile_edge_mm": float(rng.uniform(0, 0.4)),
            "frequency_offset_ppm": float(rng.uniform(-20, 20)),
        }
    return random_setup(np.random.default_rng(source), phantom, **off)


def locate_and_measure(acquisition: Acquisition, phantom: Phantom) -> tuple[tuple[Measurement, ...], tuple[NotMeasured, ...]]:
    """Find the phantom and measure all that there is to measure, as the program itself does."""
    from qa.locate import locate
    from qa.measure import measure

    pose: Pose | NotLocated = locate(acquisition, phantom)
    return measure(acquisition, pose, phantom)


def run_case(phantom: Phantom, seed: int, measurer: Measurer = locate_and_measure) -> Case:
    """Draw a scan, measure it, and hold every figure against its true value.

    Parameters
    ----------
    phantom : Phantom
        What is scanned.
    seed : int
        Reproduces the case.
    measurer : callable
        What is put to the test.

    Returns
    -------
    Case
        Errors stand beside what their bars allow. A fault in what is tested is recorded as not measured, with its name.
    """
    setup = draw_setup(phantom, seed)
    machine = Scan(setup)
    acquisition = simulate(setup, machine)
    truths = true_values(setup, machine)
    try:
        measured, not_measured = measurer(acquisition, phantom)
    except Exception as error:  # noqa: BLE001 - a campaign goes on and reports the case, whatever happened in it
        measured, reason = (), f"a fault in the program ({type(error).__name__}: {error})"
        not_measured = tuple(NotMeasured(name, reason) for name in truths)
    found = {one.quantity: one for one in measured}
    reasons = {one.quantity: one.reason for one in not_measured}
    figures: list[Figure] = []
    missing: list[Missing] = []
    for name, truth in sorted(truths.items(), key=lambda item: list(QUANTITIES).index(item[0])):
        row = row_of(name, setup, truth)
        if name in found:
            figures.append(_figure(row, found[name], truth, machine))
        elif name != "setup_tilt" or setup.slices > 1:  # one slice shows no axis
            missing.append(Missing(name, reasons.get(name, "nothing was said of it"), row.key))
    rods: Rods = ()
    if "lattice_rms" in truths:
        row = row_of(ROD_CENTRES, setup, truths["lattice_rms"])
        rods = _rods(found.get("lattice_rms"), truths["lattice_rms"], setup)
        if rods:
            figures.append(_largest(row, rods, math.sqrt(setup.pixel_mm[0] * setup.pixel_mm[1])))
        else:
            missing.append(Missing(ROD_CENTRES, reasons.get("lattice_rms", "nothing was said of it"), row.key))
    return Case(
        phantom=phantom.name,
        seed=seed,
        snr=setup.snr,
        pixel_mm=math.sqrt(setup.pixel_mm[0] * setup.pixel_mm[1]),
        settings={name: _plain(getattr(setup, name)) for name in _KEPT},
        figures=tuple(figures),
        missing=tuple(missing),
        rods=rods,
        unjudged=tuple(name for name in found if name not in truths),
    )


def _plain(value: Any) -> Any:  # noqa: ANN401 - any field of Setup
    return [_plain(one) for one in value] if isinstance(value, tuple) else value


def _figure(row: Row, one: Measurement, truth: Truth, machine: Scan) -> Figure:
    true = truth.value if one.slice is None else truth.by_slice.get(one.slice, truth.value)
    if row.detail in truth.details:
        # What sets the two apart is noise and shading, which neighbouring slices share.
        true += truth.details[row.detail] - truth.value
    match row.scale:
        case "pixels":
            scale = 1 / _pixel_along(one.quantity, machine.setup.pixel_mm)
        case "percent":
            scale = 100 / true
        case "absolute":
            scale = 1.0
    limit = least_deviation(one.quantity, machine, truth)
    return Figure(
        quantity=one.quantity,
        true=float(true),
        measured=one.value,
        standard_uncertainty=one.standard_uncertainty,
        error=float((one.value - true) * scale),
        unit=row.unit,
        allowed=row.allowed(limit),
        limit=limit,
        row=row.key,
    )


def _pixel_along(name: str, pixel_mm: tuple[float, float]) -> float:
    """Pixel size along a diameter: the spacing of its own axis, for a diagonal the geometric mean of both."""
    dy, dx = pixel_mm
    return {"length_0": dx, "length_90": dy}.get(name, math.sqrt(dx * dy))


def _rods(one: Measurement | None, truth: Truth, setup: Setup) -> Rods:
    """Errors of the single rods in pixels (geometric mean of both spacings).

    Both sides hold the rods in the phantom's frame after a rigid fit, so only what the fit leaves over counts.
    """
    if one is None:
        return ()
    pixel = math.sqrt(setup.pixel_mm[0] * setup.pixel_mm[1])
    seen: Mapping[tuple[int, int], Any] = {(r["i"], r["j"]): r["measured_mm"] for r in one.details.get("rods", ())}
    pairs = [
        (r["i"], r["j"], seen[r["i"], r["j"]], r["measured_mm"]) for r in truth.details["rods"] if (r["i"], r["j"]) in seen
    ]
    return tuple((i, j, float(m[0] - t[0]) / pixel, float(m[1] - t[1]) / pixel) for i, j, m, t in pairs)


def _largest(row: Row, rods: Rods, pixel_mm: float) -> Figure:
    """Let the rod that is furthest out stand for its case."""
    largest = max(math.hypot(x, y) for _, _, x, y in rods)
    return Figure(
        quantity=ROD_CENTRES,
        true=0.0,
        measured=largest * pixel_mm,
        standard_uncertainty=0.0,
        error=largest,
        unit=row.unit,
        allowed=row.allowed(None),
        limit=None,
        row=row.key,
    )
