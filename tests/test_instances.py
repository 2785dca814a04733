"""The sheets of ``instances/``: published ones against what was printed, demo ones whole.

The source of every published optimum stands beside it in ``instances/published/index.toml`` and
in the sheet's own comments; a failing check names it.
"""

from __future__ import annotations

from fractions import Fraction
from itertools import combinations
from typing import Any

import pytest

import intplan
from intplan.relaxation.rows import RowStore
from intplan.relaxation.start import cold_start
from tests.families import index_of, instance_of
from tests.reference import INFEASIBLE, OPTIMAL, reference_linprog, reference_milp

PUBLISHED = index_of("published")
DEMO = index_of("demo")


def entries(chosen: list[dict[str, Any]]) -> Any:
    """Parametrise a test over index entries, by name."""
    return pytest.mark.parametrize("entry", chosen, ids=[entry["name"] for entry in chosen])


def read(name: str, folder: str = "published") -> intplan.Sheet:
    """Read a sheet by its name in the index."""
    path = next(entry["path"] for entry in index_of(folder) if entry["name"] == name)
    return intplan.Sheet.read(path)


@pytest.mark.parametrize("folder", ["published", "demo"])
def test_the_index_lists_every_sheet_once(folder: str) -> None:
    listed = [entry["path"] for entry in index_of(folder)]
    there = {path for path in listed[0].parent.glob("*.toml") if path.name != "index.toml"}
    assert len(listed) == len(set(listed))
    assert set(listed) == there


@entries(PUBLISHED)
def test_a_published_sheet_carries_its_source_and_answer(entry: dict[str, Any]) -> None:
    comments = [line for line in entry["path"].read_text("utf-8").splitlines() if line[:1] == "#"]
    text = " ".join(line.lstrip("# ") for line in comments)
    answer = f"Optimum: {entry['optimum']}" if "optimum" in entry else "Outcome: infeasible."
    assert f"Source: {entry['source']}" in text
    assert answer in text
    assert ("memory" in text) == ("memory" in entry.get("note", ""))


@entries([entry for entry in PUBLISHED if "optimum" in entry])
def test_the_printed_optimum_is_proven(entry: dict[str, Any]) -> None:
    standing = intplan.solve(intplan.Sheet.read(entry["path"]))
    printed = Fraction(str(entry["optimum"]))
    assert standing.outcome == "optimal", entry["source"]
    assert standing.exact_value == printed, entry["source"]
    assert standing.exact_bound == printed, entry["source"]
    check = standing.sheet.check(list(standing.exact_plan.values()))
    assert check.good
    assert check.value == printed


@entries([entry for entry in PUBLISHED if "outcome" in entry])
def test_a_published_sheet_without_a_plan_is_refused_at_once(entry: dict[str, Any]) -> None:
    # Jeroslow 1974: plain branching needs about 2^(n/2) nodes; the gcd of the rule needs none.
    standing = intplan.solve(intplan.Sheet.read(entry["path"]))
    assert standing.outcome == entry["outcome"], entry["source"]
    assert standing.plan is None
    assert standing.search.nodes <= 1


@entries([entry for entry in PUBLISHED if "relaxation" in entry])
def test_the_printed_relaxation(entry: dict[str, Any]) -> None:
    problem = intplan.Sheet.read(entry["path"]).problem()
    rows = RowStore(problem.matrix, problem.row_least, problem.row_most)
    dictionary = cold_start(rows, problem.cost, problem.least, problem.most)
    dictionary.reoptimise()
    value = float(problem.aim_from_cost(Fraction(dictionary.value)))
    assert value == pytest.approx(float(Fraction(entry["relaxation"])), abs=1e-9), entry["source"]


@entries(PUBLISHED)
def test_the_reference_agrees_with_what_was_printed(entry: dict[str, Any]) -> None:
    sheet = intplan.Sheet.read(entry["path"])
    answer = reference_milp(instance_of(sheet, entry["name"], "published"))
    if "outcome" in entry:
        assert answer.status == INFEASIBLE
    else:
        assert answer.value == pytest.approx(entry["optimum"], rel=1e-9)


def test_the_plan_printed_for_two_products() -> None:
    # W. L. Winston, Operations Research: Applications and Algorithms; from memory.
    assert intplan.solve(read("two-products")).plan == {"a": 5, "b": 0}


def test_the_lines_of_the_affine_plane() -> None:
    # Two points of an affine plane lie on exactly one line; order 3 has 9 points, 12 lines of 3.
    sheet = read("covering-triples-9")
    lines = [{index for index, _ in rule.terms} for rule in sheet.rules]
    assert len(sheet.activities) == 9
    assert [len(line) for line in lines] == [3] * 12
    for pair in combinations(range(9), 2):
        assert sum(line >= set(pair) for line in lines) == 1


@entries(DEMO)
def test_a_demo_sheet_solves_to_the_value_of_the_index(entry: dict[str, Any]) -> None:
    sheet = intplan.Sheet.read(entry["path"])
    assert sheet.warnings == ()
    standing = intplan.solve(sheet)
    value = Fraction(str(entry["optimum"]))
    assert standing.outcome == "optimal"
    assert standing.exact_value == standing.exact_bound == value
    assert standing.check.good
    assert standing.check.value == value
    answer = reference_milp(instance_of(sheet, entry["name"], "demo"))
    assert answer.status == OPTIMAL
    assert answer.value == pytest.approx(float(value), rel=1e-9)


@entries(DEMO)
def test_fractions_would_do_better_in_a_demo_sheet(entry: dict[str, Any]) -> None:
    # Otherwise the sheet would show nothing of planning in whole units.
    sheet = intplan.Sheet.read(entry["path"])
    relaxed = reference_linprog(instance_of(sheet, entry["name"], "demo")).value
    better = relaxed - entry["optimum"]
    assert (better if sheet.aim.sense == "maximize" else -better) > 0.5


def test_the_soft_rules_of_the_demo_sheets_bend() -> None:
    assert intplan.solve(read("orders", "demo")).bends == {"stairs": 1}
    assert intplan.solve(read("machines", "demo")).bends == {"walk_in": 1}


def test_an_empty_oven_breaks_the_bakery_contracts() -> None:
    sheet = read("bakery", "demo")
    broken = {(one.name, one.by) for one in sheet.check([0] * len(sheet.activities)).broken}
    assert broken == {("school", 50), ("inn", 6), ("bread", 90), ("variety", 10)}
