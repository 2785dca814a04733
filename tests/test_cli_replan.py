"""replan, clash and worth on the command line, run in this process."""

import json
import os
from fractions import Fraction
from pathlib import Path

import pytest

import intplan.planning.replan as replan_module
from intplan import load_standing
from intplan.cli import run
from tests.bakery import BAKERY, CRATES, INFEASIBLE, SEVENTHS, SOFT, UNBOUNDED, split_evenly

SHEETS = {
    "bakery": BAKERY,
    "crates": CRATES,
    "soft": SOFT,
    "sevenths": SEVENTHS,
    "infeasible": INFEASIBLE,
    "unbounded": UNBOUNDED,
    "even": split_evenly(),
    "hostile": BAKERY.replace("Bakery", r"\u001b[2JBakery").replace('"EUR"', r'"E\u0007R"'),
}
OPEN = {"even": ["--node-limit", "5"]}  # limits under which a sheet is solved first


@pytest.fixture(scope="module")
def solved(tmp_path_factory):
    """A folder with every sheet and its standing plan."""
    folder = tmp_path_factory.mktemp("solved")
    for name, text in SHEETS.items():
        (folder / f"{name}.toml").write_text(text)
        save = ["--save", str(folder / f"{name}.json"), "--quiet"]
        run(["solve", str(folder / f"{name}.toml"), *save, *OPEN.get(name, [])])
    return folder


@pytest.fixture
def folder(solved, tmp_path, monkeypatch):
    """A folder with fresh copies of them, and the program started there."""
    for path in solved.iterdir():
        (tmp_path / path.name).write_bytes(path.read_bytes())
    monkeypatch.chdir(tmp_path)
    return tmp_path


# ------------------------------------------------------------------------------ replan


def test_replan(call):
    status, out, err = call("replan", "bakery.json", "--set", "oven <= 15.5")
    assert (status, err) == (0, "")
    assert out.startswith(
        "Bakery, week 14\nThe best plan moves: oven at most 15.5 costs 9 EUR. It comes to "
    )
    status, out, err = call("replan", "bakery.json", "--add", "c: loaf <= 860", "--json")
    data = json.loads(out)
    assert (status, err, out.count("\n")) == (0, "", 1)
    assert (data["effect"], data["before"], data["after"], data["cost"], data["moves"]) == (
        "stands", 3627.4, 3627.4, 0, {},
    )  # fmt: skip


@pytest.mark.parametrize(
    ("arguments", "status", "effect"),
    [
        (["bakery.json", "--add", "c: loaf <= 860"], 0, "stands"),
        (["bakery.json", "--add", 'c: {rule = "loaf <= 800", give = 9}'], 0, "moved"),
        (["bakery.json", "--set", "loaf = 850", "--freeze", "roll_tray"], 0, "moved"),
        (["bakery.json", "--set", "6 <= mixer <= 8.9", "--waive", "shelf"], 0, "moved"),
        (["bakery.json", "--set", "loaf most = 800"], 0, "moved"),
        (["bakery.json", "--waive", "loaf most"], 0, "stands"),
        (["crates.json", "--waive", "a most", "--gap", "50%"], 0, ("moved", "stands")),
        (["sevenths.json", "--add", "c: a <= 7/3"], 0, "stands"),
        (["infeasible.json", "--set", "odd = 6"], 0, "moved"),
        (["bakery.json", "--add", "c: loaf >= 901"], 1, "impossible"),
        (["infeasible.json", "--add", "c: a >= 1"], 1, "impossible"),
        (["unbounded.json", "--add", "c: a >= 1"], 1, "unbounded"),
        (["even.json", "--add", "c: x0 + x1 <= 1", "--node-limit", "1"], 3, "undecided"),
        (["even.json", "--add", "c: x0 + x1 <= 1", "--time-limit", "0.01"], 3, "undecided"),
    ],
)
def test_exit_status_of_replan(arguments, status, effect, call):
    got, out, err = call("replan", *arguments, "--json")
    data = json.loads(out)
    assert (got, err) == (status, "") or (got == status and "Note:" in err)
    assert data["effect"] in effect if isinstance(effect, tuple) else data["effect"] == effect
    assert call("replan", *arguments)[0] == status


def test_a_chain_of_saved_re_plans(call):
    status, _, err = call(
        "replan", "bakery.json", "--set", "oven <= 15.5", "--save", "2.json", "--plan-to", "2.csv"
    )
    assert (status, err) == (0, "")
    status, out, _ = call(
        "replan", "2.json", "--add", "c: loaf <= 800", "--waive", "mixer", "--save", "3.json",
        "--json",
    )  # fmt: skip
    second = json.loads(out)
    assert (status, second["before"]) == (0, 3618.4)
    assert [rule.name for rule in load_standing("3.json").sheet.rules] == ["oven", "shelf", "c"]
    status, out, _ = call(
        "replan", "3.json", "--waive", "c", "--add", "mixer: 6 <= 0.01*loaf + 0.02*roll_tray <= 9",
        "--set", "oven <= 16", "--json",
    )  # fmt: skip
    third = json.loads(out)
    assert (status, third["effect"], third["before"]) == (0, "moved", second["after"])
    assert third["after"] == 3627.4 and third["plan"] == {
        "loaf": 860, "roll_tray": 20, "overtime": 2.2,
    }  # fmt: skip
    assert load_standing("bakery.json").value == 3627.4
    Path("2.toml").write_text(BAKERY.replace("<= 16", "<= 15.5"))
    status, out, _ = call("check", "2.toml", "2.csv", "--json")
    assert (status, json.loads(out)["value"]) == (0, 3618.4)


def test_a_plan_that_is_left_unfinished_can_be_taken_up_again(call):
    change = ("--add", "c: x0 + x1 <= 1")
    status, _, _ = call("replan", "even.json", *change, "--node-limit", "1", "--save", "e.json")
    assert status == 3
    status, out, _ = call("replan", "e.json", "--waive", "c", "--node-limit", "1", "--json")
    assert (status, json.loads(out)["effect"]) == (3, "undecided")


def test_without_a_plan_no_plan_is_written(call):
    arguments = ("bakery.json", "--add", "c: loaf >= 901", "--save", "s.json", "--plan-to", "p.csv")
    status, out, err = call("replan", *arguments)
    assert (status, err) == (1, "Note: there is no plan, so p.csv was not written.\n")
    assert "No plan is left: none in whole units meets c together with the other rules" in out
    assert not Path("p.csv").exists()
    assert load_standing("s.json").outcome == "infeasible"
    assert call("replan", *arguments, "--quiet")[2] == ""
    status, out, _ = call("replan", "s.json", "--waive", "c", "--json")
    assert (status, json.loads(out)["value"]) == (0, 3627.4)


def test_notes_go_to_stderr_and_into_json(call):
    arguments = ("replan", "bakery.json", "--waive", "overtime least")
    _, out, err = call(*arguments)
    assert err.startswith("Note: ") and "overtime may go below 0" in err and "Note" not in out
    assert call(*arguments, "--quiet")[2] == ""
    _, out, err = call(*arguments, "--json", "--quiet")
    (note,) = json.loads(out)["changes"]["notes"]
    assert err == "" and "overtime may go below 0" in note


def test_a_first_plan_has_nothing_to_be_compared_with(call):
    change = ("replan", "infeasible.json", "--set", "odd = 6", "--stay-close")
    status, out, _ = call(*change, "--json")
    data = json.loads(out)
    assert (status, data["effect"], data["before"], data["cost"]) == (0, "moved", None, None)
    assert (data["plan"], data["moves"], data["at_limit"]) == ({"a": 3}, {}, [])
    assert data["stay_close"]["reason"] == "there is no plan to stay close to"
    assert "There is a plan now: odd exactly 6 makes room." in call(*change)[1]


def test_the_cost_includes_what_staying_close_gives_up(call):
    change = ("replan", "bakery.json", "--add", "c: loaf <= 800", "--json")
    best = json.loads(call(*change)[1])
    close = json.loads(call(*change, "--stay-close", "5")[1])
    assert close["cost"] > best["cost"] > 0 and close["bound"] == best["value"]
    cost, before, value = (Fraction(str(close[key])) for key in ("cost", "before", "value"))
    assert cost == before - value


@pytest.mark.parametrize(
    ("option", "percent"), [([], 0), (["2"], 2), (["0.5%"], 0.5), (["=3"], 3)]
)
def test_stay_close_takes_a_percentage_or_none(option, percent, call):
    joined = [f"--stay-close{option[0]}"] if option and option[0][0] == "=" else [
        "--stay-close", *option
    ]  # fmt: skip
    status, out, _ = call("replan", "crates.json", *joined, "--add", "c: a <= 2", "--json")
    assert status == 0
    close = json.loads(out)["stay_close"]
    assert (close["percent"], close["done"]) == (percent, True)
    assert close["distance"] <= close["distance_before"]


def test_stay_close_without_a_proof_is_told(call):
    status, out, _ = call(
        "replan", "even.json", "--add", "c: x0 <= 0", "--node-limit", "1", "--stay-close", "--json"
    )
    close = json.loads(out)["stay_close"]
    assert status == 3 and close["done"] is False and close["reason"]
    status, out, _ = call(
        "replan", "even.json", "--add", "c: x0 <= 0", "--node-limit", "1", "--stay-close"
    )
    assert status == 3 and f"No plan closer to the old one was looked for: {close['reason']}" in out


def test_may_bend_limits_the_give(call):
    change = ("replan", "crates.json", "--add", "c: a + b >= 8", "--json")
    assert json.loads(call(*change)[1])["give"] == {"c": {"side": "least", "amount": 2}}
    status, out, _ = call(*change, "--may-bend", "labour", "--may-bend", "room")
    data = json.loads(out)
    assert (status, data["give"], data["give_total"], data["give_plan"]) == (1, None, None, None)
    _, out, _ = call(*change[:-1], "--may-bend", "labour", "--may-bend", "room")
    assert "Bending room and labour cannot free the plan." in out


def test_interrupts_give_what_is_known(call, monkeypatch):
    def interrupted(*_, stop, **__):
        stop.__self__.count = 1
        return real(*_, stop=stop, **__)

    real = replan_module.replan
    monkeypatch.setattr(replan_module, "replan", interrupted)
    status, out, _ = call("replan", "even.json", "--waive", "kind0", "--json", "--save", "i.json")
    data = json.loads(out)
    assert (status, data["effect"], data["ended_by"]) == (3, "undecided", "interrupt")
    assert load_standing("i.json").ended_by == "interrupt"


def test_the_answer_outlives_a_failure_to_keep_it(call, monkeypatch):
    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("intplan.files._replace", full)
    arguments = ("replan", "bakery.json", "--set", "oven <= 15.5", "--save", "s.json")
    status, out, err = call(*arguments)
    assert status == 2 and "The best plan moves" in out and "No space left" in err
    status, out, _ = call(*arguments, "--json")
    data = json.loads(out)
    assert status == 2 and data["cost"] == 9 and "No space left" in data["error"]["message"]


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ([], "No change: give --add, --waive, --set or --freeze"),
        (["--stay-close"], "No change"),
        (["--add", "c: laof <= 3"], 'did you mean "loaf"?'),
        (["--add", "oven: loaf <= 3"], "the sheet has a rule oven already"),
        (["--add", "c: loaf <= 3", "--add", "c: loaf <= 4"], "added twice"),
        (["--add", "c: loaf*loaf <= 3"], "add c: column 5: a product of activities"),
        (["--add", "c: loaf < 3"], "write <="),
        (["--add", "c: loaf"], "a rule needs a relation"),
        (["--add", "c"], "a name, a colon and a rule"),
        (["--add", ""], "a name, a colon and a rule"),
        (["--add", ": loaf <= 3"], "an empty name; a name is a letter"),
        (["--add", "c d: loaf <= 3"], "a name holds no spaces"),
        (["--add", "c: 1 <= 0"], "false whatever the activities"),
        (["--add", 'c: {rule = "loaf <= 3", giev = 2}'], 'did you mean "give"?'),
        (["--add", 'c: {rule = "loaf <= 3"'], "unclosed"),
        (["--add", "c: __import__('os') <= 3"], 'unknown name "__import__"'),
        (["--add", "\x1b[31m: loaf <= 3"], r"\x1b[31m"),
        (["--waive", "ovn"], 'did you mean "oven"?'),
        (["--waive", ""], "waive: an empty name"),
        (["--waive", "loaf"], "its bounds are loaf least and loaf most"),
        (["--waive", "oven", "--waive", "oven"], "oven is waived twice; say it once"),
        (["--waive", "oven most"], "oven is a rule"),
        (["--waive", "oven", "--set", "oven <= 14"], "waived and set"),
        (["--waive", "\x9bK"], r"\x9bK"),
        (["--set", "oven >= 3"], "oven has no least; it says"),
        (["--set", "3 <= oven <= 9"], "add a rule of another name, such as oven_least: "),
        (["--set", "loaf mst = 3"], 'did you mean "loaf most"?'),
        (["--set", "ovn <= 3"], 'did you mean "oven"?'),
        (["--set", "oven < 3"], "write <="),
        (["--set", "oven"], "a rule needs a relation"),
        (["--set", "oven <= many"], "such as oven <= 14"),
        (["--set", "9 <= mixer <= 6"], "no value is at least 9 and at most 6"),
        (["--set", "7 >= mixer <= 9"], "point the same way"),
        (["--set", "loaf = 2.5"], "no whole number lies between"),
        (["--set", "oven <= 3", "--set", "oven <= 4"], "set twice"),
        (["--set", "oven <= 1e999"], "doubles"),
        (["--set", ""], "such as oven <= 14"),
        (["--freeze", ""], "freeze: an empty name"),
        (["--freeze", "loaf", "--freeze", "loaf"], "loaf is frozen twice; say it once"),
        (["--freeze", "laof"], 'did you mean "loaf"?'),
        (["--freeze", "oven"], "oven is a rule"),
        (["--freeze", "loaf", "--set", "loaf <= 3"], "both set and frozen"),
        (["--waive", "oven", "--may-bend", ""], "may_bend: an empty name"),
        (["--waive", "oven", "--may-bend", "mixr"], 'did you mean "mixer"?'),
        (["--waive", "oven", "--may-bend", "loaf most"], "only rules may bend"),
        (["--waive", "oven", "--may-bend", "oven"], '"oven" is waived, so that it'),
        (["--waive", "oven", "--stay-close", "101"], "no percentage"),
        (["--waive", "oven", "--stay-close", "much"], "no percentage"),
        (["--waive", "oven", "--stay-close", "-1"], "'--stay-close': '-1' is no percentage"),
        (["--waive", "oven", "--stay-close", "-inf"], "'--stay-close': '-inf' is no percentage"),
        (["--stay-close=-.5", "--waive", "oven"], "'--stay-close': '-.5' is no percentage"),
        (["--waive", "oven", "--stay-close", "-x"], "No such option"),
        (["--waive", "oven", "--node-limit", "0"], "no whole number from 1"),
        (["--waive", "oven", "--gap", "x"], "no percentage"),
        (["--waive"], "--waive"),
        (["--wave", "oven"], "--wave"),
    ],
    ids=lambda value: repr(value)[:50],
)
def test_replan_refuses(changes, message, failure):
    assert message in failure("replan", "bakery.json", *changes)


def test_freezing_needs_a_plan(failure):
    assert "there is no plan" in failure("replan", "infeasible.json", "--freeze", "a")


def test_replan_reads_standing_plans_only(failure, call):
    change = ("--waive", "oven")
    assert "`intplan solve" in failure("replan", "bakery.toml", *change)
    assert "no such file" in failure("replan", "absent.json", *change)
    Path("odd.json").write_text('{"kind": "other"}')
    assert "odd.json" in failure("replan", "odd.json", *change)
    Path("cut.json").write_bytes(Path("bakery.json").read_bytes()[:-90])
    assert "cut.json" in failure("replan", "cut.json", *change)
    assert "STANDING" in failure("replan", *change)
    assert "name of a file to read is empty" in failure("replan", "", *change)


@pytest.mark.parametrize("option", ["--save", "--plan-to"])
def test_targets_are_tried_before_the_work(option, failure, monkeypatch, tmp_path):
    def never(*_, **__):
        raise AssertionError("the work was started")

    monkeypatch.setattr(replan_module, "replan", never)
    change = ("replan", "bakery.json", "--waive", "oven", option)
    assert "no folder" in failure(*change, "absent/s.json")
    assert "it is a folder" in failure(*change, str(tmp_path))
    assert "name of a file to write is empty" in failure(*change, "")
    assert "read by this command" in failure(*change, "bakery.json")
    os.symlink("bakery.json", "link.json")
    assert "read by this command" in failure(*change, "link.json")
    assert "looks like an option" in failure(*change, "--quiet")
    assert "twice" in failure(*change[:-1], "--save", "x", "--plan-to", "x")


# ------------------------------------------------------------------------------ clash


@pytest.mark.parametrize(
    ("arguments", "status", "outcome"),
    [
        (["bakery.toml"], 0, "feasible"),
        (["bakery.json"], 0, "feasible"),
        (["unbounded.toml"], 0, "feasible"),
        (["infeasible.toml"], 1, "infeasible"),
        (["infeasible.json"], 1, "infeasible"),
        (["even.toml", "--node-limit", "1"], 3, "undecided"),
        (["even.json", "--time-limit", "0.01"], 3, "undecided"),
    ],
)
def test_exit_status_of_clash(arguments, status, outcome, call):
    got, out, err = call("clash", *arguments, "--json")
    data = json.loads(out)
    assert (got, err, data["outcome"]) == (status, "", outcome)
    assert (data["clash"] is None) == (outcome != "infeasible")
    assert call("clash", *arguments)[0] == status


def test_clash(call):
    Path("odd.toml").write_text(INFEASIBLE.replace("2*a", "3*a"))
    status, out, err = call("clash", "odd.toml")
    assert (status, err) == (1, "")
    assert out.startswith("No plan in whole units can meet every rule and bound; that is proven.")
    assert "odd alone would have to go from exactly 5 to 6 (1 more)." in out
    data = json.loads(call("clash", "odd.toml", "--json")[1])
    assert (data["clash"], data["needs_whole"], data["smallest"]) == (["odd"], True, True)
    assert data["give"] == {"odd": {"side": "most", "amount": 1}}


def test_a_clash_under_a_limit_is_one_all_the_same(call):
    call("replan", "bakery.json", "--add", "c: loaf + roll_tray >= 999", "--save", "s.json")
    status, out, _ = call("clash", "s.json", "--time-limit", "0.000001")
    assert status == 1 and " clash: no plan in whole units can meet them together." in out
    assert "They are not yet the smallest set, as the time limit came first: some may" in out
    status, out, _ = call("clash", "s.json", "--time-limit", "0.000001", "--json")
    data = json.loads(out)
    assert (status, data["smallest"], data["clash_ended_by"]) == (1, False, "time")
    status, out, _ = call("clash", "s.json", "--json")
    data = json.loads(out)
    assert (status, data["smallest"], data["clash_ended_by"]) == (1, True, None)


def test_clash_knows_a_standing_plan_by_its_content(call):
    Path("infeasible.json").rename("kept")
    assert call("clash", "kept")[0] == 1
    Path("infeasible.toml").rename("sheet")
    assert call("clash", "sheet")[0] == 1


def test_clash_of_a_saved_impossible_re_plan(call):
    call("replan", "crates.json", "--add", "c: a + b >= 8", "--save", "s.json")
    status, out, _ = call("clash", "s.json", "--may-bend", "c", "--json")
    data = json.loads(out)
    assert (status, data["clash"]) == (1, ["c", "a most", "b most"])
    assert data["give_weights"] == {"c": 1}


def test_clash_refuses(failure):
    assert "no such file" in failure("clash", "absent.toml")
    assert "no such file" in failure("clash", "absent.json")
    assert "no such file" in failure("clash", "absent")
    assert "name of a file to read is empty" in failure("clash", "")
    assert "may_bend: an empty name" in failure("clash", "infeasible.toml", "--may-bend", "")
    assert 'unknown rule "od"' in failure("clash", "infeasible.toml", "--may-bend", "od")
    Path("bad.toml").write_text("[activities\n")
    assert "line 1" in failure("clash", "bad.toml")
    Path("bad").write_text("{}")
    assert "bad" in failure("clash", "bad")
    assert "SHEET|STANDING" in failure("clash")
    assert "--gap" in failure("clash", "infeasible.toml", "--gap", "1")


def test_warnings_of_a_sheet_go_to_stderr(call):
    Path("odd.toml").write_text(INFEASIBLE + 'idle = "0 <= 1"\n')
    status, _, err = call("clash", "odd.toml")
    assert status == 1 and err.startswith("Note: ") and "idle" in err
    assert call("clash", "odd.toml", "--quiet")[2] == ""


# ------------------------------------------------------------------------------ worth


def test_worth(call):
    status, out, err = call("worth", "bakery.json")
    assert (status, err) == (0, "")
    assert "Without oven: +39.60 EUR. One more: +18 EUR (18 per unit, of the relaxation)." in out
    status, out, _ = call("worth", "bakery.json", "--json")
    oven = json.loads(out)["worth"]["oven"]
    assert (status, oven["waived"], oven["unit"], oven["unsettled"]) == (0, 39.6, 18, [])


def test_worth_is_the_cost_that_waiving_gives_back(call):
    _, out, _ = call("worth", "crates.json", "--json")
    for name, entry in json.loads(out)["worth"].items():
        _, out, _ = call("replan", "crates.json", "--waive", name, "--json", "--quiet")
        assert Fraction(str(entry["waived"])) == -Fraction(str(json.loads(out)["cost"])), name


def test_worth_weighs_what_keeps_activities_from_falling_below_0_where_asked(call):
    plain = json.loads(call("worth", "crates.json", "--json")[1])
    whole = json.loads(call("worth", "crates.json", "--below-zero", "--json")[1])
    assert plain["floors"] and not whole["floors"]
    assert set(whole["worth"]) - set(plain["worth"]) == set(plain["floors"])
    out = call("worth", "crates.json")[1]
    assert f"Not weighed: {len(plain['floors'])} bound" in out and "`--below-zero`" in out


def test_worth_under_a_limit_leaves_figures_open(call):
    status, out, _ = call("worth", "crates.json", "--node-limit", "1", "--json")
    data = json.loads(out)
    assert (status, data["ended_by"]) == (3, "nodes")
    assert any(entry["unsettled"] for entry in data["worth"].values())
    status, out, _ = call("worth", "crates.json", "--node-limit", "1")
    assert status == 3 and "The node limit came before every figure was settled." in out


def test_worth_refuses(failure):
    assert "proven optimal" in failure("worth", "even.json")
    assert "which rules clash" in failure("worth", "infeasible.json")
    assert "no limit" in failure("worth", "unbounded.json")
    assert "`intplan solve" in failure("worth", "bakery.toml")
    assert "STANDING" in failure("worth")
    assert "name of a file to read is empty" in failure("worth", "")


# ------------------------------------------------------------------------------ all three


def test_hostile_text_cannot_reach_the_terminal(call):
    for arguments in (
        ["replan", "hostile.json", "--set", "oven <= 15"],
        ["replan", "hostile.json", "--add", 'c: {rule = "loaf >= 901", note = "x\\u001b[0m"}'],
        ["clash", "hostile.toml"],
        ["worth", "hostile.json"],
    ):
        status, out, err = call(*arguments)
        assert status in (0, 1) and r"\x1b[2JBakery" in out
        assert all(char.isprintable() or char == "\n" for char in out + err)


def test_help_of_the_commands(call):
    out = call("--help")[1]
    for command in ("replan", "clash", "worth"):
        assert f"\n  {command} " in out
        status, text, _ = call(command, "--help")
        assert status == 0 and "Exit status: 0" in text
    assert "--stay-close [PERCENT]" in call("replan", "--help")[1]


def test_costs_past_all_doubles_are_refused_in_one_line(folder, failure):
    """Bends of some 1e9 units at 1e299 each come to more than the search can take."""
    Path("vast.toml").write_text(
        "[activities]\n"
        + "".join(f"{name} = {{ whole = false, most = 9e9 }}\n" for name in "ab")
        + '[rules]\nr = "1e299*a - 1e299*b >= 1e299"\ns = "b >= a + 8e9"\n'
    )
    assert "passes 1.8e308" in failure("clash", "vast.toml")
