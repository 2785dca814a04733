"""Staying close: the nearest plan among those that are good enough, by hand and by reference."""

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

from intplan import IntplanError, Sheet, solve
from intplan.planning.closeness import Closeness, distance, read_percent
from intplan.planning.replan import replan
from intplan.planning.standing import StandingPlan
from intplan.sheet.model import Rule
from tests.bakery import BAKERY, INFEASIBLE, SOFT, split_evenly
from tests.families import build, instance_of
from tests.reference import OPTIMAL, reference_milp
from tests.test_clash import FAR, random_clashing

DESKS = """
[aim]
maximize = "10*desk + 9*bench + 3*stool"
[activities]
desk  = { most = 9 }
bench = { most = 9 }
stool = { most = 9 }
[rules]
wood = "desk + bench + stool <= 9"
"""


def test_the_nearest_plan_within_a_percentage():
    # By hand: 9 desks are worth 90. With 5 desks at most the best is 5 desks and 4 benches, 86,
    # at a distance of 8; leaving out a bench costs 9 and is nearer by one.
    standing = solve(Sheet.parse(DESKS))
    few = {"few": "desk <= 5"}
    best = replan(standing, add=few)
    assert best.after.plan == {"desk": 5, "bench": 4, "stool": 0}
    for percent, benches in ((0, 4), (10, 4), (11, 3), (Fraction(1800, 86), 2), (100, 0)):
        answer = replan(standing, add=few, stay_close=percent)
        assert answer.after.plan == {"desk": 5, "bench": benches, "stool": 0}
        assert answer.closeness == Closeness(percent, True, "", 4 + benches, 8, 50 + 9 * benches)
        assert answer.after.outcome == ("optimal" if benches == 4 else "within_gap")
        assert answer.after.exact_bound == 86 and answer.cost == 40 - 9 * benches
        assert answer.effect == "moved" and answer.after.check.good


def test_among_equally_good_plans_the_nearest():
    text = """
    [aim]
    minimize = "a + b + c"
    [activities]
    a = { most = 5 }
    b = { most = 5 }
    c = { most = 5 }
    [rules]
    need = "a + b + c >= 8"
    start = "a = 5"
    low = "c <= 0"
    """
    standing = solve(Sheet.parse(text))
    assert standing.plan == {"a": 5, "b": 3, "c": 0}
    answer = replan(standing, waive=["start"], add={"less": "b <= 2"}, stay_close=0,
                    set={"low": "<= 5"})  # fmt: skip
    assert answer.after.outcome == "optimal" and answer.after.value == 8
    assert answer.closeness.done and answer.closeness.distance == 2
    assert answer.after.plan == {"a": 5, "b": 2, "c": 1}


def test_of_the_nearest_the_best_is_taken():
    # By hand: three desks go and two others come, whatever their wood: a distance of 5. Of those
    # two oak ones are worth most, 74; the best plan, 81, has three and is further by one.
    text = """
    [aim]
    maximize = "10*desk + 5*ash + 7*oak + 6*elm"
    [activities]
    desk = { most = 9 }
    ash = { most = 9 }
    oak = { most = 9 }
    elm = { most = 9 }
    [rules]
    wood = "desk + ash + oak + elm <= 9"
    """
    standing = solve(Sheet.parse(text))
    assert standing.plan == {"desk": 9, "ash": 0, "oak": 0, "elm": 0}
    for names in (("ash", "oak", "elm"), ("oak", "elm", "ash"), ("elm", "oak", "ash")):
        add = {"benches": f"{names[0]} + {names[1]} + {names[2]} >= 2", "few": "desk <= 6"}
        answer = replan(standing, add=add, stay_close=50)
        assert answer.closeness == Closeness(50, True, "", 5, 6, 74)
        assert answer.after.plan == {"desk": 6, "ash": 0, "oak": 2, "elm": 0}


def test_a_plan_that_is_good_enough_stays():
    standing = solve(Sheet.parse(DESKS))
    answer = replan(standing, set={"wood": "<= 10"}, stay_close=10)
    assert (answer.effect, answer.after.outcome) == ("stands", "within_gap")
    assert answer.after.value == 90 and answer.after.bound == 99 and answer.moves == {}
    assert answer.closeness == Closeness(10, True, "", 0, 1, 90)
    near = replan(standing, set={"wood": "<= 10"}, stay_close=9)
    assert near.effect == "moved" and near.closeness.distance == 1


def test_the_prices_of_bends_count_in_the_aim():
    # By hand: from nothing, with need at 8 and 0.7 a unit of bend, bending by 8 costs 5.6; when
    # bending ends at 4, four units of b cost 8 and the bends 2.8.
    standing = solve(Sheet.parse(SOFT.replace("give_most = 4", "give_most = 9")))
    assert standing.exact_plan == {"a": 0, "b": 0}
    hard = {"rule": "a + b >= 8", "give": 0.7, "give_most": 4}
    answer = replan(standing, waive=["need", "third"], add={"need": hard}, stay_close=0)
    assert answer.after.exact_plan == {"a": 0, "b": 4} and answer.closeness.distance == 4
    assert answer.after.exact_value == Fraction(54, 5)
    # A whole unit of a instead of b costs 1 more; bends have no distance of their own.
    dear = replan(standing, waive=["need", "third"], add={"need": hard}, stay_close=100)
    assert dear.closeness.distance == 4 and dear.after.bends == {"need": 4}


def test_distances_are_exact():
    standing = solve(Sheet.parse(BAKERY))
    answer = replan(standing, add={"flour": "loaf + roll_tray <= 600"}, stay_close=0)
    assert answer.closeness.distance == answer.closeness.distance_before == 280 + Fraction(11, 5)
    assert distance([1, Fraction(1, 3)], [3, Fraction(1, 2)]) == Fraction(13, 6)


def test_why_it_is_not_done():
    standing = solve(Sheet.parse(DESKS))
    gone = replan(standing, add={"more": "desk >= 10"}, stay_close=5).closeness
    assert not gone.done and gone.reason == "there is no new plan" and gone.distance is None
    none = replan(solve(Sheet.parse(INFEASIBLE)), waive=["odd"], stay_close=5).closeness
    assert not none.done and none.reason == "there is no plan to stay close to"
    evenly = solve(Sheet.parse(split_evenly()), node_limit=60)
    unproven = replan(evenly, add={"one": "x0 <= 1"}, stay_close=5).closeness
    assert unproven.reason == "it is not proven which value is the best"
    assert (unproven.done, unproven.distance, unproven.value) == (False, 0, evenly.value)


def test_a_limit_between_the_best_plan_and_the_nearest(monkeypatch):
    from intplan.planning import restart

    standing = solve(Sheet.parse(DESKS))
    plain = restart.extended

    def ended(after, sheet, **limits):
        found = plain(after, sheet, **limits)
        result = replace(found.result, outcome="unfinished", ended_by="time")
        return replace(found, result=result)

    monkeypatch.setattr(restart, "extended", ended)
    answer = replan(standing, add={"few": "desk <= 5"}, stay_close=50)
    assert not answer.closeness.done
    assert answer.closeness.reason == "the time limit came first"
    # What was found is nearer than the best plan, and is taken.
    assert answer.closeness.distance == 4 < answer.closeness.distance_before
    assert answer.after.outcome == "within_gap"


@pytest.mark.parametrize(("asked", "percent"), [(0, 0), (2.5, Fraction(5, 2)), (100, 100)])
def test_percentages_are_exact(asked, percent):
    assert read_percent(asked) == percent


@pytest.mark.parametrize("asked", [-0.5, 100.5, True, "5", float("nan"), None])
def test_what_is_no_percentage(asked):
    with pytest.raises(IntplanError, match="a percentage from 0 to 100"):
        read_percent(asked)


def test_names_of_the_sheet_do_not_matter():
    sheet = Sheet.parse(DESKS)
    renamed = [replace(a, name=f"way[{j}]") for j, a in enumerate(sheet.activities)]
    rules = tuple(replace(rule, name="way[4]") for rule in sheet.rules)
    standing = solve(replace(sheet, activities=tuple(renamed), rules=rules))
    answer = replan(standing, set={"way[0]": "<= 5"}, stay_close=11)
    assert answer.closeness.distance == 7


# ------------------------------------------------------------------------------ at random


def by_reference(sheet: Sheet, old: list, allowed: float, way: float | None = None) -> float:
    """Ask the reference for the least distance among plans whose aim is good enough.

    With a distance, ask for the best value of the aim no further than that.
    """
    plain = instance_of(sheet, "", "")
    columns, activities = len(plain.aim), len(sheet.activities)
    zeros = np.zeros((len(plain.rows), 2 * activities))
    balance = np.hstack([np.eye(activities, columns), -np.eye(activities), np.eye(activities)])
    aim = np.r_[plain.aim, np.zeros(2 * activities)]
    ways = np.r_[np.zeros(columns), np.ones(2 * activities)]
    at = np.array([float(amount) for amount in old])
    worst = allowed - float(sheet.aim.constant)
    far = np.inf if way is None else way + 1e-7
    answer = reference_milp(
        build(
            "", "", ways if way is None else aim,
            np.vstack([np.hstack([plain.rows, zeros]), balance, aim, ways]),
            np.r_[plain.row_least, at, worst - 1e-7 if plain.maximize else -np.inf, -np.inf],
            np.r_[plain.row_most, at, np.inf if plain.maximize else worst + 1e-7, far],
            np.r_[np.maximum(plain.least, -FAR), np.zeros(2 * activities)],
            np.r_[np.minimum(plain.most, FAR), np.full(2 * activities, np.inf)],
            np.r_[plain.whole, np.zeros(2 * activities, bool)],
            maximize=way is not None and plain.maximize,
        )
    )  # fmt: skip
    assert answer.status == OPTIMAL
    return answer.value


def check_nearest(standing: StandingPlan, used: int, percent: int) -> tuple[bool, bool]:
    """Let an activity go up by two; return whether the plan moved, and nearer than the best."""
    rule = Rule("more", ((used, 1),), standing.result.plan[used] + 2, None)
    answer = replan(standing, add={"more": rule}, may_bend=(), stay_close=percent)
    if answer.effect != "moved":
        return False, False
    found, after = answer.closeness, answer.after
    assert found.done and after.check.good and after.check.value == after.exact_value
    room = abs(after.exact_bound) * Fraction(percent) / 100
    assert abs(after.exact_value - after.exact_bound) <= room
    assert (after.outcome == "optimal") == (after.exact_value == after.exact_bound)
    assert found.distance == sum(abs(new - old) for old, new in answer.exact_moves.values())
    old = list(standing.exact_plan.values())
    allowed = after.exact_bound + (-room if after.sheet.aim.sense == "maximize" else room)
    expected = by_reference(after.sheet, old, float(allowed))
    assert float(found.distance) == pytest.approx(expected, abs=1e-5)
    best = by_reference(after.sheet, old, float(allowed), float(found.distance))
    best += float(after.sheet.aim.constant)
    assert float(after.exact_value) == pytest.approx(best, abs=1e-5)
    return True, found.distance < found.distance_before


def test_the_nearest_plan_agrees_with_the_reference():
    moved, nearer = 0, 0
    for seed in range(70):
        sheet = random_clashing(seed)
        sense = "minimize" if seed % 3 else "maximize"
        terms = tuple((j, c * (1 if seed % 3 else -1)) for j, c in sheet.aim.terms)
        aim = replace(sheet.aim, sense=sense, terms=terms, constant=seed % 7)
        standing = solve(replace(sheet, aim=aim, rules=sheet.rules[:2]))
        if standing.outcome != "optimal":
            continue
        for used in range(len(sheet.activities)):
            counts = check_nearest(standing, used, (0, 3, 20, 60)[(seed + used) % 4])
            moved, nearer = moved + counts[0], nearer + counts[1]
    assert moved > 40 and nearer > 5
