from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import numpy as np
import pytest

from qa.geometry import Plane
from qa.records import (
    Acquisition,
    Baseline,
    Event,
    Measurement,
    NotMeasured,
    Outcome,
    Pose,
    Region,
    Scanner,
    Series,
    Settings,
    SourceFile,
    Verdict,
)
from qa.store import Intake, Who, open_record

NOW = datetime(2026, 3, 2, 8, 30, tzinfo=UTC)
WHO = Who("ada", "Ada Invented")


class Maker:
    """Makes what travels into a record, all values invented and different."""

    now, who = NOW, WHO

    def measurement(self, quantity="snr", value=212.4 / 3, **other):
        given = {
            "unit": "1",
            "standard_uncertainty": 0.1 + 0.2,
            "method": "two-image difference",
            "method_version": 1,
            "slice": 5,
            "details": {"independent_pixels": 8123, "levels": [0.1, -1e-308, 1e300], "text": "Größe 位", "none": None},
            "regions": (
                Region("signal", "circle", 5, ((120.1 / 3, 119.7),), 73.61215932167728),
                Region("air", "polygon", 5, ((0.0, 0.1), (10.0, 0.1), (10.0, 5.5)), None),
            ),
        }
        return Measurement(quantity, value, **{**given, **other})

    def series(self, number=1, *, when=datetime(2026, 3, 2, 7, 42, 10, 250000), files=2, **other):  # noqa: DTZ001
        given = {
            "description": "QA sphere",
            "acquired_at": when,
            "kind": "magnitude",
            "temporal_position": 1,
            "scanner": Scanner("Invented", "Model 7", "NORTH3T", "40071", 2.893, "1.0"),
            "settings": Settings("QA_SE", "SE", 5.0, 10.0, (0.9765625, 1.1), (256, 256), 500.0, 20.0, receive_coil="HEAD"),
            "planes": (Plane((-120.0, -120.0, 1 / 3), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (1.0, 1.0), (4, 4)),),
            "pixels": np.zeros((1, 4, 4), np.float32),
            "files": tuple(
                SourceFile(Path(f"inbox/{number}-{n}.dcm"), f"1.2.{number}.{n}", f"{number:032x}{n:032x}")
                for n in range(files)
            ),
        }
        return Series(f"1.2.{number}", f"1.2.{number // 10}", **{**given, **other})

    def outcome(self, *series, measurements=None, pose=True, **other):
        series = series or (self.series(1), self.series(2))
        measurements = (
            (self.measurement(), self.measurement("ghosting", -0.25, unit="%")) if measurements is None else measurements
        )
        found = Pose(np.array([1 / 3, -2.5, 1e-9]), np.eye(3), 0.7, 0.1, (0.03, 0.03, None), 0.1, None, ()) if pose else None
        given = {"not_measured": (NotMeasured("slice_thickness", "this phantom has no ramps"),), "remarks": ("a bubble",)}
        return Outcome(Acquisition(tuple(series), ("odd",)), "sphere-170", found, tuple(measurements), **{**given, **other})

    def verdict(self, quantity="snr", **other):
        given = {
            "conformity": "conditional pass", "lower": 190.1, "upper": None, "limit": "at least 190.1", "rule": "guarded",
            "source": "invented", "probability": 0.9876543210123456, "guard_band": 0.2, "warn_lower": 200.0, "warned": True,
            "limit_key": "snr, phantom sphere-170",
        }  # fmt: skip
        return Verdict(quantity, **{**given, **other})

    def intake(self, number=1, *, day=0, scanner_name="north-3t", version=1, outcome=None, verdicts=None, **other):
        if outcome is None:
            when = datetime(2026, 3, 2, 7, 42, 10) + timedelta(days=day)  # noqa: DTZ001 - the scanner's clock has no zone
            outcome = self.outcome(self.series(2 * number, when=when), self.series(2 * number + 1, when=when))
        if verdicts is None:
            verdicts = [self.verdict(m.quantity) for m in outcome.measurements]
        given = {
            "phantom_sha256": "ab" * 32,
            "taken_in_at": self.now + timedelta(days=day),
            "software_version": "0.1.0",
        }
        return Intake(outcome, verdicts, scanner_name, limits_version=version, **{**given, **other})

    def event(self, **other):
        given = {"scanner_name": "north-3t", "day": date(2026, 3, 1), "kind": "service", "text": "gradient amplifier replaced",
                 "quantities": ("ghosting", "snr"), "restarts_baseline": True, "until": date(2026, 3, 2)}  # fmt: skip
        return Event(**{**given, **other})

    def baseline(self, **other):
        given = {"scanner_name": "north-3t", "quantity": "snr", "value": 200 / 3, "standard_uncertainty": 0.1 + 0.2,
                 "scatter": 1 / 7, "sessions": 10, "since": date(2026, 3, 2), "phantom": "sphere-170", "protocol": "QA_SE",
                 "coil": "HEAD", "method": "median"}  # fmt: skip
        return Baseline(**{**given, **other})

    def decide(self, record):
        """Put an event, a baseline and a sign-off into a record that has sessions."""
        today, when = date(2026, 3, 31), self.now + timedelta(days=29)
        record.add_event(self.event(), today=today, when=when, who=self.who)
        record.set_baseline(self.baseline(), today=today, when=when, why="accepted", rests_on=(3, 4), who=self.who)
        record.sign("north-3t", date(2026, 3, 1), today, comment="seen", who=self.who, today=today, when=when)

    def fill(self, record, sessions=3):
        """Put one version of the limits, a phantom, some sessions, a refusal and a run into a record."""
        record.limits_version('[{"quantity":"snr","lower":190.1}]', self.who, self.now, "first limits")
        record.keep_phantom("sphere-170", "[about]\n", self.now, who=self.who)
        for n in range(sessions):
            record.store_all([self.intake(n + 1, day=7 * n)], who=self.who)
        record.refuse("inbox/x.dcm", "not a DICOM file", "cd" * 32, self.now + timedelta(days=7 * sessions), who=self.who)
        record.note_run("check", self.now, self.now + timedelta(days=7 * sessions), 3, {"refused": 1}, who=self.who)


@pytest.fixture
def make():
    return Maker()


@pytest.fixture
def path(tmp_path):
    return tmp_path / "evenfield.db"


@pytest.fixture
def record(path):
    with open_record(path) as opened:
        yield opened


@pytest.fixture(scope="session")
def filled(tmp_path_factory):
    """A record with something of everything; tests copy it."""
    place = tmp_path_factory.mktemp("filled") / "evenfield.db"
    with open_record(place) as opened:
        Maker().fill(opened)
        Maker().decide(opened)
    return place


@pytest.fixture
def copy(filled, tmp_path):
    """A copy of the filled record and its heads file."""
    for suffix in ("", ".heads"):
        source = filled.with_name(filled.name + suffix)
        (tmp_path / source.name).write_bytes(source.read_bytes())
    return tmp_path / filled.name
