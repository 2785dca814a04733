"""Re-planning: what stands, what moves, what is impossible, and what a limit leaves open."""

from dataclasses import replace
from fractions import Fraction

import pytest

import intplan.planning.restart
import intplan.search
from intplan import IntplanError, Sheet, solve
from intplan.planning.replan import replan
from tests.bakery import BAKERY, CRATES, INFEASIBLE, NO_AIM, SOFT, UNBOUNDED, split_evenly
from tests.test_clash import JOINERY, random_clashing

# What a restart must not take for granted: b = 1 costs 5, and a rule that forbids it leaves only
# a = 1 at 10, although every node was closed by the 5.
TRAP = """
[aim]
minimize = "10*a + 5*b"
[activities]
a = { most = 1 }
b = { most = 1 }
[rules]
one = "a + b >= 1"
"""

EQUALS = """
[aim]
maximize = "a + b"
[activities]
a = { most = 2 }
b = { most = 2 }
c = { most = 1 }
[rules]
few = "a + b <= 3"
"""


@pytest.fixture
def no_search(monkeypatch):
    """Let every search fail."""

    def refuse(*what, **more):
        raise AssertionError("a search was started")

    monkeypatch.setattr(intplan.search, "branch_and_cut", refuse)
    monkeypatch.setattr(intplan.planning.restart, "restarted", refuse)
    monkeypatch.setattr(intplan.planning.restart, "feasible", refuse)


def bakery():
    return solve(Sheet.parse(BAKERY))


# ------------------------------------------------------------------------------ stands


@pytest.mark.parametrize(
    "change",
    [
        {},
        {"add": {"flour": "loaf + roll_tray <= 880"}},
        {"add": {"flour": {"rule": "loaf + roll_tray <= 880", "give": 3}, "x": "overtime >= 2.2"}},
        {"set": {"loaf most": "<= 860"}},
        {"set": {"mixer": "7 <= mixer <= 9", "oven": "<= 16"}},
        {"set": {"shelf": ">= 800", "roll_tray": "<= 20", "overtime": (Fraction(11, 5), None)}},
        {"freeze": ["loaf", "overtime"]},
    ],
)
def test_a_plan_that_meets_everything_stands_without_a_search(change, request):
    standing = bakery()
    request.getfixturevalue("no_search")
    answer = replan(standing, **change)
    assert answer.effect == "stands" and answer.after.outcome == "optimal"
    assert answer.after.exact_plan == standing.exact_plan
    assert answer.after.exact_value == answer.after.exact_bound == standing.exact_value
    assert answer.after.sheet is answer.changes.sheet and answer.before is standing
    assert (answer.cost, answer.moves, answer.clash, answer.give) == (0, {}, None, None)
    assert answer.needs_whole is None and answer.closeness is None
    assert answer.after.check.good


def test_an_unfinished_plan_stands_as_unfinished(request):
    standing = solve(Sheet.parse(split_evenly()), node_limit=60)
    assert standing.outcome == "unfinished" and standing.plan is not None
    request.getfixturevalue("no_search")
    answer = replan(standing, add={"all": "x0 + x1 <= 2"})
    assert (answer.effect, answer.after.outcome) == ("stands", "unfinished")
    assert answer.after.exact_bound == standing.exact_bound


def test_a_soft_rule_bent_as_before_stands(request):
    # need is bent by 4 at its least; a most for it changes nothing at the plan of 3.25.
    text = SOFT.replace('"a + b >= 7.25"', '"7.25 <= a + b <= 20"')
    standing = solve(Sheet.parse(text))
    assert standing.bends == {"need": 4}
    request.getfixturevalue("no_search")
    answer = replan(standing, set={"need": (None, 9)})
    assert answer.effect == "stands" and answer.after.bends == {"need": 4}


def test_a_soft_rule_that_bends_further_costs_more():
    standing = solve(Sheet.parse(SOFT.replace("give_most = 4", "give_most = 9")))
    assert standing.exact_plan == {"a": 0, "b": 0}
    answer = replan(standing, set={"need": ">= 8"})
    # The plan is the same; 0.75 more of bending costs 0.7 * 0.75.
    assert answer.effect == "stands" and answer.exact_cost == Fraction(21, 40)
    assert answer.after.bends == {"need": 8} and answer.moves == {}


def test_equally_good_plans_do_not_replace_the_old_one():
    standing = solve(Sheet.parse(EQUALS))
    assert standing.value == 3
    for change in ({"waive": ["a most"]}, {"set": {"c": "<= 9"}}, {"waive": ["c least"]}):
        answer = replan(standing, **change)
        assert answer.effect == "stands" and answer.after.outcome == "optimal"
        assert answer.after.exact_plan == standing.exact_plan
    other = {name: 3 - amount for name, amount in standing.plan.items() if name != "c"}
    moved = replan(standing, add={"a": f"a = {other['a']}"})
    assert moved.effect == "moved" and moved.cost == 0 and moved.after.value == 3
    back = replan(moved.after, waive=["a"])
    assert back.effect == "stands" and back.after.exact_plan == moved.after.exact_plan


def test_no_aim_keeps_the_plan_that_fits():
    standing = solve(Sheet.parse(NO_AIM))
    amount = standing.plan["a"]
    assert replan(standing, waive=["sum"]).effect == "stands"
    answer = replan(standing, add={"other": f"a >= {amount + 1}"})
    assert answer.effect == "moved" and answer.cost == 0
    assert 2 * answer.after.plan["a"] + 3 * answer.after.plan["b"] == 17


# ------------------------------------------------------------------------------ moved


def test_the_trap_of_the_closed_nodes():
    standing = solve(Sheet.parse(TRAP))
    assert standing.value == 5
    answer = replan(standing, add={"no_b": "b <= 0"})
    assert answer.effect == "moved" and answer.after.outcome == "optimal"
    assert answer.after.value == 10 and answer.cost == 5
    assert answer.moves == {"a": (0, 1), "b": (1, 0)}
    assert answer.at_limit == ("no_b",)  # one was at its limit before
    assert replan(answer.after, waive=["no_b"]).after.value == 5


def test_flour_moves_the_bakery():
    # By hand: 600 pieces leave 580 loaves beside the least 20 trays, and no overtime:
    # 4.20 * 580 + 2.75 * 20 = 2491, which is 1136.40 less.
    standing = bakery()
    answer = replan(standing, add={"flour": "loaf + roll_tray <= 600"})
    assert answer.effect == "moved" and answer.after.outcome == "optimal"
    assert answer.after.exact_value == 2491 and answer.exact_cost == Fraction(5682, 5)
    assert answer.cost == 1136.4
    assert answer.moves == {"loaf": (860, 580), "overtime": (2.2, 0)}
    assert answer.exact_moves["overtime"] == (Fraction(11, 5), 0)
    assert answer.at_limit == ("flour",)
    assert standing.plan == {"loaf": 860, "roll_tray": 20, "overtime": 2.2}
    assert "flour" not in standing.sheet.rule_index


def test_loosening_makes_the_aim_better():
    answer = replan(bakery(), waive=["mixer", "loaf most"], set={"oven": "<= 14"})
    assert answer.effect == "moved" and answer.cost < 0
    assert answer.after.value == solve(answer.changes.sheet).value


def test_all_four_kinds_of_changes_at_once():
    answer = replan(
        bakery(),
        waive=["mixer"],
        add={"mixer": "0.01*loaf + 0.02*roll_tray <= 8"},
        set={"oven": "<= 15"},
        freeze=["roll_tray"],
    )
    assert answer.changes.added == ("mixer",) and answer.changes.waived == ("mixer",)
    assert answer.after.plan["roll_tray"] == 20 and answer.after.plan["loaf"] == 760
    assert answer.after.value == solve(answer.changes.sheet).value


def test_re_planning_the_re_planned():
    standing = bakery()
    first = replan(standing, add={"flour": "loaf + roll_tray <= 600"})
    second = replan(first.after, set={"flour": "<= 700"})
    third = replan(second.after, waive=["flour"])
    assert second.after.value == 4.2 * 680 + 55 and third.after.value == 3627.4
    assert third.after.plan == standing.plan


# ------------------------------------------------------------------------------ no plan, no limit


def test_what_is_impossible_has_a_clash_and_a_give():
    standing = solve(Sheet.parse(JOINERY.replace('school = "table >= 8"\n', "")))
    answer = replan(standing, add={"school": "table >= 8"})
    assert answer.effect == "impossible" and answer.after.outcome == "infeasible"
    assert answer.clash == ("oak", "inn", "school") and not answer.needs_whole
    assert (answer.cost, answer.moves, answer.at_limit) == (None, {}, ())
    assert answer.give.total == 1 and answer.give.alone["oak"].amount == 4
    # The old plan meets all but the new rule: it is the witness of that.
    assert answer.found.witnesses["school"] == standing.exact_plan
    narrow = replan(standing, add={"school": "table >= 8"}, may_bend=["school"])
    assert narrow.give.may_bend == ("school",) and set(narrow.give.alone) == {"school"}


def test_only_whole_units_make_it_impossible():
    standing = solve(Sheet.parse(CRATES))
    answer = replan(standing, add={"pairs": "2*a + 4*c = 9"})
    assert answer.clash == ("pairs",) and answer.needs_whole is True


def test_impossible_stays_impossible_without_a_search_for_plans(monkeypatch):
    standing = solve(Sheet.parse(INFEASIBLE))

    def refuse(*what, **more):
        raise AssertionError("a restart")

    monkeypatch.setattr(intplan.planning.restart, "restarted", refuse)
    answer = replan(standing, add={"small": "a <= 3"})
    assert answer.effect == "impossible" and answer.clash == ("odd",)


def test_a_plan_where_there_was_none():
    standing = solve(Sheet.parse(INFEASIBLE))
    answer = replan(standing, waive=["odd"])
    assert answer.effect == "moved" and answer.after.plan is not None
    assert (answer.cost, answer.moves, answer.at_limit) == (None, {}, ())


def test_an_aim_without_limit():
    standing = solve(Sheet.parse(UNBOUNDED))
    assert replan(standing, add={"more": "a >= 3"}).effect == "unbounded"
    answer = replan(standing, add={"end": "a <= 7"})
    assert answer.effect == "moved" and (answer.cost, answer.moves) == (None, {})
    assert answer.after.value == 6  # a = 7 needs b >= 1
    again = replan(answer.after, waive=["end"])
    assert again.effect == "unbounded" and (again.cost, again.moves) == (None, {})


# ------------------------------------------------------------------------------ limits


def test_a_limit_leaves_it_undecided():
    standing = solve(Sheet.parse(split_evenly()), node_limit=60)
    broken = {"other": " + ".join(n for n, v in standing.plan.items() if v and n[0] == "x") + "<=9"}
    answer = replan(standing, add=broken, node_limit=1)
    assert answer.effect == "undecided" and answer.after.ended_by == "nodes"
    assert answer.found is None
    assert replan(standing, add=broken, stop=lambda: True).after.ended_by == "interrupt"


def test_an_unfinished_search_keeps_the_plan_that_fits():
    standing = solve(Sheet.parse(split_evenly()), node_limit=60)
    answer = replan(standing, set={"kind0": "= 977"}, waive=["kind1"], stop=lambda: True)
    looser = replan(standing, waive=["kind1"], stop=lambda: True)
    assert looser.effect == "stands" and looser.after.outcome == "unfinished"
    assert looser.after.exact_plan == standing.exact_plan and looser.cost == 0
    assert answer.effect == "undecided"


def test_a_gap_is_enough():
    standing = solve(Sheet.parse(CRATES))
    answer = replan(standing, set={"room": "<= 80"}, gap=100)
    assert answer.after.outcome in ("optimal", "within_gap") and answer.effect == "moved"


def test_an_interrupt_in_the_middle_of_the_clash():
    sheet = Sheet.parse(JOINERY.replace('school = "table >= 8"\n', ""))
    standing = solve(sheet)
    asked = []

    def stop():
        asked.append(1)
        return len(asked) > 12

    answer = replan(standing, add={"school": "table >= 8"}, stop=stop)
    assert answer.effect in ("impossible", "undecided")
    if answer.effect == "impossible":
        assert {"oak", "inn", "school"} <= set(answer.clash)
        assert not answer.found.give.proven


@pytest.mark.parametrize(
    ("options", "where"),
    [
        ({"time_limit": 0}, "time_limit"),
        ({"gap": -1}, "gap"),
        ({"node_limit": 0}, "node_limit"),
        ({"stay_close": -1}, "stay_close"),
        ({"stay_close": 101}, "stay_close"),
        ({"stay_close": True}, "stay_close"),
        ({"stay_close": "much"}, "stay_close"),
        ({"may_bend": ["ovn"]}, "may_bend"),
        ({"waive": ["ovn"]}, "waive ovn"),
    ],
)
def test_what_makes_no_sense_is_told_before_any_search(options, where, request):
    standing = bakery()
    request.getfixturevalue("no_search")
    with pytest.raises(IntplanError) as caught:
        replan(standing, add={"flour": "loaf <= 3"}, **options)
    assert caught.value.where == where and caught.value.exit_status == 2


# ------------------------------------------------------------------------------ at random


def test_chains_agree_with_solving_from_nothing():
    effects = set()
    for seed in range(30):
        sheet, extra = random_clashing(2 * seed), random_clashing(2 * seed + 1)
        if len(extra.activities) > len(sheet.activities):
            sheet, extra = extra, sheet
        standing = solve(sheet)
        for number, rule in enumerate(extra.rules):
            waived = [sheet.rules[0].name] if number == 1 else []
            answer = replan(standing, add={f"new{number}": rule}, waive=waived)
            plain = solve(answer.changes.sheet)
            assert answer.after.outcome == plain.outcome, seed
            if plain.outcome == "optimal":
                assert answer.after.exact_value == plain.exact_value, seed
            if answer.after.plan is not None:
                assert answer.after.check.good
                assert answer.after.check.value == answer.after.exact_value
            old = standing.result.plan
            if old is not None and standing.outcome == plain.outcome == "optimal":
                check = answer.changes.sheet.check(old[: len(sheet.activities)])
                best = check.good and check.value == plain.exact_value
                assert (answer.effect == "stands") == best, seed
            effects.add(answer.effect)
            standing = answer.after
    assert effects == {"stands", "moved", "impossible", "unbounded"}


def test_the_standing_plan_is_left_as_it_was():
    standing = solve(Sheet.parse(CRATES))
    kept = (standing.sheet, standing.exact_plan, replace(standing.result), len(standing.tree))
    replan(standing, set={"room": "<= 60"}, add={"more": "a >= 2"}, stay_close=5)
    assert (standing.sheet, standing.exact_plan) == kept[:2]
    assert len(standing.tree) == kept[3] and standing.result.nodes == kept[2].nodes
    assert standing.result.plan == kept[2].plan
