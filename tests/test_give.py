"""The least give: hand-made ones, and random ones against the reference."""

from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction

import networkx as nx
import numpy as np
import pytest

import intplan.planning.give
from intplan import IntplanError, Sheet, StandingPlan, solve
from intplan.planning.budget import Budget
from intplan.planning.clash import clash, settle
from intplan.planning.directions import any_plan, widest
from intplan.planning.give import (
    Bending,
    Give,
    _bendings,
    _elastic,
    _relaxed,
    _solve_elastic,
    _step,
    _total,
    bendable_rules,
    bent,
    find_give,
)
from intplan.planning.replan import replan
from intplan.planning.restart import restarted
from intplan.sheet.changes import change_sheet
from intplan.sheet.model import Aim, Rule
from intplan.sheet.problem import Problem
from tests.changes import random_change
from tests.families import Instance, build, covering, instance_of, product_mix, selection
from tests.reference import INFEASIBLE as REFUSED
from tests.reference import OPTIMAL, reference_milp
from tests.test_clash import FAR, JOINERY, is_refused, random_clashing
from tests.test_replan_random import random_sheet
from tests.verify import Checker, check_plan, cost_of

CARTS = """
measure = "EUR"
[aim]
maximize = "3*cart + 5*sledge"
[activities]
cart = {}
sledge = {}
[rules]
oak   = "2*cart + 3*sledge <= 20"
fair  = "cart >= 7"
inn   = "sledge >= 4"
[rules.hands]
rule = "cart + sledge <= 9"
give = 4
give_most = 1
"""


def give_of(text: str, **options) -> Give:
    return clash(Sheet.parse(text), **options).give


# ------------------------------------------------------------------------------ by hand


def test_the_joinery_lacks_four_of_oak():
    # By hand: 184 of 180 oak; a chair fewer saves 4, a table fewer 11: one of either is enough.
    give = give_of(JOINERY)
    assert give.alone == {
        "oak": Bending("oak", "most", 4),
        "inn": Bending("inn", "least", 1),
        "school": Bending("school", "least", 1),
    }
    assert give.total == 1 and give.proven
    assert len(give.least) == 1 and give.least[0] in give.alone.values()
    assert give.plan.outcome == "optimal"
    assert give.may_bend == ("saw", "bench", "oak", "inn", "school", "shop")
    assert give.weighted == dict.fromkeys(give.may_bend, 1)


def test_the_plan_under_the_bent_limits_follows_the_aim():
    # Oak at 184 leaves 24 chairs and 8 tables as they are promised; they take 28 of 30 at the saw,
    # and 8 shelves the rest.
    give = give_of(JOINERY, may_bend=["oak"])
    assert give.least == (Bending("oak", "most", 4),)
    assert give.plan.plan == {"chair": 24, "table": 8, "shelf": 8}
    assert give.plan.value == 40 * 24 + 90 * 8 + 25 * 8


def test_only_what_may_bend_does():
    give = give_of(JOINERY, may_bend=["shop", "saw"])
    assert (give.alone, give.least, give.total, give.plan) == ({}, None, None, None)
    assert give.proven and give.may_bend == ("saw", "shop")
    nothing = give_of(JOINERY, may_bend=[])
    assert nothing.least is None and nothing.proven
    assert bendable_rules(Sheet.parse(JOINERY), "oak") == ("oak",)


@pytest.mark.parametrize(
    ("may_bend", "line"),
    [
        ([""], "may_bend: an empty name"),
        ([3], "may_bend: a name is text"),
        (["ok"], 'may_bend: unknown rule "ok"; did you mean "oak"?'),
        (["inn"], 'may_bend: "inn" is waived, so that it cannot bend'),
    ],
)
def test_names_of_no_rule_are_one_clear_line(may_bend, line):
    sheet = Sheet.parse(JOINERY)
    rest = replace(sheet, rules=tuple(rule for rule in sheet.rules if rule.name != "inn"))
    with pytest.raises(IntplanError) as caught:
        bendable_rules(rest, may_bend, waived=("inn",))
    assert str(caught.value) == line


def test_rules_that_may_bend_are_named_in_any_form():
    sheet = Sheet.parse('[activities]\na = {}\n[rules]\n"caf\u00e9" = "a <= 3"')
    assert bendable_rules(sheet, ["cafe\u0301"]) == ("caf\u00e9",)


def test_a_soft_rule_bends_further_at_its_price():
    # By hand: 7 carts and 4 sledges take 26 of 20 oak and 11 of 9 hands, one of which may bend
    # anyway. Two sledges fewer take 20 oak and 9 hands; a cart saves less oak.
    give = give_of(CARTS)
    assert give.total == 2 and give.proven
    assert give.least == (Bending("inn", "least", 2),)
    assert give.weighted == {"oak": 1, "fair": 1, "inn": 1, "hands": 4}
    assert give.plan.plan == {"cart": 7, "sledge": 2}
    assert give.plan.bends == {}
    oak = give_of(CARTS, may_bend=["oak", "hands"])
    assert oak.least == (Bending("oak", "most", 6), Bending("hands", "most", 1))
    assert oak.total == 6 + 4
    # The plan bends hands by two in all, which costs twice its price.
    assert oak.plan.plan == {"cart": 7, "sledge": 4} and oak.plan.bends == {"hands": 2}
    assert oak.plan.value == 3 * 7 + 5 * 4 - 2 * 4


def test_two_clashes_need_a_give_each():
    text = """
    [activities]
    a = { most = 3 }
    b = { most = 3 }
    [rules]
    more_a = "a >= 5"
    more_b = "2*b >= 9"
    """
    give = give_of(text)
    # One clash is named; bending its rule alone frees nothing, both rules must give.
    assert list(give.alone.values()) == [None]
    assert give.least == (Bending("more_a", "least", 2), Bending("more_b", "least", 3))
    assert give.total == 5


def test_an_equality_bends_to_the_nearer_side():
    give = give_of('[activities]\na = {}\n[rules]\nodd = "3*a = 7"')
    assert give.least == (Bending("odd", "least", 1),)
    give = give_of('[activities]\na = {}\n[rules]\nodd = "3*a = 8"')
    assert give.alone == {"odd": Bending("odd", "most", 1)}


def test_gives_are_exact():
    give = give_of('[activities]\na = { most = 1 }\n[rules]\nmore = "a/7 >= 1/3"')
    assert give.total == Fraction(4, 21) and give.least[0].amount == Fraction(4, 21)


def test_limits_are_moved_outward():
    sheet = Sheet.parse(CARTS)
    moved = bent(sheet, [Bending("oak", "most", Fraction(1, 2)), Bending("fair", "least", 3)])
    assert moved.rules[0].most == Fraction(41, 2) and moved.rules[1].least == 4
    assert bent(sheet, [Bending("hands", "most", 2)]).rules[3].give_most == 3
    assert moved.rules[2:] == sheet.rules[2:] and sheet.rules[0].most == 20


@pytest.mark.parametrize(("give_most", "limits"), [(2, (3, 11)), (None, (None, None)), (0, (5, 9))])
def test_the_widest_limits_of_a_soft_rule(give_most, limits):
    rule = Rule("soft", ((0, 1),), 5, 9, give=1, give_most=give_most)
    wide = widest(rule)
    assert (wide.least, wide.most) == limits and wide.give is None
    firm = Rule("firm", ((0, 1),), 5, 9)
    assert widest(firm) is firm


def test_a_limit_leaves_an_honest_give():
    sheet = Sheet.parse(JOINERY)
    give = find_give(sheet, ("oak", "inn", "school"), ("oak", "inn"), Budget(stop=lambda: True))
    assert (give.alone, give.least, give.total, give.plan, give.proven) == (
        {},
        None,
        None,
        None,
        False,
    )


# ------------------------------------------------------------------------------ searches that end


WORKSHOP = """
[activities]
a = { most = 3 }
b = { most = 4 }
c = { most = 5 }
d = { most = 4 }
e = { most = 5 }
f = { most = 4 }
[rules]
r0 = "2*a + 5*c = 26"
r1 = "5*b + 3*e = 31"
r2 = "2*a + 5*c + 2*d + 2*e = 44"
r3 = "7*a + 3*b + 3*d + f = 45"
r4 = "6*b + 8*c + 4*d + 12*e + 14*f = 168"
r5 = "71 <= 2*a + 3*c + 8*d + 5*e + 7*f <= 78"
"""


def test_bends_are_not_branched_on():
    # Each bend by itself is whole; branching on them, the search stays at a bound of 12 for ever.
    give = give_of(WORKSHOP, node_limit=3000)
    sheet = Sheet.parse(WORKSHOP)
    assert give.proven and agrees(give.total, least_by_reference(sheet, give.weighted))


PARITY = """
[activities]
a = { most = 40 }
b = { most = 40 }
c = { most = 40 }
[rules]
odd = "2*a + 4*b - 6*c = 7"
low = "a + b + c >= 130"
"""


def test_that_bending_frees_nothing_is_asked_first(monkeypatch):
    # odd has no plan in whole units, however far low bends; fractions would have one.
    sheet = Sheet.parse(PARITY)
    monkeypatch.setattr(intplan.planning.give, "_solve_elastic", None)
    give = find_give(sheet, ("odd", "low"), ("low",), Budget())
    assert (give.alone, give.least, give.proven) == ({"low": None}, None, True)


def test_without_the_least_give_one_is_known(monkeypatch):
    plain = intplan.planning.give._solve_elastic

    def stopped(*what, **limits):
        return plain(*what, **{**limits, "stop": lambda: True})

    monkeypatch.setattr(intplan.planning.give, "_solve_elastic", stopped)
    give = give_of(JOINERY)
    assert give.least and not give.proven and "inn" not in give.alone
    moved = bent(Sheet.parse(JOINERY), give.least)
    assert moved.check(list(give.plan.exact_plan.values())).good
    assert give.total == sum(bending.amount for bending in give.least)


def test_gives_of_activities_without_bounds():
    give = give_of(
        """
        [activities]
        a = { least = -inf }
        b = { least = -inf }
        [rules]
        odd = "2*a - 2*b = 1"
        """
    )
    assert give.total == 1 and give.proven and list(give.alone) == ["odd"]


# ------------------------------------------------------------------------------ at random


def elastic(sheet: Sheet, weights: dict[str, int], far: int = FAR) -> Instance:
    """Return arrays in which these rules bend both ways at their weights, for the reference."""
    firm = instance_of(replace(sheet, aim=Aim(), rules=tuple(map(widest, sheet.rules))), "", "")
    rules = [i for i, rule in enumerate(sheet.rules) if rule.name in weights]
    ways = np.zeros((len(sheet.rules), 2 * len(rules)))
    for k, i in enumerate(rules):
        ways[i, 2 * k : 2 * k + 2] = 1, -1
    prices = np.repeat([weights[sheet.rules[i].name] for i in rules], 2)
    activities = len(sheet.activities)
    return build(
        "", "", np.r_[np.zeros(activities), prices], np.hstack([firm.rows, ways]),
        firm.row_least, firm.row_most,
        np.r_[np.maximum(firm.least, -far), np.zeros(len(prices))],
        np.r_[np.minimum(firm.most, far), np.full(len(prices), np.inf)],
        np.r_[firm.whole, np.zeros(len(prices), bool)],
    )  # fmt: skip


def least_by_reference(sheet: Sheet, weights: dict[str, int]) -> float | None:
    """Ask the reference, again with other ends of the activities where it does not know."""
    for far in (FAR, FAR // 2, 2 * FAR):
        answer = reference_milp(elastic(sheet, weights, far))
        if answer.status in (OPTIMAL, REFUSED):
            return answer.value
    raise AssertionError("the reference does not know")


def agrees(found: float | Fraction | None, expected: float | None) -> bool:
    if found is None or expected is None:
        return found is None and expected is None
    return float(found) == pytest.approx(expected, abs=1e-6)


def test_every_give_is_the_least():
    gives = 0
    for seed in range(100):
        sheet = random_clashing(seed)
        may_bend = [r.name for r in sheet.rules if (seed + len(r.terms)) % 5]
        found = clash(sheet, may_bend=may_bend)
        if found is None:
            continue
        give = found.give
        weights = {r.name: r.give or 1 for r in sheet.rules if r.name in may_bend}
        assert give.proven and give.weighted == weights and give.may_bend == tuple(weights)
        assert agrees(give.total, least_by_reference(sheet, weights)), seed
        assert set(give.alone) == set(found.names) & set(weights)
        for name, bending in give.alone.items():
            amount = None if bending is None else bending.amount * weights[name]
            assert agrees(amount, least_by_reference(sheet, {name: weights[name]})), (seed, name)
        for name in set(weights) - set(found.names):
            assert is_refused(elastic(sheet, {name: 1}))
        if give.least is not None:
            gives += 1
            assert give.total == sum(b.amount * weights[b.name] for b in give.least)
            moved = bent(sheet, give.least)
            assert give.plan.value == solve(moved).value
            amounts = list(give.plan.exact_plan.values())
            assert moved.check(amounts).good and not sheet.check(amounts).good
    assert gives > 40


# ------------------------------------------------------------------------------ from the kept tree


def promised(instance: Instance) -> Iterator[StandingPlan]:
    """Yield proofs that the best value cannot be passed by one: from a kept tree, and from none."""
    standing = solve(Sheet.from_arrays(**instance.arrays()))
    sense = ">=" if standing.sheet.aim.sense == "maximize" else "<="
    goal = standing.exact_value + (1 if sense == ">=" else -1)
    names = [activity.name for activity in standing.sheet.activities]
    aim = " + ".join(f"{c}*{names[j]}" for j, c in standing.sheet.aim.terms)
    changes = change_sheet(standing.sheet, add={"goal": f"{aim} {sense} {goal}"})
    yield restarted(standing, changes)
    yield solve(changes.sheet)


def refuted(count: int) -> Iterator[StandingPlan]:
    """Yield infeasible standing plans with trees and cuts, and some with soft rules."""
    yield from promised(selection(5, 20, 1))
    for seed in range(count):
        yield from promised(product_mix(3, 6, seed, scarce=2))
        yield from promised(selection(2, 8, seed))
        yield from promised(covering(6, 9, 0.3, seed))
    for seed in range(5 * count):
        standing = settle(random_clashing(seed), may_bend=()).standing
        if standing.outcome == "infeasible" and standing.proven_sheet is standing.sheet:
            yield standing


def freed_ways(
    proof: StandingPlan, bending: tuple[str, ...]
) -> Iterator[tuple[Problem, StandingPlan]]:
    """Search for the least bendings from the kept tree, then from nothing but the same plan."""
    sheet = proof.sheet
    others = tuple(widest(rule) for rule in sheet.rules if rule.name not in bending)
    some = any_plan(replace(sheet, aim=Aim(), rules=others), Budget(), proof)
    if some.amounts is None:
        return
    wide = tuple(map(widest, sheet.rules))
    enough = _total(sheet, _bendings(sheet, wide, some.amounts))
    form = _elastic(sheet, bending, bending, enough)
    for start in (proof, None):
        yield _relaxed(form), _solve_elastic(form, start, some.amounts)


def prove(problem: Problem, standing: StandingPlan) -> None:
    """Prove a tree again; the sheet's aim comes in steps although the problem's does not."""
    result = standing.result
    assert check_plan(problem, result.plan) == result.value == result.bound
    checker = Checker(problem, result.tree, result.cuts, cost_of(problem, result.plan))
    checker.step = problem.cost_step
    checker.walk()


def closed_again(tree: nx.DiGraph) -> int:
    """Count nodes that were closed unsolved by what is proven of them alone."""
    count = 0
    for number, node in tree.nodes(data=True):
        if node["outcome"] == "beaten" and not node["pivots"] and number:
            (above,) = tree.predecessors(number)
            closure = node["evidence"]["closure"]
            count += closure is not tree.nodes[above]["evidence"]["closure"]
    return count


def test_the_kept_tree_gives_what_a_search_from_nothing_gives():
    """Values against the search from nothing, and whole trees in rationals.

    No cut may outlive that a rule of it can bend now.
    """
    compared = cuts = closed = 0
    for proof in refuted(3):
        names = tuple(rule.name for rule in proof.sheet.rules)
        for bending in (names, names[-1:], names[:1]):
            ways = list(freed_ways(proof, bending))
            if not ways:
                continue
            (problem, warm), (_, fresh) = ways
            assert warm.outcome == fresh.outcome == "optimal"
            assert warm.exact_value == fresh.exact_value, (proof.sheet, bending)
            prove(problem, warm)
            compared += 1
            cuts += bool(proof.result.cuts)
            closed += closed_again(warm.result.tree)
    assert compared > 50 and cuts > 25 and closed > 5, (compared, cuts, closed)


def test_gives_along_chains_of_changes_are_the_least():
    """The trees are carried over, translated, and speak of sheets without some soft rules."""
    gives = 0
    for seed in range(25):
        standing = solve(random_sheet(seed))
        rng = np.random.default_rng([seed, 99])
        for _ in range(3):
            change = random_change(standing.sheet, standing.exact_plan, rng)
            answer = replan(standing, **change.arguments)
            if answer.effect == "impossible":
                gives += 1
                weights = answer.give.weighted
                assert answer.give.proven
                assert agrees(answer.give.total, least_by_reference(change.sheet, weights)), seed
            if answer.after.outcome not in ("optimal", "infeasible"):
                break
            standing = answer.after
    assert gives > 12, gives


@pytest.mark.parametrize(
    ("rule", "step"),
    [
        ("0.5*a + 0.25*b <= 16", Fraction(1, 4)),
        ("6*a - 10*b >= 4", 2),
        ("6*a - 10*b >= 5", 1),
        ("2 <= 2*a + 4*b <= 7", 1),
        ("3*a + 6*b >= 4.5", Fraction(3, 2)),
        ("2*a + oil <= 4", None),
    ],
)
def test_rules_in_whole_activities_bend_in_steps(rule, step):
    sheet = Sheet.parse(
        "[activities]\na = {}\nb = {}\noil = { whole = false }\n[rules]\n" + f'r = "{rule}"'
    )
    assert _step(sheet, sheet.rules[0]) == step


def test_names_of_bends_are_new():
    text = '[activities]\n"bend[0]" = { most = 3 }\n[rules]\n"bend[1]" = "bend[0] >= 5"'
    assert give_of(text).total == 2
