"""Plans near an earlier one: what is held, what is found, and that nothing else is touched."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import numpy as np
import pytest

import intplan
from intplan.planning.restart import restarted
from intplan.search import nearby
from intplan.search import restart as search_restart
from intplan.search.engine import Search
from intplan.search.evidence import Proof
from intplan.search.limits import Limits
from intplan.search.root import RootWork
from intplan.sheet.changes import change_sheet
from intplan.sheet.problem import Problem
from tests.changes import planners_change
from tests.families import assignment, instance_of, lot_sizing, problem_of, selection
from tests.generators import brute_force, tiny_problem
from tests.reference import INFEASIBLE, reference_milp, settle


def open_root(problem: Problem) -> RootWork | None:
    """Return a root whose relaxation is solved and has a fractional activity, else None."""
    search = Search(problem, Fraction(0), Limits(None, None, None, None))
    search.context.record.open(0, None, 0, ())
    root = RootWork(search.context)
    with np.errstate(divide="ignore", invalid="ignore"):
        if not root.prepare() or not isinstance(root.relax(), Proof):
            return None
    return root if len(root.fractional_rows()) else None


def look(root: RootWork, plan: Sequence[int]) -> bool:
    """Look for a plan near another one."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return nearby.look_nearby(root.context, root.dictionary, root.bounds, plan)


def nowhere(problem: Problem) -> list[int]:
    """Return amounts that no activity has in any plan, so that nothing is held."""
    return [-7] * len(problem.cost)


def test_with_nothing_held_the_best_plan_is_found() -> None:
    """Source: brute force."""
    looked = 0
    for seed in range(150):
        instance = tiny_problem(seed)
        problem = problem_of(instance)
        root = open_root(problem)
        if root is None:
            continue
        outcome, value = brute_force(instance)
        look(root, nowhere(problem))
        best = root.context.best
        looked += best.value is not None
        assert (best.value is None) == (outcome == "infeasible")
        if best.value is not None:
            assert problem.aim_from_cost(best.value) == value
    assert looked >= 10


def test_activities_stay_where_relaxation_and_plan_agree(monkeypatch: pytest.MonkeyPatch) -> None:
    """The plan that is found differs only where the relaxation's point and the plan differ.

    Nothing is let go where the share of the gap that lets go is less than nothing.
    """
    monkeypatch.setattr(nearby, "LIVELY", -1.0)
    problem = problem_of(selection(3, 16, 4))
    root = open_root(problem)
    assert root is not None
    x = root.dictionary.activities()
    plan = [round(v) for v in x]
    fractional = [j for j, v in enumerate(x) if abs(v - round(v)) > 1e-6]
    freed = max(set(range(len(x))) - set(fractional))
    plan[freed] = 1 - plan[freed]
    assert look(root, plan)
    found = root.context.best.plan
    assert found is not None
    moved = {j for j, amount in enumerate(found) if abs(amount - x[j]) > 1e-6}
    assert moved <= {*fractional, freed}


def test_the_relaxation_and_its_bounds_are_left_as_they_are() -> None:
    """The search below goes on from them."""
    problem = problem_of(assignment(4, 10, 2))
    root = open_root(problem)
    assert root is not None
    dictionary, bounds = root.dictionary, root.bounds
    kept = dictionary.table, dictionary.basic, dictionary.at, bounds.least, bounds.most
    before = [part.copy() for part in kept]
    look(root, [0] * len(problem.cost))
    after = dictionary.table, dictionary.basic, dictionary.at, bounds.least, bounds.most
    for one, other in zip(before, after, strict=True):
        np.testing.assert_array_equal(one, other)


def test_amounts_that_doubles_do_not_hold_are_not_held() -> None:
    """An earlier plan may bend a rule further, in the units of the rule, than doubles go."""
    problem = problem_of(assignment(4, 10, 2))
    root = open_root(problem)
    assert root is not None
    huge = [10**400, Fraction(-(10**400), 3)] * len(problem.cost)
    held, costs = nearby._held(
        root.context, root.dictionary, root.bounds, huge[: len(problem.cost)]
    )
    assert not len(held) and not len(costs)


@pytest.mark.parametrize("most", [0, 1, 5])
def test_it_solves_no_more_relaxations_than_it_may(
    most: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """All searches of one look share the limit."""
    solved = []
    solve = nearby._Nearby._solve

    def counted(self: nearby._Nearby, node: nearby._Open) -> bool:
        solved.append(node)
        return solve(self, node)

    monkeypatch.setattr(nearby, "NODES", most)
    monkeypatch.setattr(nearby._Nearby, "_solve", counted)
    problem = problem_of(selection(5, 30, 2))
    root = open_root(problem)
    assert root is not None
    look(root, nowhere(problem))
    assert len(solved) == most


def test_plans_with_divisible_amounts_are_exact() -> None:
    """Whatever is taken meets every rule in rationals."""
    taken = 0
    for seed in range(4):
        problem = problem_of(lot_sizing(2, 8, seed))
        root = open_root(problem)
        assert root is not None
        taken += look(root, nowhere(problem))
        plan = root.context.best.plan
        if plan is not None:
            assert root.context.arithmetic.fits(plan)
            assert problem.exact_cost_of(plan) == root.context.best.value
    assert taken


def test_the_look_saves_nodes_and_changes_no_answer(monkeypatch: pytest.MonkeyPatch) -> None:
    """Source of the values: the reference."""
    counts = {True: 0, False: 0}
    for instance in (assignment(5, 15, 1), assignment(4, 16, 3)):
        standing = intplan.solve(intplan.Sheet.from_arrays(**instance.arrays()))
        for seed in range(5):
            change = planners_change(standing.sheet, standing.exact_plan, seed)
            changes = change_sheet(
                standing.sheet, plan=standing.exact_plan, **change.arguments
            )
            for looks in (True, False):
                with monkeypatch.context() as patch:
                    if not looks:
                        patch.setattr(search_restart, "look_nearby", lambda *args: False)
                    answer = restarted(standing, changes)
                counts[looks] += answer.search.nodes
                changed = instance_of(changes.sheet, "changed", "changed")
                theirs = reference_milp(changed)
                if settle(changed, theirs) == INFEASIBLE:
                    assert answer.outcome == "infeasible"
                else:
                    assert answer.value == pytest.approx(theirs.value)
    assert counts[True] < 0.8 * counts[False], counts
