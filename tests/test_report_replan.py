"""Reports on re-plans, clashes and worths, in words and as JSON objects."""

import dataclasses
import json
import re
from fractions import Fraction

import pytest

from intplan import Sheet, solve
from intplan.planning import Bending, Clash, Give, Verdict, Worth, WorthTable
from intplan.planning.clash import settle
from intplan.planning.replan import replan
from intplan.planning.worth import worth
from intplan.report.change_words import algebra, changes_of, changes_table, subject_of
from intplan.report.clash_text import clash_blocks, clash_text, give_blocks
from intplan.report.phrases import CAUTION
from intplan.report.replan_data import clash_data, clash_members, replan_data, worth_data
from intplan.report.replan_text import closeness_sentence, replan_text
from intplan.report.worth_text import worth_text
from intplan.sheet.changes import change_sheet
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

CAPPED = UNBOUNDED + 'cap = "a <= 7"\n'


def changed(text: str, limits: dict | None = None, **changes):
    return replan(solve(Sheet.parse(text), **(limits or {})), **changes)


def first_line(text: str) -> str:
    """Return the opening sentences, without a title."""
    lines = text.split("\n\n")[0].split("\n")
    return lines[-1]


def said(text: str, **changes) -> str:
    return first_line(replan_text(changed(text, **changes)))


# ------------------------------------------------------------------------------ what happened


@pytest.mark.parametrize(
    ("sheet", "changes", "opening"),
    [
        (
            BAKERY,
            {"add": {"c": "loaf <= 860"}},
            "The plan stands: it meets c. It comes to 3,627.40 EUR, and it is still proven that "
            "no plan is better.",
        ),
        (
            # By hand: of 15.5 hours half an hour less, made up by half an hour at 18 EUR.
            BAKERY,
            {"set": {"oven": "<= 15.5"}},
            "The best plan moves: oven at most 15.5 costs 9 EUR. It comes to 3,618.40 EUR instead "
            "of 3,627.40 EUR, and it is proven that no plan is better.",
        ),
        (
            SOFT,
            {"set": {"need": ">= 6"}},
            "The best plan moves: need at least 6 brings 2.5 h. It comes to 6.8 h instead of "
            "9.3 h, and it is proven that no plan is better.",
        ),
        (
            CRATES,
            {"waive": ["a most"], "freeze": ["b"]},
            "The plan stands: it meets b fixed at 2, and waiving a most brings nothing. It comes "
            "to 395 EUR, and it is still proven that no plan is better.",
        ),
        (
            # A soft rule that the plan bends by 60 rather than move.
            BAKERY,
            {"add": {"c": {"rule": "loaf <= 800", "give": 1.5}}},
            "The plan stands, but c costs 90 EUR. It comes to 3,537.40 EUR instead of "
            "3,627.40 EUR, and it is proven that no plan is better.",
        ),
        (
            SOFT,
            {"waive": ["need"], "add": {"need": {"rule": "a + b >= 7.25", "give": 0.5,
                                                 "give_most": 4}}},
            "The plan stands, and the new need brings 0.8 h. It comes to 8.5 h instead of 9.3 h, "
            "and it is proven that no plan is better.",
        ),
        (
            CAPPED,
            {"waive": ["cap", "near"], "set": {"a": "<= 9"}},
            "The best plan moves: waiving cap, waiving near and a at most 9 together bring 3. It "
            "comes to 9 instead of 6, and it is proven that no plan is better.",
        ),
        (
            CAPPED,
            {"waive": ["cap"]},
            "The aim has no limit now: waiving cap leaves it none. It gets better for ever, "
            "starting from the plan below, as a grows by 2 and b grows by 1, again and again.",
        ),
        (UNBOUNDED, {"add": {"low": "a >= 1"}}, "The aim still has no limit. It gets better"),
        (
            UNBOUNDED,
            {"add": {"cap": "b <= 3"}},
            "The aim has a limit now: cap sets it. The best plan comes to 8.",
        ),
        (NO_AIM, {"add": {"c": "a >= 2"}}, "The plan moves so that it meets c."),
        (
            NO_AIM,
            {"add": {"c": "a >= 8"}},
            "No plan is left: none in whole units meets c together with the other rules and "
            "bounds. That is proven.",
        ),
        (
            INFEASIBLE,
            {"set": {"odd": "= 6"}},
            "There is a plan now: odd exactly 6 makes room. Here is a plan that meets every rule",
        ),
        (
            INFEASIBLE,
            {"add": {"c": "a >= 2"}},
            "There is still no plan in whole units that meets every rule and bound; that is",
        ),
        (
            SEVENTHS,
            {"add": {"c": "a <= 1"}},
            "The best plan moves: c costs 24/35 (about 0.685714). It comes to 96/35 (about 2.7428",
        ),
        (
            BAKERY,
            {"add": {f"c{k}": f"loaf <= {890 + k}" for k in range(5)}},
            "The plan stands: it meets the 5 changes.",
        ),
        (BAKERY, {"set": {"oven": "<= 16"}}, "The plan stands. It comes to 3,627.40 EUR, and"),
    ],
)  # fmt: skip
def test_the_first_sentences_say_what_happened(sheet, changes, opening):
    assert said(sheet, **changes).startswith(opening)


def test_nothing_moves_costs_nothing():
    text = (
        "[aim]\nmaximize = 'a + b'\n[activities]\na = {most=3}\nb = {most=3}\n"
        "[rules]\nr = 'a + b <= 3'"
    )
    change = changed(text, add={"c": "a + b >= 3"})
    assert first_line(replan_text(change)).startswith("The plan stands: it meets c.")
    elsewhere = 3 - change.before.plan["a"]
    assert said(text, set={"a": f"= {elsewhere}"}).startswith(
        f"The best plan moves: a fixed at {elsewhere} costs nothing. It comes to 3, and it is "
    )


def test_a_limit_leaves_it_unsettled():
    sheet = split_evenly()
    text = replan_text(changed(sheet, {"node_limit": 5}, add={"c": "x0 + x1 <= 1"}, node_limit=3))
    assert first_line(text).startswith(
        "It is not settled what c does to the plan. The node limit came before the proof was "
    )


def test_a_plan_within_a_gap_is_not_called_best():
    change = changed(CRATES, {"gap": 60}, add={"c": "a <= 1"}, gap=60)
    loose = dataclasses.replace(change.before.result, outcome="within_gap")
    change = dataclasses.replace(
        change, before=dataclasses.replace(change.before, result=loose), effect="moved"
    )
    text = first_line(replan_text(change))
    assert text.startswith("The plan moves because of c. It comes to ")
    assert text.endswith(
        "The plan before was not proven best, so the difference is not what c costs."
    )


def test_a_plan_that_stands_so_far():
    change = changed(BAKERY, waive=["overtime most"])
    loose = dataclasses.replace(
        change.after.result, outcome="unfinished", ended_by="time", bound=3700
    )
    change = dataclasses.replace(change, after=dataclasses.replace(change.after, result=loose))
    assert first_line(replan_text(change)) == (
        "The plan stands: waiving overtime most has brought nothing so far. It comes to "
        "3,627.40 EUR. The time limit came before the proof was complete. "
        "It is proven that no plan can pass 3,700 EUR, which is 2.01% away."
    )


# ------------------------------------------------------------------------------ tables


def test_report_of_a_move_in_full():
    change = changed(BAKERY, set={"loaf": "= 850"})
    paragraphs = replan_text(change).split("\n\n")
    assert paragraphs[1:3] == [
        "What has changed\n  changed  loaf: loaf = 850 (before: 0 <= loaf <= 900)",
        "What moves\n"
        "             before   now  change\n"
        "  loaf          860   850     -10\n"
        "  roll_tray      20    25      +5  trays\n"
        "  overtime      2.2  2.25   +0.05  h",
    ]
    assert paragraphs[-1].startswith(f"The search solved {change.after.search.nodes} node")
    assert paragraphs[-1].endswith(CAUTION)


def test_a_plan_that_stands_takes_no_search():
    change = changed(BAKERY, add={"c": "loaf <= 860"})
    assert replan_text(change).split("\n\n")[1:] == [
        "What has changed\n  new  c: loaf <= 860",
        "At their limit now, and not before\n  c  860  at most 860",
        f"No search was needed to tell.\n{CAUTION}",
    ]
    data = replan_data(change)
    assert data["search"] == {"nodes": 0, "pivots": 0, "cuts": 0, "seconds": 0.0}


def test_numbers_without_a_short_decimal_are_rounded_in_tables():
    text = replan_text(changed(SEVENTHS, add={"c": "a <= 1"}))
    assert "  a  about 1.85714              1  about -0.857143\n" in text
    assert "  b  about 1.57143  about 1.74286  about +0.171429" in text
    assert "At their limit now, and not before\n  c  1  at most 1" in text


def test_bends_are_told():
    text = replan_text(changed(BAKERY, add={"c": {"rule": "loaf <= 800", "give": 1.5}}))
    assert "\n\nc bends by 60, which costs 90 EUR.\n\n" in text
    assert "new  c: loaf <= 800 (bends at 1.50 EUR a unit)" in text
    assert "At their limit now" not in text
    text = replan_text(changed(SOFT, set={"need": ">= 0"}))
    assert "need does not bend any more." in text
    text = replan_text(changed(SOFT, set={"need": ">= 3"}))
    assert "need bends by 3, instead of by 4, which costs 2.1 h." in text


def test_changes_are_told_as_they_came_out():
    sheet = Sheet.parse(BAKERY)
    changes = change_sheet(
        sheet,
        add={"shelf": "loaf >= 2*roll_tray", "c": {"rule": "loaf <= 9", "give": 2, "give_most": 4}},
        waive=["shelf", "mixer", "overtime most"],
        set={"oven": "<= 14.5", "loaf": "5 <= loaf <= 10", "roll_tray most": 300},
    )
    assert changes_table(changes) == (
        "What has changed\n"
        "  waived     mixer: 6 <= 0.01*loaf + 0.02*roll_tray <= 9\n"
        "  waived     overtime most: overtime <= 12\n"
        "  changed    oven: 0.02*loaf + 0.05*roll_tray - overtime <= 14.5 (before at most 16)\n"
        "  changed    loaf: 5 <= loaf <= 10 (before: 0 <= loaf <= 900)\n"
        "  changed    roll_tray: 20 <= roll_tray <= 300 (before: 20 <= roll_tray <= 240)\n"
        "  rewritten  shelf: loaf - 2*roll_tray >= 0 (before: loaf - 3*roll_tray >= 0)\n"
        "  new        c: loaf <= 9 (bends at 2 EUR a unit, by at most 4)"
    )
    listed = changes_of(changes)
    assert [c.phrase for c in listed] == [
        "waiving mixer",
        "waiving overtime most",
        "oven at most 14.5",
        "loaf from 5 to 10",
        "roll_tray at most 300",
        "the new shelf",
        "c",
    ]
    assert [(c.tightened, c.loosened) for c in listed] == [
        (False, True), (False, True), (True, False), (True, False), (False, True), (True, True),
        (True, False),
    ]  # fmt: skip
    assert subject_of(listed[:2]).does("is", "are") == (
        "waiving mixer and waiving overtime most are"
    )
    assert subject_of(listed).text == "the 7 changes"


def test_the_note_of_a_changed_rule_stays_with_it():
    text = changes_table(change_sheet(Sheet.parse(BAKERY), set={"shelf": ">= 5"}))
    assert "(before at least 0; contract with the school)" in text


def test_long_rules_are_shortened_and_short_ones_are_not():
    terms = " + ".join(f"{k}*x{k}" for k in range(2, 40))
    names = "\n".join(f"x{k} = {{}}" for k in range(2, 40))
    sheet = Sheet.parse(f"[activities]\n{names}\n[rules]\nr = '{terms} - x2 <= 5'\ns = 'x2 = 3'")
    short = algebra(sheet, "r", 72)
    assert len(short) <= 72
    assert short == "x2 + 3*x3 + 4*x4 + 5*x5 + 6*x6 + 7*x7 + 8*x8 + (30 more) + 39*x39 <= 5"
    assert algebra(sheet, "r") == sheet.show_rule(sheet.rules[0])
    assert algebra(sheet, "s", 3) == "x2 = 3"
    assert algebra(sheet, "x7 least", 3) == "x7 >= 0"


# ------------------------------------------------------------------------------ stay close


def test_staying_close_is_told():
    change = changed(BAKERY, set={"loaf": "= 850"}, stay_close=0)
    assert closeness_sentence(change) == (
        "Of the best plans, this is the closest to the old one: its amounts differ from the old "
        "ones by 15.05 in all."
    )
    change = changed(CRATES, add={"c": "a <= 2"}, stay_close=20)
    text = replan_text(change)
    close = change.closeness
    assert close.done and f"differ from the old ones by {close.distance} in all" in text
    best = solve(change.changes.sheet).value
    assert change.after.value < best
    assert first_line(text) == (
        f"The plan moves: c costs {395 - best} EUR, and staying close gives up "
        f"{best - change.after.value} EUR. It comes to {change.after.value} EUR instead of "
        f"395 EUR; the best plan comes to {best} EUR, and it is proven that none is better."
    )
    data = replan_data(change)
    assert data["stay_close"]["percent"] == 20 and data["stay_close"]["done"] is True
    assert data["stay_close"]["distance"] == close.distance
    assert data["cost"] == 395 - change.after.value


def test_staying_close_that_was_not_done_says_why():
    change = changed(INFEASIBLE, set={"odd": "= 6"}, stay_close=1)
    assert closeness_sentence(change) == (
        "No plan closer to the old one was looked for: there is no plan to stay close to."
    )
    data = replan_data(change)["stay_close"]
    assert (data["done"], data["distance"]) == (False, None) and "no plan" in data["reason"]
    change = changed(CRATES, add={"c": "a <= 2"}, stay_close=1)
    limited = dataclasses.replace(change.closeness, done=False, reason="the time limit came first")
    assert closeness_sentence(dataclasses.replace(change, closeness=limited)) == (
        "It is not proven to be the closest to the old plan of the plans within 1% of the best: "
        "the time limit came first."
    )


# ------------------------------------------------------------------------------ clash and give


def test_a_clash_in_full():
    change = changed(CRATES, add={"c": {"rule": "a + b >= 8", "note": "the fair"}})
    paragraphs = replan_text(change).split("\n\n")
    # By hand: a <= 4 and b <= 3 leave 7 of 8, of which labour takes one more.
    assert paragraphs[2:4] == [
        "These 3 rules and bounds clash: no plan in whole units can meet them together. "
        "Without any one of them there is a plan. Fractions would not fit either.\n"
        "  c       a + b >= 8  the fair\n"
        "  a most  a <= 4\n"
        "  b most  b <= 3",
        "c alone would have to go from at least 8 to 6 (2 less).",
    ]
    assert paragraphs[4].startswith("With this give there is a plan. The best plan comes to ")
    data = json.loads(json.dumps(replan_data(change)))
    assert (data["effect"], data["outcome"], data["plan"], data["after"], data["cost"]) == (
        "impossible", "infeasible", None, None, None,
    )  # fmt: skip
    assert data["clash"] == ["c", "a most", "b most"]
    assert data["clash_rules"]["c"] == "a + b >= 8"
    assert (data["needs_whole"], data["smallest"]) == (False, True)
    assert data["give"] == data["give_alone"] == {"c": {"side": "least", "amount": 2}}
    assert data["give_plan"]["value"] == change.give.plan.value
    for name, witness in data["witnesses"].items():
        a, b = witness["plan"]["a"], witness["plan"]["b"]
        met = {"c": a + b >= 8, "a most": a <= 4, "b most": b <= 3}
        assert [n for n, good in met.items() if not good] == [name]


def test_bounds_at_0_share_a_line():
    change = changed(NO_AIM, add={"c": "a >= 8"})
    text = replan_text(change)
    assert "Fractions would have fitted.\n  sum  2*a + 3*b = 17\n  c    a >= 8\n" in text
    assert "\n  and that b cannot be below 0\n" in text
    assert re.search(r"sum alone would have to go from exactly 17 to 1[68] \(1 \w+\)\.", text)
    assert "c alone would have to go from at least 8 to 7 (1 less)." in text
    assert re.search(r"^The least give is that of (sum|c)\.$", text, re.MULTILINE)


def test_a_rule_that_clashes_by_itself():
    sheet = Sheet.parse(INFEASIBLE.replace("2*a", "3*a"))
    text = clash_text(sheet, settle(sheet))
    assert text.split("\n\n") == [
        "No plan in whole units can meet every rule and bound; that is proven.",
        "odd alone cannot be met by any plan in whole units. Fractions would have fitted.\n"
        "  odd  3*a = 5",
        "odd alone would have to go from exactly 5 to 6 (1 more).",
        "With this give there is a plan. Here is a plan that meets every rule and bound.\n  a  2",
        CAUTION,
    ]


MEMBERS = ("oven", "mill", "shop")


def two_loaves() -> Sheet:
    return Sheet.parse(
        "measure = 'EUR'\n[activities]\na = {}\nb = {}\n[rules]\n"
        "oven = 'a + b <= 9'\nmill = { rule = 'a >= 6', give = 3, give_most = 1 }\nshop = 'b >= 6'"
    )


def a_give(sheet: Sheet, **parts) -> Give:
    known = {
        "alone": {"oven": Bending("oven", "most", 3), "mill": None},
        "least": (Bending("oven", "most", 1), Bending("mill", "least", Fraction(1, 3))),
        "total": 2,
        "weighted": {"oven": 1, "mill": 3, "shop": 1},
        "plan": None,
        "may_bend": ("oven", "mill", "shop"),
        "proven": True,
    }
    return Give(**(known | parts))


def test_gives_of_every_kind():
    sheet = two_loaves()
    assert give_blocks(sheet, a_give(sheet), MEMBERS) == [
        "oven alone would have to go from at most 9 to 12 (3 more).\n"
        "mill alone cannot free the plan, however far it bends.\n"
        "The least give: oven from at most 9 to 10 (1 more) and mill from at least 6 to "
        "17/3 (about 5.66667) (about 0.333333 less), 2 EUR at the prices of the sheet."
    ]
    free = (Bending("oven", "most", 1), Bending("shop", "least", 2))
    loose = a_give(sheet, alone={}, least=free, total=3, proven=False)
    (block,) = give_blocks(sheet, loose, MEMBERS)
    assert block == (
        "The least give found: oven from at most 9 to 10 (1 more) and shop from at least 6 to 4 "
        "(2 less), 3 in all.\nThe search for the least give was cut short."
    )
    helpless = {"alone": {}, "least": None, "total": None}
    assert give_blocks(sheet, a_give(sheet, **helpless), MEMBERS) == [
        "Bending oven, mill and shop cannot free the plan."
    ]
    assert give_blocks(sheet, a_give(sheet, **helpless, may_bend=()), MEMBERS) == [
        "No rule may bend, so nothing frees the plan."
    ]
    (block,) = give_blocks(sheet, a_give(sheet, alone={}, least=free, total=3), ("oven",))
    assert block.endswith("\nBeyond this clash shop stands in the way too.")
    many = tuple(f"r{k}" for k in range(9))
    assert give_blocks(sheet, a_give(sheet, **helpless, may_bend=many), MEMBERS) == [
        "Bending these 9 rules cannot free the plan."
    ]
    only = {"alone": {"shop": None}, "least": None, "total": None, "may_bend": ("shop",)}
    assert give_blocks(sheet, a_give(sheet, **only), MEMBERS) == [
        "shop alone cannot free the plan, however far it bends."
    ]


def wide(rules: int = 1, activities: int = 9) -> Sheet:
    """Return a sheet with many rules over many activities of 0 or 1, one of 2 to 3."""
    names = [f"a{k}" for k in range(activities)]
    lines = [f"{name} = {{ most = 1 }}" for name in names] + ["b = { least = 2, most = 3 }"]
    says = [f"r{k} = '{' + '.join(names)} >= {k + 20}'" for k in range(rules)]
    return Sheet.parse("\n".join(["[activities]", *lines, "[rules]", *says]))


@pytest.mark.parametrize(
    ("ended", "sentences"),
    [
        ({"ended_by": "time"}, "set, as the time limit came first: some may not be needed."),
        ({"ended_by": "nodes"}, "set, as the node limit came first: some may not be needed."),
        ({"ended_by": "interrupt"}, "set, as the search was interrupted: some may"),
        ({"ended_by": "range"}, "set, as a whole activity grew too large to go on with: some may"),
        (
            {"ended_by": "nodes", "given_up": True},
            "set, as telling took too long and was given up: some may not be needed. "
            "`--time-limit` or `--node-limit` gives it longer.",
        ),
    ],
)
def test_a_clash_that_is_not_yet_the_smallest_says_why(ended, sentences):
    clash = Clash(two_loaves(), MEMBERS, True, False, {}, None, **ended)
    assert clash_blocks(clash)[0].startswith(
        "These 3 rules clash: no plan in whole units can meet them together. "
        f"They are not yet the smallest {sentences}"
    )
    data = clash_members(clash)
    assert (data["smallest"], data["clash_ended_by"]) == (False, ended["ended_by"])


def test_bounds_of_a_large_clash_share_lines():
    sheet = wide()
    names = ("r0", *(f"a{k} {s}" for k in range(9) for s in ("least", "most")), "b least", "b most")
    (block,) = clash_blocks(Clash(sheet, names, False, False, {}, None))
    assert block.split("\n") == [
        "1 rule and 20 bounds clash: no plan in whole units can meet them together. They are "
        "not yet the smallest set: some may not be needed. Fractions would not fit either.",
        "  r0       a0 + a1 + a2 + a3 + a4 + a5 + a6 + a7 + a8 >= 20",
        "  b least  b >= 2",
        "  b most   b <= 3",
        "  and that a0, a1, a2, a3, a4 and 4 other activities cannot be above 1",
        "  and that a0, a1, a2, a3, a4 and 4 other activities cannot be below 0",
    ]
    only = Clash(sheet, tuple(f"a{k} most" for k in range(3)), None, True, {}, None)
    assert clash_blocks(only)[0].endswith("\n  that a0, a1 and a2 cannot be above 1")
    assert clash_blocks(only)[0].startswith("These 3 bounds clash: ")


def test_rules_of_a_large_clash_are_counted():
    sheet = wide(rules=23)
    names = tuple(f"r{k}" for k in range(23))
    alone = {name: None if k % 2 else Bending(name, "least", k) for k, name in enumerate(names)}
    give = a_give(sheet, alone=alone, may_bend=names, weighted=dict.fromkeys(names, 1), least=None)
    clashing, freed = clash_blocks(Clash(sheet, names, None, True, {}, give))
    lines = clashing.split("\n")
    assert len(lines) == 22 and lines[-1].strip() == "(3 more rules)"
    assert freed.split("\n")[-2:] == [
        "r1, r3, r5, r7, r9 and 6 other rules each alone cannot free the plan, however far they "
        "bend.",
        "Bending these 23 rules cannot free the plan.",
    ]
    every = {name: Bending(name, "least", 1) for name in names}
    freed = give_blocks(sheet, a_give(sheet, alone=every, least=None, proven=False), names)
    assert freed[0].split("\n")[-2] == "So could 3 more rules alone."


def test_the_algebra_of_a_changed_rule_is_shortened():
    long = " + ".join(f"{10 + k}*activity_{k}" for k in range(9))
    lines = [f"activity_{k} = {{ most = 1 }}" for k in range(9)]
    text = "\n".join(["[activities]", *lines, "[rules]", f"r = '{long} <= 90'"])
    changes = change_sheet(Sheet.parse(text), set={"r": "<= 80"}, add={"s": f"{long} <= 99"})
    lines = changes_table(changes).split("\n")
    assert re.fullmatch(r"  changed  r: 10\*activity_0 \+ .* more\) .* <= 80 \(.* 90\)", lines[1])
    assert lines[2] == f"  new      s: {long} <= 99"


def test_a_clash_that_is_not_the_smallest():
    sheet = two_loaves()
    clash = Clash(sheet, ("oven", "mill", "shop"), None, False, {}, a_give(sheet))
    opening = clash_blocks(clash)[0]
    assert opening == (
        "These 3 rules clash: no plan in whole units can meet them together. "
        "They are not yet the smallest set: some may not be needed.\n"
        "  oven  a + b <= 9\n"
        "  mill  a >= 6  bends by at most 1\n"
        "  shop  b >= 6"
    )
    data = clash_members(clash)
    assert (data["needs_whole"], data["smallest"], data["witnesses"]) == (None, False, {})
    assert data["give"]["mill"] == {
        "side": "least", "amount": 1 / 3, "exact_amount": "1/3"
    }  # fmt: skip
    assert data["give_alone"]["mill"] is None
    assert data["give_weights"] == {"oven": 1, "mill": 3, "shop": 1}


def test_no_clash_and_no_answer():
    sheet = Sheet.parse(NO_AIM)
    found = settle(sheet)
    text = clash_text(sheet, found)
    assert text.startswith("Nothing clashes: here is a plan that meets every rule and bound.\n")
    data = clash_data(sheet, found)
    assert (data["outcome"], data["clash"]) == ("feasible", None)
    assert 2 * data["plan"]["a"] + 3 * data["plan"]["b"] == 17
    standing = solve(Sheet.parse(split_evenly()), node_limit=3)
    result = dataclasses.replace(standing.result, plan=None, value=None)
    open_ = Verdict("undecided", dataclasses.replace(standing, result=result), None)
    assert clash_text(standing.sheet, open_) == (
        "Even shares\nThe node limit came before the proof was complete. "
        "No plan has been found, nor is it proven that there is none."
    )
    data = clash_data(standing.sheet, open_)
    assert (data["outcome"], data["ended_by"], data["clash"]) == ("undecided", "nodes", None)


# ------------------------------------------------------------------------------ worth


def test_worth_of_the_bakery():
    found = worth(solve(Sheet.parse(BAKERY)))
    paragraphs = worth_text(found).split("\n\n")
    assert paragraphs[0] == (
        "Bakery, week 14\nThe best plan comes to 3,627.40 EUR. How that would change without a "
        "rule or bound, and with its limit one unit further out:"
    )
    lines = paragraphs[1].split("\n")
    # By hand: one hour more of the oven saves an hour of overtime, 18 EUR; and no more than 2.2.
    oven = next(line for line in lines if line.startswith("Without oven:"))
    assert oven == "Without oven: +39.60 EUR. One more: +18 EUR (18 per unit, of the relaxation)."
    data = worth_data(found)
    assert data["worth"]["oven"]["waived"] == 39.6 and data["worth"]["oven"]["unit"] == 18
    assert list(data["worth"]) == [entry.name for entry in found.entries]
    assert set(data["worth"]) | set(data["others"]) >= {"mixer", "shelf", "loaf most"}
    json.dumps(data, allow_nan=False)


def entry(name: str, **parts) -> Worth:
    known = {
        "side": "most", "toward": "most", "waived": 3, "runs_away": False, "unit": 2,
        "price": 2.5, "at_least": 3, "at_most": 3, "unsettled": (),
    }  # fmt: skip
    return Worth(name, **(known | parts))


def worths(text: str, *entries: Worth, others=(), floors=(), **ended) -> str:
    standing = solve(Sheet.parse(text))
    table = WorthTable(
        standing=standing,
        entries=entries,
        others=tuple(others),
        floors=tuple(floors),
        **({"ended_by": None} | ended),
    )
    json.dumps(worth_data(table), allow_nan=False)
    return worth_text(table)


def test_worths_of_every_kind():
    text = worths(
        BAKERY,
        entry("oven", waived=None, runs_away=True, at_most=None),
        entry("mixer", waived=None, at_least=1, at_most=5, unsettled=("waived",)),
        entry("shelf", side="least", toward="least", waived=None, unit=None, at_least=0,
              at_most=None, unsettled=("waived", "unit"), price=None),
        entry("loaf most", waived=Fraction(1, 3), unit=0, price=1 / 3),
        entry("loaf least", side="least", toward="least", waived=7),
        entry("roll_tray least", side="least", toward="least", waived=8),
        entry("overtime most", waived=0, unit=0),
        others=["overtime least"],
        floors=["loaf least", "overtime least"],
        ended_by="time",
    )  # fmt: skip
    assert text.split("\n\n")[1:] == [
        "Without oven: the aim has no limit. One more: +2 EUR (2.5 per unit, of the relaxation).\n"
        "Without mixer: from +1 EUR to +5 EUR, not settled. One more: +2 EUR (2.5 per "
        "unit, of the relaxation).\n"
        "Without shelf: not settled. One less: not settled.\n"
        "Without loaf most: +1/3 EUR (about 0.333333). One more: nothing "
        "(0.333333 per unit, of the relaxation).\n"
        "Without roll_tray least: +8 EUR. One less: +2 EUR (2.5 per unit, of the relaxation).",
        "If an activity could fall below 0: loaf +7 EUR.",
        "overtime most and overtime least cost nothing.",
        "Not weighed: 2 bounds that keep activities from falling below 0; `--below-zero` weighs "
        "them too.",
        "The time limit came before every figure was settled.",
        CAUTION,
    ]


def test_worths_where_less_is_better():
    text = worths(SOFT, entry("need", side="least", toward="least"))
    assert "Without need: -3 h. One less: -2 h (2.5 per unit, of the relaxation)." in text


def test_worths_that_are_rounded():
    text = worths(BAKERY, entry("oven", waived=Fraction(10**30, 7), unit=Fraction(10**30, 11)))
    assert "Without oven: about +1.42857e29 EUR. One more: about +9.09091e28 EUR (" in text
    text = worths(SOFT, entry("need", side="least", toward="least", waived=Fraction(10**30, 7)))
    assert "Without need: about -1.42857e29 h." in text


def test_worths_that_are_not_settled():
    some = entry("oven", waived=None, at_least=0, at_most=5, unsettled=("waived",))
    text = worths(BAKERY, some, ended_by="nodes")
    assert "Without oven: up to +5 EUR, not settled." in text
    assert "\n\nThe node limit came before every figure was settled.\n\n" in text
    text = worths(BAKERY, some, ended_by="nodes", given_up=True)
    assert text.split("\n\n")[-2] == (
        "Some figures took too long and were given up; `--time-limit` or `--node-limit` gives them "
        "longer."
    )
    most = entry("oven", waived=None, at_most=None, unsettled=("waived",))
    assert "Without oven: +3 EUR or better, not settled." in worths(BAKERY, most)


def test_rules_that_cost_nothing_are_counted():
    text = worths(BAKERY, others=[f"r{k}" for k in range(13)])
    assert text.split("\n\n")[:2] == [
        "Bakery, week 14\nNo rule and no bound costs the aim anything.",
        "13 rules or bounds cost nothing.",
    ]
    text = worths(BAKERY, entry("oven"), others=["mixer"])
    assert "\n\nmixer costs nothing.\n\n" in text
    text = worths(BAKERY, entry("oven"), floors=["loaf least"])
    assert "Not weighed: 1 bound that keeps activities from falling below 0;" in text


# ------------------------------------------------------------------------------ JSON


def test_json_of_a_move():
    data = json.loads(json.dumps(replan_data(changed(BAKERY, set={"loaf": "= 850"}))))
    search = data.pop("search")
    assert list(search) == ["nodes", "pivots", "cuts", "seconds"]
    assert data == {
        "title": "Bakery, week 14",
        "outcome": "optimal",
        "value": 3598.25,
        "bound": 3598.25,
        "plan": {"loaf": 850, "roll_tray": 25, "overtime": 2.25},
        "rules": {
            "oven": {"value": 16, "least": None, "most": 16, "spare": 0},
            "mixer": {"value": 9, "least": 6, "most": 9, "spare": 0},
            "shelf": {"value": 775, "least": 0, "most": None, "spare": 775},
        },
        "effect": "moved",
        "before": 3627.4,
        "after": 3598.25,
        "cost": 29.15,
        "moves": {"loaf": [860, 850], "roll_tray": [20, 25], "overtime": [2.2, 2.25]},
        "at_limit": [],
        "changes": {"added": {}, "waived": [], "set": {"loaf": "loaf = 850"}},
    }


def test_json_is_exact():
    data = replan_data(changed(SEVENTHS, add={"c": "3*a <= 1"}))
    assert data["exact_before"] == "24/7"
    assert data["exact_moves"]["a"] == ["13/7", "1/3"]
    assert data["changes"] == {"added": {"c": "3*a <= 1"}, "waived": [], "set": {}}


def test_json_of_changes_and_their_notes():
    data = replan_data(changed(BAKERY, waive=["overtime least"], set={"oven": "<= 17"}))
    assert data["changes"]["set"] == {"oven": "0.02*loaf + 0.05*roll_tray - overtime <= 17"}
    (note,) = data["changes"]["notes"]
    assert "overtime may go below 0" in note


# ------------------------------------------------------------------------------ hostile text


def test_text_from_sheets_and_arguments_cannot_reach_the_terminal():
    sheet = Sheet.parse(
        BAKERY.replace("Bakery, week 14", r"\u001b[31mred\u202e")
        .replace('"EUR"', r'"E\u0007R"')
        .replace("trays", r"tr\u009bays")
        .replace("contract with the school", r"line\nbreak")
    )
    standing = solve(sheet)
    note = {"rule": "loaf >= 880", "note": "a\x1b]0;b\x07c"}
    soft = {"rule": "loaf <= 800", "give": 2, "note": "d\u2028e"}
    changes = [
        {"add": {"c": note}, "set": {"shelf": ">= 1", "roll_tray": "= 22"}},
        {"add": {"c": soft}, "stay_close": 5},
        {"waive": ["shelf", "roll_tray least"]},
        {"add": {"c": note, "d": {"rule": "loaf <= 870", "note": "\x9b"}}},
        {"add": {"c": {"rule": "loaf <= 3", "note": "\x00"}}},
    ]
    texts = [replan_text(replan(standing, **each)) for each in changes]
    texts.append(worth_text(worth(standing)))
    hopeless = change_sheet(sheet, add={"c": {"rule": "loaf <= 3", "note": "\x1b"}}).sheet
    texts.append(clash_text(hopeless, settle(hopeless)))
    for text in texts:
        assert all(char.isprintable() or char == "\n" for char in text)
    assert r"\x1b[31mred\u202e" in texts[0] and r"a\x1b]0;b\x07c" in texts[0]
