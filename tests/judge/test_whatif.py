from dataclasses import replace
from datetime import timedelta

from qa.judge import altered_verdicts
from qa.records import Baseline, Event, Limit

LIMITS = (Limit("ghosting", upper=2.5),)


def test_the_same_limits_alter_nothing_and_stricter_ones_what_they_should(make):
    sessions = make.history([{"ghosting": 0.5 + 0.1 * week, "snr": 200} for week in range(20)], limits=LIMITS)
    assert altered_verdicts(sessions, LIMITS) == ()
    found = altered_verdicts(sessions, (Limit("ghosting", upper=1.95),))
    # 0.5 + 0.1 week lies above 1.95 from week 15 on.
    assert [a.day for a in found] == [make.first + timedelta(weeks=w) for w in range(15, 20)]
    assert {(a.was.conformity, a.would_be.conformity) for a in found} == {("pass", "fail")}
    assert found[0].measurement.quantity == "ghosting"
    assert found[0].acquisition == 15


def test_limits_that_come_go_or_only_warn_are_told(make):
    sessions = make.history([{"ghosting": 2.0, "snr": 200}], limits=LIMITS)
    gone = altered_verdicts(sessions, ())
    assert [(a.was.conformity, a.would_be) for a in gone] == [("pass", None)]
    warned = altered_verdicts(sessions, (replace(LIMITS[0], warn_upper=1.5),))
    assert [(a.was.warned, a.would_be.warned) for a in warned] == [(False, True)]
    more = altered_verdicts(sessions, (*LIMITS, Limit("snr", lower=250)))
    assert [(a.measurement.quantity, a.was, a.would_be.conformity) for a in more] == [("snr", None, "fail")]


def test_each_figure_is_judged_with_the_baseline_of_its_day(make):
    sessions = make.history([{"snr": 200}] * 6)
    limits = (Limit("snr", lower_percent_of_baseline=90),)
    early = Baseline("north-3t", "snr", 200.0, 1.0, None, 2, make.first)
    late = replace(early, value=230.0, since=make.first + timedelta(weeks=4))
    found = altered_verdicts(sessions, limits, (early, late))
    assert [a.would_be.conformity for a in found] == ["pass"] * 4 + ["fail"] * 2
    ended = Event("north-3t", make.first + timedelta(weeks=2), "repair", "coil", restarts_baseline=True)
    found = altered_verdicts(sessions, limits, (early,), (ended,))
    assert len(found) == 2


def test_change_a_day_is_taken_from_the_session_before(make):
    sessions = make.history([{"centre_frequency": 127.0}, {"centre_frequency": 127.5}])
    found = altered_verdicts(sessions, (Limit("centre_frequency", per_day=0.05),))
    assert [(a.day, a.would_be.conformity) for a in found] == [(make.first + timedelta(weeks=1), "fail")]


def test_true_values_serve_lengths(make):
    sessions = make.history([{"length_0": 167.0}])
    limits = (Limit("length_*", plus_minus=2.0),)
    assert altered_verdicts(sessions, limits) == ()
    found = altered_verdicts(sessions, limits, true_values={"sphere-170": {"length_0": 170.0}})
    assert found[0].would_be.conformity == "fail"


def test_a_cross_sections_own_diameter_and_the_departments_field_strength_count(make):
    stated = {"length_0": 167.0, "scale_x": (0.0, 0.1, {"true_diameter_mm": 168.0})}
    sessions = make.history([stated])
    limits = (Limit("length_*", plus_minus=2.0),)
    found = altered_verdicts(sessions, limits, true_values={"sphere-170": {"length_0": 170.0}})
    assert [a.would_be.conformity for a in found] == ["pass"]
    only = (Limit("length_0", field_strength_T=7.0, lower=0.0),)
    assert altered_verdicts(sessions, only) == ()
    assert len(altered_verdicts(sessions, only, field_strengths_T={"north-3t": 7.0})) == 1
