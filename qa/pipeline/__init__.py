"""The walk: files -> Series -> Acquisition -> Outcome -> Verdicts -> record, and what is asked of the record afterwards."""

from qa.pipeline.department import Department, now_utc, open_department
from qa.pipeline.intake import Intake, Taken, take_in
from qa.pipeline.walk import Progress, examine, measure_paths, measure_reading, no_progress

__all__ = [
    "Department",
    "Intake",
    "Progress",
    "Taken",
    "examine",
    "measure_paths",
    "measure_reading",
    "no_progress",
    "now_utc",
    "open_department",
    "take_in",
]
