"""How long a record of ten years and fifty scanners takes to verify and to give its history.

26,000 sessions, 300,000 measurements, 572,000 files, written in large transactions so that filling takes minutes. The
scanners' software changes every four years, and a few scanners fail or are on their way to it.
Prints seconds, the size, and the ratio to the time that SQLite itself takes to read every row.
"""

import argparse
import sqlite3
import tempfile
import time
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from qa.geometry import Plane
from qa.records import Acquisition, Measurement, NotMeasured, Outcome, Region, Scanner, Series, Settings, SourceFile, Verdict
from qa.store import Intake, Who, open_record

QUANTITIES = (
    "snr", "snr_background", "uniformity_piu", "uniformity_naad", "ghosting", "length_0", "length_45", "length_90",
    "length_135", "distortion_max", "centre_frequency", "setup_offset",
)  # fmt: skip
PLANE = Plane((-120.0, -120.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.9765625, 0.9765625), (256, 256))
BATCH = 200


def outcome(scanner: int, week: int, rng: np.random.Generator, slices: int) -> Outcome:
    when = datetime(2016, 1, 4, 7, scanner) + timedelta(weeks=week)  # noqa: DTZ001 - a scanner's clock has no zone
    name = f"{scanner}.{week}"
    repeats = tuple(
        Series(
            series_instance_uid=f"1.2.826.0.1.3680043.8.498.{name}.{repeat}",
            study_instance_uid=f"1.2.826.0.1.3680043.8.498.{name}",
            description="QA sphere",
            acquired_at=when + timedelta(minutes=repeat),
            kind="magnitude",
            temporal_position=1,
            scanner=Scanner("Invented", "Model 7", f"STATION{scanner}", f"{scanner}", 3.0, f"{1 + week // 200}.0"),
            settings=Settings(
                "QA_SE",
                "SE",
                5.0,
                10.0,
                (0.9765625, 0.9765625),
                (256, 256),
                500.0,
                20.0,
                receive_coil="HEAD",
                frequency_MHz=float(127.7 + 1e-6 * rng.normal()),
            ),
            planes=(PLANE,),
            pixels=np.zeros((1, 1, 1), np.float32),
            files=tuple(
                SourceFile(
                    Path(f"archive/scanner-{scanner:02d}/{when.date()}/1.2.826.0.1.3680043.8.498.{name}.{repeat}/{n:02d}.dcm"),
                    f"1.2.826.0.1.3680043.8.498.{name}.{repeat}.{n}",
                    rng.bytes(32).hex(),
                )
                for n in range(slices)
            ),
        )
        for repeat in range(2)
    )
    corners = rng.normal(size=(4, 4, 2)) * 100
    regions = {
        "snr": (Region("signal", "circle", 6, ((120.1, 119.7),), 73.61215932167728),),
        "ghosting": tuple(
            Region(side, "polygon", 6, tuple((float(x), float(y)) for x, y in corners[k]))
            for k, side in enumerate(("top", "bottom", "left", "right"))
        ),
    }
    measurements = tuple(
        Measurement(
            quantity, value(quantity, scanner, week, rng), "1", float(rng.uniform(0.1, 1)), "a method of some name", 1, 6,
            {"signal": float(rng.normal()), "independent_pixels": 8123.4, "levels": rng.normal(size=8).tolist()},
            regions.get(quantity, ()),
        )
        for quantity in QUANTITIES[: 12 if week % 2 else 11]
    )  # fmt: skip
    return Outcome(Acquisition(repeats), "sphere-170", None, measurements, (NotMeasured("slice_thickness", "no ramps"),))


def value(quantity: str, scanner: int, week: int, rng: np.random.Generator) -> float:
    """A steady 100 with a scatter of 1; every tenth scanner's SNR and uniformity creep down, two ghost at the end."""
    creep = 0.1 * max(week - 470, 0) if scanner % 10 == 0 and quantity.startswith(("snr", "uniformity")) else 0.0
    step = 15.0 if scanner % 25 == 3 and week >= 516 and quantity == "ghosting" else 0.0
    return float(rng.normal(100 - creep - step, 1))


def verdict(measurement: Measurement) -> Verdict:
    word = "pass" if measurement.value >= 90 else "fail"
    return Verdict(measurement.quantity, word, 90.0, None, "at least 90 % of the baseline, 100", "simple", "common practice")


def fill(path: Path, scanners: int, weeks: int, slices: int) -> None:
    rng = np.random.default_rng(4)
    with open_record(path) as record:
        version = record.limits_version("[]", Who("bench"), datetime(2016, 1, 1, tzinfo=UTC), "first")
        todo = []
        for week in range(weeks):
            for scanner in range(scanners):
                one = outcome(scanner, week, rng, slices)
                verdicts = [verdict(m) for m in one.measurements]
                at = datetime(2016, 1, 4, 9, tzinfo=UTC) + timedelta(weeks=week)
                todo.append(Intake(one, verdicts, f"scanner-{scanner:02d}", "0" * 64, version, at, "0.1.0"))
                if len(todo) == BATCH:
                    record.store_all(todo)
                    todo.clear()
        record.store_all(todo)


def seconds(task: Callable[[], object]) -> tuple[float, object]:
    start = time.perf_counter()
    result = task()
    return time.perf_counter() - start, result


def read_all(path: Path) -> int:
    connection = sqlite3.connect(path)
    names = [name for (name,) in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
    count = sum(len(connection.execute(f"SELECT * FROM {name}").fetchall()) for name in names)
    connection.close()
    return count


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--scanners", type=int, default=50)
    parser.add_argument("--weeks", type=int, default=520)
    parser.add_argument("--slices", type=int, default=11, help="files in each of the two series")
    parser.add_argument("--record", type=Path, help="keep the record there, and use it again where it exists")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        path = given.record or Path(folder) / "evenfield.db"
        if not path.exists():
            print(f"filled in {seconds(lambda: fill(path, given.scanners, given.weeks, given.slices))[0]:.0f} s")
        plain, rows = seconds(lambda: read_all(path))
        print(f"{path.stat().st_size / 1e6:.0f} MB, {rows} rows, read by SQLite alone in {plain:.2f} s")
        with open_record(path) as record:
            took, found = seconds(record.verify)
            assert found.whole, found.problems
            print(f"verify   {took:6.2f} s, {took / plain:.2f} times reading all rows; {found.head.number} entries")
            took, history = seconds(record.history)
            print(f"history  {took:6.2f} s for {history.values.size} figures of {history.identifiers.size} acquisitions")
            took, fleet = seconds(lambda: record.sessions(details=False))
            print(f"sessions {took:6.2f} s for all {len(fleet)} sessions without details")
            took, sessions = seconds(lambda: record.sessions("scanner-00"))
            print(f"sessions {took:6.2f} s for the {len(sessions)} sessions of one scanner, with all details")


if __name__ == "__main__":
    main()
