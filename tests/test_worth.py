"""What rules and bounds cost: against fresh solves of the changed sheets, and by hand."""

from __future__ import annotations

from fractions import Fraction

import pytest

import intplan
from intplan import IntplanError, Sheet
from intplan.planning.prices import relaxation_prices
from intplan.planning.worth import Worth, WorthTable, worth
from intplan.sheet.changes import change_sheet
from tests.bakery import BAKERY
from tests.generators import random_problem

UNKNOWN = "unknown"
TABLES = """
[aim]
maximize = "5*chair + 9*table"
[activities]
chair = {}
table = {}
[rules]
wood = "3*chair + 7*table <= 29"
"""


def worths(text: str) -> dict[str, Worth]:
    table = worth(intplan.solve(Sheet.parse(text)))
    assert table.ended_by is None
    return {entry.name: entry for entry in table}


def fresh_gain(standing: intplan.StandingPlan, **change):
    """Return the gain by a change, solved from nothing; None for an aim without a limit."""
    after = intplan.solve(change_sheet(standing.sheet, **change).sheet, node_limit=600)
    if after.outcome == "unbounded":
        return None
    if after.outcome == "unfinished":
        return UNKNOWN
    assert after.outcome == "optimal"
    gain = after.exact_value - standing.exact_value
    return gain if standing.sheet.aim.sense == "maximize" else -gain


def limits_of(sheet: Sheet, name: str):
    if name in sheet.rule_index:
        rule = sheet.rules[sheet.rule_index[name]]
        return rule.least, rule.most
    owner, side = name.rsplit(" ", 1)
    bound = getattr(sheet.activities[sheet.activity_index[owner]], side)
    return (bound, None) if side == "least" else (None, bound)


def check_against_fresh(standing: intplan.StandingPlan, table: WorthTable) -> int:
    """Hold every figure of a table against solves from nothing; return how many were settled."""
    settled = 0
    for entry in table:
        least, most = limits_of(standing.sheet, entry.name)
        if "waived" not in entry.unsettled:
            gain = fresh_gain(standing, waive=[entry.name])
            assert gain == UNKNOWN or entry.runs_away == (gain is None)
            assert gain == UNKNOWN or entry.waived == gain
            settled += gain != UNKNOWN
        if "unit" not in entry.unsettled:
            gains = {}
            if least is not None:
                gains["least"] = fresh_gain(standing, set={entry.name: (least - 1, None)})
            if most is not None:
                gains["most"] = fresh_gain(standing, set={entry.name: (None, most + 1)})
            if UNKNOWN not in gains.values():
                assert entry.unit == max(gains.values()) == gains[entry.toward]
                settled += 1
        equal = least is not None and least == most
        assert entry.side == ("equal" if equal else entry.toward)
    for name in table.others:
        assert fresh_gain(standing, waive=[name]) in (0, UNKNOWN)
    return settled


@pytest.mark.parametrize("seed", range(160))
def test_every_figure_is_that_of_a_fresh_solve(seed):
    sheet = Sheet.from_arrays(**random_problem(seed).arrays())
    standing = intplan.solve(sheet)
    if standing.outcome != "optimal":
        with pytest.raises(IntplanError):
            worth(standing)
        return
    record, value = sheet.to_record(), standing.exact_value
    below_zero = seed % 3 == 0
    table = worth(standing, below_zero=below_zero, node_limit=1500)
    settled = check_against_fresh(standing, table)
    assert table.ended_by or settled >= 1 or not table.entries
    named = [entry.name for entry in table] + list(table.others) + list(table.floors)
    assert all(limits_of(sheet, name) == (0, None) for name in table.floors)
    assert not (below_zero and table.floors)
    bounds = [f"{a.name} {side}" for a in sheet.activities for side in ("least", "most")]
    written = [name for name in bounds if limits_of(sheet, name) != (None, None)]
    assert sorted(named) == sorted([*sheet.rule_index, *written])
    assert standing.sheet.to_record() == record
    assert standing.exact_value == value


def test_the_bakery():
    standing = intplan.solve(Sheet.parse(BAKERY))
    assert check_against_fresh(standing, worth(standing)) >= 10


def test_the_costliest_comes_first():
    entries = list(worth(intplan.solve(Sheet.read("instances/demo/bakery.toml"))))
    gains = [entry.waived for entry in entries]
    assert gains == sorted(gains, reverse=True)
    assert gains[0] > 0
    free = """
    [aim]
    maximize = "3*a + 100*b"
    [activities]
    a = {}
    b = { most = 50 }
    [rules]
    hold = "a <= 4"
    """
    names = [entry.name for entry in worth(intplan.solve(Sheet.parse(free)))]
    assert names[:2] == ["b most", "hold"] or names[:2] == ["hold", "b most"]


def test_a_rule_with_room_to_spare_costs_in_whole_units():
    text = """
    [aim]
    maximize = "5*chair + 9*table"
    [activities]
    chair = { most = 4 }
    table = {}
    [rules]
    wood = "4*chair + 7*table <= 27"
    """
    standing = intplan.solve(Sheet.parse(text))
    wood = standing.check.rules[0]
    assert wood.spare > 0  # the plan leaves wood over
    entry = next(e for e in worth(standing) if e.name == "wood")
    assert entry.unit > 0  # and yet a unit more of it would gain
    assert entry.unit == fresh_gain(standing, set={"wood": "<= 28"})


def test_a_rule_at_its_limit_may_gain_nothing_by_a_unit():
    text = """
    [aim]
    maximize = "a"
    [activities]
    a = {}
    [rules]
    pairs = "2*a <= 8"
    """
    standing = intplan.solve(Sheet.parse(text))
    assert standing.check.rules[0].spare == 0
    entry = worths(text)["pairs"]
    assert entry.unit == 0
    assert entry.runs_away
    assert entry.waived is None
    assert entry.at_most is None


def test_an_equality_tells_the_better_direction():
    text = """
    [aim]
    SENSE = "2*a + b"
    [activities]
    a = { most = 9 }
    b = { most = 9 }
    [rules]
    total = "a + b = 10"
    """
    up = worths(text.replace("SENSE", "maximize"))["total"]
    assert (up.side, up.toward, up.unit, up.waived) == ("equal", "most", 1, 8)
    assert up.price == pytest.approx(1)
    down = worths(text.replace("SENSE", "minimize"))["total"]
    assert (down.side, down.toward, down.waived) == ("equal", "least", 11)
    assert down.unit == fresh_gain(
        intplan.solve(Sheet.parse(text.replace("SENSE", "minimize"))), set={"total": ">= 9"}
    )


def test_a_range_tells_the_side_that_matters():
    text = """
    [aim]
    minimize = "3*a"
    [activities]
    a = {}
    [rules]
    band = "4 <= a <= 7"
    """
    entry = worths(text)["band"]
    assert (entry.side, entry.toward, entry.unit, entry.waived) == ("least", "least", 3, 12)
    assert entry.price == pytest.approx(3)
    entry = worths(text.replace("minimize", "maximize"))["band"]
    assert (entry.side, entry.toward, entry.unit, entry.runs_away) == ("most", "most", 3, True)


def test_without_its_only_limit_the_aim_runs_away():
    wood = worths(TABLES)["wood"]
    assert wood.runs_away
    assert wood.waived is None
    assert wood.unsettled == ()
    assert wood.unit == fresh_gain(intplan.solve(Sheet.parse(TABLES)), set={"wood": "<= 30"})


def test_bounds_are_weighed_like_rules():
    text = """
    [aim]
    maximize = "7/2*a - 2*b"
    [activities]
    a = { most = 6 }
    b = { least = 3, most = 8 }
    [rules]
    sum = "a + b <= 20"
    """
    found = worths(text)
    most = found["a most"]
    assert (most.side, most.toward, most.unit, most.waived) == (
        "most", "most", Fraction(7, 2), Fraction(7, 2) * 11,
    )  # fmt: skip
    assert most.price == pytest.approx(3.5)
    least = found["b least"]
    assert (least.side, least.unit, least.price) == ("least", 2, pytest.approx(2))
    assert least.runs_away  # below 0 without end


SOFT = """
[aim]
maximize = "10*a"
[activities]
a = { most = 100 }
[rules]
hours = { rule = "a <= 8", give = 4, give_most = 3 }
hard = "a <= 40"
"""


def test_a_soft_rule_costs_its_price_and_what_it_keeps_away():
    standing = intplan.solve(Sheet.parse(SOFT))
    assert standing.value == 10 * 11 - 4 * 3
    found = {entry.name: entry for entry in worth(standing)}
    assert found["hours"].waived == 400 - 98
    assert found["hours"].unit == 10  # one more at no price, the bend as far as before
    check_against_fresh(standing, worth(standing))


def test_a_soft_rule_that_bends_without_limit_costs_its_price():
    text = SOFT.replace(", give_most = 3", "")
    found = worths(text)
    assert found["hours"].waived == 4 * 32
    assert found["hours"].unit == 4
    assert found["hours"].price == pytest.approx(4)
    assert found["hard"].unit == 6


def test_rules_that_cost_nothing_gain_nothing():
    text = TABLES + 'idle = "chair + table <= 1000"\nnever = "chair - table >= -1000"\n'
    table = worth(intplan.solve(Sheet.parse(text)), below_zero=True)
    gains = {entry.name: (entry.waived, entry.unit) for entry in table}
    for name in ("idle", "never", "chair least"):
        assert name in table.others or gains[name] == (0, 0)


def test_what_keeps_an_activity_from_falling_below_zero_is_weighed_if_wanted():
    standing = intplan.solve(Sheet.parse(BAKERY))
    table = worth(standing)
    assert table.floors == ("loaf least", "overtime least")
    assert "roll_tray least" in [entry.name for entry in table]  # at 20, which somebody wanted
    more = worth(standing, below_zero=True)
    assert more.floors == ()
    assert {entry.name for entry in more} == {entry.name for entry in table} | set(table.floors)
    assert check_against_fresh(standing, more) > check_against_fresh(standing, table)
    same = {entry.name: entry for entry in more}
    assert all(same[entry.name] == entry for entry in table)


def test_without_an_aim_nothing_costs_anything():
    text = TABLES.replace('[aim]\nmaximize = "5*chair + 9*table"\n', "")
    table = worth(intplan.solve(Sheet.parse(text)))
    assert table.entries == ()
    assert table.others == ("wood", "chair least", "table least")


def test_minimised_and_maximised_figures_agree():
    flipped = BAKERY.replace(
        'maximize = "4.20*loaf + 2.75*roll_tray - 18*overtime"',
        'minimize = "-4.20*loaf - 2.75*roll_tray + 18*overtime"',
    )
    assert flipped != BAKERY
    first, second = worths(BAKERY), worths(flipped)
    assert {n: (e.waived, e.unit, e.toward) for n, e in first.items()} == {
        n: (e.waived, e.unit, e.toward) for n, e in second.items()
    }


@pytest.mark.parametrize("seed", range(120))
def test_a_price_is_no_less_than_the_gain_by_a_unit_in_fractions(seed):
    """The value of a relaxation is concave in its limits, and a price is a slope of it."""
    arrays = {**random_problem(seed).arrays(), "whole": False}
    standing = intplan.solve(Sheet.from_arrays(**arrays))
    if standing.outcome != "optimal":
        return
    for entry in worth(standing):
        assert entry.unsettled == ()  # nothing to branch on
        if entry.side == "equal" or entry.price is None:
            continue
        assert entry.unit <= entry.price + 1e-6 * (1 + abs(entry.price))


def test_a_price_is_in_units_of_the_sheet():
    text = """
    [aim]
    SENSE = "SIGN 0.3*a SIGN 0.5*b"
    [activities]
    a = { whole = false, most = 7 }
    b = { whole = false, most = 20 }
    [rules]
    hours = "1/8*a + 1/4*b <= 3"
    oven = "SIGN2 1000*b SIGN2 1000*a RELATION 15000"
    """
    words = {"SENSE": "maximize", "SIGN2": "", "SIGN": "", "RELATION": "<="}
    turned = {"SENSE": "minimize", "SIGN2": "-", "SIGN": "-", "RELATION": ">= -"}
    for chosen in (words, turned):
        written = text
        for word, meant in chosen.items():
            written = written.replace(word, meant)
        written = written.replace('"  ', '"').replace("*a  0", "*a + 0").replace("*b  1", "*b + 1")
        standing = intplan.solve(Sheet.parse(written))
        prices = relaxation_prices(standing.sheet)
        for entry in worth(standing):
            if entry.price:
                assert (entry.name, entry.toward) in prices
                tenth = Fraction(1, 1000)
                least, most = limits_of(standing.sheet, entry.name)
                moved = (None, most + tenth) if entry.toward == "most" else (least - tenth, None)
                gain = fresh_gain(standing, set={entry.name: moved})
                assert float(gain * 1000) == pytest.approx(entry.price)
        assert prices


def test_limits_leave_figures_open_and_say_so():
    standing = intplan.solve(Sheet.read("instances/demo/bakery.toml"))
    table = worth(standing, stop=lambda: True)
    assert table.ended_by == "interrupt"
    assert {entry.unsettled for entry in table} == {("waived", "unit")}
    assert all(entry.waived is entry.unit is entry.at_most is None for entry in table)
    assert all(entry.at_least == 0 for entry in table)

    settled = {entry.name: entry for entry in worth(standing)}
    some = worth(standing, node_limit=3)
    assert some.ended_by == "nodes"
    assert any(entry.unsettled for entry in some)
    for entry in some:
        full = settled[entry.name]
        if "waived" not in entry.unsettled:
            assert entry.waived == full.waived
        if "unit" not in entry.unsettled:
            assert entry.unit == full.unit
        if not full.runs_away:
            assert entry.at_least <= full.waived
            assert entry.at_most is None or full.waived <= entry.at_most


def test_figures_are_given_up_where_no_limit_was_asked_for(monkeypatch):
    standing = intplan.solve(Sheet.read("instances/demo/bakery.toml"))
    monkeypatch.setattr(intplan.planning.worth, "FIRST_NODES", (1, 0))
    monkeypatch.setattr(intplan.planning.worth, "ALL_NODES", 3)
    table = worth(standing)
    assert any(entry.unsettled for entry in table)
    assert (table.ended_by, table.given_up) == ("nodes", True)
    assert not worth(standing, node_limit=3).given_up


def test_time_that_is_up_is_told():
    standing = intplan.solve(Sheet.read("instances/demo/bakery.toml"))
    table = worth(standing, time_limit=1e-9)
    assert table.ended_by == "time"
    assert all(entry.unsettled for entry in table)
    assert worth(standing, time_limit=600).ended_by is None


def test_progress_is_told():
    calls = []
    worth(intplan.solve(Sheet.parse(TABLES)), progress=lambda done, of: calls.append((done, of)))
    assert calls[0][0] == 0
    assert all(0 <= done < of for done, of in calls)
    assert len({of for _, of in calls}) == 1


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (TABLES + 'no = "chair >= 100"', "this sheet has no plan; ask which rules clash"),
        (TABLES.replace("+ 7*table", "- 7*table"), "the aim of this sheet has no limit"),
    ],
)
def test_a_plan_that_is_not_proven_optimal_is_refused_in_one_line(text, words):
    with pytest.raises(IntplanError) as caught:
        worth(intplan.solve(Sheet.parse(text)))
    assert str(caught.value) == (
        f"only a plan that is proven optimal tells what its rules cost; {words}"
    )


def test_an_unfinished_plan_and_one_within_a_gap_are_refused_too():
    sheet = Sheet.read("instances/demo/orders.toml")
    with pytest.raises(IntplanError, match="was not finished"):
        worth(intplan.solve(sheet, node_limit=1))
    loose = intplan.solve(sheet, gap=50)
    assert loose.outcome == "within_gap"
    with pytest.raises(IntplanError, match="within a gap"):
        worth(loose)


def test_a_limit_that_makes_no_sense_is_refused():
    with pytest.raises(IntplanError, match="time limit"):
        worth(intplan.solve(Sheet.parse(TABLES)), time_limit=-1)
