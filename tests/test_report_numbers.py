"""Numbers as people read them: exact wherever that is short, and said to be rounded where not."""

from fractions import Fraction

import pytest

from intplan.planning.numbers import has_short_decimal, nearest
from intplan.report.numbers import amount, bound_text, brief, readable, rounded_outward, signed
from intplan.sheet import Sheet
from tests.bakery import BAKERY, SOFT


@pytest.mark.parametrize(
    ("number", "text"),
    [
        (0, "0"),
        (-12345678, "-12,345,678"),
        (2**60 + 1, "1,152,921,504,606,846,977"),
        (10**30, "1e30"),
        (Fraction(18137, 5), "3,627.4"),
        (Fraction(-1, 8), "-0.125"),
        (Fraction(1, 10**7), "0.0000001"),
        (Fraction(1, 10**300), "1e-300"),
        (Fraction(11, 3), "11/3 (about 3.66667)"),
        (Fraction(-1, 3), "-1/3 (about -0.333333)"),
        (Fraction(10**30 + 1, 10**30), "about 1"),
        (Fraction(10**400, 3), "about 3.33333e399"),
        (3**60, "about 4.23912e28"),
    ],
)
def test_readable(number, text):
    assert readable(number) == text


@pytest.mark.parametrize(
    ("number", "text"),
    [
        (Fraction(-5, 2), "-2.5"),
        (12345, "12,345"),
        (Fraction(-1, 3), "about -0.333333"),
        (Fraction(10**30 + 1, 10**30), "about 1"),
        (10**30, "1e30"),
    ],
)
def test_brief(number, text):
    assert brief(number) == text


def test_readable_beyond_what_str_takes():
    assert readable(10**5000) == "1e5000"


@pytest.mark.parametrize(
    ("number", "measure", "text"),
    [
        (Fraction(396, 10), "EUR", "39.60 EUR"),
        (Fraction(123456789, 1000), "EUR", "123,456.789 EUR"),
        (2775, "EUR", "2,775 EUR"),
        (Fraction(5, 2), "€", "2.50 €"),
        (Fraction(5, 2), "hours", "2.5 hours"),
        (Fraction(5, 2), "", "2.5"),
        (Fraction(11, 3), "EUR", "11/3 EUR (about 3.66667)"),
    ],
)
def test_amounts_of_money_have_two_places(number, measure, text):
    assert amount(number, measure) == text


@pytest.mark.parametrize(
    ("number", "text"),
    [
        (Fraction(5, 2), "+2.50 EUR"),
        (Fraction(1, 3), "+1/3 EUR (about 0.333333)"),
        (Fraction(10**30, 7), "about +1.42857e29 EUR"),
    ],
)
def test_a_gain_has_its_plus_before_its_digits(number, text):
    assert signed(amount(number, "EUR")) == text


def test_nearest_numbers_for_readers_of_json():
    assert nearest(Fraction(8, 4)) == 2 and type(nearest(Fraction(8, 4))) is int
    assert nearest(Fraction(1, 3)) == 1 / 3
    assert nearest(Fraction(10**400, 3)) == round(Fraction(10**400, 3))


@pytest.mark.parametrize(
    ("number", "short"),
    [
        (7, True),
        (Fraction(11, 5), True),
        (Fraction(1, 3), False),
        (Fraction(1, 2**60), False),
        (Fraction("0.1000000000000000000001"), False),
    ],
)
def test_short_decimals(number, short):
    assert has_short_decimal(number) is short


def test_bounds_are_rounded_away_from_plans():
    assert rounded_outward(2801, upward=True) == 2801
    assert rounded_outward(Fraction(8404, 3), upward=True) == Fraction("2801.334")
    assert rounded_outward(Fraction(8404, 3), upward=False) == Fraction("2801.333")
    assert bound_text(Sheet.parse(BAKERY), Fraction(8404, 3)) == "2,801.334 EUR"
    assert bound_text(Sheet.parse(SOFT), Fraction(8404, 3), measured=False) == "2,801.333"
