"""Sheets from arrays: exact values, every kind of input, and clear refusals."""

from __future__ import annotations

import time
from decimal import Decimal
from fractions import Fraction

import numpy as np
import pytest
import scipy.sparse

from intplan.errors import SheetError
from intplan.sheet import Activity, Aim, Rule, Sheet

inf = float("inf")
nan = float("nan")


def test_a_dense_problem():
    sheet = Sheet.from_arrays(
        [3, 2.5], [[1, 1], [0.1, -0.2]], [-inf, 1], [4, 1], 0, [inf, 7], [True, False], True
    )
    assert sheet.aim == Aim("maximize", ((0, 3), (1, Fraction(5, 2))), 0)
    assert sheet.activities == (
        Activity("x[0]", 0, None, True),
        Activity("x[1]", 0, 7, False),
    )
    assert sheet.rules == (
        Rule("r[0]", ((0, 1), (1, 1)), None, 4),
        Rule("r[1]", ((0, Fraction(1, 10)), (1, Fraction(-1, 5))), 1, 1),
    )


def test_defaults_and_names():
    sheet = Sheet.from_arrays(
        None, [[1, 0]], names=["loaf", "ro\u0308ll"], rule_names=["oven"], title="t", measure="m"
    )
    assert sheet.aim == Aim(None, (), 0)
    assert [a.name for a in sheet.activities] == ["loaf", "r\u00f6ll"]
    assert sheet.activities[0] == Activity("loaf", 0, None, True)
    assert sheet.rules == (Rule("oven", ((0, 1),), None, None),)
    assert sheet.show_rule(sheet.rules[0]) == "loaf"
    assert (sheet.title, sheet.measure) == ("t", "m")
    assert Sheet.from_arrays([1, 2], []).rules == ()
    assert Sheet.from_arrays([1, 2], None).rules == ()
    assert Sheet.from_arrays([1, 2], np.zeros((0, 2))).rules == ()
    assert len(Sheet.from_arrays(None, None, most=[1, 2, 3]).activities) == 3
    free = Sheet.from_arrays([1], None, least=None, most=None)
    assert (free.activities[0].least, free.activities[0].most) == (None, None)


@pytest.mark.parametrize("kind", [bool, np.int8, np.uint16, np.uint64, np.int64, np.float16,
                                  np.float32, np.float64, np.longdouble, object])  # fmt: skip
def test_every_type_of_number(kind):
    sheet = Sheet.from_arrays(np.ones(2, kind), np.array([[1, 0], [1, 1]], kind), row_most=1)
    assert sheet.aim.terms == ((0, 1), (1, 1))
    assert [r.terms for r in sheet.rules] == [((0, 1),), ((0, 1), (1, 1))]
    assert all(type(c) is int for r in sheet.rules for _, c in r.terms)


def test_exact_values_survive():
    row = [[Fraction(1, 3), Decimal("0.10"), 2**80]]
    sheet = Sheet.from_arrays([0, 0, 0], row, most=[Fraction(7, 2), None, inf])
    assert sheet.rules[0].terms == ((0, Fraction(1, 3)), (1, Fraction(1, 10)), (2, 2**80))
    assert [a.most for a in sheet.activities] == [Fraction(7, 2), None, None]
    narrow = Sheet.from_arrays(np.array([0.1, 1e11], np.float32), None)
    assert narrow.aim.terms == ((0, Fraction(1, 10)), (1, 10**11))
    wide = Sheet.from_arrays([1e23, 2.0**53, 1.5], None)
    assert wide.aim.terms == ((0, 10**23), (1, 2**53), (2, Fraction(3, 2)))


@pytest.mark.parametrize("make", [scipy.sparse.csr_array, scipy.sparse.csc_matrix,
                                  scipy.sparse.coo_array, scipy.sparse.lil_matrix,
                                  scipy.sparse.dok_array])  # fmt: skip
def test_sparse_and_dense_agree(make):
    rng = np.random.default_rng(3)
    rows = np.round(rng.random((12, 9)) * (rng.random((12, 9)) < 0.3), 2)
    assert Sheet.from_arrays(np.ones(9), make(rows)) == Sheet.from_arrays(np.ones(9), rows)


def test_repeated_sparse_entries_add_up_exactly():
    at = ([0.1, 0.2, 1.0, -1.0, 0.0], ([0, 0, 1, 1, 1], [1, 1, 0, 0, 1]))
    sheet = Sheet.from_arrays([1, 1], scipy.sparse.coo_array(at, shape=(2, 2)))
    assert [r.terms for r in sheet.rules] == [((1, Fraction(3, 10)),), ()]


@pytest.mark.parametrize(
    "arguments, line",
    [
        ({"aim": [1, nan]}, "aim[1]: nan is not a finite number"),
        ({"aim": [1, inf]}, "aim[1]: inf is not a finite number"),
        ({"rows": [[1, 2], [nan, 3]]}, "rows[1, 0]: nan is not a finite number"),
        ({"rows": [[1, 2], [3, -inf]]}, "rows[1, 1]: -inf is not a finite number"),
        ({"rows": scipy.sparse.csr_array([[0, nan]])}, "rows[0, 1]: nan is not a finite number"),
        ({"rows": [[1, 2], [3, 10**400]]}, "rows[1, 1]: the number is larger than doubles hold"),
        ({"rows": [[1, 2], [3, "x"]]}, "rows: expected numbers, not"),
        ({"rows": [[1, 2], [3, None]]}, "rows[1, 1]: a value of type NoneType is not a number"),
        ({"rows": [[1, 2], [3]]}, "rows: this makes no array"),
        ({"rows": [[1j, 2]]}, "rows: expected numbers, not complex128"),
        ({"rows": [[1, 2, 3]]}, "rows: the shape is (1, 3); expected (rules, 2 activities)"),
        ({"rows": [1, 2]}, "rows: the shape is (2,); expected (rules, 2 activities)"),
        ({"rows": [[[1, 2]]]}, "rows: the shape is (1, 1, 2)"),
        ({"aim": [[1, 2]]}, "aim: the shape is (1, 2); expected (activities,)"),
        ({"aim": 3}, "aim: the shape is (); expected (activities,)"),
        ({"aim": "loaf"}, "aim: expected numbers"),
        ({"aim": [1e-320, 1e300]}, "aim: the numbers lie too far apart"),
        ({"rows": [[1e-300, 1]], "row_most": 1e305}, "r[0]: the numbers lie too far apart"),
        ({"least": [0, 0, 0]}, "least: the shape is (3,); expected (2,) or one number"),
        ({"least": [0, nan]}, "least[1]: nan is not a finite number"),
        ({"least": nan}, "least: nan is not a finite number"),
        ({"least": inf}, "least: inf is not a finite number"),
        ({"most": [3, -inf]}, "most[1]: -inf is not a finite number"),
        ({"most": [3, None], "least": [4, None]}, "x[0]: least = 4 is above most = 3"),
        ({"least": 5, "most": 3}, "x[0]: least = 5 is above most = 3"),
        ({"least": 0.2, "most": [1, 0.8]}, "x[1]: no whole number lies between"),
        ({"row_least": [1]}, "row_least: the shape is (1,); expected (2,) or one number"),
        ({"row_least": [1, inf]}, "row_least[1]: inf is not a finite number"),
        ({"row_most": -inf}, "row_most: -inf is not a finite number"),
        ({"row_most": [nan, 1]}, "row_most[0]: nan is not a finite number"),
        ({"row_least": 3, "row_most": [4, 2]}, "r[1]: row_least = 3 is above row_most = 2"),
        ({"whole": [True]}, "whole: the shape is (1,); expected (2,) or one flag"),
        ({"whole": [1, 2]}, "whole: expected true or false"),
        ({"names": ["a"]}, "names: 1 names for 2"),
        ({"names": "ab"}, "names: 1 names for 2"),
        ({"names": ["a", "a"]}, "names[1]: the name a is given twice"),
        ({"names": ["b\u00f6l", "bo\u0308l"]}, "names[1]: the name b\u00f6l is given twice"),
        ({"names": ["a", 3]}, "names[1]: a name is text"),
        ({"names": ["a", "b c"]}, "names[1]: a name holds no spaces"),
        ({"rule_names": ["a", "2"]}, "rule_names[1]: this is not a name"),
        ({"aim": [], "rows": None}, "rows: an empty sheet: it has no activities"),
        ({"aim": None, "rows": None}, "rows: an empty sheet: nothing tells the number"),
        ({"aim": None, "rows": 3}, "rows: the shape is (); expected (rules, activities)"),
    ],
)  # fmt: skip
def test_bad_arrays_get_one_line(arguments, line):
    given = {"aim": [1, 2], "rows": [[1, 2], [3, 4]], **arguments}
    with pytest.raises(SheetError) as caught:
        Sheet.from_arrays(**given)
    assert str(caught.value).startswith(line)
    assert "\n" not in str(caught.value)


def test_a_vast_sparse_matrix_is_refused_before_it_is_built():
    rows = scipy.sparse.coo_array(([1], ([0], [0])), shape=(10**6, 10**6))
    with pytest.raises(SheetError, match="1,000,000 rules by 1,000,000 activities make a table"):
        Sheet.from_arrays(None, rows)


def test_whole_data_are_read_fast():
    rng = np.random.default_rng(1)
    rows = (rng.random((168, 500)) < 0.05).astype(float)
    best = inf
    for _ in range(5):
        started = time.perf_counter()
        Sheet.from_arrays(np.ones(500), rows, row_least=1)
        best = min(best, time.perf_counter() - started)
    # A few milliseconds are usual; entry by entry it would be far beyond this limit.
    assert best < 0.1
