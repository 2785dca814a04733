"""Exact numbers from text and floats, their limits, and their texts."""

from __future__ import annotations

import time
from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intplan.sheet.names import is_name
from intplan.sheet.numbers import (
    NumberError,
    exact,
    exact_number,
    fraction_number,
    fraction_text,
    from_float,
    integer_text,
    show,
    unsigned_number,
)


@pytest.mark.parametrize(
    "text, value",
    [
        ("3", 3),
        ("-3", -3),
        ("+0.25", Fraction(1, 4)),
        ("1e3", 1000),
        ("1E-3", Fraction(1, 1000)),
        ("2.50e+1", 25),
        (".5", Fraction(1, 2)),
        ("5.", 5),
        ("1_000.2_5", Fraction(4001, 4)),
        ("0e999999999", 0),
        ("-0.0", 0),
        ("0001", 1),
        ("1e0000000001", 10),
        ("11/5", Fraction(11, 5)),
        (" -6/4 ", Fraction(-3, 2)),
        ("1.7976931348623157e308", 17976931348623157 * 10**292),
        ("5e-324", Fraction(5, 10**324)),
    ],
)
def test_texts_are_read_exactly(text, value):
    number = exact_number(text)
    assert number == value
    assert type(number) is (int if number.denominator == 1 else Fraction)


@pytest.mark.parametrize(
    "text, message",
    [
        ("", "not a number"),
        (".", "not a number"),
        ("e3", "not a number"),
        ("nan", "not a number"),
        ("inf", "not a number"),
        ("1,5", "not a number"),
        ("1__0", "not a number"),
        ("--1", "not a number"),
        ("1/2/3", "not a number"),
        ("1.5/2", "not a number"),
        ("0x10", "not a number"),
        ("\u0663", "not a number"),
        ("1/0", "division by zero"),
        ("1.8e308", "larger than doubles"),
        ("1e999999999", "larger than doubles"),
        ("1e" + "9" * 100_000, "larger than doubles"),
        ("1e-325", "closer to zero"),
        ("1e-" + "9" * 100_000, "closer to zero"),
        ("9" * 401, "401 digits"),
        ("0." + "0" * 400 + "1", "402 digits"),
        ("9" * 310, "larger than doubles"),
        ("1/" + "9" * 5000, "more than 1,300 digits"),
        ("9" * 1200 + "/7", "larger than doubles"),
        ("1/" + "9" * 1200, "closer to zero"),
    ],
)
def test_texts_that_are_refused_at_once(text, message):
    started = time.perf_counter()
    with pytest.raises(NumberError, match=message):
        exact_number(text)
    assert time.perf_counter() - started < 0.5, "a huge integer was built"


def test_values_of_every_kind():
    assert exact(True) == 1
    assert exact(np.int8(-3)) == -3
    assert exact(np.uint64(2**63)) == 2**63
    assert exact(0.1) == Fraction(1, 10)
    assert exact(np.float64(0.1)) == Fraction(1, 10)
    assert exact(np.float32(0.1)) == Fraction(1, 10)
    assert exact(np.float16(0.1)) == Fraction(1, 10)
    assert exact(Decimal("1.10")) == Fraction(11, 10)
    assert exact(Fraction(6, 2)) == 3
    assert type(exact(Fraction(6, 2))) is int
    assert exact(1e23) == 10**23, "the shortest decimal, not the nearest binary value"


@pytest.mark.parametrize(
    "value",
    [float("nan"), float("inf"), -float("inf"), np.float32("nan"), Decimal("NaN"), "3", None,
     1j, np.complex128(1), np.datetime64("2031-01-01"), 10**400, -(10**4000), Fraction(1, 10**400)],
)  # fmt: skip
def test_values_that_are_no_numbers_of_a_sheet(value):
    with pytest.raises(NumberError):
        exact(value)


@settings(max_examples=300, derandomize=True)
@given(st.floats(allow_nan=False, allow_infinity=False))
def test_a_float_is_its_shortest_decimal(value):
    assert from_float(value) == Fraction(repr(value))


@settings(max_examples=200, derandomize=True)
@given(st.decimals(allow_nan=False, allow_infinity=False, min_value=-10**20, max_value=10**20))
def test_a_decimal_text_is_exact(value):
    try:
        found = exact_number(str(value))
    except NumberError:
        assert value != 0
        assert abs(value) < Decimal("1e-320")
        return
    assert found == Fraction(value)


@settings(max_examples=300, derandomize=True)
@given(st.fractions(max_denominator=10**9), st.integers(-60, 60))
def test_texts_read_back_as_the_same_number(value, power):
    value = value * Fraction(10) ** power
    number = value.numerator if value.denominator == 1 else value
    assert exact_number(show(number)) == number
    assert fraction_number(fraction_text(number)) == number
    if number >= 0 and "/" not in show(number):
        assert unsigned_number(show(number)) == number


@pytest.mark.parametrize(
    "value, text",
    [
        (0, "0"),
        (-12, "-12"),
        (Fraction(11, 5), "2.2"),
        (Fraction(-1, 8), "-0.125"),
        (Fraction(1, 3), "1/3"),
        (Fraction(-22, 7), "-22/7"),
        (10**15, "1e15"),
        (123 * 10**20, "123e20"),
        (10**14, "100000000000000"),
        (Fraction(1, 10**30), "1e-30"),
        (Fraction(1, 2**200), f"1/{2**200}"),
    ],
)
def test_the_shortest_exact_text(value, text):
    assert show(value) == text


def test_integers_beyond_the_interpreter_limit_have_texts():
    value = 7**9000
    text = integer_text(-value)
    assert text[0] == "-"
    assert len(text) > 7000
    rebuilt = 0
    for k in range(1, len(text), 4000):
        piece = text[k : k + 4000]
        rebuilt = rebuilt * 10 ** len(piece) + int(piece)
    assert rebuilt == value


@pytest.mark.parametrize(
    "name",
    ["a", "_", "loaf[mon]", "build[loaf,week-2]", "x[0]", "x[-1]", "x[_]", "\u00f6l", "a2_b",
     "\u65e5\u672c[\u6708]", "\u0939\u093f", "x" * 200],
)  # fmt: skip
def test_names(name):
    assert is_name(name)


@pytest.mark.parametrize(
    "name",
    ["", "2a", "a b", "a[]", "a[b", "a]", "[a]", "a[b][c]", "a[b,]", "a[,b]", "a[b, c]", "a-b",
     "a.b", "a\u00b2", "a\u00b7b", "a\n", "a\u2264", "a[\u2264]", "\u0301a", "x" * 201, "a\x00",
     "\u0663a", "a\u202e"],
)  # fmt: skip
def test_texts_that_are_no_names(name):
    assert not is_name(name)
