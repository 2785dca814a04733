"""The session of docs/replan.md is what the commands print, and the page tells all there is."""

from __future__ import annotations

import contextlib
import doctest
import io
import json
import re
import shlex
import shutil
from collections.abc import Iterator
from typing import NamedTuple

import click
import pytest

import intplan
import intplan.planning
from intplan.cli import app
from intplan.planning import Worth
from tests.pages import ROOT, blocks, called, page, table

PAGE = page("docs/replan.md")

# What differs from run to run, or with the way the search takes.
COUNT, SECONDS = r"[\d,]+", r"(?:under )?[\d,.]+ s"
VARYING = [
    rf"{COUNT} nodes?, with {COUNT} pivots? and {COUNT} cuts?, in {SECONDS}",
    r"[\d,.]+(?= per unit, of the relaxation)",
    r"\d+(?= other rules and bounds cost nothing)",
    r"(?<=^Not weighed: )\d+ bounds?",
]


class Shown(NamedTuple):
    """A command line of the session and the output that the page shows for it."""

    command: str
    output: str


def session() -> list[Shown]:
    """Return the commands of the session in order."""
    return [Shown(*block.removeprefix("$ ").split("\n", 1)) for block in blocks(PAGE, "console")]


def settled(output: str) -> str:
    """Return an output with what varies taken out."""
    for pattern in VARYING:
        output = re.sub(pattern, "<varies>", output, flags=re.MULTILINE)
    return output


@pytest.fixture(scope="module")
def printed(tmp_path_factory: pytest.TempPathFactory) -> Iterator[dict[str, str]]:
    """What the commands of the session print, run in order; the files they leave lie around."""
    folder = tmp_path_factory.mktemp("session")
    shutil.copytree(ROOT / "instances" / "demo", folder / "instances" / "demo")
    with contextlib.chdir(folder):
        yield {shown.command: called(shown.command)[1] for shown in session()}


@pytest.mark.parametrize("shown", session(), ids=lambda shown: shown.command)
def test_the_session_is_what_the_commands_print(shown: Shown, printed: dict[str, str]) -> None:
    expected, found = settled(shown.output), settled(printed[shown.command])
    assert doctest.OutputChecker().check_output(expected, found, doctest.ELLIPSIS) or (
        expected == found  # shows where they differ
    )


def test_the_session_leaves_out_little() -> None:
    for shown in session():
        lines = shown.output.splitlines()
        assert lines[0] != "..." and lines.count("...") <= 1, shown.command


def test_the_session_shows_the_three_commands() -> None:
    commands = [shlex.split(shown.command)[1] for shown in session()]
    assert {"replan", "clash", "worth"} <= set(commands)


def test_the_python_on_the_page_gives_what_it_shows(printed: dict[str, str]) -> None:
    (example,) = blocks(PAGE, "pycon")
    test = doctest.DocTestParser().get_doctest(example, {}, "docs/replan.md", None, None)
    report = io.StringIO()
    assert len(test.examples) >= 8
    assert doctest.DocTestRunner().run(test, out=report.write).failed == 0, report.getvalue()


def test_every_option_that_replan_alone_has_is_told() -> None:
    shared = {option.name for option in app.group.commands["compare"].params}
    own = [
        f"`{option.opts[0]} {option.metavar}`"
        for option in app.group.commands["replan"].params
        if isinstance(option, click.Option) and option.name not in shared
    ]
    assert sorted(row[0] for row in table(PAGE, "option")) == sorted(own)


def keys_of(*commands: str) -> set[str]:
    """Return the keys of the JSON that commands give, but for those of the exact numbers."""
    keys: set[str] = set()
    for command in commands:
        keys |= set(json.loads(called(f"intplan {command} --json --quiet")[1]))
    return {key for key in keys if not key.startswith("exact_")}


def told_keys(heading_row: int) -> set[str]:
    """Return the keys of the first or second table of keys."""
    tables = PAGE.split("| key |")[1:]
    (start,) = [f"| key |{text}" for text in tables[heading_row : heading_row + 1]]
    return {key for row in table(start, "key") for key in re.findall(r"`(\w+)`", row[0])}


def test_every_key_of_the_json_is_told(printed: dict[str, str]) -> None:
    of_solve = keys_of("solve instances/demo/bakery.toml")
    found = keys_of(
        'replan week14.json --waive "rusk least" --add "c: pretzel >= 12" --stay-close',
        'replan week14.json --add "c: pretzel >= 51"',
    )
    assert told_keys(0) == found - of_solve
    of_clash = keys_of("clash torn.json")
    assert of_clash - {"title", "outcome", "plan", "search"} <= told_keys(0)
    assert told_keys(1) == set(Worth._fields) - {"name"}
    assert {"value", "worth", "others", "floors"} <= keys_of("worth week14.json")


@pytest.mark.parametrize(
    ("command", "status"),
    [
        ('replan week14.json --add "c: pretzel >= 12"', 0),
        ('replan week14.json --add "c: pretzel >= 51"', 1),
        ("replan week14.json", 2),
        ("clash instances/demo/bakery.toml", 0),
        ("clash torn.json", 1),
        ("worth week14.json --node-limit 1", 3),
        ("worth torn.json", 2),
    ],
)
def test_the_exit_statuses_are_as_told(command: str, status: int, printed: dict) -> None:
    assert called(f"intplan {command}")[0] == status


def test_what_the_page_names_can_be_imported() -> None:
    for name in intplan.__all__:
        assert getattr(intplan, name) is not None
    for name in intplan.planning.__all__:
        assert getattr(intplan.planning, name) is not None
    with pytest.raises(AttributeError):
        intplan.planning.absent  # noqa: B018
