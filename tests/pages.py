"""The pages of the project as text, and what the tests of their claims take from them."""

from __future__ import annotations

import contextlib
import io
import re
import shlex
from pathlib import Path

from intplan.cli.app import run

ROOT = Path(__file__).parent.parent


def page(name: str) -> str:
    """Return the text of a page, named from the top of the project."""
    return (ROOT / name).read_text(encoding="utf-8")


def blocks(text: str, language: str) -> list[str]:
    """Return the fenced blocks of one language, in order."""
    return re.findall(rf"^```{language}\n(.*?)^```$", text, re.DOTALL | re.MULTILINE)


def prose(text: str) -> str:
    """Return a page without its fenced blocks."""
    return re.sub(r"^```.*?^```$", "", text, flags=re.DOTALL | re.MULTILINE)


def table(text: str, heading: str) -> list[list[str]]:
    """Return the cells of the table whose first column has the given heading, row by row."""
    head = rf"^\| {re.escape(heading)} \|.*\n\|[-|: ]+\n"
    rows = re.search(rf"{head}((?:\|.*\n)+)", text, re.MULTILINE)
    assert rows, f"there is no table with the column {heading}"
    return [[cell.strip() for cell in row.strip("|").split("|")] for row in rows[1].splitlines()]


def called(command: str) -> tuple[int, str]:
    """Run a command line in this process; return its exit status and all that it prints."""
    name, *arguments = shlex.split(command)
    assert name == "intplan"
    with io.StringIO() as both:
        with contextlib.redirect_stdout(both), contextlib.redirect_stderr(both):
            status = run(arguments)
        return status, both.getvalue()
