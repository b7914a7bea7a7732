"""Figures that need more than one session: the drift of the centre frequency from its baseline."""

import math
from collections.abc import Iterable

from qa.judge.limits import Context, baseline_for
from qa.records import Measurement, NotMeasured

__all__ = ["frequency_drift", "with_derived"]

_METHOD = "relative deviation from the baseline"


def frequency_drift(measurement: Measurement, context: Context) -> Measurement | NotMeasured:
    """Take the drift of the centre frequency from its baseline.

    Parameters
    ----------
    measurement : Measurement
        The centre frequency, MHz.
    context : Context
        Holds the baselines.

    Returns
    -------
    Measurement or NotMeasured
        ppm, positive where the frequency has risen; NotMeasured where there is no baseline yet. The baseline's uncertainty is
        not part of the drift's: it is the same every day, and what is judged is the change from day to day.
    """
    baseline = baseline_for(context.baselines, "centre_frequency", context)
    if baseline is None or baseline.value <= 0:
        return NotMeasured("frequency_drift", "there is no baseline of the centre frequency yet")
    return Measurement(
        "frequency_drift",
        1e6 * (measurement.value / baseline.value - 1),
        "ppm",
        1e6 * measurement.standard_uncertainty / baseline.value,
        _METHOD,
        1,
        details={
            "baseline_MHz": baseline.value,
            "baseline_uncertainty_ppm": 1e6 * baseline.standard_uncertainty / baseline.value,
        },
    )


def with_derived(
    measurements: Iterable[Measurement], context: Context
) -> tuple[tuple[Measurement, ...], tuple[NotMeasured, ...]]:
    """Add to the measurements of an acquisition what follows from them and the baselines.

    Returns
    -------
    measurements : tuple of Measurement
        Those given, then the derived ones.
    not_measured : tuple of NotMeasured
        What could not be derived, and why.
    """
    found = list(measurements)
    absent: list[NotMeasured] = []
    names = {m.quantity for m in found}
    for measurement in tuple(found):
        if measurement.quantity == "centre_frequency" and "frequency_drift" not in names and math.isfinite(measurement.value):
            drift = frequency_drift(measurement, context)
            if isinstance(drift, NotMeasured):
                absent.append(drift)
            else:
                found.append(drift)
    return tuple(found), tuple(absent)
