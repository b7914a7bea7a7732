"""How long a fleet of fifty scanners and ten years takes to judge: `evenfield status` and `record verify` as commands.

Uses the record of bench_record.py. Prints for each command the best of some runs: seconds by the clock, seconds of the
processor, and the ratio of these to what SQLite alone takes to read all rows. Then what judging one acquisition costs when it
is taken in, after one year and after ten.
"""

import argparse
import os
import resource
import subprocess
import sys
import tempfile
import time
from datetime import date, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
from bench_record import QUANTITIES, fill, outcome, read_all, seconds

from qa.phantoms import load_phantom
from qa.pipeline import open_department, survey
from qa.pipeline.verdicts import judge_outcome
from qa.records import Baseline
from qa.store import Who

FIRST = date(2016, 1, 4)
HEAD = """[department]
name = "Saltmarsh Imaging"
timezone = "Europe/London"

[[expect]]
scanner = "*"
phantom = "sphere-170"
series = "QA sphere*"
patient_id = "QA-*"

[[limit]]
quantity = "snr"
lower_percent_of_baseline = 90

[[limit]]
quantity = "centre_frequency"
per_day = 1.0
"""
SCANNER = """
[[scanner]]
name = "scanner-{0:02d}"
match = {{ station = "STATION{0}" }}
field_strength_T = 3.0
"""


def department(folder: Path, scanners: int, weeks: int, slices: int) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "site.toml").write_text(HEAD + "".join(SCANNER.format(n) for n in range(scanners)), encoding="utf-8")
    path = folder / "evenfield.db"
    if path.exists():
        return
    print(f"filled in {seconds(lambda: fill(path, scanners, weeks, slices))[0]:.0f} s")
    now = datetime(2016, 3, 14, 12, tzinfo=ZoneInfo("UTC"))
    with open_department(folder, now) as opened:
        for n in range(scanners):
            baseline = Baseline(f"scanner-{n:02d}", "snr", 100.0, 0.3, 1.0, 10, FIRST)
            opened.record.set_baseline(baseline, today=now.date(), when=now, why="first ten sessions", who=Who("bench"))


def command(*words: str, runs: int) -> tuple[float, float]:
    """Least seconds by the clock and of the processor that a command took."""
    wall, processor = [], []
    for _ in range(runs):
        before, start = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
        done = subprocess.run([sys.executable, "-m", "qa.cli", *words], capture_output=True, text=True, check=False)
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        assert done.returncode in {0, 1, 3}, done.stderr
        wall.append(time.perf_counter() - start)
        processor.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
    return min(wall), min(processor)


def taking_in(folder: Path, after_weeks: int, runs: int) -> float:
    """Least processor seconds that judging one acquisition takes, after so many weeks."""
    rng = np.random.default_rng(1)
    phantom = load_phantom("sphere-170")
    took = []
    with open_department(folder) as opened:
        scanner = opened.site.scanners[0]
        for _ in range(runs):
            one = outcome(0, after_weeks, rng, 1)
            start = time.process_time()
            judged, verdicts = judge_outcome(opened, scanner, phantom, one, FIRST + timedelta(weeks=after_weeks))
            took.append(time.process_time() - start)
    assert len(judged.measurements) == len(verdicts) >= len(QUANTITIES) - 1
    return min(took)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--scanners", type=int, default=50)
    parser.add_argument("--weeks", type=int, default=520)
    parser.add_argument("--slices", type=int, default=11, help="files in each of the two series")
    parser.add_argument("--runs", type=int, default=3)
    parser.add_argument("--folder", type=Path, help="keep the department there, and use it again where it exists")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = given.folder or Path(temporary) / "department"
        department(folder, given.scanners, given.weeks, given.slices)
        start = time.process_time()
        rows = read_all(folder / "evenfield.db")
        plain = time.process_time() - start
        today = FIRST + timedelta(weeks=given.weeks - 1, days=2)
        print(f"load {os.getloadavg()[0]:.1f} on {os.cpu_count()} processors; SQLite alone reads {rows} rows in {plain:.2f} s")
        site = ("--site", str(folder))
        for words in (("status", *site, "--as-of", today.isoformat()), ("record", "verify", *site), ("--version",)):
            wall, processor = command(*words, runs=given.runs)
            print(
                f"evenfield {' '.join(words[:2] if words[0] == 'record' else words[:1]):14s} {wall:6.2f} s by the clock, "
                f"{processor:6.2f} s of the processor, {processor / plain:.2f} times SQLite"
            )
        with open_department(folder) as opened:
            found = survey(opened, today)
        standings = [one.standing for one in found.assessments]
        print(", ".join(f"{standings.count(word)} {word}" for word in dict.fromkeys(standings)))
        for weeks in (52, given.weeks):
            print(f"judging one acquisition after {weeks} weeks: {1000 * taking_in(folder, weeks, 10):.1f} ms")


if __name__ == "__main__":
    main()
