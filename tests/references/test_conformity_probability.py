"""Conformity probability against figures printed elsewhere."""

import pytest

from qa.judge import conformity_probability


def test_breakdown_voltage_of_a_zener_diode():
    # JCGM 106:2012, the example of a one-sided upper limit (from memory, recomputed): limit -5.40 V, measured -5.47 V with
    # a standard uncertainty of 0.05 V; the guide prints 0.92.
    assert round(conformity_probability(-5.47, 0.05, upper=-5.40), 2) == 0.92


@pytest.mark.parametrize("z", [-2.5, -1.0, 0.0, 0.3, 1.4, 3.0])
def test_normal_distribution_of_scipy(z):
    from scipy.stats import norm

    assert conformity_probability(1.0 + 0.2 * z, 0.2, lower=1.0) == pytest.approx(norm.cdf(z), abs=1e-12)
    assert conformity_probability(1.0 + 0.2 * z, 0.2, lower=0.9, upper=1.3) == pytest.approx(
        norm.cdf(1.3, 1.0 + 0.2 * z, 0.2) - norm.cdf(0.9, 1.0 + 0.2 * z, 0.2), abs=1e-12
    )
