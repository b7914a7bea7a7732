from dataclasses import replace
from datetime import date, datetime, time, timedelta
from types import SimpleNamespace

import numpy as np
import pytest

from qa.judge import Context, judge
from qa.judge.streams import SegmentStart, Stream
from qa.records import Judged, Measurement, RecordedAcquisition, Scanner, Session, Settings

FIRST = date(2024, 1, 1)
UNITS = {"snr": "1", "ghosting": "%", "uniformity_piu": "%", "centre_frequency": "MHz", "setup_offset": "mm", "scale_x": "%"}


def ar1(rng, count, length, correlation):
    """Normal series of standard deviation 1, (count, length), whose neighbours correlate."""
    found = np.empty((count, length))
    found[:, 0] = rng.standard_normal(count)
    fresh = rng.standard_normal((count, length)) * np.sqrt(1 - correlation**2)
    for i in range(1, length):
        found[:, i] = correlation * found[:, i - 1] + fresh[:, i]
    return found


def weeks(count):
    return FIRST.toordinal() + 7 * np.arange(count)


def stream_of(values, limits=(), quantity="snr", days=None, unit="1"):
    """A history without settings, judged by these limits."""
    days = weeks(len(values)) if days is None else np.asarray(days)
    latest = Measurement(quantity, float(values[-1]), unit, 0.1, "method", 1)
    verdict = judge(latest, limits, Context("north-3t", "sphere-170", date.fromordinal(int(days[-1]))))
    return Stream(
        "north-3t", quantity, "sphere-170", "", "", unit, days, np.asarray(values, dtype=float), np.full(len(values), 0.1),
        (verdict,) * len(values), tuple(range(len(values))),
        (SegmentStart(0, date.fromordinal(int(days[0])), "the first session"),), latest,
    )  # fmt: skip


def acquisition(identifier, day, values, *, limits=(), baselines=(), scanner_name="north-3t", phantom="sphere-170", **changes):
    """One recorded acquisition; `values` maps quantities to values or (value, uncertainty, details)."""
    given = {"settings": Settings(protocol="QA", receive_coil="head"), "scanner": Scanner(software="V1", field_strength_T=3.0)}
    given |= changes
    version = given.pop("method_version", 1)
    context = Context(
        scanner_name, phantom, day, given["settings"].receive_coil, given["settings"].protocol, 3.0, baselines=tuple(baselines)
    )
    judged = []
    for quantity, value in values.items():
        figure, u, details = value if isinstance(value, tuple) else (value, 0.1, {})
        found = Measurement(quantity, float(figure), UNITS.get(quantity, "mm"), u, "method", version, details=details)
        judged.append(Judged(found, judge(found, limits, context)))
    return RecordedAcquisition(
        identifier, scanner_name, phantom, "0" * 64, datetime.combine(day, time(7)), datetime.combine(day, time(8)),
        given["scanner"], given["settings"], ("1.2.3",), (), None, None, None, tuple(judged), (), (), "0.1.0", 1, "0" * 64,
    )  # fmt: skip


def session(day, *acquisitions):
    return Session(acquisitions[0].scanner_name, day, tuple(acquisitions))


def history(values_by_week, **given):
    """Weekly sessions of one acquisition each."""
    found = []
    for week, values in enumerate(values_by_week):
        day = FIRST + timedelta(weeks=week)
        found.append(session(day, acquisition(week, day, values, **given)))
    return found


@pytest.fixture
def make():
    return SimpleNamespace(
        ar1=ar1, weeks=weeks, stream=stream_of, acquisition=acquisition, session=session, history=history, first=FIRST,
        replace=replace,
    )  # fmt: skip
