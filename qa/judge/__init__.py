"""Limits and decision rules, baselines, control charts, foresight, likely causes and standing: pure functions on records.

No file, no database and no clock: the day comes in as an argument, and the same input gives the same output.
"""

from qa.judge.decide import conformity, conformity_probability, is_out, judge, why_not_judged
from qa.judge.limits import Bounds, Choice, Context, Unresolved, baseline_for, bounds, choose, describe, problems

__all__ = [
    "Bounds",
    "Choice",
    "Context",
    "Unresolved",
    "baseline_for",
    "bounds",
    "choose",
    "conformity",
    "conformity_probability",
    "describe",
    "is_out",
    "judge",
    "problems",
    "why_not_judged",
]
