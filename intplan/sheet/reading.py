"""Reading a sheet: TOML to activities, rules and an aim, with errors that name the place."""

from __future__ import annotations

import os
import re
import tomllib
from collections.abc import Iterator, Mapping
from fractions import Fraction
from typing import Any, NamedTuple

from intplan.errors import SheetError, excerpt, unknown
from intplan.files import read_file
from intplan.sheet.algebra import parse_aim, parse_rule
from intplan.sheet.model import Activity, Aim, Rule, Sense, Sheet, check_bounds, check_size
from intplan.sheet.names import name_problem, normal
from intplan.sheet.numbers import MOST_DIGITS, Number, NumberError, exact_number, fit, show

MOST_BYTES = 32_000_000
SHEET_KEYS = ("title", "measure", "aim", "activities", "rules")
AIM_KEYS = ("maximize", "minimize")
ACTIVITY_KEYS = ("least", "most", "whole", "unit")
STANDING = '{"kind": "intplan standing plan"'  # how a file of another kind begins
RULE_KEYS = ("rule", "note", "give", "give_most")

_BRACKETED = re.compile(r"""^[ \t]*(?P<name>[^\s"'\[\]=#.]+\[[^\[\]"'=#]*\])[ \t]*=""")
_HEADED = re.compile(r"""^[ \t]*\[(?P<table>\w+)\.(?P<name>[^\s"'\[\]=#.]+\[[^\[\]"'=#]*\])\]""")
_FOREIGN = re.compile(r"""^[ \t]*(?P<name>[^\s"'\[\]=#.]+)[ \t]*=""")
_BARE_ALGEBRA = re.compile(r"""^[ \t]*(?P<key>[^\s=#<>]+)[ \t]*=(?P<value>[^"'\[{#]*)""")
_KEY = re.compile(r"""^[ \t]*(?:"(?P<basic>[^"]*)"|'(?P<literal>[^']*)'|(?P<bare>[\w-]+))[ \t]*=""")
_LONG_INTEGER = re.compile(r"[0-9][0-9_]{999,}")
_TOML_PLACE = re.compile(
    r"(?P<what>.*) \(at (?:line (?P<line>\d+), column (?P<column>\d+)|end of document)\)", re.DOTALL
)


class DecimalText(str):
    """The text of a TOML float, kept as it was written so that it can be read exactly."""


def read_sheet(path: str | os.PathLike[str]) -> Sheet:
    """Do the work of `Sheet.read`."""
    where = os.fsdecode(path)
    data = read_file(path, MOST_BYTES, SheetError)
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as problem:
        line = data.count(b"\n", 0, problem.start) + 1
        raise SheetError("the file is not text in UTF-8", f"{where}, line {line}") from None
    return parse_sheet(text, where)


def parse_sheet(text: str, where: str) -> Sheet:
    """Do the work of `Sheet.parse`."""
    table = parse_toml(text, where)
    for key in table:
        if key not in SHEET_KEYS:
            raise SheetError(unknown("key", key, SHEET_KEYS), where)
    title = _text(table, "title", where)
    measure = _text(table, "measure", where)
    declared = _table(table, "activities", where)
    rules = _table(table, "rules", where)
    if not declared:
        raise SheetError("an empty sheet: [activities] declares none", where)
    check_size(len(rules), len(declared), where)
    activities = tuple(
        _activity(name, value, place)
        for name, value, place in _named(declared, f"{where}, [activities]")
    )
    index = {activity.name: j for j, activity in enumerate(activities)}
    warnings: list[str] = []
    aim = _aim(table, index, where, warnings)
    read = tuple(
        read_rule(name, value, index, place, warnings)
        for name, value, place in _named(rules, f"{where}, [rules]")
    )
    return Sheet(title, measure, aim, activities, read, tuple(warnings))


def parse_toml(text: str, where: str) -> dict[str, Any]:
    """Parse TOML with its floats kept as text."""
    try:
        return tomllib.loads(text, parse_float=DecimalText)
    except tomllib.TOMLDecodeError as problem:
        if text.lstrip().startswith(STANDING):
            raise SheetError(
                "this is a standing plan, not a sheet; replan, worth, clash and tree read it", where
            ) from None
        raise _toml_error(text, str(problem), where) from None
    except RecursionError:
        raise SheetError("tables or arrays are nested too deeply", where) from None
    except ValueError:
        # What remains is the interpreter's own limit on the digits of an integer.
        match = _LONG_INTEGER.search(text)
        line = text.count("\n", 0, match.start()) + 1 if match else None
        place = where if line is None else f"{where}, line {line}"
        problem = f"an integer of thousands of digits; the limit is {MOST_DIGITS}"
        raise SheetError(problem, place) from None


def _toml_error(text: str, problem: str, where: str) -> SheetError:
    """Turn a TOML error into one that names the line and, where it is plain, the cure."""
    parts = _TOML_PLACE.fullmatch(problem)
    what = parts["what"] if parts else problem
    lines = text.split("\n")
    number = int(parts["line"]) if parts and parts["line"] else len(text.rstrip("\n").split("\n"))
    line = lines[number - 1] if number <= len(lines) else ""
    place = f"{where}, line {number}"
    cure = _cure(what, line)
    if cure is not None:
        return SheetError(cure, place)
    column = f"column {parts['column']}: " if parts and parts["column"] else ""
    return SheetError(f"{column}not TOML: {what[:1].lower()}{what[1:]}", place)


def _cure(what: str, line: str) -> str | None:
    """Return what to write instead, for the slips that a line of a sheet invites."""
    if what in ("Cannot overwrite a value", "Cannot mutate immutable namespace"):
        key = _KEY.match(line)
        name = key and (key["basic"] or key["literal"] or key["bare"])
        return f"the name {excerpt(name)} is declared twice" if name else None
    if what.startswith("Cannot declare"):
        return f"the table {excerpt(line.strip())} is declared twice"
    if what == "Illegal character '\\n'":
        return "a quote is not closed on this line"
    bracketed = _BRACKETED.match(line)
    if bracketed:
        return f'a name with brackets wants quotes: "{bracketed["name"]}" = ...'
    headed = _HEADED.match(line)
    if headed:
        return f'a name with brackets wants quotes: [{headed["table"]}."{headed["name"]}"]'
    foreign = _FOREIGN.match(line)
    if foreign and not foreign["name"].isascii():
        return f'a name with letters beyond a to z wants quotes: "{foreign["name"]}" = ...'
    bare = _BARE_ALGEBRA.match(line)
    if bare and re.search(r"[<>=*]|[^\W\d]\s*[-+]", bare["value"]):
        return f'algebra wants quotes: {bare["key"]} = "{bare["value"].strip()[:40]}"'
    return None


def _text(table: Mapping[str, Any], key: str, where: str) -> str:
    """Return the text under a key, empty where the key is absent."""
    value = table.get(key, "")
    if not isinstance(value, str) or isinstance(value, DecimalText):
        raise SheetError(f"{key} must be text in quotes, not {_kind(value)}", where)
    return value


def _table(table: Mapping[str, Any], key: str, where: str) -> dict[str, Any]:
    value = table.get(key, {})
    if not isinstance(value, dict):
        raise SheetError(f"[{key}] must be a table, not {_kind(value)}", where)
    return value


def _kind(value: object) -> str:
    """Return what a TOML value is, in words."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, (int, DecimalText)):
        return "a number"
    kinds: tuple[tuple[type, str], ...] = ((str, "text"), (dict, "a table"), (list, "an array"))
    return next((name for kind, name in kinds if isinstance(value, kind)), "a date or time")


def _named(table: Mapping[str, Any], where: str) -> Iterator[tuple[str, Any, str]]:
    """Yield name, value and place of each entry, with the names checked."""
    seen: set[str] = set()
    for key, value in table.items():
        name = normal(key)
        place = f"{where} {name if len(name) <= 60 else name[:57] + '...'}"
        problem = name_problem(name)
        if problem:
            raise SheetError(problem, place)
        if name in seen:
            raise SheetError(f"the name {excerpt(name)} is declared twice", place)
        seen.add(name)
        yield name, value, place


def _check_keys(table: Mapping[str, Any], known: tuple[str, ...], where: str) -> None:
    for key in table:
        if key not in known:
            raise SheetError(unknown("key", key, known), where)


class _Infinity(NamedTuple):
    """An infinity as TOML writes it."""

    negative: bool


def _number(value: object, key: str, where: str) -> Number | _Infinity:
    """Return a TOML number exactly; text such as ``"7/3"`` counts too."""
    try:
        if isinstance(value, DecimalText):
            word = value.lstrip("+-")
            if word == "nan":
                raise SheetError(f"{key} is nan, which is not a number", where)
            if word == "inf":
                return _Infinity(value.startswith("-"))
            return exact_number(value)
        if isinstance(value, int) and not isinstance(value, bool):
            return fit(value)
        if isinstance(value, str):
            return exact_number(value)
    except NumberError as problem:
        if isinstance(value, int):
            raise SheetError(f"{key}: {problem}", where) from None
        text = excerpt(value, 24)
        text = text.strip('"') if isinstance(value, DecimalText) else text
        raise SheetError(f"{key} = {text}: {problem}", where) from None
    raise SheetError(f"{key} must be a number, not {_kind(value)}", where)


def _finite(value: object, key: str, where: str) -> Number:
    number = _number(value, key, where)
    if isinstance(number, _Infinity):
        without = "a rule that does not bend" if key == "give" else "no limit"
        raise SheetError(f"{key} must be finite; leave it out for {without}", where)
    return number


def _bound(table: Mapping[str, Any], key: str, negative: bool, where: str) -> Number | None:
    """Return a bound that is there; infinite toward its own side means none."""
    number = _number(table[key], key, where)
    if isinstance(number, _Infinity):
        if number.negative != negative:
            raise SheetError(f"{key} cannot be {'inf' if negative else '-inf'}", where)
        return None
    return number


def _activity(name: str, value: object, where: str) -> Activity:
    """Read one entry of [activities]."""
    if not isinstance(value, dict):
        raise SheetError(
            f"an activity is a table such as {{ least = 0, most = 10 }}, not {_kind(value)}", where
        )
    _check_keys(value, ACTIVITY_KEYS, where)
    whole = value.get("whole", True)
    if not isinstance(whole, bool):
        raise SheetError(f"whole must be true or false, not {_kind(whole)}", where)
    activity = Activity(
        name,
        _bound(value, "least", True, where) if "least" in value else 0,
        _bound(value, "most", False, where) if "most" in value else None,
        whole,
        _text(value, "unit", where),
    )
    if "least" not in value and activity.most is not None and activity.most < 0:
        raise SheetError(
            f"most = {show(activity.most)} is below 0, the least unless `least` says otherwise",
            where,
        )
    check_bounds(activity, where)
    return activity


def _aim(
    table: Mapping[str, Any], index: Mapping[str, int], where: str, warnings: list[str]
) -> Aim:
    """Read [aim], which may be absent."""
    if "aim" not in table:
        return Aim()
    place = f"{where}, [aim]"
    aim = _table(table, "aim", where)
    _check_keys(aim, AIM_KEYS, place)
    if len(aim) != 1:
        raise SheetError(
            "an aim says either maximize or minimize" + (", not both" if aim else ""), place
        )
    senses: tuple[Sense, Sense] = ("maximize", "minimize")
    sense = senses["minimize" in aim]
    terms, constant = parse_aim(_algebra(aim, sense, place), index, f"{place} {sense}")
    if not terms:
        warnings.append("[aim]: no activity counts in the aim, so every plan is as good")
    return Aim(sense, terms, constant)


def _algebra(table: Mapping[str, Any], key: str, where: str) -> str:
    """Return the algebra under a key."""
    value = table[key]
    if not isinstance(value, str) or isinstance(value, DecimalText):
        raise SheetError(f"{key} must be algebra in quotes, not {_kind(value)}", where)
    return value


def read_rule(
    name: str, value: object, index: Mapping[str, int], where: str, warnings: list[str]
) -> Rule:
    """Read one entry of [rules]."""
    table = {"rule": value} if isinstance(value, str) else value
    if not isinstance(table, dict) or isinstance(value, DecimalText):
        raise SheetError(f"a rule is algebra in quotes or a table, not {_kind(value)}", where)
    _check_keys(table, RULE_KEYS, where)
    if "rule" not in table:
        raise SheetError('the key rule is missing: { rule = "...", ... }', where)
    give = _finite(table["give"], "give", where) if "give" in table else None
    most = _finite(table["give_most"], "give_most", where) if "give_most" in table else None
    text = _algebra(table, "rule", where)
    rule = rule_of_text(name, text, index, _text(table, "note", where), give, most, where)
    if not rule.terms:
        warnings.append(f"[rules] {name}: holds for every plan, whatever the activities")
    return rule


def rule_of_text(
    name: str,
    text: str,
    index: Mapping[str, int],
    note: str,
    give: Number | None,
    give_most: Number | None,
    where: str | None,
) -> Rule:
    """Do the work of `Sheet.rule_from_text`."""
    name = normal(name)
    where = f"rule {name[:60]}" if where is None else where
    problem = name_problem(name)
    if problem:
        raise SheetError(problem, where)
    check_give(give, give_most, where)
    parsed = parse_rule(text, index, where)
    if parsed.holds is False:
        raise SheetError(
            f"this rule is false whatever the activities: {excerpt(text.strip())}", where
        )
    return Rule(name, parsed.terms, parsed.least, parsed.most, note, give, give_most, text)


def check_give(give: Number | None, give_most: Number | None, where: str) -> None:
    """Make sure that a rule bends at a price above zero and by no less than nothing.

    Raises
    ------
    SheetError
        It does not.
    """
    for key, value in (("give", give), ("give_most", give_most)):
        if not (value is None or isinstance(value, (int, Fraction))):
            raise SheetError(f"{key} must be an exact number", where)
    if give is None and give_most is not None:
        raise SheetError("give_most needs a price: give = ...", where)
    if give is not None and give <= 0:
        raise SheetError(f"give = {show(give)}, but a price must be above 0", where)
    if give_most is not None and give_most < 0:
        raise SheetError(f"give_most = {show(give_most)}, but it cannot be below 0", where)
