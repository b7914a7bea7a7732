"""What a scanner's report costs: five years of 14 quantities, against WeasyPrint on the same page without its pictures."""

import argparse
import re
import resource
import runpy
import time
from collections.abc import Callable
from dataclasses import replace
from datetime import timedelta
from pathlib import Path
from typing import Any

from qa.judge import Grounds, Schedule, assess
from qa.report.fleet import render_fleet_report
from qa.report.fleet_content import FleetReport, fleet_scanner
from qa.report.render import fill_template, to_pdf
from qa.report.scanner import lay_out_scanner, render_scanner_report


def best_of(times: int, task: Callable[[], object]) -> float:
    """Least processor time of several runs, in seconds: the run that the machine disturbed least."""
    best = float("inf")
    for _ in range(times):
        start = time.process_time()
        task()
        best = min(best, time.process_time() - start)
    return best


def fleet_of(count: int, invented: dict[str, Any]) -> FleetReport:
    """An invented fleet over a year, each scanner judged from 14 quantities."""
    last, schedule = invented["LAST_DAY"], Schedule(7, 2)
    first = last - timedelta(weeks=51)
    scanners = []
    for number in range(count):
        name = f"scanner-{number:02d}"
        sessions = [replace(s, scanner_name=name) for s in invented["make_sessions"](52, skip=(number % 52,), seed=number)]
        assessment = assess(name, sessions, Grounds(schedule=schedule), last)
        scanners.append(fleet_scanner(assessment, sessions, schedule=schedule, events=(), first=first, last=last))
    return FleetReport("Saltmarsh Imaging", first, last, tuple(scanners), "0.1.0", 3, "c4" * 32, "9f" * 32, last)


def main() -> None:
    """Print seconds, their ratio, the size of the file and the peak of memory."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--weeks", type=int, default=260)
    parser.add_argument("--scanners", type=int, default=50)
    parser.add_argument("--repeats", type=int, default=3)
    options = parser.parse_args()
    invented = runpy.run_path(str(Path(__file__).parents[1] / "report" / "conftest.py"))
    content = invented["make_rich"](options.weeks)
    page, _, _ = lay_out_scanner(content)
    bare = re.sub(r"<img[^>]*>", "", fill_template("scanner.html", page=page))
    without = best_of(options.repeats, lambda: to_pdf(bare, {}, bytes(16), "@page { size: A4 }"))
    whole = best_of(options.repeats, lambda: render_scanner_report(content))
    pdf = render_scanner_report(content)
    fleet = fleet_of(options.scanners, invented)
    overview = best_of(1, lambda: render_fleet_report(fleet))
    year = replace(invented["make_rich"](52), scanner="scanner-00")
    singles = options.scanners * best_of(options.repeats, lambda: render_scanner_report(year))
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"{options.weeks} weeks, {len(page.trends)} quantities")
    print(f"WeasyPrint, the same page without pictures  {without:6.2f} s")
    print(f"the report                                  {whole:6.2f} s, ratio {whole / without:.2f} (bar 2.5)")
    print(f"fleet report of {options.scanners} scanners               {overview:6.2f} s; with a report of each over a year "
          f"{overview + singles:.0f} s (bar 60)")  # fmt: skip
    print(f"file {len(pdf) / 1e6:.2f} MB (bar 3), peak memory {peak:.0f} MB (bar 700)")


if __name__ == "__main__":
    main()
