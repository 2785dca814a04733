"""The standing plan: what `solve` gives out, its named tree, and its limits."""

import dataclasses
import doctest
import subprocess
import sys
import tomllib
from fractions import Fraction
from pathlib import Path

import pytest

import intplan
import intplan.planning.standing
from intplan import IntplanError, Sheet, solve
from intplan.planning.standing import confirmed
from tests.bakery import (
    BAKERY,
    CRATES,
    INFEASIBLE,
    NO_AIM,
    SEVENTHS,
    SOFT,
    UNBOUNDED,
    split_evenly,
)

ROOT = Path(__file__).parent.parent


def test_plan_of_the_bakery():
    # By hand: an hour of overtime costs 18 and bakes 50 loaves, which earn 210; so the mixer's
    # 9 hours are the limit: 860 loaves and the least 20 trays, for which the oven needs 2.2 hours
    # more. 4.20 * 860 + 2.75 * 20 - 18 * 2.2 = 3627.40.
    standing = solve(Sheet.parse(BAKERY))
    assert (standing.outcome, standing.ended_by) == ("optimal", None)
    assert standing.plan == {"loaf": 860, "roll_tray": 20, "overtime": 2.2}
    assert standing.exact_plan == {"loaf": 860, "roll_tray": 20, "overtime": Fraction(11, 5)}
    assert standing.exact_value == standing.exact_bound == Fraction(18137, 5)
    assert standing.value == standing.bound == 3627.4
    assert [type(amount) for amount in standing.plan.values()] == [int, int, float]
    assert standing.check.good and standing.check.value == standing.exact_value


def test_best_plan_against_every_plan():
    sheet = Sheet.parse(CRATES)
    best = 0
    for a in range(5):
        for b in range(4):
            for c in range(6):
                for d in range(6):
                    for e in range(5):
                        check = sheet.check([a, b, c, d, e])
                        best = max(best, check.value if check.good else 0)
    assert solve(sheet).value == best


def test_divisible_amounts_are_exact():
    standing = solve(Sheet.parse(SEVENTHS))
    assert standing.exact_plan == {"a": Fraction(13, 7), "b": Fraction(11, 7)}
    assert standing.exact_value == standing.exact_bound == Fraction(24, 7)
    assert standing.plan == {"a": 13 / 7, "b": 11 / 7}


def test_soft_rules_bend_at_their_price():
    # By hand: bending costs 0.70 a unit, the cheapest activity 2, so the rule bends all it may.
    standing = solve(Sheet.parse(SOFT))
    assert standing.bends == {"need": 4}
    assert standing.exact_plan == {"a": 0, "b": Fraction(13, 4)}
    assert standing.exact_value == Fraction(93, 10)


def test_no_plan():
    standing = solve(Sheet.parse(INFEASIBLE))
    assert standing.outcome == "infeasible"
    assert (standing.plan, standing.value, standing.bound, standing.check) == (None,) * 4
    assert standing.bends == {}


def test_no_limit_names_what_runs_away():
    standing = solve(Sheet.parse(UNBOUNDED))
    assert (standing.outcome, standing.bound) == ("unbounded", None)
    # Along (a, b) = (2, 1) the rule a - 2b <= 5 stands still and the aim a - b grows.
    ratio = standing.ray["a"] / Fraction(standing.ray["b"])
    assert 1 < ratio <= 2


def test_no_aim_takes_any_plan():
    standing = solve(Sheet.parse(NO_AIM))
    assert standing.outcome == "optimal"
    assert 2 * standing.plan["a"] + 3 * standing.plan["b"] == 17


# ------------------------------------------------------------------------------ limits


def test_gap_is_a_percentage_of_the_value():
    standing = solve(Sheet.parse(CRATES), gap=50)
    assert standing.outcome in ("within_gap", "optimal")
    assert standing.bound - standing.value <= Fraction(1, 2) * standing.value


def test_node_limit():
    standing = solve(Sheet.parse(split_evenly()), node_limit=12)
    assert (standing.outcome, standing.ended_by) == ("unfinished", "nodes")
    assert standing.search.nodes <= 12
    assert standing.bound is not None and standing.bound >= 0
    waiting = [n for n, data in standing.tree.nodes(data=True) if data["outcome"] == "waiting"]
    assert waiting


def test_time_limit_and_stop():
    sheet = Sheet.parse(split_evenly())
    assert solve(sheet, time_limit=0.05).ended_by == "time"
    assert solve(sheet, stop=lambda: True).ended_by == "interrupt"


def test_progress_is_told_exact_numbers():
    told = []
    solve(Sheet.parse(split_evenly()), time_limit=1.0, progress=lambda v, b: told.append((v, b)))
    assert told
    assert all(isinstance(number, int | Fraction | None) for pair in told for number in pair)


@pytest.mark.parametrize(
    ("limits", "where"),
    [
        ({"time_limit": 0}, "time_limit"),
        ({"time_limit": -1.5}, "time_limit"),
        ({"time_limit": float("nan")}, "time_limit"),
        ({"time_limit": "10"}, "time_limit"),
        ({"time_limit": True}, "time_limit"),
        ({"gap": -0.1}, "gap"),
        ({"gap": float("nan")}, "gap"),
        ({"gap": float("inf")}, "gap"),
        ({"gap": "1%"}, "gap"),
        ({"node_limit": 0}, "node_limit"),
        ({"node_limit": 2.5}, "node_limit"),
        ({"node_limit": True}, "node_limit"),
    ],
)
def test_limits_that_make_no_sense(limits, where):
    with pytest.raises(IntplanError) as caught:
        solve(Sheet.parse(BAKERY), **limits)
    assert caught.value.where == where


def test_only_sheets_are_solved():
    with pytest.raises(TypeError, match=r"expected a Sheet, .* not str"):
        solve("bakery.toml")


def test_a_standing_plan_shows_itself_in_a_line():
    shown = repr(solve(Sheet.parse(CRATES)))
    assert shown == "<StandingPlan 'Crates', optimal, value 395, bound 395>"


def test_an_infinite_time_limit_is_none():
    assert solve(Sheet.parse(BAKERY), time_limit=float("inf")).outcome == "optimal"


# ------------------------------------------------------------------------------ confirmation


def test_a_plan_that_breaks_the_sheet_is_never_given_out():
    sheet = Sheet.parse(CRATES)
    result = solve(sheet).result
    with pytest.raises(AssertionError, match="breaks"):
        confirmed(sheet, dataclasses.replace(result, plan=[4, 3, 5, 5, 4]))
    with pytest.raises(AssertionError, match="value"):
        confirmed(sheet, dataclasses.replace(result, value=result.value + 1))
    with pytest.raises(AssertionError, match="bound"):
        confirmed(sheet, dataclasses.replace(result, bound=result.value - 1))


def test_needless_bends_are_taken_back():
    sheet = Sheet.parse(SOFT)
    result = solve(sheet).result
    # 7.25 units need no bend; a search that bent all the same would pay 0.70 a unit too much.
    (bend,) = sheet.problem().bends
    plan: list = [4, Fraction(13, 4), 0]
    plan[bend.column] = 1
    wasteful = dataclasses.replace(
        result, outcome="unfinished", ended_by="time", plan=plan, value=Fraction(96, 5), bound=None
    )
    tidy = confirmed(sheet, wasteful)
    assert (tidy.value, tidy.plan) == (Fraction(37, 2), [4, Fraction(13, 4), 0])


# ------------------------------------------------------------------------------ the named tree


def test_tree_is_named():
    standing = solve(Sheet.parse(split_evenly()), node_limit=30)
    tree = standing.tree
    assert tree.in_degree(0) == 0 and len(tree) > 30
    for node, data in tree.nodes(data=True):
        assert data["outcome"] in ("split", "beaten", "empty", "plan", "waiting")
        assert data["start"] in ("warm", "cold")
        assert data["bound"] is None or isinstance(data["bound"], int | float)
        if node:
            (parent,) = tree.predecessors(node)
            assert data["depth"] == tree.nodes[parent]["depth"] + 1
            name, relation, limit = data["added"][0].split()
            assert name in standing.sheet.activity_index
            assert (relation, limit) in (("<=", "0"), (">=", "1"))
    assert standing.tree is tree


def test_tree_bounds_are_in_units_of_the_aim():
    standing = solve(Sheet.parse(BAKERY))
    assert standing.tree.nodes[0]["bound"] == pytest.approx(3627.4, rel=1e-9)


def test_cuts_are_written_in_the_planners_names():
    standing = solve(Sheet.parse(split_evenly()), node_limit=3)
    written = [text for text in standing.tree.nodes[0]["added"] if text.startswith("cut ")]
    assert written
    assert all("x" in text and ("<=" in text or ">=" in text) for text in written)


# ------------------------------------------------------------------------------ the package


def test_importing_the_package_waits_for_no_numerical_library():
    code = "import sys, intplan; print('numpy' in sys.modules, intplan.__version__)"
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True
    )
    version = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]
    assert done.stdout.split() == ["False", version]


def test_public_names_are_there():
    assert set(intplan.__all__) <= set(dir(intplan))
    for name in intplan.__all__:
        assert getattr(intplan, name) is not None
    with pytest.raises(AttributeError, match="no_such_name"):
        _ = intplan.no_such_name


def test_the_examples_in_the_documentation_run():
    outcome = doctest.testmod(intplan.planning.standing)
    assert outcome.attempted > 0 and outcome.failed == 0
