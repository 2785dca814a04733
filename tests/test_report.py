"""Reports in words and as JSON objects, in the planner's own names and units."""

import dataclasses
import json
from fractions import Fraction

import pytest

from intplan import Sheet, solve
from intplan.planning.compare import Comparison, NodeComparison, compare
from intplan.report.data import check_data, compare_data, nodes_solved, solve_data
from intplan.report.phrases import CAUTION, percent_text, seconds_text
from intplan.report.tables import table
from intplan.report.text import check_text, compare_text, solve_text, status_sentence, tree_text
from tests.bakery import (
    ALL,
    BAKERY,
    CRATES,
    INFEASIBLE,
    NO_AIM,
    SEVENTHS,
    SOFT,
    UNBOUNDED,
    split_evenly,
)


def report(text: str, **limits) -> str:
    return solve_text(solve(Sheet.parse(text), **limits))


def checked(text: str, *amounts):
    sheet = Sheet.parse(text)
    return sheet, list(amounts), sheet.check(amounts)


# ------------------------------------------------------------------------------ solve, JSON


def test_json_of_the_bakery():
    data = solve_data(solve(Sheet.parse(BAKERY)))
    search = data.pop("search")
    assert json.loads(json.dumps(data)) == {
        "title": "Bakery, week 14",
        "outcome": "optimal",
        "value": 3627.4,
        "bound": 3627.4,
        "plan": {"loaf": 860, "roll_tray": 20, "overtime": 2.2},
        "rules": {
            "oven": {"value": 16, "least": None, "most": 16, "spare": 0},
            "mixer": {"value": 9, "least": 6, "most": 9, "spare": 0},
            "shelf": {"value": 800, "least": 0, "most": None, "spare": 800},
        },
    }
    assert list(search) == ["nodes", "pivots", "cuts", "seconds"]
    assert all(type(search[key]) is int for key in ("nodes", "pivots", "cuts"))


def test_json_gives_numbers_without_a_short_decimal_exactly():
    data = solve_data(solve(Sheet.parse(SEVENTHS)))
    assert (data["plan"], data["exact"]) == (
        {"a": 13 / 7, "b": 11 / 7},
        {"a": "13/7", "b": "11/7"},
    )
    assert (data["value"], data["exact_value"]) == (24 / 7, "24/7")
    assert data["exact_bound"] == "24/7"
    assert data["rules"]["one"]["exact_most"] == "50/7"
    assert data["rules"]["one"]["spare"] == 0 and "exact_spare" not in data["rules"]["one"]


def test_json_shows_bends_beside_the_rules():
    data = solve_data(solve(Sheet.parse(SOFT)))
    assert data["bends"] == {"need": {"side": "least", "amount": 4, "price": 2.8}}
    assert data["rules"]["need"] == {"value": 3.25, "least": 7.25, "most": None, "spare": -4}


def test_json_without_a_plan():
    data = solve_data(solve(Sheet.parse(INFEASIBLE)))
    assert (data["outcome"], data["plan"], data["value"], data["bound"]) == (
        "infeasible",
        None,
        None,
        None,
    )
    assert data["rules"] == {"odd": {"value": None, "least": 5, "most": 5, "spare": None}}


def test_json_of_an_unfinished_search():
    data = solve_data(solve(Sheet.parse(split_evenly()), node_limit=5))
    assert (data["outcome"], data["ended_by"]) == ("unfinished", "nodes")


def test_json_names_what_runs_away():
    data = solve_data(solve(Sheet.parse(UNBOUNDED)))
    assert (data["outcome"], data["bound"]) == ("unbounded", None)
    assert set(data["ray"]) == {"a", "b"}


def test_json_passes_the_warnings_of_a_sheet_on():
    sheet = Sheet.parse(BAKERY + 'idle = "0 <= 1"\n')
    assert len(solve_data(solve(sheet))["warnings"]) == 1


@pytest.mark.parametrize("text", ALL.values(), ids=ALL)
def test_every_answer_is_json(text):
    standing = solve(Sheet.parse(text))
    json.dumps(solve_data(standing), allow_nan=False)
    assert solve_text(standing).endswith(CAUTION)


# ------------------------------------------------------------------------------ solve, words


def test_report_of_the_bakery():
    standing = solve(Sheet.parse(BAKERY))
    paragraphs = solve_text(standing).split("\n\n")
    assert paragraphs[:4] == [
        "Bakery, week 14\n"
        "The best plan comes to 3,627.40 EUR. It is proven that no plan is better.",
        "  loaf       860\n  roll_tray   20  trays\n  overtime   2.2  h",
        "Rules at their limit\n  oven   16  at most 16\n  mixer   9  from 6 to 9",
        "Rules with room\n  shelf  800  at least 0  800 to spare  contract with the school",
    ]
    assert paragraphs[4].startswith(f"The search solved {standing.search.nodes} node")


def test_report_says_how_far_soft_rules_bend():
    text = report(SOFT)
    assert "  need  3.25  at least 7.25  bent by 4, which costs 2.8 h" in text
    assert "(1 other activity at 0: a)" in text


def test_report_without_a_plan():
    opening, hint, effort = report(INFEASIBLE).split("\n\n")
    assert opening == "No plan in whole units can meet every rule and bound; that is proven."
    assert "`intplan clash SHEET` tells which rules clash" in hint
    assert effort.endswith(CAUTION)
    assert "intplan clash" not in report(BAKERY)


def test_report_of_an_aim_without_a_limit():
    text = report(UNBOUNDED)
    assert text.startswith("The aim has no limit. It gets better for ever")
    assert "a grows by" in text and "b grows by" in text


def test_report_without_an_aim():
    text = report(NO_AIM)
    assert text.startswith("Here is a plan that meets every rule and bound.")
    assert "exactly 17" in text


def test_report_of_unfinished_searches():
    standing = solve(Sheet.parse(split_evenly()), node_limit=3)
    result = dataclasses.replace(standing.result, plan=None, value=None, bound=None)
    text = solve_text(dataclasses.replace(standing, result=result))
    assert "The node limit came before the proof was complete." in text
    assert "No plan has been found, nor is it proven that there is none." in text
    result = dataclasses.replace(result, ended_by="interrupt", bound=Fraction(7, 3))
    text = solve_text(dataclasses.replace(standing, result=result))
    assert "The search was interrupted" in text
    assert "If there is one, it cannot fall below 2.333333 EUR." in text


def test_report_of_a_plan_that_is_not_proven_best():
    standing = solve(Sheet.parse(CRATES))
    loose = {"outcome": "unfinished", "ended_by": "time", "bound": 400}
    text = solve_text(
        dataclasses.replace(standing, result=dataclasses.replace(standing.result, **loose))
    )
    assert "The time limit came before the proof was complete." in text
    assert (
        "The best plan so far comes to 395 EUR. "
        "It is proven that no plan can pass 400 EUR, which is 1.27% away."
    ) in text
    within = {"outcome": "within_gap", "bound": 400}
    text = solve_text(
        dataclasses.replace(standing, result=dataclasses.replace(standing.result, **within))
    )
    assert "The best plan found comes to 395 EUR." in text


def test_a_bound_is_passed_in_the_direction_of_the_aim():
    standing = solve(Sheet.parse(SOFT))
    loose = dataclasses.replace(standing.result, outcome="unfinished", ended_by="time", bound=5)
    text = solve_text(dataclasses.replace(standing, result=loose))
    assert "It is proven that no plan can fall below 5 h, which is" in text
    assert status_sentence(standing.sheet, 24, 0).endswith("nothing can fall below 0.")


def test_a_tree_tells_what_the_search_solved():
    standing = solve(Sheet.parse(split_evenly()), node_limit=3)
    total, solved = len(standing.tree), standing.search.nodes
    assert nodes_solved(standing) == solved < total
    assert tree_text(standing, "t.dot") == (
        f"The search tree, {total} nodes, is in t.dot. The search solved {solved} of them; "
        "the others were closed without that or still wait."
    )
    shut = solve(Sheet.parse("[activities]\na = {most=5}\n[rules]\nr = 'a >= 7'"))
    assert tree_text(shut, "t.dot").endswith("1 node, is in t.dot. Nothing of it was solved.")
    alone = solve(Sheet.parse(BAKERY))
    assert tree_text(alone, "t.dot") == "The search tree, 1 node, is in t.dot."


def test_text_from_a_sheet_cannot_reach_the_terminal():
    sheet = Sheet.parse(
        BAKERY.replace("Bakery, week 14", r"\u001b[31mred\u202e")
        .replace('"EUR"', r'"E\u0007R"')
        .replace("trays", r"tr\u009bays")
        .replace("contract with the school", r"line\nbreak")
    )
    text = solve_text(solve(sheet)) + check_text(sheet, [0, 0, 0], sheet.check([0, 0, 0]))
    assert all(char.isprintable() or char == "\n" for char in text)
    assert r"\x1b[31mred\u202e" in text and r"line\nbreak" in text


def test_many_exact_rules_are_counted():
    rules = "\n".join(f'r{k} = "a = 3"' for k in range(6))
    text = report(f"[activities]\na = {{most=5}}\n[rules]\n{rules}\ntop = 'a <= 3'")
    assert (
        "Rules at their limit\n  top  3  at most 3\n  (6 rules of an exact amount, all met)" in text
    )


def test_many_rules_with_room_are_counted():
    rules = "\n".join(f'r{k} = "a <= {20 + k}"' for k in range(25))
    assert "25 rules have room to spare." in report(
        f"[activities]\na = {{most=3}}\n[rules]\n{rules}"
    )


# ------------------------------------------------------------------------------ the status


@pytest.mark.parametrize(
    ("value", "bound", "sentence"),
    [
        (None, None, "No plan so far."),
        (None, 2801, "No plan so far; nothing can pass 2,801."),
        (2775, None, "Best plan so far 2,775 EUR."),
        (2775, 2801, "Best plan so far 2,775 EUR; nothing can pass 2,801."),
        (Fraction(55502, 20), 2801, "Best plan so far 2,775.10 EUR; nothing can pass 2,801."),
    ],
)
def test_status_sentences(value, bound, sentence):
    assert status_sentence(Sheet.parse(BAKERY), value, bound) == sentence


def test_percentages_are_rounded_up():
    assert percent_text(1, 300) == "0.34%"
    assert percent_text(-5, -100) == "5%"


def test_durations():
    assert [seconds_text(s) for s in (0.0002, 1.23456, 3723.46)] == [
        "under 0.001 s",
        "1.235 s",
        "3,723.5 s",
    ]


def test_tables_leave_empty_columns_out():
    assert table([["a", "", "1"], ["bcd", "", "20"]], right={2}) == "  a     1\n  bcd  20"


# ------------------------------------------------------------------------------ check


def test_a_good_plan():
    text = check_text(*checked(BAKERY, 860, 20, Fraction(11, 5)))
    assert text.startswith(
        "Bakery, week 14\nThe plan meets every rule and bound. It comes to 3,627.40 EUR."
    )
    data = check_data(*checked(BAKERY, 860, 20, Fraction(11, 5)), warnings=[])
    assert (data["good"], data["value"], data["broken"]) == (True, 3627.4, [])


def test_a_plan_that_breaks_rules_bounds_and_whole_units():
    sheet, amounts, check = checked(BAKERY, 901, Fraction(21, 2), -1)
    text = check_text(sheet, amounts, check)
    # By hand: the oven is 18.02 + 0.525 + 1 = 19.545 of 16, the mixer 9.01 + 0.21 = 9.22 of 9.
    assert "The plan breaks 6 rules or bounds. It would come to 3,831.075 EUR." in text
    for sentence in (
        "loaf is 901: 1 above its most of 900.",
        "roll_tray is 10.5: 9.5 below its least of 20.",
        "roll_tray is 10.5, which is not a whole number.",
        "overtime is -1: 1 below its least of 0.",
        "oven is 19.545: 3.545 above its most of 16.",
        "mixer is 9.22: 0.22 above its most of 9.",
    ):
        assert sentence in text
    assert "Rules at or past their limit" in text
    data = check_data(sheet, amounts, check, warnings=["a note"])
    assert data["good"] is False
    assert {"name": "oven", "what": "most", "by": 3.545} in data["broken"]
    assert {"name": "loaf most", "what": "most", "by": 1} in data["broken"]
    assert {"name": "roll_tray", "what": "whole", "by": 0.5} in data["broken"]
    assert data["warnings"] == ["a note"]


def test_a_plan_may_bend_soft_rules_at_their_price():
    text = check_text(*checked(SOFT, 4, 1))
    assert text.startswith("The plan meets every rule and bound. It comes to 15.575 h.")
    assert "bent by 2.25, which costs 1.575 h" in text
    text = check_text(*checked(SOFT, 2, 1))
    assert "need is 3: 4.25 below its least of 7.25, and it bends by 4 at most." in text
    assert "bent by 4, which costs 2.8 h, broken by 0.25" in text


# ------------------------------------------------------------------------------ compare


def test_comparison_of_a_search():
    standing = solve(Sheet.parse(split_evenly()), node_limit=20)
    comparison = compare(standing)
    assert comparison.agree and len(comparison.nodes) > 20
    assert comparison.warm_pivots < comparison.cold_pivots
    data = compare_data(comparison, standing)
    assert data["warm"]["pivots"] == sum(node["warm"]["pivots"] for node in data["nodes"])
    assert data["ratio"]["pivots"] == pytest.approx(
        comparison.warm_pivots / comparison.cold_pivots, rel=1e-3
    )
    text = compare_text(comparison, standing)
    assert "Both gave the same bound, or both found no plan, at every node." in text
    assert "The 15 nodes with the most pivots from nothing" in text
    assert "The node limit came before the proof was complete." in text


def test_comparison_that_disagrees_or_has_no_nodes():
    standing = solve(Sheet.parse(BAKERY))
    odd = NodeComparison(4, 1, 1, 0, 0.001, 0.0, 7.5, None, False, "loaf <= 3")
    comparison = Comparison.of((odd,))
    assert "They disagree at 1 node: 4." in compare_text(comparison, standing)
    data = compare_data(comparison, standing)
    assert (data["agree"], data["ratio"]["pivots"]) == (False, None)
    assert data["nodes"][0]["cold"]["bound"] is None
    assert "The search needed no branches" in compare_text(Comparison.of(()), standing)
    endless = solve(Sheet.parse(UNBOUNDED))
    assert "no bounds to compare" in compare_text(Comparison.of(()), endless)
