"""The command line, run in this process: answers, exit statuses, one clear line for failures."""

import errno
import io
import json
import os
import sys
from fractions import Fraction
from pathlib import Path

import pytest

from intplan import Sheet, load_standing
from intplan.cli.console import Console, OutputError
from intplan.planning import compare as compare_module
from tests.bakery import (
    BAKERY,
    CRATES,
    INFEASIBLE,
    SEVENTHS,
    SOFT,
    UNBOUNDED,
    split_evenly,
)


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A folder with the sheets in it, and the program started there."""
    for name, text in {
        "bakery": BAKERY,
        "crates": CRATES,
        "soft": SOFT,
        "infeasible": INFEASIBLE,
        "unbounded": UNBOUNDED,
        "sevenths": SEVENTHS,
        "even": split_evenly(),
    }.items():
        (tmp_path / f"{name}.toml").write_text(text)
    monkeypatch.chdir(tmp_path)
    return tmp_path


# ------------------------------------------------------------------------------ solve


def test_solve(call):
    status, out, err = call("solve", "bakery.toml")
    assert (status, err) == (0, "")
    assert out.startswith("Bakery, week 14\nThe best plan comes to 3,627.40 EUR.")


def test_solve_json(call):
    status, out, err = call("solve", "bakery.toml", "--json")
    assert (status, err, out.count("\n")) == (0, "", 1)
    assert json.loads(out)["plan"] == {"loaf": 860, "roll_tray": 20, "overtime": 2.2}


@pytest.mark.parametrize(
    ("arguments", "status", "outcome", "ended_by"),
    [
        (["crates.toml"], 0, "optimal", None),
        (["soft.toml"], 0, "optimal", None),
        (["infeasible.toml"], 1, "infeasible", None),
        (["unbounded.toml"], 1, "unbounded", None),
        (["even.toml", "--node-limit", "5"], 3, "unfinished", "nodes"),
        (["even.toml", "--time-limit", "0.05"], 3, "unfinished", "time"),
    ],
)
def test_exit_status_of_solve(arguments, status, outcome, ended_by, call):
    got, out, err = call("solve", *arguments, "--json")
    data = json.loads(out)
    assert (got, err) == (status, "")
    assert (data["outcome"], data.get("ended_by")) == (outcome, ended_by)
    assert call("solve", *arguments)[0] == status


def test_gap_is_within_reach_of_its_words(call):
    status, out, _ = call("solve", "crates.toml", "--gap", "60%", "--json")
    data = json.loads(out)
    assert status == 0 and data["outcome"] in ("within_gap", "optimal")
    assert data["bound"] <= data["value"] * Fraction(8, 5)


def test_solve_keeps_the_standing_plan_and_the_plan(call):
    status, _, err = call("solve", "sevenths.toml", "--save", "s.json", "--plan-to", "p.csv")
    assert (status, err) == (0, "")
    standing = load_standing("s.json")
    assert standing.exact_plan == {"a": Fraction(13, 7), "b": Fraction(11, 7)}
    assert Path("p.csv").read_text() == "activity,amount\na,13/7\nb,11/7\n"
    status, out, _ = call("check", "sevenths.toml", "p.csv", "--json")
    assert status == 0 and json.loads(out)["exact_value"] == "24/7"


def test_what_was_kept_is_written_over_where_asked(call):
    Path("s.json").write_text("old")
    Path("other.json").write_text("old")
    assert call("solve", "bakery.toml", "--save", "s.json")[0] == 0
    assert load_standing("s.json").outcome == "optimal"
    assert Path("other.json").read_text() == "old"


def test_without_a_plan_no_plan_is_written(call):
    arguments = ("infeasible.toml", "--save", "s.json", "--plan-to", "p.csv")
    status, _, err = call("solve", *arguments)
    assert (status, err) == (1, "Note: there is no plan, so p.csv was not written.\n")
    assert not Path("p.csv").exists()
    assert load_standing("s.json").outcome == "infeasible"
    assert call("solve", *arguments, "--quiet")[2] == ""


def test_warnings_go_to_stderr_and_into_json(call):
    Path("odd.toml").write_text(BAKERY + 'idle = "0 <= 1"\n')
    status, out, err = call("solve", "odd.toml")
    assert status == 0 and err.startswith("Note: ") and "idle" in err and "Note" not in out
    assert call("solve", "odd.toml", "--quiet")[2] == ""
    (warning,) = json.loads(call("solve", "odd.toml", "--json", "--quiet")[1])["warnings"]
    assert "idle" in warning


def test_the_answer_outlives_a_failure_to_keep_it(call, monkeypatch):
    def full(path, data):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr("intplan.files._replace", lambda target, data, mode: full(target, data))
    status, out, err = call("solve", "bakery.toml", "--save", "s.json")
    assert status == 2 and "The best plan comes to 3,627.40 EUR." in out
    assert err.startswith("intplan: s.json: ") and "No space left" in err
    status, out, _ = call("solve", "bakery.toml", "--save", "s.json", "--json")
    data = json.loads(out)
    assert status == 2 and data["value"] == 3627.4 and "No space" in data["error"]["message"]


# ------------------------------------------------------------------------------ targets


@pytest.mark.parametrize("option", ["--save", "--plan-to"])
def test_targets_are_tried_before_the_work(option, failure, folder):
    # The sheet would take very long: the answer comes at once because nothing is solved.
    assert "no folder" in failure("solve", "even.toml", option, "absent/s.json")
    assert "it is a folder" in failure("solve", "even.toml", option, str(folder))
    assert "name of a file to write is empty" in failure("solve", "even.toml", option, "")
    assert "read by this command" in failure("solve", "even.toml", option, "even.toml")
    os.symlink("even.toml", "link.json")
    assert "read by this command" in failure("solve", "even.toml", option, "link.json")
    assert "no folder" in failure("solve", "even.toml", option, "even.toml/x.json")
    assert "ends in / is that of a folder" in failure("solve", "even.toml", option, "x/")
    too_long = os.strerror(errno.ENAMETOOLONG)
    assert f"made there ({too_long})" in failure("solve", "even.toml", option, "n" * 300)


def test_folders_that_take_no_file(failure, monkeypatch):
    def refuse(*_):
        raise FileNotFoundError(errno.ENOENT, "No such file or directory")

    monkeypatch.setattr(os, "open", refuse)
    said = "this file cannot be written: no file can be made there (No such file or directory)"
    for name in ("new.json", "soft.toml"):
        assert said in failure("solve", "even.toml", "--save", name)


def test_empty_names_of_files(failure):
    Path("plan.csv").write_text("activity,amount\n")
    reading = "the name of a file to read is empty"
    for words in (["solve", ""], ["check", "", "plan.csv"], ["check", "bakery.toml", ""],
                  ["compare", ""], ["tree", "", "--to", "t.dot"]):  # fmt: skip
        assert reading in failure(*words)
    assert "the name of a file to write is empty" in failure("tree", "s.json", "--to", "")


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="root may write anywhere")
def test_targets_that_may_not_be_written(failure, folder):
    (folder / "closed").mkdir(mode=0o500)
    assert "may not write" in failure("solve", "even.toml", "--save", "closed/s.json")
    Path("kept.json").touch(mode=0o400)
    assert "write-protected" in failure("solve", "even.toml", "--save", "kept.json")


def test_an_option_is_not_taken_for_a_file(failure):
    assert "looks like an option" in failure("solve", "even.toml", "--save", "--quiet")


def test_two_answers_cannot_share_a_file(failure):
    assert "twice" in failure("solve", "even.toml", "--save", "x", "--plan-to", "x")


# ------------------------------------------------------------------------------ check


def plan_file(content: str | bytes) -> str:
    Path("plan.csv").write_bytes(content if isinstance(content, bytes) else content.encode())
    return "plan.csv"


@pytest.mark.parametrize(
    "content",
    [
        "activity,amount\nloaf,860\nroll_tray,20\novertime,2.2\n",
        "activity,amount\r\nloaf,8.6e2\r\nroll_tray,40/2\r\novertime,11/5\r\n",
        "\ufeffactivity,amount\n\nloaf,860.0\n  \n,\nroll_tray, +20 \novertime,2.20",
        'Amount,"Activity",note\n860,"loaf",most of it\n20,roll_tray,\n"2.2",overtime,"a, b"\n',
    ],
)
def test_check_reads_plans(content, call):
    status, out, err = call("check", "bakery.toml", plan_file(content), "--json")
    data = json.loads(out)
    assert (status, err) == (0, "")
    assert (data["good"], data["value"], "warnings" in data) == (True, 3627.4, False)


def test_check_counts_what_is_absent_as_nothing(call):
    name = plan_file("activity,amount\nloaf,800\nroll_tray,25\n")
    status, _, err = call("check", "bakery.toml", name)
    warning = "overtime is not in the plan and counts as 0"
    assert (status, err) == (1, f"Note: {warning}.\n")
    status, out, err = call("check", "bakery.toml", name, "--json", "--quiet")
    assert (status, err, json.loads(out)["warnings"]) == (1, "", [warning])
    _, out, _ = call("check", "bakery.toml", plan_file("activity,amount\n"), "--json")
    assert json.loads(out)["warnings"] == [
        "3 activities are not in the plan and count as 0: loaf, roll_tray, overtime"
    ]


def test_check_says_by_how_much_a_rule_is_broken(call):
    # By hand: the oven takes 0.02 * 880 + 0.05 * 20 - 1 = 17.6 hours of 16.
    name = plan_file("activity,amount\nloaf,880\nroll_tray,20\novertime,1\n")
    status, out, _ = call("check", "bakery.toml", name)
    assert status == 1 and "oven is 17.6: 1.6 above its most of 16." in out
    status, out, _ = call("check", "bakery.toml", name, "--json")
    assert {"name": "oven", "what": "most", "by": 1.6} in json.loads(out)["broken"]


def test_check_lets_soft_rules_bend(call):
    status, out, _ = call("check", "soft.toml", plan_file("activity,amount\na,4\nb,1\n"))
    assert status == 0 and "bent by 2.25, which costs 1.575 h" in out


@pytest.mark.parametrize(
    ("content", "place", "message"),
    [
        ("", "plan.csv", "empty"),
        ("\n\n", "plan.csv", "empty"),
        ("activity;amount\nloaf;3\n", "line 1", "comma between columns"),
        ("activity\tamount\nloaf\t3\n", "line 1", "comma between columns"),
        ("loaf,3\n", "line 1", "no column activity; the first line names the columns"),
        ("activity,ammount\nloaf,3\n", "line 1", 'is "ammount" meant'),
        ("activity,amount,Amount\nloaf,3,3\n", "line 1", "two columns are called amount"),
        ("activity,amount\nlaof,3\n", "line 2, column 1", 'did you mean "loaf"?'),
        ("amount,activity\n3,laof\n", "line 2, column 2", 'did you mean "loaf"?'),
        ("activity,amount\noven,3\n", "line 2, column 1", 'unknown activity "oven"'),
        ("activity,amount\n,3\n", "line 2, column 1", "a name is missing"),
        ("activity,amount\nloaf,1\n\nloaf,1\n", "line 4, column 1", "already given in line 2"),
        ("activity,amount\nloaf,many\n", "line 2, column 2", 'is "many", no number'),
        ("activity,amount\nloaf,\n", "line 2, column 2", "loaf has no amount"),
        ("activity,amount\nloaf,nan\n", "line 2, column 2", "no number"),
        ("activity,amount\nloaf,inf\n", "line 2, column 2", "no number"),
        ("activity,amount\nloaf,1e999999999\n", "line 2, column 2", "no number"),
        ("activity,amount\nloaf,1/0\n", "line 2, column 2", "no number"),
        ("activity,amount\nloaf,1_000\n", "line 2, column 2", "no number"),
        ('activity,amount\nloaf,"1,000"\n', "line 2, column 2", "thousands no mark"),
        ("activity,amount\nloaf,\u0663\n", "line 2, column 2", "no number"),
        ("activity,amount\nloaf,=1+1\n", "line 2, column 2", "no number"),
        ("activity,amount\nloaf," + "9" * 20_000 + "\n", "line 2, column 2", "no number"),
        ("activity,amount\nloaf,8.5\n", "line 2, column 2", "whole units, and its amount is 8.5"),
        ("activity,amount\nloaf,7/3\n", "line 2, column 2", "whole units, and its amount is 7/3"),
        ("activity,amount\nloaf,2,5\n", "line 2", "a decimal has a point"),
        ("activity,amount\nloaf\n", "line 2", "1 cell where the header has 2"),
        ("activity,amount\nloaf;3\n", "line 2", "put a comma between columns"),
        ("activity,amount\nloaf;2,5\n", "line 2, column 1", 'did you mean "loaf"?'),
        ("activity,amount\nloaf," + "9" * 5_000 + "\n", "line 2, column 2", "larger than doubles"),
        ("activity,amount\nloaf,-2e308\n", "line 2, column 2", "larger than doubles"),
        ('activity,amount\n"loaf,3\n', "line 2", "no CSV"),
        (b"activity,amount\nl\xf6af,3\n", "line 2", "UTF-8"),
        (b"activity,amount\nlo\x00af,3\n", "line 2", r"lo\x00af"),
        ("activity,amount\n\x1b[31mloaf,3\n", "line 2, column 1", r"\x1b[31mloaf"),
    ],
    ids=lambda value: repr(value[:40]),
)
def test_check_refuses_plans(content, place, message, failure):
    line = failure("check", "bakery.toml", plan_file(content))
    assert place in line and message in line
    assert all(char.isprintable() for char in line.rstrip("\n"))


def test_check_of_files_that_are_none(failure, folder):
    assert "no such file" in failure("check", "bakery.toml", "absent.csv")
    assert "folder" in failure("check", "bakery.toml", str(folder))
    assert "no such file" in failure("check", "bakry.toml", "plan.csv")


# ------------------------------------------------------------------------------ compare


def test_compare(call):
    status, out, err = call("compare", "even.toml", "--node-limit", "15", "--json")
    data = json.loads(out)
    assert (status, err, data["ended_by"]) == (3, "", "nodes")
    assert data["agree"] and data["warm"]["pivots"] < data["cold"]["pivots"]
    status, out, _ = call("compare", "even.toml", "--node-limit", "15")
    assert status == 3 and "Both gave the same bound, or both found no plan" in out
    assert call("compare", "bakery.toml")[0] == 0
    assert call("compare", "infeasible.toml")[0] == 0


def test_compare_of_an_aim_without_a_limit(call):
    status, out, _ = call("compare", "unbounded.toml")
    assert status == 1 and "no bounds to compare" in out


def test_compare_says_so_if_they_differ(call, monkeypatch):
    node = compare_module.NodeComparison(1, 1, 2, 3, 0.1, 0.2, 5.0, 6.0, False, "a <= 3")
    monkeypatch.setattr(
        compare_module, "compare", lambda standing, stop=None: compare_module.Comparison.of((node,))
    )
    status, out, _ = call("compare", "crates.toml")
    assert status == 1 and "They disagree at 1 node: 1." in out


# ------------------------------------------------------------------------------ tree


def test_tree(call):
    call("solve", "crates.toml", "--save", "s.json")
    before = set(Path().iterdir())
    status, out, err = call("tree", "s.json", "--to", "t.dot")
    assert (status, err) == (0, "") and "is in t.dot" in out
    assert Path("t.dot").read_text().startswith("digraph")
    status, out, _ = call("tree", "s.json", "--to", "t.json", "--json")
    data = json.loads(out)
    standing = load_standing("s.json")
    assert (data["written"], data["nodes"]) == ("t.json", len(standing.tree))
    assert data["solved"] == standing.search.nodes
    assert set(Path().iterdir()) - before == {Path("t.dot"), Path("t.json")}


def test_tree_refuses(failure, call):
    assert "not one; `intplan solve" in failure("tree", "bakery.toml", "--to", "t.dot")
    assert "no such file" in failure("tree", "absent.json", "--to", "t.dot")
    call("solve", "crates.toml", "--save", "s.json")
    assert "ends in .graphml, .dot or .json" in failure("tree", "s.json", "--to", "t.html")
    assert "read by this command" in failure("tree", "s.json", "--to", "s.json")
    assert "no folder" in failure("tree", "s.json", "--to", "absent/t.dot")
    assert "Missing option '--to'" in failure("tree", "s.json")


# ------------------------------------------------------------------------------ usage


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["slove", "bakery.toml"], "slove"),
        (["solve"], "SHEET"),
        (["solve", "bakery.toml", "more"], "extra argument (more). Try `intplan solve --help`."),
        (["solve", "bakery.toml", "--jsn"], "--jsn"),
        (["solve", "bakery.toml", "--save"], "'--save' requires an argument. Try `intplan solve"),
        (["solve", "bakery.toml", "--time-limit", "0"], "no number of seconds above 0"),
        (["solve", "bakery.toml", "--time-limit", "nan"], "no number of seconds"),
        (["solve", "bakery.toml", "--time-limit", "soon"], "no number of seconds"),
        (["solve", "bakery.toml", "--gap", "-1"], "no percentage"),
        (["solve", "bakery.toml", "--gap", "inf"], "no percentage"),
        (["solve", "bakery.toml", "--gap", "1e999999999"], "no percentage"),
        (["solve", "bakery.toml", "--node-limit", "0"], "no whole number from 1"),
        (["solve", "bakery.toml", "--node-limit", "2.5"], "no whole number from 1"),
        (["check", "bakery.toml"], "PLAN.csv"),
        (["sol\x1bve"], r"sol\x1bve"),
    ],
)
def test_usage_errors_are_one_line(arguments, message, failure):
    assert message in failure(*arguments)


def test_help_and_version(call):
    status, out, err = call("--help")
    assert (status, err) == (0, "")
    for command in ("solve", "check", "compare", "tree"):
        assert command in out
        status, text, _ = call(command, "--help")
        assert status == 0 and "--json" in text
    assert call("--version")[1].startswith("intplan ")
    status, out, err = call()
    assert (status, out) == (2, "") and "Usage" in err


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("[activities\n", "line 1"),
        ("[activities]\nloaf = { mots = 3 }\n", "most"),
        ("", "empty"),
        ('[activities]\na = {}\n[rules]\nr = "a*a <= 3"\n', "r"),
    ],
)
def test_bad_sheets_are_one_line(content, message, failure):
    Path("bad.toml").write_text(content)
    for command in (["solve", "bad.toml"], ["compare", "bad.toml"], ["check", "bad.toml", "x.csv"]):
        line = failure(*command)
        assert line.startswith("intplan: bad.toml") and message in line


# ------------------------------------------------------------------------------ accidents


def test_memory_that_runs_out(call, monkeypatch):
    def hungry(*_):
        raise MemoryError

    monkeypatch.setattr(Sheet, "read", hungry)
    status, out, err = call("solve", "bakery.toml")
    assert (status, out) == (3, "")
    assert err == "intplan: memory ran out before there was an answer\n"


def test_an_interrupt_while_reading(call, monkeypatch):
    def interrupted(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr(Sheet, "read", interrupted)
    status, out, err = call("solve", "bakery.toml")
    assert (status, out) == (3, "")
    assert err == "intplan: interrupted before there was an answer\n"
    status, out, err = call("solve", "bakery.toml", "--json")
    assert (status, err) == (3, "") and "interrupted" in json.loads(out)["error"]["message"]


def test_faults_of_the_program_are_not_blamed_on_the_input(call, monkeypatch):
    def faulty(*_):
        raise ZeroDivisionError("here")

    monkeypatch.setattr(Sheet, "read", faulty)
    status, out, err = call("solve", "bakery.toml")
    assert (status, out) == (2, "")
    last = err.splitlines()[-1]
    assert "a fault in intplan itself, not in your input: ZeroDivisionError: here" in last


def test_an_answer_that_cannot_be_written(monkeypatch):
    class Full(io.StringIO):
        def write(self, text):
            raise OSError(errno.ENOSPC, "No space left on device")

    console = Console(as_json=False)
    monkeypatch.setattr(sys, "stdout", Full())
    with pytest.raises(OutputError, match="No space left"):
        console.answer("text", {})
