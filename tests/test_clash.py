"""Clashes: hand-made ones in words, random ones against the reference, limits and odd sheets."""

import doctest
import math
from contextlib import contextmanager
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest

import intplan.planning.budget
import intplan.planning.clash
from intplan import IntplanError, Sheet, solve
from intplan.planning import restart
from intplan.planning.budget import Budget
from intplan.planning.clash import Clash, broken_members, clash, find_clash, member_names, settle
from intplan.planning.give import bendable_rules
from intplan.sheet.model import Activity, Aim, Rule
from tests.bakery import BAKERY, INFEASIBLE, split_evenly
from tests.families import Instance, instance_of
from tests.reference import INFEASIBLE as REFUSED
from tests.reference import OPTIMAL, OTHER, reference_milp

FAR = 500  # where an activity without a bound ends, for the reference

JOINERY = """
title = "Joinery, too many promises"
measure = "EUR"
[aim]
maximize = "40*chair + 90*table + 25*shelf"
[activities]
chair = { most = 40 }
table = { most = 12 }
shelf = { most = 30 }
[rules]
saw    = "0.5*chair + 2*table + 0.25*shelf <= 30"
bench  = "2*chair + 3*table + shelf <= 90"
oak    = "4*chair + 11*table <= 180"
inn    = "chair >= 24"
school = "table >= 8"
shop   = "shelf >= 6"
"""


# ------------------------------------------------------------------------------ by hand


def test_the_joinery_names_the_promises_it_cannot_keep():
    # By hand: 24 chairs and 8 tables take 4*24 + 11*8 = 184 of 180 oak, and nothing else is
    # passed: 28 + 6/4 of 30 at the saw, 48 + 24 + 6 of 90 at the bench.
    found = clash(Sheet.parse(JOINERY))
    assert found.names == ("oak", "inn", "school")
    assert (found.needs_whole, found.smallest) == (False, True)
    assert found.witnesses["oak"]["chair"] >= 24 and found.witnesses["oak"]["table"] >= 8
    assert 4 * found.witnesses["inn"]["chair"] + 11 * found.witnesses["inn"]["table"] <= 180
    assert set(found.witnesses) == set(found.names)


def test_only_whole_units_clash():
    found = clash(Sheet.parse(INFEASIBLE))
    assert (found.names, found.needs_whole, found.smallest) == (("odd",), True, True)


def test_bounds_are_members():
    # Nothing keeps 2a + 2b at 1 but the least bounds and whole units; one of a, b below 0 would
    # still be even, so the least bounds do not matter.
    found = clash(Sheet.parse('[activities]\na = {}\nb = {}\n[rules]\nodd = "2*a + 2*b = 1"'))
    assert found.names == ("odd",)
    found = clash(
        Sheet.parse('[activities]\na = {}\nb = { most = 3 }\n[rules]\nfew = "a + 2 <= b - 2"')
    )
    assert found.names == ("few", "a least", "b most")
    assert found.witnesses["b most"]["b"] >= 4 and found.witnesses["a least"]["a"] <= -1


def test_a_soft_rule_clashes_at_the_limit_it_may_bend_to():
    text = """
    [activities]
    a = { most = 4 }
    [rules]
    need = { rule = "a >= 10", give = 2, give_most = 5 }
    """
    found = clash(Sheet.parse(text))
    assert found.names == ("need", "a most")
    assert found.witnesses["a most"]["a"] >= 5
    assert clash(Sheet.parse(text.replace("give_most = 5", "give_most = 6"))) is None
    assert clash(Sheet.parse(text.replace(", give_most = 5", ""))) is None


def test_a_sheet_with_a_plan_has_no_clash():
    sheet = Sheet.parse(BAKERY)
    assert clash(sheet) is None
    assert clash(solve(sheet)) is None
    verdict = settle(sheet)
    assert verdict.outcome == "feasible" and verdict.clash is None
    assert sheet.check(list(verdict.standing.exact_plan.values())).good


def test_of_a_standing_plan_the_tree_is_taken():
    standing = solve(Sheet.parse(JOINERY))
    verdict = settle(standing)
    assert verdict.standing is standing
    assert verdict.clash.names == ("oak", "inn", "school")


def test_new_rules_rather_stay(monkeypatch):
    # Either of two rules clashes with the bound; where the evidence names both, the one that came
    # last is in the clash.
    monkeypatch.setattr(restart, "support", lambda standing: set(member_names(standing.sheet)))
    text = '[activities]\na = { most = 5 }\n[rules]\none = "a >= 7"\ntwo = "a >= 8"'
    sheet = Sheet.parse(text)
    standing = solve(sheet)
    for name in ("one", "two"):
        found = find_clash(sheet, standing, (), Budget(), last=[name])
        assert found.names == (name, "a most")


def test_a_known_plan_is_a_witness_without_a_search(monkeypatch):
    sheet = Sheet.parse('[activities]\na = { least = -inf, most = 5 }\n[rules]\nmore = "a >= 7"')
    standing = solve(sheet)
    tested = []
    work = intplan.planning.clash._Filter(sheet, standing, Budget(), ["more"], [[5], [7]])
    monkeypatch.setattr(work, "_test", lambda *what: tested.append(what))
    work.run()
    assert work.witnesses == {"more": [5], "a most": [7]} and not tested


def test_what_a_plan_breaks_is_named():
    sheet = Sheet.parse(JOINERY)
    broken = {"saw", "bench", "oak", "chair most"}
    assert broken_members(sheet, member_names(sheet), [41, 8, 6]) == broken
    assert broken_members(sheet, ["oak"], [41, 8, 6]) == {"oak"}
    assert broken_members(sheet, ["shop", "table least"], [0, -1, 5]) == {"shop", "table least"}


def test_the_examples_in_the_documentation_run():
    outcome = doctest.testmod(intplan.planning.clash)
    assert outcome.attempted > 0 and outcome.failed == 0


# ------------------------------------------------------------------------------ limits


def test_undecided_is_an_error_with_its_own_status():
    sheet = Sheet.parse(split_evenly())
    hard = replace(sheet, activities=tuple(replace(a, most=a.most or 0) for a in sheet.activities))
    with pytest.raises(IntplanError, match=r"undecided .* the node limit came first") as caught:
        clash(hard, node_limit=3)
    assert caught.value.exit_status == 3
    with pytest.raises(IntplanError, match="interrupted"):
        clash(hard, stop=lambda: True)
    assert settle(hard, time_limit=0.02).outcome == "undecided"


def test_a_stop_in_the_middle_leaves_an_honest_clash():
    standing = solve(Sheet.parse(JOINERY))
    found = clash(standing, stop=lambda: True)
    assert not found.smallest and not found.give.proven
    assert (found.ended_by, found.given_up) == ("interrupt", False)
    assert {"oak", "inn", "school"} <= set(found.names)
    assert found.needs_whole in (False, None)


def test_a_node_limit_leaves_an_honest_clash():
    standing = solve(Sheet.parse(JOINERY))
    found = clash(standing, node_limit=1)
    assert {"oak", "inn", "school"} <= set(found.names)
    assert found.smallest == (set(found.names) == set(found.witnesses))
    assert (found.ended_by, found.given_up) == ("nodes", False)
    found = clash(standing, time_limit=1e-6)
    assert (found.smallest, found.ended_by, found.given_up) == (False, "time", False)
    found = clash(standing, node_limit=1000)
    assert (found.smallest, found.ended_by, found.given_up) == (True, None, False)


def test_a_clash_that_is_given_up_says_so(monkeypatch):
    @contextmanager
    def soon(self):
        self.capped, self.nodes = True, 1
        yield
        self.capped, self.nodes = False, None

    monkeypatch.setattr(Budget, "ending", soon)
    found = clash(solve(Sheet.parse(JOINERY)))
    assert {"oak", "inn", "school"} <= set(found.names)
    assert (found.smallest, found.ended_by, found.given_up) == (False, "nodes", True)


def test_a_clash_cut_short_goes_on_after_the_give(monkeypatch):
    @contextmanager
    def ended(self):
        deadline, self.deadline = self.deadline, 0.0
        yield
        self.deadline = deadline

    monkeypatch.setattr(Budget, "halved", ended)
    found = clash(solve(Sheet.parse(JOINERY)), time_limit=60)
    assert found.names == ("oak", "inn", "school") and found.smallest
    assert set(found.give.alone) <= set(found.names)


def test_a_test_ended_by_the_time_is_not_the_end_of_the_filter(monkeypatch):
    sheet = Sheet.parse(JOINERY)
    budget = Budget(time_limit=60)
    work = intplan.planning.clash._Filter(sheet, solve(sheet), budget, (), ())

    def slow(members, most_nodes):
        budget.deadline = 0.0
        return intplan.planning.clash._Test()

    monkeypatch.setattr(work, "_test", slow)
    assert work.run() is False and not work.smallest and work.ended_by == "time"


def test_tests_that_would_not_end_are_given_up(monkeypatch):
    # Without a limit too: the set is then not known to be the smallest, and all else still is.
    sheet = Sheet.parse(JOINERY)
    asked = []

    def hard(members, most_nodes):
        asked.append(most_nodes)
        budget.nodes -= most_nodes
        return intplan.planning.clash._Test()

    standing, budget = solve(sheet), Budget()
    work = intplan.planning.clash._Filter(sheet, standing, budget, (), ())
    monkeypatch.setattr(work, "_test", hard)
    with budget.ending():
        assert budget.nodes == intplan.planning.budget.ENDING_NODES
        assert work.run() and not work.smallest
    members = len(work.members)
    assert asked[:members] == [intplan.planning.clash.FIRST_NODES] * members
    assert len(asked) == 2 * members and asked[members] > 2 * asked[-1]
    assert budget.nodes is budget.fair_nodes is None
    assert clash(standing).smallest  # nothing of this stays


def test_activities_without_bounds_are_settled():
    text = """
    [activities]
    a = { least = -inf }
    b = { least = -inf }
    [rules]
    odd = "2*a - 2*b = 1"
    far = { rule = "a + b >= 70", give = 3 }
    """
    verdict = settle(Sheet.parse(text))
    assert verdict.outcome == "infeasible" and verdict.clash.names == ("odd",)
    assert verdict.clash.smallest and verdict.clash.needs_whole
    sheet = Sheet.parse(text.replace("= 1", "= 8") + 'strip = "60*a - 77*b = 2"')
    verdict = settle(sheet)
    assert verdict.outcome == "feasible" and verdict.standing.sheet is sheet
    check = sheet.check(list(verdict.standing.exact_plan.values()))
    assert check.good and check.value == verdict.standing.exact_value


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"may_bend": ["oack"]}, 'may_bend: unknown rule "oack"; did you mean "oak"?'),
        ({"may_bend": ["chair most"]}, "only rules may bend"),
        ({"time_limit": 0}, "more than 0 seconds"),
        ({"node_limit": 0}, "a whole number from 1"),
    ],
)
def test_what_makes_no_sense_is_told_in_a_line(options, message):
    with pytest.raises(IntplanError) as caught:
        clash(Sheet.parse(JOINERY), **options)
    assert message in str(caught.value)


def test_only_sheets_and_standing_plans_clash():
    with pytest.raises(TypeError, match="not str"):
        clash("joinery.toml")


# ------------------------------------------------------------------------------ at random


def random_clashing(seed: int) -> Sheet:
    """Return a small sheet of integers, which often has no plan, some rules of it soft."""
    rng = np.random.default_rng([seed, 77])
    activities, rules = int(rng.integers(2, 6)), int(rng.integers(2, 6))
    columns = []
    for j in range(activities):
        least = [0, 0, 0, None, int(rng.integers(-3, 4))][int(rng.integers(5))]
        most = None if rng.random() < 0.3 else (least or 0) + int(rng.integers(0, 7))
        columns.append(Activity(f"a{j}", least, most, whole=bool(rng.random() < 0.8)))
    made = []
    for i in range(rules):
        factors = rng.integers(-5, 8, activities) * (rng.random(activities) < 0.7)
        factors[int(rng.integers(activities))] = int(rng.integers(1, 8))
        terms = tuple((j, int(c)) for j, c in enumerate(factors) if c)
        middle = int(factors @ rng.integers(-2, 7, activities))
        least, most = middle + int(rng.integers(0, 9)), middle + 9
        kind = int(rng.integers(4))
        limits = [(least, None), (None, most), (least, most), (middle, middle)][kind]
        give = int(rng.integers(1, 5)) if rng.random() < 0.2 else None
        give_most = int(rng.integers(0, 4)) if give and rng.random() < 0.8 else None
        made.append(Rule(f"r{i}", terms, *limits, give=give, give_most=give_most))
    aim = Aim("minimize", tuple((j, 1) for j in range(activities)))
    return Sheet("", "", aim, tuple(columns), tuple(made))


def far_off(sheet: Sheet) -> Instance:
    """Return a sheet for the reference, without aim, with an end to every activity."""
    plain = instance_of(replace(sheet, aim=Aim()), "", "")
    plain.least[:] = np.maximum(plain.least, -FAR)
    plain.most[:] = np.minimum(plain.most, FAR)
    plain.aim[:] = 0
    return plain


def alone(sheet: Sheet, names: set[str]) -> Sheet:
    """Return a sheet with these rules and bounds and no others."""
    activities = tuple(
        Activity(
            a.name,
            a.least if f"{a.name} least" in names else None,
            a.most if f"{a.name} most" in names else None,
            a.whole,
        )
        for a in sheet.activities
    )
    return replace(
        sheet, activities=activities, rules=tuple(r for r in sheet.rules if r.name in names)
    )


def is_refused(instance: Instance) -> bool:
    """Ask the reference whether there is no plan; with no aim, "none or no limit" means none."""
    status = reference_milp(instance).status
    assert status in (OPTIMAL, REFUSED, OTHER)
    return status != OPTIMAL


def holds(sheet: Sheet, found: Clash) -> None:
    """Hold a clash against the reference, and its witnesses against the sheet, exactly."""
    names = set(found.names)
    assert len(names) == len(found.names) > 0
    assert list(found.names) == [n for n in member_names(sheet) if n in names]
    assert is_refused(far_off(alone(sheet, names)))
    fractions = far_off(alone(sheet, names))
    fractions.whole[:] = False
    assert found.needs_whole != is_refused(fractions)
    assert found.smallest and set(found.witnesses) == names
    for name, amounts in found.witnesses.items():
        rest = alone(sheet, names - {name})
        assert rest.check([amounts[a.name] for a in sheet.activities]).good


def test_every_clash_holds_and_none_of_it_can_go():
    clashes = 0
    for seed in range(200):
        sheet = random_clashing(seed)
        verdict = settle(sheet, may_bend=())
        if verdict.outcome == "infeasible":
            clashes += 1
            assert is_refused(far_off(sheet)), seed
            holds(sheet, verdict.clash)
        else:
            assert verdict.outcome == "feasible" and verdict.clash is None, seed
            assert verdict.standing.check.good
    assert clashes > 100


def test_the_filter_keeps_to_the_evidence():
    # Thirty rules and sixty bounds have nothing to do with the clash and are never tried.
    lines = ["[activities]"] + [f"a{j} = {{ most = 9 }}" for j in range(30)]
    lines += ["[rules]"] + [f'r{j} = "a{j} <= 7"' for j in range(30)] + ['more = "a0 >= 8"']
    found = clash(Sheet.parse("\n".join(lines)))
    assert found.names == ("r0", "more")
    assert math.isclose(found.give.total, 1)


def test_a_clash_of_thirds():
    text = '[activities]\na = { whole = false }\n[rules]\nlow = "3*a <= 1"\nhigh = "7*a >= 7/2"'
    found = clash(Sheet.parse(text))
    assert found.names == ("low", "high") and not found.needs_whole
    assert found.witnesses["low"]["a"] >= Fraction(1, 2)
    assert bendable_rules(found.sheet, None) == ("low", "high")
