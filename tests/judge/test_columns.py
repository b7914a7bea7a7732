"""What is judged from columns, and from many charts at once, is what is judged from sessions: to the last bit."""

from dataclasses import fields, is_dataclass, replace
from datetime import date, timedelta

import numpy as np
import pytest

from qa.judge import (
    ControlRules,
    Grounds,
    Schedule,
    assess,
    assess_streams,
    control_chart,
    control_charts,
    scanner_streams,
    streams,
)
from qa.records import OUT_OF_LIMITS, Baseline, Event, History, Limit, Scanner, Settings

LIMITS = (
    Limit("ghosting", upper=0.55, warn_upper=0.5),
    Limit("snr", lower_percent_of_baseline=90, warn_percent_of_baseline=95, rule="guarded"),
    Limit("centre_frequency", per_day=2e-7),
    Limit("scale_x", lower=-1.0, upper=1.0, phantom="cylinder-200"),
)
HEAD = Settings(protocol="QA", receive_coil="head", repetition_ms=500.0, echo_ms=20.0, pixel_mm=(0.98, 0.98))
WAYS = (
    HEAD,
    replace(HEAD, receive_coil="body"),
    replace(HEAD, echo_ms=40.0),
    replace(HEAD, protocol="QA 2"),
    replace(HEAD, repetition_ms=503.0),
    replace(HEAD, repetition_ms=506.0),
    replace(HEAD, slice_thickness_mm=5.0, parallel_imaging=False),
)
EVERYTHING = ControlRules(nelson=(1, 2, 3, 4, 5, 6, 7, 8), cusum=True, moving_range=True)


def columns_of(sessions):
    """The history that the record gives of these sessions, and what it answers when asked for single figures."""
    made = [(s, a) for s in sorted(sessions, key=lambda s: (s.scanner_name, s.day)) for a in s.acquisitions]
    rows = [(n, p, j) for n, (_, a) in enumerate(made) for p, j in enumerate(a.judged, start=1)]
    known = {}

    def numbers(kind, things):
        of_kind = known.setdefault(kind, {})
        return np.array([of_kind.setdefault(thing, len(of_kind)) for thing in things], dtype=np.int64)

    columns = {
        "identifiers": np.array([a.identifier for _, a in made], dtype=np.int64),
        "days": np.array([s.day.toordinal() for s, _ in made], dtype=np.int64),
        "scanner_name": numbers("scanner_names", (s.scanner_name for s, _ in made)),
        "phantom": numbers("phantoms", (a.phantom for _, a in made)),
        "setting": numbers("settings", (replace(a.settings, frequency_MHz=None) for _, a in made)),
        "scanner": numbers("scanners", (a.scanner for _, a in made)),
        "acquisition": np.array([n for n, _, _ in rows], dtype=np.int64),
        "position": np.array([p for _, p, _ in rows], dtype=np.int64),
        "quantity": numbers("quantities", (j.measurement.quantity for _, _, j in rows)),
        "method": numbers("methods", ((j.measurement.method, j.measurement.method_version) for _, _, j in rows)),
        "values": np.array([j.measurement.value for _, _, j in rows], dtype=float),
        "uncertainties": np.array([j.measurement.standard_uncertainty for _, _, j in rows], dtype=float),
        "out": np.array([j.verdict is not None and j.verdict.conformity in OUT_OF_LIMITS for _, _, j in rows], dtype=bool),
    }
    in_full = {(made[n][1].identifier, p): j for n, p, j in rows}
    history = History(**columns, **{kind: tuple(of_kind) for kind, of_kind in known.items()})
    return history, lambda places: [in_full[place] for place in places]


def differences(a, b, path=""):
    """Where two results differ; NaN is equal to NaN, all else must be the same to the last bit."""
    if is_dataclass(a) and type(a) is type(b):
        return [d for f in fields(a) for d in differences(getattr(a, f.name), getattr(b, f.name), f"{path}.{f.name}")]
    if isinstance(a, np.ndarray):
        same = a.dtype == b.dtype and np.array_equal(a, b, equal_nan=a.dtype.kind == "f")
        return [] if same else [f"{path}: {a} {b}"]
    if isinstance(a, (tuple, list)) and isinstance(b, (tuple, list)) and len(a) == len(b):
        return [d for i, (x, y) in enumerate(zip(a, b, strict=True)) for d in differences(x, y, f"{path}[{i}]")]
    if hasattr(a, "items"):
        return differences(sorted(a.items()), sorted(b.items()), path)
    return [] if a == b else [f"{path}: {a!r} {b!r}"]


def light(found):
    """The same without the verdicts that columns do not hold."""
    if is_dataclass(found) and hasattr(found, "verdicts"):
        return replace(found, verdicts=found.verdicts[-1:], was_out=found.out)
    return replace(found, quantities=tuple(replace(s, stream=light(s.stream)) for s in found.quantities))


def a_history(make, seed, name="north-3t", weeks=90):
    """Years of one scanner whose settings, software, method, coils and phantoms change; figures are missing or come twice."""
    rng = np.random.default_rng(seed)
    way, beside, version = WAYS[0], None, 1
    scanner = Scanner(software="V1", field_strength_T=3.0)
    drift, jump = rng.choice([0.0, -0.3], size=2)
    found, number = [], 1000 * seed
    day = make.first + timedelta(days=int(rng.integers(0, 5)))
    for week in range(weeks):
        day += timedelta(days=int(rng.choice([7, 7, 7, 7, 6, 8, 1, 21])))
        if rng.random() < 0.04:
            way = WAYS[rng.integers(0, len(WAYS))]
        if rng.random() < 0.03:
            beside = None if beside else WAYS[rng.integers(0, len(WAYS))]
        if rng.random() < 0.015:
            scanner = replace(scanner, software=f"V{rng.integers(1, 4)}", station=f"S{rng.integers(0, 3)}")
        if rng.random() < 0.01:
            version += 1
        acquisitions = []
        for used, phantom in (
            *[(way, "sphere-170")] * (1 + (rng.random() < 0.05)),
            *([(beside, "sphere-170")] if beside else []),
            *([(way, "cylinder-200")] if week % 3 == 0 else []),
        ):
            number += 1
            level = drift * week + (jump * 40 if week > 0.8 * weeks else 0)
            values = {
                "snr": 200 + level + 2 * rng.standard_normal(),
                "ghosting": (0.4 + 0.06 * rng.standard_normal(), 0.02, {"along_phase_encode": True}),
                "centre_frequency": 127.73 + 1e-6 * rng.standard_normal(),
                "scale_x": round(0.3 * rng.standard_normal(), 1),
                "setup_offset": 2.0,
            }
            for quantity in list(values):
                if rng.random() < 0.04:
                    del values[quantity]
            settings = replace(used, frequency_MHz=127.7 + rng.random())
            given = {"limits": LIMITS, "baselines": baselines(name, make), "scanner_name": name, "phantom": phantom}
            acquisitions.append(
                make.acquisition(number, day, values, settings=settings, scanner=scanner, method_version=version, **given)
            )
        found.append(make.session(day, *acquisitions))
    return found


def baselines(name, make):
    return (Baseline(name, "snr", 200.0, 0.5, 2.0, 10, make.first),)


def events_of(name, make, seed):
    rng = np.random.default_rng(100 + seed)
    kinds = ("service", "replacement", "downtime", "repair")
    return tuple(
        Event(
            name,
            make.first + timedelta(days=int(rng.integers(0, 700))),
            kinds[i % 4],
            f"visit {i}",
            [(), ("snr",), ("ghosting", "snr")][i % 3],
            restarts_baseline=bool(i % 2),
        )
        for i in range(6)
    )


@pytest.fixture(scope="module")
def seeds():
    return range(12)


def test_streams_from_columns_are_those_from_sessions(make, seeds):
    fleet = {f"scanner-{seed:02d}": a_history(make, seed, f"scanner-{seed:02d}") for seed in seeds}
    events = [event for seed, name in enumerate(fleet) for event in events_of(name, make, seed)]
    history, judged = columns_of([s for sessions in fleet.values() for s in sessions])
    found = scanner_streams(history, judged, events[::-1])
    assert list(found) == list(fleet)
    segments, side_by_side = 0, 0
    for name, sessions in fleet.items():
        wanted = streams(sessions, [e for e in events[::-1] if e.scanner_name == name])
        assert differences([light(s) for s in wanted], list(found[name].streams)) == []
        assert found[name].days == tuple(s.day for s in sessions)
        segments += sum(len(s.starts) for s in wanted)
        side_by_side += len(wanted) - len({(s.quantity, s.phantom) for s in wanted})
    assert segments > 300
    assert side_by_side > 20


def test_what_is_judged_is_the_same(make, seeds):
    fleet = {f"scanner-{seed:02d}": a_history(make, seed, f"scanner-{seed:02d}") for seed in seeds}
    events = {name: events_of(name, make, seed) for seed, name in enumerate(fleet)}
    history, judged = columns_of([s for sessions in fleet.values() for s in sessions])
    today = max(s.day for sessions in fleet.values() for s in sessions)
    found = scanner_streams(history, judged, [e for some in events.values() for e in some], today)
    charts = iter(control_charts([s for one in found.values() for s in one.streams]))
    standings = set()
    for name, sessions in fleet.items():
        grounds = Grounds(LIMITS, baselines(name, make), events[name], Schedule(7, 2), field_strength_T=3.0)
        one = found[name]
        many = assess_streams(name, one.streams, one.days, grounds, today, charts=[next(charts) for _ in one.streams])
        wanted = assess(name, sessions, grounds, today)
        assert differences(light(wanted), many) == []
        standings.add(many.standing)
    assert len(standings) >= 2


def test_nothing_after_the_day_is_looked_at(make):
    sessions = a_history(make, 3)
    history, judged = columns_of(sessions)
    events = events_of("north-3t", make, 3)
    for cut in (5, 40, 89):
        day = sessions[cut].day + timedelta(days=cut % 2)
        past = [s for s in sessions if s.day <= day]
        (one,) = scanner_streams(history, judged, events, day).values()
        wanted = streams(past, [e for e in events if e.day <= day])
        assert differences([light(s) for s in wanted], list(one.streams)) == []
        assert one.days == tuple(s.day for s in past)
    assert scanner_streams(history, judged, events, make.first - timedelta(days=1)) == {}


def test_a_session_without_figures_counts_as_a_session_and_no_session_gives_nothing(make):
    empty = make.session(make.first, make.acquisition(1, make.first, {}))
    (one,) = scanner_streams(*columns_of([empty])).values()
    assert (one.scanner_name, one.streams, one.days) == ("north-3t", (), (make.first,))
    assert scanner_streams(*columns_of([])) == {}


def test_settings_that_a_third_lies_between_are_numbered_in_the_order_in_which_they_came(make):
    # 500, 503 and 506 ms: neighbours are the same within 1 %, the ends are not; what came first decides.
    for order in ((0, 4, 5), (4, 0, 5), (5, 0, 4)):
        sessions = [
            make.session(day, make.acquisition(n, day, {"snr": n}, settings=WAYS[order[n % 3]]))
            for n in range(9)
            for day in [make.first + timedelta(weeks=n)]
        ]
        (one,) = scanner_streams(*columns_of(sessions)).values()
        assert differences([light(s) for s in streams(sessions)], list(one.streams)) == []


@pytest.mark.parametrize("rules", [ControlRules(), EVERYTHING, ControlRules(nelson=(), ewma=False), ControlRules(weight=0.1)])
def test_charts_made_at_once_are_those_made_one_by_one(make, rules):
    rng = np.random.default_rng(5)
    histories = []
    for n in range(60):
        size = int(rng.choice([1, 9, 10, 11, 30, 112, 113, 160, 250]))
        values = 100 + make.ar1(rng, 1, size, 0.4)[0] + rng.choice([0, 3]) * (np.arange(size) > 0.7 * size)
        values = [values, np.round(values), np.full(size, 7.0), 1e6 + 1e-9 * values][n % 4]
        values[rng.random(size) < 0.03] += 40
        gaps = rng.choice([7, 7, 7, 3, 8, 30, 400] if n % 2 else [7], size=size)
        stream = make.stream(values, days=date(2015, 1, 1).toordinal() + np.cumsum(gaps))
        cuts = sorted({int(c) for c in rng.integers(1, max(size, 2), size=n % 4) if c < size})
        histories.append(replace(stream, starts=(*stream.starts, *(replace(stream.starts[0], index=c) for c in cuts))))
    many = control_charts(histories, rules)
    one_by_one = [control_chart(s.days, s.values, [start.index for start in s.starts], rules) for s in histories]
    assert differences(one_by_one, many) == []
    assert differences(one_by_one[:3], control_charts(histories[:3], rules)) == []
    assert control_charts([], rules) == []
    assert sum(chart.out.any() for chart in many) > 5
