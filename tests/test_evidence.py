"""Whole search trees proven again from their evidence, in rationals, and tampering noticed."""

from __future__ import annotations

import copy
import math
from collections import Counter
from collections.abc import Callable
from fractions import Fraction
from typing import Any

import numpy as np
import pytest

import intplan
from intplan.search import Added, SearchResult, branch_and_cut
from intplan.sheet.problem import Problem
from tests.families import (
    Instance,
    assignment,
    covering,
    index_of,
    lot_sizing,
    problem_of,
    product_mix,
    selection,
    shift_cover,
)
from tests.generators import KINDS, random_problem, tiny_problem
from tests.verify import Refused, Summary, verify

SEEDS = 30 * len(KINDS)


def added(summaries: list[Summary]) -> Counter[str]:
    """Add up what was proven."""
    total: Counter[str] = Counter()
    for summary in summaries:
        total.update(summary.steps)
        total.update(summary.cuts)
        total.update(
            nodes=summary.nodes, closures=summary.closures, branchings=summary.branchings,
            inherited=summary.inherited, unlisted=summary.unlisted,
        )  # fmt: skip
    return total


def test_random_trees_are_proven_again() -> None:
    """360 problems of every kind: each closure, tightening, cut and branching of each tree."""
    outcomes: Counter[str] = Counter()
    summaries = []
    for seed in range(SEEDS):
        problem = problem_of(random_problem(seed))
        result = branch_and_cut(problem)
        outcomes[result.outcome] += 1
        try:
            summaries.append(verify(problem, result))
        except Refused as refusal:
            pytest.fail(f"problem {seed}: {refusal}")
    total = added(summaries)
    assert outcomes["unfinished"] == 0
    assert min(outcomes[o] for o in ("optimal", "infeasible", "unbounded")) > 20, outcomes
    for kind in ("rule", "whole", "cost", "trial", "gomory", "branchings"):
        assert total[kind] > 20, total
    assert total["closures"] > SEEDS
    assert total["inherited"] == 0
    assert total["unlisted"] == 0


def test_tiny_trees_are_proven_again() -> None:
    for seed in range(80):
        problem = problem_of(tiny_problem(seed))
        verify(problem, branch_and_cut(problem))


SMALL = [
    product_mix(5, 10, 1, scarce=3),
    product_mix(5, 10, 2, scarce=3, limited=False),
    shift_cover(24, (4, 6, 9), 1),
    shift_cover(24, (4, 6, 8), 1, rest=False),
    assignment(4, 10, 1),
    assignment(5, 15, 1),
    selection(5, 15, 1),
    selection(5, 20, 2),
    covering(15, 30, 0.1, 1),
    covering(30, 60, 0.1, 2),
    lot_sizing(1, 8, 1),
    lot_sizing(2, 6, 2),
]


@pytest.mark.parametrize("instance", SMALL, ids=lambda i: i.name)
def test_trees_of_the_families_are_proven_again(instance: Instance) -> None:
    problem = problem_of(instance)
    result = branch_and_cut(problem)
    assert result.outcome == "optimal"
    summary = verify(problem, result)
    assert summary.nodes == len(result.tree)
    assert summary.unlisted == 0


def test_the_families_need_every_kind_of_evidence() -> None:
    """So that what the trees above prove is not proven of nothing."""
    chosen = [i for i in SMALL if i.family in ("shift cover", "assignment", "product mix")]
    problems = [problem_of(instance) for instance in chosen]
    total = added([verify(problem, branch_and_cut(problem)) for problem in problems])
    for kind in ("rule", "cost", "trial", "gomory", "cover", "branchings"):
        assert total[kind] > 5, total


PUBLISHED = [
    entry
    for entry in index_of("published")
    if entry["file"].startswith(("knapsack", "five-day", "parity", "two-products", "petersen-1",
                                 "petersen-2", "petersen-3", "c515-1"))
]  # fmt: skip


@pytest.mark.parametrize("entry", PUBLISHED, ids=lambda e: e["file"])
def test_trees_of_published_instances_are_proven_again(entry: dict[str, Any]) -> None:
    """The sources of the instances stand in their files."""
    problem = intplan.Sheet.read(entry["path"]).problem()
    result = branch_and_cut(problem)
    assert result.outcome == ("infeasible" if entry["file"] == "parity.toml" else "optimal")
    summary = verify(problem, result)
    assert summary.nodes == len(result.tree) >= 1


def test_trees_that_were_cut_short_are_proven_again() -> None:
    """Node limits and interrupts at every poll: the bound is proven, the plan is checked."""
    ends: Counter[Any] = Counter()
    for seed in range(0, SEEDS, 3):
        problem = problem_of(random_problem(seed))
        for polls in (1, 2, 4, 8, 16):
            left = iter(range(polls))
            result = branch_and_cut(problem, stop=lambda left=left: next(left, None) is None)
            ends[result.ended_by] += 1
            verify(problem, result)
        for nodes in (1, 3):
            result = branch_and_cut(problem, node_limit=nodes)
            ends[result.ended_by] += 1
            assert result.nodes <= nodes + 1
            verify(problem, result)
    assert min(ends["interrupt"], ends["nodes"]) > 10, ends


def test_trees_within_a_gap_are_proven_again() -> None:
    """What a gap leaves out is not claimed: every cut-off part costs at least the bound."""
    outcomes: Counter[str] = Counter()
    for seed in range(0, SEEDS, 2):
        problem = problem_of(random_problem(seed))
        for gap in (5, 20, 60):
            result = branch_and_cut(problem, gap=Fraction(gap))
            outcomes[result.outcome] += 1
            try:
                verify(problem, result, gap)
            except Refused as refusal:
                pytest.fail(f"problem {seed}, gap {gap}: {refusal}")
    assert outcomes["within_gap"] > 30, outcomes


# ---------------------------------------------------------------------- tampering

Tampering = Callable[[SearchResult], bool]


def nodes_of(result: SearchResult, outcome: str | None = None) -> list[dict[str, Any]]:
    """Return the attributes of solved nodes, children before parents."""
    return [
        node
        for _, node in sorted(result.tree.nodes(data=True), reverse=True)
        if node["evidence"] and (outcome is None or node["outcome"] == outcome)
    ]


def closures_of(result: SearchResult) -> list[dict[str, Any]]:
    """Return the closures with multipliers, of nodes and of steps."""
    closures = [node["evidence"]["closure"] for node in nodes_of(result)]
    closures += [
        step["closure"]
        for node in nodes_of(result)
        for step in node["evidence"]["steps"]
        if "closure" in step
    ]
    return [c for c in closures if len(c.get("multipliers", ()))]


def raise_bound(result: SearchResult) -> bool:
    """State a bound that the multipliers do not prove."""
    for closure in closures_of(result):
        closure["bound"] = float(Fraction(closure["bound"])) + 1e-3
        return True
    return False


def raise_node_bound(result: SearchResult) -> bool:
    """State a bound of a node that nothing proves."""
    for node in nodes_of(result, "beaten"):
        node["bound"] += 1e-3
        return True
    return False


def change_multiplier(result: SearchResult) -> bool:
    """Double the largest multiplier of the first closure that has some."""
    for closure in closures_of(result):
        values = [Fraction(v) for v in closure["multipliers"]]
        values[max(range(len(values)), key=lambda i: abs(values[i]))] *= 2
        closure["multipliers"] = [str(v) for v in values]
        return True
    return False


def turn_multipliers(result: SearchResult) -> bool:
    """Turn every multiplier of a closure round."""
    for closure in closures_of(result):
        closure["multipliers"] = [str(-Fraction(v)) for v in closure["multipliers"]]
        return True
    return False


def drop_multipliers(result: SearchResult) -> bool:
    """Lose the multipliers of a closed node that needs them."""
    for node in nodes_of(result):
        closure = node["evidence"]["closure"]
        if len(closure.get("multipliers", ())):
            closure["rows"], closure["multipliers"] = [], []
            return True
    return False


def swap_rows(result: SearchResult) -> bool:
    """Give the multipliers to other rules."""
    for closure in closures_of(result):
        if len(closure["rows"]) > 1:
            closure["rows"] = list(closure["rows"])[::-1]
            return True
    return False


def lower_branch(result: SearchResult) -> bool:
    """Leave a whole value out between two children."""
    for node in nodes_of(result):
        if node["added"] and node["added"][0].kind == "most":
            kind, index, value = node["added"][0]
            node["added"] = (Added(kind, index, value - 1),)
            return True
    return False


def split_elsewhere(result: SearchResult) -> bool:
    """Let one child speak of another activity."""
    for node in nodes_of(result):
        if node["added"] and node["added"][0].kind == "least":
            kind, index, value = node["added"][0]
            node["added"] = (Added(kind, index + 1 if index == 0 else index - 1, value),)
            return True
    return False


def lose_a_child(result: SearchResult) -> bool:
    """Take a leaf out of the tree."""
    leaves = [n for n in result.tree if n and not result.tree.out_degree(n)]
    if leaves:
        result.tree.remove_node(leaves[-1])
    return bool(leaves)


def reopen_a_leaf(result: SearchResult) -> bool:
    """Say that a node that emptied is still waiting."""
    for number, node in result.tree.nodes(data=True):
        if number and node["outcome"] == "empty":
            node["outcome"], node["evidence"] = "waiting", None
            return True
    return False


def empty_by_word(result: SearchResult) -> bool:
    """Call a beaten node empty."""
    for node in nodes_of(result, "beaten"):
        if "weight" in node["evidence"]["closure"]:
            node["outcome"] = "empty"
            return True
    return False


def tighten_a_step(by: str) -> Tampering:
    """Return a tampering that tightens further than the evidence of a step does."""

    def tamper(result: SearchResult) -> bool:
        for node in nodes_of(result):
            for step in node["evidence"]["steps"]:
                if (step["by"] == by and "row" not in step) or step["by"] == by == "rule":
                    column, side, value = step["changes"][0]
                    step["changes"] = [(column, side, value - 1 if side else value + 1)]
                    return True
        return False

    return tamper


def tighten_a_rule(result: SearchResult) -> bool:
    """Round a limit of a rule too far."""
    for node in nodes_of(result):
        for step in node["evidence"]["steps"]:
            if step["by"] == "whole" and "row" in step:
                step["changes"] = [
                    (i, side, None if v is None else v - 1 if side else v + 1)
                    for i, side, v in step["changes"]
                ]
                return True
    return False


def forget_steps(result: SearchResult) -> bool:
    """Lose the tightenings that a closure lists."""
    for node in nodes_of(result):
        changed = {
            2 * column + side
            for step in node["evidence"]["steps"]
            if "row" not in step or step["by"] == "rule"
            for column, side, _ in step["changes"]
        }
        used = {int(b) for b in node["evidence"]["closure"].get("bounds", ())}
        if changed & used and not node["evidence"]["closure"]["exact"]:
            node["evidence"]["steps"] = []
            return True
    return False


def forget_the_cut_off(result: SearchResult) -> bool:
    """Say that a tightening by cost holds whatever the best value is."""
    for node in nodes_of(result):
        for step in node["evidence"]["steps"]:
            if step["by"] == "cost":
                step["leans"] = False
                return True
    return False


def raise_a_cut(kind: str) -> Tampering:
    """Return a tampering that moves a cut inward."""

    def tamper(result: SearchResult) -> bool:
        for cut in result.cuts:
            if cut.kind == kind:
                cut.least += 0.1
                return True
        return False

    return tamper


def bend_a_cut(kind: str) -> Tampering:
    """Return a tampering that lowers the coefficients of a cut."""

    def tamper(result: SearchResult) -> bool:
        for cut in result.cuts:
            if cut.kind == kind:
                cut.coefficients = tuple(c - 0.25 for c in cut.coefficients)
                return True
        return False

    return tamper


def change_the_origin_of_a_cut(result: SearchResult) -> bool:
    """Combine the rows of a cut differently."""
    for cut in result.cuts:
        if cut.kind == "gomory":
            values = [Fraction(v) for v in cut.evidence["multipliers"]]
            cut.evidence["multipliers"] = [str(v * Fraction(6, 7)) for v in values]
            return True
    return False


def change_the_bounds_of_a_cut(result: SearchResult) -> bool:
    """Derive a cut from bounds that nothing gave."""
    for cut in result.cuts:
        if len(cut.evidence["bounds"]):
            sides = np.asarray(cut.evidence["bounds"]) & 1
            cut.evidence["values"] = np.asarray(cut.evidence["values"]) + np.where(sides, -1, 1)
            return True
    return False


def better_value(result: SearchResult) -> bool:
    """State a value that the plan does not have."""
    if result.value is not None:
        result.value = result.bound = result.value + 1
    return result.value is not None


def other_plan(result: SearchResult) -> bool:
    """State a plan of another value."""
    if result.plan is not None:
        result.plan = [x + 1 for x in result.plan]
    return result.plan is not None


def no_plan_at_all(result: SearchResult) -> bool:
    """Deny that there is a plan."""
    if result.outcome != "optimal":
        return False
    result.outcome, result.plan, result.value, result.bound = "infeasible", None, None, None
    return True


def optimal_after_all(result: SearchResult) -> bool:
    """Claim a bound although the answer has none."""
    if result.outcome != "unbounded":
        return False
    result.outcome, result.bound = "optimal", result.value
    return True


def turn_the_ray(result: SearchResult) -> bool:
    """Point the ray the other way."""
    if result.ray is not None:
        result.ray = [-d for d in result.ray]
    return result.ray is not None


TAMPERINGS: dict[str, tuple[Tampering, float]] = {
    "bound": (raise_bound, 1.0),
    "bound of a node": (raise_node_bound, 0.95),
    "multiplier": (change_multiplier, 0.5),
    "signs": (turn_multipliers, 0.9),
    "no multipliers": (drop_multipliers, 0.9),
    "rows": (swap_rows, 0.6),
    "branch": (lower_branch, 1.0),
    "activity": (split_elsewhere, 1.0),
    "leaf": (lose_a_child, 1.0),
    "waiting": (reopen_a_leaf, 0.9),
    "empty": (empty_by_word, 1.0),
    "step by rule": (tighten_a_step("rule"), 0.9),
    "step by cost": (tighten_a_step("cost"), 0.9),
    "step by trial": (tighten_a_step("trial"), 0.9),
    "step by whole": (tighten_a_step("whole"), 1.0),
    "limit of a rule": (tighten_a_rule, 1.0),
    "steps": (forget_steps, 0.8),
    "cut-off": (forget_the_cut_off, 1.0),
    "gomory": (raise_a_cut("gomory"), 0.8),
    "gomory bent": (bend_a_cut("gomory"), 0.9),
    "gomory origin": (change_the_origin_of_a_cut, 0.7),
    "bounds of a cut": (change_the_bounds_of_a_cut, 0.9),
    "value": (better_value, 1.0),
    "plan": (other_plan, 0.95),
    "no plan": (no_plan_at_all, 1.0),
    "optimal": (optimal_after_all, 1.0),
    "ray": (turn_the_ray, 1.0),
}


def wider_by_halves(instance: Instance) -> Instance:
    """Return an instance whose bounds are no whole numbers."""
    least, most = instance.least - 0.5, instance.most + 0.5
    return Instance(**{**vars(instance), "least": least, "most": most})


@pytest.fixture(scope="module")
def answers() -> list[tuple[Problem, SearchResult]]:
    """Answers that are proven; tampering starts from copies of them."""
    instances = [random_problem(seed) for seed in range(240)]
    instances += [wider_by_halves(instance) for instance in instances[:48]]
    problems = [problem_of(instance) for instance in instances]
    kept = [(problem, branch_and_cut(problem)) for problem in problems]
    for problem, result in kept:
        verify(problem, result)
    return kept


AIMED = ("bound", "bound of a node")  # a tree that looks for any plan claims no bounds


@pytest.mark.parametrize("name", TAMPERINGS)
def test_tampering_is_noticed(
    name: str, answers: list[tuple[Problem, SearchResult]]
) -> None:
    """Wherever it changes what is proven: some changes leave a proof that still holds.

    The share that must be refused is stated beside each; 1 where no change can be harmless.
    """
    tamper, share = TAMPERINGS[name]
    tried = refused = 0
    for problem, result in answers:
        changed = copy.deepcopy(result)
        if (result.any_plan and name in AIMED) or not tamper(changed):
            continue
        tried += 1
        try:
            verify(problem, changed)
        except Refused:
            refused += 1
    assert tried >= 3, tried
    assert refused >= share * tried, (refused, tried)


@pytest.mark.parametrize("tamper", [raise_a_cut("cover"), bend_a_cut("cover")])
def test_tampering_with_cover_cuts_is_noticed(tamper: Tampering) -> None:
    problem = problem_of(assignment(5, 15, 1))
    result = branch_and_cut(problem)
    verify(problem, result)
    assert tamper(result)
    with pytest.raises(Refused, match="cut"):
        verify(problem, result)


def test_a_forged_proof_of_a_small_sheet_is_refused() -> None:
    """Maximise 5a + 4b over 6a + 4b <= 24, a + 2b <= 6 in whole units: the best is 20."""
    sheet = intplan.Sheet.from_arrays([5, 4], [[6, 4], [1, 2]], row_most=[24, 6], maximize=True)
    problem = sheet.problem()
    result = branch_and_cut(problem)
    verify(problem, result)
    assert (result.value, result.bound) == (20, 20)
    forged = copy.deepcopy(result)
    forged.plan, forged.value, forged.bound = [3, 1], Fraction(19), Fraction(19)
    with pytest.raises(Refused):
        verify(problem, forged)
    forged = copy.deepcopy(result)
    forged.plan = [4, 1]
    with pytest.raises(Refused, match="rule 0"):
        verify(problem, forged)
    assert math.isfinite(result.tree.nodes[0]["bound"])
