import math
from datetime import date

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.judge import Context, conformity_probability, is_out, judge, why_not_judged
from qa.judge.decide import conformity
from qa.judge.limits import Bounds
from qa.records import Baseline, Limit, Measurement

DAY = date(2026, 11, 23)
WHERE = Context("north-3t", "sphere-170", DAY, coil="head", protocol="QA sphere", field_strength_T=3.0)


def measured(value, u=0.1, quantity="ghosting", unit="%", **details):
    return Measurement(quantity, value, unit, u, "method", 1, details=details)


@pytest.mark.parametrize(("value", "word"), [(2.4, "pass"), (2.5, "pass"), (2.500001, "fail"), (math.nan, "fail")])
def test_simple_acceptance_has_two_words_and_the_limit_itself_passes(value, word):
    verdict = judge(measured(value), [Limit("ghosting", upper=2.5, source="s", key="g")], WHERE)
    assert verdict.conformity == word
    assert (verdict.upper, verdict.lower, verdict.rule, verdict.source) == (2.5, None, "simple", "s")
    assert verdict.limit == "at most 2.5 %"
    assert verdict.limit_key == "g"
    assert verdict.guard_band == 0.0


@pytest.mark.parametrize(
    ("value", "word"),
    [
        (2.25, "pass"),
        (2.26, "conditional pass"),
        (2.5, "conditional pass"),
        (2.51, "conditional fail"),
        (2.75, "conditional fail"),
        (2.76, "fail"),
    ],
)
def test_guarded_rule_uses_all_four_words_with_a_guard_band_of_two_u(value, word):
    verdict = judge(measured(value, u=0.125), [Limit("ghosting", upper=2.5, rule="guarded")], WHERE)
    assert verdict.conformity == word
    assert verdict.guard_band == 0.25
    assert is_out(word) == (value > 2.5)


def test_the_worse_of_two_bounds_stands():
    narrow = Bounds(4.3, 5.7, "")
    assert conformity(4.3, 0.05, narrow, "guarded") == "conditional pass"
    assert conformity(5.75, 0.05, narrow, "guarded") == "conditional fail"
    assert conformity(5.0, 0.05, narrow, "guarded") == "pass"
    assert conformity(5.0, 0.5, narrow, "guarded") == "conditional pass"


def test_without_uncertainty_no_probability_is_claimed():
    assert judge(measured(2.4, u=0.0), [Limit("ghosting", upper=2.5)], WHERE).probability is None
    guarded = judge(measured(2.6, u=0.0), [Limit("ghosting", upper=2.5, rule="guarded")], WHERE)
    assert guarded.conformity == "fail"


def test_probability_of_a_value_at_its_limit_is_a_half_and_two_sided_ones_add_up():
    assert conformity_probability(2.5, 0.1, None, 2.5) == pytest.approx(0.5)
    assert conformity_probability(5.0, 0.35, 4.3, 5.7) == pytest.approx(0.9544997, abs=1e-7)
    assert conformity_probability(5.0, 0.0, 4.3, 5.7, u_lower=0.35, u_upper=0.35) == pytest.approx(0.9544997, abs=1e-7)


@given(
    value=st.floats(-10, 10),
    u=st.floats(0.01, 3),
    lower=st.floats(-5, 0),
    width=st.floats(0.01, 8),
    rule=st.sampled_from(["simple", "guarded"]),
)
def test_probability_and_words_agree(value, u, lower, width, rule):
    limit = Bounds(lower, lower + width, "")
    p = conformity_probability(value, u, lower, lower + width)
    word = conformity(value, u, limit, rule)
    assert 0.0 <= p <= 1.0
    if is_out(word):
        assert p < 0.5 + 1e-12
    if rule == "guarded" and word == "pass":
        assert p > 0.95


def test_warning_level_is_told_inside_the_limit_and_not_outside_it():
    limit = Limit("snr", lower_percent_of_baseline=90, warn_percent_of_baseline=95)
    where = Context("north-3t", "sphere-170", DAY, baselines=(Baseline("north-3t", "snr", 200.0, 1.0, 2.0, 10, DAY),))
    verdicts = [judge(measured(v, 1.0, "snr", "1"), [limit], where) for v in (200.0, 190.0, 180.0, 179.9)]
    assert [v.warned for v in verdicts] == [False, True, True, False]
    assert [v.conformity for v in verdicts] == ["pass", "pass", "pass", "fail"]
    assert verdicts[0].warn_lower == pytest.approx(190.0)
    assert verdicts[0].limit == "at least 90 % of the baseline, 200"


def test_the_baselines_own_uncertainty_widens_the_guard_band():
    limit = Limit("snr", lower_percent_of_baseline=90, rule="guarded")
    where = Context("north-3t", "sphere-170", DAY, baselines=(Baseline("north-3t", "snr", 200.0, 4.0, None, 10, DAY),))
    verdict = judge(measured(187.0, 3.0, "snr", "1"), [limit], where)
    assert verdict.guard_band == pytest.approx(2 * math.hypot(3.0, 3.6))
    assert verdict.conformity == "conditional pass"
    assert verdict.probability == pytest.approx(0.5 * math.erfc(-7.0 / math.hypot(3.0, 3.6) / math.sqrt(2)))


def test_no_verdict_says_why():
    assert judge(measured(1.0), [], WHERE) is None
    assert why_not_judged(measured(1.0), [], WHERE) == "no limit for ghosting fits north-3t with sphere-170"
    snr = Limit("snr", lower_percent_of_baseline=90)
    assert judge(measured(1.0, quantity="snr", unit="1"), [snr], WHERE) is None
    assert "there is no baseline of snr yet" in why_not_judged(measured(1.0, quantity="snr", unit="1"), [snr], WHERE)
    assert why_not_judged(measured(1.0), [Limit("ghosting", upper=2.5)], WHERE) is None
