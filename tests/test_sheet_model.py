"""What a sheet is worth at a plan, its problem for the engine, and its record."""

from __future__ import annotations

import copy
import json
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intplan.errors import SheetError
from intplan.sheet import Activity, Aim, Rule, Sheet
from intplan.sheet.checking import Broken

BAKERY = """
[aim]
maximize = "4.20*loaf + 2.75*roll_tray - 18*overtime + 5"
[activities]
loaf      = { most = 900 }
roll_tray = { least = 20, most = 240 }
overtime  = { whole = false, most = 12 }
[rules]
oven   = "0.02*loaf + 0.05*roll_tray <= 16 + overtime"
mixer  = "6 <= 0.01*loaf + 0.02*roll_tray <= 9"
shelf  = "loaf >= 3*roll_tray"
"""
SOFT = """
[aim]
{sense} = "2*a + b"
[activities]
a = {{ most = 10 }}
b = {{ most = 10, whole = false }}
[rules]
top  = {{ rule = "a + b <= 6", give = 15, give_most = 4 }}
both = {{ rule = "2 <= a - b <= 3", give = 0.5 }}
hard = "a <= 8"
"""


def test_a_good_plan():
    sheet = Sheet.parse(BAKERY)
    result = sheet.check([860, 20, Fraction(11, 5)])
    assert result.good
    # The value of the example in the format's description, with the constant 5 added.
    assert result.value == Fraction("3627.4") + 5
    assert [(r.name, r.value, r.spare) for r in result.rules] == [
        ("oven", 16, 0),
        ("mixer", 9, 0),
        ("shelf", 800, 800),
    ]
    assert sheet.rule_value(sheet.rules[2], [860, 20, 0]) == 800
    assert sheet.aim_value([860, 20, Fraction(11, 5)]) == result.value


def test_decimals_are_exact():
    sheet = Sheet.parse('[activities]\na={}\nb={}\n[rules]\nr="0.1*a + 0.2*b <= 0.3"')
    result = sheet.check([1, 1])
    assert result.good
    assert result.rules[0].spare == 0
    assert sheet.check([1.0, np.float64(1)]).good
    assert sheet.check(np.array([1, 1])).good


def test_a_plan_that_breaks_everything():
    sheet = Sheet.parse(BAKERY)
    result = sheet.check([Fraction(1801, 2), 10, 13])
    assert result.broken == (
        Broken("loaf most", "most", Fraction(1, 2)),
        Broken("loaf", "whole", Fraction(1, 2)),
        Broken("roll_tray least", "least", 10),
        Broken("overtime most", "most", 1),
        Broken("mixer", "most", Fraction("0.205")),
    )
    assert not result.good
    assert result.rules[1].spare == -Fraction("0.205")
    assert result.rules[1].side == "most"


def test_plans_of_the_wrong_length_or_kind():
    sheet = Sheet.parse(BAKERY)
    with pytest.raises(SheetError, match="plan: expected one amount an activity, in order"):
        sheet.check({"loaf": 860, "roll_tray": 20, "overtime": 2})
    with pytest.raises(SheetError, match="plan: 2 amounts for 3 activities"):
        sheet.check([1, 2])
    with pytest.raises(SheetError, match="roll_tray: nan is not a finite number"):
        sheet.check([1, float("nan"), 3])


@pytest.mark.parametrize("sense, sign", [("maximize", -1), ("minimize", 1)])
def test_bends_are_priced_against_the_aim(sense, sign):
    sheet = Sheet.parse(SOFT.format(sense=sense))
    result = sheet.check([7, 3])
    assert result.good
    assert [(r.bend, r.side) for r in result.rules] == [(4, "most"), (1, "most"), (0, None)]
    assert result.value == 17 + sign * (4 * 15 + Fraction(1, 2))
    below = sheet.check([1, 3])
    assert below.rules[1].bend == 4
    assert below.rules[1].side == "least"
    assert below.value == 5 + sign * 2


def test_a_bend_beyond_its_limit_is_broken_by_the_rest():
    result = Sheet.parse(SOFT.format(sense="minimize")).check([8, Fraction(13, 2)])
    assert result.broken == (Broken("top", "most", Fraction(9, 2)),)
    assert result.rules[0].bend == 4


def test_the_problem_has_a_column_for_each_bend():
    sheet = Sheet.parse(SOFT.format(sense="maximize"))
    problem = sheet.problem()
    assert problem is sheet.problem(), "built once"
    assert problem.bends == ((0, "most", 2), (1, "most", 3), (1, "least", 4))
    assert problem.exact_most == (10, 10, 4, None, None)
    assert problem.exact_least == (0, 0, 0, 0, 0)
    assert problem.whole.tolist() == [True, False, False, False, False]
    assert problem.rows[0][:2] == ((0, 1, 2), (1, 1, -1))
    assert problem.rows[1][:2] == ((0, 1, 3, 4), (1, -1, -1, 1))
    assert problem.rows[1][2:4] == (2, 3)
    # The engine minimises: a bend costs, an activity of a maximised aim earns.
    assert [np.sign(c) for c in problem.cost] == [-1, -1, 1, 1, 1]
    plan = [7, 3, 4, 1, 0]
    assert problem.aim_from_cost(problem.exact_cost_of(plan)) == sheet.check([7, 3]).value


def test_without_an_aim_the_prices_of_bends_are_minimised():
    sheet = Sheet.parse('[activities]\na={}\n[rules]\nr={rule="a >= 3", give=2}')
    problem = sheet.problem()
    assert problem.cost[0] == 0
    assert problem.aim_from_cost(problem.exact_cost_of([1, 2])) == 4 == sheet.check([1]).value
    plain = Sheet.parse('[activities]\na={}\n[rules]\nr="a >= 3"')
    assert not plain.problem().cost.any()
    assert plain.check([3]).value == 0


def test_a_problem_whose_numbers_do_not_scale_is_refused():
    soft = '[activities]\na={}\n[rules]\nr={rule="1e-305*a >= 1e-303", give=2}'
    with pytest.raises(SheetError, match="r: the numbers lie too far apart"):
        Sheet.parse(soft).problem()
    sheet = Sheet("", "", Aim(), (Activity("a"),), (Rule("r", ((0, 1),), None, 1 << 2000),))
    with pytest.raises(SheetError, match="too far apart for doubles"):
        sheet.problem()


def test_sheets_made_by_hand():
    with pytest.raises(SheetError, match="an empty sheet"):
        Sheet("", "", Aim(), (), ())
    with pytest.raises(SheetError, match='the name "a" is declared twice'):
        Sheet("", "", Aim(), (Activity("a"), Activity("a")), ())
    twice = (Rule("r", (), None, None),) * 2
    with pytest.raises(SheetError, match='the name "r" is declared twice'):
        Sheet("", "", Aim(), (Activity("a"),), twice)
    sheet = Sheet.parse(BAKERY)
    fewer = replace(sheet, rules=sheet.rules[1:])
    assert fewer.rule_index == {"mixer": 0, "shelf": 1}
    assert fewer.problem() is not sheet.problem()


def through_json(sheet):
    return Sheet.from_record(json.loads(json.dumps(sheet.to_record())), "file")


numbers = st.one_of(
    st.integers(-50, 50), st.fractions(-50, 50, max_denominator=12)
).map(lambda v: v.numerator if v.denominator == 1 else v)


@st.composite
def sheets(draw):
    """Draw a sheet of one to five activities and up to four rules."""
    count = draw(st.integers(1, 5))
    activities = tuple(
        Activity(
            f"a[{j}]",
            draw(st.none() | st.integers(-9, 0)),
            draw(st.none() | st.integers(0, 9)),
            draw(st.booleans()),
            draw(st.text(max_size=3)),
        )
        for j in range(count)
    )

    def terms():
        drawn = draw(st.dictionaries(st.integers(0, count - 1), numbers.filter(bool)))
        return tuple(sorted(drawn.items()))

    def rule(i):
        limits = draw(st.lists(st.none() | numbers, min_size=2, max_size=2))
        if None not in limits:
            limits.sort()
        give = draw(st.none() | numbers.filter(lambda v: v > 0))
        most = None if give is None else draw(st.none() | numbers.filter(lambda v: v >= 0))
        return Rule(f"r{i}", terms(), *limits, draw(st.text(max_size=3)), give, most, "text")

    sense = draw(st.sampled_from([None, "maximize", "minimize"]))
    aim = Aim(sense, terms(), draw(numbers)) if sense else Aim()
    rules = tuple(rule(i) for i in range(draw(st.integers(0, 4))))
    return Sheet(draw(st.text(max_size=5)), "EUR", aim, activities, rules, ("a warning",))


@settings(max_examples=100, derandomize=True, deadline=None)
@given(sheets())
def test_a_record_reads_back_as_the_same_sheet(sheet):
    assert through_json(sheet) == sheet


@settings(max_examples=60, derandomize=True, deadline=None)
@given(sheets(), st.lists(numbers, min_size=5, max_size=5))
def test_the_cheapest_bends_make_a_plan_of_the_problem(sheet, amounts):
    amounts = amounts[: len(sheet.activities)]
    result = sheet.check(amounts)
    problem = sheet.problem()
    used = {(r.name, r.side): r.bend for r in result.rules}
    plan = amounts + [
        used.get((sheet.rules[bend.rule].name, bend.side), 0) for bend in problem.bends
    ]
    assert problem.aim_from_cost(problem.exact_cost_of(plan)) == result.value
    broken = {b.name for b in result.broken}
    for rule, row in zip(sheet.rules, problem.rows, strict=True):
        pairs = zip(row.columns, row.coefficients, strict=True)
        value = sum((c * plan[j] for j, c in pairs), 0)
        held = (row.least is None or value >= row.least) and (
            row.most is None or value <= row.most
        )
        assert held == (rule.name not in broken)


@settings(max_examples=60, derandomize=True, deadline=None)
@given(sheets())
def test_rules_shown_as_algebra_read_back(sheet):
    for rule in sheet.rules:
        if rule.terms and (rule.least, rule.most) != (None, None):
            again = sheet.rule_from_text(rule.name, sheet.show_rule(rule))
            assert (again.terms, again.least, again.most) == (rule.terms, rule.least, rule.most)


def test_records_of_files_and_arrays():
    for sheet in (
        Sheet.parse(BAKERY),
        Sheet.parse(SOFT.format(sense="minimize")),
        Sheet.from_arrays([0.1, 1e22], [[1 / 3, 2], [0, 0]], row_most=[1e-9, 5], most=2.5),
    ):
        assert through_json(sheet) == sheet


def test_the_longest_numbers_survive_a_record():
    long = " + ".join(f"a/{2**89 + k}" for k in (1, 3, 9, 11, 19, 21, 29))
    sheet = Sheet.parse(f'[activities]\na = {{}}\n[rules]\nr = "{long} <= 1"')
    assert sheet.rules[0].terms[0][1].denominator.bit_length() > 500
    assert through_json(sheet) == sheet


def changed(path, value):
    """Return a good record with one entry replaced; a path ends at the key to set."""
    record = copy.deepcopy(Sheet.parse(SOFT.format(sense="minimize")).to_record())
    spot = record
    for key in path[:-1]:
        spot = spot[key]
    if value is KeyError:
        del spot[path[-1]]
    else:
        spot[path[-1]] = value
    return record


@pytest.mark.parametrize(
    "record, line",
    [
        (None, "file: expected a table"),
        ([], "file: expected a table"),
        (changed(["title"], KeyError), "file: the key title is missing"),
        (changed(["title"], 3), "file, title: expected text"),
        (changed(["rulez"], []), 'file: unknown key "rulez"; did you mean "rules"?'),
        (changed(["activities"], []), "file: an empty sheet"),
        (changed(["activities"], {}), "file, activities: expected a list"),
        (changed(["activities", 0, "name"], "b"), 'file: the name "b" is declared twice'),
        (changed(["activities", 0, "name"], "a b"), "file, activities[0]: a name holds no spaces"),
        (changed(["activities", 0, "name"], "bo\u0308"), "file, activities[0]: the name is not in"),
        (changed(["activities", 0, "whole"], 1), "file, activities[0]: whole must be true or"),
        (changed(["activities", 0, "least"], 0), "file, activities[0], least: expected text"),
        (changed(["activities", 0, "least"], "nan"), "file, activities[0], least: this is not"),
        (changed(["activities", 0, "least"], "11"), "file, activities[0]: least = 11 is above"),
        (changed(["rules", 0, "terms"], [[0, "1"], [0, "1"]]), "file, rules[0], terms: the term"),
        (changed(["rules", 0, "terms"], [[2, "1"]]), "file, rules[0], terms: the term of"),
        (changed(["rules", 0, "terms"], [[-1, "1"]]), "file, rules[0], terms: the term of"),
        (changed(["rules", 0, "terms"], [[0, "0"]]), "file, rules[0], terms: the term of"),
        (changed(["rules", 0, "terms"], [[True, "1"]]), "file, rules[0], terms: a term is a pair"),
        (changed(["rules", 0, "terms"], [[0, "1/0"]]), "file, rules[0], terms: a division by zero"),
        (changed(["rules", 0, "terms"], [[0, "9" * 9999]]), "file, rules[0], terms: a number of"),
        (changed(["rules", 0, "least"], "7"), "file, rules[0]: least = 7 is above most = 6"),
        (changed(["rules", 0, "give"], "0"), "file, rules[0]: give = 0, but a price must be"),
        (changed(["rules", 0, "give"], None), "file, rules[0]: give_most needs a price"),
        (changed(["rules", 0, "terms"], [[0, "1/" + "9" * 305], [1, "1"]]),
         "file, rules[0]: the numbers lie too far apart"),
        (changed(["aim", "sense"], "max"), "file, aim: sense must be maximize, minimize or null"),
        (changed(["aim", "sense"], []), "file, aim: sense must be maximize, minimize or null"),
        (changed(["aim", "sense"], None), "file, aim: an aim without a sense has no terms"),
        (changed(["warnings"], [3]), "file, warnings: expected text"),
    ],
)  # fmt: skip
def test_damaged_records_are_refused(record, line):
    with pytest.raises(SheetError) as caught:
        Sheet.from_record(record, "file")
    assert str(caught.value).startswith(line)
    assert "\n" not in str(caught.value)
