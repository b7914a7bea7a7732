"""Limits and decision rules, baselines, control charts, foresight, likely causes and standing: pure functions on records.

No file, no database and no clock: the day comes in as an argument, and the same input gives the same output.
`judge` holds one measurement against its limit; `assess` judges a scanner with its whole history as of a day.
"""

from qa.judge.abreast import control_charts
from qa.judge.assess import assess, assess_streams
from qa.judge.baseline import BASELINE_SESSIONS, NoBaseline, baseline_from, in_force, propose_baseline
from qa.judge.causes import likely_causes
from qa.judge.columns import ScannerStreams, scanner_streams
from qa.judge.control import FALSE_ALARM_RATE, RULES, ControlChart, ControlRules, control_chart
from qa.judge.decide import conformity, conformity_probability, is_out, judge, why_not_judged
from qa.judge.derived import frequency_drift, with_derived
from qa.judge.fleet import FleetRow, compare_fleet
from qa.judge.foresight import Forecast, Onset, Trend, forecast, onset, trend
from qa.judge.limits import Bounds, Choice, Context, Unresolved, baseline_for, bounds, choose, describe, problems
from qa.judge.records import Assessment, Cause, Grounds, QuantityState
from qa.judge.schedule import Completeness, Schedule, completeness, days_overdue, due_day, missed_days
from qa.judge.settings import control_rules, schedule_of, true_values
from qa.judge.streams import SegmentStart, Stream, streams
from qa.judge.whatif import AlteredVerdict, altered_verdicts

__all__ = [
    "BASELINE_SESSIONS",
    "FALSE_ALARM_RATE",
    "RULES",
    "AlteredVerdict",
    "Assessment",
    "Bounds",
    "Cause",
    "Choice",
    "Completeness",
    "Context",
    "ControlChart",
    "ControlRules",
    "FleetRow",
    "Forecast",
    "Grounds",
    "NoBaseline",
    "Onset",
    "QuantityState",
    "ScannerStreams",
    "Schedule",
    "SegmentStart",
    "Stream",
    "Trend",
    "Unresolved",
    "altered_verdicts",
    "assess",
    "assess_streams",
    "baseline_for",
    "baseline_from",
    "bounds",
    "choose",
    "compare_fleet",
    "completeness",
    "conformity",
    "conformity_probability",
    "control_chart",
    "control_charts",
    "control_rules",
    "days_overdue",
    "describe",
    "due_day",
    "forecast",
    "frequency_drift",
    "in_force",
    "is_out",
    "judge",
    "likely_causes",
    "missed_days",
    "onset",
    "problems",
    "propose_baseline",
    "scanner_streams",
    "schedule_of",
    "streams",
    "trend",
    "true_values",
    "why_not_judged",
    "with_derived",
]
