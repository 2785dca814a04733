"""Sheets as plain records for JSON, and back, with nothing taken on trust.

Exact numbers are texts, ``"3"`` or ``"-7/2"``; an absent limit or price is null; terms are pairs
of activity index and coefficient.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from intplan.errors import SheetError, unknown
from intplan.sheet.algebra import Terms
from intplan.sheet.model import Activity, Aim, Rule, Sheet, check_bounds, check_size
from intplan.sheet.names import name_problem, normal
from intplan.sheet.numbers import (
    Number,
    NumberError,
    check_spread,
    fraction_number,
    fraction_text,
    show,
)
from intplan.sheet.reading import check_give

SHEET_KEYS = ("title", "measure", "aim", "activities", "rules", "warnings")
AIM_KEYS = ("sense", "terms", "constant")
ACTIVITY_KEYS = ("name", "least", "most", "whole", "unit")
RULE_KEYS = ("name", "terms", "least", "most", "note", "give", "give_most", "text")


def record_of(sheet: Sheet) -> dict[str, Any]:
    """Do the work of `Sheet.to_record`."""
    return {
        "title": sheet.title,
        "measure": sheet.measure,
        "aim": {
            "sense": sheet.aim.sense,
            "terms": _terms_record(sheet.aim.terms),
            "constant": fraction_text(sheet.aim.constant),
        },
        "activities": [
            {
                "name": activity.name,
                "least": _optional(activity.least),
                "most": _optional(activity.most),
                "whole": activity.whole,
                "unit": activity.unit,
            }
            for activity in sheet.activities
        ],
        "rules": [
            {
                "name": rule.name,
                "terms": _terms_record(rule.terms),
                "least": _optional(rule.least),
                "most": _optional(rule.most),
                "note": rule.note,
                "give": _optional(rule.give),
                "give_most": _optional(rule.give_most),
                "text": rule.text,
            }
            for rule in sheet.rules
        ],
        "warnings": list(sheet.warnings),
    }


def _terms_record(terms: Terms) -> list[list[Any]]:
    return [[j, fraction_text(c)] for j, c in terms]


def _optional(value: Number | None) -> str | None:
    return None if value is None else fraction_text(value)


def sheet_from_record(record: object, where: str) -> Sheet:
    """Do the work of `Sheet.from_record`."""
    table = _table(record, SHEET_KEYS, where)
    listed = _list(table["activities"], f"{where}, activities")
    ruled = _list(table["rules"], f"{where}, rules")
    if not listed:
        raise SheetError("an empty sheet: it has no activities", where)
    check_size(len(ruled), len(listed), where)
    activities = tuple(
        _activity(entry, f"{where}, activities[{j}]") for j, entry in enumerate(listed)
    )
    rules = tuple(
        _rule(entry, len(activities), f"{where}, rules[{i}]") for i, entry in enumerate(ruled)
    )
    warnings = _list(table["warnings"], f"{where}, warnings")
    try:
        return Sheet(
            title=_text(table["title"], f"{where}, title"),
            measure=_text(table["measure"], f"{where}, measure"),
            aim=_aim(table["aim"], len(activities), f"{where}, aim"),
            activities=activities,
            rules=rules,
            warnings=tuple(_text(warning, f"{where}, warnings") for warning in warnings),
        )
    except SheetError as problem:
        raise SheetError(problem.message, problem.where or where) from None


def _table(value: object, keys: tuple[str, ...], where: str) -> Mapping[str, Any]:
    """Return a table that holds exactly the given keys."""
    if not isinstance(value, dict):
        raise SheetError("expected a table", where)
    for key in value:
        if key not in keys:
            raise SheetError(unknown("key", str(key), keys), where)
    for key in keys:
        if key not in value:
            raise SheetError(f"the key {key} is missing", where)
    return value


def _list(value: object, where: str) -> list[Any]:
    if not isinstance(value, list):
        raise SheetError("expected a list", where)
    return value


def _text(value: object, where: str) -> str:
    if not isinstance(value, str):
        raise SheetError("expected text", where)
    return value


def _name(value: object, where: str) -> str:
    name = _text(value, f"{where}, name")
    problem = name_problem(name)
    if problem is None and normal(name) != name:
        problem = "the name is not in normal form C"
    if problem:
        raise SheetError(problem, where)
    return name


def _number(value: object, where: str) -> Number:
    try:
        return fraction_number(_text(value, where))
    except NumberError as problem:
        raise SheetError(str(problem), where) from None


def _limit(table: Mapping[str, Any], key: str, where: str) -> Number | None:
    return None if table[key] is None else _number(table[key], f"{where}, {key}")


def _terms(value: object, activities: int, where: str) -> Terms:
    """Return terms whose indices rise and whose coefficients are not zero."""
    terms = []
    last = -1
    for entry in _list(value, where):
        if not isinstance(entry, list) or len(entry) != 2 or type(entry[0]) is not int:
            raise SheetError("a term is a pair of activity index and coefficient", where)
        j, c = entry[0], _number(entry[1], where)
        if not last < j < activities or c == 0:
            raise SheetError(f"the term of activity {j} is out of order, range or zero", where)
        terms.append((j, c))
        last = j
    return tuple(terms)


def _activity(entry: object, where: str) -> Activity:
    table = _table(entry, ACTIVITY_KEYS, where)
    if not isinstance(table["whole"], bool):
        raise SheetError("whole must be true or false", where)
    activity = Activity(
        name=_name(table["name"], where),
        least=_limit(table, "least", where),
        most=_limit(table, "most", where),
        whole=table["whole"],
        unit=_text(table["unit"], f"{where}, unit"),
    )
    check_bounds(activity, where)
    return activity


def _rule(entry: object, activities: int, where: str) -> Rule:
    table = _table(entry, RULE_KEYS, where)
    rule = Rule(
        name=_name(table["name"], where),
        terms=_terms(table["terms"], activities, f"{where}, terms"),
        least=_limit(table, "least", where),
        most=_limit(table, "most", where),
        note=_text(table["note"], f"{where}, note"),
        give=_limit(table, "give", where),
        give_most=_limit(table, "give_most", where),
        text=_text(table["text"], f"{where}, text"),
    )
    least, most = rule.least, rule.most
    if least is not None and most is not None and least > most:
        raise SheetError(f"least = {show(least)} is above most = {show(most)}", where)
    check_give(rule.give, rule.give_most, where)
    _check_spread(rule.terms, [v for v in (least, most) if v is not None], where)
    return rule


def _aim(entry: object, activities: int, where: str) -> Aim:
    table = _table(entry, AIM_KEYS, where)
    sense = table["sense"]
    if sense not in (None, "maximize", "minimize"):
        raise SheetError("sense must be maximize, minimize or null", where)
    aim = Aim(
        sense,
        _terms(table["terms"], activities, f"{where}, terms"),
        _number(table["constant"], f"{where}, constant"),
    )
    if sense is None and (aim.terms or aim.constant):
        raise SheetError("an aim without a sense has no terms and no constant", where)
    _check_spread(aim.terms, [], where)
    return aim


def _check_spread(terms: Terms, limits: list[Number], where: str) -> None:
    try:
        check_spread((c for _, c in terms), limits)
    except NumberError as problem:
        raise SheetError(str(problem), where) from None
