"""Holding a plan against a sheet in exact arithmetic."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Literal

from intplan.errors import SheetError
from intplan.sheet.model import Rule, Sheet
from intplan.sheet.numbers import Number, NumberError, exact, lowest

Side = Literal["least", "most"]


@dataclass(frozen=True, slots=True)
class RuleCheck:
    """One rule at a plan.

    Attributes
    ----------
    name, least, most : of the rule
    value : the sum of its terms
    spare : distance to the nearer limit, below zero by as much as a limit is passed; None for a
        rule without limits
    bend : how far a soft rule bends, at its price; 0 where it need not or cannot
    side : the limit that is passed, None where none is
    """

    name: str
    value: Number
    least: Number | None
    most: Number | None
    spare: Number | None
    bend: Number
    side: Side | None


@dataclass(frozen=True, slots=True)
class Broken:
    """Something that a plan does not meet.

    Attributes
    ----------
    name : the rule, the bound (``loaf most``) or the activity that is not whole
    what : ``least``, ``most`` or ``whole``
    by : how far beyond the limit, after all bending that is allowed; for ``whole`` the distance
        to the nearest whole number
    """

    name: str
    what: Literal["least", "most", "whole"]
    by: Number


@dataclass(frozen=True, slots=True)
class CheckResult:
    """What `Sheet.check` found.

    Attributes
    ----------
    value : the aim, with the prices of the bends; without an aim, those prices alone
    rules : one `RuleCheck` a rule, in the order of the sheet
    broken : one `Broken` for everything that the plan does not meet; empty for a good plan
    """

    value: Number
    rules: tuple[RuleCheck, ...]
    broken: tuple[Broken, ...]

    @property
    def good(self) -> bool:
        """Whether the plan meets everything, bends included."""
        return not self.broken


def check_plan(sheet: Sheet, amounts: Sequence[object]) -> CheckResult:
    """Do the work of `Sheet.check`."""
    if isinstance(amounts, Mapping):
        raise SheetError(
            "expected one amount an activity, in order; of a standing plan, "
            "list(standing.exact_plan.values())",
            "plan",
        )
    if len(amounts) != len(sheet.activities):
        raise SheetError(
            f"{len(amounts):,} amounts for {len(sheet.activities):,} activities", "plan"
        )
    plan = [_amount(a, sheet.activities[j].name) for j, a in enumerate(amounts)]
    broken = _broken_bounds(sheet, plan)
    rules = []
    price: Number = 0
    for rule in sheet.rules:
        found = check_rule(rule, sheet.rule_value(rule, plan))
        rules.append(found)
        if found.side is not None and found.spare is not None:
            excess = lowest(-found.spare - found.bend)
            if excess > 0:
                broken.append(Broken(rule.name, found.side, excess))
        if rule.give is not None:
            price += rule.give * found.bend
    value = sheet.aim_value(plan)
    value = value - price if sheet.aim.sense == "maximize" else value + price
    return CheckResult(lowest(value), tuple(rules), tuple(broken))


def _amount(value: object, name: str) -> Number:
    """Return an amount as it is, or a float or NumPy number by its shortest decimal."""
    if type(value) is int or isinstance(value, Fraction):
        return value
    try:
        return exact(value)
    except NumberError as problem:
        raise SheetError(str(problem), name) from None


def check_rule(rule: Rule, value: Number) -> RuleCheck:
    """Hold the value of a rule's left side against its limits."""
    below = None if rule.least is None else lowest(value - rule.least)
    above = None if rule.most is None else lowest(rule.most - value)
    side: Side | None = None
    if below is not None and below < 0:
        side = "least"
    elif above is not None and above < 0:
        side = "most"
    spare = min((s for s in (below, above) if s is not None), default=None)
    bend: Number = 0
    if side is not None and spare is not None and rule.give is not None:
        bend = -spare if rule.give_most is None else min(-spare, rule.give_most)
    return RuleCheck(rule.name, value, rule.least, rule.most, spare, bend, side)


def _broken_bounds(sheet: Sheet, amounts: Sequence[Number]) -> list[Broken]:
    """Return the bounds and whole units that the amounts do not meet."""
    broken = []
    for activity, amount in zip(sheet.activities, amounts, strict=True):
        if activity.least is not None and amount < activity.least:
            by = lowest(activity.least - amount)
            broken.append(Broken(f"{activity.name} least", "least", by))
        if activity.most is not None and amount > activity.most:
            by = lowest(amount - activity.most)
            broken.append(Broken(f"{activity.name} most", "most", by))
        if activity.whole and amount.denominator != 1:
            by = abs(Fraction(amount) - round(amount))
            broken.append(Broken(activity.name, "whole", by))
    return broken
