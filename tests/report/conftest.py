"""Invented sessions for the reports: a department and a scanner that exist nowhere."""

import dataclasses
from datetime import date, datetime, time, timedelta
from types import SimpleNamespace

import numpy as np
import pytest

from qa.geometry import Plane
from qa.records import (
    Baseline,
    Event,
    Judged,
    Measurement,
    NotMeasured,
    Picture,
    RecordedAcquisition,
    Region,
    Scanner,
    Session,
    Settings,
    SourceFile,
    Verdict,
)
from qa.report.content import (
    Change,
    ChangePoint,
    Comparison,
    ControlPoint,
    Course,
    Forecast,
    LikelyCause,
    Notice,
    RefusedSeries,
    ScannerReport,
    SignOff,
)

LAST_DAY = date(2026, 11, 23)
HEADER = Scanner("Fenwright", "Meridian", "NORTH3T", "FW-30417", 3.0, "M7.2")
SETTINGS = Settings(
    protocol="QA sphere", sequence="SE", slice_thickness_mm=5.0, slice_spacing_mm=10.0, pixel_mm=(0.98, 0.98),
    matrix=(256, 256), repetition_ms=500.0, echo_ms=20.0, flip_deg=90.0, averages=1.0, bandwidth_hz_per_pixel=130.2,
    phase_encode="column", receive_coil="HEAD-20", frequency_MHz=127.7281,
)  # fmt: skip

# name: (unit, mean, session-to-session scatter, standard uncertainty, lower, upper, sentence)
STEADY = {
    "snr": ("1", 212.0, 2.2, 1.9, 190.0, None, "at least 190 (90 % of baseline)"),
    "snr_background": ("1", 209.0, 3.5, 3.0, None, None, ""),
    "uniformity_piu": ("%", 90.4, 0.45, 0.35, 82.0, None, "at least 82.0 %"),
    "uniformity_naad": ("%", 94.8, 0.2, 0.12, None, None, ""),
    "ghosting": ("%", 0.42, 0.08, 0.06, None, 2.5, "at most 2.5 %"),
    "length_0": ("mm", 170.03, 0.03, 0.03, 168.0, 172.0, "170 ± 2 mm"),
    "length_45": ("mm", 169.98, 0.03, 0.03, 168.0, 172.0, "170 ± 2 mm"),
    "length_90": ("mm", 170.01, 0.03, 0.03, 168.0, 172.0, "170 ± 2 mm"),
    "length_135": ("mm", 169.99, 0.03, 0.03, 168.0, 172.0, "170 ± 2 mm"),
    "distortion_max": ("%", 0.03, 0.01, 0.02, None, 1.2, "at most 1.2 %"),
    "scale_x": ("%", 0.02, 0.015, 0.02, None, None, ""),
    "scale_y": ("%", 0.01, 0.015, 0.02, None, None, ""),
    "centre_frequency": ("MHz", 127.728154, 0.000018, 0.0, None, None, ""),
    "setup_offset": ("mm", 1.8, 0.9, 0.05, None, 10.0, "at most 10 mm"),
}


def judge(value, lower, upper, sentence, expanded=0.0):
    if lower is None and upper is None:
        return None
    outside = (lower is not None and value < lower) or (upper is not None and value > upper)
    near = (lower is not None and abs(value - lower) < expanded) or (upper is not None and abs(value - upper) < expanded)
    word = ("conditional fail" if near else "fail") if outside else ("conditional pass" if near else "pass")
    return lower, upper, sentence, word


def make_session(
    number, day, values, *, scanner_name="north-3t", phantom="sphere-170", settings=SETTINGS, header=HEADER, remarks=()
):
    judged = []
    for name, (unit, value, standard, lower, upper, sentence) in values.items():
        verdict = judge(value, lower, upper, sentence, 2 * standard)
        judged.append(
            Judged(
                Measurement(name, value, unit, standard, "as defined", 1, slice=6),
                verdict and Verdict(name, verdict[3], verdict[0], verdict[1], verdict[2], "simple", "invented"),
            )
        )
    at = datetime.combine(day, time(7, 42, 10))
    acquisition = RecordedAcquisition(
        identifier=number, scanner_name=scanner_name, phantom=phantom, phantom_sha256="5e" * 32, acquired_at=at,
        taken_in_at=at + timedelta(minutes=9), scanner=header, settings=settings,
        series_uids=(f"1.2.3.{number}.1", f"1.2.3.{number}.2"),
        files=(SourceFile(None, f"1.2.3.{number}.1.1", "ab" * 32),),
        centre_patient=(0.4, -1.2, 3.0), rotation_deg=0.0, tilt_deg=None,
        judged=tuple(judged), not_measured=(NotMeasured("slice_thickness", "this phantom has no ramps"),), remarks=remarks,
        software_version="0.1.0", limits_version=3, limits_sha256="c4" * 32,
    )  # fmt: skip
    return Session(scanner_name, day, (acquisition,))


def make_sessions(weeks, *, skip=(), last=LAST_DAY, ghost_step=0.75, seed=7, only=tuple(STEADY)):
    """Weekly sessions that end on `last`; weeks in `skip` (counted from 0) are left out; ghosting steps up late."""
    rng = np.random.default_rng(seed)
    sessions = []
    for week in range(weeks):
        day = last - timedelta(days=7 * (weeks - 1 - week))
        along = week / max(weeks - 1, 1)
        values = {}
        for name in only:
            unit, mean, scatter, standard, lower, upper, sentence = STEADY[name]
            value = mean + scatter * rng.standard_normal()
            if name == "ghosting" and along > ghost_step:
                value += 1.3 + 3.2 * (along - ghost_step)
            if name in {"snr", "snr_background"}:
                value -= 19 * along**2
            values[name] = (unit, max(value, 0.01) if mean > 0 else value, standard, lower, upper, sentence)
        if week not in skip:
            sessions.append(make_session(week + 1, day, values))
    return tuple(sessions)


def make_picture(*, rows=256, columns=256, pixel_mm=(0.98, 0.98), title="sphere-170, QA sphere", extra=(), ghost=0.02):
    y, x = np.mgrid[:rows, :columns]
    x_mm, y_mm = x * pixel_mm[1], y * pixel_mm[0]
    cx, cy = (columns - 1) / 2 * pixel_mm[1], (rows - 1) / 2 * pixel_mm[0]
    rng = np.random.default_rng(3)
    inside = np.clip(85.5 - np.hypot(x_mm - cx, y_mm - cy), 0, 1)
    ghosted = ghost * np.roll(inside, rows // 2, axis=0)
    signal = 1000 * inside * (1 - 0.0009 * (x_mm - cx)) + 1000 * ghosted
    pixels = np.abs(signal + 8 * rng.standard_normal(signal.shape) + 8j * rng.standard_normal(signal.shape)).astype(np.float32)
    plane = Plane((-125.0, -125.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), pixel_mm, (rows, columns))

    def box(name, x0, y0, w, h):
        return Region(name, "polygon", 6, ((x0, y0), (x0 + w, y0), (x0 + w, y0 + h), (x0, y0 + h)))

    width, height = columns * pixel_mm[1], rows * pixel_mm[0]
    regions = [
        Region("signal region, 75 % of the area", "circle", 6, ((cx, cy),), 73.6),
        Region("highest 1 cm² mean", "circle", 6, ((cx - 52.0, cy + 20.0),), 5.64),
        Region("lowest 1 cm² mean", "circle", 6, ((cx + 60.0, cy - 12.0),), 5.64),
        box("ghost, top", cx - 31.5, 12.0, 63, 15.8),
        box("ghost, bottom", cx - 31.5, height - 28.0, 63, 15.8),
        box("ghost, left", 12.0, cy - 31.5, 15.8, 63),
        box("ghost, right", width - 28.0, cy - 31.5, 15.8, 63),
    ]
    regions += [
        box("air", *corner, 20.0, 20.0) for corner in ((4, 4), (width - 25, 4), (4, height - 25), (width - 25, height - 25))
    ]
    for angle in (0, 45, 90, 135):
        dx, dy = 85 * np.cos(np.radians(angle)), 85 * np.sin(np.radians(angle))
        regions.append(Region(f"diameter at {angle}°", "line", 6, ((cx - dx, cy - dy), (cx + dx, cy + dy))))
    return Picture(title, pixels, plane, 6, (*regions, *extra))


def make_content(sessions, **changes):
    content = ScannerReport(
        department="Saltmarsh Imaging", scanner="north-3t", description="North wing, 3 T, head and spine",
        first_day=sessions[0].day if sessions else date(2026, 9, 28), last_day=LAST_DAY, standing="within limits",
        standing_sentence="Every quantity of the latest session is within its limits.", sessions=tuple(sessions),
        software_version="0.1.0", limits_version=3, limits_sha256="c4" * 32, record_head="9f" * 32, as_of=LAST_DAY,
    )  # fmt: skip
    return dataclasses.replace(content, **changes)


@pytest.fixture(scope="session")
def year():
    """52 weeks, two of them missed, ghosting out at the end, one refused series, one picture."""
    return make_content(
        make_sessions(52, skip=(17, 18, 40)),
        pictures=(make_picture(),),
        missing=(date(2026, 3, 30), date(2026, 4, 6), date(2026, 9, 7)),
        standing="out of limits",
        standing_sentence="Ghosting is out of limits since 5 Oct 2026: 2.61 % against at most 2.5 %.",
        refused=(
            RefusedSeries(
                date(2026, 6, 8), "inbox/series-114", "the patient ID is not one that this scanner's phantom scans carry"
            ),
        ),
    )


def make_course(sessions, name, **changes):
    """A control chart learnt from the first ten sessions, as plain numbers."""
    values = [
        (a.identifier, j.measurement.value)
        for s in sessions
        for a in s.acquisitions
        for j in a.judged
        if j.measurement.quantity == name
    ]
    first = np.array([v for _, v in values[:10]])
    centre, sigma = float(np.median(first)), float(first.std(ddof=1))
    control = []
    for number, (identifier, value) in enumerate(values):
        rules = ("a session beyond the control limits",) if number >= 10 and abs(value - centre) > 3.2 * sigma else ()
        known = (None, None, None) if number < 10 else (centre, centre - 3.2 * sigma, centre + 3.2 * sigma)
        control.append(ControlPoint(identifier, *known, rules))
    baseline = Baseline("north-3t", name, centre, sigma / 3, sigma, 10, sessions[0].day, method="first ten sessions")
    course = Course(
        name, "sphere-170", state="out of control" if control[-1].rules else "in control",
        sentence="out of control since 5 Oct 2026: a session beyond the control limits" if control[-1].rules else "in control",
        control=tuple(control), baselines=(baseline,),
    )  # fmt: skip
    return dataclasses.replace(course, **changes)


def make_rich(weeks=52, **changes):
    """Everything a report can hold: control charts, events, a forecast, causes, comparisons, signatures."""
    sessions = make_sessions(weeks, skip=(17, 18, 40) if weeks > 45 else ())
    courses = [make_course(sessions, name) for name in STEADY]
    courses[0] = dataclasses.replace(
        courses[0],
        forecast=Forecast(
            date(2026, 6, 1), 204.0, date(2026, 12, 28), 190.0, date(2026, 12, 7), date(2027, 2, 8),
            "at this rate it falls below 190 on 28 Dec 2026 (90 % interval 7 Dec 2026 to 8 Feb 2027)",
        ),
    )  # fmt: skip
    courses[4] = dataclasses.replace(
        courses[4],
        change_points=(
            ChangePoint(date(2026, 8, 31), date(2026, 8, 24), date(2026, 9, 7), "changed level between 24 Aug and 7 Sep 2026"),
        ),
    )  # fmt: skip
    content = make_content(
        sessions,
        pictures=(make_picture(),),
        missing=(date(2026, 3, 30), date(2026, 4, 6), date(2026, 9, 7)),
        standing="out of limits",
        standing_sentence="Ghosting is out of limits since 16 Nov 2026: 2.61 % against at most 2.5 %.",
        attention=(
            Notice("out of limits", "ghosting on sphere-170, 2.61 % against at most 2.5 %, since 16 Nov 2026"),
            Notice("drifting", "signal-to-noise ratio on sphere-170, falls below 190 on 28 Dec 2026 at this rate"),
            Notice("due", "the next session on 30 Nov 2026"),
        ),
        previous_report=date(2026, 11, 16),
        since_previous=("Ghosting went from pass to fail.", "One series was refused."),
        courses=tuple(courses),
        events=(
            Event("north-3t", date(2026, 8, 27), "service", "Gradient amplifier exchanged, y axis", ("ghosting",)),
            Event("north-3t", date(2026, 2, 12), "upgrade", "Software M7.2 installed", (), restarts_baseline=True),
        ),
        causes=(
            LikelyCause(
                "The gradient amplifier: ghosts along phase encode began with the service visit of 27 Aug 2026",
                ("ghosting up from 0.42 % to 1.8 % between 24 Aug and 7 Sep 2026", "signal, lengths and frequency unchanged"),
            ),
        ),
        changes=(Change(date(2026, 3, 2), "Echo time 20 ms became 22 ms for one session"),),
        comparisons=(
            Comparison(
                "ghosting", "sphere-170", make_picture(), date(2026, 11, 9), make_picture(ghost=0.06), date(2026, 11, 16)
            ),
        ),
        signatures=(
            SignOff("A. Example", date(2026, 7, 3), date(2026, 1, 1), date(2026, 6, 30), "two weeks missed for building work"),
        ),
        next_due=date(2026, 11, 30),
        refused=(RefusedSeries(date(2026, 6, 8), "inbox/series-114", "the patient ID is not one of a phantom scan"),),
    )
    return dataclasses.replace(content, **changes)


@pytest.fixture(scope="session")
def rich():
    return make_rich()


@pytest.fixture(scope="session")
def made():
    """What makes invented content, for tests that need their own."""
    return SimpleNamespace(
        content=make_content, picture=make_picture, rich=make_rich, session=make_session, sessions=make_sessions,
        steady={name: (row[0], row[1], *row[3:]) for name, row in STEADY.items()},
        header=HEADER, settings=SETTINGS, last_day=LAST_DAY,
    )  # fmt: skip
