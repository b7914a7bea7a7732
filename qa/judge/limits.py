"""Which limit applies to a measurement, and what bounds it comes to.

The most specific limit that fits wins. A limit of the department comes before a shipped default; after that the selectors
are compared one by one, in the order scanner, coil, phantom, protocol, field strength, slice thickness, quantity, and the
first in which two limits differ decides: a name beats a pattern, a pattern beats "*".
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from fnmatch import fnmatchcase
from types import MappingProxyType

from qa.quantities import QUANTITIES
from qa.records import Baseline, Limit, Measurement

__all__ = ["Bounds", "Choice", "Context", "Unresolved", "baseline_for", "bounds", "choose", "describe", "problems"]

_SELECTORS = ("scanner", "coil", "phantom", "protocol")
_FIELD_TOLERANCE = 0.1
_NO_TRUTH: Mapping[str, float] = MappingProxyType({})


@dataclass(frozen=True)
class Context:
    """What a measurement was made with, and what it is held against.

    Attributes
    ----------
    scanner_name, phantom, coil, protocol : str
        As the record keeps them.
    day : datetime.date
        Day of the session.
    field_strength_T, slice_thickness_mm : float or None
        None where unknown: a limit that selects by it then does not fit.
    baselines : tuple of Baseline
        All baselines of the scanner; the one in force is found by `baseline_for`.
    true_values : mapping of str to float
        The true dimension of the phantom for quantities held against it (`length_0`: 170.0).
    previous : Measurement or None
        The same quantity in the session before, for limits on change.
    previous_day : datetime.date or None
        Its day.
    """

    scanner_name: str
    phantom: str
    day: date
    coil: str = ""
    protocol: str = ""
    field_strength_T: float | None = None
    slice_thickness_mm: float | None = None
    baselines: tuple[Baseline, ...] = ()
    true_values: Mapping[str, float] = field(default_factory=lambda: _NO_TRUTH)
    previous: Measurement | None = None
    previous_day: date | None = None


@dataclass(frozen=True)
class Choice:
    """The limit that applies, or None; why in one sentence; and those that fit too but are less specific, best first."""

    limit: Limit | None
    why: str
    others: tuple[Limit, ...] = ()


@dataclass(frozen=True)
class Bounds:
    """A limit come down to figures in the quantity's unit; None where open.

    `u_lower` and `u_upper` are standard uncertainties of the bounds themselves: a bound that hangs on a baseline or on the
    session before shares its uncertainty.
    """

    lower: float | None
    upper: float | None
    text: str
    u_lower: float = 0.0
    u_upper: float = 0.0
    warn_lower: float | None = None
    warn_upper: float | None = None


@dataclass(frozen=True)
class Unresolved:
    """Why a limit that fits cannot be applied yet."""

    reason: str


def choose(limits: Sequence[Limit], quantity: str, context: Context) -> Choice:
    """Find the limit that applies to a quantity.

    Parameters
    ----------
    limits : sequence of Limit
        All that are in force.
    quantity : str
        Name of the quantity.
    context : Context
        What was measured with what.

    Returns
    -------
    Choice
        The most specific limit that fits, and why. Of two that are equally specific the later one applies, and the
        sentence says so.
    """
    fitting = [limit for limit in limits if _fits(limit, quantity, context)]
    if not fitting:
        return Choice(None, f"no limit for {quantity} fits {context.scanner_name} with {context.phantom}")
    ranked = sorted(enumerate(fitting), key=lambda item: (_rank(item[1]), item[0]), reverse=True)
    best, others = ranked[0][1], tuple(limit for _, limit in ranked[1:])
    why = f"it {_selection(best)}"
    if others and _rank(others[0]) == _rank(best):
        why += "; another is just as specific, and the later one counts"
    elif others and best.shipped is False and others[0].shipped:
        why += "; a limit of the department comes before a shipped default"
    elif others:
        why += f"; the next best only {_selection(others[0])}"
    return Choice(best, why, others)


def bounds(limit: Limit, measurement: Measurement, context: Context) -> Bounds | Unresolved:
    """Bring a limit down to figures for one measurement; a limit that names no bound switches limits off.

    Parameters
    ----------
    limit : Limit
        The limit that applies.
    measurement : Measurement
        What is judged; its details may carry the true dimension as `true_mm`.
    context : Context
        Baselines, true values and the session before.

    Returns
    -------
    Bounds or Unresolved
        The strictest of all bounds that the limit names; Unresolved where one of them hangs on something that is missing.
    """
    parts: list[Bounds] = []
    unit = _unit(measurement.unit)
    if limit.lower is not None or limit.upper is not None or limit.warn_lower is not None or limit.warn_upper is not None:
        text = describe(limit.lower, limit.upper, measurement.unit)
        parts.append(Bounds(limit.lower, limit.upper, text, 0.0, 0.0, limit.warn_lower, limit.warn_upper))
    for part in (
        _about_nominal(limit, measurement, context, unit),
        _of_baseline(limit, measurement, context, unit),
        _per_day(limit, measurement, context, unit),
    ):
        if isinstance(part, Unresolved):
            return part
        if part is not None:
            parts.append(part)
    if not parts:
        return Unresolved(f"no limit applies to {measurement.quantity}: it is switched off")
    lower, u_lower = max(((p.lower, p.u_lower) for p in parts if p.lower is not None), default=(None, 0.0))
    upper, u_upper = min(((p.upper, p.u_upper) for p in parts if p.upper is not None), default=(None, 0.0))
    if lower is not None and upper is not None and lower > upper:
        return Unresolved(f"its bounds contradict each other: at least {lower:.6g} and at most {upper:.6g}{unit}")
    return Bounds(
        lower,
        upper,
        " and ".join(p.text for p in parts if p.text),
        u_lower,
        u_upper,
        max((p.warn_lower for p in parts if p.warn_lower is not None), default=None),
        min((p.warn_upper for p in parts if p.warn_upper is not None), default=None),
    )


def baseline_for(baselines: Sequence[Baseline], quantity: str, context: Context) -> Baseline | None:
    """Return the baseline in force on the context's day: the latest that fits and began no later, None where there is none."""
    fitting = [
        b
        for b in baselines
        if b.quantity == quantity
        and b.scanner_name == context.scanner_name
        and b.since <= context.day
        and fnmatchcase(context.phantom, b.phantom)
        and fnmatchcase(context.protocol, b.protocol)
        and fnmatchcase(context.coil, b.coil)
    ]
    return max(fitting, key=lambda b: b.since, default=None)


def describe(lower: float | None, upper: float | None, unit: str) -> str:
    """Write two bounds as a report prints them; empty where both are open."""
    tail = _unit(unit)
    if lower is not None and upper is not None:
        return f"{lower:.6g} to {upper:.6g}{tail}"
    if lower is not None:
        return f"at least {lower:.6g}{tail}"
    return "" if upper is None else f"at most {upper:.6g}{tail}"


def problems(limits: Sequence[Limit]) -> tuple[str, ...]:
    """Say what is wrong with a set of limits: bounds that exclude each other, and two limits for exactly the same thing.

    Returns
    -------
    tuple of str
        One sentence each, in the order of the set; empty where all is well.
    """
    found: list[str] = []
    seen: dict[tuple[object, ...], Limit] = {}
    for limit in limits:
        name = f"the limit on {limit.quantity}" + (f" ({limit.key})" if limit.key else "")
        if not any(fnmatchcase(q, limit.quantity) for q in QUANTITIES):
            found.append(f"{name} fits no quantity: known are {', '.join(QUANTITIES)}")
        found += [f"{name}: {text}" for text in _contradictions(limit)]
        selectors = (limit.shipped, limit.quantity, *_selector_values(limit))
        if selectors in seen:
            found.append(f"{name} is set twice for {_selection(limit).removeprefix('names ')}: keep one of them")
        seen[selectors] = limit
    return tuple(found)


def _fits(limit: Limit, quantity: str, context: Context) -> bool:
    if not fnmatchcase(quantity, limit.quantity):
        return False
    values = (context.scanner_name, context.coil, context.phantom, context.protocol)
    if not all(fnmatchcase(v, getattr(limit, s)) for s, v in zip(_SELECTORS, values, strict=True)):
        return False
    field_T, thickness = context.field_strength_T, context.slice_thickness_mm
    if limit.field_strength_T is not None and (
        field_T is None or abs(field_T / limit.field_strength_T - 1) > _FIELD_TOLERANCE
    ):
        return False
    if limit.field_strength_below_T is not None and (
        field_T is None or field_T >= (1 - _FIELD_TOLERANCE) * limit.field_strength_below_T
    ):
        return False
    wanted = limit.slice_thickness_mm
    return wanted is None or (thickness is not None and abs(thickness - wanted) <= 0.01 * wanted)


def _rank(limit: Limit) -> tuple[int, ...]:
    def of(pattern: str) -> int:
        return 0 if pattern == "*" else 1 if any(c in pattern for c in "*?[") else 2

    return (
        int(not limit.shipped),
        *(of(getattr(limit, s)) for s in _SELECTORS),
        2 if limit.field_strength_T is not None else int(limit.field_strength_below_T is not None),
        int(limit.slice_thickness_mm is not None),
        of(limit.quantity),
    )


def _selector_values(limit: Limit) -> tuple[object, ...]:
    return (
        *(getattr(limit, s) for s in _SELECTORS),
        limit.field_strength_T,
        limit.field_strength_below_T,
        limit.slice_thickness_mm,
    )


def _selection(limit: Limit) -> str:
    words = [f"{s} {getattr(limit, s)}" for s in _SELECTORS if getattr(limit, s) != "*"]
    if limit.field_strength_T is not None:
        words.append(f"{limit.field_strength_T:g} T")
    if limit.field_strength_below_T is not None:
        words.append(f"below {limit.field_strength_below_T:g} T")
    if limit.slice_thickness_mm is not None:
        words.append(f"{limit.slice_thickness_mm:g} mm slices")
    return "names " + (", ".join(words) if words else "every scanner")


def _about_nominal(limit: Limit, measurement: Measurement, context: Context, unit: str) -> Bounds | Unresolved | None:
    if limit.plus_minus is None and limit.warn_plus_minus is None:
        return None
    nominal = limit.nominal
    if nominal is None:
        nominal = context.true_values.get(measurement.quantity)
    if nominal is None:
        stated = measurement.details.get("true_mm")
        nominal = float(stated) if isinstance(stated, (int, float)) else None
    if nominal is None:
        return Unresolved(f"the true value of {measurement.quantity} is not stated: give the limit a nominal value")
    half, warn = limit.plus_minus, limit.warn_plus_minus
    return Bounds(
        None if half is None else nominal - half,
        None if half is None else nominal + half,
        "" if half is None else f"{nominal:.6g} \N{PLUS-MINUS SIGN} {half:.6g}{unit}",
        warn_lower=None if warn is None else nominal - warn,
        warn_upper=None if warn is None else nominal + warn,
    )


def _of_baseline(limit: Limit, measurement: Measurement, context: Context, unit: str) -> Bounds | Unresolved | None:
    low, high, warn = limit.lower_percent_of_baseline, limit.upper_percent_of_baseline, limit.warn_percent_of_baseline
    if low is None and high is None and warn is None:
        return None
    baseline = baseline_for(context.baselines, measurement.quantity, context)
    if baseline is None:
        return Unresolved(f"there is no baseline of {measurement.quantity} yet: accept sessions for it or set one by hand")
    if baseline.value <= 0:
        return Unresolved(f"a share of a baseline of {baseline.value:.6g}{unit} means nothing: set an absolute limit")
    words = [f"at {side} {share:g} %" for side, share in (("least", low), ("most", high)) if share is not None]
    return Bounds(
        None if low is None else baseline.value * low / 100,
        None if high is None else baseline.value * high / 100,
        f"{' and '.join(words)} of the baseline, {baseline.value:.6g}{unit}" if words else "",
        0.0 if low is None else baseline.standard_uncertainty * low / 100,
        0.0 if high is None else baseline.standard_uncertainty * high / 100,
        baseline.value * warn / 100 if warn is not None and warn <= 100 else None,
        baseline.value * warn / 100 if warn is not None and warn > 100 else None,
    )


def _per_day(limit: Limit, measurement: Measurement, context: Context, unit: str) -> Bounds | Unresolved | None:
    if limit.per_day is None and limit.warn_per_day is None:
        return None
    before, day = context.previous, context.previous_day
    if before is None or day is None:
        return Unresolved(f"there is no earlier session to take the change of {measurement.quantity} from")
    # Two sessions closer than a day apart are held to a day's change: "a day" is the shortest span that the limit speaks of.
    days = max((context.day - day).days, 1)
    half = None if limit.per_day is None else limit.per_day * days
    warn = None if limit.warn_per_day is None else limit.warn_per_day * days
    u = before.standard_uncertainty
    return Bounds(
        None if half is None else before.value - half,
        None if half is None else before.value + half,
        "" if limit.per_day is None else f"a change of at most {limit.per_day:g}{unit} a day since {day.isoformat()}",
        0.0 if half is None else u,
        0.0 if half is None else u,
        None if warn is None else before.value - warn,
        None if warn is None else before.value + warn,
    )


def _contradictions(limit: Limit) -> list[str]:
    found: list[str] = []

    def order(low: str, high: str) -> None:
        a, b = getattr(limit, low), getattr(limit, high)
        if a is not None and b is not None and a > b:
            found.append(f"{low} {a:g} lies above {high} {b:g}")

    for low, high in (
        ("lower", "upper"),
        ("lower", "warn_lower"),
        ("warn_upper", "upper"),
        ("warn_lower", "warn_upper"),
        ("lower_percent_of_baseline", "upper_percent_of_baseline"),
        ("warn_plus_minus", "plus_minus"),
        ("warn_per_day", "per_day"),
    ):
        order(low, high)
    if limit.warn_percent_of_baseline is not None and limit.warn_percent_of_baseline <= 100:
        order("lower_percent_of_baseline", "warn_percent_of_baseline")
    elif limit.warn_percent_of_baseline is not None:
        order("warn_percent_of_baseline", "upper_percent_of_baseline")
    found += [
        f"{name} {value:g} must be above 0"
        for name in ("plus_minus", "warn_plus_minus", "per_day", "warn_per_day")
        if (value := getattr(limit, name)) is not None and value <= 0
    ]
    if limit.nominal is not None and limit.plus_minus is None:
        found.append("nominal needs plus_minus beside it")
    return found


def _unit(unit: str) -> str:
    return "" if unit == "1" else f" {unit}"
