"""Cuts: none takes a whole plan away, each takes the relaxation's point away."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import replace
from fractions import Fraction
from itertools import product
from typing import Any

import numpy as np
import pytest

import intplan
from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.rows import RowStore
from intplan.relaxation.start import cold_start
from intplan.search import Cut, branch_and_cut
from intplan.search.cuts.candidate import EFFICACY, PARALLEL, Candidate, choose
from intplan.search.cuts.cover import cover_cut
from intplan.search.cuts.distances import Limits, Rounding
from intplan.search.cuts.gomory import gomory_cuts
from intplan.search.cuts.integers import integer_gomory_cut
from intplan.search.cuts.separation import Separator
from intplan.search.evidence import Proof
from intplan.search.root import RootWork
from intplan.search.tightening import Bounds
from intplan.sheet.problem import Problem
from tests.families import Instance, assignment, build, index_of, lot_sizing, problem_of
from tests.generators import KINDS, random_problem, tiny_problem
from tests.reference import OPTIMAL, reference_linprog
from tests.verify import verify

F = Fraction


def plans_of(problem: Problem, reach: int = 6) -> np.ndarray:
    """Return every whole plan, (plans, columns), with open bounds cut at `reach` units."""
    ranges = []
    for low, high in zip(problem.exact_least, problem.exact_most, strict=True):
        first = math.ceil(low) if low is not None else (-reach if high is None else high - reach)
        last = math.floor(high) if high is not None else first + reach
        ranges.append(range(first, last + 1))
    grid = np.array(list(product(*ranges)), object).reshape(-1, len(ranges))
    good = np.ones(len(grid), bool)
    for row in problem.rows:
        values = grid[:, list(row.columns)] @ np.array(row.coefficients, object)
        good &= np.array([row.least is None or v >= row.least for v in values], bool)
        good &= np.array([row.most is None or v <= row.most for v in values], bool)
    return grid[good]


def cuts_off(columns: Sequence[int], coefficients: Sequence[float], least: float,
             plans: np.ndarray) -> np.ndarray:  # fmt: skip
    """Return the plans that a row of doubles takes away, judged exactly."""
    terms = [F(float(c)) for c in coefficients]
    values = [
        sum(c * plan[j] for j, c in zip(columns, terms, strict=True)) for plan in plans.tolist()
    ]
    return plans[np.array([v < F(float(least)) for v in values], bool)]


def small_problems() -> Iterator[tuple[str, Problem]]:
    """Yield whole problems with few enough plans to try, fractional bounds among them."""
    for seed in range(60 * len(KINDS)):
        instance = random_problem(seed)
        if instance.whole.all() and len(instance.aim) <= 5:
            yield instance.name, problem_of(instance)
    for seed in range(300):
        yield f"tiny-{seed}", problem_of(tiny_problem(seed))


@pytest.fixture(scope="module")
def searched() -> list[tuple[Problem, np.ndarray, Any]]:
    """Problems with cuts, their plans, and the answers of their searches."""
    kept = []
    for _, problem in small_problems():
        result = branch_and_cut(problem)
        if result.cuts and result.outcome in ("optimal", "infeasible"):
            kept.append((problem, plans_of(problem), result))
    return kept


def costs_of(problem: Problem, plans: np.ndarray) -> np.ndarray:
    """Return the costs of plans."""
    if not problem.exact_cost:
        return np.zeros(len(plans), object)
    columns, coefficients = zip(*problem.exact_cost, strict=True)
    return plans[:, list(columns)] @ np.array(coefficients, object)


def test_cuts_of_searches_keep_every_plan_they_must(
    searched: list[tuple[Problem, np.ndarray, Any]],
) -> None:
    """All plans, or, for a cut that leans on the best value so far, those that are better."""
    checked: Counter[tuple[str, bool]] = Counter()
    for problem, plans, result in searched:
        costs = costs_of(problem, plans)
        best = None if result.plan is None else costs_of(problem, np.array([result.plan], object))
        for cut in result.cuts:
            lost = cuts_off(cut.columns, cut.coefficients, cut.least, plans)
            if cut.leans:
                better = costs_of(problem, lost) < best[0]
                assert not better.any(), cut
            else:
                assert not len(lost), cut
            checked[cut.kind, cut.leans] += 1
        assert result.outcome != "infeasible" or not len(plans)
        if len(plans) and best is not None and all(
            None not in ends for ends in zip(problem.exact_least, problem.exact_most, strict=True)
        ):
            assert costs.min() == best[0]
    assert checked["gomory", False] > 80, checked


def test_cuts_take_the_point_away_that_they_were_made_for(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Every cut that enters is violated at the relaxation's point, by more than rounding."""
    depths: list[float] = []
    separate = Separator.separate

    def watched(self: Separator, dictionary: Dictionary, rows: np.ndarray) -> np.ndarray:
        x = dictionary.activities()
        numbers = separate(self, dictionary, rows)
        store = self.context.rows
        for number in numbers:
            line = store.matrix[number]
            depths.append((store.least[number] - line @ x) / np.sqrt(line @ line))
        return numbers

    monkeypatch.setattr(Separator, "separate", watched)
    for _, problem in small_problems():
        branch_and_cut(problem)
    for instance in (assignment(5, 15, 1), assignment(8, 24, 1)):
        branch_and_cut(problem_of(instance))
    assert len(depths) > 200
    assert min(depths) > EFFICACY


def relaxed(problem: Problem) -> tuple[Dictionary, RowStore, Bounds] | None:
    """Solve a relaxation, the limits of whole rules rounded; None unless it has an optimum."""
    shift = np.array([row.shift for row in problem.rows], int)
    limits = [
        [np.inf if v is None else float(inward(v)) for v in values]
        for values, inward in (
            ([r.least for r in problem.rows], math.ceil),
            ([r.most for r in problem.rows], math.floor),
        )
    ]
    stepped = np.array([problem.whole[list(r.columns)].all() for r in problem.rows], bool)
    unit = 2.0**-shift
    rows = RowStore(
        problem.matrix,
        np.where(stepped & np.isfinite(problem.row_least), limits[0] * unit, problem.row_least),
        np.where(stepped & np.isfinite(problem.row_most), limits[1] * unit, problem.row_most),
        shift,
    )
    dictionary = cold_start(rows, problem.cost, problem.least, problem.most)
    if dictionary.reoptimise().value != "optimal":
        return None
    bounds = Bounds(
        problem.least.copy(), problem.most.copy(), np.zeros((2, len(problem.cost)), bool)
    )
    return dictionary, rows, bounds


def gomory_candidates(
    problem: Problem, exactly: bool
) -> Iterator[tuple[Candidate, np.ndarray]]:
    """Yield the cuts of every fractional row of a relaxation, and the point."""
    solved = relaxed(problem)
    if solved is None:
        return
    dictionary, rows, bounds = solved
    grain = np.array(
        [2.0**-r.shift if problem.whole[list(r.columns)].all() else 0.0 for r in problem.rows]
    )
    reach = float(np.maximum(np.abs(problem.least), np.abs(problem.most)).sum())
    x = dictionary.activities()
    rounding = Rounding(
        rows, problem.whole, grain, reach, np.arange(0), (problem.least, problem.most), x, bounds,
        np.zeros(rows.count, bool), (np.zeros(rows.count, bool), np.zeros(len(x), bool)),
    )  # fmt: skip
    values = dictionary.values
    rows = [
        row
        for row, variable in enumerate(dictionary.basic.tolist())
        if variable < dictionary.columns
        and problem.whole[variable]
        and abs(values[row] - round(values[row])) >= 1e-6
    ]
    if not rows:
        return
    limits, columns = Limits.of_dictionary(dictionary)
    lines = dictionary.entries[rows][:, columns]
    if exactly:
        for line in lines:
            cut = integer_gomory_cut(rounding, limits, line)
            if cut is not None:
                yield cut, x
    else:
        for cut in gomory_cuts(rounding, limits, lines, len(lines)):
            yield cut, x


@pytest.mark.parametrize("exactly", [False, True], ids=["doubles", "integers"])
def test_gomory_cuts_of_boxed_problems(exactly: bool) -> None:
    """Whole rules with whole limits: every fractional row, against every plan."""
    made = 0
    for seed in range(500):
        problem = problem_of(tiny_problem(seed))
        plans = plans_of(problem)
        for cut, x in gomory_candidates(problem, exactly):
            made += 1
            columns = range(len(x))
            assert not len(cuts_off(columns, cut.coefficients, cut.least, plans)), seed
            assert float(cut.coefficients @ x) < cut.least
            assert cut.efficacy > EFFICACY
            assert not cut.explain()[1]
    assert made > 100


def test_gomory_cuts_in_integers_are_no_weaker() -> None:
    """The same row rounded exactly and in doubles: the latter gives only a hair away."""
    compared = 0
    for seed in range(400):
        problem = problem_of(tiny_problem(seed))
        pairs = zip(
            gomory_candidates(problem, True), gomory_candidates(problem, False), strict=False
        )
        for (exact, x), (rounded, _) in pairs:
            if exact.explain()[0]["rows"].tolist() != rounded.explain()[0]["rows"].tolist():
                break
            if exact.explain()[0]["plus"] != "0":
                continue  # written in another form, of another norm
            compared += 1
            assert exact.efficacy >= rounded.efficacy - 1e-9 * (1 + np.abs(x).max())
            assert exact.efficacy == pytest.approx(rounded.efficacy, rel=1e-5, abs=1e-7)
            doubles = exact.coefficients * 2.0**exact.shift
            assert np.array_equal(doubles, np.rint(doubles))
    assert compared > 30


def test_gomory_cuts_with_divisible_activities() -> None:
    """Plans with divisible amounts, at the corners of what the whole ones leave."""
    made = 0
    for seed in range(200):
        rng = np.random.default_rng([seed, 5])
        rows = rng.integers(1, 8, (2, 3)).astype(float)
        limit = rng.integers(8, 25, 2).astype(float)
        aim = rng.integers(1, 9, 3)
        instance = build("m", "m", aim, rows, row_most=limit, most=[3, 3, 9],
                         whole=[True, True, False], maximize=True)  # fmt: skip
        problem = problem_of(instance)
        plans = []
        for a, b in product(range(4), repeat=2):
            room = [
                F(int(m) - int(r[0]) * a - int(r[1]) * b, int(r[2]))
                for r, m in zip(rows, limit, strict=True)
            ]
            if min(room) >= 0:
                plans += [[a, b, F(0)], [a, b, min(*room, F(9))]]
        for exactly in (True, False):
            for cut, x in gomory_candidates(problem, exactly):
                made += 1
                lost = cuts_off(range(3), cut.coefficients, cut.least, np.array(plans, object))
                assert not len(lost), (seed, exactly)
                assert float(cut.coefficients @ x) < cut.least
    assert made > 60


# ---------------------------------------------------------------------- covers


def sack(weights: Sequence[int], capacity: int, limit: int = 1) -> Problem:
    """Return a problem with one rule over 0-1 activities."""
    terms = list(enumerate(weights))
    n = len(terms)
    rule = (terms, None, capacity) if limit else (terms, capacity, None)
    return Problem.build([(0, 1)], 0, True, [rule], [0] * n, [1] * n, [True] * n)


def cover_of(problem: Problem, limit: int, x: np.ndarray) -> Candidate | None:
    """Separate a cover cut of the only rule at a point."""
    bounds = Bounds(problem.least.copy(), problem.most.copy(), np.zeros((2, len(x)), bool))
    nothing = np.zeros((0, len(x))), np.zeros(0), np.zeros(0), np.zeros(0, int)
    rounding = Rounding(
        RowStore(*nothing), problem.whole, np.zeros(1), 0.0, np.arange(0),
        (problem.least, problem.most), x, bounds, np.zeros(0, bool),
        (np.zeros(1, bool), np.zeros(len(x), bool)),
    )  # fmt: skip
    return cover_cut(rounding, 0, problem.rows[0], limit)


def test_a_minimal_cover_by_hand() -> None:
    """6a + 5b + 4c + 3d <= 10: a and b do not fit together, so that a + b <= 1.

    Beside c there is room for 6, beside d for 7: one of a and b still fits, and both lift to 0.
    """
    problem = sack([6, 5, 4, 3], 10)
    cut = cover_of(problem, 1, np.array([1.0, 0.8, 0.0, 0.0]))
    assert cut is not None
    assert cut.coefficients.tolist() == [-1, -1, 0, 0]
    assert cut.least == -1
    assert not len(cuts_off(range(4), cut.coefficients, cut.least, plans_of(problem)))


@pytest.mark.parametrize("limit", [0, 1])
def test_cover_cuts_against_every_choice(limit: int) -> None:
    """Weights of either sign, both limits, points of the relaxation: nothing whole is lost."""
    made = lifted = 0
    for seed in range(400):
        rng = np.random.default_rng([seed, limit])
        n = int(rng.integers(3, 9))
        weights = rng.integers(1, 20, n) * (rng.choice([1, -1], n) if seed % 3 == 0 else 1)
        half = int(weights[weights > 0].sum() * rng.uniform(0.3, 0.8)) + int(
            weights[weights < 0].sum() / 2
        )
        signed = weights if limit else -weights
        problem = sack(signed.tolist(), half if limit else -half, limit)
        if problem.rows[0].columns != tuple(range(n)):
            continue
        x = point_on_the_rule(rng, weights, half)
        cut = cover_of(problem, limit, x)
        if cut is None:
            continue
        made += 1
        evidence, _ = cut.explain()
        lifted += len(evidence["lifted"]) > len(evidence["cover"])
        assert not len(cuts_off(range(n), cut.coefficients, cut.least, plans_of(problem))), seed
        assert float(cut.coefficients @ x) < cut.least
    assert made > 60
    assert lifted > 10


def point_on_the_rule(rng: np.random.Generator, weights: np.ndarray, limit: int) -> np.ndarray:
    """Return a point of the box at which the rule is tight: taken in a random order."""
    x = (weights < 0).astype(float)
    left = limit - float(weights @ x)
    for j in rng.permutation(len(weights)):
        step = min(1.0, max(left, 0.0) / abs(float(weights[j])))
        x[j] += step if weights[j] > 0 else -step
        left -= step * abs(float(weights[j]))
    return x


def test_covers_leave_other_activities_their_room() -> None:
    """5a + 6b + 5c + n <= 12 with n between 1 and 9: a + b + c <= 2 whatever n is."""
    terms = [(0, 5), (1, 6), (2, 5), (3, 1)]
    problem = Problem.build(
        [(0, 1)], 0, True, [(terms, None, 12)], [0, 0, 0, 1], [1, 1, 1, 9], [True] * 4
    )
    cut = cover_of(problem, 1, np.array([1.0, 0.5, 0.6, 1.0]))
    assert cut is not None
    assert not len(cuts_off(range(4), cut.coefficients, cut.least, plans_of(problem)))
    assert cut.explain()[0]["bounds"].tolist() == [6]
    assert cut.coefficients[3] == 0


def test_rules_without_a_cover_give_no_cut() -> None:
    n = np.array([0.5, 0.5, 0.5])
    assert cover_of(sack([1, 1, 1], 3), 1, n) is None  # everything fits
    assert cover_of(sack([1, 1, 1], 2), 0, n) is None  # no such limit
    assert cover_of(sack([3, 3, 3], 7), 1, np.array([1.0, 1.0, 0.0])) is None  # not violated
    huge = 1 << 60
    assert cover_of(sack([huge, huge + 1, huge - 1], 2 * huge), 1, n) is None


def test_the_published_assignment_is_nearly_closed_by_its_root() -> None:
    """c515-1: 343.6 before the cuts and the optimum 336; the source is in the instance's file."""
    entry = next(e for e in index_of("published") if e["file"] == "c515-1.toml")
    problem = intplan.Sheet.read(entry["path"]).problem()
    result = branch_and_cut(problem)
    kinds = Counter(cut.kind for cut in result.cuts)
    assert result.value == 336
    assert kinds["cover"] > 0 and kinds["gomory"] > 0
    assert float(problem.aim_from_cost(F(result.tree.nodes[0]["bound"]))) < 337


# ---------------------------------------------------------------------- sums of rules


def least_over_plans(instance: Instance, coefficients: np.ndarray) -> float:
    """Return the least value of a row over all plans: every choice of set-ups, tried one by one."""
    arrays = instance.arrays()
    whole = np.asarray(arrays["whole"])
    least = np.zeros(len(whole))
    values = []
    for choice in product((0.0, 1.0), repeat=int(whole.sum())):
        fixed = np.where(whole, 0.0, np.inf)
        least[whole] = fixed[whole] = choice
        answer = reference_linprog(
            replace(instance, aim=coefficients, least=least, most=fixed, maximize=False)
        )
        if answer.status == OPTIMAL:
            values.append(answer.value)
    return min(values)


@pytest.mark.parametrize("seed", [2, 5, 8, 10])
def test_cuts_of_sums_keep_every_plan(seed: int) -> None:
    """Against every choice of set-ups, the amounts left to `scipy.optimize.linprog`."""
    instance = lot_sizing(1, 6, seed)
    problem = problem_of(instance)
    result = branch_and_cut(problem)
    verify(problem, result)
    chained = 0
    for cut in result.cuts:
        chained += len(cut.evidence["rows"]) > 2
        if cut.leans:
            continue
        coefficients = np.zeros(len(problem.cost))
        coefficients[list(cut.columns)] = cut.coefficients
        lowest = least_over_plans(instance, coefficients)
        assert lowest >= cut.least - 1e-7 * (1 + abs(cut.least))
    assert chained > 0


def test_chains_of_balances_close_lot_sizing_at_the_root() -> None:
    """One item: what chains of balances give describes its plans well.

    Source: I. Barany, T. J. Van Roy, L. A. Wolsey, Uncapacitated lot-sizing: the convex hull of
    solutions, Mathematical Programming Study 22:32-43, 1984; from memory.
    """
    for seed in (1, 2, 3, 6):
        problem = problem_of(lot_sizing(1, 12, seed))
        result = branch_and_cut(problem)
        loose = relaxed(problem)
        assert loose is not None
        bound = result.tree.nodes[0]["bound"]
        root_bound = result.value if bound == math.inf else problem.aim_from_cost(F(bound))
        relaxation = problem.aim_from_cost(F(loose[0].value))
        assert (result.value - root_bound) * 7 <= result.value - relaxation


# ---------------------------------------------------------------------- the choice


def nothing() -> tuple[dict[str, Any], bool]:
    """Return no evidence, which the choice does not look at."""
    return {}, False


def test_the_choice_prefers_deep_cuts_and_drops_parallel_ones() -> None:
    x = np.zeros(3)

    def candidate(coefficients: list[float], least: float) -> Candidate:
        made = Candidate("gomory", np.array(coefficients), least, nothing)
        assert made.measure(x)
        return made

    deep = candidate([1, 0, 0], 2)
    twin = candidate([1, 0.01, 0], 1)
    other = candidate([0, 1, 0], 0.5)
    third = candidate([0, 0, 2], 0.5)
    assert choose([twin, third, other, deep], 9) == [deep, other, third]
    assert choose([twin, third, other, deep], 2) == [deep, other]
    cosine = float(twin.coefficients @ deep.coefficients) / np.linalg.norm(twin.coefficients)
    assert cosine > PARALLEL
    assert third.efficacy == 0.25
    assert not Candidate("gomory", np.array([1.0, 0, 0]), 0.0, nothing).measure(x)
    assert not Candidate("gomory", np.zeros(3), 1.0, nothing).measure(x)


def test_cuts_are_kept_as_the_rows_they_are(
    searched: list[tuple[Problem, np.ndarray, Any]],
) -> None:
    """Columns ascending, coefficients not 0, one limit: what the tree and the audit rely on."""
    for problem, _, result in searched:
        for cut in result.cuts:
            assert isinstance(cut, Cut)
            assert list(cut.columns) == sorted(set(cut.columns))
            assert len(cut.columns) == len(cut.coefficients) > 0
            assert all(c != 0 and math.isfinite(c) for c in cut.coefficients)
            assert math.isfinite(cut.least) and cut.most == math.inf
            assert max(cut.columns) < len(problem.cost)
        held = [a for a in result.tree.nodes[0]["added"] if a.kind == "cut"]
        assert all(a.value == result.cuts[a.index].least for a in held)


def test_cuts_that_lean_on_the_best_plan_are_proven(monkeypatch: pytest.MonkeyPatch) -> None:
    """Cuts are soon measured from bounds by cost; each must then say that it leans."""
    leaning: Counter[str] = Counter()
    prepared = RootWork._open_relaxation

    def tightened(root: RootWork) -> Any:
        """Open the root, tighten by cost, and let cuts be measured from that."""
        proof = prepared(root)
        if isinstance(proof, Proof) and root.tighten(proof):
            proof = root.relax()
        root.free = root.bounds
        return proof

    monkeypatch.setattr(RootWork, "_open_relaxation", tightened)
    for instance in map(random_problem, range(160)):
        problem = problem_of(instance)
        result = branch_and_cut(problem)
        verify(problem, result)
        leaning.update(cut.kind for cut in result.cuts if cut.leans)
    assert leaning["gomory"] > 5, leaning
