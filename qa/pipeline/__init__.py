"""The walk: files -> Series -> Acquisition -> Outcome -> Verdicts -> record, and what is asked of the record afterwards."""

from qa.pipeline.decisions import accept_baselines
from qa.pipeline.department import Department, now_utc, open_department
from qa.pipeline.intake import Intake, Taken, take_in
from qa.pipeline.reporting import write_reports
from qa.pipeline.survey import Survey, survey
from qa.pipeline.walk import Progress, examine, measure_paths, measure_reading, no_progress

__all__ = [
    "Department",
    "Intake",
    "Progress",
    "Survey",
    "Taken",
    "accept_baselines",
    "examine",
    "measure_paths",
    "measure_reading",
    "no_progress",
    "now_utc",
    "open_department",
    "survey",
    "take_in",
    "write_reports",
]
