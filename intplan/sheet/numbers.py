"""Exact numbers: decimal text, floats and fractions in, ints and fractions out, within limits.

A whole number is always an int, so that arithmetic on it stays fast; everything else is a
`fractions.Fraction`. The limits are checked on the text, before a large integer is built.
"""

from __future__ import annotations

import math
import re
import sys
from collections.abc import Iterable
from decimal import Decimal
from fractions import Fraction
from functools import lru_cache

Number = int | Fraction

MOST_DIGITS = 400  # digits in one written number; every integer within doubles has at most 309
MOST_BITS = 4096  # of a numerator or denominator that arithmetic on written numbers may reach
MOST_FRACTION_DIGITS = 1300  # in p or q of p/q; a little more than `MOST_BITS` come to
LARGEST = int(sys.float_info.max)
SMALLEST = Fraction(1, 1 << 1074)  # the least positive double
MOST_SPREAD = 1000  # binary places between the numbers of one rule, so that doubles hold them all
EXACT_INTEGERS = 1 << 53

DIGITS = r"[0-9]+(?:_[0-9]+)*"
UNSIGNED = rf"(?:{DIGITS}(?:\.(?:{DIGITS})?)?|\.{DIGITS})(?:[eE][+-]?{DIGITS})?"
_PARTS = re.compile(
    rf"(?P<whole>(?:{DIGITS})?)(?:\.(?P<places>(?:{DIGITS})?))?(?:[eE](?P<power>[+-]?{DIGITS}))?"
)
_EXACT = re.compile(rf"\s*([+-]?)({UNSIGNED})\s*")
_FRACTION = re.compile(r"\s*([+-]?[0-9]+)(?:/([0-9]+))?\s*")


class NumberError(ValueError):
    """A text or value is no number that a sheet can hold; its message says why."""


def lowest(value: Number) -> Number:
    """Return `value` as an int when it is whole."""
    return value.numerator if value.denominator == 1 else value


@lru_cache(maxsize=8192)
def unsigned_number(text: str) -> Number:
    """Return the exact value of a decimal without a sign, such as ``0.25``, ``1e3``, ``1_000``.

    Raises
    ------
    NumberError
        Too many digits, or a value beyond what doubles hold.
    """
    parts = _PARTS.fullmatch(text)
    if parts is None or not (parts["whole"] or parts["places"]):
        raise NumberError("this is not a number")
    whole = parts["whole"].replace("_", "")
    places = (parts["places"] or "").replace("_", "")
    if len(whole) + len(places) > MOST_DIGITS:
        raise NumberError(
            f"a number of {len(whole) + len(places):,} digits; the limit is {MOST_DIGITS}"
        )
    significand = int(whole + places)
    if significand == 0:
        return 0
    power = _power(parts["power"]) - len(places)
    magnitude = len(str(significand)) + power
    if magnitude > 309:
        raise NumberError(too_large())
    if magnitude < -330:
        raise NumberError(too_small())
    if power >= 0:
        return fit(significand * 10**power)
    return fit(lowest(Fraction(significand, 10**-power)))


def _power(text: str | None) -> int:
    """Return a decimal exponent; a vast one as a million, which is refused all the same."""
    if text is None:
        return 0
    digits = text.lstrip("+-").replace("_", "").lstrip("0")
    size = int(digits or "0") if len(digits) <= 6 else 1_000_000
    return -size if text.startswith("-") else size


def exact_number(text: str) -> Number:
    """Return the exact value of a signed decimal or of a fraction ``p/q``.

    Raises
    ------
    NumberError
        The text is no number, has too many digits, or lies beyond what doubles hold.
    """
    parts = _EXACT.fullmatch(text)
    if parts is None:
        if "/" in text:
            return fraction_number(text)
        raise NumberError("this is not a number")
    value = unsigned_number(parts[2])
    return -value if parts[1] == "-" else value


def fraction_number(text: str, most_digits: int = MOST_FRACTION_DIGITS) -> Number:
    """Return the exact value of an integer or a fraction ``p/q``, as `fraction_text` writes it.

    Raises
    ------
    NumberError
        The text is no such number, too long, or lies beyond what doubles hold.
    """
    parts = _FRACTION.fullmatch(text)
    if parts is None:
        raise NumberError("this is not a number")
    if max(map(len, parts.groups(""))) > most_digits:
        raise NumberError(f"a number of more than {most_digits:,} digits")
    divisor = int(parts[2] or "1")
    if divisor == 0:
        raise NumberError("a division by zero")
    return fit(lowest(Fraction(int(parts[1]), divisor)))


def exact(value: object) -> Number:
    """Return a Python or NumPy number exactly; a float counts as its shortest decimal.

    Raises
    ------
    NumberError
        It is no number, not finite, or beyond what doubles hold.
    """
    if isinstance(value, int):
        return fit(int(value))
    if isinstance(value, Fraction):
        return fit(lowest(value))
    if type(value) is float:
        return from_float(value)
    if isinstance(value, Decimal):
        if not value.is_finite():
            raise NumberError(f"{value} is not a finite number")
        return exact_number(str(value))
    if hasattr(value, "dtype") and getattr(value, "shape", None) == ():
        return _from_scalar(value)
    raise NumberError(f"{_shown(value)} is not a number")


def _shown(value: object) -> str:
    return f"a value of type {type(value).__name__}"


def _from_scalar(value: object) -> Number:
    """Return a NumPy scalar exactly: a narrow or wide float by its own shortest decimal."""
    kind = value.dtype.kind  # type: ignore[attr-defined]
    if kind in "biu":
        return fit(int(value))  # type: ignore[call-overload]
    if kind != "f":
        raise NumberError(f"{_shown(value)} is not a number")
    text = str(value)
    if text.lstrip("-") in ("nan", "inf"):
        raise NumberError(f"{text} is not a finite number")
    return exact_number(text)


def from_float(value: float) -> Number:
    """Return the exact value of the shortest decimal that reads back as this double.

    Raises
    ------
    NumberError
        The value is nan or infinite.
    """
    if not math.isfinite(value):
        raise NumberError(f"{value} is not a finite number")
    if value.is_integer() and abs(value) <= EXACT_INTEGERS:
        return int(value)
    return exact_number(repr(value))


def fit(value: Number) -> Number:
    """Return `value` if doubles hold its magnitude and its exact form is not too long.

    Raises
    ------
    NumberError
        It is too large, too small or too long.
    """
    numerator, denominator = value.numerator, value.denominator
    if denominator == 1 and numerator.bit_length() <= 1023:
        return value
    if abs(numerator) > LARGEST * denominator:
        raise NumberError(too_large())
    if numerator and abs(numerator) * SMALLEST.denominator < denominator:
        raise NumberError(too_small())
    return short_enough(value)


def short_enough(value: Number) -> Number:
    """Return `value` unless its numerator or denominator has grown past `MOST_BITS`.

    Raises
    ------
    NumberError
        It has.
    """
    if max(value.numerator.bit_length(), value.denominator.bit_length()) > MOST_BITS:
        digits = round(MOST_BITS * math.log10(2), -2)
        raise NumberError(f"the exact value takes more than {digits:,.0f} digits")
    return value


def too_large() -> str:
    return "the number is larger than doubles hold (about 1.8e308)"


def too_small() -> str:
    return "the number is closer to zero than doubles can tell (about 4.9e-324)"


def check_spread(coefficients: Iterable[Number], limits: Iterable[Number]) -> None:
    """Make sure that a rule can be scaled: to integers of a sane length, and into doubles.

    Raises
    ------
    NumberError
        The common denominator is too long, or the numbers lie too far apart.
    """
    coefficients, limits = tuple(coefficients), tuple(limits)
    numbers = coefficients + limits
    if all(type(c) is int and -EXACT_INTEGERS <= c <= EXACT_INTEGERS for c in numbers):
        return
    short_enough(math.lcm(*(c.denominator for c in numbers)))
    sizes = [_binary_size(c) for c in coefficients if c]
    if not sizes:
        return
    largest = max(sizes)
    sizes += [_binary_size(limit) for limit in limits if limit]
    if max(abs(largest - size) for size in sizes) > MOST_SPREAD:
        raise NumberError("the numbers lie too far apart for doubles (more than a factor 1e300)")


def _binary_size(value: Number) -> int:
    return value.numerator.bit_length() - value.denominator.bit_length()


def show(value: Number) -> str:
    """Return an exact text of `value`: its decimal where that ends soon, else ``p/q``.

    The text reads back as the same number, in a sheet and in algebra.
    """
    if value.denominator == 1:
        return _show_integer(value.numerator)
    places = _decimal_places(value.denominator)
    if places is None:
        return fraction_text(value)
    digits = integer_text(abs(value.numerator) * 10**places // value.denominator)
    sign = "-" if value < 0 else ""
    if places <= 20:
        digits = digits.rjust(places + 1, "0")
        return f"{sign}{digits[:-places]}.{digits[-places:]}"
    if len(digits) <= 25:
        return f"{sign}{digits}e-{places}"
    return fraction_text(value)


def _show_integer(value: int) -> str:
    text = integer_text(value)
    bare = text.rstrip("0")
    zeros = len(text) - len(bare)
    return f"{bare}e{zeros}" if zeros >= 15 and value else text


def _decimal_places(denominator: int) -> int | None:
    """Return the number of decimal places of 1/denominator, None if they never end."""
    twos = (denominator & -denominator).bit_length() - 1
    rest = denominator >> twos
    fives = 0
    while rest > 1:
        rest, remainder = divmod(rest, 5)
        if remainder:
            return None
        fives += 1
    return max(twos, fives)


def fraction_text(value: Number) -> str:
    """Return the canonical exact text: an integer, or ``p/q`` in lowest terms."""
    if value.denominator == 1:
        return integer_text(value.numerator)
    return f"{integer_text(value.numerator)}/{integer_text(value.denominator)}"


def integer_text(value: int) -> str:
    """Return the decimal digits of an integer of any length, whatever the interpreter's limit."""
    if value.bit_length() < 2000:
        return str(value)
    if value < 0:
        return "-" + integer_text(-value)
    half = int(value.bit_length() * math.log10(2) / 2)
    upper, lower = divmod(value, 10**half)
    return integer_text(upper) + integer_text(lower).rjust(half, "0")
