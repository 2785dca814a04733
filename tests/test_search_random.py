"""The search against outside references, a brute force, and facts of the trade."""

from __future__ import annotations

import math
import time
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import product
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from scipy.optimize import linear_sum_assignment

import intplan
from intplan.search import SearchResult, branch_and_cut, exact, root
from intplan.sheet.problem import Number, Problem, Terms
from tests import reference
from tests.families import Instance, assignment, build, covering, problem_of
from tests.generators import KINDS, brute_force, problems, random_problem, tiny_problem
from tests.reference import reference_milp, settle
from tests.verify import check_plan, check_ray, verify

SEEDS = 30 * len(KINDS)
F = Fraction


def solved(instance: Instance, **options: Any) -> SearchResult:
    """Solve an instance and check the answer's plan, ray and whole tree exactly."""
    problem = problem_of(instance)
    result = branch_and_cut(problem, **options)
    verify(problem, result, options.get("gap", 0))
    return result


def exact_answer(instance: Instance) -> tuple[str, Number | None]:
    """Return the outcome and the value, proven from the evidence."""
    result = solved(instance)
    assert result.outcome != "unfinished", instance.name
    return result.outcome, result.value


def refuted(instance: Instance, answer: reference.Reference, result: SearchResult) -> str | None:
    """Return why the reference is wrong where it differs; None where that cannot be shown.

    Our answer has been proven by `verify` before.  What the reference says is held against the
    same exact data: its plan, rounded, breaks a rule; or its value lies beyond a proven bound or
    below a plan that is checked; or it denies a plan, a ray, that can be checked.
    """
    problem = problem_of(instance)
    status = settle(instance, answer)
    if result.outcome == "unbounded":
        check_plan(problem, result.plan)
        check_ray(problem, result.ray)
        return "a plan and a ray show that the aim has no limit"
    if result.outcome == "optimal" and status != reference.OPTIMAL:
        check_plan(problem, result.plan)
        return "a plan and a bound show an optimum" if result.bound == result.value else None
    if result.outcome == "infeasible":
        return "every leaf of the tree is contradicted exactly"
    sign = -1 if instance.maximize else 1
    if sign * (answer.value - float(result.value)) > 0:
        return "a better plan is checked"
    return "its plan lies beyond a bound that is proven"


def test_optima_agree_with_the_reference() -> None:
    """Source: scipy.optimize.milp with a zero gap, over every kind of small problem.

    Where it differs, exact arithmetic decides; the reference is sometimes wrong about aims
    without a limit, but agrees on every problem that has an optimum.
    """
    outcomes: Counter[str] = Counter()
    for seed in range(SEEDS):
        instance = random_problem(seed)
        result = solved(instance)
        outcomes[result.outcome] += 1
        answer = reference_milp(instance)
        status = settle(instance, answer)
        expected = {
            reference.OPTIMAL: "optimal",
            reference.INFEASIBLE: "infeasible",
            reference.UNBOUNDED: "unbounded",
        }[status]
        agrees = result.outcome == expected and (
            expected != "optimal"
            or float(result.value) == pytest.approx(answer.value, rel=1e-6, abs=1e-6)
        )
        if not agrees:
            outcomes["settled"] += 1
            assert refuted(instance, answer, result), (seed, result.outcome, answer)
    assert outcomes["unfinished"] == 0
    assert outcomes["optimal"] > 200 < sum(outcomes.values())
    assert min(outcomes["infeasible"], outcomes["unbounded"]) > 20, outcomes
    assert outcomes["settled"] < 10, outcomes


def test_tiny_problems_agree_with_brute_force() -> None:
    """Every plan of 300 whole, bounded problems tried in integers."""
    outcomes: Counter[str] = Counter()
    for seed in range(300):
        instance = tiny_problem(seed)
        assert exact_answer(instance) == brute_force(instance), seed
        outcomes[brute_force(instance)[0]] += 1
    assert min(outcomes.values()) > 30, outcomes


@settings(max_examples=120)
@given(problems(largest=4, bounded=True))
def test_drawn_problems_agree_with_brute_force(instance: Instance) -> None:
    """Hypothesis shrinks what differs to the smallest such problem."""
    assert exact_answer(instance) == brute_force(instance)


@settings(max_examples=80)
@given(problems(largest=4))
def test_drawn_problems_have_proven_answers(instance: Instance) -> None:
    """Mixed, open and free activities: whatever is claimed is proven."""
    result = solved(instance, node_limit=300)
    assert result.outcome in ("optimal", "infeasible", "unbounded") or result.ended_by == "nodes"


def test_plain_assignment_agrees_with_the_reference() -> None:
    """Source: scipy.optimize.linear_sum_assignment; the relaxation is whole by itself."""
    for seed in range(25):
        rng = np.random.default_rng(seed)
        n = int(rng.integers(2, 8))
        gain = rng.integers(1, 40, (n, n))
        rows = np.zeros((2 * n, n * n))
        for i in range(n):
            rows[i, i * n : (i + 1) * n] = 1
            rows[n + i, i::n] = 1
        maximize = bool(seed % 2)
        instance = build("plain", "plain", gain.ravel(), rows, 1, 1, most=1, maximize=maximize)
        result = solved(instance)
        who, what = linear_sum_assignment(gain, maximize=maximize)
        assert result.outcome == "optimal"
        assert result.value == int(gain[who, what].sum())


def test_the_same_problem_gives_the_same_tree() -> None:
    """Nodes, bounds, outcomes, cuts and multipliers, twice over."""
    for instance in (*map(random_problem, range(0, 120, 5)), assignment(5, 15, 1),
                     covering(30, 60, 0.1, 2)):  # fmt: skip
        one, two = (branch_and_cut(problem_of(instance)) for _ in range(2))
        assert (one.plan, one.nodes, one.pivots) == (two.plan, two.nodes, two.pivots)
        assert list(one.tree.edges) == list(two.tree.edges)
        for number in one.tree:
            a, b = dict(one.tree.nodes[number]), dict(two.tree.nodes[number])
            a["seconds"] = b["seconds"] = 0
            assert repr(a) == repr(b)
        assert repr(one.cuts) == repr(two.cuts)


# ---------------------------------------------------------------------- limits

HARD = covering(50, 100, 0.1, 1)


def test_a_node_limit_leaves_a_true_bound() -> None:
    best = branch_and_cut(problem_of(HARD)).value
    for limit in (1, 2, 5, 20):
        result = solved(HARD, node_limit=limit)
        assert (result.outcome, result.ended_by) == ("unfinished", "nodes")
        assert result.nodes <= limit
        assert result.bound <= best
        assert result.plan is None or result.value >= best


def test_a_time_limit_is_kept_with_a_true_bound() -> None:
    best = branch_and_cut(problem_of(HARD)).value
    for limit in (0.0, 0.02, 0.1):
        started = time.perf_counter()
        result = solved(HARD, time_limit=limit)
        assert time.perf_counter() - started < limit + 5
        if result.outcome == "unfinished":
            assert result.ended_by == "time"
            assert result.bound is None or result.bound <= best
            assert result.plan is None or result.value >= best
        else:
            assert result.value == best
    assert solved(HARD, time_limit=0.0).outcome == "unfinished"


def test_an_interrupt_leaves_a_true_bound_at_every_poll() -> None:
    instance = assignment(5, 15, 1)
    best = branch_and_cut(problem_of(instance)).value
    ends = Counter()
    for polls in (1, 2, 3, 5, 8, 13, 21, 34, 55):
        left = iter(range(polls))
        result = solved(instance, stop=lambda left=left: next(left, None) is None)
        ends[result.ended_by] += 1
        assert result.bound is None or result.bound >= best
        assert result.value is None or result.value <= best
        assert result.outcome == "unfinished" or result.value == best
    assert ends["interrupt"] > 3, ends


def test_an_interrupt_inside_the_root_proves_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    """A plan found by rounding is not called best when the root itself was not finished."""

    def interrupted(self: root.RootWork, proof: object) -> None:
        raise exact.Stopped

    for seed in range(60):
        rng = np.random.default_rng(seed)
        weights, gains = rng.integers(3, 10, (1, 4)), rng.integers(3, 10, 4)
        instance = build("sack", "sack", gains, weights, row_most=20, most=3, maximize=True)
        best = branch_and_cut(problem_of(instance)).value
        with monkeypatch.context() as patch:
            patch.setattr(root.RootWork, "cut", interrupted)
            result = branch_and_cut(problem_of(instance))
        verify(problem_of(instance), result)
        assert result.outcome != "optimal" or result.value == best, seed
        assert result.bound is None or result.bound >= best, seed


def test_progress_is_reported_in_units_of_the_aim() -> None:
    told: list[tuple[Number | None, Number | None]] = []
    result = branch_and_cut(problem_of(HARD), progress=lambda *state: told.append(state),
                            time_limit=2.0)  # fmt: skip
    for value, bound in told:
        assert value is None or value >= result.bound
        assert bound is None or value is None or bound <= value
    assert len(told) <= result.seconds / 0.25 + 1


def test_a_gap_is_a_percentage_of_the_value() -> None:
    """Within the gap of the true best, and the bound is true as well."""
    for instance in (*map(random_problem, range(0, 240, 2)), HARD):
        best = branch_and_cut(problem_of(instance))
        if best.outcome != "optimal":
            continue
        for gap in (2, 15, 50):
            result = solved(instance, gap=F(gap))
            assert result.outcome in ("optimal", "within_gap")
            sign = -1 if instance.maximize else 1
            assert sign * (best.value - result.bound) >= 0, (instance.name, gap)
            assert sign * (result.value - best.value) >= 0
            assert 100 * abs(result.value - best.value) <= gap * abs(result.value)
            if result.outcome == "optimal":
                assert result.value == best.value


# ---------------------------------------------------------------------- small sheets by hand


def solve(
    aim: Terms,
    maximize: bool,
    rules: Sequence[tuple[Terms, Number | None, Number | None]],
    least: Sequence[Number | None],
    most: Sequence[Number | None],
    whole: Sequence[bool] | None = None,
    **options: Any,
) -> SearchResult:
    """Solve exact data and check the answer exactly."""
    flags = [True] * len(least) if whole is None else whole
    problem = Problem.build(aim, 0, maximize, rules, least, most, flags)
    result = branch_and_cut(problem, **options)
    verify(problem, result)
    return result


def test_parity_is_refused_at_once() -> None:
    """2*x1 + ... + 2*x41 = 41 in 0-1 activities.

    Source: R. G. Jeroslow, Trivial integer programs unsolvable by branch-and-bound, Mathematical
    Programming 6:105-109, 1974 (an even sum that must be odd; the size is ours).
    """
    n = 41
    result = solve([(0, 1)], False, [([(i, 2) for i in range(n)], n, n)], [0] * n, [1] * n)
    assert (result.outcome, result.pivots, len(result.tree)) == ("infeasible", 0, 1)


def test_one_of_two_activities() -> None:
    """Minimise 10a + 5b with a + b >= 1 in 0-1 activities: b alone."""
    result = solve([(0, 10), (1, 5)], False, [([(0, 1), (1, 1)], 1, None)], [0, 0], [1, 1])
    assert (result.outcome, result.value, result.plan) == ("optimal", 5, [0, 1])


def test_negative_bounds() -> None:
    """Minimise a + b with 2a + 3b >= -7, both between -5 and 5: a = -5, b = 1."""
    result = solve([(0, 1), (1, 1)], False, [([(0, 2), (1, 3)], -7, None)], [-5, -5], [5, 5])
    assert (result.outcome, result.value) == ("optimal", -4)


def test_divisible_amounts_are_exact() -> None:
    """Maximise a + b with 3a + b <= 1 and a + 3b <= 1: a = b = 1/4."""
    rules = [([(0, 3), (1, 1)], None, 1), ([(0, 1), (1, 3)], None, 1)]
    result = solve([(0, 1), (1, 1)], True, rules, [0, 0], [None, None], [False, False])
    assert (result.outcome, result.value) == ("optimal", F(1, 2))
    assert result.plan == [F(1, 4), F(1, 4)]


def test_bounds_that_doubles_cannot_hold() -> None:
    """A divisible activity up to 1/3, and a plan that reaches it."""
    result = solve([(0, 1), (1, 1)], True, [([(0, 1), (1, 1)], None, F(10, 3))], [0, 0],
                   [F(1, 3), None], [False, True])  # fmt: skip
    assert (result.value, result.plan) == (F(10, 3), [F(1, 3), 3])


def test_decimals_are_rationals() -> None:
    """0.1a + 0.2b <= 0.3 holds at a = b = 1, although it does not in doubles."""
    assert 0.1 + 0.2 > 0.3
    rules = [([(0, F(1, 10)), (1, F(2, 10))], None, F(3, 10))]
    assert solve([(0, 1), (1, 1)], True, rules, [0, 0], [1, 1]).plan == [1, 1]
    equality = [([(0, F(1, 10)), (1, F(2, 10))], F(3, 10), F(3, 10))]
    assert solve([(0, 1), (1, 1)], True, equality, [0, 0], [1, 1]).plan == [1, 1]


def test_an_activity_in_no_rule_and_a_sheet_without_rules() -> None:
    assert solve([(0, -2), (1, 3)], True, [], [1, 0], [5, 4]).value == 10
    result = solve([(0, 1), (1, 1)], True, [([(0, 1)], None, 3)], [0, 0], [None, 7])
    assert (result.outcome, result.value) == ("optimal", 10)
    result = solve([(0, 1), (1, 1)], True, [([(0, 1)], None, 3)], [0, 0], [None, None])
    assert result.outcome == "unbounded"


def test_an_empty_rule_is_true_or_false() -> None:
    assert solve([(0, 1)], True, [([], -1, 1)], [0], [3]).value == 3
    for whole in (True, False):
        assert solve([(0, 1)], True, [([], 1, None)], [0], [3], [whole]).outcome == "infeasible"


@pytest.mark.parametrize("bounds", [(0, 9), (None, None), (0, None), (None, 9)])
def test_without_an_aim_any_plan_will_do(bounds: tuple[int | None, int | None]) -> None:
    """3a - 5b = 1 and 2a + b >= 3; and the same with a rule that no whole plan meets."""
    low, high = [bounds[0]] * 2, [bounds[1]] * 2
    rules = [([(0, 3), (1, -5)], 1, 1), ([(0, 2), (1, 1)], 3, None)]
    result = solve([], False, rules, low, high)
    assert (result.outcome, result.value) == ("optimal", 0)
    result = solve([], False, [*rules, ([(0, 2), (1, 4)], 7, 7)], low, high)
    assert result.outcome == "infeasible"


def test_an_aim_without_a_limit_is_told_from_a_sheet_without_a_plan() -> None:
    """Maximise a with a - b = 0 and nothing above; with 2a - 2b = 1 there is no plan."""
    result = solve([(0, 1)], True, [([(0, 1), (1, -1)], 0, 0)], [0, 0], [None, None])
    assert result.outcome == "unbounded"
    result = solve([(0, 1)], True, [([(0, 2), (1, -2)], 1, 1)], [0, 0], [None, None])
    assert result.outcome == "infeasible"


def test_equalities_over_unbounded_whole_activities() -> None:
    """Coins of 7 and 11, the fewest for 100: 3 + 7 (7*8 + 11*4 = 100 takes 12)."""
    rules = [([(0, 7), (1, 11)], 100, 100)]
    result = solve([(0, 1), (1, 1)], False, rules, [0, 0], [None, None])
    assert (result.outcome, result.value, result.plan) == ("optimal", 12, [8, 4])


def test_free_whole_activities_with_equalities() -> None:
    """6a + 10b + 15c = 1 over all whole numbers, a + b + c least with each at least -20."""
    rules = [([(0, 6), (1, 10), (2, 15)], 1, 1)]
    result = solve([(0, 1), (1, 1), (2, 1)], False, rules, [-20] * 3, [None] * 3)
    plans = [
        (a, b, c)
        for a in range(-20, 90) for b in range(-20, 60) for c in range(-20, 40)
        if 6 * a + 10 * b + 15 * c == 1
    ]  # fmt: skip
    assert result.value == min(map(sum, plans))


def test_whole_activities_that_never_meet_a_rule_end_unfinished() -> None:
    """2a - 2b + z = 1 with z up to 1/2 and nothing above a and b: no plan, and no end in sight."""
    result = solve([(0, 1)], False, [([(0, 2), (1, -2), (2, 1)], 1, 1)], [0] * 3,
                   [None, None, F(1, 2)], [True, True, False], node_limit=50)  # fmt: skip
    assert result.outcome in ("infeasible", "unfinished")
    assert result.plan is None


# ---------------------------------------------------------------------- large numbers


def test_a_rule_beyond_doubles_is_exact() -> None:
    """(10^9 + 7) * 10^8 + b <= (10^9 + 7) * 10^8 + 5: b = 5, though doubles round the limit."""
    limit = (10**9 + 7) * 10**8 + 5
    result = solve([(1, 1)], True, [([(0, 10**9 + 7), (1, 1)], None, limit)], [10**8, 0],
                   [10**8, None])  # fmt: skip
    assert (result.outcome, result.value) == ("optimal", 5)


def test_coefficients_beyond_doubles_are_exact() -> None:
    """(2^60 + 1) a <= 3 * 2^60 + 2: a = 2, although in doubles 3 would fit."""
    result = solve([(0, 1)], True, [([(0, 2**60 + 1)], None, 3 * 2**60 + 2)], [0], [None])
    assert (result.outcome, result.value) == ("optimal", 2)
    result = solve([(0, 2**60 + 1), (1, 2**60)], True, [([(0, 1), (1, 1)], None, 1)], [0, 0],
                   [1, 1])  # fmt: skip
    assert (result.plan, result.value) == ([1, 0], 2**60 + 1)


def test_a_bound_beyond_doubles_is_no_reason_to_guess() -> None:
    """At most 2^53 + 1: whatever is called optimal is that number."""
    result = solve([(0, 1)], True, [], [0], [2**53 + 1], node_limit=100)
    assert result.outcome == "unfinished" or result.value == 2**53 + 1
    assert result.bound is None or result.bound >= 2**53 + 1


def test_a_tiny_coefficient_does_not_bound_anything() -> None:
    """Maximise a with 2^70 a - b <= 5: b rises with a, so that there is no limit."""
    result = solve([(0, 1)], True, [([(0, 2**70), (1, -1)], None, 5)], [0, 0], [None, None],
                   node_limit=100)  # fmt: skip
    assert result.outcome in ("unbounded", "unfinished")


def test_limits_of_large_rules() -> None:
    """3a + 7b <= 10^18 + 1: floor((10^18 + 1) / 3) units; nothing false is claimed on the way."""
    result = solve([(0, 1), (1, 1)], True, [([(0, 3), (1, 7)], None, 10**18 + 1)], [0, 0],
                   [None, None], node_limit=200)  # fmt: skip
    best = (10**18 + 1) // 3
    assert result.outcome == "unfinished" or result.value == best
    assert result.bound is None or result.bound >= best


def test_scales_that_lie_far_apart() -> None:
    """Maximise a + b / 10^25 with 3a + 7b <= 100, b divisible: 33 and 1/7."""
    rules = [([(0, 3), (1, 7)], None, 100)]
    result = solve([(0, 1), (1, F(1, 10**25))], True, rules, [0, 0], [None, None], [True, False])
    assert (result.outcome, result.plan) == ("optimal", [33, F(1, 7)])


@dataclass
class Sack:
    """Maximise over a few rules with large coefficients, in whole units of a small box."""

    aim: list[int]
    rows: list[list[int]]
    row_most: list[int]
    most: list[int]

    @classmethod
    def draw(cls, seed: int, digits: int) -> Sack:
        """Draw coefficients of up to so many digits."""
        rng = np.random.default_rng([seed, digits])
        size = 10**digits
        columns, rules = (int(v) for v in rng.integers(1, 4, 2))
        return cls(
            rng.integers(1, size, columns).tolist(),
            rng.integers(1, size, (rules, columns)).tolist(),
            [int(v) * size for v in rng.integers(3, 12, rules)],
            rng.integers(1, 9, columns).tolist(),
        )

    def problem(self) -> Problem:
        """Return the problem in exact integers."""
        rules = [
            (list(enumerate(row)), None, limit)
            for row, limit in zip(self.rows, self.row_most, strict=True)
        ]
        aim, columns = list(enumerate(self.aim)), len(self.most)
        return Problem.build(aim, 0, True, rules, [0] * columns, self.most, [True] * columns)

    def best(self) -> int:
        """Return the best value, by trying every plan."""
        return max(
            sum(c * x for c, x in zip(self.aim, plan, strict=True))
            for plan in product(*(range(m + 1) for m in self.most))
            if all(
                sum(a * x for a, x in zip(row, plan, strict=True)) <= limit
                for row, limit in zip(self.rows, self.row_most, strict=True)
            )
        )


@pytest.mark.parametrize("digits", [6, 9, 11, 13, 15, 18])
def test_random_large_numbers_agree_with_brute_force(digits: int) -> None:
    """Where doubles stop telling neighbouring plans apart, exact arithmetic goes on."""
    for seed in range(15):
        sack = Sack.draw(seed, digits)
        result = branch_and_cut(sack.problem(), node_limit=300)
        if digits <= 11:
            verify(sack.problem(), result)
        best = sack.best()
        assert result.outcome in ("optimal", "unfinished")
        assert result.bound is None or result.bound >= best, seed
        assert (result.value == best) or (result.outcome == "unfinished"), seed
        assert result.outcome == "optimal" or digits > 13, seed


# ---------------------------------------------------------------------- facts of the trade


def with_rule(instance: Instance, row: np.ndarray, least: float, most: float) -> Instance:
    """Return an instance with one rule more."""
    return Instance(
        **{
            **vars(instance),
            "rows": np.vstack((instance.rows, row)),
            "row_least": np.append(instance.row_least, least),
            "row_most": np.append(instance.row_most, most),
        }
    )


def test_a_rule_that_the_best_plan_meets_changes_no_value() -> None:
    """The best plan stays best with the same value (common practice, no source)."""
    tried = 0
    for seed in range(SEEDS):
        instance = random_problem(seed)
        result = branch_and_cut(problem_of(instance))
        if result.outcome != "optimal" or not instance.whole.all():
            continue
        tried += 1
        rng = np.random.default_rng([seed, 90])
        row = rng.integers(1, 6, len(instance.aim)).astype(float)
        met = float(sum(int(a) * x for a, x in zip(row, result.plan, strict=True)))
        limits = ((met, np.inf), (-np.inf, met), (met, met))[seed % 3]
        changed = solved(with_rule(instance, row, *limits))
        assert (changed.outcome, changed.value) == ("optimal", result.value), seed
    assert tried > 120


def test_a_rule_beyond_every_bound_leaves_no_plan() -> None:
    """Violated with everything at its most helpful bound (common practice, no source)."""
    tried = 0
    for seed in range(SEEDS):
        instance = random_problem(seed)
        if not (np.isfinite(instance.least).all() and np.isfinite(instance.most).all()):
            continue
        tried += 1
        rng = np.random.default_rng([seed, 91])
        row = rng.integers(1, 6, len(instance.aim)) * rng.choice([-1, 1], len(instance.aim))
        highest = float(np.where(row > 0, instance.most, instance.least) @ row)
        changed = solved(with_rule(instance, row.astype(float), highest + 1, np.inf))
        assert changed.outcome == "infeasible", seed
        assert math.isinf(changed.tree.nodes[0]["bound"])
        assert len(changed.tree) == 1
    assert tried > 80


def test_the_value_of_a_plan_is_what_the_sheet_says() -> None:
    """`Sheet.aim_value` and `Sheet.check` agree with the search, in the units of the sheet."""
    for seed in range(0, SEEDS, 2):
        sheet = intplan.Sheet.from_arrays(**random_problem(seed).arrays())
        result = branch_and_cut(sheet.problem())
        if result.plan is not None:
            assert sheet.aim_value(result.plan) == result.value
            assert not sheet.check(result.plan).broken
