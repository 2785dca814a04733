"""The examples of docs/sheet.md do what the page says."""

from __future__ import annotations

import re
from fractions import Fraction

import pytest

from intplan.errors import SheetError
from intplan.sheet import Sheet
from intplan.sheet.algebra import MOST_NESTED
from intplan.sheet.model import MOST_CELLS
from intplan.sheet.names import LONGEST_NAME
from intplan.sheet.numbers import MOST_BITS, MOST_DIGITS
from intplan.sheet.reading import ACTIVITY_KEYS, MOST_BYTES, RULE_KEYS, SHEET_KEYS
from tests import pages

PAGE = pages.page("docs/sheet.md")


def blocks(language):
    return pages.blocks(PAGE, language)


@pytest.mark.parametrize("text", blocks("toml"))
def test_every_sheet_on_the_page_is_one(text):
    sheet = Sheet.parse(text)
    assert sheet.warnings == ()
    assert sheet.problem().matrix.shape[0] == len(sheet.rules) > 0


def test_there_are_sheets_on_the_page():
    assert len(blocks("toml")) == 4


def test_every_key_and_limit_is_on_the_page():
    for key in (*SHEET_KEYS, *ACTIVITY_KEYS, *RULE_KEYS):
        assert re.search(rf"`\[?{key}\]?`", PAGE), key
    limits = (f"{MOST_CELLS:,}", f"{MOST_BYTES // 10**6} MB", f"{MOST_DIGITS}", f"{MOST_BITS} bits",
              f"| {MOST_NESTED} |", f"at most {LONGEST_NAME} characters")  # fmt: skip
    for limit in limits:
        assert limit in PAGE, limit


SLIPS = [
    '[activities]\nloaf = {}\n[rules]\noven = "0.02*lof <= 16"',
    "[activities]\nloaf = { mots = 3 }",
    '[aim]\nmaximize = "loaf[mon]"\n\n\n\n[activities]\nloaf[mon] = {}',
    '[activities]\nloaf = {}\n[rules]\nmixer = "6 <= 1*loaf < 9"',
    "[activities]\nloaf = { least = 5, most = 3 }",
]


@pytest.mark.parametrize(
    ("slip", "line"), list(zip(SLIPS, blocks("text")[0].splitlines(), strict=True))
)
def test_every_error_on_the_page_is_real(slip, line):
    with pytest.raises(SheetError) as caught:
        Sheet.parse(slip, "week.toml")
    assert str(caught.value) == line


def test_the_python_on_the_page_runs(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "week.toml").write_text(blocks("toml")[0], encoding="utf-8")
    scope = {"text": blocks("toml")[0]}
    exec(blocks("python")[0], scope)
    assert scope["result"].good
    assert scope["result"].value == Fraction("3627.4")
    assert len(scope["sheet"].rules) == 2
