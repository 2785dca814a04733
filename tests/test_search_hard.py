"""Sheets that are hard for doubles, or odd: each answer is verified exactly."""

from __future__ import annotations

import math
import random
from collections import Counter
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

import intplan
from intplan.planning.compare import compare
from intplan.search import branch_and_cut, develop, root
from intplan.sheet.problem import Problem
from tests.families import lot_sizing, problem_of
from tests.generators import random_problem
from tests.verify import verify

INF = math.inf


def arrays_of(aim, rows, row_least, row_most, least, most, whole) -> Problem:
    """Return the problem of plain arrays, minimised."""
    return intplan.Sheet.from_arrays(
        aim=aim, rows=rows, row_least=row_least, row_most=row_most, least=least, most=most,
        whole=whole,
    ).problem()  # fmt: skip


def test_a_root_settled_in_rationals_between_cuts_is_branched_on() -> None:
    """The branching that rationals ask for in the middle of the root's cuts is not lost."""
    problem = arrays_of(
        [9, 7, 10001, 2.7], [[6, 0, 8000, 0.9], [1, -2, 2000, -0.3]], [32005, -INF],
        [32008, 7998.5], [-INF, 0, 0, 0], [3, INF, 7, INF], [1, 0, 1, 1],
    )  # fmt: skip
    result = branch_and_cut(problem)
    verify(problem, result)
    assert (result.outcome, result.value) == ("optimal", Fraction(200101, 5))


def test_a_dive_over_activities_without_bounds_ends() -> None:
    """A step the other way starts again from where the first step began."""
    problem = arrays_of(
        [0, 2, 0, 2, 2],
        [[0, -0.06, -6000, 0.07, -900000], [-8, 0, -3000, 0.04, 200000],
         [5, 0.03, 4000, -0.05, 500000], [-8, 0, 2000, 0.07, 100000]],
        [-INF, 187958.2, -INF, -INF], [INF, 187960.2, INF, INF],
        [-INF, 0, -INF, 0, 0], [INF, 1, 26, INF, 5], True,
    )  # fmt: skip
    result = branch_and_cut(problem, time_limit=20)
    verify(problem, result)
    assert result.outcome == "optimal"


def test_a_start_that_is_singular_in_doubles_goes_to_rationals() -> None:
    """Two rules that doubles cannot tell apart bound the aim all the same."""
    sheet = intplan.Sheet.parse(
        """
        [aim]
        maximize = "y"
        [activities]
        x = { least = -inf }
        y = { least = -inf }
        [rules]
        a = "100000000000000000000*x + 100000000000000000001*y <= 0"
        b = "x + y >= 0"
        """
    )
    result = branch_and_cut(sheet.problem())
    verify(sheet.problem(), result)
    assert (result.outcome, result.value) == ("optimal", 0)


@pytest.mark.parametrize("seed", range(11))
def test_a_root_whose_first_basis_is_singular_starts_from_the_slack_basis(
    seed: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As the nodes below it do, though that basis may not be dual feasible."""
    problem = problem_of(random_problem(seed))
    expected = branch_and_cut(problem)

    def singular(*_: Any, **__: Any) -> None:
        raise np.linalg.LinAlgError("Singular matrix")

    monkeypatch.setattr(root, "cold_start", singular)
    monkeypatch.setattr(develop, "cold_start", singular)
    result = branch_and_cut(problem)
    verify(problem, result)
    assert (result.outcome, result.value) == (expected.outcome, expected.value)


def test_derived_bounds_of_divisible_activities_are_no_tighter_than_their_rule() -> None:
    """Large coefficients leave large errors in what a rule implies for a small one."""
    rng = random.Random(1)
    for _ in range(60):
        size = 10 ** rng.choice([8, 9, 10]) * rng.randint(1, 9)
        most, best = (Fraction(rng.randint(1, 9999), 10000) for _ in range(2))
        step = rng.randint(1, 9)
        limit = size * most - step * best
        sheet = intplan.Sheet.parse(
            f"""
            [aim]
            maximize = "y"
            [activities]
            x = {{ whole = false, most = "{most}" }}
            y = {{ whole = false }}
            z = {{ most = 1 }}
            [rules]
            r = "{size}*x - {step}*y >= {limit.numerator}/{limit.denominator}"
            q = "y <= z"
            """
        )
        result = branch_and_cut(sheet.problem())
        verify(sheet.problem(), result)
        assert (result.outcome, result.value) == ("optimal", best)


def test_bounds_beyond_the_doubles_are_rounded_outward() -> None:
    """A written bound past 2**53 keeps every whole value it allows."""
    sheet = intplan.Sheet.parse(
        """
        [aim]
        maximize = "x"
        [activities]
        x = { most = 9007199254740993.5 }
        [rules]
        r = "x - 2*y = 1"
        """.replace("[rules]", 'y = { most = 4503599627370496 }\n[rules]')
    )
    problem = sheet.problem()
    result = branch_and_cut(problem, time_limit=5)
    verify(problem, result)
    assert result.bound is None or result.bound >= 9007199254740993
    assert result.value in (None, 9007199254740993)


def test_a_search_ended_within_the_gap_says_so() -> None:
    """Whatever ended it: the distance of value and bound decides."""
    ends = Counter()
    for seed in range(40):
        instance = random_problem(seed)
        for nodes in (1, 2, 4):
            result = branch_and_cut(problem_of(instance), gap=Fraction(2), node_limit=nodes)
            if result.value is None or result.bound is None or result.outcome == "unbounded":
                continue
            within = abs(Fraction(result.bound) - result.value) * 50 <= abs(result.value)
            ends[result.outcome] += 1
            assert (result.outcome in ("optimal", "within_gap")) == within
    assert ends["optimal"] > 10


def test_an_aim_without_a_limit_and_no_plan_can_be_compared() -> None:
    """The tree then looks for any plan; its bounds are not the aim's."""
    sheet = intplan.Sheet.parse(
        """
        [aim]
        maximize = "u"
        [activities]
        u = {}
        x = { most = 50 }
        y = { most = 50 }
        z = { most = 50 }
        [rules]
        a = "6*x + 10*y + 15*z = 29"
        """
    )
    standing = intplan.solve(sheet)
    assert standing.outcome == "infeasible"
    verify(sheet.problem(), standing.result)
    assert all(bound is None for _, bound in standing.tree.nodes(data="bound"))
    assert compare(standing).agree


def test_a_rule_without_limits_changes_nothing() -> None:
    """It may stand in arrays; sums of rules are rounded all the same."""
    plain = lot_sizing(1, 8, 1)
    loose = replace(
        plain,
        rows=np.vstack((plain.rows, np.ones(len(plain.aim)))),
        row_least=np.append(plain.row_least, -INF),
        row_most=np.append(plain.row_most, INF),
    )
    one, two = (branch_and_cut(problem_of(i)) for i in (plain, loose))
    verify(problem_of(loose), two)
    assert one.value == two.value
    assert len(one.cuts) == len(two.cuts) > 0


def test_no_exact_cut_is_measured_from_a_limit_that_doubles_round() -> None:
    """The limit's double is 5; a cut measured from it would take the best plan away by a hair."""
    sheet = intplan.Sheet.parse(
        """
        [aim]
        minimize = "10*y + 3*z + 3*s"
        [activities]
        y = { most = 1 }
        z = { most = 1 }
        x = { whole = false }
        w = { whole = false }
        s = { whole = false }
        [rules]
        need = "x + w + s >= 4.99999999999999999999"
        a = "x <= 7*y"
        b = "w <= 3*z"
        """
    )
    result = branch_and_cut(sheet.problem())
    verify(sheet.problem(), result)
    assert (result.outcome, result.value) == ("optimal", 9 - Fraction(3, 10**20))
