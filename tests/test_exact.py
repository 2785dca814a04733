"""The exact arithmetic: rational solves, guessed fractions, exact plans and bounds."""

from __future__ import annotations

import math
from collections import Counter
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import intplan
from intplan.relaxation.rows import RowStore
from intplan.relaxation.start import NoDualBasis, cold_start
from intplan.search.arithmetic import (
    Arithmetic,
    common_denominator,
    nearest_fraction,
    simplest_fraction,
)
from intplan.search.exact import ExactAnswer, ExactSystem, Stopped, solve_exactly
from intplan.sheet.problem import Problem
from tests import reference
from tests.families import Instance, assignment, exact_system_of
from tests.generators import KINDS, random_problem
from tests.reference import reference_linprog

F = Fraction
SEEDS = 15 * len(KINDS)


def system_of(instance: Instance) -> ExactSystem:
    """Return an instance of integers for the exact arithmetic."""
    return exact_system_of(instance, -instance.aim if instance.maximize else instance.aim)


def lower_bound(system: ExactSystem, answer: ExactAnswer, weight: int) -> Fraction | None:
    """Return what multipliers prove of ``weight * cost``, None for minus infinity."""
    reduced = [F(weight * int(c)) for c in system.cost]
    total = F(0)
    for row, y in answer.multipliers.items():
        limit = system.row_least[row] if y > 0 else system.row_most[row]
        if limit is None:
            return None
        total += y * limit
        for j, a in enumerate(system.entries[row]):
            reduced[j] -= y * a
    for d, low, high in zip(reduced, system.least, system.most, strict=True):
        if d:
            end = low if d > 0 else high
            if end is None:
                return None
            total += d * end
    return total


def meets(system: ExactSystem, point: list[Fraction]) -> bool:
    """Tell whether a point meets every limit and bound exactly."""
    values = [sum(a * x for a, x in zip(row, point, strict=True)) for row in system.entries]
    ends = (
        *zip(values, system.row_least, system.row_most, strict=True),
        *zip(point, system.least, system.most, strict=True),
    )
    return all((lo is None or v >= lo) and (hi is None or v <= hi) for v, lo, hi in ends)


def test_answers_prove_themselves() -> None:
    """An optimum meets its own bound, a contradiction is positive, a ray never ends."""
    outcomes: Counter[str] = Counter()
    for seed in range(SEEDS):
        system = system_of(random_problem(seed))
        answer = solve_exactly(system)
        outcomes[answer.status] += 1
        if answer.status == "optimal":
            assert meets(system, answer.point), seed
            cost = sum(c * x for c, x in zip(system.cost, answer.point, strict=True))
            assert cost == answer.value == lower_bound(system, answer, 1), seed
        elif answer.status == "empty":
            assert lower_bound(system, answer, 0) > 0, seed
        else:
            assert sum(c * d for c, d in zip(system.cost, answer.point, strict=True)) < 0
            zero = ExactSystem(
                system.entries,
                *([None if v is None else 0 for v in limits]
                  for limits in (system.row_least, system.row_most)),
                system.cost,
                *([None if v is None else 0 for v in limits]
                  for limits in (system.least, system.most)),
            )  # fmt: skip
            assert meets(zero, answer.point), seed
    assert min(outcomes[s] for s in ("optimal", "empty", "unbounded")) > 5, outcomes


def test_optima_agree_with_the_reference() -> None:
    """Source: scipy.optimize.linprog."""
    compared = 0
    for seed in range(SEEDS):
        instance = random_problem(seed)
        answer, other = solve_exactly(system_of(instance)), reference_linprog(instance)
        if answer.status == "optimal":
            compared += 1
            sign = -1 if instance.maximize else 1
            assert other.status == reference.OPTIMAL
            assert sign * float(answer.value) == pytest.approx(other.value, rel=1e-8, abs=1e-8)
        elif answer.status == "empty":
            assert other.status in (reference.INFEASIBLE, reference.OTHER)
    assert compared > 90


def test_any_basis_will_do_to_start_from() -> None:
    """Bases from doubles, from elsewhere, singular or too short lead to the same value."""
    for seed in range(0, SEEDS, 2):
        instance = random_problem(seed)
        system = system_of(instance)
        plain = solve_exactly(system)
        rng = np.random.default_rng(seed)
        rows, columns = system.entries.shape
        starts = [rng.permutation(rows + columns)[:rows].tolist() for _ in range(3)]
        starts.append(list(range(min(rows, columns))))
        starts.append(plain.basis)
        for start in starts:
            again = solve_exactly(system, start)
            assert (again.status, again.value) == (plain.status, plain.value), seed


def test_fractions_stay_exact_where_doubles_fail() -> None:
    """Rows of a Hilbert-like matrix in integers: the answer is a quotient of large integers."""
    n = 7
    scale = math.lcm(*range(1, 2 * n))
    entries = np.array(
        [[scale // (i + j + 1) for j in range(n)] for i in range(n)], object
    )
    limits = [int(sum(row)) for row in entries]  # all ones solve the equations
    system = ExactSystem(
        entries, list(limits), list(limits), np.array([1] * n, object), [0] * n, [None] * n
    )
    answer = solve_exactly(system)
    assert answer.status == "optimal"
    assert answer.point == [1] * n
    assert answer.value == n


def test_a_long_run_can_be_stopped() -> None:
    system = system_of(assignment(4, 10, 1))
    polls = iter(range(5))
    with pytest.raises(Stopped):
        solve_exactly(system, stop=lambda: next(polls, None) is None)


def test_a_system_without_rows() -> None:
    empty = np.zeros((0, 2), object)
    cost = np.array([3, -2], object)
    answer = solve_exactly(ExactSystem(empty, [], [], cost, [F(1, 3), 0], [None, F(7, 2)]))
    assert (answer.status, answer.value) == ("optimal", -6)
    assert answer.point == [F(1, 3), F(7, 2)]
    answer = solve_exactly(ExactSystem(empty, [], [], cost, [0, 0], [None, None]))
    assert (answer.status, answer.point) == ("unbounded", [0, 1])


# ---------------------------------------------------------------------- fractions


@given(st.fractions(-1000, 1000, max_denominator=9999))
def test_fractions_of_small_denominator_are_found_again(value: Fraction) -> None:
    """Two fractions of denominators up to 10^4 lie 10^-8 apart, the guess reaches 10^-9."""
    found = simplest_fraction(float(value), 1e-13 * (1 + abs(float(value))), 10**6)
    assert found is not None
    assert F(*found) == value


@given(st.floats(-1e6, 1e6), st.sampled_from([1e-3, 1e-6, 1e-9]))
def test_a_simplest_fraction_is_near_or_none(value: float, slack: float) -> None:
    found = simplest_fraction(value, slack, 10**6)
    if found is not None:
        over, under = found
        assert under >= 1
        assert math.gcd(over, under) == 1
        assert abs(value - over / under) <= slack


@given(st.floats(-1e5, 1e5))
def test_nearest_fractions_are_near(value: float) -> None:
    found = nearest_fraction(value)
    assert found.denominator <= 10**6
    assert abs(float(found) - value) <= 1e-6 + 1e-9 * abs(value)


def test_whole_numbers_a_hair_off_are_whole() -> None:
    for value in (3.0, 3 + 1e-10, -7 - 1e-10, 1e5 + 1e-6):
        assert nearest_fraction(value) == round(value)
    assert nearest_fraction(1 / 3) == F(1, 3)


@given(
    st.lists(st.fractions(-50, 50, max_denominator=30), min_size=1, max_size=6),
    st.integers(1, 4),
)
def test_a_common_denominator_is_found(values: list[Fraction], times: int) -> None:
    """Doubles of fractions over one denominator give their integers back."""
    unit = math.lcm(*(v.denominator for v in values)) * times
    found = common_denominator(np.array([float(v) for v in values]), 10**12, 1e-13)
    assert found is not None
    integers, denominator = found
    assert unit % denominator == 0
    assert [F(int(i), denominator) for i in integers] == values


def test_a_denominator_beyond_the_limit_is_none() -> None:
    values = np.array([1 / 3, 1 / 7, 1 / 11])
    assert common_denominator(values, 230, 1e-12) is None
    integers, unit = common_denominator(values, 231, 1e-12)
    assert (unit, integers.tolist()) == (231, [77, 33, 21])
    assert common_denominator(np.array([math.pi]), 1000, 1e-12) is None


# ---------------------------------------------------------------------- a search's arithmetic


def arithmetic_of(problem: Problem) -> tuple[Arithmetic, RowStore]:
    """Return the exact side of a search that has just begun."""
    shift = np.array([row.shift for row in problem.rows], int)
    rows = RowStore(problem.matrix, problem.row_least, problem.row_most, shift)
    return Arithmetic(problem, rows), rows


def small_problem() -> Problem:
    """Maximise 2a + 3b + z over 0.1a + 0.2b <= 0.3, a + b + 3z <= 4; a, b whole, z divisible."""
    rules = [
        ([(0, F(1, 10)), (1, F(1, 5))], None, F(3, 10)),
        ([(0, 1), (1, 1), (2, 3)], None, 4),
    ]
    return Problem.build(
        [(0, 2), (1, 3), (2, 1)], 0, True, rules, [0, 0, 0], [5, 5, None], [True, True, False]
    )


def test_plans_fit_exactly_or_not_at_all() -> None:
    arithmetic, _ = arithmetic_of(small_problem())
    assert arithmetic.fits([1, 1, F(2, 3)])
    assert not arithmetic.fits([1, 1, F(2, 3) + F(1, 10**30)])
    assert not arithmetic.fits([2, 1, 0])
    assert not arithmetic.fits([-1, 1, 0])
    assert not arithmetic.fits([0, 0, F(-1, 10**30)])


def never() -> bool:
    """Ask for no early end."""
    return False


def test_plans_are_guessed_and_solved_from_points_in_doubles() -> None:
    arithmetic, _ = arithmetic_of(small_problem())
    assert arithmetic.guess_plan(np.array([1 + 1e-9, 1 - 1e-9, 2 / 3])) == [1, 1, F(2, 3)]
    assert arithmetic.guess_plan(np.array([2.0, 1.0, 0.0])) is None
    assert arithmetic.solve_divisible(np.array([1.0, 1.0, 0.0]), never) == [1, 1, F(2, 3)]
    assert arithmetic.solve_divisible(np.array([0.0, 0.0, 0.0]), never) == [0, 0, F(4, 3)]
    assert arithmetic.solve_divisible(np.array([3.0, 1.0, 0.0]), never) is None


def test_plans_of_large_integers_are_checked_in_integers() -> None:
    """(2^60 + 1) a + b <= 2^61 + 3 holds for (2, 1) and not for (2, 2)."""
    rules = [([(0, 2**60 + 1), (1, 1)], None, 2**61 + 3)]
    problem = Problem.build([(0, 1)], 0, True, rules, [0, 0], [9, 9], [True, True])
    arithmetic, _ = arithmetic_of(problem)
    for plan, good in (([2, 1], True), ([2, 2], False)):
        assert arithmetic.fits(plan, np.array(plan, float)) is good
        assert (arithmetic.guess_plan(np.array(plan, float)) is not None) is good


def test_exact_bounds_of_nodes_agree_with_the_relaxation() -> None:
    """`solve_node` from the basis that doubles ended with: same value, and its own proof."""
    outcomes: Counter[str] = Counter()
    for seed in range(0, SEEDS, 2):
        problem = intplan.Sheet.from_arrays(**random_problem(seed).arrays()).problem()
        arithmetic, rows = arithmetic_of(problem)
        try:
            dictionary = cold_start(rows, problem.cost, problem.least, problem.most)
        except NoDualBasis:
            continue
        status = dictionary.reoptimise().value
        answer = arithmetic.solve_node(
            dictionary.held_rows(), dictionary.basic.tolist(), problem.least, problem.most,
            lambda: False,
        )  # fmt: skip
        outcomes[status] += 1
        assert answer.status == status, seed
        weight = 1 if status == "optimal" else 0
        bound = arithmetic.exact_bound(weight, answer.multipliers, problem.least, problem.most)
        if weight:
            assert float(answer.value) == pytest.approx(dictionary.value, rel=1e-9, abs=1e-9)
            assert bound == answer.value, seed
        else:
            assert bound > 0
    assert min(outcomes.values()) > 10, outcomes


def test_an_exact_bound_needs_every_limit_it_leans_on() -> None:
    """A multiplier on a side without a limit, or a slope towards a missing bound, proves none."""
    problem = small_problem()
    arithmetic, _ = arithmetic_of(problem)
    low, high = problem.least, problem.most
    assert arithmetic.exact_bound(1, {1: F(1)}, low, high) is None  # no least limit
    assert arithmetic.exact_bound(1, {}, low, high) is None  # z may grow for ever
    scale = F(1, 1 << problem.cost_shift)
    bound = arithmetic.exact_bound(1, {1: F(-1) * scale * 2 / 3}, low, high)
    assert bound is not None
    pairs = [(a, b) for a in range(4) for b in range(2) if a + 2 * b <= 3]
    assert -bound / scale >= max(2 * a + 3 * b + (4 - a - b) / F(3) for a, b in pairs)


def test_multipliers_are_guessed_over_one_denominator() -> None:
    guessed = Arithmetic.guess_multipliers(np.array([4, 7, 9]), np.array([1 / 3, -0.25, 1e-17]))
    assert guessed == {4: F(1, 3), 7: F(-1, 4)}
    roots = np.sqrt([2.0, 3.0, 5.0])
    assert Arithmetic.guess_multipliers(np.array([0, 1, 2]), roots) is None
