"""The walk: files -> Series -> Acquisition -> Outcome -> Verdicts -> record, and what is asked of the record afterwards."""

from qa.pipeline.decisions import (
    AppliedLimit,
    accept_baselines,
    add_event,
    limits_in_force,
    set_baseline,
    set_limit,
    what_if,
)
from qa.pipeline.department import Department, now_utc, open_department
from qa.pipeline.intake import Intake, Taken, take_in
from qa.pipeline.publishing import mail_text, publish_board, write_pin_ups
from qa.pipeline.reporting import write_reports
from qa.pipeline.survey import Survey, survey
from qa.pipeline.walk import Progress, examine, measure_paths, measure_reading, no_progress

__all__ = [
    "AppliedLimit",
    "Department",
    "Intake",
    "Progress",
    "Survey",
    "Taken",
    "accept_baselines",
    "add_event",
    "examine",
    "limits_in_force",
    "mail_text",
    "measure_paths",
    "measure_reading",
    "no_progress",
    "now_utc",
    "open_department",
    "publish_board",
    "set_baseline",
    "set_limit",
    "survey",
    "take_in",
    "what_if",
    "write_pin_ups",
    "write_reports",
]
