"""The invented year of Saltmarsh Imaging: which scanner is scanned when, with what, and what goes wrong with it.

Everything here is made up: the department, its scanners, its dates and its faults.
"""

from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from functools import cache

from qa.phantoms import Phantom, load_phantom
from qa.records import Event
from qa.simulate import Setup, default_setup
from qa.simulate.faults import with_fault

__all__ = [
    "FAULTS_BEGIN",
    "LAST_MONDAY",
    "PHYSICIST",
    "SITE_TOML",
    "WEEKS",
    "Acceptance",
    "Scan",
    "Service",
    "acceptances",
    "plan",
    "services",
]

FIRST_MONDAY = date(2025, 11, 24)
WEEKS = 53
"""The first and the last Monday are 52 weeks apart."""
LAST_MONDAY = FIRST_MONDAY + timedelta(weeks=WEEKS - 1)
PHYSICIST = "R. Example"
"""Invented, like everybody here."""

_FADES_FROM, _COIL_REPLACED = 22, 41
_SERVICED = 27
_CREEPS_FROM = 16
_ACCEPTED = 10


@dataclass(frozen=True)
class DemoScanner:
    """One invented scanner; `weekly` is its main phantom, `monthly` the one added every fourth week."""

    name: str
    station: str
    serial: str
    model: str
    field_strength_T: float
    channels: int
    snr: float
    shading_percent: float
    weekly: str
    monthly: tuple[str, ...]
    hour: int


SCANNERS = (
    DemoScanner("north-3t", "NORTH3T", "40071", "Model 7", 3.0, 4, 210.0, 14.0, "sphere-170", ("sectioned-190",), 7),
    DemoScanner("south-1t5", "SOUTH15", "20418", "Model 4", 1.5, 1, 150.0, 6.0, "sectioned-190", ("sphere-any",), 8),
    DemoScanner("west-3t", "WEST3T", "40093", "Model 7", 3.0, 4, 190.0, 15.0, "cylinder-200", ("lattice-200",), 9),
)

_MISSED = {("south-1t5", 12), ("west-3t", 33)}
_CROOKED = ("west-3t", 9)


@dataclass(frozen=True)
class Scan:
    """One acquisition of the year."""

    scanner_name: str
    day: date
    setup: Setup


@dataclass(frozen=True)
class Service:
    """A service event, as the department enters it into the record."""

    event: Event


@dataclass(frozen=True)
class Acceptance:
    """A person accepts the sessions since a day, on a Monday, and baselines are taken from them."""

    week: int
    scanner_name: str
    since: date
    why: str
    quantities: tuple[str, ...]


def _monday(week: int) -> date:
    return FIRST_MONDAY + timedelta(weeks=week)


FAULTS_BEGIN = {
    "north-3t": _monday(_FADES_FROM),
    "south-1t5": _monday(_SERVICED),
    "west-3t": _monday(_CREEPS_FROM),
}
"""The first Monday on which each scanner is not what it was."""

_COIL_QUANTITIES = ("snr", "snr_background", "uniformity_piu", "uniformity_naad")


def services() -> tuple[Service, ...]:
    """List the year's service events."""
    return (
        Service(
            Event(
                "north-3t",
                _monday(_COIL_REPLACED) - timedelta(days=3),
                "replacement",
                "head coil: element 3 replaced, its preamplifier had been failing",
                _COIL_QUANTITIES,
                restarts_baseline=True,
            )
        ),
        Service(
            Event(
                "south-1t5",
                _monday(_SERVICED) - timedelta(days=4),
                "service",
                "planned maintenance: filters of the gradient amplifier changed",
            )
        ),
    )


def acceptances() -> tuple[Acceptance, ...]:
    """List when baselines are accepted: after the first ten sessions, and ten sessions after the coil was mended."""
    quantities = (*_COIL_QUANTITIES, "centre_frequency")
    first = tuple(
        Acceptance(_ACCEPTED, scanner.name, FIRST_MONDAY, "first ten sessions looked at and accepted", quantities)
        for scanner in SCANNERS
    )
    again = Acceptance(
        _COIL_REPLACED + 10,
        "north-3t",
        _monday(_COIL_REPLACED),
        "coil mended: ten sessions looked at and accepted",
        _COIL_QUANTITIES,
    )
    return (*first, again)


def plan() -> tuple[Scan, ...]:
    """List the year's scans in order of time."""
    scans = []
    for week in range(WEEKS):
        for number, scanner in enumerate(SCANNERS):
            if (scanner.name, week) in _MISSED:
                continue
            names = (scanner.weekly, *(scanner.monthly if week % 4 == number else ()))
            scans += [_scan(scanner, week, name, position) for position, name in enumerate(names)]
    return tuple(scans)


@cache
def _phantom(name: str) -> Phantom:
    return load_phantom(name)


def _scan(scanner: DemoScanner, week: int, phantom: str, position: int) -> Scan:
    day = _monday(week)
    seed = 1_000_003 * (week + 1) + 1009 * SCANNERS.index(scanner) + position
    changes: dict[str, object] = {
        "seed": seed,
        "channels": scanner.channels,
        "snr": scanner.snr * (1 + 0.008 * _jitter(seed, 1)),
        "shading_percent": scanner.shading_percent,
        "field_strength_T": scanner.field_strength_T,
        "frequency_offset_ppm": 2.0 + 0.02 * _jitter(seed, 2),
        "ghost_percent": 0.35 * (1 + 0.1 * _jitter(seed, 3)),
        "centre_patient": (1.2 * _jitter(seed, 4), 1.2 * _jitter(seed, 5), 0.4 * _jitter(seed, 6)),
        "rotation_deg": 0.4 * _jitter(seed, 7),
        "tilt_x_deg": 0.2 * _jitter(seed, 8),
        "tilt_y_deg": 0.2 * _jitter(seed, 9),
        "scale_x_percent": 0.04 * _jitter(seed, 10),
        "scale_y_percent": 0.04 * _jitter(seed, 11),
        "manufacturer": "Invented",
        "model": scanner.model,
        "station": scanner.station,
        "serial": scanner.serial,
        "series_description": f"QA {phantom}",
        "patient_id": f"QA-{phantom}",
        "acquired_at": datetime.combine(day, time(scanner.hour, 5 + 20 * position + week % 7, week % 60)),
    }
    if phantom in {"sphere-170", "cylinder-200", "sphere-any"}:
        changes |= {"slices": 3, "spacing_mm": 10.0}
    return Scan(scanner.name, day, _faulty(default_setup(_phantom(phantom), **changes), scanner, week))


def _faulty(setup: Setup, scanner: DemoScanner, week: int) -> Setup:
    """Put what is wrong with a scanner in a week on top of its usual scatter."""
    if scanner.name == "north-3t" and _FADES_FROM <= week < _COIL_REPLACED:
        setup = with_fault(setup, "dying channel", min(0.95, 0.055 * (week - _FADES_FROM + 1)))
    if scanner.name == "south-1t5" and week >= _SERVICED:
        setup = with_fault(setup, "ghosting gradient amplifier", min(0.8, 0.16 + 0.034 * (week - _SERVICED)))
    if scanner.name == "west-3t" and week >= _CREEPS_FROM:
        setup = with_fault(setup, "gradient out of calibration", 0.012 * (week - _CREEPS_FROM))
    if (scanner.name, week) == _CROOKED:
        setup = with_fault(setup, "phantom put in crooked", 1.0)
    return setup


def _jitter(seed: int, which: int) -> float:
    """Return a standard normal value that depends on nothing but its two arguments."""
    import numpy as np

    return float(np.random.default_rng((seed, which)).standard_normal())


SITE_TOML = (
    """\
# Saltmarsh Imaging is invented: its people, scanners, dates and faults are made up.

[department]
name = "Saltmarsh Imaging"
timezone = "Europe/London"

[record]
url = "sqlite:///evenfield.db"

[report]
page = "A4"
weeks = 53

"""
    + "\n".join(
        f"""\
[[scanner]]
name = "{scanner.name}"
match = {{ station = "{scanner.station}", serial = "{scanner.serial}" }}
field_strength_T = {scanner.field_strength_T}
model = "{scanner.model}"
every_days = 7
grace_days = 2
since = {FIRST_MONDAY.isoformat()}
"""
        + "".join(
            f"""
[[expect]]
scanner = "{scanner.name}"
phantom = "{name}"
series = "QA {name}*"
patient_id = "QA-*"
settings = {{ repetition_ms = 500, echo_ms = 20, slice_thickness_mm = 5.0 }}
"""
            for name in (scanner.weekly, *scanner.monthly)
        )
        for scanner in SCANNERS
    )
    + """
[[limit]]
quantity = "snr"
lower_percent_of_baseline = 90
warn_percent_of_baseline = 95
source = "common practice, no source"

[[limit]]
quantity = ["scale_x", "scale_y"]
lower = -1.0
upper = 1.0
warn_lower = -0.7
warn_upper = 0.7
source = "department protocol, invented"

[[limit]]
quantity = "distortion_max"
upper = 1.2
source = "department protocol, invented"
"""
)
"""The department's settings."""
