"""How figures are written: rounding by uncertainty, units, dates.

A value is written to the decimal place of the second significant digit of its expanded uncertainty (JCGM 100:2008, 7.2.6),
rounded half to even on the exact decimal digits of the stored number. The minus sign is U+2212 and a thin space, U+2009,
stands between number and unit.
"""

from datetime import date
from decimal import ROUND_HALF_EVEN, Decimal

__all__ = [
    "COVERAGE_FACTOR",
    "MINUS",
    "THIN_SPACE",
    "decimal_places",
    "long_date",
    "plain_number",
    "rounded",
    "short_date",
    "typeset_unit",
    "with_unit",
]

COVERAGE_FACTOR = 2
"""k of the expanded uncertainty; about 95 % coverage for a normal distribution."""

THIN_SPACE = "\u2009"
MINUS = "\u2212"
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
_UNITS = {"1": "", "degrees": "°"}
_CLOSED_UP = {"°"}


def _quantised(value: float, exponent: int) -> Decimal:
    return Decimal(repr(float(value))).quantize(Decimal(1).scaleb(exponent), rounding=ROUND_HALF_EVEN)


def _digits(number: Decimal, exponent: int) -> str:
    text = f"{number:.{max(0, -exponent)}f}"
    if text.startswith("-"):
        return text[1:] if not number else MINUS + text[1:]
    return text


def _last_place(expanded: float) -> int:
    """Exponent of ten of the second significant digit of an uncertainty once it is rounded to two."""
    exponent = Decimal(repr(float(expanded))).adjusted() - 1
    return exponent + 1 if _quantised(expanded, exponent).adjusted() > exponent + 1 else exponent


def decimal_places(expanded: float) -> int:
    """Decimals that a value with this expanded uncertainty is written with; 0 for an uncertainty of 10 or more."""
    return max(0, -_last_place(expanded))


def rounded(value: float, expanded: float, decimals: int) -> tuple[str, str]:
    """Write a value and its expanded uncertainty.

    Parameters
    ----------
    value, expanded : float
        The value and its expanded uncertainty, in the same unit; both finite, the uncertainty not negative.
    decimals : int
        Decimals of the value where the uncertainty is zero and cannot tell.

    Returns
    -------
    tuple of str
        The value, rounded to the uncertainty's second significant digit, and the uncertainty to two significant digits; the
        latter is empty where it is zero.
    """
    if not expanded > 0:
        return _digits(_quantised(value, -decimals), -decimals), ""
    exponent = _last_place(expanded)
    return _digits(_quantised(value, exponent), exponent), _digits(_quantised(expanded, exponent), exponent)


def plain_number(value: float, significant: int = 6) -> str:
    """Write an exact setting (a limit, a thickness) with no more digits than it has, at most `significant`."""
    text = f"{float(value):.{significant}g}"
    if "e" in text:
        text = f"{Decimal(text):f}"
    return MINUS + text[1:] if text.startswith("-") else text


def typeset_unit(unit: str) -> str:
    """Write a unit as print shows it: nothing for a ratio, a sign for degrees."""
    return _UNITS.get(unit, unit)


def with_unit(number: str, unit: str) -> str:
    """Put a unit behind a number that is already written."""
    shown = typeset_unit(unit)
    if not shown:
        return number
    return number + shown if shown in _CLOSED_UP else f"{number}{THIN_SPACE}{shown}"


def short_date(day: date) -> str:
    """Day and month: 23 Nov."""
    return f"{day.day} {_MONTHS[day.month - 1]}"


def long_date(day: date) -> str:
    """Day, month and year: 23 Nov 2026."""
    return f"{short_date(day)} {day.year}"
