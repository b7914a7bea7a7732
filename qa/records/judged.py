"""What figures are held against, and what came of it."""

from dataclasses import dataclass
from datetime import date
from typing import Literal

from qa.records.figures import Measurement

__all__ = [
    "CONFORMITIES",
    "OUT_OF_LIMITS",
    "Baseline",
    "Conformity",
    "DecisionRule",
    "Event",
    "EventKind",
    "Judged",
    "Limit",
    "Verdict",
]

Conformity = Literal["pass", "conditional pass", "conditional fail", "fail"]
CONFORMITIES: tuple[Conformity, ...] = ("pass", "conditional pass", "conditional fail", "fail")
OUT_OF_LIMITS: tuple[Conformity, ...] = ("conditional fail", "fail")
"""Those that mean that the value lies outside its limits, whatever its uncertainty."""
DecisionRule = Literal["simple", "guarded"]
EventKind = Literal["service", "repair", "replacement", "upgrade", "calibration", "protocol change", "downtime", "note"]


@dataclass(frozen=True)
class Limit:
    """A tolerance limit as a person sets it: what it applies to, its bounds, its warning levels, its rule and its source.

    Selectors narrow it down; the most specific limit that fits wins (`qa.judge.limits`). Bounds of one limit that are
    given in several ways all hold. An absent selector or bound is None.

    Attributes
    ----------
    quantity, scanner, phantom, coil, protocol : str
        Shell patterns; "*" fits all.
    field_strength_T : float or None
        Fits a scanner within 10 % of it: headers write 1.494 or 2.893 T for 1.5 and 3 T.
    field_strength_below_T : float or None
        Fits a scanner below 90 % of it, so that "below 3 T" leaves out a 2.893 T one.
    slice_thickness_mm : float or None
        Fits acquisitions of this nominal slice thickness, within 1 %.
    lower, upper : float or None
        Absolute bounds, in the quantity's unit.
    nominal, plus_minus : float or None
        A two-sided bound; without `nominal` the true dimension of the phantom stands in for it.
    lower_percent_of_baseline, upper_percent_of_baseline : float or None
        Bounds as a share of the baseline in force.
    per_day : float or None
        Largest change a day against the session before, either way, in the quantity's unit.
    warn_lower, warn_upper, warn_plus_minus, warn_percent_of_baseline, warn_per_day : float or None
        Levels inside the bounds at which a person is told; `warn_percent_of_baseline` below 100 is a lower level,
        above 100 an upper one.
    rule : DecisionRule
        "simple", or "guarded": the expanded uncertainty must fit inside too.
    source : str
        Where the figures come from, with the edition.
    key : str
        What the record calls this limit, stable from version to version.
    shipped : bool
        A published default that came with the program: any limit of the department that fits comes before it.
    """

    quantity: str
    scanner: str = "*"
    phantom: str = "*"
    coil: str = "*"
    protocol: str = "*"
    field_strength_T: float | None = None
    field_strength_below_T: float | None = None
    slice_thickness_mm: float | None = None
    lower: float | None = None
    upper: float | None = None
    nominal: float | None = None
    plus_minus: float | None = None
    lower_percent_of_baseline: float | None = None
    upper_percent_of_baseline: float | None = None
    per_day: float | None = None
    warn_lower: float | None = None
    warn_upper: float | None = None
    warn_plus_minus: float | None = None
    warn_percent_of_baseline: float | None = None
    warn_per_day: float | None = None
    rule: DecisionRule = "simple"
    source: str = ""
    key: str = ""
    shipped: bool = False


@dataclass(frozen=True)
class Baseline:
    """What a quantity was when a person accepted it, on one scanner with one phantom, protocol and coil.

    Attributes
    ----------
    scanner_name, quantity : str
        Whose baseline it is.
    value : float
        Median of the sessions it rests on, or the value set by hand.
    standard_uncertainty : float
        Of that value.
    scatter : float or None
        Scaled median absolute deviation of single sessions; None where set by hand without one.
    sessions : int
        How many sessions it rests on; 0 where set by hand.
    since : datetime.date
        First day it is in force: it never judges anything earlier.
    phantom, protocol, coil : str
        Shell patterns, as in `Limit`.
    method : str
        How it came about, in words.
    """

    scanner_name: str
    quantity: str
    value: float
    standard_uncertainty: float
    scatter: float | None
    sessions: int
    since: date
    phantom: str = "*"
    protocol: str = "*"
    coil: str = "*"
    method: str = ""


@dataclass(frozen=True)
class Event:
    """Something that was done to a scanner, on a day or, for planned downtime, from `day` to `until`, both included.

    `quantities` are the ones concerned, none meaning all; `restarts_baseline` says that what came before no longer counts.
    """

    scanner_name: str
    day: date
    kind: EventKind
    text: str
    quantities: tuple[str, ...] = ()
    restarts_baseline: bool = False
    until: date | None = None


@dataclass(frozen=True)
class Verdict:
    """A measurement held against a limit.

    `limit` is the sentence a report prints ("at most 2.5 %"); `lower` and `upper` are what was applied, None where open.
    `probability` is that of conformity (JCGM 106), None where no uncertainty is stated; `guard_band` the expanded
    uncertainty that the rule "guarded" keeps from the limit; `warned` that a value within its limits is at or beyond a
    warning level; `limit_key` names the limit among those in force.
    """

    quantity: str
    conformity: Conformity
    lower: float | None
    upper: float | None
    limit: str
    rule: str
    source: str
    probability: float | None = None
    guard_band: float = 0.0
    warn_lower: float | None = None
    warn_upper: float | None = None
    warned: bool = False
    limit_key: str = ""


@dataclass(frozen=True)
class Judged:
    """A measurement as the record keeps it; `verdict` is None where no limit applies."""

    measurement: Measurement
    verdict: Verdict | None
