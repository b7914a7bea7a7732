"""What is measured: one module a quantity (or a few that share their work), and the list of them.

Each routine is a pure function `(acquisition, pose, phantom) -> measurements and what could not be measured`. A new quantity
is one new module here and one line in `ROUTINES`.
"""

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from qa.measure import (
    axial_length,
    background,
    frequency,
    ghosting,
    lattice,
    lengths,
    position,
    setup,
    snr,
    thickness,
    uniformity,
)
from qa.phantoms import Phantom
from qa.records import Acquisition, Measurement, NotLocated, NotMeasured, Pose

__all__ = ["ROUTINES", "Routine", "measure"]


@dataclass(frozen=True)
class Routine:
    """A routine, and whether it needs the phantom to have been found."""

    run: Callable[[Acquisition, Any, Phantom], Iterable[Measurement | NotMeasured]]
    quantities: tuple[str, ...]
    needs_pose: bool = True


ROUTINES: tuple[Routine, ...] = (
    Routine(snr.snr, ("snr",)),
    Routine(background.snr_background, ("snr_background",)),
    Routine(uniformity.uniformity, ("uniformity_piu", "uniformity_naad")),
    Routine(ghosting.ghosting, ("ghosting",)),
    Routine(lengths.lengths, ("length_0", "length_45", "length_90", "length_135", "distortion_max", "scale_x", "scale_y")),
    Routine(axial_length.length_axial, ("length_axial",)),
    Routine(lattice.lattice, ("lattice_rms", "lattice_max", "distortion_max", "scale_x", "scale_y")),
    Routine(thickness.slice_thickness, ("slice_thickness",)),
    Routine(position.slice_position, ("slice_position", "slice_position_end")),
    Routine(frequency.centre_frequency, ("centre_frequency",), needs_pose=False),
    Routine(setup.setup, ("setup_offset", "setup_tilt")),
)
"""All routines, in the order of a report; `quantities` is what each may report on."""


def measure(
    acquisition: Acquisition, pose: Pose | NotLocated, phantom: Phantom
) -> tuple[tuple[Measurement, ...], tuple[NotMeasured, ...]]:
    """Run all routines on one acquisition.

    Parameters
    ----------
    acquisition : Acquisition
        The images.
    pose : Pose or NotLocated
        Where the phantom lies in them; where it was not found, only what needs no phantom is measured.
    phantom : Phantom
        What was scanned.

    Returns
    -------
    measurements : tuple of Measurement
    not_measured : tuple of NotMeasured
        What could not be measured, each with its reason. Each quantity appears once, in one of the two.
    """
    measured: dict[str, Measurement] = {}
    missed: dict[str, NotMeasured] = {}
    for routine in ROUTINES:
        for result in _results(routine, acquisition, pose, phantom):
            if isinstance(result, NotMeasured):
                missed.setdefault(result.quantity, result)
            elif math.isfinite(result.value) and math.isfinite(result.standard_uncertainty):
                measured.setdefault(result.quantity, result)
            else:
                missed.setdefault(result.quantity, NotMeasured(result.quantity, "the images give no finite value"))
    return tuple(measured.values()), tuple(m for m in missed.values() if m.quantity not in measured)


def _results(
    routine: Routine, acquisition: Acquisition, pose: Pose | NotLocated, phantom: Phantom
) -> Iterable[Measurement | NotMeasured]:
    if isinstance(pose, NotLocated) and routine.needs_pose:
        return [NotMeasured(name, pose.reason) for name in routine.quantities]
    try:
        return list(routine.run(acquisition, pose, phantom))
    except (ArithmeticError, np.linalg.LinAlgError) as error:
        return [NotMeasured(name, f"the images cannot be worked out ({error})") for name in routine.quantities]
