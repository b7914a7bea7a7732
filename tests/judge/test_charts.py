import numpy as np
import pytest

from qa.judge.charts import individuals, nelson

# Nelson 1984, written down here a second time: for each test a series that trips it and where (counted from 0), and one that
# just does not.
TRIPS = {
    1: ([0.0, 3.01], 1),
    2: ([-1.0, *[0.1] * 9], 9),
    3: ([5.0, 1.0, 1.1, 1.2, 1.3, 1.4, 1.5], 6),
    4: ([0.5, 0.5, *[0.1, 0.4] * 7], 14),
    5: ([2.1, 0.0, 2.1], 2),
    6: ([1.1, 1.1, 0.0, 1.1, 1.1], 4),
    7: ([2.0, *[0.5, -0.5] * 8], 15),
    8: ([0.0, *[1.1, -1.1] * 4], 8),
}
JUST_NOT = {
    1: [0.0, 3.0, -3.0],
    2: [-1.0, *[0.1] * 8, -0.1, *[0.1] * 8],
    3: [5.0, 1.0, 1.1, 1.2, 1.3, 1.4, 1.4, 1.5],
    4: [0.5, 0.5, *[0.1, 0.4] * 6, 0.5, *[0.1, 0.4] * 5, 0.1],
    5: [2.1, 0.0, 0.0, 2.1, 0.0, -2.1],
    6: [1.1, 1.1, 0.0, 1.1, 0.0, 1.1, -1.1, 1.1],
    7: [2.0, *[0.5, -0.5] * 7, 1.0, *[0.5, -0.5] * 7],
    8: [0.0, *[1.1, -1.1] * 3, 1.1, 1.0, *[1.1, -1.1] * 3],
}


@pytest.mark.parametrize("test", range(1, 9))
@pytest.mark.parametrize("sign", [1, -1])
def test_each_of_nelsons_tests_trips_where_it_should_and_just_not(test, sign):
    series, where = TRIPS[test]
    tripped = nelson(sign * np.array(series), (test,))[test]
    assert np.flatnonzero(tripped).tolist()[:1] == [where]
    assert not nelson(sign * np.array(JUST_NOT[test]), (test,))[test].any()


@pytest.mark.parametrize("test", [1, 2, 5, 6, 8])
def test_false_alarms_of_nelsons_tests_on_independent_normal_values(test):
    # Closed forms: test 1 is 2 (1 - Phi(3)); test 2 is 2 / 2^9; test 5 is, for the completing point beyond and one or both
    # of two others, 2 p (1 - (1 - p)^2) with p = 1 - Phi(2); test 6 likewise with p = 1 - Phi(1), three or more of
    # four others; test 8 is (2 p)^8 with p = 1 - Phi(1).
    from scipy.stats import norm

    p2, p1 = norm.sf(2), norm.sf(1)
    exact = {
        1: 2 * norm.sf(3),
        2: 2 * 0.5**9,
        5: 2 * p2 * (1 - (1 - p2) ** 2),
        6: 2 * p1 * (4 * p1**3 * (1 - p1) + p1**4),
        8: (2 * p1) ** 8,
    }[test]
    z = np.random.default_rng(test).standard_normal(1_000_000)
    seen = nelson(z, (test,))[test].mean()
    # Runs come in clusters: allow for a variance three times that of independent alarms.
    assert seen == pytest.approx(exact, abs=4 * np.sqrt(3 * exact / z.size))


def test_wrong_calls_are_named():
    with pytest.raises(ValueError, match="numbered 1 to 8, got 9"):
        nelson([0.0], (1, 9))
    with pytest.raises(ValueError, match="needs two values, got 1"):
        individuals([1.0])


def test_an_empty_series_trips_nothing():
    assert all(where.size == 0 for where in nelson([]).values())
