from dataclasses import replace
from datetime import date, timedelta

import numpy as np
import pytest

from qa.judge import Grounds, Schedule, assess
from qa.records import Baseline, Event, Limit, Settings

LIMITS = (
    Limit("ghosting", upper=2.5),
    Limit("snr", lower_percent_of_baseline=90, warn_percent_of_baseline=95),
    Limit("uniformity_piu", lower=82.0, rule="guarded"),
)


def usual(weeks, seed=1):
    rng = np.random.default_rng(seed)
    return [
        {
            "snr": 200 + 2 * rng.standard_normal(),
            "ghosting": (0.4 + 0.05 * rng.standard_normal(), 0.05, {"along_phase_encode": True}),
            "uniformity_piu": 90 + 0.3 * rng.standard_normal(),
            "centre_frequency": 127.73 + 1e-6 * rng.standard_normal(),
            "setup_offset": 2 + 0.8 * rng.standard_normal(),
        }
        for _ in range(weeks)
    ]


@pytest.fixture
def baseline(make):
    return Baseline("north-3t", "snr", 200.0, 0.5, 2.0, 10, make.first)


@pytest.fixture
def grounds(baseline):
    return Grounds(LIMITS, (baseline,))


def judged(make, values, grounds, today=None, **given):
    sessions = make.history(values, limits=grounds.limits, baselines=grounds.baselines, **given)
    return assess("north-3t", sessions, grounds, today or sessions[-1].day + timedelta(days=1))


def state(found, quantity):
    return next(s for s in found.quantities if s.quantity == quantity)


def test_a_steady_scanner_is_within_limits_and_silent(make, grounds):
    found = judged(make, usual(60), grounds)
    assert found.standing == "within limits"
    assert found.sentence == "Within limits in the session of 2025-02-17."
    assert (found.reasons, found.out, found.drifting, found.causes, found.remarks) == ((), (), (), (), ())
    assert [s.quantity for s in found.quantities] == ["snr", "uniformity_piu", "ghosting", "centre_frequency", "setup_offset"]
    assert found.due == date(2025, 2, 24)
    assert found.kept.percent == 100.0
    snr = state(found, "snr")
    assert snr.control == "in control"
    assert snr.chart.centre[-1] == pytest.approx(200.0, abs=0.6)
    assert snr.baseline.value == 200.0
    assert state(found, "centre_frequency").not_judged == "no limit for centre_frequency fits north-3t with sphere-170"


def test_out_of_limits_says_what_by_how_much_and_since_when(make, grounds):
    values = usual(40)
    for week in (37, 38, 39):
        values[week]["ghosting"] = (3.1, 0.05, {"along_phase_encode": True})
    found = judged(make, values, grounds)
    assert found.standing == "out of limits"
    assert found.out == ("ghosting",)
    assert found.sentence == "Out of limits: Percent signal ghosting is 3.10 %, limit at most 2.5 %, since 2024-09-16."
    assert state(found, "ghosting").out_since == date(2024, 9, 16)
    assert [c.name for c in found.causes][:1] == ["ghosts"]
    visit = Event("north-3t", date(2024, 9, 12), "service", "gradient cabinet filters changed")
    again = judged(make, values, replace(grounds, events=(visit,)))
    assert again.causes[0].name == "ghosts after service"
    assert "service on 2024-09-12: gradient cabinet filters changed" in again.causes[0].evidence
    healed = judged(make, values + usual(2, 9), grounds)
    assert (healed.standing, healed.out) == ("within limits", ())


def test_a_conditional_fail_is_out_and_a_conditional_pass_needs_a_person(make, grounds):
    values = usual(12)
    values[-1]["uniformity_piu"] = (81.9, 0.1, {})
    found = judged(make, values, grounds)
    assert found.out == ("uniformity_piu",)
    assert "conditional fail" in found.sentence
    values[-1]["uniformity_piu"] = (82.1, 0.1, {})
    found = judged(make, values, grounds)
    assert (found.standing, found.drifting) == ("drifting", ("uniformity_piu",))
    assert "within its limit (at least 82 %), but not with its expanded uncertainty" in found.reasons[0]


def test_a_warning_level_needs_a_person(make, grounds):
    values = usual(12)
    values[-1]["snr"] = 189.0
    found = judged(make, values, grounds)
    assert found.standing == "drifting"
    assert found.reasons[0] == (
        "Signal-to-noise ratio, two images is 189.0: at its warning level, limit at least 90 % of the baseline, 200"
    )


def test_a_slow_fall_is_flagged_before_it_fails_with_its_beginning_and_its_end(make, grounds):
    values = usual(70)
    for week in range(40, 70):
        values[week]["snr"] -= 0.5 * (week - 39)
        values[week]["uniformity_piu"] -= 0.15 * (week - 39)
    found = judged(make, values[:58], grounds)
    assert found.standing == "drifting"
    assert set(found.drifting) == {"snr", "uniformity_piu"}
    snr = state(found, "snr")
    assert snr.worse
    assert snr.forecast.limit == pytest.approx(180.0)
    assert snr.forecast.earliest <= make.first + timedelta(weeks=79) <= snr.forecast.latest
    assert snr.onset.kind == "ramp"
    assert snr.onset.earliest <= make.first + timedelta(weeks=40) <= snr.onset.latest
    assert snr.margin_used == pytest.approx(0.4, abs=0.1)
    assert found.causes[0].name == "receive element"
    flags = [judged(make, values[: n + 1], grounds).standing for n in range(38, 70)]
    assert flags.index("drifting") < 15
    assert "out of limits" not in flags


def test_what_gets_better_or_has_no_limit_is_shown_and_nobody_is_called(make, grounds):
    values = usual(60)
    for week in range(40, 60):
        values[week]["snr"] += 20.0
        values[week]["centre_frequency"] -= 1e-5
        values[week]["setup_offset"] += 8.0
    found = judged(make, values, grounds)
    assert found.standing == "within limits"
    assert found.out_of_control == ("snr", "centre_frequency", "setup_offset")
    assert state(found, "snr").rules == ("a session beyond the control limits", "the smoothed course beyond its limits")
    assert state(found, "snr").alarm_since == make.first + timedelta(weeks=40)


def test_without_a_baseline_a_lasting_fall_is_told_all_the_same(make, grounds):
    values = usual(60)
    for week in range(40, 60):
        values[week]["snr"] -= 15.0
    found = judged(make, values, replace(grounds, baselines=()))
    assert found.standing == "drifting"
    assert "there is no baseline of snr yet" in found.reasons[0]
    assert any("Signal-to-noise ratio, two images is not judged" in r for r in found.remarks)


def test_a_service_event_that_restarts_the_baseline_silences_the_charts_and_says_so(make, grounds):
    values = usual(60)
    for week in range(40, 60):
        values[week]["snr"] += 15.0
    event = Event(
        "north-3t", make.first + timedelta(weeks=40), "replacement", "new head coil", ("snr",), restarts_baseline=True
    )
    found = judged(make, values[:42], replace(grounds, events=(event,)))
    snr = state(found, "snr")
    assert (snr.control, snr.baseline) == ("still learning", None)
    assert found.remarks[0] == (
        "Signal-to-noise ratio, two images: charts start anew, because on 2024-10-07 the baseline was restarted: new head coil"
    )
    later = judged(make, values, replace(grounds, events=(event,)))
    assert state(later, "snr").control == "in control"


def test_a_changed_protocol_starts_a_segment_and_is_the_first_thing_to_look_at(make, grounds):
    values = usual(40)
    sessions = make.history(values[:38], limits=LIMITS, baselines=grounds.baselines)
    changed = Settings(protocol="QA", receive_coil="head", echo_ms=40.0)
    for week in (38, 39):
        day = make.first + timedelta(weeks=week)
        low = values[week] | {"snr": 150.0}
        sessions.append(
            make.session(day, make.acquisition(week, day, low, limits=LIMITS, baselines=grounds.baselines, settings=changed))
        )
    found = assess("north-3t", sessions, grounds, sessions[-1].day)
    assert found.out == ("snr",)
    assert state(found, "snr").control == "still learning"
    assert "protocol changed" in [c.name for c in found.causes]
    assert "charts start anew, because on 2024-09-23 echo time (ms) changed from unknown to 40" in found.remarks[0]


def test_overdue_counts_from_the_due_day_and_stands_behind_out_of_limits(make, grounds):
    values = usual(20)
    last = make.first + timedelta(weeks=19)
    found = judged(make, values, grounds, today=last + timedelta(days=12))
    assert (found.standing, found.days_overdue) == ("overdue", 5)
    assert found.sentence == "Overdue: the session due on 2024-05-20 is 5 days late; the last was on 2024-05-13."
    values[-1]["ghosting"] = 9.0
    both = judged(make, values, grounds, today=last + timedelta(days=12))
    assert both.standing == "out of limits"
    assert any("days late" in r for r in both.reasons)
    down = Event("north-3t", last + timedelta(days=2), "downtime", "cold head", until=last + timedelta(days=40))
    planned = judged(make, usual(20), replace(grounds, events=(down,)), today=last + timedelta(days=12))
    assert (planned.standing, planned.due) == ("within limits", last + timedelta(days=46))


def test_a_scanner_without_any_session(grounds):
    never = assess("new", [], grounds, date(2026, 1, 5))
    assert (never.standing, never.sentence) == ("overdue", "Overdue: no session has been taken in yet.")
    assert (never.last_session, never.due, never.quantities) == (None, None, ())
    coming = assess("new", [], replace(grounds, schedule=Schedule(since=date(2026, 1, 12))), date(2026, 1, 5))
    assert (coming.standing, coming.due) == ("within limits", date(2026, 1, 12))


def test_nothing_later_than_the_day_is_looked_at_and_other_scanners_are_left_out(make, grounds):
    values = usual(40)
    values[-1]["ghosting"] = 9.0
    sessions = make.history(values, limits=LIMITS, baselines=grounds.baselines)
    other = make.history([{"ghosting": 9.0}], limits=LIMITS, scanner_name="south")
    future = Event("north-3t", sessions[-1].day, "repair", "all new", restarts_baseline=True)
    today = sessions[-1].day - timedelta(days=1)
    found = assess("north-3t", sessions + other, replace(grounds, events=(future,)), today)
    assert (found.standing, found.last_session) == ("within limits", sessions[-2].day)
    assert state(found, "snr").baseline is not None


def test_what_is_out_stays_out_when_it_is_no_longer_measured(make, grounds):
    values = usual(30)
    values[20]["ghosting"] = 9.0
    for week in range(21, 30):
        del values[week]["ghosting"]
    found = judged(make, values, grounds)
    assert found.out == ("ghosting",)
    assert state(found, "ghosting").absent_since == make.first + timedelta(weeks=20)
    assert "has not been measured since 2024-05-20" in found.remarks[0]


def test_a_coil_that_is_no_longer_used_does_not_count(make, grounds):
    head = Settings(protocol="QA", receive_coil="head")
    body = replace(head, receive_coil="body")
    sessions = []
    for week, values in enumerate(usual(30)):
        day = make.first + timedelta(weeks=week)
        both = [make.acquisition(2 * week, day, values, limits=LIMITS, baselines=grounds.baselines, settings=head)]
        if week < 15:
            worse = {"ghosting": 9.0}
            both.append(make.acquisition(2 * week + 1, day, worse, limits=LIMITS, settings=body))
        sessions.append(make.session(day, *both))
    early = assess("north-3t", sessions[:15], grounds, sessions[14].day)
    late = assess("north-3t", sessions, grounds, sessions[-1].day)
    assert early.out == ("ghosting",)
    assert late.out == ()
    assert [s.superseded for s in late.quantities if s.stream.coil == "body"] == [True]


def test_a_limit_on_daily_change_gives_no_forecast(make):
    limits = (Limit("centre_frequency", per_day=1e-4),)
    values = [{"centre_frequency": 127.73 + 1e-5 * i + 1e-6 * (i % 3)} for i in range(60)]
    found = judged(make, values, Grounds(limits))
    frequency = state(found, "centre_frequency")
    assert frequency.trend.real
    assert (frequency.forecast, frequency.margin_used, frequency.drifting) == (None, None, ())
    assert found.standing == "within limits"


def test_the_same_input_gives_the_same_answer(make, grounds):
    first, second = judged(make, usual(50), grounds), judged(make, usual(50), grounds)
    assert first.sentence == second.sentence
    for a, b in zip(first.quantities, second.quantities, strict=True):
        assert np.array_equal(a.chart.smoothed, b.chart.smoothed, equal_nan=True)
        assert (a.trend, a.forecast, a.onset, a.shift) == (b.trend, b.forecast, b.onset, b.shift)


def two_phantoms(make, grounds, weeks, later=()):
    """A sphere every week, a cylinder every fourth; `later` replaces values from a week on: (week, phantom, values)."""
    sessions = []
    for week, values in enumerate(usual(weeks)):
        day = make.first + timedelta(weeks=week)
        parts = []
        for number, phantom in enumerate(("sphere-170", "cylinder-200")):
            if number and week % 4:
                continue
            changed = {k: v for start, where, new in later if week >= start and where == phantom for k, v in new.items()}
            parts.append(
                make.acquisition(
                    2 * week + number, day, values | changed, limits=LIMITS, baselines=grounds.baselines, phantom=phantom
                )
            )
        sessions.append(make.session(day, *parts))
    return sessions


def test_several_histories_of_a_quantity_are_told_apart_in_words(make, grounds):
    sessions = two_phantoms(make, grounds, 30, [(28, "cylinder-200", {"ghosting": 3.0})])
    found = assess("north-3t", sessions, grounds, sessions[-1].day)
    assert found.reasons == ("Percent signal ghosting on cylinder-200 is 3.00 %, limit at most 2.5 %",)
    assert found.out == ("ghosting",)
    assert {s.label for s in found.quantities if s.quantity == "snr"} == {
        "Signal-to-noise ratio, two images on cylinder-200",
        "Signal-to-noise ratio, two images on sphere-170",
    }


def test_a_repair_that_restarts_the_baseline_ends_what_drifted_or_failed_before_it(make, grounds):
    low = {"snr": 189.0, "ghosting": 3.0}
    sessions = two_phantoms(
        make, grounds, 31, [(28, "cylinder-200", low), (28, "sphere-170", low), (29, "sphere-170", usual(1)[0])]
    )
    before = assess("north-3t", sessions[:29], grounds, sessions[28].day)
    assert (before.out, before.drifting) == (("ghosting",), ("snr",))
    # The cylinder is not due again yet; the sphere is well since the repair.
    repair = Event("north-3t", sessions[28].day + timedelta(days=3), "repair", "coil and amplifier", restarts_baseline=True)
    mended = replace(grounds, events=(repair,))
    at_once = assess("north-3t", sessions[:29], mended, repair.day)
    assert (at_once.out, at_once.drifting) == (("ghosting",), ())
    after = assess("north-3t", sessions[:30], mended, sessions[29].day)
    assert (after.standing, after.out) == ("within limits", ())
    without = assess("north-3t", sessions[:30], grounds, sessions[29].day)
    assert without.out == ("ghosting",)


def test_a_slow_natural_drift_without_a_limit_is_not_explained_for_its_own_sake(make, grounds):
    values = usual(60)
    for week in range(60):
        values[week]["centre_frequency"] -= 2e-6 * week
    found = judged(make, values, grounds)
    assert found.standing == "within limits"
    assert found.causes == ()


def test_the_beginning_of_a_jump_that_goes_on_is_dated_and_stays_dated(make, grounds):
    values = usual(60)
    for week in range(30, 60):
        values[week]["ghosting"] = (0.9 + 0.04 * min(week - 30, 15), 0.05, {})
    day = make.first + timedelta(weeks=30)
    early, late = (state(judged(make, values[:n], grounds), "ghosting").onset for n in (45, 60))
    assert early.earliest <= day <= early.latest
    assert early.kind == "step and ramp"
    assert late == early
