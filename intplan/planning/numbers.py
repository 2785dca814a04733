"""Exact numbers (ints and Fractions) as the plain Python numbers that users work with."""

from __future__ import annotations

from fractions import Fraction

from intplan.sheet.numbers import Number


def nearest(number: Number) -> int | float:
    """Return a whole number as an int, any other as its nearest double.

    A fraction beyond the range of doubles is rounded to a whole number.
    """
    if number.denominator == 1:
        return int(number)
    try:
        return float(number)
    except OverflowError:
        return round(number)


def has_short_decimal(number: Number) -> bool:
    """Tell whether the shortest decimal of the nearest double is the number itself."""
    close = nearest(number)
    return close == number if isinstance(close, int) else Fraction(repr(close)) == number
