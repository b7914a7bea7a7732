"""What site.toml and the phantom definitions say, in the terms of judgement."""

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING

from qa.judge.control import ControlRules
from qa.judge.schedule import Schedule
from qa.records import Measurement

if TYPE_CHECKING:
    from qa.phantoms import Phantom
    from qa.site import Charts, Downtime, SiteScanner

__all__ = ["as_stated", "control_rules", "schedule_of", "true_values"]

_LENGTHS = ("length_0", "length_45", "length_90", "length_135")


def control_rules(charts: "Charts") -> ControlRules:
    """Take the rules of the control charts from site.toml; what it leaves open is the default."""
    return ControlRules(**charts.chosen())


def schedule_of(scanner: "SiteScanner", downtimes: Iterable["Downtime"]) -> Schedule:
    """Take a scanner's schedule from site.toml; `downtimes` are those that concern it."""
    return Schedule(scanner.every_days, scanner.grace_days, scanner.since, tuple((d.first_day, d.last_day) for d in downtimes))


def true_values(phantom: "Phantom", measurements: Iterable[Measurement] = ()) -> dict[str, float]:
    """Give the true dimensions that lengths are held against, mm, by quantity.

    Parameters
    ----------
    phantom : Phantom
        The definition; a body of unstated diameter has no true dimension.
    measurements : iterable of Measurement
        Those of the same acquisition: a scale states the true diameter of the cross-section it was taken from, which on a
        sphere is smaller than the sphere's.

    Returns
    -------
    dict of str to float
        Empty where nothing is known.
    """
    diameter = phantom.body.diameter_mm
    if diameter is None:
        return {}
    found = dict.fromkeys(_LENGTHS, diameter)
    if phantom.body.length_mm is not None:
        found["length_axial"] = phantom.body.length_mm
    return as_stated(found, measurements)


def as_stated(true_values: Mapping[str, float], measurements: Iterable[Measurement]) -> dict[str, float]:
    """Take the true diameter from the measurements of an acquisition where one states it and the phantom has one."""
    found = dict(true_values)
    stated = next((m.details["true_diameter_mm"] for m in measurements if "true_diameter_mm" in m.details), None)
    if stated is not None:
        found |= dict.fromkeys((name for name in _LENGTHS if name in found), float(stated))
    return found
