"""One quantity of one scanner: from its history to its state on a day."""

import math
from collections.abc import Iterable
from dataclasses import replace
from datetime import date
from itertools import takewhile

import numpy as np

from qa.judge.baseline import in_force
from qa.judge.control import RULES, ControlChart, control_chart
from qa.judge.decide import is_out, why_not_judged
from qa.judge.foresight import Forecast, forecast, onset, trend
from qa.judge.limits import Context, baseline_for, choose
from qa.judge.records import ControlState, Grounds, QuantityState
from qa.judge.streams import Stream
from qa.quantities import QUANTITIES, Sense
from qa.records import Limit, Verdict

__all__ = ["figure", "lasting_alarm", "quantity_state", "title"]

_MARGIN = 0.25
"""Share of the margin to a limit that must be used up before an alarm counts as drifting towards it."""
_SMOOTHED = 40
_DATED = 12
"""Sessions of an alarm that are used for dating it."""
_LASTING = ("ewma", "cusum", "nelson-2", "nelson-3", "nelson-5", "nelson-6")
"""Rules that a single odd session does not trip."""


def title(quantity: str) -> str:
    """Give what a report calls a quantity."""
    return QUANTITIES[quantity].title if quantity in QUANTITIES else quantity


def figure(value: float, quantity: str, unit: str) -> str:
    """Write a value as a sentence shows it, with its unit."""
    decimals = QUANTITIES[quantity].decimals if quantity in QUANTITIES else 2
    return f"{value:.{decimals}f}" + ("" if unit == "1" else f" {unit}")


def quantity_state(
    stream: Stream, grounds: Grounds, today: date, label: str = "", chart: ControlChart | None = None
) -> QuantityState:
    """Judge one history as of a day.

    Parameters
    ----------
    stream : Stream
        Nothing later than `today`.
    grounds : Grounds
        Its limits tell why a verdict is missing and whether a limit moves with the values.
    today : datetime.date
        The day.
    label : str
        What sentences call it; its title otherwise.
    chart : ControlChart, optional
        Its chart, where that was made before.

    Returns
    -------
    QuantityState
        `superseded` and `absent_since` are left for `qa.judge.assess`, which sees the other quantities.
    """
    context = Context(
        stream.scanner_name,
        stream.phantom,
        stream.last_day,
        stream.coil,
        stream.protocol,
        grounds.field_strength_T or stream.field_strength_T,
        stream.slice_thickness_mm,
        in_force(grounds.baselines, grounds.events, today),
    )
    verdict = stream.verdicts[-1]
    limit = choose(grounds.limits, stream.quantity, context).limit
    fixed = verdict is not None and (limit is None or limit.per_day is None)
    if chart is None:
        chart = control_chart(stream.days, stream.values, [start.index for start in stream.starts], grounds.rules)
    days, values = stream.days[stream.segment], stream.values[stream.segment]
    alarm, out = bool(chart.out[-1]), _row(stream, reversed(stream.out.tolist()))
    moving = trend(days, values)
    coming = None
    if fixed and verdict is not None and moving is not None and moving.real:
        coming = forecast(days, values, verdict.lower, verdict.upper, grounds.forecast_days)
    # What has happened since an alarm was well on tells nothing more of when it began, and would only bend the fit.
    known = days.size - _alarms(chart) + _DATED if alarm else days.size
    changed = alarm or out is not None or (moving is not None and moving.real)
    shift, sigmas, worse, used = _shift(stream, chart, verdict if fixed else None, grounds.rules.weight)
    state = QuantityState(
        stream=stream,
        label=label or title(stream.quantity),
        verdict=verdict,
        not_judged=""
        if verdict is not None
        else why_not_judged(stream.latest, grounds.limits, context) or "judged from the next session on",
        chart=chart,
        control=_control(chart),
        rules=tuple(text for rule, text in RULES.items() if rule in chart.tripped and chart.tripped[rule][-1]),
        alarm_since=date.fromordinal(int(stream.days[-_alarms(chart)])) if alarm else None,
        shift=shift,
        shift_sigmas=sigmas,
        worse=worse,
        margin_used=used,
        trend=moving,
        forecast=coming,
        onset=onset(days[:known], values[:known], alarmed=True) if changed else None,
        baseline=baseline_for(context.baselines, stream.quantity, context),
        out_since=out,
        superseded=False,
        absent_since=None,
        drifting=(),
    )
    awaiting = verdict is None and limit is not None and limit.per_day is None and _bounded(limit)
    return replace(state, drifting=tuple(_drifting(state, fixed=fixed, awaiting=awaiting)))


def _row(stream: Stream, latest_first: Iterable[bool]) -> date | None:
    """Give the first day of the unbroken row of flags that ends with the latest value; None where that has none."""
    length = sum(1 for _ in takewhile(bool, latest_first))
    return date.fromordinal(int(stream.days[-length])) if length else None


def _alarms(chart: ControlChart) -> int:
    """Count the sessions of the alarm that is on."""
    return sum(1 for _ in takewhile(bool, reversed(chart.out.tolist())))


def _control(chart: ControlChart) -> ControlState:
    if chart.out[-1]:
        return "out of control"
    return "still learning" if math.isnan(chart.centre[-1]) else "in control"


def _shift(
    stream: Stream, chart: ControlChart, verdict: Verdict | None, weight: float
) -> tuple[float, float, bool, float | None]:
    centre = float(chart.centre[-1])
    if math.isnan(centre):
        return 0.0, 0.0, False, None
    # The chart smooths scores, which a short reference shrinks; how far the quantity itself has gone is smoothed anew. The
    # median of the last three sessions keeps what has healed from counting on.
    recent = stream.values[stream.segment][-_SMOOTHED:] - centre
    course = float(recent @ (weight * (1 - weight) ** np.arange(recent.size - 1, -1, -1)))
    middle = float(np.median(recent[-3:]))
    shift = math.copysign(min(abs(course), abs(middle)), course) if course * middle > 0 else 0.0
    smoothed = centre + shift
    lower, upper = (None, None) if verdict is None else (verdict.lower, verdict.upper)
    bound = upper if shift > 0 else lower
    room = None if bound is None else (bound - centre) * math.copysign(1.0, shift)
    used = abs(shift) / room if room is not None and room > 0 else None
    sense = QUANTITIES[stream.quantity].sense if stream.quantity in QUANTITIES else Sense.NEAR_NOMINAL
    if sense is Sense.NEAR_NOMINAL and lower is not None and upper is not None:
        worse = abs(smoothed - (lower + upper) / 2) > abs(centre - (lower + upper) / 2)
    else:
        worse = shift < 0 if sense is Sense.HIGHER_IS_BETTER else shift > 0 if sense is Sense.LOWER_IS_BETTER else shift != 0
    return shift, shift / float(chart.sigma[-1]), worse, used


def lasting_alarm(chart: ControlChart) -> bool:
    """Tell an alarm that lasts: on at the last two sessions, and by a rule that a single odd session does not trip."""
    on = chart.out.size > 1 and bool(chart.out[-2:].all())
    return on and any(rule in _LASTING and bool(where[-1]) for rule, where in chart.tripped.items())


def _bounded(limit: Limit) -> bool:
    return any(
        getattr(limit, name) is not None
        for name in ("lower", "upper", "plus_minus", "lower_percent_of_baseline", "upper_percent_of_baseline")
    )


def _drifting(state: QuantityState, *, fixed: bool, awaiting: bool) -> list[str]:
    """Say why a quantity is on its way to a limit.

    It is where its latest value is at a warning level or passes only conditionally, where a crossing is foretold, and where a
    lasting alarm has used up a quarter of the way from the centre to a limit. Where the limit still waits for a baseline,
    a lasting alarm for the worse stands in. Set-up quantities tell about the set-up, not the scanner.
    """
    stream, verdict = state.stream, state.verdict
    now = figure(stream.latest.value, stream.quantity, stream.unit)
    found: list[str] = []
    if verdict is not None and is_out(verdict.conformity):
        return found
    if verdict is not None and verdict.conformity == "conditional pass":
        found.append(f"{state.label} is {now}: within its limit ({verdict.limit}), but not with its expanded uncertainty")
    if verdict is not None and verdict.warned:
        found.append(f"{state.label} is {now}: at its warning level, limit {verdict.limit}")
    if stream.quantity in QUANTITIES and QUANTITIES[stream.quantity].setup:
        return found
    if state.forecast is not None:
        found.append(_foretold(state, state.forecast))
    lasting = lasting_alarm(state.chart)
    if lasting and state.worse and fixed and state.margin_used is not None and state.margin_used >= _MARGIN:
        found.append(
            f"{state.label} has been out of control since {_iso(state.alarm_since)} and has gone "
            f"{100 * min(state.margin_used, 1):.0f} % of the way to its limit"
        )
    if awaiting and state.worse and lasting:
        found.append(f"{state.label} has been out of control since {_iso(state.alarm_since)}, and {state.not_judged}")
    return found


def _foretold(state: QuantityState, coming: Forecast) -> str:
    limit = figure(coming.limit, state.quantity, state.stream.unit)
    return (
        f"{state.label} is heading for its limit of {limit}: if it goes on, it gets there on {coming.crossing.isoformat()} "
        f"(90 % interval {coming.earliest.isoformat()} to {coming.latest.isoformat()})"
    )


def _iso(day: date | None) -> str:
    return "" if day is None else day.isoformat()
