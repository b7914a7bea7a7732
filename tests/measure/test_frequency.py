import math

import pytest


@pytest.mark.parametrize(
    ("header", "resolution"),
    [(127.732435554, 1e-6), (123.25483, 1e-5), (63.866, 1e-3), (127.7262591, 1e-6), (64.0, 1.0)],
)
def test_as_good_as_the_last_decimal_but_no_better_than_1_hz(scan, work, altered, header, resolution):
    frequency = work(altered(scan(), settings={"frequency_MHz": header})).found["centre_frequency"]
    assert frequency.value == header
    assert frequency.standard_uncertainty == pytest.approx(resolution / math.sqrt(12))


@pytest.mark.parametrize("header", [None, 0.0, -1.0, math.nan, math.inf])
def test_a_header_without_a_frequency(scan, work, altered, header):
    done = work(altered(scan(), settings={"frequency_MHz": header}))
    assert done.reason("centre_frequency") == "the header does not state the imaging frequency"
