"""Theil-Sen slope and Mann-Kendall test against scipy on the same series."""

import numpy as np
import pytest

from qa.judge.trend import mann_kendall, theil_sen


def series(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(8, 60))
    t = np.cumsum(rng.integers(1, 15, n)).astype(float)
    y = rng.normal(0, 1, n) + rng.normal(0, 0.02) * t
    return t, np.round(y, 1) if seed % 2 else y


@pytest.mark.parametrize("seed", range(40))
def test_theil_sen_is_that_of_scipy(seed):
    from scipy.stats import theilslopes

    t, y = series(seed)
    theirs = theilslopes(y, t, alpha=0.9)
    ours = theil_sen(t, y, 0.9)
    assert (ours.slope, ours.intercept) == pytest.approx((theirs.slope, theirs.intercept), rel=1e-12, abs=1e-12)
    assert (ours.lower, ours.upper) == pytest.approx((theirs.low_slope, theirs.high_slope), rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("seed", range(40))
def test_mann_kendall_is_kendalls_tau_against_time(seed):
    from scipy.stats import kendalltau, norm

    t, y = series(seed)
    theirs = kendalltau(t, y, method="asymptotic")
    ours = mann_kendall(y)
    assert ours.tau == pytest.approx(theirs.statistic, abs=1e-12)
    # scipy does not correct for continuity: undo the correction of one unit of the score.
    uncorrected = ours.z * ours.score / (ours.score - np.sign(ours.score)) if abs(ours.score) > 1 else None
    if uncorrected is not None:
        assert 2 * norm.sf(abs(uncorrected)) == pytest.approx(theirs.pvalue, rel=1e-9)
    assert ours.probability == pytest.approx(2 * norm.sf(abs(ours.z)), rel=1e-9)


def test_score_and_variance_counted_by_hand():
    # Four rising values: six pairs, all up; variance n (n - 1) (2 n + 5) / 18 = 8.667; z = (6 - 1) / 2.944.
    rising = mann_kendall([1.0, 2.0, 3.0, 5.0])
    assert (rising.score, rising.tau) == (6, pytest.approx(1.0))
    assert rising.z == pytest.approx(1.698, abs=5e-4)
    assert mann_kendall([5.0, 3.0, 2.0, 1.0]).z == pytest.approx(-1.698, abs=5e-4)
    assert mann_kendall([2.0, 2.0, 2.0, 2.0]).z == 0.0


def test_autocorrelation_widens_both():
    t, y = series(3)
    assert abs(mann_kendall(y, 2.0).z) == pytest.approx(abs(mann_kendall(y).z) / np.sqrt(2))
    plain, wide = theil_sen(t, y), theil_sen(t, y, inflated=2.0)
    assert wide.lower < plain.lower < plain.slope == wide.slope < plain.upper < wide.upper
