"""Exact numbers as people read them: shortest decimals, thousands set apart, p/q, money."""

from __future__ import annotations

import re
from decimal import ROUND_CEILING, ROUND_FLOOR, Context, Decimal
from fractions import Fraction

from intplan.errors import printable
from intplan.planning.numbers import has_short_decimal, nearest
from intplan.sheet import Sheet
from intplan.sheet.numbers import Number, fraction_text

LONGEST = 26  # characters of a number in a report, beyond which it is rounded and said to be so
CURRENCY = re.compile(r"[A-Z]{3}|[$€£¥]")  # the form of an ISO 4217 code, or a sign


def readable(number: Number, places: int = 0) -> str:
    """Write a number for a report.

    Parameters
    ----------
    number : the exact number
    places : digits after the point to fill up to, where there are any (money: 2)

    Returns
    -------
    The shortest decimal with its thousands set apart; where there is none, ``p/q`` with its
    rounding beside it; where that is too long, the rounding alone, after the word "about".
    """
    if has_short_decimal(number):
        text = _grouped(number, places)
        if len(text) <= LONGEST:
            return text
    rounding = _rounded(number)
    if Fraction(rounding) == number:
        return rounding
    ratio = fraction_text(number)
    if number.denominator > 1 and len(ratio) <= LONGEST:
        return f"{ratio} (about {rounding})"
    return f"about {rounding}"


def brief(number: Number) -> str:
    """Write a number for a crowded place: where there is no short decimal, its rounding alone."""
    text = readable(number)
    return f"about {_rounded(number)}" if "/" in text else text


def signed(text: str) -> str:
    """Put a plus before the digits of a number that is written out: ``about +1.5e30``."""
    return f"about +{text.removeprefix('about ')}" if text.startswith("about ") else f"+{text}"


def amount(number: Number, measure: str = "") -> str:
    """Write a number with its unit; money gets two digits after the point where it has any."""
    places = 2 if CURRENCY.fullmatch(measure) else 0
    digits, bracket, rounding = readable(number, places).partition(" (")
    return f"{digits} {measure}".rstrip() + bracket + rounding


def value_text(sheet: Sheet, value: Number) -> str:
    """Write a value of the aim with its unit."""
    return amount(value, printable(sheet.measure))


def bound_text(sheet: Sheet, bound: Number, measured: bool = True) -> str:
    """Write what no plan can pass, rounded outward, with the aim's unit if `measured`."""
    rounded = rounded_outward(bound, sheet.aim.sense == "maximize")
    return amount(rounded, printable(sheet.measure) if measured else "")


def rounded_outward(bound: Number, upward: bool, digits: int = 7) -> Number:
    """Round a bound to a few digits without making it claim more than it did.

    Parameters
    ----------
    bound : what no plan can pass
    upward : plans lie below it
    digits : digits to keep; whole numbers of up to 15 digits are left alone
    """
    if bound.denominator == 1 and abs(bound) < 10**15:
        return bound
    context = Context(prec=digits, rounding=ROUND_CEILING if upward else ROUND_FLOOR)
    return Fraction(context.divide(Decimal(bound.numerator), Decimal(bound.denominator)))


def _grouped(number: Number, places: int) -> str:
    close = nearest(number)
    decimal = Decimal(close if isinstance(close, int) else repr(close))
    digits = -int(decimal.as_tuple().exponent)
    return format(decimal, f",.{max(digits, places)}f" if digits > 0 else ",f")


def _rounded(number: Number) -> str:
    """Write up to six digits of any rational, also beyond the range of doubles."""
    value = Decimal(number.numerator) / Decimal(number.denominator)
    size = value.adjusted()
    if -5 <= size < 9:
        text = format(value, f".{max(5 - size, 0)}f")
        return text.rstrip("0").rstrip(".") if "." in text else text
    digits, power = format(value, ".5e").split("e")
    return f"{digits.rstrip('0').rstrip('.')}e{int(power)}"
