"""Decision rules: a measurement and its limit become a verdict.

The verdict's words are those of ILAC-G8:09/2019 (m), whose non-binary statement with a guard band reads, for a value y, a
tolerance limit T and a guard band w:

- *pass*: y lies inside T by w or more;
- *conditional pass*: y lies inside T, by less than w;
- *conditional fail*: y lies outside T, by w or less;
- *fail*: y lies outside T by more than w.

The rule "simple" is simple acceptance, the guideline's binary statement: w is 0, and only *pass* and *fail* occur. The rule
"guarded" takes the expanded uncertainty for w, U = 2 u. With two bounds the worse of the two words stands.

Where a bound hangs on a baseline, its standard uncertainty is added in quadrature to that of the value.

(m): from memory of the source, not compared with the printed edition.
"""

import math
from collections.abc import Sequence

from qa.judge.limits import Bounds, Context, Unresolved, bounds, choose
from qa.records import CONFORMITIES, OUT_OF_LIMITS, Conformity, DecisionRule, Limit, Measurement, Verdict

__all__ = ["COVERAGE_FACTOR", "conformity", "conformity_probability", "is_out", "judge", "why_not_judged"]

COVERAGE_FACTOR = 2.0
"""Expanded uncertainty over standard uncertainty."""


def conformity_probability(
    value: float,
    standard_uncertainty: float,
    lower: float | None = None,
    upper: float | None = None,
    *,
    u_lower: float = 0.0,
    u_upper: float = 0.0,
) -> float:
    """Probability that the quantity itself lies within its limits.

    Parameters
    ----------
    value, standard_uncertainty : float
        Measured value and its standard uncertainty, in one unit; the uncertainty above 0 unless the bounds have theirs.
    lower, upper : float or None
        Tolerance limits; None where open.
    u_lower, u_upper : float
        Standard uncertainties of the limits.

    Returns
    -------
    float
        From 0 to 1, for a normal distribution about the measured value.

    Notes
    -----
    JCGM 106:2012, equations for one-sided and two-sided tolerance intervals with normal distributions (m).
    """
    below = 0.0 if lower is None else _normal_cdf(_ratio(lower - value, math.hypot(standard_uncertainty, u_lower)))
    above = 0.0 if upper is None else _normal_cdf(_ratio(value - upper, math.hypot(standard_uncertainty, u_upper)))
    return max(0.0, 1.0 - below - above)


def conformity(value: float, standard_uncertainty: float, limit: Bounds, rule: DecisionRule) -> Conformity:
    """Hold a value against its bounds.

    Parameters
    ----------
    value, standard_uncertainty : float
        Measured value and its standard uncertainty, in the bounds' unit.
    limit : Bounds
        What applies.
    rule : DecisionRule
        "simple" or "guarded".

    Returns
    -------
    Conformity
        One of ILAC-G8's four words; a value that is no number fails.
    """
    worst = 0
    for bound, u_bound, sign in ((limit.lower, limit.u_lower, 1.0), (limit.upper, limit.u_upper, -1.0)):
        if bound is None:
            continue
        inside = sign * (value - bound)
        guard = COVERAGE_FACTOR * math.hypot(standard_uncertainty, u_bound) if rule == "guarded" else 0.0
        if inside >= guard:
            grade = 0
        elif inside >= 0:
            grade = 1
        elif inside >= -guard and guard > 0:
            grade = 2
        else:
            grade = 3
        worst = max(worst, grade)
    return CONFORMITIES[worst]


def judge(measurement: Measurement, limits: Sequence[Limit], context: Context) -> Verdict | None:
    """Hold a measurement against the limit that applies to it.

    Parameters
    ----------
    measurement : Measurement
        What was measured.
    limits : sequence of Limit
        All limits in force.
    context : Context
        Scanner, phantom, coil, protocol, day, baselines and the session before.

    Returns
    -------
    Verdict or None
        None where no limit applies, or where it cannot be applied yet; `why_not_judged` tells which.
    """
    limit = choose(limits, measurement.quantity, context).limit
    if limit is None:
        return None
    applied = bounds(limit, measurement, context)
    if isinstance(applied, Unresolved):
        return None
    value, u = measurement.value, measurement.standard_uncertainty
    uncertain = u > 0 or applied.u_lower > 0 or applied.u_upper > 0
    word = conformity(value, u, applied, limit.rule)
    beyond_warning = (applied.warn_lower is not None and value <= applied.warn_lower) or (
        applied.warn_upper is not None and value >= applied.warn_upper
    )
    guard = COVERAGE_FACTOR * max(math.hypot(u, applied.u_lower), math.hypot(u, applied.u_upper))
    return Verdict(
        quantity=measurement.quantity,
        conformity=word,
        lower=applied.lower,
        upper=applied.upper,
        limit=applied.text,
        rule=limit.rule,
        source=limit.source,
        probability=conformity_probability(
            value, u, applied.lower, applied.upper, u_lower=applied.u_lower, u_upper=applied.u_upper
        )
        if uncertain
        else None,
        guard_band=guard if limit.rule == "guarded" else 0.0,
        warn_lower=applied.warn_lower,
        warn_upper=applied.warn_upper,
        warned=beyond_warning and not is_out(word),
        limit_key=limit.key,
    )


def why_not_judged(measurement: Measurement, limits: Sequence[Limit], context: Context) -> str | None:
    """Say in one sentence why `judge` gives no verdict; None where it gives one."""
    choice = choose(limits, measurement.quantity, context)
    if choice.limit is None:
        return choice.why
    applied = bounds(choice.limit, measurement, context)
    return applied.reason if isinstance(applied, Unresolved) else None


def is_out(word: Conformity) -> bool:
    """Tell whether a verdict means that the value lies outside its tolerance limits, whatever its uncertainty."""
    return word in OUT_OF_LIMITS


def _ratio(difference: float, u: float) -> float:
    if u > 0:
        return difference / u
    return math.copysign(math.inf, difference) if difference else -math.inf


def _normal_cdf(z: float) -> float:
    return 0.5 * math.erfc(-z / math.sqrt(2))
