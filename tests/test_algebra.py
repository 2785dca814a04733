"""Algebra: exact coefficients, the right errors at the right place, and back to text."""

from __future__ import annotations

import random
from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intplan.errors import SheetError
from intplan.sheet.algebra import (
    MOST_NESTED,
    parse_aim,
    parse_limits,
    parse_rule,
    write_rule,
    write_sum,
)

NAMES = ("loaf", "roll", "work[mon]", "build[loaf,week-2]", "öl")
INDEX = {name: j for j, name in enumerate(NAMES)}


def rule(text):
    return parse_rule(text, INDEX, "here")


def error(text, parse=parse_rule):
    """Return the message about a text, which must be one line."""
    with pytest.raises(SheetError) as caught:
        parse(text, INDEX, "here")
    assert caught.value.where == "here"
    assert "\n" not in str(caught.value)
    return caught.value.message


@pytest.mark.parametrize(
    "text, terms, least, most",
    [
        ("loaf <= 3", ((0, 1),), None, 3),
        ("3 >= loaf", ((0, -1),), -3, None),
        ("loaf >= 3*roll", ((0, 1), (1, -3)), 0, None),
        ("0.1*loaf + 0.2*roll <= 0.3", ((0, Fraction(1, 10)), (1, Fraction(1, 5))), None,
         Fraction(3, 10)),
        ("6 <= loaf + roll <= 9", ((0, 1), (1, 1)), 6, 9),
        ("9 >= loaf + roll >= 6", ((0, 1), (1, 1)), 6, 9),
        ("1 <= loaf + 5 <= 2 + 7", ((0, 1),), -4, 4),
        ("loaf = roll", ((0, 1), (1, -1)), 0, 0),
        ("loaf + roll <= 4 + loaf", ((1, 1),), None, 4),
        ("2*(loaf - (roll - 1))/4 >= 1", ((0, Fraction(1, 2)), (1, Fraction(-1, 2))),
         Fraction(1, 2), None),
        ("-loaf*3 + +2*-roll <= - -1e1", ((0, -3), (1, -2)), None, 10),
        ("work[mon] - build[loaf,week-2] <= 0", ((2, 1), (3, -1)), None, 0),
        ("öl <= 1_000", ((4, 1),), None, 1000),
        ("o\u0308l <= .5", ((4, 1),), None, Fraction(1, 2)),
        ("loaf\n  + roll\n  <= 3.", ((0, 1), (1, 1)), None, 3),
        ("roll/3 + roll/7 <= 1", ((1, Fraction(10, 21)),), None, 1),
        ("(roll - roll + 2)*loaf <= 1", ((0, 2),), None, 1),
        ("loaf/(roll - roll + 2) <= 1", ((0, Fraction(1, 2)),), None, 1),
    ],
)  # fmt: skip
def test_rules_are_read_exactly(text, terms, least, most):
    assert rule(text) == (terms, least, most, None)


def test_whole_values_are_ints():
    parsed = rule("0.5*loaf + 0.5*loaf + 2e0*roll <= 7/3 + 2/3")
    assert [type(c) for _, c in parsed.terms] == [int, int]
    assert type(parsed.most) is int


@pytest.mark.parametrize(
    "text, holds",
    [
        ("3 <= 5", True),
        ("5 <= 3", False),
        ("loaf - loaf = 0", True),
        ("loaf >= loaf + 1", False),
        ("1 <= 2 <= 3", True),
        ("1 <= 4 <= 3", False),
        ("5 <= 4 <= 3", False),
        ("3 >= 2 >= 1", True),
    ],
)
def test_rules_of_constants_are_settled(text, holds):
    assert rule(text).terms == ()
    assert rule(text).holds is holds


@pytest.mark.parametrize(
    "text, message",
    [
        # relations
        ("loaf < 3", 'column 6: "<" is not a relation of rules; write <= (at "< 3")'),
        ("loaf > 3", 'column 6: ">" is not a relation of rules; write >= (at "> 3")'),
        ("loaf == 3", 'column 6: "==" is not a relation of rules; write = (at "== 3")'),
        ("loaf =< 3", 'column 6: "=<" is not a relation of rules; write <= (at "=< 3")'),
        ("loaf != 3", 'column 6: "!=" is not a relation of rules; the relations are'),
        ("2 <= loaf >= 3", "column 11: the two relations of a chain point the same way, as"),
        ("2 <= loaf = 3", "column 11: = cannot be part of a chain; write two rules"),
        ("1 <= loaf <= 2 <= 3", "column 16: a rule has one relation, or a chain of two"),
        ("roll <= loaf <= 3", "column 6: the outer parts of a chain are numbers"),
        ("9 <= loaf <= 6", "column 11: no value is at least 9 and at most 6"),
        ("loaf + roll", "column 12: a rule needs a relation: <=, >= or ="),
        # names
        ("loaf + rol <= 3", 'column 8: unknown name "rol"; did you mean "roll"? (at "rol <= 3")'),
        ("loaf\n+ rol\n<= 3", 'line 2 of the text, column 3: unknown name "rol"'),
        ("work[tue] <= 3", 'column 1: unknown name "work[tue]"; did you mean "work[mon]"?'),
        ("build[loaf, week-2] <= 3", "column 6: brackets hold an index right behind a name"),
        ("work [mon] <= 3", "column 6: brackets hold an index right behind a name"),
        ("loaf <= inf", "column 9: inf has no place in algebra"),
        ("__import__('os') <= 3", 'column 1: unknown name "__import__"'),
        # not linear
        ("loaf*roll <= 3", "column 5: a product of activities is not linear"),
        ("3/loaf <= 3", "column 2: a division by an activity is not linear"),
        ("loaf^2 <= 3", "column 5: a power is not linear"),
        ("loaf**2 <= 3", "column 5: a power is not linear"),
        ("loaf² <= 3", "column 5: a power is not linear"),
        ("loaf/0 <= 3", "column 5: a division by zero"),
        ("loaf/(1 - 1) <= 3", "column 5: a division by zero"),
        # malformed
        ("", "the text is empty"),
        (" \n ", "the text is empty"),
        ("<= 3", "column 1: a number, a name or ( is missing"),
        ("loaf <=", "column 8: a number, a name or ( is missing (at the end of"),
        ("loaf + <= 3", "column 8: a number, a name or ( is missing"),
        ("loaf + * roll <= 3", "column 8: a number, a name or ( is missing"),
        ("2loaf <= 3", "column 2: an operator is missing; a product is written 2*loaf"),
        ("2 loaf <= 3", "column 3: an operator is missing; a product is written 2*loaf"),
        ("2(loaf) <= 3", "column 2: an operator is missing"),
        ("loaf roll <= 3", "column 6: an operator is missing"),
        ("2 3 <= loaf", "column 3: an operator is missing"),
        ("(loaf <= 3", "column 7: a relation cannot stand inside parentheses"),
        ("loaf <= (3", "column 9: this parenthesis is never closed"),
        ("loaf) <= 3", "column 5: this parenthesis was never opened"),
        ("() <= loaf", "column 2: a number, a name or ( is missing"),
        # signs from elsewhere
        ("loaf ≤ 3", 'column 6: "≤" is not understood here; write <='),
        ("loaf≤3", 'column 5: "≤" is not understood here; write <='),
        ("2\u00d7loaf <= 3", 'column 2: "\u00d7" is not understood here; write *'),
        ("2·loaf <= 3", 'column 2: "·" is not understood here; write *'),
        ("loaf·2 <= 3", 'column 5: "·" is not understood here; write *'),
        ("loaf \u2212 roll <= 3", 'column 6: "\u2212" is not understood here; write -'),
        ("loaf // 2 <= 3", 'column 6: "//" is not understood here; write /'),
        ("loaf <= 1,000", 'column 10: "," is not understood here; decimals take a point'),
        ("5% * loaf <= 3", 'column 2: "%" is not understood here; write 5% as 0.05'),
        ("loaf @ roll <= 3", 'column 6: "@" is not understood here'),
        ("loaf \x1b[31m <= 3", r'column 6: "\x1b" is not understood here'),
        # numbers
        ("loaf <= 1e999999999", "column 9: the number is larger than doubles hold"),
        ("loaf <= 1e-999999999", "column 9: the number is closer to zero than doubles can tell"),
        ("loaf <= 1e" + "9" * 5000, "column 9: the number is larger than doubles hold"),
        ("loaf <= " + "9" * 5000, "column 9: a number of 5,000 digits; the limit is 400"),
        ("loaf <= 1e200*1e200", "the number is larger than doubles hold"),
        ("1e300*loaf <= 1e-300", "the numbers lie too far apart for doubles"),
        ("1e300*loaf + 1e-300*roll <= 1", "the numbers lie too far apart for doubles"),
    ],
)  # fmt: skip
def test_errors_point_at_the_place(text, message):
    assert error(text).startswith(message)


def test_a_nesting_of_thousands_is_refused_and_one_of_dozens_is_not():
    deep = "(" * 5000 + "loaf" + ")" * 5000 + " <= 3"
    assert f"nested more than {MOST_NESTED} deep" in error(deep)
    near = "(" * MOST_NESTED + "loaf" + ")" * MOST_NESTED + " <= 3"
    assert rule(near).terms == ((0, 1),)
    assert rule("-" * 5001 + "loaf <= 3").terms == ((0, -1),)
    assert error("(" * 5000).startswith(f"column {MOST_NESTED + 1}")


def test_numbers_cannot_grow_without_end():
    product = "*".join(["1e300"] * 400)
    assert "takes more than 1,200 digits" in error(f"{product}*loaf <= 1")
    thirds = " + ".join(f"loaf/{2**89 + 2 * k + 1}" for k in range(200))
    assert "takes more than 1,200 digits" in error(f"{thirds} <= 1")
    apart = " + ".join(f"{name}/{10**300 + k}" for k, name in enumerate(NAMES))
    assert "takes more than 1,200 digits" in error(f"{apart} <= 1")


def test_an_aim_is_a_sum():
    assert parse_aim("2*loaf - roll/4 + 7", INDEX, "here") == (
        ((0, 2), (1, Fraction(-1, 4))),
        7,
    )
    assert parse_aim("0*loaf", INDEX, "here") == ((), 0)
    assert error("loaf <= 3", parse_aim).startswith("column 6: an aim is a sum")
    assert error("loaf roll", parse_aim).startswith("column 6: an operator is missing")


def test_new_limits():
    assert parse_limits("<= 14", "oven", "here") == (None, 14)
    assert parse_limits(" >= 0.5", "oven", "here") == (Fraction(1, 2), None)
    assert parse_limits("oven = 2", "oven", "here") == (2, 2)
    assert parse_limits("2 <= work[mon] <= 5", "work[mon]", "here") == (2, 5)
    with pytest.raises(SheetError, match="write the new limits as oven <= 14"):
        parse_limits("2*oven <= 14", "oven", "here")
    with pytest.raises(SheetError, match="unknown name"):
        parse_limits("loaf <= 14", "oven", "here")


@st.composite
def sums(draw, depth=3):
    """Draw a linear sum as text, with a function that evaluates it directly in Fractions."""
    kind = draw(st.sampled_from(["number", "name"] if depth == 0 else
                                ["number", "name", "add", "subtract", "times", "over", "minus"]))
    if kind == "number":
        digits, places = draw(st.integers(0, 999)), draw(st.integers(0, 3))
        value = Fraction(digits, 10**places)
        text = f"{digits // 10**places}.{digits % 10**places:0{places}}" if places else str(digits)
        return text, lambda point: value
    if kind == "name":
        j = draw(st.integers(0, len(NAMES) - 1))
        return NAMES[j], lambda point: point[j]
    text, left = draw(sums(depth=depth - 1))
    if kind == "minus":
        return f"-({text})", lambda point: -left(point)
    if kind in ("times", "over"):
        by = draw(st.integers(1, 9))
        if kind == "over":
            return f"({text})/{by}", lambda point: left(point) / by
        if draw(st.booleans()):
            return f"{by} * ({text})", lambda point: by * left(point)
        return f"({text})*{by}", lambda point: by * left(point)
    other, right = draw(sums(depth=depth - 1))
    if kind == "add":
        return f"{text} + {other}", lambda point: left(point) + right(point)
    return f"{text} - ({other})", lambda point: left(point) - right(point)


def random_point(seed):
    draw = random.Random(seed)
    return [Fraction(draw.randint(-99, 99), draw.randint(1, 9)) for _ in NAMES]


@settings(max_examples=150, derandomize=True, deadline=None)
@given(sums(), st.integers(0, 10**6))
def test_a_sum_equals_its_direct_evaluation(drawn, seed):
    text, evaluate = drawn
    terms, constant = parse_aim(text, INDEX, "here")
    point = random_point(seed)
    assert sum(c * point[j] for j, c in terms) + constant == evaluate(point)
    assert parse_aim(write_sum(terms, NAMES, constant), INDEX, "here") == (terms, constant)


@settings(max_examples=150, derandomize=True, deadline=None)
@given(sums(), sums(), st.sampled_from(["<=", ">=", "="]), st.integers(0, 10**6))
def test_a_rule_holds_where_its_sides_do(left, right, relation, seed):
    parsed = rule(f"{left[0]} {relation} {right[0]}")
    point = random_point(seed)
    value = sum(c * point[j] for j, c in parsed.terms)
    low, high = left[1](point), right[1](point)
    expected = {"<=": low <= high, ">=": low >= high, "=": low == high}[relation]
    assert expected == (
        (parsed.least is None or value >= parsed.least)
        and (parsed.most is None or value <= parsed.most)
    )
    text = write_rule(parsed.terms, parsed.least, parsed.most, NAMES)
    assert rule(text) == parsed


@settings(max_examples=300, derandomize=True, deadline=None)
@given(st.text(alphabet="ab12.,()[]+-*/<>=! eE_\n²≤·öinf", max_size=30))
def test_any_text_is_a_rule_or_one_line(text):
    try:
        parse_rule(text, {"a": 0, "b": 1}, "here")
    except SheetError as problem:
        assert "\n" not in str(problem)
