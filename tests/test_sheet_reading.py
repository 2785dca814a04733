"""Reading a sheet from TOML: what it means, and one clear line for what it cannot mean."""

from __future__ import annotations

import subprocess
import sys
from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intplan.errors import SheetError
from intplan.sheet import Activity, Aim, Rule, Sheet
from tests.bakery import BAKERY

TWO = "[activities]\nloaf = { most = 9 }\nroll = {}\n"


def error(text):
    """Return the error of a sheet, which must be one line that starts with the sheet's name."""
    with pytest.raises(SheetError) as caught:
        Sheet.parse(text, "week.toml")
    line = str(caught.value)
    assert "\n" not in line
    assert line.startswith("week.toml")
    return line


def test_the_bakery():
    sheet = Sheet.parse(BAKERY)
    assert (sheet.title, sheet.measure, sheet.warnings) == ("Bakery, week 14", "EUR", ())
    assert sheet.aim == Aim(
        "maximize", ((0, Fraction(21, 5)), (1, Fraction(11, 4)), (2, -18)), 0
    )
    assert sheet.activities == (
        Activity("loaf", 0, 900),
        Activity("roll_tray", 20, 240, unit="trays"),
        Activity("overtime", 0, 12, whole=False, unit="h"),
    )
    assert sheet.rules[0] == Rule(
        "oven",
        ((0, Fraction(1, 50)), (1, Fraction(1, 20)), (2, -1)),
        None,
        16,
        text="0.02*loaf + 0.05*roll_tray <= 16 + overtime",
    )
    assert sheet.rules[2].note == "contract with the school"
    assert sheet.activity_index == {"loaf": 0, "roll_tray": 1, "overtime": 2}
    assert sheet.rule_index == {"oven": 0, "mixer": 1, "shelf": 2}
    assert sheet.show_rule(sheet.rules[0]) == "0.02*loaf + 0.05*roll_tray - overtime <= 16"
    assert sheet.show_rule(sheet.rules[1]) == "6 <= 0.01*loaf + 0.02*roll_tray <= 9"
    assert sheet.show_aim() == "4.2*loaf + 2.75*roll_tray - 18*overtime"
    assert repr(sheet) == "<Sheet 'Bakery, week 14', 3 activities, 3 rules>"


def test_a_file_with_a_byte_order_mark_and_windows_lines(tmp_path):
    path = tmp_path / "week.toml"
    path.write_bytes(b"\xef\xbb\xbf" + BAKERY.replace("\n", "\r\n").encode())
    assert Sheet.read(path) == Sheet.parse(BAKERY)
    assert Sheet.read(str(path)) == Sheet.parse(BAKERY)


def test_bounds_in_every_spelling():
    sheet = Sheet.parse(
        """
        [activities]
        a = {}
        b = { least = -inf, most = inf }
        c = { least = -3, most = 3.5 }
        d = { least = "1/3", most = "7/3", whole = false }
        e = { most = 1_000 }
        f = { most = 0.1 }
        g = { most = 1_0.2_5 }
        h = { most = 0x10 }
        [activities.i]
        most = 7
        """
    )
    bounds = [(a.least, a.most) for a in sheet.activities]
    assert bounds == [
        (0, None),
        (None, None),
        (-3, Fraction(7, 2)),
        (Fraction(1, 3), Fraction(7, 3)),
        (0, 1000),
        (0, Fraction(1, 10)),
        (0, Fraction(41, 4)),
        (0, 16),
        (0, 7),
    ]


def test_names_are_compared_in_normal_form():
    sheet = Sheet.parse(
        '[activities]\n"bo\u0308ller" = {}\n"\u0939\u093f[\u0968]" = {}\n[rules]\n'
        '"s\u00e4ll" = "b\u00f6ller + \u0939\u093f[\u0968] <= 3"'
    )
    assert sheet.activities[0].name == "b\u00f6ller"
    assert sheet.rules[0].terms == ((0, 1), (1, 1))


def test_without_an_aim_and_without_rules():
    sheet = Sheet.parse("[activities]\nloaf = {}")
    assert sheet.aim == Aim(None, (), 0)
    assert sheet.rules == ()


def test_a_soft_rule():
    sheet = Sheet.parse(
        TWO + '[rules]\noven = { rule = "loaf <= 3", give = 0.5, give_most = 4, note = "n" }'
    )
    rule = sheet.rules[0]
    assert (rule.give, rule.give_most, rule.note) == (Fraction(1, 2), 4, "n")


def test_what_is_odd_becomes_a_warning():
    sheet = Sheet.parse(TWO + '[aim]\nminimize = "3"\n[rules]\neasy = "3 <= 5"')
    assert sheet.warnings == (
        "[aim]: no activity counts in the aim, so every plan is as good",
        "[rules] easy: holds for every plan, whatever the activities",
    )
    assert sheet.aim.constant == 3
    assert sheet.rules[0].terms == ()


@pytest.mark.parametrize(
    "text, line",
    [
        # not TOML
        ("not toml at all", "week.toml, line 1: column 5: not TOML: "),
        ("\x00\x01", "week.toml, line 1: column 1: not TOML: "),
        (TWO + '[rules]\na = "loaf <= 3', "week.toml, line 5: "),
        (TWO + '[rules]\na = "loaf <= 3\nb = 1', "week.toml, line 5: a quote is not closed"),
        ("[activities]\nloaf = { most = " + "[" * 9000, "week.toml: tables or arrays are nested"),
        ("[activities]\nloaf = " + "{a = " * 9000, "week.toml: tables or arrays are nested"),
        # names that want quotes
        ("[activities]\nloaf[mon] = {}",
         'week.toml, line 2: a name with brackets wants quotes: "loaf[mon]" = ...'),
        ("[activities.loaf[mon]]\nmost = 3",
         'week.toml, line 1: a name with brackets wants quotes: [activities."loaf[mon]"]'),
        ("[activities]\nöl = {}",
         'week.toml, line 2: a name with letters beyond a to z wants quotes: "öl" = ...'),
        (TWO + "[rules]\noven = 2*loaf <= 3",
         'week.toml, line 5: algebra wants quotes: oven = "2*loaf <= 3"'),
        (TWO + "[rules]\noven = loaf <= 3",
         'week.toml, line 5: algebra wants quotes: oven = "loaf <= 3"'),
        # unknown keys
        ('tittle = "x"\n' + TWO, 'week.toml: unknown key "tittle"; did you mean "title"?'),
        ('kind = "production"\n' + TWO,
         'week.toml: unknown key "kind"; known: title, measure, aim, activities, rules'),
        ("[activites]\nloaf = {}", 'week.toml: unknown key "activites"; did you mean "activities"'),
        ("[activities]\nloaf = { mst = 1 }",
         'week.toml, [activities] loaf: unknown key "mst"; did you mean "most"?'),
        (TWO + '[rules]\nr = { rule = "loaf <= 1", gve = 1 }',
         'week.toml, [rules] r: unknown key "gve"; did you mean "give"?'),
        (TWO + '[aim]\nmaximise = "loaf"',
         'week.toml, [aim]: unknown key "maximise"; did you mean "maximize"?'),
        ('"\x1b[31m" = 1', r'week.toml, line 1'),
        # names
        ("[activities]\nloaf = {}\nloaf = {}",
         'week.toml, line 3: the name "loaf" is declared twice'),
        (TWO + '[rules]\n"r[1]" = "loaf <= 1"\n"r[1]" = "loaf <= 1"',
         'week.toml, line 6: the name "r[1]" is declared twice'),
        (TWO + TWO, 'week.toml, line 4: the table "[activities]" is declared twice'),
        ('[activities]\n"b\u00f6l" = {}\n"bo\u0308l" = {}',
         'week.toml, [activities] b\u00f6l: the name "b\u00f6l" is declared twice'),
        ('[activities]\n"a b" = {}', "week.toml, [activities] a b: a name holds no spaces"),
        ('[activities]\n"2a" = {}', "week.toml, [activities] 2a: this is not a name"),
        ('[activities]\n"a[]" = {}', "week.toml, [activities] a[]: this is not a name"),
        ('[activities]\n"a[b]c" = {}', "week.toml, [activities] a[b]c: this is not a name"),
        ('[activities]\n"" = {}', "week.toml, [activities] : an empty name"),
        (f'[activities]\n"{"a" * 999}" = {{}}', "week.toml, [activities] aaaaaaaaaa"),
        ('[activities]\n"a\\u001b[2J" = {}', r"week.toml, [activities] a\x1b[2J: this is not a"),
        (TWO + '[rules]\n"loaf most" = "loaf <= 3"',
         "week.toml, [rules] loaf most: a name holds no spaces"),
        (TWO + '[rules]\noven = "lof <= 3"',
         'week.toml, [rules] oven: column 1: unknown name "lof"; did you mean "loaf"?'),
        (TWO + '[aim]\nminimize = "rol"',
         'week.toml, [aim] minimize: column 1: unknown name "rol"; did you mean "roll"?'),
        # kinds of values
        ("title = 3\n" + TWO, "week.toml: title must be text in quotes, not a number"),
        ("measure = 1.5\n" + TWO, "week.toml: measure must be text in quotes, not a number"),
        ("activities = 3", "week.toml: [activities] must be a table, not a number"),
        ("[[activities]]\nloaf = {}", "week.toml: [activities] must be a table, not an array"),
        ("[activities]\nloaf = 3", "week.toml, [activities] loaf: an activity is a table"),
        ("[activities]\nloaf = { whole = 0 }",
         "week.toml, [activities] loaf: whole must be true or false, not a number"),
        ("[activities]\nloaf = { unit = 3 }",
         "week.toml, [activities] loaf: unit must be text in quotes, not a number"),
        ("[activities]\nloaf = { most = true }",
         "week.toml, [activities] loaf: most must be a number, not true"),
        ("[activities]\nloaf = { most = 2031-04-01 }",
         "week.toml, [activities] loaf: most must be a number, not a date or time"),
        ("[activities]\nloaf = { most = 'x' }",
         'week.toml, [activities] loaf: most = "x": this is not a number'),
        ("[activities]\nloaf = { most = '1/0' }",
         'week.toml, [activities] loaf: most = "1/0": a division by zero'),
        (TWO + "[rules]\nr = 3", "week.toml, [rules] r: a rule is algebra in quotes or a table"),
        (TWO + "[rules]\nr = 3.5", "week.toml, [rules] r: a rule is algebra in quotes or a table"),
        (TWO + "[rules]\nr = { give = 3 }", "week.toml, [rules] r: the key rule is missing"),
        (TWO + "[rules]\nr = { rule = 1.5 }", "week.toml, [rules] r: rule must be algebra in"),
        (TWO + "aim = 3", 'week.toml, [activities] aim: an activity is a table'),
        ("aim = 3\n" + TWO, "week.toml: [aim] must be a table, not a number"),
        (TWO + "[aim]\nmaximize = 3", "week.toml, [aim]: maximize must be algebra in quotes"),
        # numbers
        ("[activities]\nloaf = { most = nan }",
         "week.toml, [activities] loaf: most is nan, which is not a number"),
        ("[activities]\nloaf = { least = inf }",
         "week.toml, [activities] loaf: least cannot be inf"),
        ("[activities]\nloaf = { most = -inf }",
         "week.toml, [activities] loaf: most cannot be -inf"),
        ("[activities]\nloaf = { most = 1e309 }",
         "week.toml, [activities] loaf: most = 1e309: the number is larger than doubles hold"),
        ("[activities]\nloaf = { most = 1e999999999 }",
         "week.toml, [activities] loaf: most = 1e999999999: the number is larger than doubles"),
        ("[activities]\nloaf = { most = 1e-999999999 }",
         "week.toml, [activities] loaf: most = 1e-999999999: the number is closer to zero"),
        ("[activities]\nloaf = { most = " + "9" * 5000 + " }",
         "week.toml, line 2: an integer of thousands of digits; the limit is 400"),
        ("[activities]\nloaf = { most = " + "9" * 400 + " }",
         "week.toml, [activities] loaf: most: the number is larger than doubles"),
        ("[activities]\nloaf = { most = 0x" + "f" * 40_000 + " }",
         "week.toml, [activities] loaf: most: the number is larger than doubles"),
        ("[activities]\nloaf = { most = 0." + "3" * 5000 + " }",
         "week.toml, [activities] loaf: most = 0.3333"),
        # contradictions
        ("[activities]\nloaf = { least = 5, most = 3 }",
         "week.toml, [activities] loaf: least = 5 is above most = 3"),
        ("[activities]\nloaf = { most = -3 }",
         "week.toml, [activities] loaf: most = -3 is below 0, the least unless"),
        ("[activities]\nloaf = { least = 0.2, most = 0.8 }",
         "week.toml, [activities] loaf: no whole number lies between least = 0.2 and most = 0.8"),
        (TWO + '[rules]\nr = "3 >= 5"', "week.toml, [rules] r: this rule is false whatever the"),
        (TWO + '[rules]\nr = { rule = "loaf <= loaf - 1", give = 3 }',
         "week.toml, [rules] r: this rule is false whatever the"),
        (TWO + '[aim]\nmaximize = "loaf"\nminimize = "roll"',
         "week.toml, [aim]: an aim says either maximize or minimize, not both"),
        (TWO + "[aim]", "week.toml, [aim]: an aim says either maximize or minimize"),
        # soft rules
        (TWO + '[rules]\nr = { rule = "loaf <= 1", give = 0 }',
         "week.toml, [rules] r: give = 0, but a price must be above 0"),
        (TWO + '[rules]\nr = { rule = "loaf <= 1", give = -1.5 }',
         "week.toml, [rules] r: give = -1.5, but a price must be above 0"),
        (TWO + '[rules]\nr = { rule = "loaf <= 1", give = inf }',
         "week.toml, [rules] r: give must be finite; leave it out for a rule that does not bend"),
        (TWO + '[rules]\nr = { rule = "loaf <= 1", give = 1, give_most = -1 }',
         "week.toml, [rules] r: give_most = -1, but it cannot be below 0"),
        (TWO + '[rules]\nr = { rule = "loaf <= 1", give_most = 1 }',
         "week.toml, [rules] r: give_most needs a price"),
        # nothing to plan
        ("", "week.toml: an empty sheet: [activities] declares none"),
        ("[activities]", "week.toml: an empty sheet: [activities] declares none"),
        (TWO.replace("activities", "rules"), "week.toml: an empty sheet"),
    ],
)  # fmt: skip
def test_bad_sheets_get_one_line(text, line):
    assert error(text).startswith(line)


@settings(max_examples=300, derandomize=True, deadline=None)
@given(
    st.integers(0, len(BAKERY)),
    st.integers(0, 12),
    st.text(alphabet='ab[]{}"=.,0123456789e-+*/()<>\n #\x00\u00f6infa', max_size=6),
)
def test_a_damaged_sheet_is_a_sheet_or_one_line(at, cut, put):
    try:
        Sheet.parse(BAKERY[:at] + put + BAKERY[at + cut :], "week.toml")
    except SheetError as problem:
        assert "\n" not in str(problem)
        assert str(problem).startswith("week.toml")


def test_a_nested_rule_is_refused_in_one_line():
    rule = "(" * 4000 + "loaf" + ")" * 4000 + " <= 3"
    assert "[rules] deep: column 65: parentheses nested" in error(f'{TWO}[rules]\ndeep = "{rule}"')


def test_a_size_beyond_memory_is_refused_before_it_is_built():
    activities = "\n".join(f"a{j} = {{}}" for j in range(9000))
    rules = "\n".join(f'r{i} = "a1 <= 3"' for i in range(3000))
    line = error(f"[activities]\n{activities}\n[rules]\n{rules}")
    assert line == (
        "week.toml: 3,000 rules by 9,000 activities make a table of 27,009,000 numbers (216 MB);"
        " the limit is 25,000,000 (200 MB)"
    )


def test_files_that_are_no_sheets(tmp_path):
    with pytest.raises(SheetError, match=r"missing\.toml: no such file"):
        Sheet.read(tmp_path / "missing.toml")
    with pytest.raises(SheetError, match="folder, not a file"):
        Sheet.read(tmp_path)
    binary = tmp_path / "binary.toml"
    binary.write_bytes(b'title = "x"\n\xff\xfe')
    with pytest.raises(SheetError, match=r"binary\.toml, line 2: the file is not text in UTF-8"):
        Sheet.read(binary)


def test_a_file_beyond_the_limit(tmp_path, monkeypatch):
    monkeypatch.setattr("intplan.sheet.reading.MOST_BYTES", 20)
    path = tmp_path / "long.toml"
    path.write_text(BAKERY)
    with pytest.raises(SheetError, match="longer than the limit of 20 bytes"):
        Sheet.read(path)
    assert path.read_text() == BAKERY


def test_reading_needs_no_numerical_library(tmp_path):
    path = tmp_path / "week.toml"
    path.write_text(BAKERY)
    code = (
        "import sys; from intplan.sheet import Sheet;"
        f"Sheet.read({str(path)!r}).check([0, 20, 0]);"
        "print(sorted({'numpy', 'scipy', 'networkx'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"


def test_one_more_rule_in_the_names_of_a_sheet():
    sheet = Sheet.parse(BAKERY)
    rule = sheet.rule_from_text("flour", "loaf + roll_tray <= 600", give=3)
    assert rule == Rule("flour", ((0, 1), (1, 1)), None, 600, give=3, text=rule.text)
    assert len(sheet.rules) == 3
    with pytest.raises(SheetError, match="rule flour: column 1: unknown name"):
        sheet.rule_from_text("flour", "lof <= 3")
    with pytest.raises(SheetError, match="rule a b: a name holds no spaces"):
        sheet.rule_from_text("a b", "loaf <= 3")
    with pytest.raises(SheetError, match="rule flour: this rule is false"):
        sheet.rule_from_text("flour", "1 <= 0")


def test_a_standing_plan_is_told_from_a_sheet():
    with pytest.raises(SheetError) as caught:
        Sheet.parse('{"kind": "intplan standing plan", "format": 2}', "week14.json")
    assert caught.value.where == "week14.json"
    assert "this is a standing plan, not a sheet" in caught.value.message
