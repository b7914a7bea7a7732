import numpy as np
import pytest

from qa.judge.student import normal_score, normal_scores, student_bound


@pytest.mark.parametrize("freedom", [6.0, 9.0, 20.0, 103.0])
def test_scores_are_those_of_students_distribution(freedom):
    from scipy.stats import norm, t

    values = np.linspace(-8, 8, 33)
    exact = norm.isf(t.sf(np.abs(values), freedom)) * np.sign(values)
    found = np.array([normal_score(v, freedom) for v in values])
    assert np.allclose(found, exact, rtol=0.007, atol=1e-9)
    assert np.allclose(normal_scores(values, freedom), found, rtol=1e-12)
    assert np.allclose([student_bound(z, np.array(freedom)) for z in found], values, atol=1e-9)
