from datetime import date
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.report.numbers import decimal_places, long_date, plain_number, rounded, with_unit


@pytest.mark.parametrize(
    ("value", "expanded", "written"),
    [
        # JCGM 100:2008, 7.2.2 and 7.2.6 (from memory): a mass of 100.021 47 g with U = 0.79 mg is written 100.021 47(79).
        (100.02147, 0.00079, ("100.02147", "0.00079")),
        (212.437, 3.84, ("212.4", "3.8")),
        (90.25, 0.7, ("90.25", "0.70")),
        (5.2575, 0.0995, ("5.26", "0.10")),
        (5.2575, 0.1, ("5.26", "0.10")),
        (9.996, 0.01, ("9.996", "0.010")),
        (5321.0, 1234.0, ("5300", "1200")),
        (1234.5, 12.0, ("1234", "12")),
        (1235.5, 99.7, ("1240", "100")),
        (-0.004, 0.02, ("\u22120.004", "0.020")),
        (-0.0004, 0.02, ("0.000", "0.020")),
        (2.5, 0.0, ("2.5", "")),
    ],
)
def test_values_are_written_to_the_second_digit_of_their_uncertainty(value, expanded, written):
    assert rounded(value, expanded, 1) == written


def test_halves_go_to_the_even_digit_of_what_is_stored():
    assert rounded(0.125, 0.25, 0)[0] == "0.12"
    assert rounded(0.135, 0.25, 0)[0] == "0.14"


@given(
    value=st.floats(-1e6, 1e6, allow_nan=False),
    expanded=st.floats(1e-6, 1e5, allow_nan=False),
)
def test_rounding_loses_at_most_a_twentieth_of_the_uncertainty(value, expanded):
    shown, spread = rounded(value, expanded, 2)
    number, u = Decimal(shown.replace("\u2212", "-")), Decimal(spread)
    assert len(u.normalize().as_tuple().digits) <= 2
    assert abs(u - Decimal(repr(expanded))) <= Decimal(repr(expanded)) * Decimal("0.0501")
    assert abs(number - Decimal(repr(value))) <= Decimal(repr(expanded)) * Decimal("0.0501")
    if "." in spread:
        assert len(shown.split(".")[1]) == len(spread.split(".")[1]) == decimal_places(expanded)


@pytest.mark.parametrize(
    ("value", "written"),
    [(2.5, "2.5"), (82.0, "82"), (-1e-7, "\u22120.0000001"), (127.728154, "127.728"), (1e7, "10000000"), (0.0, "0")],
)
def test_settings_show_no_digits_they_do_not_have(value, written):
    assert plain_number(value) == written


def test_units_stand_a_thin_space_off_but_degrees_close_up():
    assert with_unit("2.5", "%") == "2.5\u2009%"
    assert with_unit("90", "degrees") == "90°"
    assert with_unit("212", "1") == "212"


def test_dates_are_written_out():
    assert long_date(date(2026, 11, 3)) == "3 Nov 2026"
