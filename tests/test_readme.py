"""README.md does what it says, and the pages beside it and .ci/run speak of what is there."""

from __future__ import annotations

import ast
import contextlib
import doctest
import io
import os
import re
import shlex
import shutil
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from fractions import Fraction
from pathlib import Path
from typing import NamedTuple

import click
import pytest

import intplan
from intplan.cli import app, commands, interrupts
from tests import bench
from tests.families import index_of
from tests.pages import ROOT, blocks, called, page, prose, table

README = page("README.md")
DEVELOPERS = page("DEVELOPERS.md")
PAGES = ("README.md", "DEVELOPERS.md", *sorted(f"docs/{p.name}" for p in ROOT.glob("docs/*.md")))
INSTALL_AND_SOLVE, INSTALL_AND_TEST = (block.strip() for block in blocks(README, "sh"))
COMMANDS = app.group.commands

# What differs from run to run; the words around it, and that it is there, are still compared.
COUNT, SECONDS = r"[\d,]+", r"(?:under )?[\d,.]+ s"
VARYING = [
    rf"{COUNT} nodes?, with {COUNT} pivots? and {COUNT} cuts?, in {SECONDS}",
    rf"(?<=^The search tree, ){COUNT} nodes?",
    rf"(?<= The search solved ){COUNT}(?= of them)",
    rf"^{COUNT} nodes?(?= solved twice)",
    r"^ +(?=pivots +time$)",
    rf"(?<=^  from the parent's basis) +{COUNT} +{SECONDS}$",
    rf"(?<=^  from nothing) +{COUNT} +{SECONDS}$",
    r"(?<=^  ratio) +\d+\.\d{3} +\d+\.\d{3}$",
]


class Shown(NamedTuple):
    """A command line of the tour and the output that the page shows for it."""

    command: str
    output: str


def tour() -> list[Shown]:
    """Return the commands of the tour in order."""
    return [
        Shown(*part.split("\n", 1))
        for block in blocks(README, "console")
        for part in re.split(r"^\$ ", block, flags=re.MULTILINE)[1:]
    ]


def settled(output: str) -> str:
    """Return an output with what varies taken out."""
    for pattern in VARYING:
        output = re.sub(pattern, "<varies>", output, flags=re.MULTILINE)
    return output


@pytest.fixture(scope="module")
def checkout(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """The folder in which the commands run: it has the sheets and the hand-made plan."""
    folder = tmp_path_factory.mktemp("checkout")
    shutil.copytree(ROOT / "instances", folder / "instances")
    (plan,) = blocks(README, "csv")
    (folder / "hand.csv").write_text(plan)
    with contextlib.chdir(folder):
        yield folder


@pytest.fixture(scope="module")
def printed(checkout: Path) -> dict[str, str]:
    """What the commands of the tour print, run in order."""
    return {shown.command: called(shown.command)[1] for shown in tour()}


# ------------------------------------------------------------------------------ the tour


@pytest.mark.parametrize("shown", tour(), ids=lambda shown: shown.command)
def test_the_tour_is_what_the_commands_print(shown: Shown, printed: dict[str, str]) -> None:
    expected, found = settled(shown.output), settled(printed[shown.command])
    assert doctest.OutputChecker().check_output(expected, found, doctest.ELLIPSIS) or (
        expected == found  # shows where they differ
    )


def test_the_tour_shows_every_command() -> None:
    assert {shlex.split(shown.command)[1] for shown in tour()} == set(COMMANDS)
    assert "`hand.csv`" in README


def test_what_the_tour_leaves_out_is_less_than_it_shows() -> None:
    for shown in tour():
        lines = shown.output.splitlines()
        assert lines[0] != "...", shown.command
        assert lines.count("...") <= 1, shown.command


def test_warm_solves_take_less_than_cold_ones_as_the_tour_has_it(printed: dict[str, str]) -> None:
    (command,) = (shown.command for shown in tour() if " compare " in shown.command)
    ratios = re.search(r"^  ratio +(\d\.\d+) +(\d\.\d+)$", printed[command], re.MULTILINE)
    assert ratios and float(ratios[1]) < 1 and float(ratios[2]) < 1


def test_the_python_on_the_page_gives_what_it_shows(checkout: Path) -> None:
    (example,) = blocks(README, "pycon")
    test = doctest.DocTestParser().get_doctest(example, {}, "README.md", None, None)
    report = io.StringIO()
    assert len(test.examples) >= 8
    assert doctest.DocTestRunner().run(test, out=report.write).failed == 0, report.getvalue()


def test_the_sheet_on_the_page_is_one() -> None:
    (text,) = blocks(README, "toml")
    sheet = intplan.Sheet.parse(text)
    assert sheet.warnings == ()
    assert intplan.solve(sheet).outcome == "optimal"


# ------------------------------------------------------------------------------ its claims


def test_every_option_is_in_the_table_and_no_other() -> None:
    real: dict[str, set[str]] = {}
    for name, command in COMMANDS.items():
        for option in command.params:
            if isinstance(option, click.Option):
                metavar = "" if option.is_flag else f" {option.metavar}"
                real.setdefault(f"`{option.opts[0]}{metavar}`", set()).add(name)
    shown = {
        option: set(COMMANDS) if names == "all" else set(names.split(", "))
        for option, names, _ in table(README, "option")
    }
    assert shown == real


@pytest.mark.parametrize(
    ("command", "status"),
    [
        ("solve instances/demo/bakery.toml", commands.YES),
        ("solve instances/demo/orders.toml --gap 50", commands.YES),
        ("compare instances/demo/bakery.toml", commands.YES),
        ("solve instances/published/parity.toml", commands.NO),
        ("check instances/demo/bakery.toml hand.csv", commands.NO),
        ("solve instances/demo/bakery.tml", app.BAD_INPUT),
        ("solve instances/demo/orders.toml --node-limit 1", app.UNFINISHED),
    ],
)
def test_the_exit_statuses_are_as_told(command: str, status: int, checkout: Path) -> None:
    assert called(f"intplan {command}")[0] == status


def test_the_exit_statuses_are_all_told() -> None:
    real = (commands.YES, commands.NO, app.BAD_INPUT, app.UNFINISHED, interrupts.ENDED_AT_ONCE)
    assert [int(row[0]) for row in table(README, "status")] == list(real)


def test_decimals_are_exact_as_told() -> None:
    claim = re.search(r"`([^`]+)` holds at a = b = 1", README)
    assert claim
    sheet = intplan.Sheet.parse(f'[activities]\na = {{}}\nb = {{}}\n[rules]\nr = "{claim[1]}"\n')
    assert sheet.check([1, 1]).good
    assert sheet.check([1, 1]).rules[0].value == Fraction(3, 10)


def test_the_demo_sheets_are_as_many_as_told() -> None:
    number = {4: "four", 5: "five", 6: "six", 7: "seven"}[len(index_of("demo"))]
    assert re.search(rf"has\s+{number}\s+sheets", README)


# ------------------------------------------------------------------------------ the two commands


def test_the_first_command_installs_and_solves_the_first_sheet_of_the_tour() -> None:
    project = tomllib.loads(page("pyproject.toml"))["project"]
    *installing, solving = INSTALL_AND_SOLVE.split(" && ")
    assert installing == ["python3 -m venv .venv", ".venv/bin/pip install ."]
    assert solving == f".venv/bin/{tour()[0].command}"
    assert "intplan" in project["scripts"]
    version = project["requires-python"].removeprefix(">=")
    assert f"Python {version} or later" in README


@pytest.mark.skipif(shutil.which("bash") is None, reason="there is no bash")
def test_ci_runs_the_second_command_word_for_word(tmp_path: Path) -> None:
    """A stand-in for the interpreter notes what it is asked for, and fails as a test run does."""
    log, places, programs, scratch = (tmp_path / n for n in ("log", "places", "bin", "scratch"))
    programs.mkdir()
    scratch.mkdir()
    (programs / "python3").write_text(
        "#!/bin/sh\n"
        f'echo "${{0##*/}} $*" >> "{log}" && pwd -P >> "{places}"\n'
        'case "$*" in\n'
        '"-m venv .venv") mkdir -p .venv/bin\n'
        '  cp "$0" .venv/bin/pip && cp "$0" .venv/bin/python;;\n'
        '"-m pytest") test -f tests/test_readme.py && exit 7;;\n'
        "esac\n"
    )
    (programs / "python3").chmod(0o755)
    search = f"{programs}{os.pathsep}{os.environ['PATH']}"
    done = subprocess.run(
        [ROOT / ".ci" / "run"], cwd=tmp_path, capture_output=True, text=True,
        env={**os.environ, "PATH": search, "TMPDIR": str(scratch)},
    )  # fmt: skip
    assert (done.returncode, done.stderr) == (7, "")
    assert done.stdout == f"{INSTALL_AND_TEST}\n"
    words = [shlex.split(part) for part in INSTALL_AND_TEST.split(" && ")]
    assert log.read_text().splitlines() == [" ".join([Path(w[0]).name, *w[1:]]) for w in words]
    (place,) = set(places.read_text().splitlines())
    assert Path(place).parent == scratch.resolve()
    assert list(scratch.iterdir()) == []


def test_the_second_command_installs_what_the_tests_need() -> None:
    extras = tomllib.loads(page("pyproject.toml"))["project"]["optional-dependencies"]
    asked = re.search(r"install -e '\.\[(\w+)\]'", INSTALL_AND_TEST)
    assert asked and any(need.startswith("pytest") for need in extras[asked[1]])


# ------------------------------------------------------------------------------ all pages


@pytest.mark.parametrize("name", PAGES)
def test_links_lead_somewhere(name: str) -> None:
    targets = re.findall(r"\]\(([^)\s]+)\)", prose(page(name)))
    local = [target for target in targets if not re.match(r"https?://", target)]
    missing = [t for t in local if not (ROOT / name).parent.joinpath(t.split("#")[0]).exists()]
    assert missing == []
    assert local or name.startswith("docs/")


@pytest.mark.parametrize("name", PAGES)
def test_files_that_are_named_exist(name: str) -> None:
    named = re.findall(r"`((?:intplan|tests|docs|instances|\.ci)/[\w./-]*)`", page(name))
    assert [path for path in named if not (ROOT / path).exists()] == []


def test_the_page_on_speed_takes_its_tables(tmp_path: Path, monkeypatch, capsys) -> None:
    copy = tmp_path / "speed.md"
    copy.write_text(page("docs/speed.md"), encoding="utf-8")
    asked = ["--quick", "--repeat", "1", "--family", "worked examples", "--each", "--write"]
    monkeypatch.setattr(sys, "argv", ["bench", *asked, str(copy)])
    assert bench.main() == 0
    before, after = (bench.split_at_markers(path) for path in (ROOT / "docs" / "speed.md", copy))
    assert before == after
    assert "| worked examples |" in copy.read_text(encoding="utf-8")
    for family in bench.FAMILIES:
        assert family in before[0], family


# ------------------------------------------------------------------------------ DEVELOPERS.md


def modules() -> list[Path]:
    """Return the modules of the package that hold code."""
    return sorted((ROOT / "intplan").rglob("*.py"))


def test_every_module_and_test_file_has_its_line() -> None:
    rows = table(DEVELOPERS, "module") + table(DEVELOPERS, "file")
    shown = sorted(row[0].strip("`") for row in rows)
    real = [path for path in modules() if path.parent.name != "intplan"]
    real = [path for path in real if path.name != "__init__.py"]
    real += ROOT.glob("tests/test_*.py")
    assert shown == sorted(path.relative_to(ROOT).as_posix() for path in real)


def imported(module: Path) -> Iterator[str]:
    """Yield the modules of the package that a module names in its imports."""
    for node in ast.walk(ast.parse(module.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert not node.level, f"{module}: a relative import"
            yield node.module or ""
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def test_arrows_only_point_down() -> None:
    order = [row[0].strip("`") for row in table(DEVELOPERS, "layer")]
    assert sorted(order) == sorted(p.parent.name for p in ROOT.glob("intplan/*/__init__.py"))
    for module in modules():
        layer = module.relative_to(ROOT / "intplan").parts[0]
        if layer not in order:
            continue
        higher = order[: order.index(layer)]
        for name in imported(module):
            parts = name.split(".")
            assert not (parts[0] == "intplan" and len(parts) > 1 and parts[1] in higher), (
                f"{module.relative_to(ROOT)} imports {name}"
            )


def test_the_package_never_imports_the_reference() -> None:
    for module in modules():
        assert not [n for n in imported(module) if n.startswith("scipy.optimize")], module
