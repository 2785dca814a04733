"""Small tables of plans and rules, lined up in columns."""

from __future__ import annotations

from collections.abc import Sequence

from intplan.errors import printable
from intplan.report.numbers import readable, value_text
from intplan.report.phrases import count
from intplan.sheet import Rule, Sheet
from intplan.sheet.checking import CheckResult, RuleCheck
from intplan.sheet.numbers import Number

RULES_WITH_ROOM = 20  # more of them than this are counted, not listed
EXACT_RULES = 5  # the same for rules that are met exactly, as they must be


def table(rows: Sequence[Sequence[str]], right: frozenset[int] | set[int] = frozenset()) -> str:
    """Line up columns, two blanks apart and two from the margin.

    Parameters
    ----------
    rows : cells, as many in every row
    right : numbers of the columns that are set to the right
    """
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [
            cell.rjust(width) if i in right else cell.ljust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
            if width
        ]
        lines.append("  " + "  ".join(cells).rstrip())
    return "\n".join(lines)


def plan_table(sheet: Sheet, amounts: Sequence[Number]) -> str:
    """Return a line for every activity that is not 0, and a count of the others."""
    rows = []
    for activity, value in zip(sheet.activities, amounts, strict=True):
        if value:
            digits, bracket, rounding = readable(value).partition(" (")
            unit = f"{printable(activity.unit)}{bracket}{rounding}".strip()
            rows.append([activity.name, digits, unit])
    idle = len(amounts) - len(rows)
    lines = [table(rows, right={1})] if rows else []
    if idle:
        others = "other activity" if rows else "activity"
        names = [a.name for a, value in zip(sheet.activities, amounts, strict=True) if not value]
        listed = f": {', '.join(names)}" if idle <= 5 else ""
        lines.append(f"  ({count(idle, others)} at 0{listed})")
    return "\n".join(lines)


def rule_tables(sheet: Sheet, check: CheckResult) -> list[str]:
    """Return the rules at their limit, bent or broken, and those with room, as two tables.

    What a rule says exactly, it is always at: such rules are counted where they are many.
    """
    tight: list[list[str]] = []
    exact: list[list[str]] = []
    roomy: list[list[str]] = []
    for rule, state in zip(sheet.rules, check.rules, strict=True):
        if state.spare is None:
            continue
        row = [rule.name, readable(state.value), limits_phrase(rule)]
        if state.spare > 0:
            roomy.append([*row, f"{readable(state.spare)} to spare", printable(rule.note)])
        else:
            met = state.spare == 0 and rule.least == rule.most
            row += [_passing(sheet, rule, state), printable(rule.note)]
            (exact if met else tight).append(row)
    if len(exact) <= EXACT_RULES:
        tight, exact = tight + exact, []
    blocks = []
    if tight or exact:
        heading = "Rules at their limit" if check.good else "Rules at or past their limit"
        lines = [heading, *([table(tight, right={1})] if tight else [])]
        if exact:
            lines.append(f"  ({count(len(exact), 'rule')} of an exact amount, all met)")
        blocks.append("\n".join(lines))
    if len(roomy) > RULES_WITH_ROOM:
        blocks.append(f"{len(roomy)} rules have room to spare.")
    elif roomy:
        blocks.append("Rules with room\n" + table(roomy, right={1}))
    return blocks


def limits_phrase(rule: Rule) -> str:
    """Write the limits of a rule: ``at most 16``, ``from 6 to 9``."""
    if rule.least is None:
        return "" if rule.most is None else f"at most {readable(rule.most)}"
    if rule.most is None:
        return f"at least {readable(rule.least)}"
    if rule.least == rule.most:
        return f"exactly {readable(rule.least)}"
    return f"from {readable(rule.least)} to {readable(rule.most)}"


def _passing(sheet: Sheet, rule: Rule, state: RuleCheck) -> str:
    """Say how far a rule bends and what that costs, and how far it is broken beyond that."""
    parts = []
    if state.bend and rule.give is not None:
        price = value_text(sheet, state.bend * rule.give)
        parts.append(f"bent by {readable(state.bend)}, which costs {price}")
    if state.spare is not None and -state.spare > state.bend:
        parts.append(f"broken by {readable(-state.spare - state.bend)}")
    return ", ".join(parts)
